"""What was seen of positions as JSON, in columns."""

from __future__ import annotations

import json
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from skytally.galaxies import Ranking
from skytally.times import mjd_to_iso
from skytally.where import WhereAnswer
from skytally.where_text import where_notes
from skytally.wording import NBSP

__all__ = ["FORMAT", "FORMAT_VERSION", "where_to_json"]

FORMAT = "skytally/where"
FORMAT_VERSION = 1


def where_to_json(answer: WhereAnswer) -> str:
    """Return the answer as JSON text, one column per line.

    ``positions``, ``exposures``, ``visits``, ``deepest`` and each map are tables
    by column; ``first``, ``last`` and the two columns of ``visits`` and
    ``deepest`` that are called ``position`` and ``exposure`` count from 0 in
    them. Missing is null.
    """
    p, e = answer.positions, answer.exposures
    set_aside, unread = ([_plain(fault) for fault in some] for some in (p.set_aside, p.unread))
    content: dict[str, Any] = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "software": answer.software,
        "event": {"name": answer.event_name, "time": mjd_to_iso(answer.event_mjd)},
        "settings": {
            "magnitude_system": answer.magnitude_system,
            "significance": answer.significance,
            "cosmology": answer.cosmology,
            "extinction": answer.extinction or None,
        },
        "inputs": [dict(zip(("role", "path", "sha256"), item)) for item in answer.inputs],
        "positions": {
            "row": _plain(p.row),
            "name": _plain(p.name),
            "ra_deg": _plain(p.ra_deg),
            "dec_deg": _plain(p.dec_deg),
            "distance_mpc": _plain(p.distance_mpc),
            "magnitude": _plain(p.magnitude),
            "absolute_magnitude": _plain(p.absolute_magnitude),
            "mass": _plain(p.mass),
            "exposures": _plain(answer.exposures_of),
            "first": [None if i < 0 else i for i in answer.first.tolist()],
            "last": [None if i < 0 else i for i in answer.last.tolist()],
        },
        "exposures": {
            **_plain(e),
            "start": [mjd_to_iso(t) for t in e.start_mjd.tolist()],
            "end": [mjd_to_iso(t) for t in e.end_mjd.tolist()],
        },
        "visits": _plain(answer.visits),
        "deepest": _plain(answer.deepest),
        "maps": [_plain(one) for one in answer.maps],
        "rankings": [_ranking_columns(one) for one in answer.rankings],
        "set_aside": set_aside,
        "unread": unread,
        "notes": [note.replace(NBSP, " ") for note in where_notes(answer)],
    }
    return _text_of(content, 0) + "\n"


def _ranking_columns(ranking: Ranking) -> dict[str, Any]:
    return {
        "map": ranking.map,
        "weight": ranking.choice.weight.value,
        "completeness": ranking.choice.completeness,
        "ranked": ranking.ranked,
        "observed": ranking.observed,
        "covered": ranking.covered,
        "map_covered": ranking.map_covered,
        "covered_corrected": ranking.covered_corrected,
        "unranked": [{"reason": reason, "number": n} for reason, n in ranking.unranked],
        "rank": [i or None for i in ranking.rank.tolist()],
        "share": _plain(ranking.share),
    }


def _plain(value: Any) -> Any:
    """Reduce to what JSON knows; what is not finite is missing."""
    if is_dataclass(value):
        return {f.name: _plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, np.ndarray):
        return _column(value)
    return value


def _column(values: NDArray[Any]) -> list[Any]:
    plain: list[Any] = values.tolist()
    if values.dtype.kind != "f":
        return plain
    return [x if known else None for x, known in zip(plain, np.isfinite(values).tolist())]


def _text_of(value: Any, depth: int) -> str:
    """JSON with each key of a dictionary and each dictionary of a list on a line of its own."""
    inner = " " * (depth + 1)
    if isinstance(value, dict) and depth < 3:
        rows = [f"{inner}{json.dumps(k)}: {_text_of(v, depth + 1)}" for k, v in value.items()]
        return "{\n" + ",\n".join(rows) + "\n" + " " * depth + "}"
    if isinstance(value, list) and value and isinstance(value[0], dict):
        rows = [f"{inner}{_text_of(item, depth + 1)}" for item in value]
        return "[\n" + ",\n".join(rows) + "\n" + " " * depth + "]"
    return json.dumps(value, allow_nan=False, ensure_ascii=False)
