"""The circulars of two hundred random campaigns: width, 7 bits, grammar, and sums that hold."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from skytally.account import account
from skytally.cameras import CircleCamera
from skytally.campaign import LoadedCampaign, ReportText
from skytally.circular import render_circular
from skytally.findings import CODES, SEVERITIES, Finding
from skytally.observations import LogTable, SetAside
from skytally.results import Results
from skytally.skymap import DistanceLayer, SkyMap
from skytally.sources import Source
from skytally.spans import FULL_SKY_SR, cell_to_span

NAMES = ("Heron", "Plover", "Ávocet-2", "Great Northern Diver at the Far End of the Long Strand")
BANDS = ("g", "r", "K", "", "very-broad-visual")
REASONS = ("before the event", "not accepted", "duplicate", "unreadable", "missing")
ORDER = 2

# Words that a sentence of numbers must not hold; a percentage of a hundred or none has no decimals.
NEVER = re.compile(
    r"\bnone\b(?! of| was)|\bnan\b|\binf(inity)?\b|\bnull\b|\bTrue\b|\bFalse\b|\{\{|\}\}|\{%|"
    r"<\w[\w.]* object|\x00|(?<![\d.,])100\.0+ %|(?<![\d.,])0\.0+ %|(?<![\w.])-0(\.0*)?(?![\d.])|"
    r"  +[.,;]|,,|\.\.$",
    re.IGNORECASE,
)
NOUNS = "exposure|row|telescope|log|error|detector|map version|other telescope|more error"
ONE_OF_MANY = re.compile(rf"(?<![\d.,:-])(1|one) ({NOUNS})s\b")
MANY_OF_ONE = re.compile(
    r"\b(?:(?!1\b|1 )\d[\d,]*|two|three|four|five|six|seven|eight|nine|ten|eleven|twelve) "
    rf"({NOUNS})\b(?!s)"
)
# Subject and verb; names stand between.
DISAGREE = re.compile(
    r"The logs of [^.]*? is included|The log of [^.]*? are included|It hold\b|They holds\b|"
    r"one telescope have|(two|three|four) telescopes has|The only exposure [^.]*? began at .*last "
)
ROWS = re.compile(r"(?:It holds|They hold) ([\d,]+) rows?: ([\d,]+) used, ([\d,]+) set aside")


def sky_map(seed: int, label: str, issued: float | None, distance: bool) -> SkyMap:
    """A whole-sky map of uneven cells; some without distance, some empty."""
    rng = np.random.default_rng(seed)
    cells = np.arange(12 * 4**ORDER)
    starts, stops = cell_to_span(ORDER, cells)
    weight = rng.exponential(1.0, cells.size) ** 4
    if seed % 3 == 0:  # All in one twelfth of the sky, so that many campaigns miss it.
        weight[4**ORDER :] = 0.0
    density = weight / weight.sum() * cells.size / FULL_SKY_SR
    mu = rng.normal(120.0, 30.0, cells.size)
    mu[rng.random(cells.size) < 0.05] = np.inf
    sigma = rng.uniform(10.0, 40.0, cells.size)
    # The norm of p(r) with the tail below zero left out is close to one over its second moment.
    norm = np.where(np.isfinite(mu), 1 / (np.where(np.isfinite(mu), mu, 0) ** 2 + sigma**2), 0.0)
    layer = DistanceLayer(mu, sigma, norm) if distance else None
    return SkyMap(
        starts, stops, density, ORDER, distance=layer, label=label, issued_mjd=issued, path=label
    )


@st.composite
def logs(draw: st.DrawFn, name: str) -> LogTable:
    """A log of none to twenty exposures with rows set aside, or one that cannot be read."""
    if draw(st.integers(0, 9)) == 0:
        return LogTable.unread(name, f"{name}.csv", f"{name}.csv: it has no column for ra.")
    n = draw(st.sampled_from((0, 1, 1, 2, 16, 31)))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    hours = draw(st.sampled_from((0.3, 20.0, 200.0)))
    limits = np.where(rng.random(n) < draw(st.sampled_from((0, 0.3, 1))), np.nan, 1.0)
    table = log_table(
        name,
        np.degrees(rng.uniform(0, 2 * np.pi, n)),
        np.degrees(np.arcsin(rng.uniform(-1, 1, n))),
        start=EVENT_MJD + np.sort(rng.uniform(1e-3, hours, n)) / 24,
        band=rng.choice(np.array(BANDS, dtype=object), n) if n else "r",
        depth=limits * rng.normal(20.5, 1.0, n),
    )
    reasons = draw(st.lists(st.sampled_from(REASONS), max_size=3))
    lost = tuple(
        SetAside(name, table.file, n + 2 + i, f"x{i}", reason, "It says 'cloud'.")
        for i, reason in enumerate(reasons)
    )
    return replace(table, read=n + len(lost), set_aside=lost)


class Drawn:
    """A campaign, and findings to be told with it; a dataclass would print every array."""

    def __init__(self, loaded: LoadedCampaign, findings: tuple[Finding, ...]) -> None:
        self.loaded, self.findings = loaded, findings

    def __repr__(self) -> str:
        logs = {t.name: (len(t.log), t.log.fault) for t in self.loaded.telescopes}
        return f"<{logs}, {len(self.loaded.maps)} maps, {[f.code for f in self.findings]}>"


@st.composite
def campaigns(draw: st.DrawFn) -> Drawn:
    """A campaign, and findings to be told with it."""
    names = NAMES[: draw(st.integers(1, len(NAMES)))]
    telescopes = [
        telescope(name, CircleCamera(draw(st.sampled_from((6.0, 25.0)))), draw(logs(name)))
        for name in names
    ]
    distance = draw(st.booleans())
    maps = [
        sky_map(
            draw(st.integers(0, 99)),
            f"{number} “arc”",
            None if draw(st.booleans()) else EVENT_MJD + number / 7,
            distance,
        )
        for number in range(1, draw(st.integers(1, 2)) + 1)
    ]
    # Letters that spell none of the words that are looked for.
    word = st.text("abcde ßéΩ–“”°²µ\u3000\t\n\U0001f426", max_size=90)
    report = ReportText(
        tuple(draw(st.lists(st.sampled_from(("A. Observer", "Björn Ødegård")), max_size=3))),
        tuple(draw(st.lists(word, max_size=2))),
        draw(st.sampled_from(("", "We thank\nthe night staff  of Quenna."))),
    )
    sources = [Source("Ash", None, "constant", -16.0)] if draw(st.booleans()) else []
    findings = draw(
        st.lists(
            st.builds(
                Finding,
                st.sampled_from(sorted(CODES)),
                st.sampled_from(SEVERITIES),
                st.sampled_from([*names, maps[0].label, "g"]),
                st.sampled_from(((), (3,), (3, 4, 5))),
                *(st.just(text) for text in ("Seen.", "The numbers are as logged.", "Look.")),
            ),
            max_size=12,
        )
    )
    built = campaign(telescopes, maps, bracket=0.5)
    return Drawn(replace(built, report=report, sources=tuple(sources)), tuple(findings))


def circulars(results: Results) -> list[str]:
    """Every circular that a report writes."""
    names = [t.name for t in results.telescopes]
    return [
        render_circular(results),
        render_circular(results, "short"),
        *(render_circular(results, telescope=name) for name in names),
    ]


def check_table(text: str, used: int) -> None:
    """The table holds every exposure once, or the nights' sums are those of all exposures."""
    listed = len(re.findall(r"^\d{4}-\d\d-\d\d \d\d:\d\d:\d\d  ", text, re.M))
    nights = re.findall(r"^\d{4}-\d\d-\d\d  +(\d+)  ", text, re.M)
    assert (listed, sum(map(int, nights))) == ((used, 0) if used <= 30 else (0, used))


@pytest.fixture(autouse=True, scope="module")
def _no_audit() -> Iterator[None]:
    """What the audit finds is drawn at random here: its own work would take most of the time."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("skytally.account.audit", lambda *anything: ((), ()))
        yield


@settings(max_examples=200, suppress_health_check=[HealthCheck.too_slow])
@given(campaigns())
def test_any_campaign_has_circulars_fit_to_be_sent(drawn: Drawn) -> None:
    loaded, findings = drawn.loaded, drawn.findings
    results = replace(account(loaded), findings=findings)
    texts = circulars(results)
    for text in texts:
        assert text.isascii()
        assert all(c == "\n" or c.isprintable() for c in text)
        lines = text.splitlines()
        assert max(map(len, lines)) <= 72
        assert lines == [line.rstrip() for line in lines]
        words = " ".join(text.split())
        for fault in (NEVER, ONE_OF_MANY, MANY_OF_ONE, DISAGREE):
            assert fault.search(words) is None, (fault.search(words), text)
        # Nothing that was observed is a detection: the word is about what a source would need.
        assert not re.search(r"detections|detected(?! over)|\bdetect ", words)
        for read, used, aside in ROWS.findall(words):
            assert int(read) == int(used) + int(aside)
    for which, text in enumerate(texts):
        if which != 1:  # The short one has no table.
            used = (
                results.row().exposures if which == 0 else results.telescopes[which - 2].exposures
            )
            check_table(text, used)
    unread = [t.name for t in loaded.telescopes if t.log.fault]
    assert ("whose log" in " ".join(texts[0].split())) == bool(unread)
    errors = [f for f in findings if f.severity == "error" and f.code != "log-unreadable"]
    assert ("audit found" in texts[0]) == ("audit found" in texts[1]) == bool(errors)
