"""Hold a campaign's results against the slow twins, number by number.

Every comparison goes through `Ledger`, which keeps the worst difference that it has
seen of each kind of number and fails where one exceeds its tolerance.
"""

from __future__ import annotations

import math
from collections import defaultdict
from dataclasses import dataclass, field
from datetime import timedelta

import healpy
import numpy as np
from skytally.account import account, lay_coverage
from skytally.distance import has_distance
from skytally.distance import moments as form_moments
from skytally.leftover import left_overs
from skytally.spans import cell_to_span
from tally_twin import as_pointed, flat, judge, tally
from twin_campaigns import EVENT, Plan, load
from twin_space import MAGNITUDES, PEAKS, RATES, Deep, comoving, integral, shape, span

__all__ = ["Ledger", "check_plan"]

EXACT = 1e-9  # of the value, or of 1 where that is larger: rounding
GRADUAL = 1e-4  # in probability: the steps of an integral over a detection curve
TABLES = 1e-6  # of the value: interpolated redshifts and volumes, on both sides


@dataclass
class Ledger:
    """Worst difference of each kind of number, and how many were compared."""

    worst: dict[str, float] = field(default_factory=lambda: defaultdict(float))
    count: dict[str, int] = field(default_factory=lambda: defaultdict(int))

    def close(self, name: str, found, expected, tolerance=EXACT, where: object = "") -> None:
        """Compare numbers or sequences of them, relative to the value or to 1 if smaller."""
        if expected is None or found is None or isinstance(expected, str):
            self.same(name, found, expected, where)
            return
        found, expected = np.atleast_1d(found).astype(float), np.atleast_1d(expected).astype(float)
        assert found.shape == expected.shape, (name, where, found.shape, expected.shape)
        self.count[name] += found.size
        if not found.size:
            return
        scale = np.maximum(np.abs(expected), 1.0)
        worst = float(np.max(np.abs(found - expected) / scale))
        assert worst <= tolerance, (name, where, worst, found, expected)
        self.worst[name] = max(self.worst[name], worst)

    def same(self, name: str, found, expected, where: object = "") -> None:
        """Compare what has no rounding."""
        self.count[name] += 1
        assert found == expected, (name, where, found, expected)
        self.worst[name] = max(self.worst[name], 0.0)


def check_plan(plan: Plan, ledger: Ledger) -> None:
    """Compare everything that the package says of a campaign."""
    loaded = load(plan)
    coverage = lay_coverage(loaded)
    results = account(loaded, coverage=coverage)
    _rows(plan, results, ledger)
    _exposures(plan, results, ledger)
    _between(plan, results, ledger)
    deep = Deep(plan.plain)
    _map_facts(plan, results, deep, ledger)
    if not deep.maps:
        assert not results.source_rows
        assert not results.exclusions
    _sources(results, deep, ledger)
    _exclusion(results, deep, ledger)
    _profiles(results, deep, ledger)
    _absolute_limits(results, deep, ledger)
    _left_over(loaded, coverage, deep, ledger)


# --- two dimensions ---------------------------------------------------------------------


def _rows(plan, results, ledger):
    expected = tally(plan.plain)
    assert {(row.map, row.selection) for row in results.rows} == set(expected)
    assert len(results.rows) == len(expected) == len(results.timelines)
    for row in results.rows:
        numbers = expected[row.map, row.selection]
        for name, value in numbers.values.items():
            ledger.close(name, getattr(row, name), value, where=row.selection)
        for edge in (row.probability_low, row.probability_high):
            ledger.close("bracket of exact regions", edge, row.probability)
        ledger.same(
            "bracket of exact areas",
            (row.area_low_deg2, row.area_high_deg2),
            (row.area_deg2, row.area_deg2),
        )
        ledger.close("error of exact regions", row.probability_error, 0.0)
    for line in results.timelines:
        selection = (line.telescope, line.band, line.night)
        steps = expected[line.map, selection].timeline
        ends = [(EVENT + timedelta(seconds=s)).strftime("%Y-%m-%dT%H:%M:%SZ") for s in steps]
        ledger.same("timeline, ends", line.end, tuple(ends), selection)
        # Hours are given with four decimals.
        ledger.close("timeline, hours", line.hours, [s / 3600 for s in steps], 5.1e-5)
        ledger.close("timeline, probability", line.probability, [p for p, _ in steps.values()])
        ledger.close("timeline, area", line.area_deg2, [a for _, a in steps.values()])
    found = defaultdict(dict)
    for one in results.as_pointed:
        found[one.telescope, one.band, one.night][one.map] = one
    for (label, selection), numbers in expected.items():
        if label != results.maps[0].version:
            continue
        assert set(found[selection]) == set(numbers.as_pointed), selection
        for version, (count, then, newest) in numbers.as_pointed.items():
            one = found[selection][version]
            ledger.same("as pointed, exposures", one.exposures, count)
            ledger.close("as pointed, probability then", one.probability, then)
            ledger.close("as pointed, probability now", one.probability_newest, newest)


def _exposures(plan, results, ledger):
    """Each exposure by itself, in order of its log."""
    plain = plan.plain
    judged = judge(plain)
    pixels = sorted(set().union(*(e.pixels for e in judged)))
    weights = {m.label: flat(m, pixels, plain.order) for m in plain.maps}
    everything = (None, None, None)
    for rule in plain.telescopes:
        own = [e for e in judged if e.telescope == rule.name]
        listed = sorted(
            (x for x in results.exposures if x.telescope == rule.name), key=lambda x: x.row
        )
        assert len(own) == len(listed)
        for e, found in zip(own, listed):
            ((version, (_, then, newest)),) = as_pointed(plain, [e], everything, weights).items()
            area = len(e.pixels) * healpy.nside2pixarea(1 << plain.order, degrees=True)
            ledger.close("exposure, area", found.area_deg2, area)
            ledger.close("exposure, limit", found.depth, e.limit)
            ledger.same(
                "exposure, night and map", (found.night, found.map_in_force), (e.night, version)
            )
            ledger.close("exposure, probability then", found.probability_in_force, then)
            ledger.close("exposure, probability now", found.probability_newest, newest)


def _between(plan, results, ledger):
    """What pairs of telescopes share, what each was first to complete, and the exact sets."""
    judged, names = judge(plan.plain), [t.name for t in plan.plain.telescopes]
    ends = defaultdict(dict)  # pixel → telescope → end of its first exposure there
    for e in judged:
        for pixel in e.pixels:
            ends[pixel][e.telescope] = min(ends[pixel].get(e.telescope, e.end_s), e.end_s)
    area = healpy.nside2pixarea(1 << plan.plain.order, degrees=True)
    for plain, found in zip(_in_order(plan, results), results.sharing, strict=True):
        weight = flat(plain, sorted(ends), plan.plain.order)
        added, pairs = defaultdict(float), defaultdict(float)
        sets = defaultdict(lambda: [0.0, 0.0])
        for pixel, own in ends.items():
            first = [name for name in own if own[name] == min(own.values())]
            for name in first:
                added[name] += weight[pixel] / len(first)
            for one in own:
                for other in own:
                    pairs[one, other] += weight[pixel]
            kind = sets[tuple(name for name in names if name in own)]
            kind[0] += weight[pixel]
            kind[1] += area
        ledger.same("between telescopes, names", found.telescopes, tuple(names))
        ledger.close("between telescopes, added", found.added, [added[n] for n in names])
        ledger.close(
            "between telescopes, pairs", found.pairs, [[pairs[a, b] for b in names] for a in names]
        )
        assert {s.telescopes for s in found.sets} == set(sets)
        for one in found.sets:
            ledger.close(
                "between telescopes, sets", (one.probability, one.area_deg2), sets[one.telescopes]
            )


def _in_order(plan, results):
    """The plain maps in the order of the results."""
    by_label = {m.label: m for m in plan.plain.maps}
    return [by_label[m.version] for m in results.maps]


# --- three dimensions -------------------------------------------------------------------


def _map_facts(plan, results, deep, ledger):
    for plain, info in zip(_in_order(plan, results), results.maps):
        if plain.label not in deep.maps:
            assert info.volume_90_mpc3 is None
            assert info.distance_mean_mpc is None
            continue
        skymap = deep.maps[plain.label]
        found = info.distance_mean_mpc, info.distance_sd_mpc
        ledger.close("map, mean and sd of distance", found, skymap.moments())
        lost = float(skymap.held[~skymap.known].sum())
        ledger.close("map, probability without distance", info.probability_without_distance, lost)
        for level, own, own_comoving in (
            (0.5, info.volume_50_mpc3, info.volume_50_comoving_mpc3),
            (0.9, info.volume_90_mpc3, info.volume_90_comoving_mpc3),
        ):
            shell = skymap.credible(level)
            if shell is None:
                assert own is own_comoving is None
                continue
            near, far = shell
            volume = float(skymap.solid_sr @ (far**3 - near**3) / 3)
            ledger.close("map, credible volume", own, volume)
            volume = float(skymap.solid_sr @ (comoving(far) - comoving(near)))
            ledger.close("map, credible volume, comoving", own_comoving, volume, TABLES)


def _sources(results, deep, ledger):
    names = [s.name for s in deep.campaign.sources]
    rows = {(r.map, (r.telescope, r.band, r.night), r.source): r for r in results.source_rows}
    assert len(rows) == len(results.source_rows)
    for label, skymap in deep.maps.items():
        shell = skymap.credible(0.9)
        for selection in deep.selections():
            row = results.row(label, *selection)
            volumes = (None, None)
            if shell is not None:
                volumes = deep.covered_shell(label, selection, shell)
            ledger.close("volume_90_covered_mpc3", row.volume_90_covered_mpc3, volumes[0])
            ledger.close(
                "volume_90_covered_comoving_mpc3",
                row.volume_90_covered_comoving_mpc3,
                volumes[1],
                TABLES,
            )
            for number, name in enumerate(names):
                found = rows.pop((label, selection, name))
                expected = deep.source_row(number, label, selection, shell)
                _source_row(found, expected, volumes, deep.campaign.sources[number], ledger)
    assert not rows


def _source_row(found, expected, volumes, plain, ledger):
    where = found.map, found.telescope, found.band, found.night, plain
    step = plain.width == 0 and plain.plateau == 1
    kind = "step" if step else "gradual" if plain.width else "plateau"
    kind += f", {plain.visits} visits" if plain.visits > 1 else ""
    tolerance = EXACT if step else GRADUAL
    ledger.close(
        f"detectable probability, {kind}", found.probability, expected.probability, tolerance, where
    )
    ledger.close(
        "probability beyond reach", found.probability_beyond, expected.beyond, tolerance, where
    )
    ledger.close(
        "probability without distance",
        found.probability_without_distance,
        expected.without,
        EXACT,
        where,
    )
    for edge in (found.probability_low, found.probability_high):
        ledger.close("bracket of detectable probability", edge, found.probability)
    for name, own, value in zip(
        ("least", "median", "greatest"),
        (found.reach_min_mpc, found.reach_median_mpc, found.reach_max_mpc),
        expected.reach,
    ):
        ledger.close(f"reach, {name}", own, value, TABLES if plain.flat else EXACT, where)
    # A reach that is looked up in a table enters with its cube.
    cubed = 3 * TABLES if plain.flat else EXACT
    ledger.close("volume within reach", found.volume_mpc3, expected.volume[0], cubed, where)
    ledger.close(
        "volume within reach, comoving",
        found.volume_comoving_mpc3,
        expected.volume[1],
        3 * TABLES,
        where,
    )
    own = found.volume_90_covered_mpc3, found.volume_90_covered_comoving_mpc3
    for one, value in zip(own, volumes):
        ledger.close("V90 covered, by source", one, value, TABLES, where)
    inside = (None, None) if expected.volume_90_within is None else expected.volume_90_within
    ledger.close(
        "V90 within reach",
        found.volume_90_within_reach_mpc3,
        inside[0],
        1e2 * TABLES if plain.flat else EXACT,
        where,
    )
    ledger.close(
        "V90 within reach, comoving",
        found.volume_90_within_reach_comoving_mpc3,
        inside[1],
        1e2 * TABLES,
        where,
    )


def _exclusion(results, deep, ledger):
    bands = sorted({e.band for e in deep.exposures})
    curves = {(c.map, c.band): c for c in results.exclusions}
    planes = {p.map: p for p in results.fading_planes}
    histograms = {(h.map, h.band): h for h in results.depth_histograms}
    assert set(planes) == set(deep.maps)
    assert set(curves) == {(m, b) for m in deep.maps for b in (None, *bands)}
    for label in deep.maps:
        for band in (None, *bands):
            deepest = deep.deepest(band)
            detectable = deep.by_limit(label, deepest)
            curve = curves[label, band]
            ledger.close("exclusion, magnitudes", curve.magnitude, MAGNITUDES)
            ledger.close("exclusion curve", curve.probability, [detectable(m) for m in MAGNITUDES])
            ledger.close("exclusion, highest", curve.highest, detectable(-200.0))
            for share, own in ((0.5, curve.magnitude_50), (0.9, curve.magnitude_90)):
                # The crossing itself is what must hold there.
                if own is None:
                    ledger.same("exclusion, not reached", detectable(-200.0) <= share, True)
                else:
                    ledger.close("exclusion, crossing", detectable(own), share, 1e-6)
            if band is not None:
                _histogram(histograms.pop((label, band), None), label, deepest, band, deep, ledger)
        plane = planes[label]
        ledger.close("fading plane, axes", [*plane.peak, *plane.fade_per_day], [*PEAKS, *RATES])
        for rate, own in list(zip(RATES, plane.probability))[::6]:
            detectable = deep.by_limit(label, deep.deepest(None, rate))
            ledger.close("fading plane", own, [detectable(m) for m in PEAKS])
    assert not histograms


def _histogram(found, label, deepest, band, deep, ledger):
    """Covered probability by quarter magnitudes of the deepest limit."""
    saw = [bool(seen) for seen, _ in deep.looks((None, band, None))]
    weight = deep.maps[label].weight
    held, without = defaultdict(float), 0.0
    for limit, own, covered in zip(deepest, weight.tolist(), saw):
        if limit is not None:
            held[math.floor(limit * 4)] += own
        elif covered:
            without += own
    if found is None:
        assert not held
        return
    first = round(found.edges[0] * 4)
    ledger.same(
        "depth histogram, ends",
        (first, len(found.probability)),
        (min(held), max(held) - min(held) + 1),
    )
    ledger.close(
        "depth histogram",
        found.probability,
        [held[first + i] for i in range(len(found.probability))],
    )
    ledger.close("depth histogram, without limit", found.without_limit, without)


def _profiles(results, deep, ledger):
    assert [p.map for p in results.distance_profiles] == [
        m.version for m in results.maps if m.version in deep.maps
    ]
    for profile in results.distance_profiles:
        skymap = deep.maps[profile.map]
        mean, sd = skymap.moments()
        nodes = np.linspace(0.0, mean + 5 * sd, len(profile.distance_mpc))
        ledger.close("distance profile, nodes", profile.distance_mpc, nodes)
        # The density at a node as the slope of its distribution would need differences;
        # it is written out instead: r² and the Gauss curve, over their integral.
        mu, sigma = skymap.mu[skymap.known], skymap.sigma[skymap.known]
        per_mpc = np.zeros((skymap.mu.size + 1, nodes.size))
        whole = integral(*span(mu, sigma), mu, sigma)
        per_mpc[:-1][skymap.known] = shape(nodes, mu[:, None], sigma[:, None]) / whole[:, None]
        ledger.close("distance profile, whole", profile.whole, skymap.held @ per_mpc[:-1])
        at = skymap.weight[:, None] * per_mpc[skymap.cell]
        ledger.close("distance profile, covered", profile.covered, at.sum(axis=0))
        for number, own in enumerate(profile.within_reach):
            far = deep.reaches(number, (None, None, None))
            ledger.close(
                "distance profile, within reach", own, (at * (nodes <= far[:, None])).sum(axis=0)
            )


def _absolute_limits(results, deep, ledger):
    rows = [
        r
        for r in results.rows
        if r.map in deep.maps and r.telescope and r.band and r.depth_median is not None
    ]
    assert len(rows) == len(results.absolute_limits)
    for row, one in zip(rows, results.absolute_limits):
        mean, sd = deep.maps[row.map].moments()
        ledger.same(
            "absolute limit, whose",
            (one.map, one.telescope, one.band),
            (row.map, row.telescope, row.band),
        )
        for own, distance in (
            (one.limit_near, mean - sd),
            (one.limit_mean, mean),
            (one.limit_far, mean + sd),
        ):
            value = None if distance <= 0 else row.depth_median - 5 * math.log10(distance) - 25
            ledger.close("absolute limit", own, value)


def _left_over(loaded, coverage, deep, ledger):
    """Cell by cell of the newest version: probability, and mean distance, that are left."""
    skymap = loaded.maps[-1]
    found = left_overs(loaded, coverage, skymap)
    plain = next(m for m in deep.campaign.maps if m.label == skymap.label)
    weight = flat(plain, deep.pixels.tolist(), deep.campaign.order)
    held = np.array([c[2] for c in plain.cells])
    orders, cells = (np.array([c[i] for c in plain.cells]) for i in (0, 1))
    taken = 1 - sum(weight.values())
    ledger.close("left over of coverage", found[None].remaining, taken)
    twin = deep.maps.get(skymap.label)
    assert set(found) == {None, *((s.name for s in deep.campaign.sources) if twin else ())}
    for number, source in enumerate(deep.campaign.sources if twin else ()):
        left = found[source.name]
        step = source.width == 0 and source.plateau == 1
        tolerance = EXACT if step else GRADUAL
        seen = twin.weight * deep.detected(number, skymap.label, (None, None, None))
        by_cell = held - np.bincount(twin.cell + 1, seen, held.size + 1)[1:]
        ledger.close("left over of a source", left.remaining, by_cell.sum(), tolerance)
        starts, stops = cell_to_span(orders, cells)
        own = left.skymap.probability.of_intervals(starts, stops) * left.remaining
        ledger.close("left over, cell by cell", own, by_cell, tolerance)
        if step:
            first = twin.weight * deep.detected(number, skymap.label, (None, None, None), 1)
            first = np.bincount(twin.cell + 1, first, held.size + 1)[1:]
            _mean_left(left.skymap, twin, first, by_cell, (starts, stops), left.remaining, ledger)


def _mean_left(rest, twin, first, by_cell, spans, remaining, ledger):
    """The mean distance left in each cell, whatever pieces the package has cut it into."""
    layer = rest.distance
    good = has_distance(layer.mu_mpc, layer.sigma_mpc, layer.norm_per_mpc2)
    mean = np.zeros(good.size)
    mean[good] = form_moments(layer.mu_mpc[good], layer.sigma_mpc[good])[0]
    home = np.argsort(spans[0])
    which = home[np.searchsorted(spans[0][home], rest.starts, side="right") - 1]
    own = np.bincount(which, rest.probability.amount * mean, by_cell.size) * remaining
    whole = twin.held * np.nan_to_num(twin.integral_of(1))
    some = twin.known & (by_cell > 1e-6 * twin.held)
    expected = (whole - first)[some] / by_cell[some]
    ledger.close("left over, mean distance", own[some] / by_cell[some], expected, 1e-6)
