"""Rows of like visits, against sums over every patch of the line for drawn choices.

The twin counts visits patch by patch with an array of exposures by patches; it
knows nothing of sets, rows, kinds or steps. Source of what is compared: the
definitions of coverage and of repeated visits alone (brute force).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.account import lay_coverage
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.covered import Coverage, TallySettings
from skytally.page_sets import PageSets, SetMerger
from skytally.patchwork import Patchwork
from skytally.skymap import Measure, SkyMap
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR, cell_to_span
from skytally.tally import tally_maps

ORDER = 6
LABELS = ("1 first", "2 update")


def skymap(label: str, seed: int) -> SkyMap:
    """A map of flat cells whose densities are drawn; some are zero."""
    rng = np.random.default_rng(seed)
    density = rng.exponential(size=12 << 2 * ORDER) ** 3
    density[rng.random(density.size) < 0.1] = 0.0
    density /= density.sum() * FULL_SKY_SR / density.size
    starts, stops = cell_to_span(ORDER, np.arange(density.size))
    return SkyMap(starts, stops, density, ORDER, label=label)


def night() -> tuple[Coverage, list[SkyMap]]:
    """Three telescopes, 60 exposures, many of them of the same few degrees."""
    rng = np.random.default_rng(41)
    cameras = {
        "Heron": MosaicCamera.rectangle(2.0, 1.5),
        "Plover": CircleCamera(0.8),
        "Avocet": MosaicCamera.rectangle(1.1, 1.1),
    }
    telescopes = []
    for name, camera in cameras.items():
        ra, dec = rng.uniform(40, 44, 20).round(1), rng.uniform(-12, -9, 20).round(1)
        ra[10:15], dec[10:15] = ra[:5], dec[:5]  # the same fields once more
        log = log_table(
            *(name, ra, dec),
            start=EVENT_MJD + np.sort(rng.uniform(0.05, 2.1, 20)).round(3),
            band=rng.choice(["g", "r", "i"], 20).astype(object),
        )
        telescopes.append(telescope(name, camera, log))
    maps = [skymap(label, seed) for label, seed in zip(LABELS, (5, 6))]
    return lay_coverage(campaign(telescopes, maps)), maps


@pytest.fixture(scope="module")
def laid() -> tuple[Coverage, list[SkyMap]]:
    return night()


def gathered(laid: tuple[Coverage, list[SkyMap]], most_bytes: float) -> PageSets:
    coverage, maps = laid
    merger = SetMerger(coverage, len(maps), EVENT_MJD, most_bytes)
    settings = TallySettings(EVENT_MJD, 2, 30.0)
    tally_maps(coverage, [(m, None) for m in maps], settings, merger.witness)
    return merger.take(LABELS)


@dataclass
class Choice:
    """What a reader of the page may choose; the cut is a step."""

    telescopes: set[int]
    bands: set[int]
    step: int
    visits: int


def choices(sets: PageSets, coverage: Coverage, number: int, seed: int) -> list[Choice]:
    rng = np.random.default_rng(seed)
    o = coverage.observations
    most = sets.most_visits or 4
    return [
        Choice(
            set(np.flatnonzero(rng.random(len(o.telescopes)) < 0.7).tolist()),
            set(np.flatnonzero(rng.random(len(o.bands)) < 0.7).tolist()),
            int(rng.integers(sets.kinds.step_mjd.size)),
            int(rng.integers(1, most + 1)),
        )
        for _ in range(number)
    ]


def of_rows(sets: PageSets, choice: Choice) -> np.ndarray:
    """Rows that a choice visited often enough, as a script on the page finds them."""
    kinds = sets.kinds
    chosen = np.array(
        [
            t in choice.telescopes and b in choice.bands and step <= choice.step
            for t, b, step in zip(kinds.telescope, kinds.band, kinds.step)
        ]
    )
    return np.array(
        [
            chosen[sets.members[low:high]].sum() >= choice.visits
            for low, high in zip(sets.offsets, sets.offsets[1:])
        ]
    )


def of_patches(
    patchwork: Patchwork, coverage: Coverage, sets: PageSets, choice: Choice
) -> np.ndarray:
    """Patches that a choice visited often enough, exposure by exposure."""
    o = coverage.observations
    visits = np.zeros(patchwork.starts.size, dtype=int)
    holders = [
        set(patchwork.members[low:high].tolist())
        for low, high in zip(patchwork.offsets, patchwork.offsets[1:])
    ]
    until = sets.kinds.step_mjd[choice.step] + 1e-9
    for e in range(len(o)):
        if o.telescope[e] in choice.telescopes and o.band[e] in choice.bands:
            if o.end_mjd[e] > until:
                continue
            holds = np.array([int(o.footprint[e]) in held for held in holders])
            visits += holds[patchwork.group]
    return visits >= choice.visits


def of_measure(patchwork: Patchwork, covered: np.ndarray, measure: Measure) -> float:
    amounts = measure.of_intervals(patchwork.starts, patchwork.stops)
    return float(amounts[covered].sum())


# A limit under which everything is told apart, no brackets, and less and less.
@pytest.mark.parametrize("most_bytes", [4e6, 4e4, 1.2e4, 6e3, 3e3, 100.0])
def test_every_choice_is_the_sum_over_the_patches(
    laid: tuple[Coverage, list[SkyMap]], most_bytes: float
) -> None:
    coverage, maps = laid
    sets = gathered(laid, most_bytes)
    patchworks = (coverage.centre, coverage.inner, coverage.outer)
    for choice in choices(sets, coverage, 12, 3):
        rows = of_rows(sets, choice)
        for form in range(len(sets.area_deg2)):
            patchwork = patchworks[form]
            patches = of_patches(patchwork, coverage, sets, choice)
            length = (patchwork.stops - patchwork.starts)[patches].sum()
            area = float(length) * FULL_SKY_SR / float(12 << 58) * DEG2_PER_SR
            assert sets.area_deg2[form][rows].sum() == pytest.approx(area, rel=1e-9, abs=1e-12)
            for one in maps:
                expected = of_measure(patchwork, patches, one.probability)
                found = sets.worth[one.label].probability[form][rows].sum()
                assert found == pytest.approx(expected, rel=1e-9, abs=1e-12)
        patches = of_patches(coverage.centre, coverage, sets, choice)
        for one in maps:
            worth = sets.worth[one.label]
            for found, measure, unit in (
                (worth.probability_50, one.restricted(0.5), 1.0),
                (worth.probability_90, one.restricted(0.9), 1.0),
                (worth.area_90_deg2, Measure.area(one.credible_region(0.9)), DEG2_PER_SR),
            ):
                expected = of_measure(coverage.centre, patches, measure) * unit
                assert found[rows].sum() == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_less_is_told_apart_as_room_runs_out(laid: tuple[Coverage, list[SkyMap]]) -> None:
    found = [gathered(laid, limit) for limit in (4e6, 4e4, 1.2e4, 6e3, 3e3, 100.0)]
    assert found[0].is_whole
    assert found[0].has_brackets
    assert not found[-1].is_whole
    assert (found[-1].most_visits, found[-1].step_hours) == (1, np.inf)
    assert found[-1].kinds.step_mjd.size == 1
    rows = [sets.rows for sets in found[1:]]
    assert rows == sorted(rows, reverse=True)
    assert len({(s.most_visits, s.step_hours, s.has_brackets) for s in found}) >= 4


def test_steps_hold_what_ended_by_their_end(laid: tuple[Coverage, list[SkyMap]]) -> None:
    coverage, _ = laid
    o = coverage.observations
    for limit in (4e6, 1.2e4, 6e3, 3e3):
        kinds = gathered(laid, limit).kinds
        step = kinds.step[kinds.of_exposure]
        end = o.end_mjd[:, None] <= kinds.step_mjd + 1e-9
        assert (np.diff(kinds.step_mjd) > 0).all()
        assert np.array_equal(step, end.argmax(axis=1))
        assert np.array_equal(kinds.telescope[kinds.of_exposure], o.telescope)
        assert np.array_equal(kinds.band[kinds.of_exposure], o.band)


def test_a_field_without_exposure_of_a_choice_is_in_no_row_of_it(
    laid: tuple[Coverage, list[SkyMap]],
) -> None:
    coverage, _ = laid
    sets = gathered(laid, 4e6)
    nothing = Choice(set(), {0, 1, 2}, sets.kinds.step_mjd.size - 1, 1)
    assert not of_rows(sets, nothing).any()
    rings = [len(rings) for rings in coverage.footprints.outlines]
    assert [len(fields) for fields in sets.outlined] == rings
    for number, fields in enumerate(sets.outlined):
        assert (coverage.footprints.telescope[fields] == number).all()
