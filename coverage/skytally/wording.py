"""Numbers and sentences, worded once for every form of the report.

Text is Unicode with no-break spaces between a number and its unit; `to_ascii`
makes the 7-bit form of the same words. Digits follow the uncertainty that is
printed beside the number.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence

from skytally.exclusion import ExclusionCurve
from skytally.limits import SourceRow
from skytally.results import Results, Settings, SourceInfo
from skytally.tally import TallyRow
from skytally.times import hours_since, iso_to_mjd

__all__ = [
    "MISSING",
    "NBSP",
    "NO_DISTANCE",
    "area_text",
    "bright_magnitude",
    "count",
    "decimals_for",
    "depth_range",
    "distance_text",
    "extinction_text",
    "has",
    "headline",
    "hours_text",
    "join_words",
    "limit_rows",
    "limit_terms",
    "magnitude_text",
    "newest_curves",
    "number_text",
    "number_word",
    "percent",
    "probability_text",
    "reach_text",
    "row_probability",
    "since_event",
    "source_probability",
    "source_words",
    "to_ascii",
    "utc_text",
    "version_text",
    "volume_text",
]

NBSP = "\u00a0"
MISSING = "—"
NO_DISTANCE = "The map carries no distance."
BRACKET_TARGET = 0.005
# What a row's total area is tested to hold, whatever its bracket: 0.1 %.
AREA_ACCURACY = 0.001
# However narrow a bracket: the cells of a region that was given outright are a shape of their own.
_AREA_DIGITS = 1e-4
# A map normalised in floating point sums to one only this closely.
_EXACT = 1e-9
_WORDS = (
    *("no", "one", "two", "three", "four", "five", "six"),
    *("seven", "eight", "nine", "ten", "eleven", "twelve"),
)
# Bands that a sentence names one by one; more are given as a range.
_BANDS_NAMED = 3
_ASCII = {
    NBSP: " ",
    "\u202f": " ",
    "–": "-",
    "—": "-",
    "−": "-",
    "±": "+/-",
    "σ": "sigma",
    "²": "^2",
    "³": "^3",
    "≥": ">=",
    "≤": "<=",
    "×": "x",
    "…": "...",
    "‘": "'",
    "’": "'",
    "“": '"',
    "”": '"',
    "°": " deg",
    "µ": "u",
}


def to_ascii(text: str) -> str:
    """Return the same words in 7-bit characters; what has no equivalent becomes ``?``."""
    for character, plain in _ASCII.items():
        text = text.replace(character, plain)
    return text.encode("ascii", "replace").decode("ascii")


def decimals_for(uncertainty: float, most: int = 4) -> int:
    """Return the decimals at which a number keeps one digit of its uncertainty (common practice).

    Zero or less means exact: ``most`` decimals.
    """
    if not uncertainty > 0 or not math.isfinite(uncertainty):
        return most
    return max(0, min(most, -math.floor(math.log10(uncertainty) + 1e-9)))


def number_text(value: float, decimals: int = 0) -> str:
    """Return a number with a comma between thousands and a true minus sign."""
    text = f"{value:,.{decimals}f}"
    if text.startswith("-"):
        text = text[1:] if float(text.replace(",", "")) == 0 else "−" + text[1:]
    return text


def percent(fraction: float, decimals: int = 1, *, unit: bool = True) -> str:
    """Return a fraction as a percentage that never rounds to a false 0 or 100.

    An exact 0 or 1 prints without decimals; what would round to either prints
    as a bound, ``< 0.1 %`` or ``> 99.9 %``.
    """
    tail = f"{NBSP}%" if unit else ""
    if fraction <= 0 or fraction >= 1 - _EXACT:
        return f"{0 if fraction <= 0 else 100}{tail}"
    step = 10.0**-decimals
    text = f"{100 * fraction:.{decimals}f}"
    if float(text) == 0:
        return f"<{NBSP}{step:.{decimals}f}{tail}"
    if float(text) >= 100:
        return f">{NBSP}{100 - step:.{decimals}f}{tail}"
    return f"{text}{tail}"


def _bracket(low: float, high: float, decimals: int) -> str:
    """Return bounds rounded outwards, so that what is printed still holds the truth."""
    scale = 10.0**decimals
    lower = math.floor(low * scale + 1e-6) / scale
    upper = math.ceil(high * scale - 1e-6) / scale
    return f"{number_text(lower, decimals)}–{number_text(upper, decimals)}"


def _percent_bracket(low: float, high: float, decimals: int) -> str:
    """Return the bounds of a probability in percent; 0 and 100 are printed as such."""
    lower, upper = _bracket(100 * low, 100 * high, decimals).split("–")
    lower = "0" if float(lower) == 0 else lower
    upper = "100" if float(upper) >= 100 else upper
    return f"{lower}–{upper}{NBSP}%"


def probability_text(
    value: float,
    low: float,
    high: float,
    error: float,
    target: float = BRACKET_TARGET,
) -> str:
    """Return a probability with what is known of its error.

    Parameters
    ----------
    value, low, high, error : float
        Probability, its bracket and the estimated error of the centre rule, as
        fractions.
    target : float
        The width up to which the bracket is printed; beyond it the refinement
        ended early and the estimated error is printed instead.

    Returns
    -------
    str
        ``34.6 % (34.4–34.9 %)``, ``34.6 ± 0.2 %`` or, where both bounds
        are the value, the value alone.
    """
    width = high - low
    # A hundredth of a percent is all that the method claims; a small value keeps its first digits.
    most = 2 if value >= 0.01 else 4
    if width <= _EXACT:
        return percent(value, most)
    if width <= target or not error > 0:
        decimals = decimals_for(50 * width, most)
        return f"{percent(value, decimals)} ({_percent_bracket(low, high, decimals)})"
    decimals = decimals_for(100 * error, most)
    text = percent(value, decimals, unit=False)
    shown = math.ceil(100 * error * 10**decimals - 1e-6) / 10**decimals
    return f"{text} ± {shown:.{decimals}f}{NBSP}%" if text[0].isdigit() else f"{text}{NBSP}%"


def row_probability(row: TallyRow, settings: Settings) -> str:
    """Return the probability of a tally row with its bracket or error."""
    return probability_text(
        row.probability,
        row.probability_low,
        row.probability_high,
        row.probability_error,
        max(settings.bracket_target, 0.0),
    )


def area_text(value: float, low: float, high: float, *, bracket: bool = False) -> str:
    """Return an area in square degrees, its bracket in parentheses if asked for.

    Digits follow the smaller of the bracket's half width and the 0.1 % that a
    row's total holds whatever its bracket.
    """
    if value <= 0:
        return f"0{NBSP}deg²"
    half_width = (high - low) / 2
    uncertainty = (
        min(max(half_width, _AREA_DIGITS * value), AREA_ACCURACY * value)
        if half_width > _EXACT * value  # what is less is the rounding of sums
        else AREA_ACCURACY * value
    )
    decimals = max(0, min(6, -math.floor(math.log10(uncertainty))))
    text = f"{number_text(value, decimals)}{NBSP}deg²"
    if bracket and half_width > _AREA_DIGITS * value:
        text += f" ({_bracket(low, high, decimals)}{NBSP}deg²)"
    return text


def distance_text(mean_mpc: float | None, sd_mpc: float | None) -> str:
    """Return a luminosity distance with its standard deviation, or a dash."""
    if mean_mpc is None or sd_mpc is None:
        return MISSING
    decimals = decimals_for(sd_mpc, most=1)
    return f"{number_text(mean_mpc, decimals)} ± {number_text(sd_mpc, decimals)}{NBSP}Mpc"


def magnitude_text(magnitude: float | None, decimals: int = 2) -> str:
    """Return a magnitude with its unit, or a dash where there is none."""
    if magnitude is None:
        return MISSING
    return f"{number_text(magnitude, decimals)}{NBSP}mag"


def limit_rows(results: Results) -> list[TallyRow]:
    """Return the newest map's rows by band, all telescopes, that have limits."""
    return [
        row
        for row in results.rows
        if row.map == results.newest.version
        and row.band is not None
        and row.telescope is None
        and row.depth_median is not None
    ]


def limit_terms(settings: Settings, rows: Iterable[TallyRow] = ()) -> str:
    """Return what every limit must be read with: system, significance, extinction.

    ``rows`` are those whose limits are meant; without any with a limit the
    campaign's setting is stated.
    """
    extinction = extinction_text(rows) or settings.extinction.rstrip(".")
    return f"{settings.magnitude_system}, {settings.significance:g}{NBSP}σ, {extinction}"


def extinction_text(rows: Iterable[TallyRow]) -> str:
    """Say whether the limits of rows are corrected for extinction; empty without limits."""
    limited = [row for row in rows if row.depth_median is not None]
    states = {row.extinction for row in limited}
    if not states:
        return ""
    if len(states) > 1:
        states = {"partly corrected"}
    text = f"{states.pop()} for Galactic extinction"
    known = [row.extinction_median for row in limited if row.extinction_median is not None]
    if not known:
        return text
    low, high = number_text(min(known), 2), number_text(max(known), 2)
    return f"{text}, median A = {low if low == high else f'{low}–{high}'}{NBSP}mag"


def depth_range(row: TallyRow) -> str:
    """Return the range of a row's limits, one number where they agree, or a dash."""
    if row.depth_min is None or row.depth_max is None:
        return MISSING
    low, high = number_text(row.depth_min, 2), number_text(row.depth_max, 2)
    return f"{low}{NBSP}mag" if low == high else f"{low}–{high}{NBSP}mag"


def bright_magnitude(magnitude: float, decimals: int = 1) -> str:
    """Return an absolute magnitude rounded to the bright side.

    What is ruled out at the printed value is then ruled out indeed; up to the
    thousandth of a magnitude that the crossing itself may be off.
    """
    scale = 10.0**decimals
    return number_text(math.floor((magnitude + 1e-3) * scale) / scale, decimals)


def reach_text(distance_mpc: float | None) -> str:
    """Return a reach in Mpc; a dash where nothing is reached."""
    if distance_mpc is None or distance_mpc <= 0:
        return MISSING
    decimals = max(0, min(4, 1 - math.floor(math.log10(distance_mpc))))
    return number_text(distance_mpc, 0 if distance_mpc >= 99.5 else decimals)


def volume_text(volume_mpc3: float | None) -> str:
    """Return a volume in Mpc³ to three digits, ``31,200``; a dash where there is none."""
    if volume_mpc3 is None:
        return MISSING
    if volume_mpc3 <= 0:
        return "0"
    decimals = 2 - math.floor(math.log10(volume_mpc3))
    return number_text(round(volume_mpc3, decimals), max(0, min(4, decimals)))


def source_words(source: SourceInfo) -> tuple[str, str]:
    """Split what a source assumes: how bright it is, and how it is looked for."""
    text = source.text.removeprefix(f"{source.name}:").strip().removesuffix(".")
    # Magnitudes come with a hyphen; a number wants a minus sign.
    text = re.sub(r"(?<![^\s(])-(?=\d)", "−", text)
    brightness, _, search = text.partition("; ")
    return brightness, search


def source_probability(row: SourceRow) -> str:
    """Return the detectable probability of a source with its bracket."""
    low, high = row.probability_low, row.probability_high
    return probability_text(row.probability, low, high, 0.0, 1.0)


def newest_curves(results: Results) -> list[ExclusionCurve]:
    """Return what the newest map rules out: all bands together first, then band by band."""
    return [curve for curve in results.exclusions if curve.map == results.newest.version]


def number_word(n: int) -> str:
    """Return a count in words up to twelve, in digits beyond."""
    return _WORDS[n] if 0 <= n < len(_WORDS) else number_text(n)


def count(noun: str, n: int, plural: str | None = None, *, words: bool = False) -> str:
    """Return a counted noun: ``1 exposure``, ``no exposures``, ``1,204 exposures``."""
    if n != 1:
        noun = plural or (noun + "es" if noun.endswith(("s", "x", "ch", "sh")) else noun + "s")
    shown = number_word(n) if words or n == 0 else number_text(n)
    return f"{shown}{NBSP}{noun}"


def has(n: int) -> str:
    """Return the verb that agrees with a count: ``has`` or ``have``."""
    return "has" if n == 1 else "have"


def join_words(words: Sequence[str], last: str = "and") -> str:
    """Return ``a``, ``a and b`` or ``a, b and c``; empty for none."""
    words = list(words)
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def utc_text(iso: str | None, *, seconds: bool = False) -> str:
    """Return an ISO 8601 time as ``2031-03-14 05:21 UTC``; a dash for None.

    The text is cut, not rounded: a leap second has no other minute.
    """
    if iso is None:
        return MISSING
    date, _, clock = iso.removesuffix("Z").partition("T")
    if not clock:
        return date
    return f"{date} {clock[: 8 if seconds else 5]}{NBSP}UTC"


def hours_text(hours: float | None, *, sign: bool = False) -> str:
    """Return hours to three digits or so: ``0.27 h``, ``5.31 h``, ``47.2 h``, ``310 h``."""
    if hours is None:
        return MISSING
    size = abs(hours)
    decimals = 2 if size < 9.995 else 1 if size < 99.95 else 0
    text = number_text(hours, decimals)
    if sign and not text.startswith("−"):
        text = f"+{text}"
    return f"{text}{NBSP}h"


def since_event(hours: float) -> str:
    """Return ``5.31 h after the event`` or ``0.40 h before the event``."""
    return f"{hours_text(abs(hours))} {'before' if hours < 0 else 'after'} the event"


def version_text(version: str) -> str:
    """Return a map version as it is named in a sentence: ``map version “2 arc”``."""
    return f"map version “{version}”"


def headline(results: Results, telescope: str | None = None) -> str:
    """Return the one plain sentence with the answer, on the newest map version.

    Where a log could not be read, the sentence begins with that. ``telescope`` is
    whom to name if the results are one telescope's.
    """
    unread = [log.telescope for log in results.logs if log.fault]
    answer = _answer(results, telescope)
    if not unread:
        return answer
    whose = "whose logs" if len(unread) > 1 else "whose log"
    return (
        f"Without {join_words(unread)}, {whose} could not be read: {answer[0].lower()}{answer[1:]}"
    )


def _answer(results: Results, telescope: str | None) -> str:
    event = results.event.name
    total = results.row()
    if total.exposures == 0:
        by = f" by {telescope}" if telescope else ""
        logs = "log" if len(results.logs) == 1 else "logs"
        return (
            f"No exposure of {event}{by} could be used, so nothing is covered and nothing is "
            f"constrained: every row of the {logs} was set aside."
            if any(log.read for log in results.logs)
            else f"No exposure of {event}{by} was given, so nothing is covered."
        )
    used = sum(t.exposures > 0 for t in results.telescopes)
    until = _until(results)
    who = f"{telescope or count('telescope', used, words=True)} {has(used)}"
    what = f"{count('exposure', total.exposures)}"
    version = version_text(results.newest.version)
    if total.probability <= 0:
        return (
            f"{until}, {who} covered none of the probability of {version} for {event} "
            f"with {what}: every footprint lies outside it."
        )
    probability = row_probability(total, results.settings)
    area = area_text(total.area_deg2, total.area_low_deg2, total.area_high_deg2)
    return (
        f"{until}, {who} covered {probability} of the probability of {version} for {event}, "
        f"with {what} over {area}{_how_deep(results)}{_ruled_out(results)}."
    )


def _until(results: Results) -> str:
    """Return the first words of the headline: when the last exposure ended."""
    end = results.row().last_end
    if end is None:
        return "So far"
    return (
        f"By {utc_text(end)}, {since_event(hours_since(iso_to_mjd(end), results.event.time_mjd))}"
    )


def _how_deep(results: Results) -> str:
    """Return the median limits; bands are named, never mixed."""
    rows = limit_rows(results)
    limits = [(row.depth_median, row.band) for row in rows if row.depth_median is not None]
    if not limits:
        return "; the logs hold no limiting magnitude"
    terms = limit_terms(results.settings, rows)
    if len(limits) <= _BANDS_NAMED:
        named = join_words([f"{magnitude_text(m)} in {band}" for m, band in limits])
        return (
            f", to {'a median limit' if len(limits) == 1 else 'median limits'} of {named} ({terms})"
        )
    (low, low_band), (high, high_band) = min(limits), max(limits)
    return (
        f", to median limits between {magnitude_text(low)} in {low_band} and "
        f"{magnitude_text(high)} in {high_band} ({terms})"
    )


def _ruled_out(results: Results) -> str:
    """Return the faintest source that one band, or else all, exclude over half of everything."""
    curves = newest_curves(results)
    reached = [
        (curve.magnitude_50, curve.band)
        for curve in curves
        if curve.magnitude_50 is not None and curve.band is not None
    ]
    if reached:
        magnitude, band = max(reached)
        where = f"in {band}"
    elif curves and curves[0].magnitude_50 is not None:
        magnitude, where = curves[0].magnitude_50, "in every band"
    else:
        return ""
    return (
        f"; a constant source of absolute magnitude {bright_magnitude(magnitude)} {where}, or "
        "brighter, is ruled out over half of all probability"
    )
