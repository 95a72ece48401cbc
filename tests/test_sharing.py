"""What telescopes share, against a count pixel by pixel, closed forms and hand-made cases.

The count walks over healpy's pixels in plain Python, with times in whole seconds,
and shares no code with the package.
"""

from __future__ import annotations

import json
from collections import defaultdict
from dataclasses import dataclass, fields, replace

import healpy
import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from hypothesis import given, settings
from hypothesis import strategies as st
from skytally.account import account, lay_coverage
from skytally.cameras import CircleCamera
from skytally.covered import TallySettings
from skytally.serialise import select_map, to_dict, to_json
from skytally.sharing import Sharing, TelescopeSet, share_maps
from skytally.skymap import SkyMap
from skytally.skymap_io import circle_skymap
from skytally.spans import DEG2_PER_SR, Spans, cell_to_span
from skytally.tally import tally_maps

ORDER = 9  # of the pixels that are counted
COARSE = 5  # of the maps' cells
DAY = 86400
BIRDS = ("Heron", "Plover", "Avocet", "Dunlin", "Curlew", "Wren")
SECOND = 1 / DAY

seeds = st.integers(0, 2**32 - 1)


@dataclass(frozen=True)
class Shot:
    """One exposure in plain terms."""

    telescope: str
    start_s: int
    duration_s: int
    pixels: tuple[int, ...]

    @property
    def end_s(self):
        return self.start_s + self.duration_s


@dataclass(frozen=True)
class Plan:
    """A campaign in plain terms; each map gives every COARSE cell its probability."""

    names: tuple[str, ...]
    shots: tuple[Shot, ...]
    maps: dict[str, np.ndarray]


def random_plan(seed, names=None, most=6):
    """Discs about one place, some of them repeated, many ending in the same second."""
    rng = np.random.default_rng(seed)
    names = BIRDS[: rng.integers(1, 7)] if names is None else names
    lon, lat = rng.uniform(0, 360), rng.uniform(-70, 70)
    shots = []
    for name in names:
        for _ in range(int(rng.integers(0, most))):
            at = healpy.ang2vec(lon + rng.normal(0, 1.2), lat + rng.normal(0, 1.2), lonlat=True)
            radius = np.radians(rng.uniform(0.2, 1.5))
            pixels = tuple(map(int, healpy.query_disc(1 << ORDER, at, radius, nest=True)))
            if shots and rng.uniform() < 0.3:
                pixels = shots[int(rng.integers(len(shots)))].pixels
            duration = int(rng.choice([0, 7, 30, 61, 600]))
            end = int(rng.choice([1000, 1001, 5000, rng.integers(700, 3 * DAY)]))
            shots.append(Shot(name, end - duration, duration, pixels))
    near = np.unique([p >> 2 * (ORDER - COARSE) for shot in shots for p in shot.pixels] or [0])
    maps = {}
    for label in ("1 first", "2 update"):
        amount = np.zeros(12 * 4**COARSE)
        amount[rng.integers(amount.size, size=50)] = rng.exponential(1, 50)
        amount[near] = rng.exponential(1, near.size) * (rng.uniform(size=near.size) < 0.8)
        maps[label] = amount / amount.sum()
    return Plan(tuple(names), tuple(shots), maps)


def skymap_of(label, amount, order=COARSE):
    start, stop = cell_to_span(order, np.arange(amount.size))
    return SkyMap(start, stop, amount / healpy.nside2pixarea(1 << order), order, label=label)


def telescope_of(name, shots, order=ORDER):
    """A telescope whose exposures hand regions made of whole pixels."""
    n = len(shots)
    log = log_table(
        name,
        np.full(n, np.nan),
        np.nan,
        start=[EVENT_MJD + shot.start_s / DAY for shot in shots],
        duration=[shot.duration_s for shot in shots],
    )
    log.region[:] = [f"region {number}" for number in range(n)]
    regions = {
        text: Spans.from_cells(order, np.array(sorted(shot.pixels), dtype=np.int64))
        for text, shot in zip(log.region, shots)
    }
    return telescope(name, None, log, regions=regions)


def load(plan):
    return campaign(
        [telescope_of(name, [s for s in plan.shots if s.telescope == name]) for name in plan.names],
        [skymap_of(label, amount) for label, amount in plan.maps.items()],
    )


def tallied(loaded):
    """What lies between the telescopes, and the tally's rows by map and telescope."""
    coverage = lay_coverage(loaded)
    rows, _ = tally_maps(
        coverage, [(m, None) for m in loaded.maps], TallySettings(EVENT_MJD, 2, 30.0)
    )
    by_telescope = {
        (row.map, row.telescope): row for row in rows if row.band is None and row.night is None
    }
    return list(share_maps(coverage, loaded.maps, EVENT_MJD)), by_telescope


def shared(loaded):
    """What lies between the telescopes, without the rest of the accounting."""
    return list(share_maps(lay_coverage(loaded), loaded.maps, EVENT_MJD))


def counted(plan, amount):
    """Every number of one map, pixel by pixel."""
    first_end = defaultdict(dict)  # pixel → telescope → end of its first exposure there
    for shot in plan.shots:
        for pixel in shot.pixels:
            ends = first_end[pixel]
            ends[shot.telescope] = min(ends.get(shot.telescope, shot.end_s), shot.end_s)
    zero = dict.fromkeys(plan.names, 0.0)
    added, unique, credit = dict(zero), dict(zero), dict(zero)
    pairs = {(a, b): 0.0 for a in plan.names for b in plan.names}
    sets = defaultdict(lambda: [0.0, 0.0])
    area = healpy.nside2pixarea(1 << ORDER, degrees=True)
    for pixel, ends in first_end.items():
        worth = amount[pixel >> 2 * (ORDER - COARSE)] / 4 ** (ORDER - COARSE)
        held = tuple(name for name in plan.names if name in ends)
        sets[held][0] += worth
        sets[held][1] += area
        early = [name for name in held if ends[name] == min(ends.values())]
        for name in early:
            added[name] += worth / len(early)
        for name in held:
            credit[name] += worth / len(held)
            unique[name] += worth if len(held) == 1 else 0
            for other in held:
                pairs[name, other] += worth
    return added, unique, credit, pairs, sets


def check_against_the_count(plan):
    sharing = shared(load(plan))
    assert [found.map for found in sharing] == list(plan.maps)
    for found in sharing:
        added, unique, credit, pairs, sets = counted(plan, plan.maps[found.map])
        assert found.telescopes == plan.names
        for numbers, wanted in (
            (found.added, added),
            (found.unique, unique),
            (found.credit, credit),
        ):
            assert dict(zip(plan.names, numbers)) == pytest.approx(wanted, rel=1e-9, abs=1e-12)
        matrix = {
            (a, b): found.pairs[i][j]
            for i, a in enumerate(plan.names)
            for j, b in enumerate(plan.names)
        }
        assert matrix == pytest.approx(pairs, rel=1e-9, abs=1e-12)
        assert {one.telescopes for one in found.sets} == set(sets)
        assert len(found.sets) == len(sets)
        for one in found.sets:
            assert one.probability == pytest.approx(sets[one.telescopes][0], rel=1e-9, abs=1e-12)
            assert one.area_deg2 == pytest.approx(sets[one.telescopes][1], rel=1e-9)
        for name, hours in zip(plan.names, found.first_hours):
            ends = [shot.end_s for shot in plan.shots if shot.telescope == name and shot.pixels]
            assert hours == (pytest.approx(min(ends) / 3600, abs=1e-4) if ends else None)
    return sharing


@pytest.mark.parametrize("seed", range(40))
def test_every_number_agrees_with_the_count(seed):
    check_against_the_count(random_plan(seed))


@pytest.mark.parametrize("count", [8, 9, 40, 70])
def test_any_number_of_telescopes_agrees_with_the_count(count):
    """More than a byte or a machine word has bits."""
    plan = random_plan(count, tuple(f"Heron {number}" for number in range(count)), most=3)
    sets = check_against_the_count(plan)[0].sets
    assert max(len(one.telescopes) for one in sets) >= 4
    assert len({name for one in sets for name in one.telescopes}) > count / 3


def test_the_random_campaigns_hold_what_they_should():
    """The comparison is worth something only if the hard cases occur in it."""
    plans = [random_plan(seed) for seed in range(40)]
    found = [counted(plan, plan.maps["1 first"]) for plan in plans if plan.shots]
    assert {len(plan.names) for plan in plans} == {1, 2, 3, 4, 5, 6}
    assert sum(len(sets) > 6 for *_, sets in found) > 10
    split = 0
    for plan in plans:
        ends = defaultdict(set)
        for shot in plan.shots:
            ends[shot.end_s].add((shot.telescope, shot.start_s))
        split += any(
            len({t for t, _ in s}) > 1 and len({b for _, b in s}) > 1 for s in ends.values()
        )
    assert split > 20
    assert any(name not in {s.telescope for s in p.shots} for p in plans for name in p.names)
    assert sum(any(v == 0 and a > 0 for v, a in sets.values()) for *_, sets in found) > 0


# --- laws ------------------------------------------------------------------------------


@given(seeds)
@settings(max_examples=25)
def test_the_parts_sum_to_the_union_and_agree_with_the_tally(seed):
    sharing, rows = tallied(load(random_plan(seed)))
    for found in sharing:
        total = rows[found.map, None]
        for parts in (found.added, found.credit, [one.probability for one in found.sets]):
            assert sum(parts) == pytest.approx(total.probability, abs=1e-12)
        assert sum(one.area_deg2 for one in found.sets) == pytest.approx(total.area_deg2, rel=1e-12)
        for i, name in enumerate(found.telescopes):
            row = rows[found.map, name]
            assert found.pairs[i][i] == pytest.approx(row.probability, abs=1e-12)
            assert found.unique[i] == pytest.approx(row.probability_unique, abs=1e-12)
            assert found.credit[i] == pytest.approx(row.probability_credit, abs=1e-12)
            assert found.unique[i] <= found.added[i] + 1e-12
            assert found.added[i] <= row.probability + 1e-12
            assert found.pairs[i] == tuple(line[i] for line in found.pairs)
            assert max(found.pairs[i]) <= found.pairs[i][i] + 1e-12
        worth = [(-one.probability, -one.area_deg2) for one in found.sets]
        assert worth == sorted(worth)


@given(seeds)
@settings(max_examples=10)
def test_the_union_loses_without_a_telescope_what_it_covered_alone(seed):
    plan = random_plan(seed, BIRDS[:3])
    sharing, whole = tallied(load(plan))
    for index, name in enumerate(plan.names):
        rest = tuple(shot for shot in plan.shots if shot.telescope != name)
        _, without = tallied(load(replace(plan, shots=rest)))
        for found in sharing:
            union = whole[found.map, None].probability
            kept = without[found.map, None].probability
            assert found.unique[index] == pytest.approx(union - kept, abs=1e-12)


@given(seeds)
@settings(max_examples=15)
def test_the_order_of_telescopes_changes_no_number(seed):
    plan = random_plan(seed)
    turned = replace(plan, names=plan.names[::-1], shots=plan.shots[::-1])
    for one, two in zip(shared(load(plan)), shared(load(turned))):
        assert two.telescopes == one.telescopes[::-1]
        assert two.first_hours == one.first_hours[::-1]
        for name in ("added", "unique", "credit"):
            assert getattr(two, name)[::-1] == pytest.approx(getattr(one, name), abs=1e-12)
        np.testing.assert_allclose(np.array(two.pairs)[::-1, ::-1], one.pairs, atol=1e-12)
        worth = {frozenset(s.telescopes): s.probability for s in one.sets}
        again = {frozenset(s.telescopes): s.probability for s in two.sets}
        assert again == pytest.approx(worth, abs=1e-12)


@given(seeds)
@settings(max_examples=15)
def test_what_comes_later_adds_nothing_where_others_were(seed):
    """A copy of every exposure, a week later and by another telescope, adds nothing."""
    plan = random_plan(seed, BIRDS[:4])
    late = tuple(
        replace(shot, telescope="Wren", start_s=shot.start_s + 7 * DAY) for shot in plan.shots
    )
    more = replace(plan, names=(*plan.names, "Wren"), shots=plan.shots + late)
    for one, two in zip(shared(load(plan)), shared(load(more))):
        assert two.added[:-1] == pytest.approx(one.added, abs=1e-12)
        assert two.added[-1] == 0
        assert sum(two.unique) == 0
        assert two.pairs[-1][:-1] == pytest.approx([one.pairs[i][i] for i in range(4)], abs=1e-12)


# --- by hand ---------------------------------------------------------------------------


def hand_made(*shots, names=("Heron", "Plover", "Avocet")):
    """Base cells 0 to 3 hold 4, 3, 2 and 1 tenths of the probability."""
    amount = np.zeros(12)
    amount[:4] = (0.4, 0.3, 0.2, 0.1)
    telescopes = [
        telescope_of(name, [s for s in shots if s.telescope == name], 0) for name in names
    ]
    return shared(campaign(telescopes, [skymap_of("1", amount, order=0)]))[0]


def test_three_telescopes_by_hand():
    found = hand_made(
        Shot("Heron", 3540, 60, (0, 1)),
        Shot("Plover", 7140, 60, (1, 2)),
        # Both end three hours after the event.
        Shot("Heron", 10740, 60, (2, 3)),
        Shot("Avocet", 10500, 300, (2, 3)),
    )
    assert found.first_hours == (1.0, 2.0, 3.0)
    assert found.added == pytest.approx((0.4 + 0.3 + 0.1 / 2, 0.2, 0.1 / 2))
    assert found.unique == pytest.approx((0.4, 0, 0))
    assert found.credit == pytest.approx(
        (0.4 + 0.3 / 2 + 0.2 / 3 + 0.1 / 2, 0.3 / 2 + 0.2 / 3, 0.2 / 3 + 0.1 / 2)
    )
    np.testing.assert_allclose(
        found.pairs, [[1.0, 0.5, 0.3], [0.5, 0.5, 0.2], [0.3, 0.2, 0.3]], atol=1e-15
    )
    assert [one.telescopes for one in found.sets] == [
        ("Heron",),
        ("Heron", "Plover"),
        ("Heron", "Plover", "Avocet"),
        ("Heron", "Avocet"),
    ]
    assert [one.probability for one in found.sets] == pytest.approx([0.4, 0.3, 0.2, 0.1])
    # Twelve base cells of one size make up the sphere.
    base_deg2 = 4 * np.pi * DEG2_PER_SR / 12
    assert [one.area_deg2 for one in found.sets] == pytest.approx([base_deg2] * 4)


@pytest.mark.parametrize(("later_s", "parts"), [(0, (0.2, 0.2)), (0.002, (0.4, 0)), (1, (0.4, 0))])
def test_only_ends_of_one_moment_share_what_was_added(later_s, parts):
    """An exposure that begins first but ends second comes second."""
    found = hand_made(
        Shot("Heron", 1000, 10, (0,)),
        Shot("Plover", 900, 110 + later_s, (0,)),
        names=("Heron", "Plover"),
    )
    assert found.added == pytest.approx(parts)


def test_a_telescope_does_not_split_with_itself():
    found = hand_made(
        Shot("Heron", 0, 10, (0, 1)),
        Shot("Heron", 5, 5, (0, 2)),
        Shot("Plover", 8, 2, (0,)),
        names=("Heron", "Plover"),
    )
    assert found.added == pytest.approx((0.3 + 0.2 + 0.4 / 2, 0.4 / 2))


def test_sky_off_the_map_counts_in_area_alone():
    found = hand_made(Shot("Heron", 0, 10, (7,)), Shot("Plover", 0, 10, (7, 3)))
    assert [(one.telescopes, one.probability > 0) for one in found.sets] == [
        (("Plover",), True),
        (("Heron", "Plover"), False),
    ]
    assert found.first_hours == (round(10 / 3600, 4), round(10 / 3600, 4), None)


def test_nobody_and_nothing():
    for shots in ((), (Shot("Heron", 0, 10, ()),)):
        found = hand_made(*shots)
        assert found.added == found.unique == found.credit == (0, 0, 0)
        assert found.pairs == ((0, 0, 0),) * 3
        assert found.first_hours == (None, None, None)
        assert found.sets == ()


# --- three cameras in a row ------------------------------------------------------------


def cap_sr(radius):
    return 2 * np.pi * (1 - np.cos(radius))


def lens_sr(one, two, apart):
    """Solid angle in two overlapping caps, by the theorem of Gauss and Bonnet.

    Area = 2π − the two turns at the corners − each arc's geodesic curvature,
    cot r, times its length, sin r times its angle at the centre.
    """
    corner = np.arccos((np.cos(apart) - np.cos(one) * np.cos(two)) / (np.sin(one) * np.sin(two)))
    arcs = [
        2 * np.arccos((np.cos(b) - np.cos(apart) * np.cos(a)) / (np.sin(apart) * np.sin(a)))
        for a, b in ((one, two), (two, one))
    ]
    # At a corner the path turns by the angle between the two radii to it.
    return 2 * np.pi - 2 * corner - arcs[0] * np.cos(one) - arcs[1] * np.cos(two)


def test_the_lens_against_a_count_and_two_halves():
    """Hemispheres share a lune of π minus their distance; healpy counts another."""
    assert lens_sr(np.pi / 2, np.pi / 2, 1.0) == pytest.approx(2 * (np.pi - 1.0))
    place = np.array(healpy.pix2vec(256, np.arange(12 * 256**2)))
    first, second = healpy.ang2vec(np.array([10.0, 50.0]), np.array([5.0, 5.0]), lonlat=True)
    apart = np.arccos(first @ second)
    inside = (first @ place > np.cos(0.5)) & (second @ place > np.cos(0.4))
    share = inside.mean() * 4 * np.pi
    assert lens_sr(0.5, 0.4, apart) == pytest.approx(share, rel=2e-3)


@pytest.mark.parametrize("tied", [False, True])
def test_three_circles_in_a_row_against_closed_forms(tied):
    """Heron overlaps Plover, Plover overlaps Avocet, on a map that is the same everywhere."""
    radius = dict(zip(BIRDS, np.radians([3.0, 4.0, 2.5])))
    lon = dict(zip(BIRDS, (100.0, 105.0, 110.0)))
    end = {"Heron": 7200, "Plover": 7200 if tied else 3600, "Avocet": 10800}
    telescopes = [
        telescope(
            name,
            CircleCamera(float(np.degrees(radius[name]))),
            log_table(name, [lon[name]], [0.0], start=EVENT_MJD + (end[name] - 60) * SECOND),
        )
        for name in radius
    ]
    sky = SkyMap(np.array([0]), np.array([12 << 58]), np.array([1 / (4 * np.pi)]), 0, label="1")
    found = shared(campaign(telescopes, [sky]))[0]
    own = [cap_sr(r) for r in radius.values()]
    left = lens_sr(radius["Heron"], radius["Plover"], np.radians(5.0))
    right = lens_sr(radius["Plover"], radius["Avocet"], np.radians(5.0))
    exact = {
        ("Heron",): own[0] - left,
        ("Heron", "Plover"): left,
        ("Plover",): own[1] - left - right,
        ("Plover", "Avocet"): right,
        ("Avocet",): own[2] - right,
    }
    # A total is within 0.1 % (DESIGN, section 8); differences, of the largest.
    allowed = 1e-3 * max(own)
    assert {one.telescopes for one in found.sets} == set(exact)
    for one in found.sets:
        assert one.area_deg2 == pytest.approx(
            exact[one.telescopes] * DEG2_PER_SR, abs=allowed * DEG2_PER_SR
        )
        assert one.probability == pytest.approx(
            exact[one.telescopes] / (4 * np.pi), abs=allowed / (4 * np.pi)
        )
    wanted = {
        "added": (own[0] - left + tied * left / 2, own[1] - tied * left / 2, own[2] - right),
        "unique": (own[0] - left, own[1] - left - right, own[2] - right),
        "credit": (own[0] - left / 2, own[1] - left / 2 - right / 2, own[2] - right / 2),
    }
    for name, sr in wanted.items():
        assert 4 * np.pi * np.array(getattr(found, name)) == pytest.approx(sr, abs=allowed)
    matrix = [[own[0], left, 0], [left, own[1], right], [0, right, own[2]]]
    np.testing.assert_allclose(4 * np.pi * np.array(found.pairs), matrix, atol=allowed)
    assert found.pairs[0][2] == 0


# --- as data ---------------------------------------------------------------------------


def test_every_number_survives_the_json_exactly():
    results = account(load(random_plan(3)))
    data = json.loads(to_json(results))["between_telescopes"]
    assert [one["map"] for one in data] == [m.version for m in results.maps]
    for item, found in zip(data, results.sharing, strict=True):
        assert list(item) == [f.name for f in fields(Sharing)]
        for name in ("telescopes", "first_hours", "added", "unique", "credit"):
            assert item[name] == list(getattr(found, name))
        assert item["pairs"] == [list(row) for row in found.pairs]
        assert [
            TelescopeSet(tuple(one["telescopes"]), one["probability"], one["area_deg2"])
            for one in item["sets"]
        ] == list(found.sets)


def test_one_version_takes_its_own_sharing_along():
    results = account(load(random_plan(3)))
    for version in ("1 first", "2 update"):
        chosen = to_dict(select_map(results, version))["between_telescopes"]
        assert [one["map"] for one in chosen] == [version]


def test_sums_of_a_real_camera_keep_to_the_bracket():
    """Overlaps of what is rasterised obey the inclusion and exclusion of three sets."""
    maps = [circle_skymap(100, 0, 4, label="1")]
    telescopes = [
        telescope(name, CircleCamera(0.8), log_table(name, [ra], [dec]))
        for name, ra, dec in zip(BIRDS, (100.0, 101.0, 100.5), (0.0, 0.0, 0.9))
    ]
    results = account(campaign(telescopes, maps))
    found = results.sharing[0]
    triple = next(one.probability for one in found.sets if len(one.telescopes) == 3)
    pairs = found.pairs
    union = sum(pairs[i][i] for i in range(3)) - pairs[0][1] - pairs[0][2] - pairs[1][2] + triple
    row = results.row()
    assert 0 < triple < min(*pairs[0][1:], pairs[1][2])
    assert len(found.sets) == 7
    assert row.probability_low <= union <= row.probability_high
    assert union == pytest.approx(row.probability, abs=1e-12)
