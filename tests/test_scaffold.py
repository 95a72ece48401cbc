"""The sample campaign that `skytally new` writes."""

from __future__ import annotations

import csv
import hashlib
import re
import tomllib
from pathlib import Path

import healpy
import numpy as np
import pytest
from astropy.coordinates import Angle
from astropy.io import fits
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.stats import norm
from skytally.campaign import load_campaign
from skytally.campaign_model import TABLES
from skytally.errors import OutputError, UsageError
from skytally.scaffold import write_campaign

NAMES = {
    "campaign.toml",
    "logs/heron.csv",
    "logs/plover.csv",
    "cameras/plover.csv",
    "maps/first.fits",
}


@pytest.fixture(scope="module")
def sample(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("new") / "deep" / "night"
    write_campaign(folder)
    return folder


def files_in(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def test_it_writes_what_it_says_campaign_first(tmp_path: Path) -> None:
    written = write_campaign(tmp_path / "night")
    assert written[0] == tmp_path / "night" / "campaign.toml"
    assert {str(p.relative_to(tmp_path / "night")) for p in written} == NAMES
    assert files_in(tmp_path / "night").keys() == NAMES


def test_the_same_files_come_out_every_time(tmp_path: Path, sample: Path) -> None:
    write_campaign(tmp_path / "again")
    assert files_in(tmp_path / "again") == files_in(sample)


def test_the_map_is_small(sample: Path) -> None:
    assert (sample / "maps/first.fits").stat().st_size < 60_000


def test_it_loads_as_it_stands(sample: Path) -> None:
    campaign = load_campaign(sample / "campaign.toml")
    assert [m.label for m in campaign.maps] == ["1 first", "2 update"]
    assert campaign.maps[0].distance is not None
    heron, plover = campaign.telescopes
    assert heron.camera_text == "rectangle 2 x 1.6 deg"
    assert plover.camera_text == "mosaic of 4 detectors"
    assert [(len(t.log), t.log.read) for t in (heron, plover)] == [(11, 12), (8, 9)]
    for telescope in (heron, plover):
        assert [a.reason for a in telescope.log.set_aside] == ["not accepted"]
    assert heron.log.exposure[0] == "0211"
    # 10:05:48.39 and -06:44:38.5, sexagesimal by hand.
    assert plover.log.ra_deg[0] == pytest.approx((10 + 5 / 60 + 48.39 / 3600) * 15, abs=1e-9)
    assert plover.log.dec_deg[0] == pytest.approx(-(6 + 44 / 60 + 38.5 / 3600), abs=1e-9)
    assert campaign.notes == ()
    hashes = {name: digest for _, name, digest in campaign.inputs}
    assert hashes == {n: hashlib.sha256((sample / n).read_bytes()).hexdigest() for n in NAMES}


def inside_tangent_boxes(
    vector: NDArray[np.float64], ra: float, dec: float, angle: float, boxes: list[tuple[float, ...]]
) -> NDArray[np.bool_]:
    """Tell which directions fall into boxes (xi low, high, eta low, high; degrees) of a pointing.

    Gnomonic projection as in A&A 395, 1077 (2002), section 5.1.3, written out on vectors.
    """
    a, d, p = np.radians([ra, dec, angle])
    axis = np.array([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)])
    east = np.array([-np.sin(a), np.cos(a), 0.0])
    north = np.cross(axis, east)
    depth = vector @ axis
    x, y = np.degrees(vector @ east / depth), np.degrees(vector @ north / depth)
    xi, eta = x * np.cos(p) - y * np.sin(p), x * np.sin(p) + y * np.cos(p)
    hit = np.zeros(len(vector), dtype=bool)
    for low, high, bottom, top in boxes:
        hit |= (xi > low) & (xi < high) & (eta > bottom) & (eta < top)
    return hit & (depth > 0)


def rows_of(path: Path, delimiter: str) -> list[dict[str, str]]:
    lines = [line for line in path.read_text().splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines, delimiter=delimiter))


def test_its_fields_cover_a_good_part_of_its_map(sample: Path) -> None:
    """Brute force: map cells spread over healpy pixels of order 9, boxes by hand."""
    with fits.open(sample / "maps/first.fits") as hdus:
        uniq, density = np.array(hdus[1].data["UNIQ"]), np.array(hdus[1].data["PROBDENSITY"])
    order = np.array([(int(u).bit_length() - 1) // 2 - 1 for u in uniq])
    cell = uniq - 4 * 4**order
    value = np.empty(12 * 4**9)
    for level, index, rho in zip(order, cell, density, strict=True):
        value[index << 2 * (9 - level) : (index + 1) << 2 * (9 - level)] = rho
    value *= healpy.nside2pixarea(512)
    assert value.sum() == pytest.approx(1.0, abs=1e-9)
    where = np.flatnonzero(value > 1e-12)
    vector = np.stack(healpy.pix2vec(512, where, nest=True), axis=1)
    hit = np.zeros(where.size, dtype=bool)
    for row in rows_of(sample / "logs/heron.csv", ","):
        if row["STATUS"] == "done":
            pointing = float(row["RA_DEG"]), float(row["DEC_DEG"]), float(row["PA"])
            hit |= inside_tangent_boxes(vector, *pointing, [(-1.0, 1.0, -0.8, 0.8)])
    heron = value[where[hit]].sum()
    four = [(a, a + 0.9, b, b + 0.9) for a in (-0.95, 0.05) for b in (-0.95, 0.05)]
    for row in rows_of(sample / "logs/plover.csv", ";"):
        if row["quality"] == "ok":
            ra, dec = Angle(row["ra"], "hour").deg, Angle(row["dec"], "deg").deg
            hit |= inside_tangent_boxes(vector, ra, dec, 0.0, four)
    both = value[where[hit]].sum()
    assert 0.30 < heron < both - 0.02
    assert both < 0.60, both


def test_its_distances_are_normalised(sample: Path) -> None:
    """The integral of N r² φ((r-μ)/σ)/σ over r ≥ 0 is 1 (ApJL 829 L15, 2016), by quadrature."""
    with fits.open(sample / "maps/first.fits") as hdus:
        data = hdus[1].data
        cells = [[float(data[c][i]) for c in ("DISTMU", "DISTSIGMA", "DISTNORM")] for i in (0, 400)]
    for mu, sigma, n in cells:
        total, _ = quad(lambda r, m=mu, s=sigma: r**2 * norm.pdf(r, m, s), 0, mu + 12 * sigma)
        assert n * total == pytest.approx(1.0, rel=1e-6)


@pytest.mark.parametrize("name", sorted(NAMES))
def test_it_never_replaces_a_file(tmp_path: Path, name: str) -> None:
    (tmp_path / name).parent.mkdir(exist_ok=True)
    (tmp_path / name).write_text("mine")
    with pytest.raises(UsageError) as caught:
        write_campaign(tmp_path)
    assert str(tmp_path / name) in str(caught.value)
    assert caught.value.remedy
    assert files_in(tmp_path) == {name: b"mine"}


def test_other_files_in_the_folder_do_not_matter(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    write_campaign(tmp_path)
    assert (tmp_path / "notes.txt").read_text() == "mine"
    assert files_in(tmp_path).keys() == NAMES | {"notes.txt"}


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "night").write_text("mine")
    with pytest.raises(UsageError, match="expected a folder"):
        write_campaign(tmp_path / "night")


def test_a_folder_that_cannot_be_made_is_an_output_error(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("mine")
    with pytest.raises(OutputError) as caught:
        write_campaign(tmp_path / "file" / "night")
    assert caught.value.exit_code == 3


def test_optional_lines_hold_once_uncommented(sample: Path, tmp_path: Path) -> None:
    """Every commented key of the sample is a key that the campaign file knows."""
    text = (sample / "campaign.toml").read_text()
    known = {key for table in TABLES.values() for key in table.model_fields}
    offered = re.findall(r"^# (\w+) = ", text, re.M)
    assert set(offered) <= known
    assert {"mask", "searchable", "images", "defaults", "significance", "authors"} <= set(offered)
    # The two tables at the end can be uncommented whole.
    tail = text[text.index("# Choices that move numbers") :]
    raw = tomllib.loads(re.sub(r"^# (?=\[|\w+ = )", "", tail, flags=re.M))
    assert raw["settings"]["revisit"] == {"visits": 2, "gap_minutes": 30}
    assert raw["report"]["authors"]
