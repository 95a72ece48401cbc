"""Findings on limiting magnitudes and on how bands are spelt."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import NDArray

from skytally.audit_rows import counted, row_words
from skytally.campaign_data import LoadedCampaign
from skytally.findings import Finding
from skytally.magnitudes import standard_band
from skytally.observations import LogTable

__all__ = ["band_findings", "depth_findings"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Limits of optical and infrared exposures lie between these (common practice) ...
_BRIGHT, _FAINT = 8.0, 30.0
# ... and what is brighter than this is no limit of any camera, but a zero or a slip.
_ABSURD = 5.0
# So many rows show what is usual, and so many that are the same are no coincidence.
_ENOUGH_ROWS = 8
_SAME_ROWS = 5
# A dark night among moonlit ones is up to this much deeper; clouds may cost this much.
_TOO_DEEP_MAG, _TOO_SHALLOW_MAG = 1.5, 4.0
_OUTLIER_SIGMAS = 6.0
# Standard deviations of a normal distribution in one median absolute deviation.
_SIGMA_OF_MAD = 1.4826
# How limits deepen with log10 of the time: background-limited, read-noise-limited, not at
# all (nominal values). The law that leaves least scatter is taken.
_TIME_SLOPES = (1.25, 2.5, 0.0)
_BAND_WORDS = frozenset({"band", "filter", "filt"})
_ONE_LETTER_BANDS = frozenset("ugrizyjhkUGRIZYBVJHK")


def depth_findings(
    campaign: LoadedCampaign, default_depth: Mapping[str, float] | None = None
) -> list[Finding]:
    """Report limits that are missing, impossible, unlike their neighbours, or all the same.

    Parameters
    ----------
    campaign : LoadedCampaign
        With its logs.
    default_depth : mapping of str to float, optional
        Limit that the campaign gives to rows without one, by telescope.
    """
    found = []
    for telescope in campaign.telescopes:
        log, name = telescope.log, telescope.name
        if len(log) == 0:
            continue
        default = (default_depth or {}).get(name, np.nan)
        by_default = log.depth == default
        stated = np.isfinite(log.depth) & ~by_default
        found += _missing(name, log)
        found += _by_default(name, log, by_default)
        found += _out_of_range(name, log)
        found += _outliers(name, log, stated & (log.depth >= _BRIGHT) & (log.depth <= _FAINT))
        found += _nominal(name, log, stated)
    return found


def _missing(name: str, log: LogTable) -> list[Finding]:
    missing = ~np.isfinite(log.depth)
    if not missing.any():
        return []
    rows = _rows(log, missing)
    which = ", ".join(
        f"{int((missing & (log.band == band)).sum()):,} of {int((log.band == band).sum()):,} in "
        f"{band or 'no stated band'}"
        for band in sorted(set(log.band[missing]))
    )
    most = 2 * len(rows) > len(log)
    return [
        Finding(
            "depth-missing",
            "caution" if most else "note",
            name,
            rows,
            f"{len(rows):,} of {counted(len(log), 'exposure', 'exposures')} "
            f"{'has' if len(rows) == 1 else 'have'} no limiting magnitude: {which} "
            f"({row_words(rows)}).",
            "They count in area and probability, but not in depth or reach.",
            "Fill the limits in if they are known; the campaign can give one value for all with "
            "defaults = { depth = ... }.",
        )
    ]


def _by_default(name: str, log: LogTable, by_default: Bools) -> list[Finding]:
    if not by_default.any():
        return []
    rows = _rows(log, by_default)
    return [
        Finding(
            "depth-default",
            "note",
            name,
            rows,
            f"{len(rows):,} of {counted(len(log), 'exposure', 'exposures')} "
            f"{'has' if len(rows) == 1 else 'have'} the campaign's default limit of "
            f"{log.depth[by_default][0]:.2f} mag ({row_words(rows)}).",
            "The default counts like a measured limit.",
            "Give the measured limits in the log if there are any.",
        )
    ]


def _out_of_range(name: str, log: LogTable) -> list[Finding]:
    wrong = (log.depth < _BRIGHT) | (log.depth > _FAINT)
    if not wrong.any():
        return []
    rows = _rows(log, wrong)
    values = log.depth[wrong]
    absurd = (values < _ABSURD) | (values > _FAINT)
    extreme = float(values[np.argmax(np.abs(values - (_BRIGHT + _FAINT) / 2))])
    return [
        Finding(
            "depth-out-of-range",
            "error" if absurd.any() else "caution",
            name,
            rows,
            f"{counted(len(rows), 'limit lies', 'limits lie')} outside {_BRIGHT:g} to {_FAINT:g} "
            f"mag, as far out as {extreme:g} ({row_words(rows)}).",
            "They count as logged, in depth and reach.",
            "Correct these limits, or empty the cell where none was measured; see also that the "
            "column mapped to depth holds magnitudes, not fluxes.",
        )
    ]


def _outliers(name: str, log: LogTable, usable: Bools) -> list[Finding]:
    """Limits far deeper, or much shallower, than those of the telescope in the same band."""
    off, beyond = np.zeros(len(log), dtype=bool), np.zeros(len(log))
    for band in set(log.band[usable]):
        group = np.flatnonzero(usable & (log.band == band))
        if group.size >= _ENOUGH_ROWS:
            beyond[group], off[group] = _deviations(log.depth[group], log.duration_s[group])
    if not off.any():
        return []
    rows = _rows(log, off)
    first = int(np.flatnonzero(off)[np.argmax(np.abs(beyond[off]))])
    side = "deeper" if beyond[first] > 0 else "shallower"
    band = log.band[first] or "no stated band"
    return [
        Finding(
            "depth-outlier",
            "caution",
            name,
            rows,
            f"{counted(len(rows), 'limit stands', 'limits stand')} far from the others of the same "
            f"band, exposure time allowed for: {row_words(rows)}. Row {log.row[first]} states "
            f"{log.depth[first]:.2f} in {band}, {abs(beyond[first]):.1f} mag {side} than is usual.",
            "They count as logged, in depth and reach.",
            "Check these limits for a slip of the pen, another band or another exposure time.",
        )
    ]


def _deviations(depth: Floats, duration_s: Floats) -> tuple[Floats, Bools]:
    """Magnitudes deeper than usual, shape (n,), and which of them stand out."""
    timed = bool((duration_s > 0).all())
    time = np.log10(duration_s / np.median(duration_s)) if timed else np.zeros(depth.size)
    laws = []
    for slope in _TIME_SLOPES:
        scaled = depth - slope * time
        residual = scaled - np.median(scaled)
        # The mean, as exposures of another length may be few.
        laws.append((float(np.abs(residual).mean()), residual))
    _, residual = min(laws, key=lambda law: law[0])
    allowed = _OUTLIER_SIGMAS * _SIGMA_OF_MAD * float(np.median(np.abs(residual)))
    deep = residual > max(allowed, _TOO_DEEP_MAG)
    return residual, deep | (residual < -max(allowed, _TOO_SHALLOW_MAG))


def _nominal(name: str, log: LogTable, stated: Bools) -> list[Finding]:
    """Limits that are one and the same in every row of a band."""
    same = np.zeros(len(log), dtype=bool)
    values = []
    for band in sorted(set(log.band[stated])):
        group = stated & (log.band == band)
        if group.sum() >= _SAME_ROWS and np.unique(log.depth[group]).size == 1:
            same |= group
            values.append(
                f"{log.depth[group][0]:g} in {band or 'no stated band'} in all {group.sum():,} rows"
            )
    if not values:
        return []
    rows = _rows(log, same)
    return [
        Finding(
            "depth-identical",
            "caution",
            name,
            rows,
            f"The limit never changes, not by its last digit: it is {', '.join(values)} that state "
            "one. That is a nominal value, not a measured one.",
            "The numbers are as logged.",
            "Give the measured limit of each exposure, or say that limits are nominal.",
        )
    ]


def band_findings(campaign: LoadedCampaign) -> list[Finding]:
    """Report names of bands that may be two spellings of one."""
    uses = {t.name: Counter(band for band in t.log.band if band) for t in campaign.telescopes}
    found = []
    for group in _alike({band for counts in uses.values() for band in counts}):
        total = {band: sum(counts[band] for counts in uses.values()) for band in group}
        usual = max(group, key=lambda band: (total[band], band))
        where = "; ".join(
            f"{band!r} by {', '.join(name for name, counts in uses.items() if counts[band])}"
            for band in group
        )
        case = len({_bare(band).casefold() for band in group}) < len(
            {_bare(band) for band in group}
        )
        found.append(
            Finding(
                "band-spelt-differently",
                "caution",
                usual,
                (),
                f"{len(group)} names of bands may mean the same: {where}."
                + (" Some differ only in capitals: R is not r in every system." if case else ""),
                "Each name is tallied as a band of its own.",
                "If they are one band, give it one name in all logs; if not, all is well.",
            )
        )
    return found


def _alike(bands: Iterable[str]) -> list[list[str]]:
    """Groups of two or more names that are equal but for case, punctuation or known aliases."""
    groups: list[tuple[set[str], list[str]]] = []
    for band in sorted(bands):
        keys = {_bare(band).casefold(), "=" + standard_band(_bare(band))}
        members = [band]
        apart = []
        for other_keys, others in groups:
            if keys & other_keys:
                keys, members = keys | other_keys, others + members
            else:
                apart.append((other_keys, others))
        groups = [*apart, (keys, members)]
    return [members for _, members in groups if len(members) > 1]


def _bare(band: str) -> str:
    """Return the name without punctuation, words for "band", and what numbers or precedes it.

    "r'", "r_band", "cam2-r" and "r.02" all become "r"; "H-alpha" is no H.
    """
    words = [x for x in re.split(r"[\W_]+", band) if x and x.casefold() not in _BAND_WORDS]
    if len(words) > 1 and words[-1] in _ONE_LETTER_BANDS:
        return words[-1]
    if words[:1] and words[0] in _ONE_LETTER_BANDS and all(re.search(r"\d", x) for x in words[1:]):
        return words[0]
    return "".join(words)


def _rows(log: LogTable, chosen: Bools) -> tuple[int, ...]:
    return tuple(log.row[chosen].tolist())
