"""The figures of depth and distance, with the sentences that go with them."""

from __future__ import annotations

import numpy as np

from skytally.exclusion import DepthHistogram, DistanceProfile
from skytally.figure_style import Sketch
from skytally.limit_plots import (
    DISTANCE_IN,
    EXCLUSION_IN,
    FADING_IN,
    MOST_SOURCES,
    distance_figure,
    exclusion_figure,
    fading_figure,
    fading_levels,
    histogram_figure,
    histogram_height,
)
from skytally.plots import MOST_BANDS, depth_bands
from skytally.results import Results
from skytally.wording import (
    NBSP,
    bright_magnitude,
    join_words,
    limit_rows,
    limit_terms,
    newest_curves,
    number_text,
    percent,
    reach_text,
    version_text,
)

__all__ = ["limit_sketches"]

_NUMBERS = "The numbers stand in tally.json."


def limit_sketches(results: Results) -> list[Sketch]:
    """Return what a newest map with distances has to show: nothing on a map without.

    Returns
    -------
    list of Sketch
        ``depth-histogram`` where any covered place has a limit; ``distance``
        where anything is covered; ``exclusion`` and ``fading`` where any
        source could have been seen.
    """
    newest = results.newest.version
    sketches = []
    histograms = {h.band: h for h in results.depth_histograms if h.map == newest}
    bands = [row.band for row in depth_bands(results)]
    ordered = [histograms[band] for band in bands if band in histograms]
    ordered = [h for h in ordered if sum(h.probability) > 0]
    if ordered:
        sketches.append(_histogram(results, ordered))
    profile = next((p for p in results.distance_profiles if p.map == newest), None)
    if profile is not None and max(profile.covered, default=0.0) > 0:
        sketches.append(_distance(results, profile))
    curves = newest_curves(results)
    if curves and curves[0].highest > 0:
        sketches.append(_exclusion(results))
    return sketches + _fading(results)


def _terms(results: Results) -> str:
    return limit_terms(results.settings, limit_rows(results))


def _histogram(results: Results, shown: list[DepthHistogram]) -> Sketch:
    largest = max(shown, key=lambda h: sum(h.probability))
    held = np.array(largest.probability)
    peak = int(np.argmax(held))
    low, high = largest.edges[peak], largest.edges[peak + 1]
    without = sum(h.without_limit for h in shown)
    share = float(held[peak])
    most = "most of it" if share > held.sum() / 2 else f"the largest part of it ({percent(share)})"
    finding = (
        f"In {largest.band}, {percent(float(held.sum()))} of all probability has a limit, {most} "
        f"between {number_text(low, 2)} and {number_text(high, 2)}{NBSP}mag."
    )
    if without > 0:
        finding += " What was covered only by exposures without a limit is stated in each panel."
    note = f" The {MOST_BANDS} most used bands are shown." if len(shown) > MOST_BANDS else ""
    return Sketch(
        "depth-histogram",
        "How deep over the probability",
        f"{finding} Probability of {version_text(results.newest.version)} by the deepest single "
        f"exposure of each place: {_terms(results)}.{note} {_NUMBERS}",
        f"Histograms of covered probability against limiting magnitude, one per band. {finding}",
        histogram_height(shown),
        lambda: histogram_figure(shown),
    )


def _distance(results: Results, profile: DistanceProfile) -> Sketch:
    distance, whole = np.array(profile.distance_mpc), np.array(profile.whole)
    most = float(distance[int(np.argmax(whole))])
    finding = (
        f"The distance is most probably near {reach_text(most)}{NBSP}Mpc, and "
        f"{percent(results.row().probability)} of the probability lies in covered directions"
    )
    rows = {
        row.source: row
        for row in results.source_rows
        if row.map == profile.map and (row.telescope, row.band, row.night) == (None, None, None)
    }
    seen = [
        f"{percent(rows[name].probability)} for {name}"
        for name in profile.sources[:MOST_SOURCES]
        if name in rows
    ]
    finding += f"; within reach is {join_words(seen)}." if seen else "."
    more = len(profile.sources) - MOST_SOURCES
    note = f" The first {MOST_SOURCES} sources are shown." if more > 0 else ""
    reach = (
        " Within reach: out to where the exposures of each place would have shown the source."
        if seen
        else ""
    )
    return Sketch(
        "distance",
        "How far",
        f"{finding} All directions of {version_text(profile.map)} together.{reach}{note} "
        f"{_NUMBERS}",
        f"Plot of probability per megaparsec against luminosity distance. {finding}",
        DISTANCE_IN,
        lambda: distance_figure(profile),
    )


def _exclusion(results: Results) -> Sketch:
    curves = newest_curves(results)
    reached = [
        f"{bright_magnitude(curve.magnitude_50)} in {curve.band}"
        for curve in curves[1:]
        if curve.magnitude_50 is not None
    ]
    every = curves[0]
    if every.magnitude_50 is not None:
        finding = (
            f"A source brighter than {bright_magnitude(every.magnitude_50)} in every band would "
            "have been seen over half of all probability"
        )
        finding += f"; in single bands half takes {join_words(reached)}." if reached else "."
    else:
        finding = (
            f"However bright, no source would have been seen over more than "
            f"{percent(every.highest)} of all probability."
        )
    if every.magnitude_50 is not None and every.magnitude_90 is None:
        finding += (
            f" 90{NBSP}% is not reached at any brightness: only {percent(every.highest)} is "
            "covered with a limit and a distance."
        )
    note = " The bands that cover most are shown." if len(curves) - 1 > MOST_BANDS else ""
    return Sketch(
        "exclusion",
        "What is ruled out",
        f"{finding} For a constant source, without K-correction, seen in one exposure that is "
        f"certain down to its limit: {_terms(results)}.{note} {_NUMBERS}",
        f"Plot of detectable probability against absolute magnitude, a line per band. {finding}",
        EXCLUSION_IN,
        lambda: exclusion_figure(curves),
    )


def _fading(results: Results) -> list[Sketch]:
    plane = next((p for p in results.fading_planes if p.map == results.newest.version), None)
    if plane is None or not fading_levels(plane):
        return []
    value = np.array(plane.probability)
    # The peak that half of the best takes, for the slowest and the fastest fade.
    half = value.max() / 2
    takes = []
    for row in (0, -1):
        enough = [peak for peak, p in zip(plane.peak, value[row]) if p >= half]
        if enough:
            rate = f"{plane.fade_per_day[row]:g}"
            takes.append(f"{number_text(max(enough), 1)} at {rate}{NBSP}mag/day")
    finding = (
        f"To be detectable over {percent(float(half))} of all probability, half of the most that "
        f"this plane reaches, a source must start at about {join_words(takes)}."
    )
    return [
        Sketch(
            "fading",
            "Sources that fade",
            f"{finding} Contours: detectable probability of a source that fades linearly from its "
            f"absolute magnitude at the event, the same in every band, without K-correction, seen "
            f"in one exposure that is certain down to its limit: {_terms(results)}. {_NUMBERS}",
            f"Contour plot of detectable probability against magnitude and fading rate. {finding}",
            FADING_IN,
            lambda: fading_figure(plane),
        )
    ]
