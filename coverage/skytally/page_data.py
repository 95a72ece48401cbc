"""What the page carries so that a script can tally a choice: numbers packed, words made here.

The columns of `PageSets` travel as one block of bytes, deflated and in base64.
Numbers are little-endian; those of more than one byte are cut into planes, all
first bytes, then all second ones, for like bytes side by side deflate best.
"""

from __future__ import annotations

import base64
import json
import re
import zlib
from collections.abc import Mapping, Sequence
from datetime import datetime, timedelta
from typing import Any

import numpy as np
from markupsafe import Markup
from numpy.typing import NDArray

from skytally.circular import render_circular
from skytally.figure_style import Drawing, style_of
from skytally.page_charts import chart_overlays
from skytally.page_sets import MapWorth, PageSets
from skytally.results import Results
from skytally.times import hours_since, mjd_to_iso
from skytally.wording import hours_text, limit_terms, row_probability, utc_text

__all__ = ["page_data"]

Floats = NDArray[np.float64]

# How a row's places lie to a credible region.
_OUTSIDE, _INSIDE, _ACROSS = range(3)
_MJD_EPOCH = datetime(1858, 11, 17)
# Two sums of the same cells in another order agree this closely.
_SAME = 1e-12


def page_data(results: Results, figures: Mapping[str, Drawing]) -> Markup | None:
    """Return the data of the page as JSON fit for a script element; None without rows.

    Parameters
    ----------
    results : Results
        With the sets of visits in ``sky``.
    figures : mapping
        What `draw_figures` returned: outlines are laid over its charts.
    """
    sets = results.sky.sets
    if sets is None or not results.exposures:
        return None
    block = _Block(whole=sets.is_whole)
    data = {
        "event": {"name": results.event.name, "mjd": results.event.time_mjd},
        "settings": _settings(results),
        "maps": [
            {
                "version": m.version,
                "hours": m.hours,
                "area90": m.area_90_deg2,
                "digits": _decimals(row_probability(results.row(map=m.version), results.settings)),
            }
            for m in results.maps
        ],
        "telescopes": [
            {"name": t.name, "colour": style_of(index).colour, "dash": _dashes(index)}
            for index, t in enumerate(results.telescopes)
        ],
        "bands": _names(row.band for row in results.rows),
        "nights": _names(row.night for row in results.rows),
        "exposures": _exposures(results, sets),
        "kinds": _kinds(sets),
        "steps": _steps(sets, results.event.time_mjd),
        "stepHours": sets.step_hours if np.isfinite(sets.step_hours) else None,
        "visits": sets.most_visits or _most_visits(sets),
        "whole": sets.is_whole,
        "brackets": sets.has_brackets,
        "pieces": np.maximum(sets.pieces, 1).tolist() if sets.has_brackets else None,
        "charts": chart_overlays(results, figures),
        "circular": render_circular(results),
    }
    _pack(block, sets, [sets.worth[m.version] for m in results.maps])
    data |= {"columns": block.columns, "block": block.text()}
    text = json.dumps(data, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    # Inside a script element nothing is escaped, so no tag may begin there.
    return Markup(text.replace("<", "\\u003c").replace("\u2028", "\\u2028"))


def _names(values: Any) -> list[str]:
    """Return the distinct names, in the order of the rows."""
    return list(dict.fromkeys(value for value in values if value is not None))


def _dashes(index: int) -> str:
    """Return the dashes of a telescope's line as SVG has them."""
    line = style_of(index).line
    return "none" if isinstance(line, str) else " ".join(f"{part:g}" for part in line[1])


def _indices(values: Sequence[str | None], names: Sequence[str]) -> list[int]:
    """Return where each value stands among the names, −1 where it does not."""
    place = {name: index for index, name in enumerate(names)}
    return [-1 if value is None else place.get(value, -1) for value in values]


def _decimals(text: str) -> int:
    """Return the decimals of the first number in a text."""
    number = re.search(r"\d+(?:\.(\d+))?", text)
    return 0 if number is None or number[1] is None else len(number[1])


def _settings(results: Results) -> dict[str, Any]:
    settings = results.settings
    return {
        "revisitVisits": settings.revisit_visits,
        # As the tally compares: a microsecond of slack.
        "revisitDays": settings.revisit_gap_minutes / 1440.0 - 1e-11,
        "revisitMinutes": settings.revisit_gap_minutes,
        "bracketTarget": settings.bracket_target,
        "terms": limit_terms(settings),
    }


def _exposures(results: Results, sets: PageSets) -> dict[str, Any]:
    """Return what the page says of single exposures, in the order of the results."""
    nights = _names(row.night for row in results.rows)
    versions = [m.version for m in results.maps]
    return {
        "name": [e.exposure for e in results.exposures],
        "start": [e.start for e in results.exposures],
        "end": [e.end for e in results.exposures],
        "night": _indices([e.night for e in results.exposures], nights),
        "force": _indices([e.map_in_force for e in results.exposures], versions),
        "kind": sets.kinds.of_exposure.tolist(),
        "footprint": sets.footprint.tolist(),
        "depth": [round(float(d), 6) if np.isfinite(d) else None for d in sets.depth],
    }


def _kinds(sets: PageSets) -> dict[str, Any]:
    kinds = sets.kinds
    return {
        "telescope": kinds.telescope.tolist(),
        "band": kinds.band.tolist(),
        "night": kinds.night.tolist(),
        "step": kinds.step.tolist(),
        "start": kinds.start_mjd.tolist() if sets.is_whole else None,
    }


def _steps(sets: PageSets, event_mjd: float) -> list[dict[str, Any]]:
    """Return when each step ends: as a link states it, and in words."""
    found = []
    for mjd in sets.kinds.step_mjd.tolist():
        hours = hours_since(mjd, event_mjd)
        # To the millisecond: exposures that ended within the same second are two steps.
        until = _MJD_EPOCH + timedelta(milliseconds=round(mjd * 86_400_000))
        found.append(
            {
                "until": f"{until.isoformat(timespec='milliseconds')}Z",
                "hours": hours,
                "text": utc_text(mjd_to_iso(mjd)),
                "since": hours_text(hours),
            }
        )
    return found


def _most_visits(sets: PageSets) -> int:
    """Return the most visits that any place had, or ten: what may be asked for."""
    return max(1, min(10, int(np.diff(sets.offsets).max(initial=1))))


class _Block:
    """Columns of numbers, one after the other."""

    def __init__(self, *, whole: bool) -> None:
        self.columns: list[tuple[str, str, int]] = []
        self._float = "<f8" if whole else "<f4"
        self._parts: list[bytes] = []

    def floats(self, name: str, values: Floats) -> None:
        """Add a column of numbers with all digits, or with seven where there are many rows."""
        self._add(name, values.astype(self._float))

    def counts(self, name: str, values: NDArray[Any]) -> None:
        """Add a column of whole numbers from 0, as narrow as holds them."""
        widest = int(values.max(initial=0))
        self._add(
            name, values.astype("u1" if widest < 1 << 8 else "<u2" if widest < 1 << 16 else "<u4")
        )

    def _add(self, name: str, values: NDArray[Any]) -> None:
        self.columns.append((name, values.dtype.str.lstrip("<|"), int(values.size)))
        planes = values.reshape(-1, 1).view(np.uint8).reshape(values.size, values.itemsize).T
        self._parts.append(planes.tobytes())

    def text(self) -> str:
        """Return all of it, deflated, in base64."""
        return base64.b64encode(zlib.compress(b"".join(self._parts), 9)).decode()


def _pack(block: _Block, sets: PageSets, worths: list[MapWorth]) -> None:
    """Add the rows' members and all that they are worth."""
    count = np.diff(sets.offsets)
    block.counts("count", count)
    step = np.diff(sets.members, prepend=0)
    first = sets.offsets[:-1][count > 0]
    step[first] = sets.members[first]
    block.counts("members", step)
    for form, area in enumerate(sets.area_deg2):
        block.floats(f"area{form}", area)
    for number, worth in enumerate(worths):
        for form, probability in enumerate(worth.probability):
            block.floats(f"map{number}.p{form}", probability)
        _pack_regions(block, f"map{number}", sets.area_deg2[0], worth)
        if sets.has_brackets:
            block.floats(f"map{number}.strip", worth.strip)


def _pack_regions(block: _Block, name: str, area: Floats, worth: MapWorth) -> None:
    """Add what lies in a map's credible regions, in numbers only where it is a part of a row."""
    whole = worth.probability[0]
    for column, part, all_of_it in (
        ("p50", worth.probability_50, whole),
        ("p90", worth.probability_90, whole),
        ("a90", worth.area_90_deg2, area),
    ):
        place = np.full(part.size, _ACROSS)
        place[part >= all_of_it * (1 - _SAME)] = _INSIDE
        place[part <= all_of_it * _SAME] = _OUTSIDE
        block.counts(f"{name}.{column}.place", place)
        block.floats(f"{name}.{column}", part[place == _ACROSS])
