"""The numbers on a terminal of 80 columns."""

from __future__ import annotations

import io
import textwrap
from collections.abc import Mapping, Sequence
from typing import TextIO

from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from skytally.results import MapInfo, Results
from skytally.tally import TallyRow
from skytally.wording import (
    MISSING,
    NBSP,
    area_text,
    count,
    headline,
    hours_text,
    limit_rows,
    limit_terms,
    number_text,
    percent,
    reach_text,
    row_probability,
    source_probability,
    source_words,
    to_ascii,
    version_text,
)

__all__ = ["WIDTH", "Page", "render_answer", "render_left_over", "render_tally"]

WIDTH = 80
_NAME_WIDTH = 16


def render_answer(results: Results, stream: TextIO) -> str:
    """Return the headline alone as text for a stream."""
    page = Page(stream)
    page.write_line(headline(results), style="bold")
    return page.text()


def render_tally(results: Results, stream: TextIO) -> str:
    """Return the headline and the tables as text for a stream.

    Bold and dim only where the stream is a terminal, 7-bit characters where
    it cannot show others.
    """
    page = Page(stream)
    page.write_line(headline(results), style="bold")
    if results.row().exposures:
        page.write_line()
        page.write_line(f"On {version_text(results.newest.version)}:")
        page.write_table(*_selections(results))
        terms = limit_terms(results.settings, limit_rows(results))
        page.write_line(f"Depth is the median limit in one band: {terms}.", style="dim")
        _write_sources(page, results)
    if len(results.maps) > 1:
        page.write_line()
        page.write_line("All exposures on every map version, newest first:")
        page.write_table(*_versions(results))
    page.write_line()
    for log in results.logs:
        reasons = ", ".join(f"{number_text(number)} {reason}" for reason, number in log.reasons)
        why = f" ({reasons})" if reasons else ""
        page.write_line(
            f"{log.telescope}: {count('row', log.read)} read = {number_text(log.used)} used + "
            f"{number_text(log.set_aside)} set aside{why}"
        )
    return page.text()


Section = list[tuple[str, ...]]


def render_left_over(
    version: str,
    remaining: Mapping[str | None, float],
    files: Mapping[str | None, str],
    stream: TextIO,
) -> str:
    """Return a line for each file of what is left: the chance that it is still there, unseen.

    ``remaining`` and ``files`` are keyed by source, None for covered sky.
    """
    page = Page(stream)
    page.write_line(
        f"The chance, on {version_text(version)}, that it is still out there unseen:", style="bold"
    )
    for source, share in remaining.items():
        what = "wherever no footprint lies" if source is None else f"as {source}"
        page.write_line(f"{percent(share):>7}  {what} ({files[source]})")
    return page.text()


class Page:
    """Lines and tables held back, drawn for the stream that they are meant for."""

    def __init__(self, stream: TextIO) -> None:
        self._plain = not (stream.encoding or "").lower().startswith("utf")
        self._console = Console(
            file=io.StringIO(),
            width=WIDTH,
            force_terminal=stream.isatty(),
            markup=False,
            emoji=False,
            highlight=False,
        )

    def write_line(
        self, text: str = "", style: str = "", *, indent: str = "", hanging: str = ""
    ) -> None:
        """Write a paragraph, its later lines behind ``hanging``.

        Rich itself would part a number from its unit.
        """
        plain = self._shown(text).plain
        lines = textwrap.wrap(
            plain,
            WIDTH,
            initial_indent=indent,
            subsequent_indent=hanging,
            break_on_hyphens=False,
        )
        for line in lines or [""]:
            self._console.print(Text(line), style=style, soft_wrap=True)

    def write_table(self, head: tuple[str, ...], sections: Sequence[Section]) -> None:
        """Write a table: names to the left and cut when long, numbers to the right."""
        lines = box.ASCII2 if self._plain else box.SIMPLE_HEAD
        table = Table(box=lines, padding=(0, 1, 0, 0), pad_edge=False, show_edge=False)
        for index, name in enumerate(head):
            if index == 0:
                table.add_column(
                    self._shown(name), overflow="crop", no_wrap=True, max_width=_NAME_WIDTH
                )
            else:
                table.add_column(self._shown(name), justify="right", no_wrap=True)
        for section in sections:
            for row in section:
                table.add_row(*map(self._shown, row))
            table.add_section()
        self._console.print(table)

    def text(self) -> str:
        """Return what was written, without trailing blanks."""
        assert isinstance(self._console.file, io.StringIO)
        lines = self._console.file.getvalue().splitlines()
        return "".join(f"{line.rstrip()}\n" for line in lines)

    def _shown(self, text: str) -> Text:
        # Control characters from a log must not steer a terminal.
        text = "".join(c for c in text if c.isprintable() or c == NBSP)
        return Text(to_ascii(text) if self._plain else text)


def _write_sources(page: Page, results: Results) -> None:
    """Write what could have been seen of each source, where the map carries distances."""
    rows = [
        row
        for row in results.source_rows
        if row.map == results.newest.version
        and (row.telescope, row.band, row.night) == (None, None, None)
    ]
    if not rows:
        return
    page.write_line()
    page.write_line("What would have been seen, of all its probability:")
    page.write_table(
        ("source", "reach/Mpc", "detectable", "beyond reach", "no distance"),
        [
            [
                (
                    row.source,
                    reach_text(row.reach_median_mpc),
                    source_probability(row),
                    percent(row.probability_beyond),
                    percent(row.probability_without_distance),
                )
                for row in rows
            ]
        ],
    )
    for source in results.sources:
        page.write_line(f"{source.name}: {'; '.join(filter(None, source_words(source)))}.", "dim")
    without = percent(results.newest.probability_without_distance or 0.0, 2)
    page.write_line(
        "Reach is the median luminosity distance; beyond reach counts what was covered but "
        f"missed. The map holds {without} without a distance.",
        style="dim",
    )


def _selections(results: Results) -> tuple[tuple[str, ...], list[Section]]:
    """All; telescopes with their bands; bands; nights."""
    rows = [row for row in results.rows if row.map == results.newest.version]
    kinds = (
        [row for row in rows if row.selection == (None, None, None)],
        _by_telescope(results, rows),
        [row for row in rows if row.band and not row.telescope and not row.night],
        [row for row in rows if row.night and not row.telescope and not row.band],
    )
    head = ("", "exp.", "deg²", "probability", "unique", "depth")
    return head, [[_cells(results, row) for row in kind] for kind in kinds if kind]


def _by_telescope(results: Results, rows: Sequence[TallyRow]) -> list[TallyRow]:
    """Return each telescope's row, followed by its bands where it used several."""
    found = []
    for telescope in results.telescopes:
        mine = [r for r in rows if r.telescope == telescope.name and r.night is None]
        found += [row for row in mine if row.band is None or len(telescope.bands) > 1]
    return found


def _cells(results: Results, row: TallyRow) -> tuple[str, ...]:
    alone = row.selection == (None, None, None)
    within = f"  {row.band}" if row.telescope and row.band else None
    return (
        within or row.telescope or row.band or row.night or "all",
        number_text(row.exposures),
        area_text(row.area_deg2, row.area_low_deg2, row.area_high_deg2).partition(NBSP)[0],
        row_probability(row, results.settings),
        "" if alone else percent(row.probability_unique),
        MISSING if row.depth_median is None else number_text(row.depth_median, 2),
    )


def _versions(results: Results) -> tuple[tuple[str, ...], list[Section]]:
    head = ("version", "after", "90 % region", "of its area", "probability")
    return head, [[_version_cells(results, info) for info in reversed(results.maps)]]


def _version_cells(results: Results, info: MapInfo) -> tuple[str, ...]:
    row = results.row(info.version)
    return (
        info.version,
        hours_text(info.hours),
        area_text(info.area_90_deg2, info.area_90_deg2, info.area_90_deg2),
        percent(row.area_in_90_deg2 / info.area_90_deg2),
        row_probability(row, results.settings),
    )
