"""Claims checked: each stated number beside the same number from the logs.

A claim agrees where the tally's number, within its bracket, would be stated with
the same digits. Where it differs, other ways of counting are tried, and those
that yield the stated number are named.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from enum import StrEnum
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.campaign_data import LoadedCampaign
from skytally.claim_text import difference_text, number_text, sentences
from skytally.claims_io import ALL, Claim, Quantity
from skytally.covered import Coverage
from skytally.explanations import Explainer, Explanation, Question
from skytally.recounts import Amounts
from skytally.skymap import SkyMap
from skytally.tally import TallyRow

__all__ = ["ClaimVerdict", "Verdict", "check_claims"]

Bools = NDArray[np.bool_]

# What an area's total is tested to hold, whatever its bracket: 0.1 %.
_AREA_ACCURACY = 1e-3
# Rounding of numbers that are known exactly, and of days (a tenth of a millisecond).
_ROUNDING = 1e-9


class Verdict(StrEnum):
    """How a claim stands beside the logs."""

    AGREES = "agrees"
    DIFFERS = "differs"
    UNCHECKED = "cannot be checked"


@dataclass(frozen=True)
class ClaimVerdict:
    """A claim, the tally's own number, and how the two stand to each other.

    Attributes
    ----------
    claim : Claim
        What was stated.
    verdict : Verdict
        Whether it agrees.
    map : str or None
        Map version that it was checked on; None where no map matters.
    own, own_low, own_high : float or None
        The tally's number with its bracket: square degrees, a fraction,
        magnitudes, a count, or MJD (UTC). None where it cannot be checked.
    difference : float or None
        Stated number less the tally's, in the same unit (days for times).
    own_text, difference_text : str
        Both in words; empty where there are none.
    explanations : tuple of Explanation
        Ways of counting that yield the stated number, the closest first.
    text : str
        Everything in one or a few sentences.
    """

    claim: Claim
    verdict: Verdict
    map: str | None = None
    own: float | None = None
    own_low: float | None = None
    own_high: float | None = None
    difference: float | None = None
    own_text: str = ""
    difference_text: str = ""
    explanations: tuple[Explanation, ...] = ()
    text: str = ""


def check_claims(
    claims: Sequence[Claim],
    campaign: LoadedCampaign,
    coverage: Coverage,
    rows: Sequence[TallyRow],
) -> list[ClaimVerdict]:
    """Check every claim against a campaign.

    Parameters
    ----------
    claims : sequence of Claim
        What was stated.
    campaign : LoadedCampaign
        Maps, cameras and logs.
    coverage : Coverage
        What `lay_coverage` made of the campaign.
    rows : sequence of TallyRow
        Its tally; they tell how well probabilities are known.

    Returns
    -------
    list of ClaimVerdict
        In the order of the claims.
    """
    desk = _Desk(campaign, Amounts(coverage), rows)
    return [desk.check(claim) for claim in claims]


class _Uncheckable(Exception):
    """Why a claim cannot be checked: a sentence."""


@dataclass(frozen=True)
class _Own:
    """The tally's number with its bracket."""

    value: float
    low: float
    high: float

    @classmethod
    def exactly(cls, value: float) -> _Own:
        return cls(value, value - _ROUNDING, value + _ROUNDING)


@dataclass(frozen=True, eq=False)
class _Desk:
    """Where claims are looked up and compared."""

    campaign: LoadedCampaign
    amounts: Amounts
    rows: Sequence[TallyRow]

    @property
    def coverage(self) -> Coverage:
        return self.amounts.coverage

    @cached_property
    def explainer(self) -> Explainer:
        return Explainer(self.campaign, self.amounts)

    def check(self, claim: Claim) -> ClaimVerdict:
        """Compare one claim."""
        try:
            telescopes, chosen = self._chosen(claim)
            skymap = self._map(claim) if claim.quantity.needs_map else None
            own = self._own(claim, chosen, skymap)
        except _Uncheckable as why:
            return ClaimVerdict(claim, Verdict.UNCHECKED, text=str(why))
        agrees = claim.stated.low <= own.high and own.low <= claim.stated.high
        label = None if skymap is None else skymap.label
        explanations: tuple[Explanation, ...] = ()
        if not agrees:
            whole = claim.band is None and claim.night is None
            explanations = self.explainer.explain(
                Question(claim.quantity, claim.stated, own.value, telescopes, whole, chosen, skymap)
            )
        bracket = own.value, own.low, own.high
        return ClaimVerdict(
            claim,
            Verdict.AGREES if agrees else Verdict.DIFFERS,
            label,
            *bracket,
            claim.stated.number - own.value,
            number_text(claim, *bracket),
            "" if agrees else difference_text(claim, *bracket),
            explanations,
            sentences(claim, bracket, self._terms(claim, chosen, label), agrees, explanations),
        )

    def _chosen(self, claim: Claim) -> tuple[tuple[int, ...], Bools]:
        """Telescopes and exposures that a claim is about."""
        o = self.coverage.observations
        names = [name.casefold() for name in o.telescopes]
        wanted = claim.telescope.casefold()
        telescopes = tuple(range(len(names)))
        if wanted != ALL:
            if wanted not in names:
                known = (*o.telescopes, ALL)
                raise _Uncheckable(_unknown("telescope", claim.telescope, known))
            telescopes = (names.index(wanted),)
        chosen = np.isin(o.telescope, telescopes)
        for what, text, known, index in (
            ("band", claim.band, o.bands, o.band),
            ("night", claim.night, o.nights, o.night),
        ):
            if text is not None:
                if text not in known:
                    raise _Uncheckable(_unknown(what, text, known))
                chosen &= index == known.index(text)
        if not chosen.any():
            raise _Uncheckable(_empty(claim))
        return telescopes, chosen

    def _map(self, claim: Claim) -> SkyMap:
        """The map version that a claim names, the newest where it names none."""
        maps = self.campaign.maps
        if claim.map is None:
            return maps[-1]
        for skymap in maps:
            if skymap.label.casefold() == claim.map.casefold():
                return skymap
        raise _Uncheckable(_unknown("map version", claim.map, [m.label for m in maps]))

    def _own(self, claim: Claim, chosen: Bools, skymap: SkyMap | None) -> _Own:
        """The tally's own number."""
        o = self.coverage.observations
        match claim.quantity:
            case Quantity.EXPOSURES:
                return _Own.exactly(float(chosen.sum()))
            case Quantity.FIRST_START:
                return _Own.exactly(float(o.start_mjd[chosen].min()))
            case Quantity.LAST_END:
                return _Own.exactly(float(o.end_mjd[chosen].max()))
            case Quantity.DEPTH_MEDIAN:
                return _Own.exactly(self._depth(chosen))
        own = _Own(*self.amounts.of(claim.quantity, skymap, chosen))
        if claim.quantity.is_area:
            # What lies in the 90 % region errs no more than the whole area.
            total = self.amounts.of(Quantity.AREA, None, chosen)[0]
            return _within(own, _AREA_ACCURACY * total)
        return _within(own, self._error(claim, skymap, own.high - own.low))

    def _error(self, claim: Claim, skymap: SkyMap | None, width: float) -> float:
        """How far a probability may be off: its bracket, the estimated error where that is wide."""
        if width <= self.campaign.settings.bracket:
            return width
        label = None if skymap is None else skymap.label
        telescope = claim.telescope.casefold()
        errors = [
            row.probability_error
            for row in self.rows
            if row.map == label
            and (row.telescope or ALL).casefold() == telescope
            and row.band in {None, claim.band}
            and row.night in {None, claim.night}
        ]
        # The error of a part is at most that of the whole, which has a row of its own.
        return min(errors, default=width)

    def _terms(self, claim: Claim, chosen: Bools, label: str | None) -> str:
        """What the tally's number must be read with."""
        if label is not None:
            return f" on map version {label}"
        if claim.quantity is not Quantity.DEPTH_MEDIAN:
            return ""
        settings = self.campaign.settings
        limited = chosen & np.isfinite(self.coverage.observations.depth)
        known = np.isfinite(self.coverage.extinction[limited])
        state = (
            "corrected" if known.all() else "partly corrected" if known.any() else "not corrected"
        )
        return (
            f" ({settings.magnitude_system}, {settings.significance:g} sigma, {state} for Galactic "
            "extinction)"
        )

    def _depth(self, chosen: Bools) -> float:
        """Median limit of the exposures, of one band."""
        o = self.coverage.observations
        bands = [o.bands[band] for band in np.unique(o.band[chosen])]
        if len(bands) > 1:
            raise _Uncheckable(
                f"The exposures are in {len(bands)} bands ({', '.join(bands)}), and limits of "
                "different bands are not mixed. Name the band that the claim is about."
            )
        depth = self.coverage.corrected_depth[chosen]
        depth = depth[np.isfinite(depth)]
        if not depth.size:
            raise _Uncheckable("No exposure that this is about has a limiting magnitude.")
        return float(np.median(depth))


def _within(own: _Own, error: float) -> _Own:
    """Tighten a bracket to an error on both sides."""
    return _Own(
        own.value,
        max(own.low, own.value - error) - _ROUNDING,
        min(own.high, own.value + error) + _ROUNDING,
    )


def _unknown(what: str, name: str, known: Sequence[str]) -> str:
    near = get_close_matches(name.casefold(), [k.casefold() for k in known], 1)
    hint = next((f" Did you mean {k}?" for k in known if k.casefold() in near), "")
    listed = ", ".join(known) or "none"
    return f"There is no {what} {name!r} in the campaign (known: {listed}).{hint}"


def _empty(claim: Claim) -> str:
    parts = [claim.telescope]
    parts += [f"in {claim.band}"] if claim.band else []
    parts += [f"on the night of {claim.night}"] if claim.night else []
    return f"The logs hold no accepted exposure of {' '.join(parts)}."
