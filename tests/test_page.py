"""The page in a browser: what a choice shows is what the tally gives, and nothing leaves the page.

Run in Debian's Chromium. Accessibility is judged by axe-core, an independent
library of checks, which the package axe-playwright-python brings along.
"""

from __future__ import annotations

import json
import math
import os
import re
import shutil
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from functools import cached_property
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from playwright.sync_api import Browser, Locator, Page, expect, sync_playwright
from skytally.account import account, lay_coverage
from skytally.campaign import LoadedCampaign, load_campaign
from skytally.circular import render_circular
from skytally.covered import Chosen, Coverage, TallySettings
from skytally.figure_style import Drawing
from skytally.figures import draw_figures
from skytally.page_sets import SetMerger
from skytally.patchwork import Patchwork
from skytally.report import render_html
from skytally.results import Results
from skytally.selection import Selection
from skytally.spans import DEG2_PER_SR
from skytally.tally import SetWorth, _centre_rule_error
from skytally.times import mjd_to_iso
from skytally.wording import (
    area_text,
    headline,
    hours_text,
    number_text,
    percent,
    probability_text,
    row_probability,
    to_ascii,
    utc_text,
)

EXAMPLE = Path(__file__).parent.parent / "examples/lantern-7/campaign.toml"
WIDTHS = (360, 768, 1440)
# A busy machine is slow, not wrong.
PATIENCE_MS = 120_000
expect.set_options(timeout=PATIENCE_MS)


@dataclass(frozen=True, eq=False)
class Example:
    """The example campaign, its page, and the tally to compare with."""

    campaign: LoadedCampaign
    coverage: Coverage
    results: Results
    figures: dict[str, Drawing]
    html: str
    path: Path

    @property
    def url(self) -> str:
        return self.path.as_uri()

    @cached_property
    def worths(self) -> list[SetWorth]:
        return [SetWorth.of(self.coverage, m, None) for m in self.campaign.maps]

    @cached_property
    def ends(self) -> np.ndarray:
        return np.unique(self.coverage.observations.end_mjd)


@pytest.fixture(scope="module")
def example(tmp_path_factory: pytest.TempPathFactory) -> Example:
    campaign = load_campaign(EXAMPLE)
    coverage = lay_coverage(campaign)
    results = account(campaign, coverage=coverage)
    figures = draw_figures(results)
    html = render_html(results, figures)
    path = tmp_path_factory.mktemp("page") / "report.html"
    path.write_text(html, encoding="utf-8")
    return Example(campaign, coverage, results, figures, html, path)


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    chromium = shutil.which("chromium")
    assert chromium is not None, "the page is checked in Chromium: apt-get install chromium"
    with sync_playwright() as playwright:
        # Tests may run as root, for whom Chromium has no sandbox.
        browser = playwright.chromium.launch(executable_path=chromium, args=["--no-sandbox"])
        yield browser
        browser.close()


@dataclass
class Visit:
    """A page, and everything it complained about or asked for."""

    page: Page
    complaints: list[str] = field(default_factory=list)
    requests: list[str] = field(default_factory=list)

    def open(self, url: str) -> Page:
        self.page.on("console", lambda message: self.complaints.append(message.text))
        self.page.on("pageerror", lambda error: self.complaints.append(str(error)))
        self.page.on("request", lambda request: self.requests.append(request.url))
        self.page.goto(url)
        return self.page


@pytest.fixture
def visit(browser: Browser, example: Example) -> Iterator[Visit]:
    """A fresh visit with scripts on; afterwards nothing may have gone wrong or out."""
    context = browser.new_context(viewport={"width": 1440, "height": 900})
    context.set_default_timeout(PATIENCE_MS)
    visit = Visit(context.new_page())
    yield visit
    context.close()
    assert visit.complaints == []
    pages = {url.split("#")[0] for url in visit.requests if not url.startswith("data:")}
    assert len(pages) == 1


def ready(visit: Visit, url: str) -> Page:
    page = visit.open(url)
    page.wait_for_selector("html[data-ready]")
    return page


# --- the twin ------------------------------------------------------------------------


@dataclass(frozen=True)
class Choice:
    map: int
    telescopes: tuple[bool, ...]
    bands: tuple[bool, ...]
    step: int
    visits: int


def drawn(example: Example, number: int) -> list[Choice]:
    rng = np.random.default_rng(7)
    o = example.coverage.observations

    def flags(n: int) -> tuple[bool, ...]:
        return tuple((rng.random(n) < 0.65).tolist())

    return [
        Choice(
            int(rng.integers(len(example.campaign.maps))),
            flags(len(o.telescopes)),
            flags(len(o.bands)) if rng.random() < 0.6 else (True,) * len(o.bands),
            int(rng.integers(example.ends.size)) if rng.random() < 0.6 else example.ends.size - 1,
            int(rng.choice([1, 1, 2, 3, 5])),
        )
        for _ in range(number)
    ]


@dataclass(frozen=True, eq=False)
class Twin:
    """The tally of a choice, from the package's own view of a selection."""

    example: Example
    choice: Choice

    @cached_property
    def chosen(self) -> np.ndarray:
        o = self.example.coverage.observations
        return (
            np.array(self.choice.telescopes)[o.telescope]
            & np.array(self.choice.bands)[o.band]
            & (o.end_mjd <= self.example.ends[self.choice.step])
        )

    def view(self, mask: np.ndarray, visits: int, gap_minutes: float) -> np.ndarray:
        """Sets of the centre rule's patchwork visited as often as the tally's revisits."""
        coverage = self.example.coverage
        selection = Selection(None, None, None, mask, np.zeros(mask.size, dtype=int), 0)
        settings = TallySettings(self.example.campaign.event_mjd, visits, gap_minutes)
        ((part, _),) = Chosen.every(coverage, [selection], settings)
        again = np.zeros(coverage.centre.sets, dtype=bool)
        again[part.covered] = part.revisited[part.kind[part.covered]]
        return again

    def often(self, patchwork: Patchwork, mask: np.ndarray) -> np.ndarray:
        """Sets of any patchwork that enough of the exposures visited."""
        o = self.example.coverage.observations
        number = np.bincount(o.footprint[mask], minlength=int(patchwork.members.max()) + 1)
        visits = np.zeros(patchwork.sets)
        np.add.at(visits, patchwork.set_of_member, number[patchwork.members])
        return visits >= self.choice.visits

    def texts(self, mask: np.ndarray, map_index: int) -> dict[str, str]:
        """What the page must say of some of the chosen exposures."""
        coverage, worth = self.example.coverage, self.example.worths[map_index]
        settings = self.example.results.settings
        visits = self.choice.visits
        centre, inner, outer = (
            self.often(p, mask) for p in (coverage.centre, coverage.inner, coverage.outer)
        )
        # The tally's own count of visits agrees with the plain one.
        assert np.array_equal(self.view(mask, visits, 0.0), centre)
        value = float(worth.probability[centre].sum())
        low, high = float(worth.inner[inner].sum()), float(worth.outer[outer].sum())
        error = 0.0
        if visits == 1:
            footprints = coverage.footprints.of(mask)
            error = _centre_rule_error(coverage, worth.strip, footprints, high - low)
        area, area_low, area_high = (
            float(p.area_sr[covered].sum() * DEG2_PER_SR)
            for p, covered in (
                (coverage.centre, centre),
                (coverage.inner, inner),
                (coverage.outer, outer),
            )
        )
        again = centre & self.view(mask, settings.revisit_visits, settings.revisit_gap_minutes)
        text = probability_text(value, low, high, error, settings.bracket_target)
        covered, _, bracket = text.partition(" (")
        in_90 = float(worth.area_90_sr[centre].sum() * DEG2_PER_SR)
        return {
            "exposures": number_text(int(mask.sum())),
            "area": self.area(area, area_low, area_high),
            "covered": covered,
            "bracket": bracket.rstrip(")"),
            "in_50": percent(float(worth.probability_50[centre].sum())),
            "in_90": percent(float(worth.probability_90[centre].sum())),
            "of_90": percent(in_90 / self.example.results.maps[map_index].area_90_deg2),
            "revisited": percent(float(worth.probability[again].sum())),
        }

    def area(self, value: float, low: float, high: float) -> str:
        if self.choice.visits == 1 or value <= 0 or high - low <= 2e-9 * value:
            return area_text(value, low, high)
        # Only a union is known to a thousandth; else the bracket says how well.
        uncertainty = max((high - low) / 2, 1e-4 * value)
        digits = max(0, min(6, -math.floor(math.log10(uncertainty))))
        return f"{number_text(value, digits)}\N{NO-BREAK SPACE}deg²"

    def shares(self) -> list[tuple[str, str]]:
        """Alone and share of each telescope as the page must say them."""
        return [(percent(alone), percent(credit)) for alone, credit in self.credits()]

    def credits(self) -> list[tuple[float, float]]:
        """Alone and share of each telescope."""
        coverage = self.example.coverage
        o = coverage.observations
        probability = self.example.worths[self.choice.map].probability
        union = self.often(coverage.centre, self.chosen)
        single = replace(self.choice, visits=1)
        seen = np.array(
            [
                Twin(self.example, single).often(coverage.centre, self.chosen & (o.telescope == t))
                for t in range(len(o.telescopes))
            ]
        )
        number = np.maximum(seen.sum(axis=0), 1)
        return [
            (
                float(probability[mine & union & (number == 1)].sum()),
                float((probability / number)[mine & union].sum()),
            )
            for mine in seen
        ]

    def history(self, mask: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Hours at which new probability was completed, and how much was covered then."""
        o, patchwork = self.example.coverage.observations, self.example.coverage.centre
        probability = self.example.worths[self.choice.map].probability
        sets, ends = [], []
        for exposure in np.flatnonzero(mask):
            inside = patchwork.set_of_member[patchwork.members == o.footprint[exposure]]
            sets.append(inside)
            ends.append(np.full(inside.size, o.end_mjd[exposure]))
        if not sets:
            return np.empty(0), np.empty(0)
        which, when = np.concatenate(sets), np.concatenate(ends)
        order = np.lexsort((when, which))
        which, when = which[order], when[order]
        # A place counts from the end of the visit that makes enough of them.
        place = np.flatnonzero(np.append(True, np.diff(which) > 0)) + self.choice.visits - 1
        place = place[place < which.size]
        place = place[which[place] == which[place - self.choice.visits + 1]]
        gained = np.bincount(
            np.searchsorted(self.example.ends, when[place]), probability[which[place]]
        )
        steps = np.flatnonzero(gained > 0)
        hours = (self.example.ends[steps] - self.example.campaign.event_mjd) * 24
        return hours, np.cumsum(gained[steps])


def cells(row: Locator) -> list[tuple[str, str]]:
    """Text and detail of each cell of a row."""
    return row.evaluate(
        """row => [...row.cells].map(cell => {
            const detail = cell.querySelector(".detail")?.textContent ?? "";
            const text = cell.textContent;
            return [detail ? text.slice(0, -detail.length) : text, detail];
        })"""
    )


def table(page: Page, name: str) -> dict[str, list[tuple[str, str]]]:
    found = [cells(row) for row in page.locator(f"table.{name} tbody tr").all()]
    return {row[0][0]: [tuple(cell) for cell in row] for row in found}


def check(page: Page, twin: Twin) -> None:
    """Compare everything that follows a choice."""
    example, choice, chosen = twin.example, twin.choice, twin.chosen
    o = example.coverage.observations
    all_of_it = twin.texts(chosen, choice.map)
    words = page.locator(".headline").inner_text()
    if not chosen.any():
        assert "covers nothing" in words
    else:
        assert all_of_it["covered"] in words or "none of the probability" in words
        assert utc_text(mjd_to_iso(o.end_mjd[chosen].max())) in words
        assert re.search(rf"with {all_of_it['exposures']}\sexposures?", words)
        if "none of" not in words:
            assert f"over {all_of_it['area']}" in words
            assert all_of_it["bracket"] in words
    figures = dict(
        page.eval_on_selector_all(
            ".key-figures > div",
            """all => all.map(d =>
                [d.children[0].textContent, d.children[1].firstChild.textContent])""",
        )
    )
    assert figures["probability covered"] == all_of_it["covered"]
    assert figures["area observed"] == all_of_it["area"]
    assert figures["90\N{NO-BREAK SPACE}% region covered"] == all_of_it["of_90"]
    assert figures["revisited"] == all_of_it["revisited"]
    check_groups(page, twin)
    for index, (name, row) in enumerate(table(page, "maps").items()):
        assert name == example.results.maps[index].version
        expected = twin.texts(chosen, index)
        assert row[-4] == (expected["covered"], expected["bracket"])
        assert [cell[0] for cell in row[-3:]] == [
            expected[key] for key in ("in_50", "in_90", "of_90")
        ]


def check_groups(page: Page, twin: Twin) -> None:
    """Compare the rows of telescopes, bands and nights."""
    o, chosen, choice = twin.example.coverage.observations, twin.chosen, twin.choice
    shares = twin.shares()
    rows = table(page, "telescopes")
    for index, name in enumerate(o.telescopes):
        mask = chosen & (o.telescope == index)
        if not mask.any():
            assert {cell[0] for cell in rows[name][1:]} == {"—"}
            continue
        expected = twin.texts(mask, choice.map)
        assert rows[name][1:] == [
            (expected["exposures"], ""),
            (expected["area"], ""),
            (expected["covered"], expected["bracket"]),
            *((share, "") for share in shares[index]),
            (expected["revisited"], ""),
        ]
    for name, kind, names in (("bands", o.band, o.bands), ("nights", o.night, o.nights)):
        rows = table(page, name)
        for index, one in enumerate(names):
            mask = chosen & (kind == index)
            if not mask.any():
                assert {cell[0] for cell in rows[one][1:]} <= {"—"}
                continue
            expected = twin.texts(mask, choice.map)
            keys = ["exposures", "area", "covered"]
            keys += ["in_90", "revisited"] if name == "bands" else []
            assert [cell[0] for cell in rows[one][-len(keys) :]] == [expected[k] for k in keys]
        if name == "nights" and mask.any():
            assert rows[one][1][0] == utc_text(mjd_to_iso(o.start_mjd[mask].min()))
            assert rows[one][2][0] == utc_text(mjd_to_iso(o.end_mjd[mask].max()))


def choose(page: Page, choice: Choice) -> None:
    """Set every control as a reader would."""
    for legend, flags in (("Telescopes", choice.telescopes), ("Bands", choice.bands)):
        boxes = page.locator(f"fieldset:has(legend:text-is('{legend}')) input")
        for box, flag in zip(boxes.all(), flags):
            box.set_checked(flag)
    page.locator("#choose-map").select_option(index=choice.map)
    page.locator("#choose-visits").select_option(str(choice.visits))
    page.locator("#choose-time").fill(str(choice.step))


# --- what is checked -----------------------------------------------------------------


def test_drawn_choices_show_what_the_tally_gives(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url)
    everything = choice_of_all(example)
    for number, choice in enumerate(drawn(example, 32)):
        choose(page, choice)
        check(page, Twin(example, choice))
        if number % 8 == 0:
            link = page.url
            assert "#choice?" in link
            choose(page, everything)
            assert "#" not in page.url
            page.goto(link)
            check(page, Twin(example, choice))


def number_of(text: str) -> float:
    return float(text.replace("\N{MINUS SIGN}", "-").replace(",", ""))


def check_timeline(page: Page, twin: Twin) -> None:
    """Compare the lines as they are drawn, by the labels of their own axes, and the table."""
    example, chosen = twin.example, twin.chosen
    o = example.coverage.observations
    texts, paths = page.locator("#figure-timeline svg.figure").evaluate(
        """svg => [[...svg.querySelectorAll("text")].map(t => [t.textContent,
                      Number(t.getAttribute("x")), Number(t.getAttribute("y")),
                      t.getAttribute("text-anchor")]),
                   [...svg.querySelectorAll("path")].map(p => [p.getAttribute("stroke"),
                      p.getAttribute("d")])]"""
    )
    data = json.loads(page.locator("#page-data").text_content() or "")
    colours = {t["name"]: t["colour"] for t in data["telescopes"]}
    groups = {None: chosen} | {
        name: chosen & (o.telescope == index) for index, name in enumerate(o.telescopes)
    }
    expected = {name: twin.history(mask) for name, mask in groups.items()}
    expected = {name: line for name, line in expected.items() if line[0].size}
    assert len(paths) == len(expected)
    if not expected:
        return
    # Labels stand 2.5 below their height on the left, and in the middle below the axis.
    left = [(number_of(t), y - 2.5) for t, x, y, anchor in texts if anchor == "end"]
    below = [
        (number_of(t), x)
        for t, x, y, anchor in texts
        if anchor == "middle" and re.fullmatch(r"[\d.,\N{MINUS SIGN}]+", t)
    ]
    to_percent = np.polynomial.Polynomial.fit([y for _, y in left], [v for v, _ in left], 1)
    to_hours = np.polynomial.Polynomial.fit([x for _, x in below], [v for v, _ in below], 1)
    # Coordinates are rounded to a tenth of a point.
    by_percent, by_hours = (0.11 * abs(line.deriv()(0.0)) for line in (to_percent, to_hours))
    by_colour = {colours.get(name, "#1d2226"): line for name, line in expected.items()}
    for stroke, d in paths:
        corners = re.findall(r"[MH]([\d.]+)(?: [\d.]+)?V([\d.]+)", d)
        hours, covered = by_colour[stroke]
        assert len(corners) == len(hours)
        assert to_hours(np.array([float(x) for x, _ in corners])) == pytest.approx(
            hours, abs=by_hours
        )
        assert to_percent(np.array([float(y) for _, y in corners])) == pytest.approx(
            100 * covered, abs=by_percent
        )
    rows = table(page, "milestones")
    for name, (hours, covered) in expected.items():
        reached = [hours[np.argmax(covered >= part * covered[-1])] for part in (0.5, 0.9)]
        said = [hours_text(h, sign=True) for h in (hours[0], *reached, hours[-1])]
        shown = [cell[0] for cell in rows[name or "all together"][1:]]
        assert shown == [*said, percent(float(covered[-1]))]


def check_credit_bar(page: Page, twin: Twin) -> None:
    """Compare the parts of the bar as they are drawn."""
    all_of_it = float(
        twin.example.worths[twin.choice.map]
        .probability[twin.often(twin.example.coverage.centre, twin.chosen)]
        .sum()
    )
    bars = page.locator("#figure-credit svg.figure rect").evaluate_all(
        """rects => rects.map(r => ["x", "y", "width"].map(k => Number(r.getAttribute(k))))"""
    )
    (left, _, whole), (_, _, covered), *parts = bars
    assert covered / whole == pytest.approx(all_of_it, abs=1e-6)
    credits = sorted((credit for _, credit in twin.credits() if credit > 0), reverse=True)
    assert [width / whole * all_of_it for _, _, width in parts] == pytest.approx(credits, abs=1e-6)
    # They follow each other without a gap and fill the bar.
    ends = [left, *(x + width for x, _, width in parts)]
    assert [x for x, _, _ in parts] == pytest.approx(ends[:-1], abs=1e-6)
    if parts:
        assert ends[-1] == pytest.approx(left + whole, abs=1e-6)


def test_drawn_charts_follow_the_tally_of_a_choice(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url)
    for choice in drawn(example, 18)[6:]:
        choose(page, choice)
        check_timeline(page, Twin(example, choice))
        check_credit_bar(page, Twin(example, choice))


def choice_of_all(example: Example) -> Choice:
    o = example.coverage.observations
    return Choice(
        len(example.campaign.maps) - 1,
        (True,) * len(o.telescopes),
        (True,) * len(o.bands),
        example.ends.size - 1,
        1,
    )


@pytest.mark.parametrize("control", ["map", "telescopes", "bands", "step", "visits"])
def test_every_control_alone_changes_the_numbers(
    example: Example, visit: Visit, control: str
) -> None:
    page = ready(visit, example.url)
    everything = choice_of_all(example)
    other = {
        "map": 0,
        "telescopes": (False, *everything.telescopes[1:]),
        "bands": (False, *everything.bands[1:]),
        "step": example.ends.size // 3,
        "visits": 2,
    }[control]
    before = page.locator(".key-figures").inner_text()
    choice = replace(everything, **{control: other})
    choose(page, choice)
    assert page.locator(".key-figures").inner_text() != before
    check(page, Twin(example, choice))


def test_nothing_chosen_is_said_and_all_comes_back_as_it_was(
    example: Example, visit: Visit
) -> None:
    page = ready(visit, example.url)
    before = page.locator("main").evaluate("e => e.cloneNode(true).innerHTML")
    everything = choice_of_all(example)
    choose(page, replace(everything, telescopes=(False,) * 5))
    assert "covers nothing" in page.locator(".headline").inner_text()
    assert page.locator("#choose [role=status]").inner_text().count("no telescope") == 1
    assert page.locator(".unmoved").first.is_visible()
    page.get_by_role("button", name="Show everything").click()
    assert page.locator("main").evaluate("e => e.cloneNode(true).innerHTML") == before
    assert not page.locator(".unmoved").first.is_visible()
    assert page.locator(".headline").inner_text() == headline(example.results)


def test_a_link_with_unknown_names_says_so(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url + "#choice?telescope=Heron&telescope=Snipe&visits=999&map=9")
    status = page.locator("#choose [role=status]").inner_text()
    assert "Snipe" in status
    assert "telescope Heron" in status
    assert page.locator("#choose-map").input_value() == example.results.newest.version


def test_without_scripts_the_page_reads_as_before(browser: Browser, example: Example) -> None:
    context = browser.new_context(java_script_enabled=False)
    context.set_default_timeout(PATIENCE_MS)
    visit = Visit(context.new_page())
    page = visit.open(example.url)
    assert not page.locator("#choose").is_visible()
    assert page.locator("button").count() == 0
    assert page.locator(".headline").inner_text() == headline(example.results)
    assert page.locator("table.telescopes tbody tr").count() == 6
    context.close()
    assert visit.complaints == []
    assert {url for url in visit.requests if not url.startswith("data:")} == {example.url}


def test_the_page_is_small_and_its_script_short(example: Example) -> None:
    assert len(example.html.encode()) < 3_000_000
    script = (files("skytally.templates") / "report.js").read_text(encoding="utf-8")
    assert len(script.splitlines()) < 600
    assert "innerHTML" not in script
    assert "eval" not in script


def test_no_tag_of_a_name_runs_in_the_data(example: Example) -> None:
    evil = "</script><script>alert(1)</script><!--"
    results = example.results
    event = replace(results.event, name=evil)
    html = render_html(replace(results, event=event), example.figures)
    data = html.split('id="page-data">')[1].split("</script>")[0]
    assert "<" not in data
    assert evil.replace("<", "\\u003c") in data
    assert html.count("<script") == 2


def test_keys_reach_the_controls_and_the_fields(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url)
    page.locator("#choose-time").focus()
    page.keyboard.press("ArrowLeft")
    choice = replace(choice_of_all(example), step=example.ends.size - 2)
    check(page, Twin(example, choice))
    page.get_by_role("button", name="Show everything").press("Enter")
    fields = page.locator(".overlay path")
    assert page.locator(".overlay path[tabindex='0']").count() == 1
    page.locator(".overlay path[tabindex='0']").focus()
    said = set()
    for _ in range(fields.count()):
        said.add(page.locator(".readout").inner_text())
        page.keyboard.press("ArrowRight")
    assert len(said) == fields.count()
    o = example.coverage.observations
    for telescope in range(len(o.telescopes)):
        names = [f"{n} (" for n in o.exposure[o.telescope == telescope]]
        own = [text for text in said if text.startswith(f"{o.telescopes[telescope]}: ")]
        for text in own:
            shown = re.findall(r"(?:: |, | and )(\S+) \(", text)
            assert shown
            assert all(f"{one} (" in names for one in shown)


def test_pointing_at_a_field_names_its_exposures(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url + "#choice?telescope=Plover")
    chosen = page.locator(".overlay path.chosen")
    # The last, and so uppermost, whose middle the chart's frame does not cut away.
    last = chosen.evaluate_all(
        """paths => paths.findLastIndex(path => {
            const box = path.getBBox(), { width, height } = path.ownerSVGElement.viewBox.baseVal;
            const x = box.x + box.width / 2, y = box.y + box.height / 2;
            return x > 0 && x < width && y > 0 && y < height;
        })"""
    )
    field_of_plover = chosen.nth(last)
    field_of_plover.hover(force=True)
    assert page.locator(".readout").inner_text().startswith("Plover: ")
    assert page.locator(".overlay path.out").count() > 0
    title = field_of_plover.locator("title").text_content()
    assert title == field_of_plover.get_attribute("aria-label")


def test_outlines_lie_on_those_of_the_chart(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url)
    drawn_at = page.locator("#figure-zoom svg.figure").evaluate(
        """svg => [...svg.querySelectorAll("path")].flatMap(p => [...p.getAttribute("d")
            .matchAll(/(-?[\\d.]+) (-?[\\d.]+)/g)].map(m => [Number(m[1]), Number(m[2])]))"""
    )
    chart = np.array(drawn_at)
    laid = page.locator(".overlay").evaluate(
        """overlay => [...overlay.querySelectorAll("svg > svg")].flatMap(frame =>
            [...frame.querySelectorAll("path")].map(path => {
                const [x, y] = path.getAttribute("d").slice(1).match(/-?\\d+/g).map(Number);
                return [Number(frame.getAttribute("x")) + x / 10,
                        Number(frame.getAttribute("y")) + y / 10];
            }))"""
    )
    frame = page.locator(".overlay svg").first
    left, top, width, height = (
        float(frame.get_attribute(k) or 0) for k in ("x", "y", "width", "height")
    )
    inside = [(x, y) for x, y in laid if left < x < left + width and top < y < top + height]
    assert len(inside) > 50
    for x, y in inside:
        assert np.hypot(chart[:, 0] - x, chart[:, 1] - y).min() < 0.15


def test_tables_sort_and_keep_their_sum_last(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url)
    press = page.locator("table.telescopes thead button", has_text="covered")
    for order, sign in (("descending", -1), ("ascending", 1)):
        press.click()
        assert page.locator("table.telescopes th[aria-sort]").get_attribute("aria-sort") == order
        names = list(table(page, "telescopes"))
        assert names[-1] == "all together"
        value = {t.name: example.results.row(telescope=t.name) for t in example.results.telescopes}
        shown = [sign * value[name].probability for name in names[:-1]]
        assert shown == sorted(shown)
    page.locator("table.telescopes thead button", has_text="telescope").click()
    names = list(table(page, "telescopes"))[:-1]
    assert names == sorted(names)


def test_what_is_copied_is_plain_text(example: Example, browser: Browser) -> None:
    context = browser.new_context()
    context.set_default_timeout(PATIENCE_MS)
    context.grant_permissions(["clipboard-read", "clipboard-write"])
    page = context.new_page()
    page.goto(example.url)
    page.wait_for_selector("html[data-ready]")

    def copied(button: Locator) -> str:
        button.click()
        expect(button).to_have_text("Copied")
        return str(page.evaluate("navigator.clipboard.readText()"))

    assert copied(page.locator("#choose .tools button").nth(2)) == render_circular(example.results)
    text = copied(page.locator("#table-telescopes .tool"))
    assert text.isascii()
    lines = text.splitlines()
    assert len(lines) == 8
    row = example.results.row(telescope="Heron")
    heron = next(line for line in lines if line.startswith("Heron"))
    assert re.split(r"\s{2,}", heron)[1] == str(row.exposures)
    assert to_ascii(area_text(row.area_deg2, row.area_low_deg2, row.area_high_deg2)) in heron
    assert len({len(line) for line in lines[1:]}) == 1
    page.locator("#choose-visits").select_option("2")
    text = copied(page.locator("#choose .tools button").nth(1))
    assert "at least twice" in text
    assert text.isascii()
    context.close()


@pytest.mark.parametrize("choice", ["", "#choice?telescope=Heron&telescope=Dunlin&visits=2"])
def test_axe_finds_no_serious_fault(example: Example, visit: Visit, choice: str) -> None:
    page = ready(visit, example.url + choice)
    # The page's own policy keeps foreign scripts out; the browser may still evaluate them.
    page.evaluate((files("axe_playwright_python") / "axe.min.js").read_text(encoding="utf-8"))
    found = page.evaluate("axe.run()")
    assert len(found["passes"]) > 20
    faults = [
        f"{fault['id']}: {fault['help']} at {fault['nodes'][0]['target']}"
        for fault in found["violations"]
        if fault["impact"] in {"serious", "critical"}
    ]
    assert faults == []


@pytest.mark.parametrize("width", WIDTHS)
def test_nothing_overflows_the_window(
    example: Example, visit: Visit, width: int, tmp_path: Path
) -> None:
    folder = Path(os.environ.get("SKYTALLY_SCREENSHOTS", tmp_path))
    folder.mkdir(parents=True, exist_ok=True)
    visit.page.set_viewport_size({"width": width, "height": 900})
    page = ready(visit, example.url)
    for name in ("all", "choice"):
        if name == "choice":
            page.locator("#choose-visits").select_option("2")
        assert page.evaluate("document.documentElement.scrollWidth") <= width
        path = folder / f"report-{width}-{name}.png"
        page.screenshot(path=path, full_page=True)
        assert path.stat().st_size > 10_000


def test_a_name_without_end_is_broken(example: Example, visit: Visit, tmp_path: Path) -> None:
    path = tmp_path / "long.html"
    path.write_text(example.html.replace("Heron", 12 * "Heron"), encoding="utf-8")
    visit.page.set_viewport_size({"width": 360, "height": 900})
    page = ready(visit, path.as_uri())
    assert 12 * "Heron" in page.locator("#choose").inner_text()
    assert page.evaluate("document.documentElement.scrollWidth") <= 360


def test_the_printed_page_has_the_paper_s_form(example: Example, visit: Visit) -> None:
    page = ready(visit, example.url + "#choice?telescope=Heron")
    page.emulate_media(media="print")
    for selector in ("#choose", "nav", ".tool", ".overlay"):
        assert not page.locator(selector).first.is_visible()
    assert page.locator(".headline").is_visible()
    size = page.locator("h1").evaluate("e => getComputedStyle(e).fontSize")
    assert float(size.removesuffix("px")) == pytest.approx(27 * 96 / 72, abs=0.1)  # print.css


def test_a_page_cut_down_to_size_is_exact_for_what_it_offers(
    example: Example, visit: Visit, tmp_path: Path
) -> None:
    coverage, campaign = example.coverage, example.campaign
    merger = SetMerger(coverage, len(campaign.maps), campaign.event_mjd, most_bytes=40_000)
    for worth in example.worths:
        merger.witness(worth)
    sets = merger.take([m.label for m in campaign.maps])
    assert not sets.is_whole
    assert sets.step_hours > 0
    path = tmp_path / "small.html"
    sky = replace(example.results.sky, sets=sets)
    html = render_html(replace(example.results, sky=sky), example.figures)
    path.write_text(html, encoding="utf-8")
    page = ready(visit, path.as_uri())
    assert "not counted anew" in page.locator("#choose .table-note").inner_text()
    steps = sets.kinds.step_mjd
    rng = np.random.default_rng(5)
    for _ in range(8):
        step = int(rng.integers(steps.size))
        # The last exposure that a step of this page holds, as a step of the whole one.
        last = int(np.searchsorted(example.ends, steps[step] + 1e-9, side="right")) - 1
        most = sets.most_visits or 1
        choice = Choice(
            int(rng.integers(len(campaign.maps))),
            tuple((rng.random(5) < 0.7).tolist()),
            tuple((rng.random(5) < 0.7).tolist()),
            last,
            int(rng.integers(1, most + 1)),
        )
        choose(page, replace(choice, step=step))
        twin = Twin(example, choice)
        total = table(page, "telescopes")["all together"]
        assert total[1][0] == number_text(int(twin.chosen.sum()))
        value = float(
            example.worths[choice.map].probability[twin.often(coverage.centre, twin.chosen)].sum()
        )
        # Without a bracket of its own, a choice has the digits of the whole campaign.
        whole = row_probability(
            example.results.row(map=example.campaign.maps[choice.map].label),
            example.results.settings,
        )
        digits = len(re.match(r"[\d]+\.?(\d*)", whole)[1])
        assert total[3] == (percent(value, digits), "")
