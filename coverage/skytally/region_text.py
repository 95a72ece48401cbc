"""Region texts (DALI, STC-S, ADQL) into shapes.

Sources: DALI 1.1, sections 3.3.5 to 3.3.7 (`circle`, `polygon`); STC-S 1.33 and its
subset in TAP 1.0, section 6 (frames, compounds); ADQL 2.1, section 4.2 (functions;
the definition of BOX). Widths of boxes are full widths in both standards.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from astropy import units
from astropy.coordinates import FK5, Galactic, SkyCoord
from numpy.typing import NDArray

from skytally.errors import RegionError
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon, Shape, lonlat_to_vector

__all__ = ["parse_region"]

LENGTH_LIMIT = 1_000_000
DEPTH_LIMIT = 32
VERTEX_LIMIT = 2_000
_CACHED_LENGTH = 4_096

_ATOM = re.compile(r"'[^']*'|[(),]|[^\s(),']+|'")
_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")

_FRAMES = {"ICRS": "ICRS", "FK5": "FK5", "J2000": "FK5", "GALACTIC": "GALACTIC"}
_OTHER_FRAMES = frozenset(
    {"FK4", "B1950", "ECLIPTIC", "GALACTIC_II", "SUPER_GALACTIC", "SUPERGALACTIC", "UNKNOWNFRAME"}
    | {"HEE", "GEO_C", "GEO_D", "GALACTIC_I"}
)
# Where the origin is moves no direction on the sky that matters here.
_REFERENCE_POSITIONS = frozenset(
    {"BARYCENTER", "GEOCENTER", "HELIOCENTER", "TOPOCENTER", "LSR", "UNKNOWNREFPOS"}
)
_FLAVORS = frozenset({"CARTESIAN2", "CARTESIAN3", "SPHERICAL3", "CART2", "CART3", "SPHER3"})
_SPHERICAL = frozenset({"SPHERICAL2", "SPHER2"})
_COMPOUNDS = frozenset({"UNION", "INTERSECTION", "DIFFERENCE", "NOT"})
_NOT_REGIONS = {
    "POINT": "a point has no area; give a circle or a polygon",
    "POSITION": "a position has no area; give a circle or a polygon",
    "RANGE": "a range has edges along parallels; give a polygon or a MOC instead",
    "POSITIONINTERVAL": "an interval has edges along parallels; give a polygon or a MOC instead",
    "ELLIPSE": "ellipses are not supported; give a polygon or a MOC instead",
    "SECTOR": "sectors are not supported; give a polygon or a MOC instead",
    "CONVEX": "convex texts are not supported; give a polygon or a MOC instead",
    "ALLSKY": "the whole sky is not supported as a footprint; give a circle of radius 180",
    "REGION": "the function REGION is not supported; give the text inside it by itself",
}
_OTHER_AXES = frozenset(
    {"TIME", "TIMEINTERVAL", "STARTTIME", "STOPTIME", "SPECTRAL", "SPECTRALINTERVAL"}
    | {"REDSHIFT", "REDSHIFTINTERVAL", "VELOCITYINTERVAL"}
)


def parse_region(text: str) -> Shape:
    """Parse the text of a region on the sky.

    Understood, in any case of letters: DALI `circle lon lat r` and
    `polygon lon lat lon lat ...`; STC-S `Circle`, `Polygon` and `Box` with a
    frame (ICRS, FK5, J2000, GALACTIC; ICRS where none is given), a reference
    position, `SPHERICAL2` and `unit deg`, combined by `Union`, `Intersection`,
    `Difference` and `Not`; ADQL `CIRCLE('ICRS', ...)`, `POLYGON`, `BOX`. Shapes
    written one after the other mean their union.

    A box spans its full width and height along the great circles through its
    centre; its sides are great circles at right angles to these arms (ADQL 2.1,
    section 4.2.9). Both windings of a polygon mean the small side.

    Parameters
    ----------
    text : str
        At most 1,000,000 characters, nested at most 32 deep, at most 2,000
        vertices in one polygon.

    Returns
    -------
    Shape
        In ICRS.

    Raises
    ------
    RegionError
        Naming the character (the first is 1) and what stands there.
    """
    if len(text) > LENGTH_LIMIT:
        raise RegionError(
            f"the region text has {len(text)} characters, expected at most {LENGTH_LIMIT}",
            remedy="Give such a region as a MOC file.",
        )
    return _parse_cached(text) if len(text) <= _CACHED_LENGTH else _Parser(text).whole()


@dataclass(frozen=True)
class _Token:
    text: str
    at: int

    @property
    def word(self) -> str:
        return self.text.upper()


class _Parser:
    """Recursive descent over the tokens of one text."""

    def __init__(self, text: str) -> None:
        self._tokens = [_Token(m.group(), m.start() + 1) for m in _ATOM.finditer(text)]
        self._next = 0
        self._end = _Token("", len(text) + 1)

    def whole(self) -> Shape:
        """Parse all of the text; several shapes in a row are their union."""
        parts = [self._region("ICRS", 1)]
        while self._peek().text:
            parts.append(self._region("ICRS", 1))
        return parts[0] if len(parts) == 1 else AnyOf(tuple(parts))

    def _peek(self) -> _Token:
        return self._tokens[self._next] if self._next < len(self._tokens) else self._end

    def _take(self) -> _Token:
        token = self._peek()
        self._next += 1
        return token

    def _take_if(self, text: str) -> bool:
        if self._peek().text != text:
            return False
        self._next += 1
        return True

    def _need(self, text: str) -> None:
        if not self._take_if(text):
            raise _fault(self._peek(), f"expected {text!r}")

    def _region(self, frame: str, depth: int) -> Shape:
        if depth > DEPTH_LIMIT:
            raise _fault(self._peek(), f"more than {DEPTH_LIMIT} regions stand inside one another")
        name = self._take()
        if name.word in _COMPOUNDS:
            return self._compound(name, self._frame(frame), depth)
        if name.word in _OTHER_AXES:
            raise _fault(name, "expected only the part on the sky; take out times and spectra")
        if name.word in _NOT_REGIONS:
            raise _fault(name, _NOT_REGIONS[name.word])
        build = _SHAPES.get(name.word)
        if build is None:
            known = "circle, polygon, box, union, intersection, difference or not"
            raise _fault(name, f"expected {known}")
        numbers, frame = self._function(frame) if self._take_if("(") else self._plain(frame)
        try:
            return build(numbers, _rotation(frame))
        except RegionError as exc:
            raise RegionError(
                f"region text, character {name.at}: {exc.message}", remedy=exc.remedy
            ) from exc

    def _compound(self, name: _Token, frame: str, depth: int) -> Shape:
        self._need("(")
        if self._peek().text.startswith("'"):
            frame = self._quoted_frame(frame)
            self._need(",")
        parts = [self._region(frame, depth + 1)]
        while not self._take_if(")"):
            if not self._peek().text:
                raise _fault(self._peek(), f"expected ')' to close {name.text}")
            self._take_if(",")
            parts.append(self._region(frame, depth + 1))
        self._unit()
        count = {"NOT": 1, "DIFFERENCE": 2}.get(name.word)
        if count is not None and len(parts) != count:
            raise _fault(name, f"{len(parts)} regions stand in it, expected {count}")
        if name.word == "NOT":
            return NotIn(parts[0])
        if name.word == "DIFFERENCE":
            return AllOf((parts[0], NotIn(parts[1])))
        return (AnyOf if name.word == "UNION" else AllOf)(tuple(parts))

    def _frame(self, inherited: str) -> str:
        """Take frame, reference position and flavour, each of which may be absent."""
        frame = inherited
        token = self._peek()
        if token.word in _FRAMES:
            frame = _FRAMES[self._take().word]
        elif token.word in _OTHER_FRAMES:
            raise _fault(token, "expected the frame ICRS, FK5, J2000 or GALACTIC")
        if self._peek().word in _REFERENCE_POSITIONS:
            self._take()
        if self._peek().word in _SPHERICAL:
            self._take()
        elif self._peek().word in _FLAVORS:
            raise _fault(self._peek(), "expected coordinates on the sphere, SPHERICAL2")
        return frame

    def _unit(self) -> None:
        """Take `unit deg` or `unit deg deg`."""
        if self._peek().word != "UNIT":
            return
        self._take()
        token = self._take()
        if token.word != "DEG":
            raise _fault(token, "expected the unit deg")
        if self._peek().word == "DEG":
            self._take()

    def _plain(self, frame: str) -> tuple[list[_Token], str]:
        """Take a frame and numbers up to the next word (DALI and STC-S)."""
        frame = self._frame(frame)
        numbers = []
        while _NUMBER.fullmatch(self._peek().text):
            numbers.append(self._take())
        token = self._peek()
        if not numbers or (token.text == "," or _stands_for_number(token)):
            raise _fault(token, "expected a number" if numbers else "expected a frame or a number")
        self._unit()
        if self._peek().word in _OTHER_AXES:
            raise _fault(
                self._peek(), "expected only the part on the sky; take out times and spectra"
            )
        return numbers, frame

    def _function(self, frame: str, *, points: bool = True) -> tuple[list[_Token], str]:
        """Take the arguments of an ADQL function; a POINT counts as its two numbers."""
        if self._peek().text.startswith("'"):
            frame = self._quoted_frame(frame)
            self._need(",")
        numbers: list[_Token] = []
        while True:
            token = self._take()
            if token.word == "POINT" and points and self._take_if("("):
                inner, inner_frame = self._function(frame, points=False)
                if inner_frame != frame and numbers:
                    raise _fault(token, "expected all points of a shape in one frame")
                if len(inner) != 2:
                    raise _fault(token, "expected a point of two numbers")
                frame = inner_frame
                numbers += inner
            elif _NUMBER.fullmatch(token.text):
                numbers.append(token)
            else:
                raise _fault(token, "expected a number")
            if self._take_if(")"):
                return numbers, frame
            self._need(",")

    def _quoted_frame(self, inherited: str) -> str:
        """Take the coordinate system of an ADQL function; an empty one says nothing."""
        token = self._take()
        words = token.text.strip("'").upper().split()
        if len(token.text) < 2 or not token.text.endswith("'"):
            raise _fault(token, "expected a closing quote")
        if not words:
            return inherited
        known = _FRAMES.get(words[0])
        if known is None or not set(words[1:]) <= _REFERENCE_POSITIONS | _SPHERICAL:
            raise _fault(token, "expected the frame ICRS, FK5, J2000 or GALACTIC")
        return known


@lru_cache(maxsize=16_384)
def _parse_cached(text: str) -> Shape:
    """Keep short texts: a log is checked when read and laid on the sky later."""
    return _Parser(text).whole()


def _stands_for_number(token: _Token) -> bool:
    """Tell whether a word was meant as a number (nan, inf, 1.2.3, 10d)."""
    return token.word in {"NAN", "INF"} or (token.text != "" and token.text[0] in "+-.0123456789")


def _fault(token: _Token, expected: str) -> RegionError:
    shown = token.text if len(token.text) <= 40 else token.text[:37] + "..."
    found = f"found {shown!r}" if token.text else "the text ends"
    return RegionError(
        f"region text, character {token.at}: {found}, {expected}",
        remedy="Write for example: polygon 10 20 11 20 11 21, or Circle ICRS 10 20 0.5.",
    )


@lru_cache(maxsize=4)
def _rotation(frame: str) -> NDArray[np.float64] | None:
    """Matrix, shape (3, 3), that takes unit vectors of a frame to ICRS; None for ICRS."""
    if frame == "ICRS":
        return None
    axes = np.eye(3)
    kind = FK5 if frame == "FK5" else Galactic
    coordinates = SkyCoord(*axes, frame=kind, representation_type="cartesian")
    rotated = coordinates.icrs.cartesian.xyz.to_value(units.dimensionless_unscaled)
    return np.asarray(rotated, dtype=float)


def _positions(tokens: list[_Token], rotation: NDArray[np.float64] | None) -> NDArray[np.float64]:
    """Longitudes and latitudes, shape (m, 2), in ICRS degrees, of number pairs."""
    pairs = np.array([float(token.text) for token in tokens]).reshape(-1, 2)
    for axis, low, high, name in ((0, -360, 720, "longitude"), (1, -90, 90, "latitude")):
        wrong = ~((pairs[:, axis] >= low) & (pairs[:, axis] <= high))
        if wrong.any():
            token = tokens[2 * int(wrong.argmax()) + axis]
            raise RegionError(
                f"the {name} {token.text} at character {token.at} is outside {low} to {high}",
                remedy="Give longitude, then latitude, in degrees.",
            )
    if rotation is None:
        return np.stack((np.mod(pairs[:, 0], 360.0), pairs[:, 1]), axis=1)
    return _to_lonlat(lonlat_to_vector(pairs[:, 0], pairs[:, 1]) @ rotation.T)


def _to_lonlat(vector: NDArray[np.float64]) -> NDArray[np.float64]:
    lon = np.degrees(np.arctan2(vector[:, 1], vector[:, 0])) % 360.0
    lat = np.degrees(np.arctan2(vector[:, 2], np.hypot(vector[:, 0], vector[:, 1])))
    return np.stack((lon, lat), axis=1)


def _count(tokens: list[_Token], expected: int, meaning: str) -> None:
    if len(tokens) != expected:
        raise RegionError(
            f"{len(tokens)} numbers are given, expected {expected}: {meaning}",
            remedy="Give all numbers in degrees.",
        )


def _circle(tokens: list[_Token], rotation: NDArray[np.float64] | None) -> Shape:
    _count(tokens, 3, "longitude, latitude, radius")
    lon, lat = _positions(tokens[:2], rotation)[0]
    return Circle(float(lon), float(lat), float(tokens[2].text))


def _polygon(tokens: list[_Token], rotation: NDArray[np.float64] | None) -> Shape:
    if len(tokens) % 2:
        raise RegionError(
            f"a polygon has {len(tokens)} numbers, expected pairs of longitude and latitude",
            remedy="Add the missing number, or take out the one too many.",
        )
    if len(tokens) > 2 * VERTEX_LIMIT:
        raise RegionError(
            f"a polygon has {len(tokens) // 2} vertices, expected at most {VERTEX_LIMIT}",
            remedy="Give such a region as a MOC file.",
        )
    return Polygon(_positions(tokens, rotation))


def _box(tokens: list[_Token], rotation: NDArray[np.float64] | None) -> Shape:
    _count(tokens, 4, "longitude, latitude, full width, full height")
    lon, lat = np.radians(_positions(tokens[:2], None)[0])
    width, height = (float(token.text) for token in tokens[2:])
    if not (0 < width < 180 and 0 < height < 180):
        raise RegionError(
            f"a box is {width:g} by {height:g} degrees, expected above 0 and below 180",
            remedy="Give full width and full height in degrees.",
        )
    # A great circle at right angles to an arm is a straight line in the gnomonic
    # plane about the centre, at the tangent of the arm's length.
    xi, eta = np.tan(np.radians([width / 2, height / 2]))
    centre = lonlat_to_vector(np.degrees(lon), np.degrees(lat))
    east = np.array([-np.sin(lon), np.cos(lon), 0.0])
    north = np.cross(centre, east)
    corners = np.array(
        [centre + x * east + y * north for x, y in ((-xi, -eta), (xi, -eta), (xi, eta), (-xi, eta))]
    )
    return Polygon(_to_lonlat(corners if rotation is None else corners @ rotation.T))


_Builder = Callable[[list[_Token], NDArray[np.float64] | None], Shape]
_SHAPES: dict[str, _Builder] = {"CIRCLE": _circle, "POLYGON": _polygon, "BOX": _box}
