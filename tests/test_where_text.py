"""The answer about positions as text and as JSON.

Numbers in the text are held against the answer's own columns, which test_where.py
holds against brute force; the JSON against the JSON standard (RFC 8259, no NaN).
"""

from __future__ import annotations

import io
import json
import re
from dataclasses import replace

import healpy
import numpy as np
import pytest
from astropy.time import Time
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from deep_sky import distance_map, dust_map
from skytally.cameras import CircleCamera
from skytally.cosmology import Cosmology
from skytally.footprints import lay_footprints
from skytally.galaxies import RankingChoice, Weight
from skytally.positions_io import Positions, parse_position, read_positions
from skytally.skymap_io import circle_skymap
from skytally.spans import Spans
from skytally.where import look_up
from skytally.where_json import FORMAT, FORMAT_VERSION, where_to_json
from skytally.where_text import FULL_ACCOUNTS, render_where

CAUTION = "A non-detection constrains a source only as far as"
HEAD = "name,ra,dec,distance,mag\n"


class Ascii(io.StringIO):
    encoding = "ascii"


def night(**more):
    """Three exposures in two bands, one by another telescope that states no limit."""
    heron = log_table(
        "Heron",
        [150.0, 150.5, 151.0],
        [20.0, 20.0, 20.0],
        start=EVENT_MJD + np.array([0.25, 0.5, 1.0]),
        band=np.array(["r", "g", "r"], dtype=object),
        depth=[21.25, 20.5, 21.75],
    )
    plover = log_table("Plover", [150.0], [20.0], start=EVENT_MJD + 2.0, depth=np.nan)
    made = (
        telescope("Heron", CircleCamera(1.0), heron),
        telescope("Plover", CircleCamera(0.5), plover),
    )
    maps = more.pop("maps", [circle_skymap(150, 20, 3, label="1 first"), distance_map()])
    return replace(campaign(made, maps), **more)


def answer_for(text, tmp_path, ranking=None, loaded=None):
    path = tmp_path / "galaxies.csv"
    path.write_text(text, encoding="utf-8")
    loaded = loaded or night()
    positions = read_positions(path, Cosmology.named())
    return look_up(loaded, lay_footprints(loaded), positions, ranking)


def shown(answer, stream=None):
    """The text with plain blanks, checked for its width."""
    text = render_where(answer, stream or io.StringIO())
    assert max(map(len, text.splitlines())) <= 80
    assert text.endswith("\n")
    return text.replace("\u00a0", " ")


def flowing(answer):
    """The text with its lines joined."""
    return " ".join(shown(answer).split())


# --- one position -----------------------------------------------------------------------


def test_one_position_is_told_in_full():
    loaded = night(dust=dust_map(), extinction_coefficients={"r": 2.5})
    answer = look_up(loaded, lay_footprints(loaded), parse_position("10:00:24", "20.1"))
    text, lines = flowing(answer), shown(answer).splitlines()
    assert lines[0] == "RA 150.10000, Dec 20.10000 (ICRS, degrees)"
    assert "Held by 4 exposures of 2 telescopes; the first began 6.00 h after the event, " in text
    assert "the last 48.0 h after the event." in text
    rows = [line.split() for line in lines if line.startswith(("Heron", "Plover"))]
    edge = answer.visits.edge_arcsec
    assert [row[:3] for row in rows] == [
        ["Heron", "0000", "r"],
        ["Heron", "0001", "g"],
        ["Heron", "0002", "r"],
        ["Plover", "0000", "r"],
    ]
    assert [row[3] for row in rows] == ["+6.00", "+12.0", "+24.0", "+48.0"]
    assert [row[5] for row in rows] == ["21.25", "20.50", "21.75", "—"]
    for row, arcsec in zip(rows, edge, strict=True):
        assert row[7] == "arcmin"
        assert float(row[6]) == pytest.approx(arcsec / 60, abs=0.0051)
    assert "Deepest: 20.50 in g and 21.75 in r (AB, 5 σ, as observed)." in text
    d, newest = answer.deepest, answer.maps[-1]
    mean = f"{newest.distance_mean_mpc[0]:.0f} ± {newest.distance_sd_mpc[0]:.0f} Mpc"
    assert f"at the distance of map version “1” here, {mean}: −" in text
    for row in range(2):
        # Rounded to the bright side, so that what is printed is ruled out indeed.
        printed = np.floor(10 * (d.absolute_mean[row] + 1e-3)) / 10
        assert f"−{-printed:.1f} (−" in text
        assert f"{d.extinction[row]:.2f} in {d.band[row]}" in text
    assert "no K-correction." in text
    assert "inside the" in text
    assert re.search(r"^1 first +[0-9.]+ % region +[0-9.e-]+ +—$", shown(answer), re.MULTILINE)
    assert text.endswith(
        f"{CAUTION} the model, the detection efficiency and the map are right; "
        "where no exposure held a position, nothing is constrained."
    )


def test_what_was_not_observed_is_said_plainly_with_the_caution():
    loaded = night()
    answer = look_up(loaded, lay_footprints(loaded), parse_position("330", "-20"))
    text = flowing(answer)
    assert "No exposure held this position: nothing is constrained here." in text
    assert "The position lies outside every cell that map version “1” lists" in text
    assert "off the map" in text
    assert CAUTION in text
    assert "Deepest" not in text
    assert "Absolute" not in text
    assert "nearest edge" not in text


def test_maps_without_distance_are_named():
    loaded = night(maps=[circle_skymap(150, 20, 3, label="2 Update")])
    text = flowing(look_up(loaded, lay_footprints(loaded), parse_position("150", "20")))
    assert "Map version “2 Update” carries no distance, so there are no absolute limits" in text
    assert "Absolute limits" not in text


def test_limits_that_are_not_corrected_say_so():
    loaded = night()
    text = flowing(look_up(loaded, lay_footprints(loaded), parse_position("150.1", "20.1")))
    assert "not corrected for Galactic extinction; no K-correction." in text
    loaded = night(dust=dust_map(), extinction_coefficients={"g": 3.0, "r": 2.3})
    assert "less the Galactic extinction, " in flowing(
        look_up(loaded, lay_footprints(loaded), parse_position("150.1", "20.1"))
    )


def test_exposures_without_any_limit():
    loaded = night()
    loaded = replace(loaded, telescopes=loaded.telescopes[1:])
    text = flowing(look_up(loaded, lay_footprints(loaded), parse_position("150.1", "20.1")))
    assert "Held by 1 exposure of 1 telescope; it began 48.0 h after the event." in text
    assert "None of them states a limit." in text
    assert "Deepest" not in text


def test_edges_known_to_a_cell_only():
    disc = healpy.query_disc(16, healpy.ang2vec(150, 20, lonlat=True), 0.2, nest=True)
    region = Spans.from_cells(4, np.append(disc, 0))
    log = replace(log_table("Curlew", [np.nan], [np.nan]), region=np.array(["all"], dtype=object))
    curlew = telescope("Curlew", None, log, regions={"all": region})
    heron = replace(night().telescopes[0], searchable=region)
    loaded = replace(night(), telescopes=(curlew, heron))
    answer = look_up(loaded, lay_footprints(loaded), parse_position("150.1", "20.1"))
    # Order 4 cells are 3.66 deg wide: √(41252.96/3072).
    assert re.search(r"^Curlew .*known to 3\.66 deg$", shown(answer), re.MULTILINE)
    assert "Regions of Curlew are given in cells (MOC)" in flowing(answer)
    assert "What Heron can search is cut to a region given in cells" in flowing(answer)


def test_many_exposures_of_one_position_are_cut_short_and_counted():
    log = log_table("Heron", np.full(57, 150.0), np.full(57, 20.0))
    loaded = replace(night(), telescopes=(telescope("Heron", CircleCamera(1.0), log),))
    answer = look_up(loaded, lay_footprints(loaded), parse_position("150", "20"))
    assert len(re.findall(r"^Heron ", shown(answer), re.MULTILINE)) == 40
    assert "and 17 more; --json lists them all." in shown(answer)
    assert len(json.loads(where_to_json(answer))["visits"]["exposure"]) == 57


# --- tables -----------------------------------------------------------------------------


def table_of(n):
    rng = np.random.default_rng(3)
    rows = [
        f"Tessel {i},{rng.uniform(147, 154):.4f},{rng.uniform(18, 22):.4f},"
        f"{rng.uniform(50, 220):.1f},{rng.uniform(12, 18):.2f}"
        for i in range(n)
    ]
    return HEAD + "\n".join(rows) + "\n"


def test_a_few_positions_get_an_account_each_and_many_a_line(tmp_path):
    few = answer_for(table_of(FULL_ACCOUNTS), tmp_path)
    assert len(re.findall(r"^Tessel [0-9]+: RA ", shown(few), re.MULTILINE)) == FULL_ACCOUNTS
    many = answer_for(table_of(FULL_ACCOUNTS + 1), tmp_path)
    lines = [line for line in shown(many).splitlines() if line.startswith("Tessel")]
    assert len(lines) == FULL_ACCOUNTS + 1
    for index, line in enumerate(lines):
        cells = line.removeprefix(many.positions.name[index]).split()
        assert int(cells[0]) == many.exposures_of[index]
        if many.exposures_of[index]:
            hours = many.exposures.hours[[many.first[index], many.last[index]]]
            assert [float(x) for x in cells[1:3]] == pytest.approx(hours, abs=0.051)
            deepest = [i for i in np.flatnonzero(many.deepest.position == index)]
            told = re.findall(r"([gr]) ([0-9.]+)", line)
            assert told == [
                (many.deepest.band[i], f"{many.deepest.depth[i]:.1f}")
                for i in deepest
                if np.isfinite(many.deepest.depth[i])
            ]
        else:
            assert cells[1:3] == ["—", "—"]
    held = np.count_nonzero(many.exposures_of)
    assert f"{held} of 21 positions were held by an exposure, {21 - held} by none." in flowing(many)


def test_a_ranking_lists_every_galaxy_by_rank(tmp_path):
    text = table_of(30) + "Far one,150,20,,13\n"
    answer = answer_for(text, tmp_path, RankingChoice(Weight.LUMINOSITY, 0.8))
    (ranking,) = answer.rankings
    lines = [x for x in shown(answer).splitlines() if x.startswith(("Tessel", "Far one"))]
    assert len(lines) == 31
    names = sorted(answer.positions.name, key=len, reverse=True)
    bare = [next(x.removeprefix(n) for n in names if x.startswith(n)) for x in lines]
    ranks = [line.split()[0] for line in bare]
    assert ranks[: ranking.ranked] == [str(i + 1) for i in range(ranking.ranked)]
    assert set(ranks[ranking.ranked :]) == {"—"}
    first = int(np.flatnonzero(ranking.rank == 1)[0])
    assert lines[0].startswith(answer.positions.name[first])
    assert f"{100 * ranking.share[first]:.2f} %" in lines[0]
    said = flowing(answer)
    assert "times luminosity (magnitudes as given, corrected neither for extinction" in said
    assert "Not ranked: 1 (no distance)" in said
    assert f"{ranking.observed} of {ranking.ranked} ranked galaxies were observed" in said
    assert f"with {100 * ranking.covered:.1f} % of their luminosity-weighted probability." in said
    assert "With 80 % of all galaxies in the table, as stated" in said
    assert f"of which {100 * ranking.map_covered:.1f} % was covered" in said
    assert f"it is {100 * ranking.covered_corrected:.1f} %." in said


def test_galaxies_without_probability_are_said_to_have_none(tmp_path):
    answer = answer_for(HEAD + "Far,330,-20,80,14\n", tmp_path, RankingChoice())
    assert "No galaxy of the table has any probability" in flowing(answer)


def test_rows_that_could_not_be_used_are_named_and_counted(tmp_path):
    bad = "".join(f"Bad {i},10,9{i},50,14\n" for i in range(1, 9))
    answer = answer_for(HEAD + "Good,150,20,-1,14\n" + bad, tmp_path)
    text = flowing(answer)
    assert "Row 3 was set aside: Column 'dec' holds '91', a declination outside" in text
    assert "3 more rows were set aside." in text
    assert "9 rows read = 1 used + 8 set aside." in text
    assert "Row 2 was read without a value: Column 'distance' holds '-1', no distance" in text


def test_the_text_is_plain_where_the_stream_is(tmp_path):
    answer = answer_for(table_of(25), tmp_path, None)
    text = render_where(answer, Ascii())
    assert text.isascii()
    assert "?" not in text
    few = render_where(answer_for(table_of(2), tmp_path), Ascii())
    assert few.isascii()
    assert "?" not in few


def test_control_characters_of_a_table_do_not_reach_the_terminal(tmp_path):
    answer = answer_for(HEAD + "\x1b[31mred\x07,150,20,80,14\n", tmp_path)
    text = render_where(answer, io.StringIO())
    assert "\x1b" not in text
    assert "\x07" not in text
    assert "[31mred" in text


# --- JSON -------------------------------------------------------------------------------


def strict(text):
    def refuse(name):
        raise AssertionError(f"{name} is no JSON")

    return json.loads(text, parse_constant=refuse)


def test_json_holds_every_column_with_null_for_what_is_missing(tmp_path):
    text = table_of(40) + "Off,330,-20,,\nBad,10,95,1,1\n"
    loaded = night(dust=dust_map(), extinction_coefficients={"r": 2.5})
    answer = answer_for(text, tmp_path, RankingChoice(completeness=0.5), loaded)
    data = strict(where_to_json(answer))
    assert (data["format"], data["format_version"]) == (FORMAT, FORMAT_VERSION)
    assert data["event"]["name"] == "Lantern 7"
    n = len(answer.positions)
    assert n == 41
    for key in ("row", "name", "ra_deg", "dec_deg", "distance_mpc", "exposures", "first", "last"):
        assert len(data["positions"][key]) == n
    for table, size in (("exposures", 4), ("visits", None), ("deepest", None)):
        lengths = {len(column) for column in data[table].values()}
        assert len(lengths) == 1
        assert size is None or lengths == {size}
    # Following the indices leads to the same exposures as the answer.
    for position, exposure in zip(data["visits"]["position"], data["visits"]["exposure"]):
        assert data["positions"]["exposures"][position] > 0
        assert data["exposures"]["telescope"][exposure] in {"Heron", "Plover"}
    assert data["visits"]["edge_arcsec"] == pytest.approx(answer.visits.edge_arcsec)
    assert data["positions"]["first"][-1] is None
    assert data["positions"]["distance_mpc"][-1] is None
    assert data["maps"][1]["credible_level"][-1] is None
    assert data["maps"][1]["listed"][-1] is False
    assert data["maps"][0]["density_per_mpc3"] == [None] * n
    assert data["exposures"]["depth"][-1] is None
    assert data["exposures"]["edge_cell_arcsec"] == [None] * 4
    start = Time(EVENT_MJD + 0.25, format="mjd", scale="utc").isot.removesuffix(".000")
    assert data["exposures"]["start"][0] == f"{start}Z"
    (ranking,) = data["rankings"]
    assert ranking["rank"][-1] is None
    assert sum(share or 0.0 for share in ranking["share"]) == pytest.approx(1)
    assert ranking["covered_corrected"] == pytest.approx(
        0.5 * ranking["covered"] + 0.5 * ranking["map_covered"]
    )
    assert data["set_aside"][0]["row"] == 43
    assert data["inputs"][-1]["role"] == "positions"
    assert data["inputs"][-1]["sha256"] == answer.positions.sha256
    assert data["notes"][-1].startswith(CAUTION)
    assert not any("\u00a0" in note for note in data["notes"])


def test_json_of_a_position_by_itself():
    loaded = night()
    answer = look_up(loaded, lay_footprints(loaded), parse_position("330", "-20"))
    data = strict(where_to_json(answer))
    assert data["positions"]["exposures"] == [0]
    assert data["visits"] == {"position": [], "exposure": [], "edge_arcsec": []}
    assert data["settings"]["extinction"] is None
    assert data["inputs"] == []


def test_json_writes_a_column_per_line(tmp_path):
    text = where_to_json(answer_for(table_of(50), tmp_path))
    assert len(text.splitlines()) < 120
    assert isinstance(strict(text)["positions"]["row"], list)


def test_positions_are_columns():
    """What the package hands on is arrays of one length."""
    found = parse_position("150", "20")
    assert isinstance(found, Positions)
    assert found.ra_deg.shape == found.row.shape == found.mass.shape == (1,)
