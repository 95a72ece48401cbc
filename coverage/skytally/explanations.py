"""Other ways of counting, tried where a stated number differs from the tally's.

Each is carried out on the campaign's own fields and maps, and named only if the
number that it yields is the stated one within the stated digits. Ways that can
only raise a number are not tried on one that is too low.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property, partial
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from skytally.cameras import MosaicCamera
from skytally.campaign_data import LoadedCampaign, Telescope
from skytally.claims_io import Quantity, Stated
from skytally.covered import Coverage
from skytally.other_fields import OtherField, OtherFields
from skytally.recounts import Amounts, Recount
from skytally.skymap import SkyMap
from skytally.touching import TouchingCells

__all__ = ["Explainer", "Explanation", "Question"]

Bools = NDArray[np.bool_]
Direction = Literal["up", "down", "any"]

# Cells that touch a field are tried from the first of these orders to the last.
_COARSEST, _FINEST = 4, 12
# Relative error that areas and probabilities found here may have, beside the stated digits.
_ACCURACY = 1e-3
# Errors of rough counts; a probability may hang on a few of the fields.
_ROUGH_AREA, _ROUGH_PROBABILITY = 0.04, 0.1
# The same of whole cells, which only differ by how closely touching is tested.
_CELL_ACCURACY = 3e-4
# Rounding of sums and of days.
_ROUNDING = 1e-9

_OVERLAP = "with no regard to overlap"
_SUM = f"adding up the exposures {_OVERLAP}"
_FLAT = "taking degrees of right ascension as degrees on the sky in the fields' area"
_CIRCLE = "taking each field as the circle through its corners"
_NARROW = (
    "laying the fields' widths as degrees of right ascension without the cosine of the declination"
)


@dataclass(frozen=True)
class Explanation:
    """A way of counting that yields the stated number.

    Attributes
    ----------
    code : str
        Stable name of the way.
    value : float
        What it yields, in the quantity's unit.
    text : str
        The way in words, as the beginning of a sentence that ends in "gives …".
    """

    code: str
    value: float
    text: str


@dataclass(frozen=True, eq=False)
class Question:
    """A stated number that differs, and what it is about.

    Attributes
    ----------
    quantity, stated : Quantity, Stated
        What was stated.
    own : float
        The tally's number.
    telescopes : tuple of int
        The telescopes that it is about.
    whole : bool
        Whether all their exposures are meant, whatever the band and night.
    chosen : bool array, shape (exposures,)
        The exposures that it is about, at least one.
    skymap : SkyMap or None
        The map version, where the quantity needs one.
    """

    quantity: Quantity
    stated: Stated
    own: float
    telescopes: tuple[int, ...]
    whole: bool
    chosen: Bools
    skymap: SkyMap | None

    @property
    def of_sky(self) -> bool:
        """Whether an area or a probability is asked for."""
        return self.quantity.is_area or self.quantity.is_probability

    def falls(self, value: float, accuracy: float = _ACCURACY) -> int:
        """Tell whether a number lies below (−1) or above (1) what is stated, or is it (0).

        ``accuracy`` is the relative error that an area or a probability may have.
        """
        slack = accuracy * abs(value) if self.of_sky else _ROUNDING
        return int(value > self.stated.high + slack) - int(value < self.stated.low - slack)


@dataclass(frozen=True, eq=False)
class _Way:
    """One way of counting, carried out only if it can move the number to where it was stated.

    ``rough`` counts the same with less work and an error of a tenth at most.
    """

    code: str
    direction: Direction
    text: str
    count: Callable[[], float | None]
    rough: Callable[[], float | None] | None = None


@dataclass(frozen=True, eq=False)
class Explainer:
    """Tries other ways of counting on one campaign; fields that it lays are kept."""

    campaign: LoadedCampaign
    amounts: Amounts

    @property
    def coverage(self) -> Coverage:
        """The footprints as laid."""
        return self.amounts.coverage

    @cached_property
    def _fields(self) -> OtherFields:
        return OtherFields(self.campaign, self.coverage)

    @cached_property
    def _touched(self) -> dict[bytes, TouchingCells]:
        return {}

    def explain(self, question: Question) -> tuple[Explanation, ...]:
        """Find the ways that yield a stated number, the closest first.

        Ways that lay no field anew come first; the others are tried only where
        none of them yields the number, and two at once only where none alone does.
        """
        if not question.of_sky:
            found = _fitting(question, self._of_logs(question))
        else:
            recount = Recount(
                self.amounts, self._fields, question.quantity, question.skymap, question.chosen
            )
            found = (
                _fitting(question, self._as_laid(recount))
                or _fitting(question, self._laid_anew(recount)) + self._touching(question, recount)
                or _fitting(question, self._double(recount))
            )
        found.sort(key=lambda one: abs(one.value - question.stated.number))
        closest: dict[str, Explanation] = {}
        for one in found:  # variants of one way are one explanation
            closest.setdefault(one.text, one)
        return tuple(closest.values())

    def _as_laid(self, recount: Recount) -> Iterator[_Way]:
        """Ways of counting the areas and probabilities of the fields as they are."""
        age = "older"
        for skymap in self.campaign.maps if recount.skymap is not None else ():
            if skymap is recount.skymap:
                age = "newer"
                continue
            text = f"using the {age} map version {skymap.label}"
            yield _Way("other-map", "any", text, partial(recount.on, skymap))
        if recount.quantity.is_probability:
            text = "dividing what is covered of the 90 % region by all that the region holds"
            yield _Way("region-normalised", "any", text, recount.normalised)
        yield _Way("exposures-summed", "up", _SUM, recount.exposures_summed)
        text = f"adding up the distinct fields {_OVERLAP}"
        yield _Way("fields-summed", "up", text, recount.fields_summed)
        text = f"adding up the telescopes {_OVERLAP}"
        yield _Way("telescopes-summed", "up", text, recount.telescopes_summed)

    def _laid_anew(self, recount: Recount) -> Iterator[_Way]:
        """Ways of counting fields that are laid otherwise."""
        for kind, code, direction, text in self._other_fields(recount):
            count, rough = (partial(recount.laid, kind, rough=one) for one in (False, True))
            yield _Way(code, direction, text, count, rough)
        yield _Way("flat-area", "up", _FLAT, recount.flat)

    def _double(self, recount: Recount) -> Iterator[_Way]:
        """Fields laid otherwise, and all exposures added up: so many times the area of one."""
        for kind, code, direction, text in self._other_fields(recount):
            both = f"{text} and {_SUM}"
            count, rough = (partial(recount.laid_summed, kind, rough=one) for one in (False, True))
            # Adding up raises what narrow fields lower.
            towards: Direction = "any" if direction == "down" else direction
            yield _Way(f"{code}-summed", towards, both, count, rough)
        yield _Way("flat-area-summed", "up", f"{_FLAT} and {_SUM}", recount.flat_summed)

    def _other_fields(self, recount: Recount) -> Iterator[tuple[OtherField, str, Direction, str]]:
        """Fields laid otherwise: which, under what code, where they move the number, and words."""
        gaps = _gaps_text([self.campaign.telescopes[index] for index in recount.telescopes])
        yield OtherField.RECTANGLE, "gaps", "up", gaps
        yield OtherField.OUTLINE, "gaps", "up", gaps
        yield OtherField.CIRCLE, "circle", "up", _CIRCLE
        # A narrow field is smaller, but may hold another part of the map.
        narrower: Direction = "down" if recount.quantity is Quantity.AREA else "any"
        yield OtherField.NARROW, "degrees-of-ra", narrower, _NARROW

    def _touching(self, question: Question, recount: Recount) -> list[Explanation]:
        """Find the order at which whole cells that touch a field yield the number.

        Finer cells hold less, so the order is found by halving, and few are tried.
        """
        if question.stated.number < question.own:
            return []
        key = question.chosen.tobytes()
        cells = self._touched.setdefault(key, TouchingCells(self.coverage, question.chosen))
        held = recount.measure.of_region

        def falls(value: float) -> int:
            return question.falls(value, _CELL_ACCURACY)

        def exceeds(order: int) -> bool:
            sure, maybe = (falls(held(region)) for region in cells.bounds(order))
            return sure > 0 or (maybe > 0 and falls(held(cells.exact(order))) > 0)

        low, high = _COARSEST, _FINEST + 1
        while low < high:
            middle = (low + high) // 2
            low, high = (middle + 1, high) if exceeds(middle) else (low, middle)
        text = "counting whole every HEALPix cell of order {} that touches a field"
        found = []
        for order in range(low, _FINEST + 1):
            value = held(cells.exact(order))
            if falls(value) != 0:
                break
            found.append(Explanation("touching-cells", value, text.format(order)))
        if found or low > _FINEST:
            return found
        value = held(cells.nearly(low))
        if falls(value) == 0:
            text += " or lies within a quarter of a cell of one"
            found.append(Explanation("nearly-touching-cells", value, text.format(low)))
        return found

    def _of_logs(self, question: Question) -> Iterator[_Way]:
        """Ways of counting depths, exposures and times."""
        o, chosen = self.coverage.observations, question.chosen
        match question.quantity:
            case Quantity.DEPTH_MEDIAN:
                text = "leaving out the correction for Galactic extinction"
                yield _Way("no-extinction", "any", text, lambda: _median([o.depth[chosen]]))
                text = "taking the limits as the log writes them"
                yield _Way("as-logged", "any", text, lambda: self._logged_depth(question))
            case Quantity.EXPOSURES:
                text = "counting every row of the log, those set aside as well"
                yield _Way("all-rows", "up", text, lambda: self._rows_read(question))
                text = "counting every field once, however often it was observed"
                fields = self.coverage.footprints.of(chosen)
                yield _Way("distinct-fields", "down", text, lambda: float(fields.sum()))
            case Quantity.FIRST_START:
                text = "taking in the rows that are set aside as before the event"
                yield _Way("before-event", "down", text, lambda: self._first_of_all(question))
            case Quantity.LAST_END:
                text = "taking the start of the last exposure instead of its end"
                last = float(o.start_mjd[chosen].max())
                yield _Way("start-of-last", "down", text, lambda: last)

    def _logged_depth(self, question: Question) -> float | None:
        o = self.coverage.observations
        depths = []
        for index in question.telescopes:
            log = self.campaign.telescopes[index].log
            rows = o.row[question.chosen & (o.telescope == index)]
            depths.append(log.depth[np.isin(log.row, rows)])
        return _median(depths)

    def _rows_read(self, question: Question) -> float | None:
        if not question.whole:
            return None
        return float(sum(self.campaign.telescopes[i].log.read for i in question.telescopes))

    def _first_of_all(self, question: Question) -> float | None:
        if not question.whole:
            return None
        before = [self.campaign.telescopes[i].log.before_event for i in question.telescopes]
        starts = [log.start_mjd.min() for log in before if log is not None and len(log)]
        return float(min(starts)) if starts else None


def _fitting(question: Question, ways: Iterable[_Way]) -> list[Explanation]:
    """Carry out the ways that can move the number as asked; keep those that yield it."""
    against = "down" if question.stated.number > question.own else "up"
    roughly = _ROUGH_AREA if question.quantity.is_area else _ROUGH_PROBABILITY
    found = []
    for way in ways:
        if way.direction == against:
            continue
        guess = None if way.rough is None else way.rough()
        if guess is not None and question.falls(guess, roughly) != 0:
            continue
        value = way.count()
        if value is not None and question.falls(value) == 0:
            found.append(Explanation(way.code, value, way.text))
    return found


def _gaps_text(telescopes: Sequence[Telescope]) -> str:
    """Words for fields without the gaps and masks that these telescopes have."""
    gapped = any(
        t.camera is None or (isinstance(t.camera, MosaicCamera) and len(t.camera.corners) > 1)
        for t in telescopes
    )
    left_in = ["the gaps between detectors"] if gapped else []
    left_in += ["what is masked"] if any(t.mask for t in telescopes) else []
    return f"leaving in {' and '.join(left_in) or 'what lies within the outline of a field'}"


def _median(depths: list[NDArray[np.float64]]) -> float | None:
    known = np.concatenate(depths)
    known = known[np.isfinite(known)]
    return float(np.median(known)) if known.size else None
