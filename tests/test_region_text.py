"""Region texts of three dialects, good and broken."""

from __future__ import annotations

import numpy as np
import pytest
from bad_log_inputs import BAD_REGIONS
from hypothesis import given
from hypothesis import strategies as st
from skytally.errors import RegionError
from skytally.region_text import parse_region
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon, lonlat_to_vector

# The same quadrilateral in each dialect: DALI 1.1, 3.3.7; STC-S 1.33; ADQL 2.1, 4.2.
SQUARE = np.array([[10.0, 20.0], [11.0, 20.0], [11.0, 21.0], [10.0, 21.0]])


def ring(shape: object) -> set[tuple[float, float]]:
    assert isinstance(shape, Polygon)
    return {(round(float(lon), 9), round(float(lat), 9)) for lon, lat in shape.vertices_deg}


def vectors(shape: object) -> np.ndarray:
    assert isinstance(shape, Polygon)
    return lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])


@pytest.mark.parametrize(
    "text",
    [
        "polygon 10 20 11 20 11 21 10 21",
        "POLYGON 10.0 20.0 11.0 20.0 11.0 21.0 10.0 21.0 10.0 20.0",
        "  Polygon\tICRS\n10 20 11 20 11 21 10 21  ",
        "Polygon ICRS GEOCENTER SPHERICAL2 +1e1 2.0E+1 11. 20 11 21 10 21 unit deg",
        "Polygon UNKNOWNREFPOS 10 20 11 20 11 21 10 21 unit deg deg",
        "polygon -350 20 371 20 11 21 10 21",
        "POLYGON('ICRS', 10, 20, 11, 20, 11, 21, 10, 21)",
        "polygon ( 'icrs geocenter' ,10,20,11,20,11,21,10,21 )",
        "POLYGON(10, 20, 11, 20, 11, 21, 10, 21)",
        "POLYGON('', 10, 20, 11, 20, 11, 21, 10, 21)",
        "POLYGON(POINT('ICRS', 10, 20), POINT(11, 20), POINT(11, 21), POINT(10, 21))",
    ],
)
def test_dialects_agree_on_a_polygon(text: str) -> None:
    assert ring(parse_region(text)) == {(lon, lat) for lon, lat in SQUARE}


@pytest.mark.parametrize(
    "text",
    ["circle 10 20 0.5", "Circle ICRS BARYCENTER 10 20 0.5", "CIRCLE('ICRS', POINT(10, 20), .5)"],
)
def test_dialects_agree_on_a_circle(text: str) -> None:
    assert parse_region(text) == Circle(10.0, 20.0, 0.5)


def test_both_windings_are_accepted() -> None:
    assert ring(parse_region("polygon 10 21 11 21 11 20 10 20")) == {(x, y) for x, y in SQUARE}


def test_galactic_frame() -> None:
    # North galactic pole and centre in ICRS: The Hipparcos Catalogue, ESA SP-1200 (1997),
    # vol. 1, section 1.5.3 (from memory).
    pole = parse_region("Circle GALACTIC 0 90 1")
    assert isinstance(pole, Circle)
    assert (pole.lon_deg, pole.lat_deg) == pytest.approx((192.85948, 27.12825), abs=2e-5)
    centre = parse_region("CIRCLE('GALACTIC', 0, 0, 1)")
    assert isinstance(centre, Circle)
    assert (centre.lon_deg, centre.lat_deg) == pytest.approx((266.40499, -28.93617), abs=2e-5)


@pytest.mark.parametrize("frame", ["FK5", "J2000"])
def test_fk5_is_within_its_offset_of_icrs(frame: str) -> None:
    # The frames differ by about 23 mas (IERS Technical Note 36, section 2.1.2; from memory).
    shape = parse_region(f"Circle {frame} 150 -20 1")
    assert isinstance(shape, Circle)
    apart = lonlat_to_vector(shape.lon_deg, shape.lat_deg) - lonlat_to_vector(150, -20)
    mas = np.degrees(np.linalg.norm(apart)) * 3.6e6
    assert 1 < mas < 40


@pytest.mark.parametrize(
    ("lon", "lat", "width", "height"),
    [(150, -20, 2, 1), (0, 89, 6, 4), (359.9, 0, 40, 10), (30, 90, 1, 1), (200, 45, 100, 120)],
)
def test_a_box_has_full_widths(lon: float, lat: float, width: float, height: float) -> None:
    """Its sides pass at half the width and height from the centre (ADQL 2.1, 4.2.9)."""
    for text in (
        f"Box ICRS {lon} {lat} {width} {height}",
        f"BOX('ICRS', {lon}, {lat}, {width}, {height})",
    ):
        corners = vectors(parse_region(text))
        assert len(corners) == 4
        pole = np.cross(corners, np.roll(corners, -1, axis=0))
        pole /= np.linalg.norm(pole, axis=1)[:, None]
        away = np.degrees(np.arcsin(np.abs(pole @ lonlat_to_vector(lon, lat))))
        expected = sorted([width / 2, width / 2, height / 2, height / 2])
        assert sorted(away) == pytest.approx(expected, abs=1e-9)
        # The sides of full height face east and west.
        assert len({round(x, 6) for x in away[::2]}) == 1


def test_a_box_turns_with_its_frame() -> None:
    own = vectors(parse_region("Box ICRS 30 40 3 2"))
    turned = vectors(parse_region("Box GALACTIC 30 40 3 2"))
    assert turned @ turned.T == pytest.approx(own @ own.T, abs=1e-12)


def test_compounds_nest_and_hand_down_their_frame() -> None:
    # After the example of STC-S 1.33, section 4 (from memory), with Difference added.
    shape = parse_region(
        "Union GALACTIC (Circle 0 90 1 Intersection (Circle ICRS 10 20 3 Not (Circle 0 0 2))"
        " Difference (Circle 5 5 2 Circle 5 5 1))"
    )
    assert isinstance(shape, AnyOf)
    first, both, difference = shape.parts
    assert isinstance(first, Circle)
    assert first.lat_deg == pytest.approx(27.12825, abs=1e-4)
    assert isinstance(both, AllOf)
    assert both.parts[0] == Circle(10.0, 20.0, 3.0)
    inner = both.parts[1]
    assert isinstance(inner, NotIn)
    assert isinstance(inner.part, Circle)
    assert inner.part.lon_deg == pytest.approx(266.405, abs=1e-3)
    # A difference takes the second away; it is not the symmetric one.
    assert isinstance(difference, AllOf)
    assert isinstance(difference.parts[0], Circle)
    assert isinstance(difference.parts[1], NotIn)


def test_function_form_of_a_union() -> None:
    shape = parse_region("UNION('ICRS', CIRCLE('ICRS', 1, 2, 3), CIRCLE(4, 5, 6))")
    assert isinstance(shape, AnyOf)
    assert shape.parts == (Circle(1.0, 2.0, 3.0), Circle(4.0, 5.0, 6.0))


def test_shapes_in_a_row_are_their_union() -> None:
    shape = parse_region("circle 1 2 3 Circle ICRS 4 5 6 unit deg")
    assert isinstance(shape, AnyOf)
    assert shape.parts == (Circle(1.0, 2.0, 3.0), Circle(4.0, 5.0, 6.0))


@pytest.mark.parametrize(("text", "words"), BAD_REGIONS, ids=[x[:40] for x, _ in BAD_REGIONS])
def test_broken_texts(text: str, words: tuple[str, ...]) -> None:
    with pytest.raises(RegionError) as caught:
        parse_region(text)
    message = str(caught.value)
    assert all(word in message for word in words), message
    assert len(message) < 500


PIECES = [
    *("circle", "polygon", "Box", "union", "not", "difference", "point", "ICRS", "FK5", "unit"),
    *("(", ")", ",", "'ICRS'", "'", "deg", "1", "-2.5", "89", "361", "1e3", "nan", "\u00e9"),
]


@given(st.lists(st.sampled_from(PIECES), max_size=25))
def test_any_text_is_a_shape_or_a_region_error(words: list[str]) -> None:
    try:
        remedy = "none needed" if parse_region(" ".join(words)) else None
    except RegionError as exc:
        remedy = exc.remedy
    assert remedy
