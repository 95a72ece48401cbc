"""Sources, light curves and extinction in a campaign file: what they load to, and their faults."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.cosmology import available
from astropy.io import fits
from skytally.campaign import LoadedCampaign, load_campaign
from skytally.errors import CampaignError, InputError, MapError, SkytallyError
from skytally.light_curve_io import read_light_curve
from skytally.log_io import read_log
from skytally.magnitudes import EXTINCTION_COEFFICIENTS, extinction_coefficient
from skytally.sources import Detection

LOG = """exposure,ra,dec,start,duration,band,depth
a1,150.0,-8.0,2031-03-14T20:00:00,120,r,20.5
a2,151.0,-8.0,2031-03-14T20:05:00,120,w,20.6
"""
BASE = """
[event]
name = "Lantern 7"
time = 2031-03-14T05:21:08Z

[[map]]
version = "1 first"
circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }

[[telescope]]
name = "Heron"
camera = { shape = "circle", radius = 0.5 }
log = "heron.csv"
depth = { system = "AB", significance = 5 }
"""
CURVE = "days,band,magnitude\n0.5,r,-15.0\n1.0,r,-16.0\n0.5,w,-14.5\n2.0,w,-14.0\n"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "heron.csv").write_text(LOG)
    (tmp_path / "ember.csv").write_text(CURVE)
    write_dust(tmp_path / "dust.fits", np.full(12, 0.05))
    return tmp_path


def write_dust(path: Path, ebv: np.ndarray) -> None:
    hdu = fits.BinTableHDU.from_columns([fits.Column("EBV", "D", array=ebv, unit="mag")])
    hdu.header.update({"ORDERING": "NESTED", "COORDSYS": "C", "NSIDE": 1})
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path, overwrite=True)


def load(folder: Path, text: str) -> LoadedCampaign:
    (folder / "campaign.toml").write_text(BASE + text, encoding="utf-8")
    return load_campaign(folder / "campaign.toml")


def test_without_tables_there_is_nothing_and_no_note(folder: Path) -> None:
    campaign = load(folder, "")
    assert campaign.sources == ()
    assert campaign.dust is campaign.dust_path is None
    assert campaign.extinction_coefficients == {}
    assert campaign.settings.cosmology == "Planck18"
    assert campaign.notes == ()


def test_everything_is_loaded(folder: Path) -> None:
    campaign = load(
        folder,
        """
[settings]
cosmology = "WMAP9"
magnitude_system = "AB"

[extinction]
map = "dust.fits"
coefficients = { w = 2.34, r = 2.5 }

[[source]]
name = "Ash"
magnitude = -16

[[source]]
name = "Kindling"
magnitude = { r = -16.0, w = -15.5 }
fade = 0.5
rise = 0.8
k_correction = "flat"
detection = { offset = -0.1, width = 0.2, plateau = 0.9 }

[[source]]
name = "Ember"
light_curve = "ember.csv"
visits = 2
gap_minutes = 30
""",
    )
    assert campaign.settings.cosmology == "WMAP9"
    assert campaign.dust_path == "dust.fits"
    assert campaign.dust is not None
    np.testing.assert_array_equal(campaign.dust.at(np.array([0, 1 << 60])), [0.05, 0.05])
    # The user's own come before the published ones and leave the others.
    own = campaign.extinction_coefficients
    assert extinction_coefficient("w", own) == 2.34
    assert extinction_coefficient("r", own) == 2.5
    assert extinction_coefficient("g", own) == EXTINCTION_COEFFICIENTS["g"]
    ash, kindling, ember = campaign.sources
    assert (ash.kind, ash.bands, ash.magnitudes) == ("constant", None, -16.0)
    assert (ash.k_correction, ash.visits, ash.gap_minutes) == ("none", 1, 0.0)
    assert ash.detection == Detection()
    assert (kindling.kind, kindling.bands) == ("fade", ("r", "w"))
    assert (kindling.fade_per_day, kindling.rise_days, kindling.k_correction) == (0.5, 0.8, "flat")
    assert kindling.detection == Detection(-0.1, 0.2, 0.9)
    np.testing.assert_allclose(kindling.absolute_magnitude([0.8, 1.8], "w"), [-15.5, -15.0])
    assert (ember.kind, ember.bands, ember.visits, ember.gap_minutes) == (
        *("light curve", ("r", "w")),
        *(2, 30.0),
    )
    np.testing.assert_allclose(ember.absolute_magnitude([0.75, 1.5], "r"), [-15.5, np.nan])
    assert campaign.notes == ()
    roles = {(role, name) for role, name, _ in campaign.inputs}
    assert {("dust", "dust.fits"), ("light curve", "ember.csv")} <= roles


def test_a_rise_alone_makes_a_source_that_changes(folder: Path) -> None:
    (source,) = load(folder, '[[source]]\nname = "Ash"\nmagnitude = -16.0\nrise = 2.0\n').sources
    np.testing.assert_allclose(
        source.absolute_magnitude([0.2, 2.0, 9.0], "r"), [-13.5, -16.0, -16.0]
    )


def test_the_absolute_magnitudes_are_in_the_system_of_the_campaign(folder: Path) -> None:
    text = '[settings]\nmagnitude_system = "Vega"\n[[source]]\nname = "Ash"\nmagnitude = -16.0\n'
    (folder / "heron.csv").write_text(LOG.replace(",w,", ",r,"))
    (source,) = load(folder, text).sources
    assert source.magnitude_system == "Vega"
    assert "Vega magnitude" in source.text


def source(*lines: str, name: str = "Ash") -> str:
    return "\n".join(("[[source]]", f'name = "{name}"', *lines, ""))


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (
            source("magnitude = -16.0", 'light_curve = "ember.csv"'),
            ("source[1] (Ash): both magnitude and light_curve",),
        ),
        (source(), ("source[1] (Ash): no magnitude, expected either",)),
        (
            source("fade = 0.5"),
            ("source[1].fade (Ash): a fade, but no magnitude at peak", "Give magnitude"),
        ),
        (
            source("rise = 0.5", 'light_curve = "ember.csv"'),
            ("source[1].rise (Ash): a rise, but no magnitude", "leave rise out"),
        ),
        (
            source("magnitude = -16.0") + source("magnitude = -15.0", name="ash"),
            ('source[2].name: "ash" is already the name of source[1]',),
        ),
        (
            source('light_curve = "https://skytally.invalid/ember.csv"'),
            ("source[1].light_curve (Ash)", "not a URL", "Download it first"),
        ),
        (source('light_curve = "none.csv"'), ("source[1].light_curve (Ash)", "there is none at")),
        (
            source("magnitude = -16.0", "detection = { plateau = 1.2 }"),
            ("source[1].detection.plateau (Ash): got 1.2", "above 0 and at most 1"),
        ),
        (
            source("magnitude = -16.0", "detection = { plateau = -0.5 }"),
            ("source[1].detection.plateau (Ash): got -0.5", "efficiency"),
        ),
        (
            source("magnitude = -16.0", "detection = { width = -0.1 }"),
            ("source[1].detection.width (Ash): got -0.1", "from 0 to 10"),
        ),
        (
            source("magnitude = -16.0", "detection = { efficiency = 0.5 }"),
            ("source[1].detection.efficiency (Ash): unknown key", "offset, width, plateau"),
        ),
        (
            source("magnitude = { r = -16.0, g = 99 }"),
            ("source[1].magnitude (Ash)", "in band 'g', which holds 99", "from -50 to 50"),
        ),
        (source('magnitude = "bright"'), ('got "bright"', "-50 to 50", "{ r = -16.0")),
        (source("magnitude = {}"), ("an empty table", "for each band")),
        (source("magnitude = true"), ("got true", "an absolute magnitude")),
        (source("magnitude = nan"), ("got nan", "an absolute magnitude")),
        (source("magnitude = -16.0", "fade = -1"), ("source[1].fade (Ash): got -1", "0 to 100")),
        (source("magnitude = -16.0", "visits = 0"), ("source[1].visits (Ash): got 0", "1 to 1000")),
        (
            source("magnitude = -16.0", 'k_correction = "flatt"'),
            ("source[1].k_correction (Ash)", 'Did you mean "flat"?'),
        ),
        (source("magnitud = -16.0"), ("source[1].magnitud (Ash)", "Did you mean magnitude?")),
        ("source = 3\n", ("source: got 3, expected a list of tables", "[[source]]")),
        ('[extinction]\nmap = "none.fits"\n', ("extinction.map", "there is none at")),
        ("[extinction]\ncoefficients = { w = -1 }\n", ("extinction.coefficients", "band 'w'")),
        ("[extinction]\ncoefficients = 2\n", ("extinction.coefficients: got 2", "for each band")),
        ('[extinction]\nallow_holes = "yes"\n', ("extinction.allow_holes", "true or false")),
        ('[extinction]\nmaps = "dust.fits"\n', ("extinction.maps: unknown key", "mean map?")),
        ("extinction = 3\n", ("extinction: got 3", "[extinction]", "map and coefficients")),
    ],
)
def test_a_fault_names_its_place_and_what_to_do(
    folder: Path, text: str, words: tuple[str, ...]
) -> None:
    # Keys outside a table must come first in TOML.
    (folder / "campaign.toml").write_text(text + BASE if text[0] != "[" else BASE + text)
    with pytest.raises(CampaignError) as caught:
        load_campaign(folder / "campaign.toml")
    for word in words:
        assert word in str(caught.value)


def test_an_unknown_cosmology_lists_the_known_and_names_the_nearest(folder: Path) -> None:
    with pytest.raises(CampaignError) as caught:
        load(folder, '[settings]\ncosmology = "plank18"\n')
    text = str(caught.value)
    assert 'settings.cosmology: got "plank18"' in text
    assert "Did you mean Planck18?" in text
    for name in available:
        assert name in text
    with pytest.raises(CampaignError) as caught:
        load(folder, '[settings]\ncosmology = "zzz"\n')
    assert "Did you mean" not in str(caught.value)


def test_faults_of_all_files_are_listed_together(folder: Path) -> None:
    write_dust(folder / "dust.fits", np.append(np.full(11, 0.1), np.nan))
    (folder / "ember.csv").write_text("days,band,magnitude\n1,r,-15\n1,r,-16\n")
    text = '[extinction]\nmap = "dust.fits"\n'
    with pytest.raises(MapError, match=r"dust\.fits.*1 cells hold no value, the first is 11"):
        load(folder, text)
    with pytest.raises(CampaignError) as caught:
        load(folder, text + source('light_curve = "ember.csv"', "visits = 0"))
    assert len(caught.value.problems) == 3
    assert caught.value.exit_code == 2


def test_holes_may_be_allowed(folder: Path) -> None:
    write_dust(folder / "dust.fits", np.append(np.full(11, 0.1), np.nan))
    campaign = load(folder, '[extinction]\nmap = "dust.fits"\nallow_holes = true\n')
    (note,) = campaign.notes
    assert "8.33 % of the sky" in note


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (source("magnitude = { k = -16.0 }"), ("'Ash' is described in k only", "observed: r, w")),
        (source("magnitude = { r = -16.0, k = -16.0 }"), ("no exposure is in k;",)),
        (source("magnitude = -16.0", "gap_minutes = 30"), ("gap_minutes has no use", "set visits")),
        ("[extinction]\ncoefficients = { w = 2.0 }\n", ("coefficients without a map",)),
    ],
)
def test_what_has_no_use_is_noted(folder: Path, text: str, words: tuple[str, ...]) -> None:
    (note,) = load(folder, text).notes
    for word in words:
        assert word in note


def test_a_band_in_a_light_curve_that_nobody_observed_is_noted(folder: Path) -> None:
    (folder / "ember.csv").write_text(CURVE + "1,y,-15\n2,y,-14\n")
    (note,) = load(folder, source('light_curve = "ember.csv"', name="Ember")).notes
    assert note.startswith("Source 'Ember': no exposure is in y;")


def test_a_band_by_another_spelling_is_observed(folder: Path) -> None:
    assert load(folder, source('magnitude = { "r\'" = -16.0 }')).notes == ()


def test_a_light_curve_is_read(tmp_path: Path) -> None:
    """Semicolons, decimal commas, comments, bands in turn; by hand."""
    path = tmp_path / "curve.csv"
    path.write_text(
        "# invented\nBand;Days (d);Magnitude (mag)\nr;0,5;-15\ng;1;-14\nr;2;-16,5\ng;3;-13\n"
    )
    curves = read_light_curve(path)
    assert list(curves) == ["r", "g"]
    np.testing.assert_array_equal(curves["r"], [[0.5, 2.0], [-15.0, -16.5]])
    np.testing.assert_array_equal(curves["g"], [[1.0, 3.0], [-14.0, -13.0]])


HEAD = "days,band,magnitude\n"


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (
            HEAD + "1,r,-15\n0.5,r,-16\n",
            ("row 3, column 'days'", "0.5 days", "1 days in row 2", "Sort"),
        ),
        (
            HEAD + "1,r,-15\n1,g,-14\n2,g,-14\n1.0,r,-16\n",
            ("row 5, column 'days'", "at 1 days here and at 1 days in row 2", "Keep one row"),
        ),
        (HEAD + "1,r,nan\n2,r,-15\n", ("row 2, column 'magnitude': found 'nan', not a number",)),
        (HEAD + "1,r,-15\ninf,r,-15\n", ("row 3, column 'days': found 'inf'", "0 to 100000")),
        (HEAD + "1,r,\n2,r,-15\n", ("row 2, column 'magnitude': found nothing",)),
        (HEAD + "-1,r,-15\n2,r,-15\n", ("row 2, column 'days': found '-1', outside 0",)),
        (HEAD + "1,r,-99\n2,r,-15\n", ("found '-99', outside -50 to 50",)),
        (HEAD + "1,r,-15\n", ("row 2: band 'r' has one row", "at least two")),
        (HEAD + "1,,-15\n2,,-15\n", ("row 2, column 'band': this row has no band",)),
        (HEAD, ("the light curve has no rows",)),
        ("", ("the file is empty",)),
        ("days,band,mag\n1,r,-15\n", ("column 'mag'", "not known", "days (since the event)")),
        ("day,band,magnitude\n1,r,-15\n", ("column 'day'", "Did you mean days?")),
        ("days,magnitude\n1,-15\n", ("0 columns 'band', expected one",)),
        ("days,days,band,magnitude\n1,1,r,-15\n", ("2 columns 'days', expected one",)),
        ("days (h),band,magnitude\n1,r,-15\n2,r,-14\n", ("column 'days (h)': the unit is 'h'",)),
        (HEAD + "1,r,-15,x\n", ("row 2", "4 cells where the header has 3")),
    ],
)
def test_a_broken_light_curve_is_refused_with_place_and_remedy(
    tmp_path: Path, content: str, words: tuple[str, ...]
) -> None:
    path = tmp_path / "curve.csv"
    path.write_text(content)
    with pytest.raises(InputError) as caught:
        read_light_curve(path)
    text = str(caught.value)
    assert text.startswith(str(path))
    assert caught.value.exit_code == 2
    for word in words:
        assert word in text


def test_an_extinction_in_another_unit_sets_its_row_aside(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    path.write_text(
        "ra,dec,start,band,depth,extinction\n"
        "150,-8,2031-03-14T20:00:00,r,20.5,0.31\n"
        "151,-8,2031-03-14T20:05:00,r,20.5,310\n"
        "152,-8,2031-03-14T20:10:00,r,20.5,\n"
        "153,-8,2031-03-14T20:15:00,r,20.5,-0.2\n"
        "154,-8,2031-03-14T20:20:00,r,20.5,50\n"
    )
    log = read_log(path, "Heron")
    np.testing.assert_array_equal(log.extinction, [0.31, np.nan, 50.0])
    assert log.read == len(log) + len(log.set_aside) == 5
    assert [(a.row, a.reason, a.column) for a in log.set_aside] == [
        (3, "unreadable", "extinction"),
        (5, "unreadable", "extinction"),
    ]
    assert "holds '310', no extinction in magnitudes (0 to 50); give A_b" in log.set_aside[0].detail


def test_a_log_of_nothing_but_such_extinctions_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    path.write_text("ra,dec,start,extinction\n150,-8,2031-03-14T20:00:00,310\n")
    with pytest.raises(SkytallyError, match="no extinction in magnitudes"):
        read_log(path, "Heron")
