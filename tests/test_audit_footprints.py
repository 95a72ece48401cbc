"""Planted faults of footprints and their clean twins; expectations are closed forms."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from campaign_builder import campaign, log_table, telescope
from skytally.audit_footprints import footprint_findings
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.campaign import load_campaign
from skytally.footprints import lay_footprints
from skytally.log_io import LogOptions, read_log
from skytally.log_regions import resolve_regions
from skytally.region_text import parse_region
from skytally.skymap_io import circle_skymap

R90 = 5.0
# Of a Gaussian on a small piece of sky, r² at a level is −2σ² ln(1 − level) (closed form).
R999 = R90 * np.sqrt(np.log(1e-3) / np.log(0.1))
SKYMAP = circle_skymap(30, 0, R90, label="1")


def check(telescopes, maps=(SKYMAP,)):
    loaded = campaign(telescopes, maps)
    return footprint_findings(loaded, lay_footprints(loaded))


def heron(ra, dec, radius=0.5, name="Heron"):
    return telescope(name, CircleCamera(radius), log_table(name, ra, dec))


def with_regions(texts, name="Heron"):
    nothing = np.full(len(texts), np.nan)
    log = replace(log_table(name, nothing, nothing), region=np.array(texts, dtype=object))
    return telescope(name, None, log, regions={text: parse_region(text) for text in texts})


def from_csv(tmp_path, lines, **options):
    path = tmp_path / "heron.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    log, regions, _ = resolve_regions(read_log(path, "Heron", LogOptions(**options)), tmp_path)
    return telescope("Heron", None, log, regions=regions)


def test_a_clean_campaign_has_no_findings():
    assert check([heron([29.0, 31.0], [0.0, 1.0])]) == []


def test_the_example_campaign_is_clean():
    path = Path(__file__).parent.parent / "examples" / "lantern-7" / "campaign.toml"
    loaded = load_campaign(path)
    assert footprint_findings(loaded, lay_footprints(loaded)) == []


# --- regions as they are written ------------------------------------------------------------

SQUARE = "Polygon ICRS 29 -1 31 -1 31 1 29 1"
BOW_TIE = "Polygon ICRS 29 -1 31 1 31 -1 29 1"


def test_rows_of_crossed_polygons_are_gathered(tmp_path):
    lines = ["start,region", *(f"{62000 + i},{SQUARE}" for i in range(3))]
    assert check([from_csv(tmp_path, lines)]) == []
    lines[2:2] = [f"62010,{BOW_TIE}", f"62011,Union ({SQUARE} {BOW_TIE})"]
    (found,) = check([from_csv(tmp_path, lines)])
    assert (found.code, found.severity, found.rows) == ("crossed-polygon", "caution", (3, 4))
    assert "set aside" in found.done


def test_another_unreadable_region_is_no_bow_tie(tmp_path):
    lines = ["start,region", f"62000,{SQUARE}", "62001,Polygon ICRS 29 -1"]
    assert check([from_csv(tmp_path, lines)]) == []


def turned(ring):
    return ring.reshape(-1, 2)[::-1].ravel()


def written(ring):
    return "Polygon ICRS " + " ".join(f"{x:.6f}" for x in ring)


def test_a_ring_that_runs_the_other_way_is_noted():
    rng = np.random.default_rng(2)
    rings = []
    for _ in range(9):
        turn = np.sort(rng.uniform(0, 2 * np.pi, 7) + 1e-3)
        corners = np.array([30, 20]) + rng.uniform(0.8, 1.2) * np.stack(
            (np.cos(turn), np.sin(turn)), axis=1
        )
        # The shoelace formula with east to the left: positive runs counter-clockwise.
        x, y = -corners[:, 0], corners[:, 1]
        assert np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y) < 0
        rings.append(corners.ravel())
    maps = [circle_skymap(30, 20, 5)]
    clockwise, other = [written(x) for x in rings], [written(turned(x)) for x in rings]
    assert check([with_regions(clockwise)], maps) == []
    assert check([with_regions(other)], maps) == []
    (found,) = check([with_regions([*other[:4], *clockwise[4:6], *other[6:]])], maps)
    assert (found.code, found.severity, found.rows) == ("ring-reversed", "note", (6, 7))
    assert "run clockwise" in found.text
    (found,) = check([with_regions([*clockwise[:8], other[8]])], maps)
    assert found.rows == (10,)
    assert "run counter-clockwise" in found.text


def test_a_mosaic_of_both_windings_and_a_box_are_no_reversed_rings():
    back = "Polygon ICRS 29 1 31 1 31 3 29 3"
    mosaic = f"Union ICRS ({SQUARE.replace('ICRS ', '')} Polygon 29 3 31 3 31 1 29 1)"
    other = mosaic.replace("29 -1", "29 -1.5")
    assert check([with_regions([mosaic, other, back])]) == []
    reverse = "Polygon ICRS 29 3 31 3 31 1 29 1"
    assert check([with_regions([reverse, "Box ICRS 30 0 2 2"])]) == []


def test_a_field_of_view_read_as_a_circle_is_noted(tmp_path):
    lines = ["s_ra,s_dec,s_fov,t_min,s_region", "30,0,1.5,62000,", f"30,0,1.5,62001,{SQUARE}"]
    (found,) = check([from_csv(tmp_path, lines, use_fov=True)])
    assert (found.code, found.severity, found.rows) == ("field-as-circle", "note", (2,))
    assert "s_fov" in found.text
    assert check([from_csv(tmp_path, [lines[0], lines[2]], use_fov=True)]) == []


def test_a_circle_that_the_log_gives_as_its_region_is_no_field_of_view(tmp_path):
    lines = ["s_ra,s_dec,s_fov,t_min,s_region", "30,0,1.5,62000,circle 30.0 0.0 0.5"]
    assert check([from_csv(tmp_path, lines, use_fov=True)]) == []


@pytest.mark.parametrize(
    ("camera", "stated", "expected"),
    [
        (CircleCamera(0.75), 1.5, False),
        (CircleCamera(0.75), 0.75, True),  # a radius
        (CircleCamera(0.75), 3.0, True),
        (CircleCamera(0.75), 90.0, True),  # arcminutes
        (MosaicCamera.rectangle(1.6, 1.2), 1.2, False),  # a side
        (MosaicCamera.rectangle(1.6, 1.2), 2.0, False),  # the diagonal (3-4-5 triangle)
        (MosaicCamera.rectangle(1.6, 1.2), 1.0 / 60, True),
        (MosaicCamera.rectangle(1.6, 1.2), np.nan, False),
    ],
)
def test_a_camera_of_another_size_than_the_log_states_is_doubted(camera, stated, expected):
    log = replace(log_table("Heron", [30.0, 31.0], [0.0, 0.0]), fov_deg=np.full(2, stated))
    found = check([telescope("Heron", camera, log)])
    assert [(x.code, x.rows) for x in found] == [("camera-of-another-size", (2, 3))] * expected


# --- footprints as they lie -----------------------------------------------------------------


def test_a_footprint_of_more_than_half_the_sky_is_doubted():
    texts = ["circle 30 0 89", "circle 30 0 91", "Not (Circle ICRS 210 0 60)"]
    (found,) = check([with_regions(texts)])
    assert (found.code, found.severity, found.rows) == ("footprint-vast", "caution", (3, 4))
    # Closed form: a cap's complement, 2π(1 + cos 60°) = 3π sr.
    size = float(found.text.rsplit("up to ", 1)[1].split(" deg")[0].replace(",", ""))
    assert size == pytest.approx(3 * np.pi * np.degrees(1) ** 2, rel=1e-3)
    assert check([with_regions(texts[:1])]) == []


def test_a_log_that_is_all_off_the_map_is_doubted():
    far = heron([70.0, 72.0], [0.0, 3.0], name="Plover")
    (found,) = check([heron([30.0], [0.0]), far])
    assert (found.code, found.severity) == ("outside-map", "caution")
    assert (found.subject, found.rows) == ("Plover", (2, 3))
    away = float(found.text.split("about ")[1].split(" deg")[0])
    assert away == pytest.approx(40 - R999, abs=1.5)
    one_on = heron([70.0, 72.0, 33.0], [0.0, 3.0, 0.0], name="Plover")
    assert check([heron([30.0], [0.0]), one_on]) == []


def test_the_footprint_counts_and_not_its_centre():
    centre = 30 + R999 + 1.5
    assert check([heron([centre], [0.0], radius=1.8)]) == []
    (found,) = check([heron([centre], [0.0], radius=1.2), heron([30], [0], name="Plover")])
    assert found.code == "outside-map"


def test_a_log_on_any_version_is_on_the_map():
    maps = [SKYMAP, circle_skymap(200, 40, 5, label="2")]
    assert check([heron([200.0], [40.0])], maps) == []
    assert check([heron([30.0], [0.0])], maps[::-1]) == []
    assert [x.code for x in check([heron([100.0], [40.0])], maps)] == ["outside-map"]


def test_where_all_logs_are_off_the_map_the_map_is_doubted():
    found = check([heron([70.0], [0.0]), heron([80.0], [0.0], name="Plover")])
    assert [x.subject for x in found] == ["Heron", "Plover"]
    assert all("maps are those of this event" in x.remedy for x in found)
    assert all("all telescopes" in x.text for x in found)


def test_a_telescope_without_rows_is_not_off_the_map():
    assert check([heron(np.empty(0), np.empty(0)), heron([30.0], [0.0], name="Plover")]) == []
