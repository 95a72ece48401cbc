"""The report on screen and on paper: complete, safe, self-contained and the same each time."""

from __future__ import annotations

import base64
import hashlib
import importlib.abc
import io
import re
import sys
from dataclasses import replace
from html.parser import HTMLParser
from importlib.resources import files
from itertools import pairwise

import numpy as np
import pypdf
import pytest
from sample_results import NAMES, sample_map, sample_results
from skytally.errors import OutputError
from skytally.report import render_html, render_pdf
from skytally.results import Results
from skytally.wording import headline, row_probability
from space_results import FINDING, SOURCES, with_space

EVIL = '<script>alert(1)</script> & "$x_1$" --> {{ 7 * 7 }}'
ODD = {
    "nothing used": {"exposures": 0},
    "nothing covered": {"covered": False, "exposures": 30},
    "no limits": {"depth": False, "exposures": 30},
    "one exposure": {"names": ("Heron",), "exposures": 1, "set_aside": 0},
    "no outlines": {"outlines": False, "exposures": 30},
    "with distances": {"distance": True, "exposures": 30},
    "deep": {"exposures": 30},
    "deep, nothing covered": {"covered": False, "exposures": 30},
    "deep, nothing used": {"exposures": 0},
    "deep, no limits": {"depth": False, "exposures": 30},
    "deep, hostile names": {"names": (EVIL, "bell\x07", "名前"), "event": EVIL, "exposures": 20},
    "forty telescopes": {"names": tuple(f"Heron {n}" for n in range(40)), "exposures": 80},
    "a position": {
        "exposures": 20,
        "maps": (
            sample_map("1 spot", None, width_deg=1.0, spread_deg=1.0, centres=(40.0,), order=7),
        ),
    },
    "hostile names": {"names": (EVIL, "bell\x07", "名前"), "event": EVIL, "exposures": 20},
}
VOID = {"meta", "br", "img", "link", "hr", "input"}


class Page(HTMLParser):
    """Reads a page, checks that its tags nest, and keeps what the tests ask about."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []
        self.cells: dict[str, list[list[str]]] = {}
        self.table = ""
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        values = dict(attributes)
        self.tags.append((tag, values))
        if tag == "table":
            self.table = str(values["class"])
            self.cells[self.table] = []
        elif tag == "tr":
            self.cells[self.table].append([])
        elif tag in {"td", "th"}:
            self.cells[self.table][-1].append("")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attributes)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if "style" in self.open:
            return
        self.text.append(data)
        if {"td", "th"} & set(self.open):
            self.cells[self.table][-1][-1] += data

    @property
    def words(self) -> str:
        return " ".join(" ".join(self.text).split())


@pytest.fixture(scope="module")
def results() -> Results:
    return sample_results(exposures=60, detectors=9, set_aside=200)


@pytest.fixture(scope="module")
def html(results: Results) -> str:
    return render_html(results)


@pytest.fixture(scope="module")
def page(html: str) -> Page:
    return Page(html)


@pytest.fixture(scope="module")
def pdf(results: Results) -> pypdf.PdfReader:
    return pypdf.PdfReader(io.BytesIO(render_pdf(results)))


def plain(text: str) -> str:
    return " ".join(text.split())


def test_the_answer_comes_first(results: Results, page: Page) -> None:
    assert plain(headline(results)) in page.words
    first_figure = page.words.index("The whole sky.")
    assert page.words.index(plain(headline(results))) < first_figure


def test_every_telescope_stands_with_its_numbers(results: Results, page: Page) -> None:
    rows = {row[0]: row for row in page.cells["telescopes"][1:]}
    assert set(rows) == {*NAMES, "all together"}
    for name in NAMES:
        row = results.row(telescope=name)
        value = plain(row_probability(row, results.settings)).split(" (")[0]
        cells = [plain(cell) for cell in rows[name]]
        assert cells[1] == str(row.exposures)
        assert cells[3].startswith(value)
        assert cells[5] == f"{100 * row.probability_credit:.1f} %"
    shares = [float(plain(rows[name][5]).split()[0]) for name in NAMES]
    assert sum(shares) == pytest.approx(float(plain(rows["all together"][5]).split()[0]), abs=0.3)


def test_every_map_version_stands_with_its_numbers(results: Results, page: Page) -> None:
    body = page.cells["maps"][1:]
    assert [row[0] for row in body] == [m.version for m in results.maps]
    for info, row in zip(results.maps, body):
        value = plain(row_probability(results.row(map=info.version), results.settings))
        assert plain(row[5]).startswith(value.split(" (")[0])


def test_rows_read_are_used_or_set_aside_and_long_lists_point_on(
    results: Results, page: Page
) -> None:
    *body, total = page.cells["logs"][1:]
    for row in [*body, total]:
        read, used, aside = (int(cell.replace(",", "")) for cell in row[2:5])
        assert read == used + aside
    assert int(total[4]) == 200 == len(results.set_aside)
    listed = len(page.cells["set-aside"]) - 1
    assert listed < 60
    assert f"{200 - listed} more rows stand in tally.json." in page.words


def test_every_limit_says_what_it_is(page: Page) -> None:
    depth = page.cells["depth"]
    assert len(depth) > 5
    for place in re.finditer(r"[Ll]imits \(|[Mm]edian limits? ", page.words):
        assert "not corrected for Galactic extinction" in page.words[place.start() :][:200]
    assert "Plover from Vega at 5 σ" in page.words
    assert "Avocet from AB at 3 σ" in page.words


def test_provenance_names_every_file_with_its_hash(results: Results, page: Page) -> None:
    shown = {(row[1], row[2]) for row in page.cells["inputs"][1:]}
    assert shown == {(item.path, item.sha256) for item in results.inputs}
    assert results.software in page.words
    assert "A non-detection constrains a source only as far as" in page.words


def test_the_page_stands_alone_under_a_strict_policy(html: str, page: Page) -> None:
    policy = next(
        a["content"] for t, a in page.tags if a.get("http-equiv") == "Content-Security-Policy"
    )
    style = re.search(r"<style>(.*?)</style>", html, re.S)[1]
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    assert f"style-src 'sha256-{digest}'" in policy
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy
    for tag, attributes in page.tags:
        assert tag not in {"script", "link", "iframe", "object", "embed", "form", "base"}
        assert "style" not in attributes
        for key, value in attributes.items():
            assert not key.startswith("on")
            if key in {"href", "src"}:
                assert str(value).startswith(("#", "data:image/png"))
    assert "url(" not in style
    assert "@import" not in style


def test_the_page_is_sound_for_readers_who_do_not_see_it(page: Page) -> None:
    ids = [a["id"] for _, a in page.tags if "id" in a]
    assert len(ids) == len(set(ids))
    targets = {str(a["href"])[1:] for t, a in page.tags if t == "a"}
    assert targets
    assert targets <= set(ids)
    html = next(a for t, a in page.tags if t == "html")
    assert html["lang"] == "en"
    figures = [a for t, a in page.tags if t == "svg" and a.get("class") == "figure"]
    assert len(figures) == 6
    assert all(len(str(a["aria-label"])) > 40 for a in figures)
    others = [a for t, a in page.tags if t == "svg" and a.get("class") != "figure"]
    assert all(a["aria-hidden"] == "true" for a in others)
    levels = [int(t[1]) for t, _ in page.tags if re.fullmatch(r"h\d", t)]
    assert levels[0] == 1
    assert all(after - before <= 1 for before, after in pairwise(levels))
    heads = [a for t, a in page.tags if t == "th"]
    assert all(a["scope"] in {"row", "col"} for a in heads)


@pytest.mark.parametrize("sheet", ["screen.css", "print.css"])
def test_text_colours_stand_out_from_white(sheet: str) -> None:
    style = (files("skytally.templates") / sheet).read_text(encoding="utf-8")
    names = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", style))
    found = re.findall(r"[^-]color: (#[0-9a-f]{6}|var\(--\w+\))", style)
    assert len(found) > 4
    for colour in found:
        value = names[colour[6:-1]] if colour.startswith("var") else colour
        assert 1.05 / (luminance(value) + 0.05) >= 4.5


@pytest.fixture(scope="module")
def deep() -> Results:
    return with_space(sample_results(exposures=60, set_aside=4), middle=-16.0, stretch=2.85)


@pytest.fixture(scope="module")
def deep_page(deep: Results) -> Page:
    return Page(render_html(deep))


def percents(cell: str) -> float:
    return float(re.search(r"([\d.]+) %", plain(cell))[1])


def test_what_would_have_been_seen_and_what_was_lost_add_up(deep: Results, deep_page: Page) -> None:
    body = {row[0]: row for row in deep_page.cells["sources"][1:]}
    assert set(body) == {"Steady", "Ember", "probability without a distance"}
    for name in ("Steady", "Ember"):
        assert sum(percents(cell) for cell in body[name][2:]) == pytest.approx(100, abs=0.25)
        assert "302" in body[name][1]
    for table in ("sources", "volumes", "absolute-limits", "exclusion"):
        last = deep_page.cells[table][-1]
        assert last[0] == "probability without a distance"
        assert any("0.14" in cell for cell in last[1:])
    assert plain(deep_page.cells["distances"][1][-1]) == "0.14 %"


def test_every_assumption_stands_with_its_source(deep_page: Page) -> None:
    for source in SOURCES:
        for part in source.text.removeprefix(f"{source.name}: ").rstrip(".").split("; "):
            assert part.replace("-1", "−1").replace("-2", "−2") in deep_page.words
    assert "cosmology Planck18" in deep_page.words
    assert "without K-correction" in deep_page.words
    assert "M = m − A − 5 log10(d / 10 pc)" in deep_page.words
    assert deep_page.words.count("A non-detection constrains a source only as far as") == 2


def test_what_is_not_reached_says_how_high_it_comes(deep: Results, deep_page: Page) -> None:
    curves = [c for c in deep.exclusions if c.map == deep.newest.version]
    rows = deep_page.cells["exclusion"][1:-1]
    assert [row[0] for row in rows] == ["all bands", *(str(c.band) for c in curves[1:])]
    # What is tested holds both kinds.
    assert {c.magnitude_50 is None for c in curves} == {True, False}
    assert curves[0].magnitude_90 is not None
    for row, curve in zip(rows, curves):
        for cell, magnitude in zip(row[1:3], (curve.magnitude_50, curve.magnitude_90)):
            if magnitude is None:
                assert plain(cell).startswith("not reached")
                assert f"{100 * curve.highest:.1f} %" in plain(cell)
            else:
                assert magnitude - 0.01 <= float(cell.replace("−", "-")) <= magnitude + 0.001


def test_absolute_limits_are_those_of_the_formula(deep: Results, deep_page: Page) -> None:
    for row in deep_page.cells["absolute-limits"][1:-1]:
        depth, extinction, *limits = (cell.replace("−", "-") for cell in row[2:])
        assert extinction == "not corrected"
        for limit, distance in zip(limits, (142.3 - 31.2, 142.3, 142.3 + 31.2)):
            modulus = 5 * np.log10(distance) + 25
            assert float(limit) == pytest.approx(float(depth) - modulus, abs=0.011)


def test_findings_say_what_was_seen_done_and_is_to_do(deep_page: Page) -> None:
    row = deep_page.cells["findings"][1]
    assert row[0] == f"{FINDING.severity}{FINDING.code}"
    assert row[1] == f"{FINDING.subject}rows 3, 4"
    assert row[2:] == [FINDING.text, FINDING.done, FINDING.remedy]


def test_a_map_without_distance_says_only_that(page: Page) -> None:
    assert page.words.count("The map carries no distance.") == 1
    assert "distance" not in page.cells
    assert not {"sources", "volumes", "exclusion", "fading"} & set(page.cells)
    for word in ("Mpc", "comoving", "Planck18", "findings"):
        assert word not in page.words


def test_corrected_limits_say_by_how_much() -> None:
    base = sample_results(exposures=30)
    rows = tuple(
        replace(row, extinction="corrected", extinction_median=0.2 + 0.1 * (row.band == "g"))
        if row.depth_median is not None
        else row
        for row in base.rows
    )
    page = Page(render_html(with_space(replace(base, rows=rows))))
    assert "corrected for Galactic extinction, median A = 0.20–0.30 mag" in page.words
    assert page.cells["depth"][0][-1] == "extinction A"
    assert {plain(row[-1]) for row in page.cells["depth"][1:]} <= {"0.20 mag", "0.30 mag", "—"}
    marks = page.words.index("One mark per exposure")
    assert "not corrected for Galactic extinction" in page.words[marks:][:120]


def luminance(colour: str) -> float:
    """Relative luminance of WCAG 2.1."""
    parts = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
    red, green, blue = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


@pytest.mark.parametrize("kind", ODD)
def test_odd_campaigns_make_a_sensible_page(kind: str) -> None:
    results = sample_results(**ODD[kind])
    if kind.startswith("deep"):
        hostile = [replace(source, name=f"{source.name} {EVIL}") for source in SOURCES]
        results = with_space(results, sources=hostile if "hostile" in kind else SOURCES)
    text = render_html(results)
    page = Page(text)
    assert plain(headline(results)) in page.words
    assert not re.search(r"\b(None|nan|inf|undefined)\b", page.words)
    assert "100.0 %" not in page.words
    assert "\N{NO-BREAK SPACE}0.0\N{NO-BREAK SPACE}%" not in text
    assert not re.search(r"\b1\s+(exposures|telescopes|rows|versions)\b", page.words)
    assert all(tag not in {"script", "b"} for tag, _ in page.tags)
    widths = {name: {len(row) for row in rows} for name, rows in page.cells.items()}
    assert all(len(width) == 1 for width in widths.values())


def test_names_are_shown_as_they_are_and_run_nothing() -> None:
    results = sample_results(**ODD["hostile names"])
    page = Page(render_html(results))
    assert EVIL in {row[0] for row in page.cells["telescopes"]}
    title = re.search(r"<title>(.*?)</title>", render_html(results))[1]
    assert "&lt;script&gt;" in title
    assert "49" not in title


def test_distances_are_shown_where_a_map_has_them() -> None:
    page = Page(render_html(sample_results(**ODD["with distances"])))
    assert "distance" in page.cells["maps"][0]
    assert plain(page.cells["maps"][1][4]) == "142 ± 31 Mpc"


def test_a_night_of_five_telescopes_stays_small() -> None:
    text = render_html(sample_results(exposures=400, detectors=36))
    assert len(text.encode()) < 3_000_000


def test_the_same_results_give_the_same_bytes(
    results: Results, html: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1900000000")
    assert render_html(results) == html
    assert render_pdf(results) == render_pdf(results)


def test_the_paper_form_says_the_same(results: Results, pdf: pypdf.PdfReader) -> None:
    text = " ".join(plain(sheet.extract_text()) for sheet in pdf.pages)
    # Lines may be broken within a sentence, so look for its numbers.
    for name in NAMES:
        value = plain(row_probability(results.row(telescope=name), results.settings))
        assert value.split(" (")[0] in text
    assert "not corrected for Galactic extinction" in text
    assert "more rows stand in tally.json" in text


def titles(outline: list[object]) -> list[str]:
    """Bookmarks at every depth."""
    return [
        title
        for item in outline
        for title in (titles(item) if isinstance(item, list) else [item.title])
    ]


def test_the_paper_form_has_its_furniture(results: Results, pdf: pypdf.PdfReader) -> None:
    pages = [plain(sheet.extract_text()) for sheet in pdf.pages]
    for number, text in enumerate(pages, 1):
        assert f"page {number} of {len(pages)}" in text
        assert results.software in text
        assert len(text) > 100
    assert all(f"Sky coverage of {results.event.name}" in text for text in pages[1:])
    width, height = (float(n) / 72 * 25.4 for n in pdf.pages[0].mediabox[2:])
    assert (round(width), round(height)) == (210, 297)
    assert {"The sky", "How deep", "Where the numbers come from"} <= set(titles(pdf.outline))
    assert pdf.metadata.title == f"Sky coverage of {results.event.name}"
    root = pdf.trailer["/Root"]
    assert root["/Lang"] == "en"
    assert root["/MarkInfo"]["/Marked"]


def test_the_paper_form_carries_its_fonts(pdf: pypdf.PdfReader) -> None:
    names = set()
    for sheet in pdf.pages:
        for font in sheet["/Resources"]["/Font"].values():
            font = font.get_object()
            names.add(str(font["/BaseFont"]).partition("+")[2])
            inner = font["/DescendantFonts"][0].get_object() if "/DescendantFonts" in font else font
            descriptor = inner["/FontDescriptor"].get_object()
            assert {"/FontFile", "/FontFile2", "/FontFile3"} & set(descriptor)
    # Every face of the sheet, and none that only this machine has.
    assert {n.replace("-", " ").split(" Bold")[0].split(" Oblique")[0] for n in names} <= {
        "DejaVu Sans",
        "DejaVu Sans Mono",
        "STIX Text",
    }


def test_no_character_of_ours_lacks_a_glyph(
    deep: Results, caplog: pytest.LogCaptureFixture
) -> None:
    with caplog.at_level("WARNING"):
        data = render_pdf(deep)
    assert [r.getMessage() for r in caplog.records if r.name.startswith("weasyprint")] == []
    text = "".join(p.extract_text() for p in pypdf.PdfReader(io.BytesIO(data)).pages)
    assert {"²", "³", "σ", "–", "“", "±", "Ω"} <= set(text)
    assert "\ufffd" not in text


class _NoPango(importlib.abc.MetaPathFinder):
    """Fails as WeasyPrint does where the Pango library is not installed."""

    def find_spec(self, name: str, path: object, target: object = None) -> None:
        if name == "weasyprint":
            raise OSError("cannot load library 'libpango-1.0-0'")


def test_without_pango_the_message_names_the_packages(
    results: Results, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in [n for n in sys.modules if n.partition(".")[0] == "weasyprint"]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setattr(sys, "meta_path", [_NoPango(), *sys.meta_path])
    with pytest.raises(OutputError) as caught:
        render_pdf(results)
    assert caught.value.exit_code == 3
    for package in ("libpango-1.0-0", "libpangoft2-1.0-0", "libharfbuzz-subset0"):
        assert package in str(caught.value)
    assert render_html(results)
