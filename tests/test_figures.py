"""Charts and plots: projections against their formulas, pictures against the spans."""

from __future__ import annotations

import base64
import io
import re
from dataclasses import replace
from xml.etree import ElementTree

import astropy.units as u
import matplotlib
import numpy as np
import pytest
from astropy_healpix import healpix_to_lonlat, lonlat_to_healpix
from matplotlib import image
from matplotlib.colors import to_rgb
from sample_results import NAMES, sample_map, sample_results
from skytally.figure_style import (
    ACCENT,
    GREY,
    INK,
    WIDTH_IN,
    Sketch,
    hatch_mask,
    new_figure,
    style_of,
)
from skytally.figures import draw_figures, sketch_figures
from skytally.limit_plots import (
    distance_figure,
    exclusion_figure,
    fading_figure,
    fading_levels,
    histogram_figure,
)
from skytally.projection import (
    Window,
    dec_label,
    galactic_plane,
    graticule,
    ra_label,
    whole_sky_window,
    zoom_window,
)
from skytally.results import Results
from skytally.sky_frame import paint, zoom_frame
from skytally.sky_parts import credible_parts, zooms
from skytally.sky_picture import Inks, Layer, paint_sky
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Spans, cell_to_span
from space_results import with_space

FULL_SKY_DEG2 = 41252.96


@pytest.fixture(scope="module")
def results() -> Results:
    return sample_results(exposures=40)


def mollweide(lon_deg: np.ndarray, lat_deg: np.ndarray, middle_deg: float) -> np.ndarray:
    """Snyder, Map Projections: A Working Manual (1987), equations 31-1 to 31-4; from memory."""
    lat = np.radians(lat_deg)
    theta = lat.copy()
    for _ in range(200):
        slope = np.maximum(2 + 2 * np.cos(2 * theta), 1e-12)
        theta -= (2 * theta + np.sin(2 * theta) - np.pi * np.sin(lat)) / slope
    turn = np.radians((lon_deg - middle_deg + 180) % 360 - 180)
    x = -2 * np.sqrt(2) / np.pi * turn * np.cos(theta)
    return np.degrees(np.stack((x, np.sqrt(2) * np.sin(theta)), axis=1))


def test_the_whole_sky_is_mollweides_with_right_ascension_to_the_left() -> None:
    random = np.random.default_rng(5)
    lon, lat = random.uniform(0, 360, 500), random.uniform(-85, 85, 500)
    window = whole_sky_window(150.0)
    found = window.project(np.stack((lon, lat), axis=1))
    np.testing.assert_allclose(found, mollweide(lon, lat, 150.0), atol=1e-6)
    left, right = window.project(np.array([[160.0, 0.0], [140.0, 0.0]]))[:, 0]
    assert left < 0 < right


def test_the_zoom_keeps_areas_and_its_middle() -> None:
    window = zoom_window(np.array([[350.0, 60.0], [20.0, 70.0]]))
    lonlat = np.array([[window.lon_deg, window.lat_deg], [10.0, 65.0], [200.0, 80.0]])
    plane = window.project(lonlat)
    lon, lat = np.radians(lonlat).T
    # The radius is 2 sin(θ/2): Snyder (1987), equation 24-4; from memory.
    cosine = np.sin(lat) * np.sin(lat[0]) + np.cos(lat) * np.cos(lat[0]) * np.cos(lon - lon[0])
    radius = np.degrees(2 * np.sin(np.arccos(np.clip(cosine, -1, 1)) / 2))
    np.testing.assert_allclose(np.hypot(*plane.T), radius, atol=1e-6)
    for corner in ((350.0, 60.0), (20.0, 70.0)):
        x, y = window.project(np.array([corner]))[0]
        assert window.left < x < window.right
        assert window.bottom < y < window.top


@pytest.mark.parametrize("middle", [0.0, 137.0])
def test_samples_cover_the_sky_once(middle: float) -> None:
    window = whole_sky_window(middle)
    position = window.sample(400)
    sample = (window.right - window.left) * (window.top - window.bottom) / position.size
    assert (position >= 0).sum() * sample == pytest.approx(FULL_SKY_DEG2, rel=2e-3)
    x, y = window.grid(400)
    row, column = 130, 250
    lonlat = window.unproject(np.array([[x[column], y[row]]]))
    assert position[row, column] == lonlat_to_line(lonlat)[0]
    np.testing.assert_allclose(mollweide(*lonlat.T, middle), [[x[column], y[row]]], atol=1e-6)


def test_a_sampled_region_has_the_area_of_its_spans() -> None:
    random = np.random.default_rng(11)
    region = Spans.from_cells(4, random.choice(12 << 8, 300, replace=False))
    window = whole_sky_window(40.0)
    position = window.sample(900)
    sample = (window.right - window.left) * (window.top - window.bottom) / position.size
    inside = region.contains(position) & (position >= 0)
    assert inside.sum() * sample == pytest.approx(region.area_deg2, rel=5e-3)


def test_outlines_break_at_the_seam_and_close_around_a_pole() -> None:
    window = whole_sky_window(180.0)
    square = np.array([[356.0, -4.0], [4.0, -4.0], [4.0, 4.0], [356.0, 4.0]])
    path = window.lines([square])
    assert np.isnan(path).any()
    steps = np.diff(path[:, 0])
    assert np.nanmax(np.abs(steps)) < 5.0
    assert {-1.0, 1.0} <= set(np.sign(path[np.isfinite(path[:, 0]), 0]))
    lon = np.arange(0.0, 360.0, 10.0)
    cap = np.stack((lon, np.full(lon.size, 80.0)), axis=1)
    zoom = Window("ZEA", 0.0, 90.0, -15.0, 15.0, -15.0, 15.0)
    ring = zoom.lines([cap])
    ring = ring[np.isfinite(ring[:, 0])]
    np.testing.assert_allclose(
        np.hypot(*ring.T), np.degrees(2 * np.sin(np.radians(5.0))), rtol=1e-2
    )
    np.testing.assert_allclose(ring[0], ring[-1], atol=1e-9)


def test_outlines_outside_the_window_are_dropped() -> None:
    zoom = zoom_window(np.array([[10.0, 10.0], [12.0, 11.0]]))
    far = np.array([[190.0, -10.0], [191.0, -10.0], [191.0, -9.0]])
    near = np.array([[10.5, 10.2], [11.0, 10.2], [11.0, 10.6]])
    assert len(zoom.lines([far])) == 0
    assert len(zoom.lines([far, near])) >= 4


@pytest.mark.parametrize(
    "lonlat",
    [
        [[10.0, 10.0], [10.02, 10.02]],
        [[355.0, -3.0], [8.0, 5.0]],
        [[0.0, 85.0], [180.0, 80.0]],
        [[0.0, -89.9], [90.0, -89.9]],
        [[20.0, -40.0], [80.0, 40.0]],
    ],
)
def test_every_zoom_has_a_few_lines_each_way(lonlat: list[list[float]]) -> None:
    lines = graticule(zoom_window(np.array(lonlat)))
    for is_meridian in (True, False):
        number = sum(line.is_meridian is is_meridian for line in lines)
        assert 1 <= number <= 24
    assert all(np.isfinite(line.plane).any() for line in lines)


def test_labels_name_hours_and_degrees() -> None:
    assert ra_label(75.0, 15.0) == "5h\n75°"
    assert ra_label(80.0, 2.5) == "5h20m\n80°"
    assert ra_label(0.125, 0.125) == "0h00m30s\n0.125°"
    assert ra_label(0.0, 30.0) == "0h\n0°"
    assert ra_label(300.0, 30.0) == "20h\n300°"
    assert dec_label(-30.0, 10.0) == "−30°"
    assert dec_label(20.5, 0.5) == "+20°30′"
    assert dec_label(0.0, 5.0) == "0°"


def test_the_galactic_plane_passes_the_galactic_centre() -> None:
    # Sagittarius A*, ICRS: AJ 116, 1998 (from memory), 266.417, −29.008 degrees.
    window = whole_sky_window(266.0)
    path = galactic_plane(window)
    centre = window.project(np.array([[266.417, -29.008]]))
    assert np.nanmin(np.hypot(*(path - centre).T)) < 0.3


def test_telescopes_differ_in_colour_or_in_line_and_hatch() -> None:
    styles = [style_of(index) for index in range(84)]
    assert len({(s.colour, s.hatch) for s in styles}) == 84
    assert len({(s.colour, str(s.line), s.marker) for s in styles}) == 84


def luminance(colour: str) -> float:
    """Relative luminance of WCAG 2.1."""
    rgb = np.array(to_rgb(colour))
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


@pytest.mark.parametrize("colour", [INK, GREY, ACCENT])
def test_text_stands_out_from_white(colour: str) -> None:
    assert 1.05 / (luminance(colour) + 0.05) >= 4.5


def test_parts_of_a_region_are_found_and_hold_all_of_it() -> None:
    double = sample_map("double", None, centres=(0.0, 180.0), spread_deg=10.0)
    parts = credible_parts(double)
    assert len(parts) == 2
    held = double.restricted(0.9).total
    assert sum(part.probability for part in parts) == pytest.approx(held)
    # The two arcs weigh 1 to 0.7 by construction.
    assert parts[0].probability / held == pytest.approx(1 / 1.7, abs=0.03)
    for part in parts:
        inside = double.credible_region(0.9).contains(lonlat_to_line(part.lonlat_deg))
        assert inside.all()


def lonlat_to_line(lonlat_deg: np.ndarray) -> np.ndarray:
    lon, lat = lonlat_deg.T * u.deg
    return lonlat_to_healpix(lon, lat, 1 << LINE_ORDER, order="nested")


@pytest.mark.parametrize("order", [2, 12])
def test_parts_work_on_coarse_and_on_fine_cells(order: int) -> None:
    start, stop = cell_to_span(order, np.array([5, 6, 100]))
    density = 1.0 / (3 * (4 * np.pi / (12 << 2 * order)))
    spot = SkyMap(start, stop, np.full(3, density), order)
    parts = credible_parts(spot)
    assert sum(part.probability for part in parts) == pytest.approx(1.0)
    assert all(len(part.lonlat_deg) for part in parts)


def test_figures_are_there_when_they_have_something_to_show(results: Results) -> None:
    assert list(draw_figures(results)) == [
        "whole-sky",
        "zoom",
        "versions",
        "timeline",
        "credit",
        "depth",
    ]
    bare = sample_results(covered=False, depth=False, exposures=20)
    assert list(draw_figures(bare)) == ["whole-sky", "zoom", "versions"]
    one = sample_results(names=("Heron",), exposures=2, maps=(sample_map("only", None),))
    assert "credit" not in draw_figures(one)
    assert "versions" not in draw_figures(one)


@pytest.fixture(scope="module")
def deep(results: Results) -> Results:
    return with_space(results, middle=-16.0)


def test_a_map_with_distances_has_four_figures_more(results: Results, deep: Results) -> None:
    more = list(draw_figures(deep))[len(draw_figures(results)) :]
    assert more == ["depth-histogram", "distance", "exclusion", "fading"]
    bare = with_space(sample_results(covered=False, depth=False, exposures=20))
    assert list(draw_figures(bare)) == ["whole-sky", "zoom", "versions"]


def newest(parts: tuple[object, ...], deep: Results) -> list[object]:
    return [part for part in parts if part.map == deep.newest.version]


def test_the_curves_drawn_are_the_numbers(deep: Results) -> None:
    profile = newest(deep.distance_profiles, deep)[0]
    lines = distance_figure(profile).axes[0].get_lines()
    wanted = [profile.whole, profile.covered, *profile.within_reach]
    assert len(lines) == len(wanted)
    for line, values in zip(lines, wanted):
        np.testing.assert_allclose(line.get_xdata(), profile.distance_mpc)
        np.testing.assert_allclose(line.get_ydata(), 100 * np.array(values))
    curves = newest(deep.exclusions, deep)
    axes = exclusion_figure(curves).axes[0]
    drawn = [line for line in axes.get_lines() if len(line.get_xdata()) > 2]
    assert len(drawn) == len(curves)
    found = sorted(tuple(line.get_ydata()) for line in drawn)
    expected = sorted(tuple(100 * np.array(curve.probability)) for curve in curves)
    np.testing.assert_allclose(found, expected)
    faint, bright = axes.get_xlim()
    assert faint > -16.0 > bright, "brighter is to the right, and the rise is in sight"
    levels = {line.get_ydata()[0] for line in axes.get_lines() if len(line.get_xdata()) == 2}
    assert {50, 90} <= levels


def test_the_histograms_hold_what_has_a_limit(deep: Results) -> None:
    histograms = newest(deep.depth_histograms, deep)
    for axes, histogram in zip(histogram_figure(histograms).axes, histograms, strict=True):
        values, edges, _ = axes.patches[0].get_data()
        np.testing.assert_allclose(values, 100 * np.array(histogram.probability))
        np.testing.assert_allclose(edges, histogram.edges)
        assert f"band {histogram.band}" == axes.get_title(loc="left")


def test_each_contour_is_labelled_where_it_runs(deep: Results) -> None:
    plane = newest(deep.fading_planes, deep)[0]
    levels = fading_levels(plane)
    texts = fading_figure(plane).axes[0].texts
    assert [text.get_text() for text in texts] == [f"{level:g} %" for level in levels]
    highest = deep.row().probability
    for text, level in zip(texts, levels):
        peak, fade = text.get_position()
        # The plane was made of this formula, and is interpolated over half a magnitude.
        value = 100 * highest / (1 + np.exp((peak + fade + 16.0) / 0.4))
        assert value == pytest.approx(level, abs=0.04 * 100 * highest)


@pytest.mark.parametrize("stretch", [1.0, 2.85])
def test_captions_say_what_is_ruled_out_and_on_what_terms(stretch: float) -> None:
    deep = with_space(sample_results(exposures=60), middle=-16.0, stretch=stretch)
    drawings = draw_figures(deep)
    every = newest(deep.exclusions, deep)[0]
    caption = drawings["exclusion"].caption
    assert (every.magnitude_50 is None) == (stretch == 1.0)
    if every.magnitude_50 is None:
        assert f"more than {100 * every.highest:.1f}\u00a0% of all probability" in caption
    else:
        assert f"−{abs(np.floor(every.magnitude_50 * 10) / 10):.1f} in every band" in caption
    for name in ("exclusion", "fading", "depth-histogram"):
        assert "not corrected for Galactic extinction" in drawings[name].caption
    for name in ("exclusion", "fading"):
        assert "without K-correction" in drawings[name].caption
    assert f"{100 * deep.row().probability:.1f}\u00a0%" in drawings["distance"].caption


@pytest.mark.parametrize("space", [False, True])
def test_drawings_are_safe_and_complete_svg(results: Results, deep: Results, space: bool) -> None:
    ids: list[str] = []
    for name, drawing in draw_figures(deep if space else results).items():
        root = ElementTree.fromstring(drawing.svg)
        assert root.get("role") == "img"
        assert root.get("aria-label") == drawing.alt != ""
        assert drawing.caption.endswith(".")
        elements = list(root.iter())
        tags = {element.tag.rpartition("}")[2] for element in elements}
        assert not tags & {"script", "style", "metadata", "foreignObject"}
        for element in elements:
            assert "style" not in element.attrib
            href = element.get("href", "#")
            assert href.startswith(("#", "data:image/png;base64,"))
            ids += [element.attrib["id"]] if "id" in element.attrib else []
        known = {e.attrib["id"] for e in elements if "id" in e.attrib}
        pointed = set(re.findall(r"url\(#([^)]+)\)", drawing.svg))
        pointed |= {h[1:] for e in elements if (h := e.get("href", "")).startswith("#")}
        assert pointed <= known
        assert all(i.startswith(f"{name}-") for i in known)
    assert len(ids) == len(set(ids))


@pytest.mark.parametrize("case", ["usual", "deep", "one version", "many", "spot"])
def test_sketches_tell_the_size_before_the_drawing_is_made(
    results: Results, deep: Results, case: str
) -> None:
    spot = sample_map("1", None, width_deg=1.0, spread_deg=1.0, centres=(40.0,), order=7)
    cases = {
        "usual": lambda: results,
        "deep": lambda: deep,
        "one version": lambda: replace(results, maps=results.maps[-1:]),
        "many": lambda: sample_results(names=tuple(f"Heron {n}" for n in range(11)), exposures=30),
        "spot": lambda: sample_results(exposures=20, maps=(spot,)),
    }
    for sketch in sketch_figures(cases[case]()).values():
        drawing = sketch.draw()
        assert (drawing.name, drawing.alt) == (sketch.name, sketch.alt)
        box = re.search(r'viewBox="0 0 ([\d.]+) ([\d.]+)"', drawing.svg)
        # In points, 72 to an inch.
        assert float(box[1]) == pytest.approx(72 * WIDTH_IN, abs=1e-3)
        assert float(box[2]) == pytest.approx(72 * sketch.height_in, abs=1e-3)


def test_the_same_results_give_the_same_drawings(results: Results) -> None:
    first, second = draw_figures(results), draw_figures(results)
    assert {n: d.svg for n, d in first.items()} == {n: d.svg for n, d in second.items()}


def test_names_are_drawn_as_they_are() -> None:
    names = ("<b>$x_1$</b> &", "tab\there\x07", "名前")
    drawings = draw_figures(sample_results(names=names, exposures=30))
    whole = ElementTree.fromstring(drawings["whole-sky"].svg)
    texts = ["".join(e.itertext()).strip() for e in whole.iter("{http://www.w3.org/2000/svg}text")]
    assert "<b>$x_1$</b> &" in texts
    assert "tab here" in texts
    assert "名前" in texts
    assert all("<b>" not in drawing.svg for drawing in drawings.values())


def pictures(svg: str) -> list[np.ndarray]:
    found = re.findall(r"data:image/png;base64,([^\"]+)", svg)
    return [image.imread(io.BytesIO(base64.b64decode(data))) for data in found]


def test_the_chart_shows_as_much_as_was_counted(results: Results) -> None:
    picture = max(pictures(draw_figures(results)["versions"].svg), key=lambda p: p.size)
    coloured = np.ptp(picture[..., :3], axis=2) > 0.15
    on_sky = picture[..., 3] > 0
    share = coloured.sum() / on_sky.sum()
    assert share * FULL_SKY_DEG2 == pytest.approx(results.row().area_deg2, rel=0.02)


def test_pictures_mix_shade_and_inks_sample_by_sample() -> None:
    """Each sample by hand: its share of the probability, then ink over ink, each the product of
    its colour and the shade (multiply and source-over: W3C Compositing and Blending Level 1;
    from memory).
    """
    rng = np.random.default_rng(5)
    skymap = sample_map("1 first", 1.0)
    row = rng.integers(0, skymap.starts.size, (17, 23))
    position = skymap.starts[row] + rng.integers(0, 1 << 40, row.shape)
    position[rng.random(row.shape) < 0.1] = -1
    # A region that reaches the line's first cell must not ink what lies off the sky.
    regions = [
        Spans.from_cells(2, np.array([0, 191])).union(Spans.from_cells(4, rng.integers(0, 3072, n)))
        for n in (900, 1500, 700)
    ]
    layers = [Layer(regions[0], "#0072B2", 1), Layer(regions[1], "#D55E00", 4)]
    layers.append(Layer(regions[2], "#009E73", None))
    picture = paint_sky(position, skymap, Inks.of(layers))
    density, area = skymap.density_per_sr, skymap.stops - skymap.starts
    seen = set()
    for (y, x), place in np.ndenumerate(position):
        assert picture[y, x, 3] == (0 if place < 0 else 255)
        if place < 0:
            continue
        here = density[row[y, x]]
        denser = density > here
        low = np.sum(density[denser] * area[denser]) / np.sum(density * area)
        high = np.sum((density * area)[density >= here]) / np.sum(density * area)
        # Cells of one density come in an order of their own: any level between will do.
        steps = {int(np.ceil(20 * (1 - level))) for level in np.linspace(low, high, 5)[1:]}
        wanted = []
        for step in steps:
            part = step / 20
            colour = np.array(to_rgb("#f1f3f5")) * (1 - part) + np.array(to_rgb("#8894a0")) * part
            colour = np.ones(3) if step < 2 or here == 0 else colour
            paper = colour
            for layer, region in zip(layers, regions):
                if not ((region.starts <= place) & (place < region.stops)).any():
                    continue
                seen.add(layer.hatch)
                lined = layer.hatch is not None and hatch_mask(layer.hatch, row.shape)[y, x]
                ink = 0.8 if layer.hatch is None else 0.85 if lined else 0.2
                colour = ink * paper * np.array(to_rgb(layer.colour)) + (1 - ink) * colour
            wanted.append(255 * colour)
        assert min(np.abs(picture[y, x, :3] - one).max() for one in wanted) < 0.51
    assert seen == {1, 4, None}


def test_captions_conclude_from_the_numbers(results: Results) -> None:
    drawings = draw_figures(results)
    all_together = ("2 update", None, None, None)
    total = next(
        t for t in results.timelines if (t.map, t.telescope, t.band, t.night) == all_together
    )
    steps = np.array(total.probability)
    half = total.hours[int(np.searchsorted(steps, steps[-1] / 2))]
    assert f"reached {half:.1f}\u00a0h after" in drawings["timeline"].caption
    credits = {n: results.row(telescope=n).probability_credit for n in NAMES}
    assert drawings["credit"].caption.startswith(max(credits, key=credits.get))
    deepest = max(e.depth for e in results.exposures if e.depth is not None)
    assert f"{deepest:.2f}" in drawings["depth"].caption
    without = sum(e.depth is None for e in results.exposures)
    assert f"{without}\u00a0exposures of 40" in drawings["depth"].caption


def test_many_outlines_are_left_to_the_picture() -> None:
    few = sample_results(exposures=45, names=("Heron",), detectors=9)
    many = sample_results(exposures=45, names=("Heron",), detectors=100)
    assert sum(map(len, many.sky.outlines)) > 3000 > sum(map(len, few.sky.outlines))
    short, long = (len(draw_figures(r)["whole-sky"].svg) for r in (many, few))
    assert short < long


def test_a_failing_figure_leaves_no_setting_behind() -> None:
    before = matplotlib.rcParams["svg.fonttype"]

    def fail() -> object:
        new_figure(1.0)
        raise RuntimeError("no")

    with pytest.raises(RuntimeError):
        Sketch("x", "", "", "", 1.0, fail).draw()
    assert matplotlib.rcParams["svg.fonttype"] == before


def two_spots(second_lon: float, weight: float) -> SkyMap:
    """Two round spots on the equator, the first at RA 20 degrees with weight one."""
    lon, lat = cell_centres(6)
    amount = np.zeros(lon.size)
    for middle, part in ((20.0, 1.0), (second_lon, weight)):
        apart = np.hypot((lon - middle + 180) % 360 - 180, lat)
        amount += part * np.exp(-0.5 * (apart / 3) ** 2)
    start, stop = cell_to_span(6, np.arange(amount.size))
    return SkyMap(start, stop, amount / amount.sum() * amount.size / (4 * np.pi), 6)


def cell_centres(order: int) -> tuple[np.ndarray, np.ndarray]:
    lon, lat = healpix_to_lonlat(np.arange(12 << 2 * order), 1 << order, order="nested")
    return lon.to_value("deg"), lat.to_value("deg")


@pytest.mark.parametrize("second_lon", [80.0, 200.0, 355.0])
def test_two_parts_have_a_zoom_each_about_their_own_centre(second_lon: float) -> None:
    shown = zooms(two_spots(second_lon, 0.5))
    assert [zoom.window.code for zoom in shown] == ["ZEA", "ZEA"]
    for zoom, lon in zip(shown, (20.0, second_lon)):
        window = zoom.window
        # The middle of the plane is where the projection touches the sphere.
        assert (window.lon_deg - lon + 180) % 360 - 180 == pytest.approx(0, abs=0.2)
        assert window.lat_deg == pytest.approx(0, abs=0.2)
        x, y = window.project(zoom.part.lonlat_deg).T
        assert ((window.left < x) & (x < window.right)).all()
        assert ((window.bottom < y) & (y < window.top)).all()
    assert shown[0].part.probability == pytest.approx(2 * shown[1].part.probability, rel=0.15)
    assert shown[0].height_in == pytest.approx(shown[1].height_in)
    assert sum(zoom.width_in for zoom in shown) < WIDTH_IN - 0.9


@pytest.mark.parametrize(("second_lon", "weight"), [(80.0, 0.0), (80.0, 0.01), (24.0, 0.5)])
def test_one_part_or_hardly_a_second_has_one_zoom(second_lon: float, weight: float) -> None:
    assert len(zooms(two_spots(second_lon, weight))) == 1


def test_two_zooms_are_named_alike_on_both_charts() -> None:
    results = sample_results(
        exposures=20, maps=(sample_map("double", None, centres=(0.0, 180.0), spread_deg=10.0),)
    )
    drawings = draw_figures(results)
    assert "A holds" in drawings["zoom"].caption
    for name in ("whole-sky", "zoom"):
        svg = ElementTree.fromstring(drawings[name].svg)
        texts = [e.text for e in svg.iter("{http://www.w3.org/2000/svg}text")]
        assert [t for t in texts if t in {"A", "B"}] == ["A", "B"]


@pytest.mark.parametrize("pole", [90.0, -90.0])
def test_about_a_pole_lines_are_labelled_where_they_run(pole: float) -> None:
    window = Window("ZEA", 0.0, pole, -12.0, 12.0, -8.0, 8.0)
    axes = new_figure(4.0).add_axes((0, 0, 1, 1))
    paint(axes, window, np.zeros((8, 12, 4), dtype=np.uint8))
    zoom_frame(axes, window)
    assert len(axes.texts) >= 8
    for text in axes.texts:
        lon, lat = window.unproject(np.array([text.get_position()]))[0]
        label = text.get_text()
        if "h" in label:
            wanted = float(label.split()[1].rstrip("°"))
            assert (lon - wanted + 180) % 360 - 180 == pytest.approx(0, abs=0.1)
        else:
            assert lat == pytest.approx(float(label.rstrip("°").replace("−", "-")), abs=0.05)
