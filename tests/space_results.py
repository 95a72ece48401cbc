"""Gives any invented `Results` a third dimension; numbers are made up, but add up."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from skytally.exclusion import (
    AbsoluteLimit,
    DepthHistogram,
    DistanceProfile,
    ExclusionCurve,
    FadingPlane,
)
from skytally.findings import Finding
from skytally.limits import SourceRow
from skytally.results import Results, SourceInfo
from skytally.tally import TallyRow

MEAN, SD = 142.3, 31.2
_STEP = "detection certain down to the limit and impossible beyond; seen means in one exposure"
SOURCES = (
    SourceInfo(
        "Steady",
        "Steady: absolute AB magnitude -16 in every band, constant from the event on; "
        f"no K-correction; {_STEP}.",
    ),
    SourceInfo(
        "Ember",
        "Ember: peak absolute AB magnitude -17 in every band, fading by 0.5 mag/day from the "
        f"event on; flat-spectrum K-correction -2.5 log10(1+z); {_STEP}.",
    ),
)
FINDING = Finding(
    "map-distance-header",
    "caution",
    "2 update",
    (3, 4),
    "The header of map version 2 update states DISTMEAN = 150 Mpc, its own cells give 142.3 Mpc.",
    "The value of the cells is used.",
    "Ask the issuer of the map which of the two is right.",
)


def with_space(
    results: Results,
    *,
    sources: Sequence[SourceInfo] = SOURCES,
    findings: Sequence[Finding] = (FINDING,),
    middle: float = -14.747,
    stretch: float = 1.0,
) -> Results:
    """Return the results as they would be if every map carried distances.

    Parameters
    ----------
    results : Results
        Without a third dimension.
    sources, findings : sequences
        What was asked about, and what the check noticed.
    middle : float
        Absolute magnitude at which every exclusion curve comes to half its height.
    stretch : float
        How much higher than the covered probability the exclusion curves come, so
        that few exposures can rule something out.
    """
    versions = [m.version for m in results.maps]
    bands = sorted({row.band for row in results.rows if row.band is not None})
    return replace(
        results,
        maps=tuple(
            replace(
                m,
                distance_mean_mpc=MEAN,
                distance_sd_mpc=SD,
                volume_50_mpc3=1.2e5,
                volume_90_mpc3=8.9e5,
                volume_50_comoving_mpc3=1.1e5,
                volume_90_comoving_mpc3=7.9e5,
                probability_without_distance=0.0014,
            )
            for m in results.maps
        ),
        rows=tuple(
            replace(
                row,
                volume_90_covered_mpc3=8.9e5 * row.probability,
                volume_90_covered_comoving_mpc3=7.9e5 * row.probability,
            )
            for row in results.rows
        ),
        findings=tuple(findings),
        sources=tuple(sources),
        source_rows=tuple(
            _source_row(row, source.name, 0.9 - 0.1 * number)
            for number, source in enumerate(sources)
            for row in results.rows
        ),
        exclusions=tuple(
            _curve(v, band, stretch * results.row(map=v, band=band).probability, middle)
            for v in versions
            for band in (None, *bands)
        ),
        fading_planes=tuple(_plane(v, results.row(map=v).probability, middle) for v in versions),
        absolute_limits=tuple(
            _absolute(row)
            for row in results.rows
            if row.telescope is not None and row.band is not None and row.depth_median is not None
        ),
        distance_profiles=tuple(
            _profile(v, results.row(map=v).probability, [s.name for s in sources]) for v in versions
        ),
        depth_histograms=tuple(
            _histogram(row)
            for row in results.rows
            if row.telescope is None and row.band is not None and row.depth_median is not None
        ),
    )


def _source_row(row: TallyRow, source: str, share: float) -> SourceRow:
    covered = row.probability
    seen = share * covered
    without = 0.01 * covered
    return SourceRow(
        row.map,
        row.telescope,
        row.band,
        row.night,
        source,
        *((96.2, 302.4, 469.9) if covered > 0 else (None, None, None)),
        probability=seen,
        probability_low=seen * 0.998,
        probability_high=seen * 1.002,
        probability_beyond=covered - seen - without,
        probability_without_distance=without,
        volume_mpc3=8.18e5 * share * row.area_deg2,
        volume_comoving_mpc3=6.57e5 * share * row.area_deg2,
        volume_90_covered_mpc3=8.9e5 * covered,
        volume_90_covered_comoving_mpc3=7.9e5 * covered,
        volume_90_within_reach_mpc3=8.9e5 * seen,
        volume_90_within_reach_comoving_mpc3=7.9e5 * seen,
    )


def _rise(magnitude: np.ndarray, middle: float) -> np.ndarray:
    return 1 / (1 + np.exp((magnitude - middle) / 0.4))


def _curve(version: str, band: str | None, highest: float, middle: float) -> ExclusionCurve:
    magnitude = np.arange(-26.0, -7.9, 0.25)
    # Inverse of the rise: where highest / (1 + exp(x / 0.4)) is the level.
    crossing = [
        middle + 0.4 * float(np.log(highest / level - 1)) if highest > level else None
        for level in (0.5, 0.9)
    ]
    return ExclusionCurve(
        version,
        band,
        tuple(map(float, magnitude)),
        tuple(map(float, highest * _rise(magnitude, middle))),
        *crossing,
        highest,
    )


def _plane(version: str, highest: float, middle: float) -> FadingPlane:
    peak, fade = np.linspace(-20.0, -10.5, 20), np.linspace(0.0, 1.9, 20)
    value = [tuple(map(float, highest * _rise(peak + rate, middle))) for rate in fade]
    return FadingPlane(version, tuple(map(float, peak)), tuple(map(float, fade)), tuple(value))


def _absolute(row: TallyRow) -> AbsoluteLimit:
    near, far = MEAN - SD, MEAN + SD
    assert row.depth_median is not None
    at = [row.depth_median - 5 * float(np.log10(d * 1e5)) for d in (near, MEAN, far)]
    return AbsoluteLimit(
        row.map,
        row.telescope or "",
        row.band or "",
        row.depth_median,
        row.extinction_median,
        *(near, MEAN, far),
        *at,
    )


def _profile(version: str, covered: float, sources: Sequence[str]) -> DistanceProfile:
    distance = np.linspace(0.0, MEAN + 5 * SD, 121)
    whole = np.exp(-0.5 * ((distance - MEAN) / SD) ** 2) / SD / np.sqrt(2 * np.pi)
    within = np.where(distance < 200.0, covered * whole, 0.5 * covered * whole)
    return DistanceProfile(
        version,
        tuple(map(float, distance)),
        tuple(map(float, whole)),
        tuple(map(float, covered * whole)),
        tuple(sources),
        tuple(tuple(map(float, within)) for _ in sources),
    )


def _histogram(row: TallyRow) -> DepthHistogram:
    shares = (0.1, 0.7, 0.1)
    return DepthHistogram(
        row.map,
        row.band or "",
        (20.5, 20.75, 21.0, 21.25),
        tuple(share * row.probability for share in shares),
        0.1 * row.probability,
    )
