"""The report as one HTML page and as a PDF, from the results alone."""

from __future__ import annotations

import re
from collections.abc import Mapping

from markupsafe import Markup

from skytally.audit_tables import audit_tables
from skytally.depth_tables import depth_tables
from skytally.figure_style import WIDTH_IN, Drawing, Sketch, swatch_uri
from skytally.figures import draw_figures
from skytally.house_style import HouseStyle, own_template
from skytally.limit_tables import limit_tables
from skytally.page_data import page_data
from skytally.paper import figure_place, make_pdf
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

__all__ = ["render_html", "render_paper", "render_pdf"]


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
    figures = draw_figures(results) if figures is None else figures
    elements = {name: drawing.svg for name, drawing in figures.items()}
    data = page_data(results, figures)
    return _render(results, figures, elements, style, data=data, paper=False)


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
    figures = draw_figures(results) if figures is None else figures
    page = render_paper(results, figures, style)
    return make_pdf(page, lambda name: figures[name].svg)


def render_paper(
    results: Results,
    figures: Mapping[str, Drawing] | Mapping[str, Sketch],
    style: HouseStyle | None = None,
) -> str:
    """Return the page that `skytally.paper.make_pdf` lays out, with a place for each figure."""
    places = {
        name: figure_place(name, figure.alt, WIDTH_IN, figure.height_in)
        for name, figure in figures.items()
    }
    return _render(results, figures, places, style, data=None, paper=True)


# As wide between the margins as A4, for which all else is made.
_LETTER = "@page { size: letter; margin: 24mm 22.95mm; }\n"


def _paper_style(results: Results) -> str:
    """Return the style of the sheets."""
    return own_template("print.css") + (_LETTER if results.report.paper == "Letter" else "")


def _screen_style(results: Results) -> str:
    """Return the style of the page: as on paper when it is printed, without fonts of its own."""
    paper = re.sub(r"@font-face \{.*?\}\n", "", _paper_style(results))
    return f"@media screen {{\n{own_template('screen.css')}}}\n@media print {{\n{paper}}}\n"


def _render(
    results: Results,
    figures: Mapping[str, Drawing] | Mapping[str, Sketch],
    elements: Mapping[str, str],
    style: HouseStyle | None,
    *,
    data: Markup | None,
    paper: bool,
) -> str:
    """Fill in the template, with an element of HTML for each figure."""
    context = dict(
        results=results,
        paper=paper,
        style=Markup(f"\n{_paper_style(results) if paper else _screen_style(results)}"),
        script=Markup(f"\n{own_template('report.js')}"),
        data=data,
        headline=headline(results),
        key_figures=key_figures(results),
        figures={name: (figures[name], Markup(element)) for name, element in elements.items()},
        tables=tables(results)
        | sharing_tables(results)
        | limit_tables(results)
        | depth_tables(results)
        | audit_tables(results),
        terms=limit_terms(results.settings, limit_rows(results)),
        sources=[(source.name, *source_words(source)) for source in results.sources],
        no_distance=NO_DISTANCE,
        newest=version_text(results.newest.version),
    )
    if paper:
        context["swatch"] = _paper_swatch
    return (style or HouseStyle()).render(context)


def _paper_swatch(index: int) -> Markup:
    """Return a telescope's key as a background, which nobody needs to have read out."""
    return Markup('<span class="swatch" style="background-image: url({})"></span>').format(
        swatch_uri(index)
    )
