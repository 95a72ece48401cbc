"""How far each place would have shown a source: by brute force, astropy and hand."""

from __future__ import annotations

from itertools import combinations, pairwise, product

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance
from astropy.cosmology import Planck18, z_at_value
from campaign_builder import EVENT_MJD
from deep_sky import (
    constant,
    coverage_of,
    distance_map,
    dust_map,
    exact_coverage,
    fields,
    places_of,
    spans_of_cells,
)
from hypothesis import given, settings
from hypothesis import strategies as st
from skytally.audit_maps import extinction_findings
from skytally.cosmology import Cosmology
from skytally.covered import Coverage, TallySettings
from skytally.dust import Dust
from skytally.field_extinction import bands_without_coefficient, field_extinction
from skytally.grouping import Lists
from skytally.reach import (
    Visits,
    absolute_magnitudes,
    deciding_looks,
    reach_of_looks,
    seen_share,
)
from skytally.selection import selections
from skytally.sources import Detection, Source
from skytally.space import Space
from skytally.spans import Spans, cell_to_span
from skytally.tally import tally_maps

PLANCK = Cosmology.named("Planck18")
MINUTE = 1 / 1440


def enough(starts, chosen, visits, gap_minutes):
    """Whether some visits are so many, first and last so far apart; one needs no gap."""
    at = [starts[i] for i in chosen]
    return len(at) >= visits and (visits == 1 or max(at) - min(at) >= gap_minutes)


# Whole minutes, so that no comparison of times depends on rounding.
places = st.lists(
    st.lists(
        st.tuples(st.integers(0, 120), st.integers(0, 5), st.sampled_from([0.0, 0.2, 0.7, 0.95])),
        min_size=1,
        max_size=6,
    ),
    min_size=1,
    max_size=5,
)
wanted = st.tuples(st.integers(1, 4), st.sampled_from([0, 1, 30, 45, 90]))


def looks_of(sky):
    """Looks numbered at random over the places, and each place's list of them in time order."""
    count = sum(map(len, sky))
    number = np.random.default_rng(count).permutation(count).astype(np.int32)
    values = np.empty((count, 3))
    values[number] = [look for place in sky for look in place]
    # Within a place looks rise in number as they do in time.
    offsets = np.cumsum([0, *map(len, sky)])
    for first, last in pairwise(offsets):
        here = np.sort(number[first:last])
        values[here] = sorted(values[number[first:last]].tolist())
        number[first:last] = here
    start, reach, chance = values.T
    return Lists(offsets, number), EVENT_MJD + start * MINUTE, reach, chance


@settings(max_examples=300, derandomize=True, deadline=None)
@given(places, wanted)
def test_deciding_looks_against_all_subsets(sky, asked):
    """The reach is the greatest r such that the looks that reach r are enough."""
    visits, gap = asked
    seen, start, reach, _ = looks_of(sky)
    look = deciding_looks(seen, reach, start, visits, float(gap))
    for found, here in zip(look, sky):
        ways = [
            min(here[i][1] for i in some)
            for n in range(1, len(here) + 1)
            for some in combinations(range(len(here)), n)
            if enough([v[0] for v in here], some, visits, gap)
        ]
        assert (reach[found] if found >= 0 else 0.0) == max(ways, default=0.0)


@settings(max_examples=200, derandomize=True, deadline=None)
@given(places, wanted)
def test_seen_share_against_all_outcomes(sky, asked):
    """Every pattern of detections and misses of each place, with its probability."""
    visits, gap = asked
    seen, start, _, chances = looks_of(sky)
    efficiency = np.stack((chances, chances / 2), axis=1)
    share = seen_share(seen, start, efficiency, visits, float(gap))
    for number, here in enumerate(sky):
        for node in (0, 1):
            chance = [v[2] / (node + 1) for v in here]
            total = 0.0
            for pattern in product([False, True], repeat=len(here)):
                some = [i for i, hit in enumerate(pattern) if hit]
                if enough([v[0] for v in here], some, visits, gap):
                    total += float(
                        np.prod([c if hit else 1 - c for c, hit in zip(chance, pattern)])
                    )
            assert share[number, node] == pytest.approx(total, abs=1e-12)


def test_certain_detections_leave_no_doubt():
    """Efficiencies of exactly 1, and many visits at once."""
    seen = Lists(np.array([0, 1, 3, 203]), np.arange(203, dtype=np.int32))
    share = seen_share(seen, EVENT_MJD + np.arange(203) * MINUTE, np.ones((203, 3)), 2, 1.0)
    np.testing.assert_allclose(share, [[0.0] * 3, [1.0] * 3, [1.0] * 3], atol=1e-9)


def test_a_gap_of_exactly_what_is_asked_counts():
    """MJD resolves a microsecond; half an hour is half an hour wherever it begins."""
    seen = Lists(np.array([0, 1, 3]), np.array([0, 1, 2], dtype=np.int32))
    reach = np.array([9.0, 8.0, 7.0])
    for base in EVENT_MJD + np.random.default_rng(4).uniform(0, 3, 300):
        # Half a millisecond after the first of all starts, where rounding could go either way.
        start = base + np.array([0.0, 10.0005, 1810.0005]) / 86400
        assert deciding_looks(seen, reach, start, 2, 30.0).tolist() == [-1, 2]
        share = seen_share(seen, start, np.full((3, 1), 0.5), 2, 30.0)
        assert share[:, 0] == pytest.approx([0.0, 0.25])
        assert deciding_looks(seen, reach, start, 2, 30.001).tolist() == [-1, -1]
        assert not seen_share(seen, start, np.full((3, 1), 0.5), 2, 30.001).any()


def visits_to(limits):
    """One look of one exposure for each limit."""
    coverage = exact_coverage([spans_of_cells(3, [500])], distance_map())
    n = len(limits)
    return Visits(
        coverage.observations,
        places_of(coverage.centre, distance_map()),
        Lists(np.array([0, n]), np.arange(n, dtype=np.int32)),
        np.arange(n),
        np.asarray(limits, dtype=float),
    )


def test_reach_against_astropy():
    limits, magnitude = np.array([15.0, 20.5, 24.0, np.nan]), np.array([-16.0, -15.0, -19.0, -16.0])
    got = reach_of_looks(visits_to(limits), constant(0.0), magnitude, PLANCK)
    expected = Distance(distmod=(limits - magnitude)[:3]).to_value(u.Mpc)
    np.testing.assert_allclose(got, np.append(expected, 0.0), rtol=1e-12)
    got = reach_of_looks(
        visits_to(limits), constant(0.0, detection=Detection(-0.7, 0.2, 0.9)), magnitude, PLANCK
    )
    expected = Distance(distmod=(limits - magnitude)[:3] - 0.7).to_value(u.Mpc)
    np.testing.assert_allclose(got, np.append(expected, 0.0), rtol=1e-12)


def test_flat_spectrum_reach_is_where_astropy_puts_the_limit():
    limits, magnitude = np.array([15.0, 20.5, 24.0]), np.array([-16.0, -15.0, -19.0])
    source = constant(0.0, k_correction="flat")
    got = reach_of_looks(visits_to(limits), source, magnitude, PLANCK)
    for d, limit, absolute in zip(got, limits, magnitude):
        z = z_at_value(Planck18.luminosity_distance, d * u.Mpc).value
        modulus = Planck18.distmod(z).value
        assert absolute + modulus - 2.5 * np.log10(1 + z) == pytest.approx(limit, abs=1e-6)


def test_reach_of_what_is_infinitely_bright_lies_beyond_everything():
    for k_correction in ("none", "flat"):
        source = constant(0.0, k_correction=k_correction)
        limits, magnitude = np.full(4, 20.0), np.array([-30.0, -41.0, -43.0, -90.0])
        got = reach_of_looks(visits_to(limits), source, magnitude, PLANCK)
        assert np.all(np.diff(got) >= 0)
        assert np.all(got > 1e4)
        assert np.all(np.isfinite(got))
        unseen = reach_of_looks(visits_to(limits), source, np.full(4, np.nan), PLANCK)
        assert unseen.tolist() == [0.0] * 4


def test_magnitudes_are_those_of_the_middle_of_each_exposure():
    """A source fading by 2 mag a day, seen in exposures of a quarter of a day."""
    source = Source("Ember", ("r",), "fade", {"r": -17.0}, fade_per_day=2.0)
    regions = [spans_of_cells(3, [1])] * 3
    coverage = exact_coverage(
        regions,
        distance_map(),
        start=EVENT_MJD + np.array([0.0, 0.5, 1.0]),
        duration=21600.0,
        band=["r", "r", "g"],
    )
    got = absolute_magnitudes(source, coverage.observations, EVENT_MJD)
    np.testing.assert_allclose(got, [-17 + 2 * 0.125, -17 + 2 * 0.625, np.nan], atol=1e-8)


# Galactic extinction


@pytest.fixture
def two_fields():
    """Two exposures in r, one in w, over cells of order 2; the second says its own A."""
    cells = [[3, 4], [4], [4, 5]]
    skymap = distance_map()
    coverage = exact_coverage(
        [spans_of_cells(2, c) for c in cells], skymap, band=["r", "r", "w"], depth=21.0
    )
    coverage.observations.extinction[:] = [np.nan, 0.5, np.nan]
    # Dust of one order finer: E(B−V) is the cell's number over a hundred.
    dust = Dust(*cell_to_span(3, np.arange(768)), np.arange(768) / 100)
    return coverage, skymap, dust


def test_extinction_of_a_field_is_its_mean_and_the_log_comes_first(two_fields):
    coverage, _, dust = two_fields
    # ApJ 737 103 (2011), table 6, R_V = 3.1: 2.285 for r.
    mean = np.arange(12, 20).mean() / 100
    got = field_extinction(coverage.footprints, dust, {})
    np.testing.assert_allclose(got, [2.285 * mean, 0.5, np.nan], rtol=1e-9)
    got = field_extinction(coverage.footprints, dust, {"w": 2.0, "r": 1.0})
    np.testing.assert_allclose(got, [mean, 0.5, 2.0 * np.arange(16, 24).mean() / 100], rtol=1e-9)
    got = field_extinction(coverage.footprints, None, {"w": 2.0})
    np.testing.assert_array_equal(got, [np.nan, 0.5, np.nan])


def test_depth_is_corrected_by_the_field(two_fields):
    coverage, skymap, dust = two_fields
    extinction = field_extinction(coverage.footprints, dust, {})
    coverage = Coverage.build(coverage.footprints, extinction)
    mean = np.arange(12, 20).mean() / 100
    np.testing.assert_allclose(coverage.corrected_depth, [21 - 2.285 * mean, 20.5, 21.0])
    rows, _ = tally_maps(coverage, [(skymap, None)], TallySettings(EVENT_MJD, 2, 30.0))
    by_band = {r.band: r for r in rows if r.telescope and r.night is None}
    assert by_band["r"].depth_min == pytest.approx(20.5)
    assert by_band["r"].depth_max == pytest.approx(21 - 2.285 * mean)
    assert by_band["r"].extinction == "corrected"
    assert by_band["r"].extinction_median == pytest.approx((2.285 * mean + 0.5) / 2)
    assert (by_band["w"].extinction, by_band["w"].extinction_median) == ("not corrected", None)
    assert by_band["w"].depth_max == 21.0


def test_a_band_without_coefficient_is_a_finding(two_fields):
    coverage, _, dust = two_fields
    assert bands_without_coefficient(coverage.footprints, dust, {}) == ["w"]
    assert bands_without_coefficient(coverage.footprints, dust, {"w": 2.34}) == []
    assert bands_without_coefficient(coverage.footprints, None, {}) == []
    (finding,) = extinction_findings(["w"])
    assert (finding.code, finding.severity, finding.subject) == (
        "band-without-extinction",
        "caution",
        "w",
    )
    assert "not corrected" in finding.done
    # The log's own values make a coefficient needless.
    coverage.observations.extinction[2] = 0.1
    assert bands_without_coefficient(coverage.footprints, dust, {}) == []


def visits_of(coverage, skymap, dust, coefficients):
    places = places_of(coverage.centre, skymap, dust)
    return Visits.of(coverage.centre, places, coverage.observations, coefficients)


def test_limits_of_visits_are_corrected_place_by_place(two_fields):
    """Not by the field's mean: each dust cell has its own."""
    coverage, skymap, dust = two_fields
    visits = visits_of(coverage, skymap, dust, {})
    ebv = visits.places.place_ebv
    assert len(visits.seen) == len(visits.places) == 12
    counts = {3: {0}, 4: {0, 1, 2}, 5: {2}}
    for place in range(12):
        looks = visits.seen.part(slice(place, place + 1)).items
        for exposure, limit in zip(visits.exposure[looks], visits.limit[looks]):
            a = {0: 2.285 * ebv[place], 1: 0.5, 2: 0.0}[int(exposure)]
            assert limit == pytest.approx(21.0 - a)
        assert set(visits.exposure[looks]) == counts[round(ebv[place] * 100) // 4]


def test_visits_of_fields_are_those_of_their_spans():
    """Every place's exposures, in time order, by looking each place up in every footprint."""
    skymap = distance_map()
    coverage = coverage_of(fields(), skymap)
    visits = visits_of(coverage, skymap, dust_map(), {})
    o, table = coverage.observations, coverage.footprints.raster.centre
    regions = [table.region(int(f)) for f in o.footprint]
    set_position = {int(g): int(s) for g, s in zip(coverage.centre.group, coverage.centre.starts)}
    here = np.array([set_position[int(g)] for g in visits.places.place_set])
    inside = np.array([region.contains(here) for region in regions])
    assert visits.seen.items.size == inside.sum()
    for place in range(len(visits.places)):
        mine = visits.exposure[visits.seen.part(slice(place, place + 1)).items]
        assert np.all(np.diff(o.start_mjd[mine]) >= 0)
        assert set(mine) == set(np.flatnonzero(inside[:, place]))


def test_every_selection_sees_its_own_exposures_at_every_place():
    """Kinds of place, spelt out again, against the exposures that the selection chose there."""
    skymap = distance_map()
    visits = visits_of(coverage_of(fields(), skymap), skymap, dust_map(), {})
    every = [
        visits.exposure[visits.seen.part(slice(p, p + 1)).items] for p in range(len(visits.places))
    ]
    views = [visits.view(selection) for selection in selections(visits.observations)]
    assert len(views) == 12
    for view in views:
        lists = [
            tuple(visits.exposure[view.seen.part(slice(k, k + 1)).items].tolist())
            for k in range(len(view.seen))
        ]
        for place, kind in enumerate(view.kind):
            chosen = tuple(e for e in every[place].tolist() if view.selection.chosen[e])
            assert (lists[kind] if kind >= 0 else ()) == chosen
        assert len(view.seen) <= len(visits.seen)
    assert {view.selection.band for view in visits.by_band} == {None, "g", "r"}


def test_sky_without_dust_value_is_not_corrected():
    skymap = distance_map()
    coverage = exact_coverage([Spans.full()], skymap, depth=20.0)
    dust = Dust(*cell_to_span(1, np.array([7])), np.array([1.0]))
    visits = visits_of(coverage, skymap, dust, {"r": 2.0})
    assert sorted(visits.limit.tolist()) == [18.0, 20.0]
    assert Space.of(skymap, PLANCK) is not None
