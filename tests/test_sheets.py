"""The sheets of the PDF, read by poppler and pypdf: what stands on which, and where.

Drawings are replaced by their names, which lays out the same sheets in less time.
"""

from __future__ import annotations

import io
import os
import re
import subprocess
import sys
from collections import Counter
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from xml.etree import ElementTree

import pypdf
import pytest
from sample_results import sample_results
from skytally.figures import sketch_figures
from skytally.paper import make_pdf
from skytally.report import render_paper
from skytally.results import ReportText, Results
from space_results import FINDING, with_space

POINTS_PER_MM = 72 / 25.4
# print.css: the margins of A4.
SIDE, TOP, BOTTOM = (POINTS_PER_MM * mm for mm in (20, 24, 24))
LONG = "HeronAndPloverAndAvocetAndDunlinAndCurlewAndSnipeTogether"
SEVERITIES = ("error", "caution", "note")


@dataclass(frozen=True)
class Word:
    """A word on a sheet (from 1), and its box in points from the upper left corner."""

    sheet: int
    left: float
    top: float
    right: float
    bottom: float
    text: str


@dataclass(frozen=True, eq=False)
class Sheets:
    """A document as its readers see it."""

    data: bytes
    words: list[Word]
    reader: pypdf.PdfReader

    @property
    def texts(self) -> list[str]:
        """The words of each sheet, line by line."""
        ordered = sorted(self.words, key=lambda word: (round(word.bottom / 2), word.left))
        return [
            " ".join(word.text for word in ordered if word.sheet == number)
            for number in range(1, len(self.reader.pages) + 1)
        ]

    def sheets_of(self, text: str) -> list[int]:
        return [number for number, words in enumerate(self.texts, 1) if text in words]


def findings() -> Results:
    many = [
        replace(
            FINDING,
            severity=SEVERITIES[number // 70],
            subject=("Heron", "Plover")[number % 2],
            rows=tuple(range(2, 2 + number % 20)),
        )
        for number in range(200)
    ]
    return replace(sample_results(exposures=12, set_aside=200), findings=tuple(many))


KINDS = {
    "deep": lambda: with_space(sample_results(exposures=20)),
    "one exposure": lambda: sample_results(names=("Heron",), exposures=1, set_aside=0),
    "nothing covered": lambda: sample_results(covered=False, exposures=20),
    "forty telescopes": lambda: sample_results(
        names=tuple(f"Heron {n}" for n in range(40)), exposures=40
    ),
    "thirty bands": lambda: sample_results(
        names=("Heron", "Plover"), bands=tuple(f"b{n:02d}" for n in range(30)), exposures=60
    ),
    "long names": lambda: with_space(
        sample_results(
            names=tuple(f"{LONG}{n}" for n in range(6)),
            bands=("JohnsonKronCousinsVisual", "JohnsonKronCousinsRed"),
            exposures=12,
            event="Lantern-7-with-a-name-that-does-not-end-" * 3,
        )
    ),
    "many findings": findings,
}


def plain(text: str) -> str:
    return " ".join(text.split())


def sheets(results: Results) -> Sheets:
    """Lay out a report with the name of each figure in its place."""

    def drawing(name: str) -> str:
        return (
            '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 400 100">'
            f'<text x="20" y="50" font-size="9">drawing:{name}</text></svg>'
        )

    data = make_pdf(render_paper(results, sketch_figures(results)), drawing)
    found = subprocess.run(
        ["pdftotext", "-bbox", "-", "-"], input=data, capture_output=True, check=True
    ).stdout.decode()
    # Bells and their like, which a name may hold, are no XML.
    tree = ElementTree.fromstring(re.sub(r"[\x00-\x08\x0b\x0c\x0e-\x1f]", "", found))
    words = [
        Word(
            number,
            *(float(word.get(side, "")) for side in ("xMin", "yMin", "xMax", "yMax")),
            word.text or "",
        )
        for number, sheet in enumerate(tree.iterfind(".//{*}page"), 1)
        for word in sheet.iterfind("{*}word")
    ]
    return Sheets(data, words, pypdf.PdfReader(io.BytesIO(data)))


@cache
def sheets_of_kind(kind: str) -> tuple[Results, Sheets]:
    results = KINDS[kind]()
    return results, sheets(results)


@pytest.fixture(params=KINDS)
def laid(request: pytest.FixtureRequest) -> tuple[Results, Sheets]:
    return sheets_of_kind(request.param)


def test_nothing_reaches_into_the_margins(laid: tuple[Results, Sheets]) -> None:
    _, found = laid
    width, height = (float(x) for x in found.reader.pages[0].mediabox[2:])
    for word in found.words:
        assert SIDE - 1 < word.left < word.right < width - SIDE + 1, word
        is_running = word.bottom < TOP or word.top > height - BOTTOM
        assert is_running or (word.top > TOP - 1 and word.bottom < height - BOTTOM + 1), word


def test_no_sheet_is_blank_and_no_bullet_stands_alone(laid: tuple[Results, Sheets]) -> None:
    _, found = laid
    height = float(found.reader.pages[0].mediabox[3])
    for number, text in enumerate(found.texts, 1):
        body = [w for w in found.words if w.sheet == number and TOP < w.bottom < height - BOTTOM]
        assert len(body) > 8, text
    assert found.texts[-1].count("•") != 1


def test_a_figure_and_its_caption_share_a_sheet(laid: tuple[Results, Sheets]) -> None:
    results, found = laid
    for name, sketch in sketch_figures(results).items():
        (place,) = {word.sheet for word in found.words if word.text == f"drawing:{name}"}
        assert f"{plain(sketch.title)}." in found.texts[place - 1]
        assert " ".join(plain(sketch.caption).split()[-2:]) in found.texts[place - 1]


def test_contents_stand_where_there_are_many_sheets(laid: tuple[Results, Sheets]) -> None:
    _, found = laid
    listed = found.sheets_of("In this report, by page:")
    assert listed == ([] if len(found.texts) <= 6 else listed[:1])
    if len(found.texts) <= 6:
        return
    assert listed[0] <= 2
    targets = {}
    for link in found.reader.pages[listed[0] - 1]["/Annots"]:
        name = link.get_object()["/Dest"]
        place = found.reader.named_destinations[name].page.get_object()
        targets[str(name)] = 1 + [p.get_object() for p in found.reader.pages].index(place)
    said = re.search(
        r"by page: Sky (\d+) .*?Findings (\d+) Logs (\d+) Provenance (\d+) Limits (\d+)",
        found.texts[listed[0] - 1],
    )
    names = ("sky", "findings", "logs", "provenance", "limits")
    assert said is not None
    assert [int(number) for number in said.groups()] == [targets[name] for name in names]
    (limits,) = found.sheets_of("What these numbers do not say")
    assert targets["limits"] == limits


def test_there_are_reports_on_both_sides_of_six_sheets() -> None:
    numbers = {kind: len(sheets_of_kind(kind)[1].texts) for kind in KINDS}
    assert numbers["one exposure"] <= 6 < numbers["deep"]


def test_a_table_repeats_its_head_and_cuts_no_row() -> None:
    results, found = sheets_of_kind("many findings")
    assert len(results.set_aside) > 48
    rows = Counter[int]()
    for number, text in enumerate(found.texts, 1):
        rows[number] = len(re.findall(r"\bx\d{4}\b", text))
        if rows[number]:
            assert {"telescope", "row", "exposure", "reason", "detail"} <= set(text.split())
            # Each row ends on the sheet on which it begins, and is not alone there.
            assert text.count("only 'good' is accepted.") == rows[number] > 2
    assert sum(rows.values()) == 48  # report_tables.MOST_ROWS
    assert len([n for n in rows.values() if n]) > 1
    # What is said below it stands with its last rows.
    last = max(number for number, count in rows.items() if count)
    assert "152 more rows stand in tally.json" in found.texts[last - 1]


def test_body_text_is_hyphenated_in_english() -> None:
    _, found = sheets_of_kind("deep")
    broken = re.findall("(?<=\\s)([a-z]{4,})[-\N{HYPHEN}] ([a-z]{3,})\\b", " ".join(found.texts))
    assert broken
    for start, end in broken:
        assert (start + end).isalpha()


def test_each_figure_is_described_and_nothing_else_is_a_figure() -> None:
    results, found = sheets_of_kind("deep")
    described = []

    def walk(element: object) -> None:
        element = element.get_object() if hasattr(element, "get_object") else element
        if isinstance(element, list):
            for child in element:
                walk(child)
        elif isinstance(element, dict):
            if element.get("/S") == "/Figure":
                described.append(element.get("/Alt"))
            walk(element.get("/K"))

    walk(found.reader.trailer["/Root"]["/StructTreeRoot"]["/K"])
    assert Counter(described) == Counter(s.alt for s in sketch_figures(results).values())


def test_the_sheets_may_be_us_letter() -> None:
    text = ReportText(paper="Letter")
    found = sheets(replace(sample_results(exposures=12), report=text))
    for sheet in found.reader.pages:
        # ANSI/ASME Y14.1, size A: 8.5 by 11 inches.
        assert [float(x) for x in sheet.mediabox[2:]] == [8.5 * 72, 11 * 72]
    side = (8.5 * 72 - 170 * POINTS_PER_MM) / 2
    assert min(word.left for word in found.words) > side - 1
    assert max(word.right for word in found.words) < 8.5 * 72 - side + 1


def test_fonts_and_glyphs_are_all_there(caplog: pytest.LogCaptureFixture) -> None:
    with caplog.at_level("WARNING"):
        sheets(sample_results(exposures=3, names=("Heron", "名前", "Плавунчик")))
    assert [r.getMessage() for r in caplog.records if r.name.startswith("weasyprint")] == []


def test_a_second_run_writes_the_same_bytes(tmp_path: Path) -> None:
    campaign = Path(__file__).parent.parent / "examples/one-telescope/campaign.toml"
    written = []
    for seed in ("1", "2"):
        out = tmp_path / seed
        run = subprocess.run(
            [sys.executable, "-m", "skytally", "report", campaign, "--out", out],
            # Sets and dictionaries of strings come in another order in the second run.
            env={**os.environ, "SOURCE_DATE_EPOCH": "1900000000", "PYTHONHASHSEED": seed},
            capture_output=True,
            text=True,
        )
        assert run.returncode == 0, run.stderr
        written.append({p.relative_to(out): p.read_bytes() for p in out.rglob("*.*")})
    first, second = written
    assert {"report.html", "report.pdf", "circular.txt", "tally.json"} <= {p.name for p in first}
    assert [name for name in first if first[name] != second.get(name)] == []
    assert first.keys() == second.keys()
