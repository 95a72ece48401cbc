"""Results as JSON and as a table: the same numbers, and null for what is missing."""

from __future__ import annotations

import json
from dataclasses import fields, replace
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table
from skytally.errors import UsageError
from skytally.serialise import select_map, to_dict, to_json, to_table
from skytally.tally import TallyRow
from small_results import VERSIONS, small_results, small_row
from space_results import with_space

# What DESIGN section 6 promises to readers of the files.
TOP = {"format", "format_version", "software", "inputs", "event", "maps", "rows", "findings"}
MAP_KEYS = {
    "version",
    "issued",
    "order_max",
    "area_50_deg2",
    "area_90_deg2",
    "distance_mean_mpc",
    "distance_sd_mpc",
    "volume_50_mpc3",
    "volume_90_mpc3",
    "probability_without_distance",
}
ROW_KEYS = {
    *("map", "telescope", "band", "night", "exposures"),
    *("area_deg2", "area_low_deg2", "area_high_deg2", "area_in_90_deg2"),
    *("probability", "probability_low", "probability_high", "probability_in_50"),
    *("probability_in_90", "probability_unique", "probability_credit", "probability_revisited"),
    *("depth_min", "depth_median", "depth_max", "depth_over_50", "depth_over_90"),
    *("volume_90_covered_mpc3", "first_start", "last_end"),
}


def strict(text: str) -> dict[str, Any]:
    def refuse(constant: str) -> NoReturn:
        raise AssertionError(f"{constant} is not JSON (RFC 8259, section 6)")

    found = json.loads(text, parse_constant=refuse)
    assert isinstance(found, dict)
    return found


def test_the_promised_keys_are_there() -> None:
    found = strict(to_json(small_results()))
    assert found.keys() >= TOP
    assert (found["format"], found["format_version"]) == ("skytally/tally", 1)
    assert all(m.keys() >= MAP_KEYS for m in found["maps"])
    assert all(row.keys() >= ROW_KEYS for row in found["rows"])
    assert set(found["inputs"][0]) == {"role", "path", "sha256"}


def test_every_number_survives_the_text_exactly() -> None:
    results = small_results()
    found = strict(to_json(results))
    assert len(found["rows"]) == len(results.rows)
    for row, wanted in zip(found["rows"], results.rows):
        plain = {f.name: getattr(wanted, f.name) for f in fields(TallyRow)}
        assert row == {**plain, "sources": []}
    for key in ("timelines", "as_pointed", "exposures", "set_aside", "telescopes", "maps"):
        for item, wanted in zip(found[key], getattr(results, key), strict=True):
            for name, value in item.items():
                expected = getattr(wanted, name)
                assert value == (list(expected) if isinstance(expected, tuple) else expected)


def test_missing_is_null_and_nan_is_refused() -> None:
    found = strict(to_json(small_results()))
    assert found["rows"][0]["telescope"] is None
    assert found["exposures"][2]["depth"] is None
    broken = small_results(rows=(small_row(depth_min=float("nan")),))
    with pytest.raises(ValueError, match="JSON"):
        to_json(broken)


def test_numbers_of_numpy_are_written_as_numbers() -> None:
    row = small_row(exposures=np.int64(7), probability=np.float64(0.1) + np.float64(0.2))
    found = strict(to_json(small_results(rows=(row,))))["rows"][0]
    assert (found["exposures"], found["probability"]) == (7, 0.1 + 0.2)


def test_rows_read_are_used_or_set_aside_with_reasons() -> None:
    found = to_dict(small_results())
    for log in found["logs"]:
        assert log["read"] == log["used"] + log["set_aside"]
        assert sum(log["reasons"].values()) == log["set_aside"]
    assert found["logs"][1]["reasons"] == {"not accepted": 1, "unreadable": 1}


def test_equal_results_give_equal_text_and_names_stay_as_they_are() -> None:
    event = replace(small_results().event, name='Laterne "7" µ\u2028\\')
    first, second = (to_json(small_results(event=event)) for _ in range(2))
    assert first == second
    assert strict(first)["event"]["name"] == event.name


def test_one_version_is_selected_and_an_unknown_one_refused() -> None:
    chosen = select_map(small_results(), "1 first")
    assert [m.version for m in chosen.maps] == ["1 first"]
    assert (
        {row.map for row in chosen.rows} == {line.map for line in chosen.timelines} == {"1 first"}
    )
    assert chosen.row() == small_results().row("1 first")
    assert len(chosen.sky.maps) == 1
    with pytest.raises(UsageError, match=r"'3'.*'1 first', '2 update'"):
        select_map(small_results(), "3")


def test_the_table_comes_back_from_its_file_with_units_and_the_same_numbers(tmp_path: Path) -> None:
    results = small_results()
    to_table(results).write(tmp_path / "tally.ecsv", format="ascii.ecsv")
    table = Table.read(tmp_path / "tally.ecsv", format="ascii.ecsv")
    assert table.colnames == [f.name for f in fields(TallyRow)]
    for name in table.colnames:
        for value, row in zip(table[name], results.rows, strict=True):
            wanted = getattr(row, name)
            assert np.ma.is_masked(value) if wanted is None else value == wanted
    assert table["area_deg2"].unit == u.deg**2
    assert table["depth_over_90"].unit == u.mag
    assert table["volume_90_covered_mpc3"].unit == u.Mpc**3
    assert table["volume_90_covered_mpc3"].dtype == np.float64
    assert table["volume_90_covered_comoving_mpc3"].unit == u.Mpc**3
    assert table["extinction_median"].unit == u.mag
    assert set(table["extinction"]) == {"not corrected"}
    assert table.meta["cosmology"] == "Planck18"
    assert table["exposures"].dtype == np.int64
    assert table.meta["event"] == "Lantern 7"
    assert (table.meta["magnitude_system"], table.meta["significance"]) == ("AB", 5.0)
    assert set(table["map"]) == set(VERSIONS)


def test_every_row_holds_its_own_numbers_of_every_source() -> None:
    results = with_space(small_results())
    found = strict(to_json(results))
    assert [source["name"] for source in found["sources"]] == ["Steady", "Ember"]
    listed = 0
    for row in found["rows"]:
        assert [s["source"] for s in row["sources"]] == ["Steady", "Ember"]
        for numbers in row["sources"]:
            listed += 1
            wanted = next(
                r
                for r in results.source_rows
                if r.source == numbers["source"]
                and (r.map, r.telescope, r.band, r.night)
                == (row["map"], row["telescope"], row["band"], row["night"])
            )
            assert not numbers.keys() & {"map", "telescope", "band", "night"}
            for name, value in numbers.items():
                assert value == getattr(wanted, name)
    assert listed == len(results.source_rows)


def test_what_is_ruled_out_and_what_was_found_are_written() -> None:
    results = with_space(small_results())
    found = strict(to_json(results))
    assert found["settings"]["cosmology"] == "Planck18"
    assert found["maps"][1]["volume_90_comoving_mpc3"] == 7.9e5
    for key, name in (
        ("exclusion", "exclusions"),
        ("fading", "fading_planes"),
        ("absolute_limits", "absolute_limits"),
        ("distance_profiles", "distance_profiles"),
        ("depth_histograms", "depth_histograms"),
        ("findings", "findings"),
    ):
        wanted = getattr(results, name)
        assert wanted
        for item, made in zip(found[key], wanted, strict=True):
            assert set(item) == {f.name for f in fields(made)}
    curve = found["exclusion"][0]
    assert (curve["band"], curve["magnitude_90"]) == (None, None)
    assert curve["magnitude_50"] == results.exclusions[0].magnitude_50
    assert curve["probability"] == list(results.exclusions[0].probability)
    assert found["fading"][0]["probability"][1][0] == results.fading_planes[0].probability[1][0]
    assert found["findings"][0]["remedy"].startswith("Ask the issuer")
    assert strict(to_json(small_results()))["exclusion"] == []


def test_one_version_takes_its_own_third_dimension_along() -> None:
    whole = with_space(small_results())
    chosen = select_map(whole, "1 first")
    for name in ("source_rows", "exclusions", "fading_planes", "absolute_limits"):
        kept = getattr(chosen, name)
        assert {item.map for item in kept} == {"1 first"}
        assert len(kept) == sum(item.map == "1 first" for item in getattr(whole, name))
    assert {p.map for p in chosen.distance_profiles} == {"1 first"}
    assert {h.map for h in chosen.depth_histograms} == {"1 first"}
