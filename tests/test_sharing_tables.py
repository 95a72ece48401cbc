"""The report's section between telescopes: by hand, capped, left out, and to fitting digits."""

from __future__ import annotations

import io
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pypdf
import pytest
from campaign_builder import campaign
from skytally.account import account
from skytally.report import render_html, render_pdf
from skytally.results import Results
from skytally.sharing_tables import MOST_PAIRED, MOST_SETS, sharing_tables
from small_results import small_results
from test_sharing import Shot, random_plan, skymap_of, telescope_of
from test_sharing import load as load_plan

EVIL = '<script>alert(1)</script> & "$x_1$" --> {{ 7 * 7 }}'


class Page(HTMLParser):
    """Reads a page: its words, its tables' cells, its ids and where its links lead."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.words, self.ids, self.links = "", [], set()
        self.cells: dict[str, list[list[str]]] = {}
        self.table, self.inside = "", False
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        values = dict(attributes)
        self.ids += [values["id"]] if "id" in values else []
        if tag == "a":
            self.links.add(values["href"])
        elif tag == "table":
            self.table = str(values["class"])
            self.cells[self.table] = []
        elif tag == "tr":
            self.cells[self.table].append([])
        elif tag in {"td", "th"}:
            self.cells[self.table][-1].append("")
            self.inside = True

    def handle_endtag(self, tag: str) -> None:
        self.inside &= tag not in {"td", "th"}
        self.words += " "

    def handle_data(self, data: str) -> None:
        self.words += data
        if self.inside:
            self.cells[self.table][-1][-1] += data


def plain(text: str) -> str:
    return " ".join(text.split())


def hand_made(*shots: Shot, names: tuple[str, ...] = ("Heron", "Plover", "Avocet")) -> Results:
    """Base cells 0 to 3 hold 4, 3, 2 and 1 tenths of the probability, exactly known."""
    amount = np.zeros(12)
    amount[:4] = (0.4, 0.3, 0.2, 0.1)
    telescopes = [
        telescope_of(name, [s for s in shots if s.telescope == name], 0) for name in names
    ]
    return account(campaign(telescopes, [skymap_of("1", amount, order=0)]))


THREE = (
    Shot("Plover", 7140, 60, (1, 2)),
    Shot("Heron", 10740, 60, (0, 1)),
    Shot("Avocet", 7140, 60, (2, 3)),
)


def text_of(results: Results, name: str) -> list[list[str]]:
    table = sharing_tables(results)[name]
    rows = [*table.rows, *([table.total] if table.total else [])]
    return [[plain(cell.text) for cell in row] for row in rows]


def number(text: str) -> float:
    return float(plain(text).split()[0].replace(",", ""))


@pytest.fixture(scope="module")
def forty() -> Results:
    names = tuple(f"Heron {n}" for n in range(40))
    return account(load_plan(random_plan(40, names, most=3)))


def test_three_telescopes_by_hand() -> None:
    results = hand_made(*THREE)
    # Plover and Avocet end together two hours after the event; cell 2 is both's.
    assert text_of(results, "shares") == [
        ["Plover", "+2.00 h", "40.0 %", "0 %", "25.0 %"],
        ["Avocet", "+2.00 h", "20.0 %", "10.0 %", "20.0 %"],
        ["Heron", "+3.00 h", "40.0 %", "40.0 %", "55.0 %"],
        ["all together", "—", "100 %", "50.0 %", "100 %"],
    ]
    assert text_of(results, "pairs") == [
        ["Heron", "70.0 %", "—", "30.0 %", "0 %"],
        ["Plover", "50.0 %", "30.0 %", "—", "20.0 %"],
        ["Avocet", "30.0 %", "0 %", "20.0 %", "—"],
    ]
    base = f"{41252.96 / 12:,.0f} deg²"  # a twelfth of the sphere
    assert text_of(results, "sets") == [
        ["Heron alone", "1", "40.0 %", base],
        ["Heron and Plover", "2", "30.0 %", base],
        ["Plover and Avocet", "2", "20.0 %", base],
        ["Avocet alone", "1", "10.0 %", base],
        ["all together", "", "100 %", f"{41252.96 / 3:,.0f} deg²"],
    ]


def test_areas_are_no_finer_than_the_total_is_known() -> None:
    """0.1 % of 13,751 deg² is 14 deg²: no decimals, and no false zero."""
    areas = [row[-1] for row in text_of(hand_made(*THREE), "sets")]
    assert all("." not in area for area in areas)
    sliver = replace(
        (results := hand_made(*THREE)).sharing[0],
        sets=(*results.sharing[0].sets, replace(results.sharing[0].sets[-1], area_deg2=0.2)),
    )
    rows = text_of(replace(results, sharing=(sliver,)), "sets")
    assert rows[4][-1] == "< 1 deg²"


def test_the_tables_stand_on_the_page_under_one_heading() -> None:
    results = hand_made(*THREE)
    page = Page(render_html(results, {}))
    for name in ("shares", "pairs", "sets"):
        shown = [[plain(cell) for cell in row] for row in page.cells[name][1:]]
        assert shown == text_of(results, name)
    assert [plain(c) for c in page.cells["pairs"][0]] == [
        *("telescope", "covered", "and Heron", "and Plover", "and Avocet")
    ]
    words = plain(page.words)
    assert words.count("Between telescopes") == 2  # in the contents and as the heading
    assert words.index("Each telescope on the newest map") < words.index("What each telescope bro")
    assert "between" in page.ids
    assert "#between" in page.links
    assert len(page.ids) == len(set(page.ids))
    assert words.count("lose without it") == 1


def test_the_newest_version_is_shown() -> None:
    plan = random_plan(5)
    results = account(load_plan(plan))
    newest = results.sharing[-1]
    assert newest.map == results.newest.version
    assert len({one.added for one in results.sharing}) == 2
    rows = {row[0]: row for row in text_of(results, "shares")}
    for name, added in zip(newest.telescopes, newest.added):
        if added >= 0.001:
            assert number(rows[name][2]) == pytest.approx(100 * added, abs=0.05001)


def test_long_tables_are_cut_and_still_sum_to_the_union(forty: Results) -> None:
    sharing = forty.sharing[-1]
    made = sharing_tables(forty)
    assert len(sharing.sets) > 4 * MOST_SETS
    *listed, others, total = text_of(forty, "sets")
    assert len(listed) == MOST_SETS == 12
    assert others[0] == f"{len(sharing.sets) - 12:,} other sets"
    union = forty.row().probability
    assert number(total[2]) == pytest.approx(100 * union, abs=0.05001)
    assert sum(number(row[2]) for row in [*listed, others]) == pytest.approx(100 * union, abs=0.7)
    assert number(others[2]) == pytest.approx(
        100 * sum(one.probability for one in sharing.sets[12:]), abs=0.05001
    )
    assert sum(number(row[3]) for row in [*listed, others]) == pytest.approx(
        number(total[3]), rel=1e-2
    )
    assert made["sets"].note.endswith("All sets stand in tally.json.")
    assert max(len(row[0].text.split(", ")) for row in made["sets"].rows) <= 6
    assert len(made["pairs"].rows) == MOST_PAIRED == len(made["pairs"].columns) - 2
    assert made["pairs"].note.startswith("The eight telescopes that covered most; ")
    shown = {row[0].text for row in made["pairs"].rows}
    own = {name: sharing.pairs[i][i] for i, name in enumerate(sharing.telescopes)}
    assert min(own[name] for name in shown) >= max(own[n] for n in own if n not in shown)
    assert len(made["shares"].rows) == 40


def test_large_sets_name_their_first_members() -> None:
    names = tuple(f"Wren {n}" for n in range(9))
    shots = [Shot(name, 0, 10, (0,)) for name in names]
    shots += [Shot(name, 0, 10, (1,)) for name in names[1:]]
    shots += [Shot(name, 0, 10, (2,)) for name in names[:6]]
    rows = text_of(hand_made(*shots, names=names), "sets")
    assert [row[:2] for row in rows[:3]] == [
        ["all nine telescopes", "9"],
        ["Wren 1, Wren 2, Wren 3, Wren 4, Wren 5 and 3 more", "8"],
        ["Wren 0, Wren 1, Wren 2, Wren 3, Wren 4 and Wren 5", "6"],
    ]


def test_digits_follow_the_least_certain_telescope() -> None:
    """Avocet's bracket is three percent to either side, and its estimated error one and a half."""
    results = hand_made(*THREE)
    rows = tuple(
        replace(row, probability_low=0.27, probability_high=0.33, probability_error=0.015)
        if row.selection == ("Avocet", None, None)
        else row
        for row in results.rows
    )
    loose = replace(results, rows=rows)
    assert text_of(loose, "shares")[:2] == [
        ["Plover", "+2.00 h", "40.0 %", "0 %", "25.0 %"],
        ["Avocet", "+2.00 h", "20 %", "10 %", "20 %"],
    ]
    assert text_of(loose, "pairs")[1] == ["Plover", "50.0 %", "30.0 %", "—", "20 %"]
    assert [row[2] for row in text_of(loose, "sets")] == [
        "40.0 %",
        "30.0 %",
        "20 %",
        "10 %",
        "100 %",
    ]


def test_a_small_union_keeps_its_first_digits() -> None:
    amount = np.zeros(12)
    amount[:4] = (0.004, 0.0007, 0.0, 0.9953)
    shots = (Shot("Heron", 0, 10, (0, 1)), Shot("Plover", 5, 10, (1,)))
    telescopes = [telescope_of(s.telescope, [s], 0) for s in shots]
    results = account(campaign(telescopes, [skymap_of("1", amount, order=0)]))
    assert [row[2] for row in text_of(results, "sets")] == ["0.4000 %", "0.0700 %", "0.4700 %"]


@pytest.mark.parametrize(
    "shots",
    [
        (),
        (Shot("Heron", 0, 10, (0,)),),
        (Shot("Heron", 0, 10, (0,)), Shot("Plover", 0, 10, (7,))),
        (Shot("Heron", 0, 10, (8,)), Shot("Plover", 0, 10, (7,))),
    ],
    ids=["no exposure", "one telescope", "one on the map", "none on the map"],
)
def test_without_two_that_covered_probability_there_is_no_section(shots: tuple[Shot, ...]) -> None:
    html = render_html(hand_made(*shots), {})
    assert "Between telescopes" not in html
    assert 'href="#between"' not in html
    assert 'id="between"' not in html


def test_results_without_sharing_make_a_page() -> None:
    assert not any(table.rows for table in sharing_tables(small_results()).values())


def test_an_idle_telescope_stands_with_zeros() -> None:
    results = hand_made(*THREE, names=("Heron", "Plover", "Avocet", "Wren"))
    assert text_of(results, "shares")[3] == ["Wren", "—", "0 %", "0 %", "0 %"]
    assert text_of(results, "pairs")[3] == ["Wren", "0 %", "0 %", "0 %", "0 %", "—"]
    assert sharing_tables(results)["shares"].rows[3][0].telescope is None


def test_hostile_names_stay_text() -> None:
    names = (EVIL, "名前", "Heron " + "x" * 60)
    shots = [Shot(name, n, 10, (n, n + 1)) for n, name in enumerate(names)]
    html = render_html(hand_made(*shots, names=names), {})
    page = Page(html)
    assert EVIL not in html
    # No script but the page's own two: its data and its code.
    assert html.count("<script") == 2
    assert plain(page.cells["pairs"][0][2]) == plain(f"and {EVIL}")


def flat(outline: list) -> list:
    return [e for item in outline for e in (flat(item) if isinstance(item, list) else [item])]


def test_the_section_stands_on_paper(forty: Results) -> None:
    reader = pypdf.PdfReader(io.BytesIO(render_pdf(forty, {})))
    words = plain(" ".join(page.extract_text() for page in reader.pages))
    for table in sharing_tables(forty).values():
        assert words.count(table.title) == 1
        assert plain(table.note) in words
    assert "Between telescopes" in [entry["/Title"] for entry in flat(reader.outline)]
