"""Numbers and sentences: what is printed must be true to what is known."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sample_results import sample_results
from skytally.wording import (
    NBSP,
    area_text,
    bright_magnitude,
    count,
    decimals_for,
    distance_text,
    extinction_text,
    headline,
    hours_text,
    join_words,
    limit_terms,
    number_text,
    percent,
    probability_text,
    reach_text,
    since_event,
    source_words,
    to_ascii,
    utc_text,
    volume_text,
)
from small_results import small_results, small_row
from space_results import SOURCES, with_space

fractions = st.floats(0, 1)


def plain(text: str) -> str:
    return text.replace(NBSP, " ")


@pytest.mark.parametrize(
    ("uncertainty", "decimals"),
    [(0.119, 1), (0.367, 1), (0.1, 1), (0.0999, 2), (0.006, 3), (1.2, 0), (12.0, 0), (0.0, 4)],
)
def test_digits_follow_the_uncertainty(uncertainty: float, decimals: int) -> None:
    assert decimals_for(uncertainty) == decimals


@given(fractions, st.integers(0, 4))
def test_a_percentage_is_never_a_false_zero_or_hundred(fraction: float, decimals: int) -> None:
    text = plain(percent(fraction, decimals))
    number = float(text.removesuffix(" %").lstrip("<> "))
    if text in {"0 %", "100 %"}:
        assert fraction == pytest.approx(number / 100, abs=1e-9)
    elif text.startswith("<"):
        assert 0 < 100 * fraction < number
    elif text.startswith(">"):
        assert number < 100 * fraction < 100
    else:
        assert 0 < number < 100
        assert number == pytest.approx(100 * fraction, abs=0.50001 * 10.0**-decimals)


@given(fractions, st.floats(0, 0.0024), st.floats(0, 0.0024))
def test_a_printed_bracket_still_holds_the_true_one(
    value: float, below: float, above: float
) -> None:
    low, high = max(value - below, 0.0), min(value + above, 1.0)
    text = plain(probability_text(value, low, high, 1e-4))
    found = re.search(r"\(([\d.]+)–([\d.]+) %\)$", text)
    if high - low <= 1e-9:
        assert found is None
    else:
        assert found is not None
        # The slack of 1e-6 in the last digit keeps an exact bound as it is.
        assert float(found[1]) <= 100 * low + 1e-5
        assert float(found[2]) >= 100 * high - 1e-5
        assert "100.0" not in text


def test_a_wide_bracket_gives_way_to_the_estimated_error() -> None:
    assert plain(probability_text(0.3462, 0.31, 0.38, 0.002)) == "34.6 ± 0.2 %"
    assert plain(probability_text(0.3462, 0.345, 0.348, 0.002)) == "34.6 % (34.5–34.8 %)"
    assert plain(probability_text(0.3462, 0.31, 0.38, 0.0)) == "35 % (31–38 %)"
    assert plain(probability_text(3e-6, 2e-6, 4e-6, 1e-6)) == "0.0003 % (0.0002–0.0004 %)"
    assert plain(probability_text(0.0, 0.0, 0.0, 0.0)) == "0 %"
    assert plain(probability_text(1.0, 1.0, 1.0, 0.0)) == "100 %"


def test_areas_keep_four_figures_and_show_their_bracket() -> None:
    assert plain(area_text(28.443, 28.39, 28.48)) == "28.44 deg²"
    assert plain(area_text(28.443, 25.0, 31.0, bracket=True)) == "28.44 deg² (25.00–31.00 deg²)"
    assert plain(area_text(41252.961, 41252.961, 41252.961)) == "41,253 deg²"
    assert plain(area_text(0.0, 0.0, 0.0)) == "0 deg²"


def test_plurals_lists_and_signs() -> None:
    counted = [plain(count("exposure", n)) for n in (0, 1, 2, 1204)]
    assert counted == ["no exposures", "1 exposure", "2 exposures", "1,204 exposures"]
    assert plain(count("telescope", 5, words=True)) == "five telescopes"
    assert plain(count("patch", 2)) == "2 patches"
    assert plain(count("body", 2, "bodies")) == "2 bodies"
    assert [join_words("abc"[:n]) for n in range(4)] == ["", "a", "a and b", "a, b and c"]
    assert number_text(-0.4, 0) == "0"
    assert number_text(-1234.5, 1) == "−1,234.5"


def test_times_are_utc_and_hours_since_the_event() -> None:
    assert plain(utc_text("2031-03-14T05:21:08Z")) == "2031-03-14 05:21 UTC"
    # The leap second of 2016 is no time that a calendar library takes.
    assert plain(utc_text("2016-12-31T23:59:60Z", seconds=True)) == "2016-12-31 23:59:60 UTC"
    assert utc_text(None) == "—"
    shown = [plain(hours_text(h)) for h in (0.266, 9.999, 47.2, 310.4)]
    assert shown == ["0.27 h", "10.0 h", "47.2 h", "310 h"]
    assert plain(hours_text(0.2, sign=True)) == "+0.20 h"
    assert plain(since_event(-0.4)) == "0.40 h before the event"
    assert plain(distance_text(142.31, 31.2)) == "142 ± 31 Mpc"
    assert distance_text(None, None) == "—"


def test_ascii_keeps_the_words() -> None:
    text = to_ascii(f"34.6{NBSP}% (34.4–34.9{NBSP}%) of 254 deg², 5{NBSP}σ, “2 arc”, 名")
    assert text == '34.6 % (34.4-34.9 %) of 254 deg^2, 5 sigma, "2 arc", ?'


def test_the_headline_says_who_how_much_and_until_when() -> None:
    results = sample_results(exposures=12)
    total = results.row()
    text = plain(headline(results))
    assert text.startswith(f"By {total.last_end[:10]} {total.last_end[11:16]} UTC, ")
    # The last exposure ends at most a few minutes after the last start.
    hours = float(re.search(r"UTC, ([\d.]+) h after the event", text)[1])
    assert max(e.hours for e in results.exposures) <= hours + 0.05
    assert hours < max(e.hours for e in results.exposures) + 0.3
    assert "five telescopes have covered" in text
    assert "12 exposures" in text
    assert f"{100 * total.probability:.2f} %" in text
    assert "not corrected for Galactic extinction" in text


def test_the_headline_is_plain_about_nothing() -> None:
    one = sample_results(names=("Heron",), exposures=1, depth=False)
    assert "one telescope has covered" in plain(headline(one))
    assert "1 exposure over" in plain(headline(one))
    assert "no limiting magnitude" in headline(one)
    off = headline(sample_results(covered=False, exposures=12))
    assert "none of the probability" in off
    assert "%" not in off
    empty = sample_results(exposures=0)
    assert "every row of the logs was set aside" in headline(empty)
    assert "was given" in headline(replace(empty, logs=()))


@given(st.floats(-30, 5), st.integers(0, 3))
def test_a_magnitude_ruled_out_is_never_printed_too_faint(magnitude: float, decimals: int) -> None:
    shown = float(bright_magnitude(magnitude, decimals).replace("−", "-"))
    # The crossing itself is found to a thousandth.
    assert magnitude - 10.0**-decimals - 1e-9 <= shown <= magnitude + 1.001e-3


def test_distances_and_volumes_keep_three_digits() -> None:
    assert [reach_text(d) for d in (448.7, 96.18, 9.618, 0.9618)] == ["449", "96", "9.6", "0.96"]
    assert reach_text(None) == reach_text(0.0) == "—"
    shown = [volume_text(v) for v in (818042.6, 31235.4, 186.23, 7.7, 0.01234, 0.0)]
    assert shown == ["818,000", "31,200", "186", "7.70", "0.0123", "0"]
    assert volume_text(2.297703e9) == "2,300,000,000"
    assert volume_text(None) == "—"


def test_the_state_of_extinction_is_that_of_the_rows() -> None:
    raw = small_row(extinction="not corrected")
    one = small_row(extinction="corrected", extinction_median=0.118)
    two = small_row(extinction="corrected", extinction_median=0.31)
    part = small_row(extinction="partly corrected", extinction_median=0.2)
    blank = small_row(extinction="corrected", depth_median=None)
    assert plain(extinction_text([raw])) == "not corrected for Galactic extinction"
    assert plain(extinction_text([one])) == (
        "corrected for Galactic extinction, median A = 0.12 mag"
    )
    assert plain(extinction_text([one, two])).endswith("median A = 0.12–0.31 mag")
    for mixed in ([raw, one], [part], [part, raw]):
        assert extinction_text(mixed).startswith("partly corrected for Galactic extinction")
    assert extinction_text([blank, raw]) == extinction_text([raw])
    assert extinction_text([blank]) == ""
    settings = small_results().settings
    assert limit_terms(settings, [blank]) == limit_terms(settings)
    assert plain(limit_terms(settings, [one])) == f"AB, 5 σ, {plain(extinction_text([one]))}"


def test_a_source_is_split_into_its_brightness_and_the_search() -> None:
    brightness, search = source_words(SOURCES[1])
    assert brightness == (
        "peak absolute AB magnitude −17 in every band, fading by 0.5 mag/day from the event on"
    )
    assert search.startswith("flat-spectrum K-correction −2.5 log10(1+z); detection certain")
    assert search.endswith("seen means in one exposure")
    assert source_words(replace(SOURCES[0], text="as bright as can be")) == (
        "as bright as can be",
        "",
    )


def test_the_headline_rules_out_only_what_is_reached() -> None:
    base = small_results()
    # A third of the probability is covered: half of it all is out of reach.
    assert "ruled out" not in headline(with_space(base))
    rows = tuple(replace(row, probability=0.8) for row in base.rows)
    text = headline(with_space(replace(base, rows=rows)))
    # Half of everything at middle + 0.4 ln(0.8/0.5 − 1) = −14.951; to the bright side −15.0.
    assert text.endswith(
        "; a constant source of absolute magnitude −15.0 in r, or brighter, is ruled out over "
        "half of all probability."
    )
    assert "ruled out" not in headline(base)
    every = with_space(replace(base, rows=rows))
    every = replace(every, exclusions=tuple(c for c in every.exclusions if c.band is None))
    assert "−15.0 in every band, or brighter" in headline(every)
