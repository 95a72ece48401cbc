"""What is said of a claim: the tally's number in the form of the stated one, and sentences.

The words compare two numbers and judge nobody.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from skytally.claims_io import Claim, Quantity
from skytally.explanations import Explanation
from skytally.times import mjd_to_iso

__all__ = ["difference_text", "number_text", "sentences"]

# Explanations that are named; more are counted.
_NAMED = 2
_NBSP = "\u00a0"
_SECONDS_PER_DAY = 86400.0
# Words for a stated number above and below the tally's.
_DIRECTION = {
    Quantity.DEPTH_MEDIAN: ("deeper", "shallower"),
    Quantity.EXPOSURES: ("more", "fewer"),
    Quantity.FIRST_START: ("later", "earlier"),
    Quantity.LAST_END: ("later", "earlier"),
}


def _form(claim: Claim) -> tuple[float, str]:
    """Factor and unit of a claim's quantity as it was stated."""
    if claim.stated.percent:
        return 100.0, f"{_NBSP}%"
    if claim.quantity is Quantity.DEPTH_MEDIAN:
        return 1.0, f"{_NBSP}mag"
    return 1.0, f"{_NBSP}deg²" if claim.quantity.is_area else ""


def _decimals(claim: Claim, low: float, high: float) -> int:
    """One digit more than was stated, as far as the bracket lets it mean something."""
    if claim.quantity is Quantity.EXPOSURES:
        return 0
    half_width = max((high - low) / 2 * _form(claim)[0], 1e-6)
    return max(min(claim.stated.decimals + 1, -math.floor(math.log10(half_width))), 0)


def number_text(claim: Claim, value: float, low: float, high: float) -> str:
    """Return the tally's number with its bracket, in the form of the claim.

    Parameters
    ----------
    claim : Claim
        Gives the form.
    value, low, high : float
        In the quantity's unit.
    """
    if claim.quantity.is_time:
        return mjd_to_iso(value)
    factor, unit = _form(claim)
    decimals = _decimals(claim, low, high)
    text = f"{factor * value:,.{decimals}f}{unit}"
    scale = 10.0**decimals
    # Outwards, so that what is printed still holds the truth.
    bounds = (
        math.floor(factor * low * scale + 1e-3) / scale,
        math.ceil(factor * high * scale - 1e-3) / scale,
    )
    if bounds[1] - bounds[0] <= 1.5 / scale and high - low < 1e-6:
        return text
    shown = "–".join(f"{max(bound, 0.0):,.{decimals}f}" for bound in bounds)
    return f"{text} ({shown}{unit})"


def difference_text(claim: Claim, value: float, low: float, high: float) -> str:
    """Return by how much and in which direction the stated number differs; as `number_text`."""
    difference = claim.stated.number - value
    above, below = _DIRECTION.get(claim.quantity, ("greater", "less"))
    word = above if difference > 0 else below
    size = abs(difference)
    if claim.quantity.is_time:
        return f"{_duration(size * _SECONDS_PER_DAY)} {word}"
    factor, unit = _form(claim)
    amount = f"{factor * size:,.{_decimals(claim, low, high)}f}"
    if claim.stated.percent:
        return f"{amount} percentage points {word}"
    if claim.quantity.is_area and value > 0:
        share = 100 * size / value
        return f"{amount}{unit} ({share:,.{0 if share >= 10 else 1}f}{_NBSP}%) {word}"
    return f"{amount}{unit} {word}"


def _duration(seconds: float) -> str:
    """Return a length of time in its two greatest units."""
    if seconds < 60:
        return f"{seconds:.3g}{_NBSP}s"
    minutes, second = divmod(round(seconds), 60)
    hours, minute = divmod(minutes, 60)
    days, hour = divmod(hours, 24)
    parts = [(days, "d"), (hour, "h"), (minute, "min"), (second, "s")]
    first = next(place for place, (count, _) in enumerate(parts) if count)
    return " ".join(f"{count}{_NBSP}{unit}" for count, unit in parts[first : first + 2] if count)


def sentences(
    claim: Claim,
    own: tuple[float, float, float],
    terms: str,
    agrees: bool,
    explanations: Sequence[Explanation],
) -> str:
    """Return the verdict in one or a few sentences.

    Parameters
    ----------
    claim : Claim
        What was stated.
    own : tuple of float
        The tally's number, at least and at most.
    terms : str
        What it must be read with, such as " on map version 2"; may be empty.
    agrees : bool
        Whether the two agree.
    explanations : sequence of Explanation
        Ways of counting that yield the stated number, the closest first.
    """
    tallied = f"The logs give {number_text(claim, *own)}{terms}"
    if agrees:
        return f"{tallied}, which agrees with the stated {claim.value}."
    differs = f"{tallied}; the stated {claim.value} is {difference_text(claim, *own)}."
    return f"{differs} {_explained(claim, own, explanations)}"


def _explained(
    claim: Claim, own: tuple[float, float, float], explanations: Sequence[Explanation]
) -> str:
    if not explanations:
        return "No other way of counting that was tried gives the stated number."
    named = [(one.text, _plain(claim, own, one.value)) for one in explanations[:_NAMED]]
    if len(explanations) == 1:
        ((text, number),) = named
        return f"{text[:1].upper()}{text[1:]} gives {number}."
    listed = ", and ".join(f"{text} ({number})" for text, number in named)
    if len(explanations) == _NAMED:
        return f"Two ways of counting give it within its digits: {listed}."
    return (
        f"{len(explanations)} ways of counting give it within its digits; the closest are {listed}."
    )


def _plain(claim: Claim, own: tuple[float, float, float], value: float) -> str:
    """A number in the form of the claim, with its digits or those of the tally's own."""
    if claim.quantity.is_time:
        return mjd_to_iso(value)
    factor, unit = _form(claim)
    decimals = max(_decimals(claim, *own[1:]), claim.stated.decimals)
    return f"{factor * value:,.{decimals}f}{unit}"
