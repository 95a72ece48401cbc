"""Results as data for other programs: a dictionary, JSON text, a table.

The JSON format is ``skytally/tally``, version 1. Keys come in a fixed order,
numbers with all their digits, and what is missing is null, so that equal
results give equal bytes. ``rows`` is one tidy table; each row's ``sources``
holds what that selection could have seen of each source on that map. Distances,
sources and what they exclude are empty where no map carries distances.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import fields, is_dataclass, replace
from typing import Any, get_type_hints

import numpy as np
from astropy import units as u
from astropy.table import MaskedColumn, Table

from skytally.errors import UsageError
from skytally.results import Identity, Results
from skytally.tally import TallyRow

__all__ = [
    "FORMAT",
    "FORMAT_VERSION",
    "fingerprint_of",
    "identified",
    "part_hashes",
    "select_map",
    "to_dict",
    "to_json",
    "to_table",
]

FORMAT = "skytally/tally"
FORMAT_VERSION = 1

# Column of the rows table: unit (None: a count, a fraction or text) and meaning.
_COLUMNS: dict[str, tuple[u.UnitBase | None, str]] = {
    "map": (None, "map version"),
    "telescope": (None, "telescope; missing: all"),
    "band": (None, "band; missing: all"),
    "night": (None, "date of the evening; missing: all"),
    "exposures": (None, "number of exposures"),
    "area_deg2": (u.deg**2, "area of the union"),
    "area_low_deg2": (u.deg**2, "area certainly inside"),
    "area_high_deg2": (u.deg**2, "area possibly inside"),
    "area_in_50_deg2": (u.deg**2, "area inside the 50 % region"),
    "area_in_90_deg2": (u.deg**2, "area inside the 90 % region"),
    "probability": (None, "probability of the union"),
    "probability_low": (None, "probability certainly inside"),
    "probability_high": (None, "probability possibly inside"),
    "probability_error": (None, "estimated error of the centre rule"),
    "probability_in_50": (None, "probability covered inside the 50 % region"),
    "probability_in_90": (None, "probability covered inside the 90 % region"),
    "probability_unique": (None, "probability that no other telescope covered"),
    "probability_credit": (None, "probability shared equally among the telescopes that covered it"),
    "probability_revisited": (None, "probability covered repeatedly, as the settings say"),
    "depth_min": (u.mag, "shallowest limiting magnitude"),
    "depth_median": (u.mag, "median limiting magnitude"),
    "depth_max": (u.mag, "deepest limiting magnitude"),
    "depth_over_50": (u.mag, "depth reached over 50 % of the covered probability"),
    "depth_over_90": (u.mag, "depth reached over 90 % of the covered probability"),
    "depth_stacked_over_50": (u.mag, "stacked depth over 50 % of the covered probability"),
    "depth_stacked_over_90": (u.mag, "stacked depth over 90 % of the covered probability"),
    "volume_90_covered_mpc3": (u.Mpc**3, "volume of the 90 % credible volume that was covered"),
    "first_start": (None, "start of the first exposure, UTC"),
    "last_end": (None, "end of the last exposure, UTC"),
    "extinction": (None, "whether the limits are corrected for Galactic extinction"),
    "extinction_median": (u.mag, "median Galactic extinction of the exposures"),
    "volume_90_covered_comoving_mpc3": (
        u.Mpc**3,
        "comoving volume of the 90 % credible volume that was covered",
    ),
}

# What a source's row shares with the tally row that it is written into.
_SELECTED_BY = ("map", "telescope", "band", "night")
# What stands in the JSON beside the numbers, and has hashes or names of its own.
_NOT_NUMBERS = {"format", "format_version", "software", "fingerprint", "inputs", "settings"}
# The parts of the results that belong to one map version each.
_BY_MAP = (
    *("rows", "timelines", "source_rows", "exclusions", "fading_planes"),
    *("absolute_limits", "distance_profiles", "depth_histograms", "sharing"),
)


def select_map(results: Results, version: str) -> Results:
    """Return the results with what belongs to one map version only.

    Raises
    ------
    UsageError
        If there is no such version; the message lists those there are.
    """
    versions = [m.version for m in results.maps]
    if version not in versions:
        raise UsageError(
            f"there is no map version {version!r}",
            remedy=f"Choose one of: {', '.join(map(repr, versions))}.",
        )
    kept = versions.index(version)
    parts: dict[str, Any] = {
        name: tuple(item for item in getattr(results, name) if item.map == version)
        for name in _BY_MAP
    }
    return replace(
        results,
        maps=(results.maps[kept],),
        sky=replace(results.sky, maps=(results.sky.maps[kept],)),
        **parts,
    )


def to_plain(value: Any) -> Any:
    """Reduce to what JSON knows; dataclasses become dictionaries in field order."""
    if is_dataclass(value):
        return {f.name: to_plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, tuple | list):
        return [to_plain(item) for item in value]
    if isinstance(value, np.generic):
        return value.item()
    return value


def to_dict(results: Results) -> dict[str, Any]:
    """Return the results as plain dictionaries, lists, numbers and text.

    The geometry (``Results.sky``) is left out: the regions have files of
    their own.
    """
    logs = [{**to_plain(log), "reasons": dict(log.reasons)} for log in results.logs]
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "software": results.software,
        "fingerprint": results.identity.fingerprint or None,
        "inputs": to_plain(results.inputs),
        "event": to_plain(results.event),
        "settings": to_plain(results.settings),
        "maps": to_plain(results.maps),
        "telescopes": to_plain(results.telescopes),
        "logs": logs,
        "rows": _rows(results),
        "timelines": to_plain(results.timelines),
        "as_pointed": to_plain(results.as_pointed),
        "between_telescopes": to_plain(results.sharing),
        "exposures": to_plain(results.exposures),
        "set_aside": to_plain(results.set_aside),
        "sources": to_plain(results.sources),
        "exclusion": to_plain(results.exclusions),
        "fading": to_plain(results.fading_planes),
        "absolute_limits": to_plain(results.absolute_limits),
        "distance_profiles": to_plain(results.distance_profiles),
        "depth_histograms": to_plain(results.depth_histograms),
        "findings": to_plain(results.findings),
        "silenced": to_plain(results.silenced),
        "claims": to_plain(results.claims),
        "notes": list(results.notes),
    }


def identified(results: Results) -> Results:
    """Return the results with what they are known by."""
    parts = tuple(part_hashes(to_dict(results)).items())
    whole = _sha256(dict(parts))
    inputs = [(item.role, item.path, item.sha256) for item in results.inputs]
    short = fingerprint_of(inputs, to_plain(results.settings), whole)
    return replace(results, identity=Identity(short, whole, parts))


def part_hashes(content: Mapping[str, Any]) -> dict[str, str]:
    """Hash every part of what `to_dict` returns, or of JSON read back, that holds numbers."""
    return {name: _sha256(part) for name, part in content.items() if name not in _NOT_NUMBERS}


def fingerprint_of(
    inputs: Sequence[tuple[str, str, str]], settings: dict[str, Any], results_sha256: str
) -> str:
    """Return twelve hexadecimal digits of inputs (role, path, hash), settings and numbers."""
    return _sha256([[list(item) for item in inputs], settings, results_sha256])[:12]


def _sha256(value: Any) -> str:
    """Hash the canonical JSON of a value: keys in order, no white space, all digits."""
    text = json.dumps(
        value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    )
    # A file name that is no valid text reaches us with lone surrogates.
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()


def _rows(results: Results) -> list[dict[str, Any]]:
    """Return the tidy rows, each with what it could have seen of every source."""
    seen: dict[tuple[Any, ...], list[dict[str, Any]]] = {}
    for row in results.source_rows:
        numbers = to_plain(row)
        key = tuple(numbers.pop(name) for name in _SELECTED_BY)
        seen.setdefault(key, []).append(numbers)
    return [
        {**to_plain(row), "sources": seen.get((row.map, *row.selection), [])}
        for row in results.rows
    ]


def to_json(results: Results) -> str:
    """Return the results as JSON text, one table row per line.

    Raises
    ------
    ValueError
        If a number is not finite: results say None for what is missing.
    """
    parts = []
    for key, value in to_dict(results).items():
        if isinstance(value, list) and value:
            text = "[\n  " + ",\n  ".join(_dump(item) for item in value) + "\n ]"
        else:
            text = _dump(value)
        parts.append(f' "{key}": {text}')
    return "{\n" + ",\n".join(parts) + "\n}\n"


def _dump(value: Any) -> str:
    return json.dumps(value, allow_nan=False, ensure_ascii=False)


def to_table(results: Results) -> Table:
    """Return the tidy rows as an astropy table with units; missing values are masked.

    The magnitude system and significance, the event and the software stand in
    the table's metadata.
    """
    hints = get_type_hints(TallyRow)
    table = Table()
    for name, (unit, description) in _COLUMNS.items():
        values = [getattr(row, name) for row in results.rows]
        kind = next(k for k in (str, int, float) if hints[name] in (k, k | None))
        table[name] = MaskedColumn(
            [kind() if value is None else value for value in values],
            mask=[value is None for value in values],
            dtype=kind,
            unit=unit,
            description=description,
        )
    table.meta = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "software": results.software,
        "fingerprint": results.identity.fingerprint,
        "event": results.event.name,
        "event_time": results.event.time,
        "magnitude_system": results.settings.magnitude_system,
        "significance": results.settings.significance,
        "extinction": results.settings.extinction,
        "cosmology": results.settings.cosmology,
    }
    return table
