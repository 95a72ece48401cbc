"""Every figure of the report, with the sentences that go with it, from the results alone.

Sentences and sizes are cheap and come first, as sketches; drawing takes its time.
"""

from __future__ import annotations

from dataclasses import replace

from skytally.depth_chart import depth_chart_of
from skytally.figure_style import Drawing, Sketch
from skytally.limit_figures import limit_sketches
from skytally.plots import (
    CREDIT_IN,
    MOST_BANDS,
    MOST_LABELS,
    TIMELINE_IN,
    credit_figure,
    depth_bands,
    depth_figure,
    depth_height,
    telescope_timelines,
    timeline_figure,
)
from skytally.results import Results
from skytally.sky_chart import (
    versions_figure,
    versions_height,
    whole_sky_figure,
    whole_sky_height,
    zoom_figure,
    zoom_height,
)
from skytally.sky_parts import Part, Zoom, zooms
from skytally.wording import (
    NBSP,
    area_text,
    count,
    hours_text,
    join_words,
    limit_rows,
    limit_terms,
    magnitude_text,
    percent,
    version_text,
)

__all__ = ["draw_figures", "sketch_figures"]


def draw_figures(results: Results) -> dict[str, Drawing]:
    """Draw what the results have to show: every one of `sketch_figures`."""
    return {name: sketch.draw() for name, sketch in sketch_figures(results).items()}


def sketch_figures(results: Results) -> dict[str, Sketch]:
    """Return what the results have to show, not yet drawn, in the order of the report.

    Parameters
    ----------
    results : Results
        With at least one map version.

    Returns
    -------
    dict of str to Sketch
        Always ``whole-sky`` and ``zoom``; ``versions`` with several map
        versions; ``timeline`` where any probability is covered, ``credit``
        where several telescopes did; ``depth`` where any exposure has a limit;
        those of `limit_sketches` where the newest map carries distances.
    """
    shown = zooms(results.sky.maps[-1])
    sketches = [_whole_sky(results, shown), _zoom(results, shown)]
    if len(results.maps) > 1:
        sketches.append(_versions(results, shown[0].part))
    if results.row().probability > 0:
        sketches.append(_timeline(results))
    sharing = [
        t for t in results.telescopes if results.row(telescope=t.name).probability_credit > 0
    ]
    if len(sharing) > 1:
        sketches.append(_credit(results))
    if depth_bands(results):
        sketches.append(_depth(results))
        sketches += _depth_chart(results, shown[0].part)
    sketches += limit_sketches(results)
    return {sketch.name: sketch for sketch in sketches}


def _whole_sky(results: Results, shown: list[Zoom]) -> Sketch:
    total = results.row()
    version = version_text(results.newest.version)
    used = sum(bool(region) for region in results.sky.covered)
    if total.probability > 0:
        # The probability covered stands above it on the first page.
        outside = total.area_deg2 - total.area_in_90_deg2
        place = f"side the 90{NBSP}% region of {version}"
        finding = (
            f"{percent(outside / total.area_deg2, 0)} of the area observed lies out{place}."
            if outside > 0
            else f"All of the area observed lies in{place}."
        )
    else:
        finding = f"No footprint holds any of the probability of {version}."
    return Sketch(
        "whole-sky",
        "The whole sky",
        f"{finding} Mollweide projection, equal area; right ascension increases to the left.",
        f"Whole-sky chart of {version} with the footprints of "
        f"{count('telescope', used, words=True)}. {finding}",
        whole_sky_height(results),
        lambda: whole_sky_figure(results, shown),
    )


def _zoom(results: Results, shown: list[Zoom]) -> Sketch:
    total = results.row()
    area = results.newest.area_90_deg2
    region = f"90{NBSP}% region"
    finding = (
        f"What is covered of the {region} holds {percent(total.probability_in_90)} of all "
        "probability."
        if total.area_in_90_deg2 > 0
        else f"Nothing of the {area_text(area, area, area)} of the {region} is covered."
    )
    if len(shown) > 1:
        first, second = (percent(zoom.part.probability, 0) for zoom in shown)
        finding += f" It has separate parts: A holds {first} of all probability, B {second}."
    return Sketch(
        "zoom",
        f"The {region}",
        f"{finding} Lambert equal-area projection; the bar is true to scale.",
        f"Chart of the {region} with its contours and the footprints of each telescope. {finding}",
        zoom_height(results, shown),
        lambda: zoom_figure(results, shown),
    )


def _versions(results: Results, middle: Part) -> Sketch:
    shares = [
        f"{percent(results.row(map=m.version).probability)} of “{m.version}”" for m in results.maps
    ]
    finding = f"The same exposures cover {join_words(shares)}."
    return Sketch(
        "versions",
        "The same footprints on every map version",
        f"{finding} Full line: 50{NBSP}% region; dashed: 90{NBSP}% region; "
        "filled: everything observed.",
        f"A small whole-sky chart for each map version. {finding}",
        versions_height(results),
        lambda: versions_figure(results, middle),
    )


def _timeline(results: Results) -> Sketch:
    total = next(
        line
        for line in results.timelines
        if line.map == results.newest.version
        and (line.telescope, line.band, line.night) == (None, None, None)
    )
    final = total.probability[-1]
    half = next(h for h, p in zip(total.hours, total.probability) if p >= final / 2)
    last = hours_text(total.hours[-1])
    finding = (
        f"Half of the {percent(final)} finally covered was reached {hours_text(half)} after the "
        f"event, the last new sky at {last}."
        if len(total.hours) > 1
        else f"All of the {percent(final)} covered was reached at once, {last} after the event."
    )
    lines = telescope_timelines(results)
    note = (
        f" Of {count('telescope', len(lines))}, the most productive are labelled."
        if len(lines) + 1 > MOST_LABELS
        else ""
    )
    return Sketch(
        "timeline",
        "Probability against time",
        f"{finding} Each telescope counts all it covered, shared or not; dotted uprights: "
        f"map versions issued. Probabilities are those of "
        f"{version_text(results.newest.version)}.{note} Every step stands in tally.json.",
        f"Step plot of the probability covered against hours since the event. {finding}",
        TIMELINE_IN,
        lambda: timeline_figure(results),
    )


def _credit(results: Results) -> Sketch:
    rows = [results.row(telescope=t.name) for t in results.telescopes]
    best = max(rows, key=lambda row: row.probability_credit)
    total = results.row().probability
    alone = sum(row.probability_unique for row in rows)
    finding = (
        f"{best.telescope} has the largest share, {percent(best.probability_credit / total, 0)} of "
        f"what is covered; {percent(min(alone / total, 1.0), 0)} of it was seen by one "
        "telescope alone."
    )
    return Sketch(
        "credit",
        "Who covered it",
        f"{finding} Probability that several telescopes covered is shared equally among them, "
        f"so that the shares add up to the total.",
        f"A bar of the covered probability divided among the telescopes. {finding}",
        CREDIT_IN,
        lambda: credit_figure(results),
    )


def _depth(results: Results) -> Sketch:
    rows = depth_bands(results)
    depth, band = max((e.depth, str(e.band)) for e in results.exposures if e.depth is not None)
    without = sum(e.depth is None for e in results.exposures)
    finding = f"The deepest exposure reached {magnitude_text(depth)} in {band}"
    finding += (
        f"; {count('exposure', without)} of {len(results.exposures)} came without a limit."
        if without
        else "; every exposure has a limit."
        if len(results.exposures) > 1
        else "; it is the only one."
    )
    note = f" The {MOST_BANDS} most used bands are shown." if len(rows) > MOST_BANDS else ""
    # Exposures are listed as logged; only the sums over them are corrected.
    settings = replace(results.settings, extinction="not corrected for Galactic extinction")
    return Sketch(
        "depth",
        "Limits against time",
        f"{finding} One mark per exposure: {limit_terms(settings)}.{note} Every exposure stands in "
        "tally.json.",
        f"Plots of limiting magnitude against hours since the event, one per band. {finding}",
        depth_height(results),
        lambda: depth_figure(results),
    )


def _depth_chart(results: Results, part: Part) -> list[Sketch]:
    """Return the chart of depths, where any place has a limit."""
    terms = limit_terms(results.settings, limit_rows(results))
    chart = depth_chart_of(results, terms, part)
    if chart is None:
        return []
    depths = [chart.deepest.band_depth(band) for band in chart.bands]
    most = max(depths, key=lambda depth: depth.area_deg2)
    area = area_text(most.area_deg2, most.area_deg2, most.area_deg2)
    sky = f"In {most.band}, the band with most sky," if len(depths) > 1 else f"In {most.band},"
    finding = f"{sky} {area} have a limit: "
    finding += (
        f"half of it reaches {magnitude_text(most.over_50)}, 90{NBSP}% "
        f"{magnitude_text(most.over_90)}; the deepest place {magnitude_text(most.deepest)}."
        if most.shallowest < most.deepest
        else f"{magnitude_text(most.deepest)} everywhere."
    )
    note = (
        f" The {MOST_BANDS} most used bands are shown."
        if len(depth_bands(results)) > MOST_BANDS
        else ""
    )
    scale = ", each band on a scale of its own" if len(depths) > 1 else ""
    if chart.is_open:
        scale += "; the palest shade takes in all that is shallower"
    lines = chart.lines_text(part, version_text(results.newest.version))
    return [
        Sketch(
            "depth-chart",
            "How deep, place by place",
            f"{finding} Each place by its deepest single exposure{scale}.{lines}{note}",
            f"Charts of the deepest limit of each place, one per band. {finding}",
            chart.height_in,
            lambda: chart.draw(results.sky.maps[-1]),
        )
    ]
