"""The report as one HTML page and as a PDF, from the results alone."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import matplotlib
from markupsafe import Markup

from skytally.audit_tables import audit_tables
from skytally.errors import OutputError
from skytally.figure_style import Drawing
from skytally.figures import draw_figures
from skytally.house_style import HouseStyle, own_template
from skytally.limit_tables import limit_tables
from skytally.page_data import page_data
from skytally.report_tables import key_figures, tables
from skytally.results import Results
from skytally.sharing_tables import sharing_tables
from skytally.wording import (
    NO_DISTANCE,
    headline,
    limit_rows,
    limit_terms,
    source_words,
    version_text,
)

__all__ = ["render_html", "render_pdf"]

_FONT_SCHEME = "skytally-font:"
_FONTS = frozenset(
    f"{name}.ttf"
    for name in (
        *("DejaVuSans", "DejaVuSans-Bold", "DejaVuSans-Oblique", "DejaVuSansMono"),
        *("STIXGeneral", "STIXGeneralBol", "STIXGeneralItalic", "STIXGeneralBolIta"),
    )
)


def render_html(
    results: Results,
    figures: Mapping[str, Drawing] | None = None,
    style: HouseStyle | None = None,
) -> str:
    """Return the report as one HTML page that needs nothing else, not even a network.

    Parameters
    ----------
    results : Results
        With at least one map version.
    figures : mapping, optional
        What `draw_figures` returned, if both forms are made and it need not be
        done twice.
    style : HouseStyle, optional
        Templates that override ours.

    Raises
    ------
    InputError
        If one of these templates fails.
    """
    return _render(results, figures, style, "screen.css", paper=False)


def render_pdf(
    results: Results,
    figures: Mapping[str, Drawing] | None = None,
    style: HouseStyle | None = None,
) -> bytes:
    """Return the report as a PDF document with its own fonts; parameters as in `render_html`.

    The bytes depend on the results alone if ``SOURCE_DATE_EPOCH`` is set.

    Raises
    ------
    InputError
        If a template of ``style`` fails.
    OutputError
        If the text layout library that WeasyPrint needs is not installed.
    """
    page = _render(results, figures, style, "print.css", paper=True)
    # Imported here: without Pango the import itself fails, and then everything
    # but the PDF must still work.
    try:
        from weasyprint import HTML
        from weasyprint.text.fonts import FontConfiguration
    except OSError as error:
        raise OutputError(
            f"the PDF cannot be made because the Pango text library is missing ({error})",
            remedy="On Debian or Ubuntu install it with: apt-get install "
            "libpango-1.0-0 libpangoft2-1.0-0 libharfbuzz-subset0",
        ) from error
    document = HTML(string=page, url_fetcher=_fetcher(), base_url=None)
    return bytes(
        document.write_pdf(
            font_config=FontConfiguration(),
            pdf_tags=True,
            pdf_identifier=hashlib.sha256(page.encode("utf-8", "replace")).digest()[:16],
        )
    )


def _fetcher() -> Any:
    """Return a fetcher that hands out our fonts and data URIs, and refuses everything else."""
    from weasyprint.urls import URLFetcher, URLFetcherResponse

    folder = Path(matplotlib.get_data_path()) / "fonts" / "ttf"

    class OwnFilesOnly(URLFetcher):  # type: ignore[misc]
        def fetch(self, url: str, headers: dict[str, str] | None = None) -> Any:
            if url.startswith(_FONT_SCHEME):
                name = url.removeprefix(_FONT_SCHEME)
                if name not in _FONTS:
                    raise ValueError(f"there is no font {name!r}")
                body = (folder / name).read_bytes()
                return URLFetcherResponse(url, body, {"Content-Type": "font/ttf"})
            return super().fetch(url, headers)

    return OwnFilesOnly(allowed_protocols=("data",))


def _screen_style() -> str:
    """Return the style of the page: as on paper when it is printed, without fonts of its own."""
    paper = re.sub(r"@font-face \{.*?\}\n", "", own_template("print.css"))
    return f"@media screen {{\n{own_template('screen.css')}}}\n@media print {{\n{paper}}}\n"


def _render(
    results: Results,
    figures: Mapping[str, Drawing] | None,
    style: HouseStyle | None,
    sheet: str,
    *,
    paper: bool,
) -> str:
    figures = draw_figures(results) if figures is None else figures
    data = None if paper else page_data(results, figures)
    context = dict(
        results=results,
        paper=paper,
        style=Markup(f"\n{own_template(sheet) if paper else _screen_style()}"),
        script=Markup(f"\n{own_template('report.js')}"),
        data=data,
        headline=headline(results),
        key_figures=key_figures(results),
        figures={name: (d, Markup(d.svg)) for name, d in figures.items()},
        tables=tables(results)
        | sharing_tables(results)
        | limit_tables(results)
        | audit_tables(results),
        terms=limit_terms(results.settings, limit_rows(results)),
        sources=[(source.name, *source_words(source)) for source in results.sources],
        no_distance=NO_DISTANCE,
        newest=version_text(results.newest.version),
    )
    return (style or HouseStyle()).render(context)
