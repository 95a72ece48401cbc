"""Claims as written: digits, units, tables, and what cannot be read."""

from __future__ import annotations

import tomllib
from datetime import UTC, datetime

import pytest
from skytally.claims_io import Claim, Quantity, parse_claim, read_claims
from skytally.errors import InputError

MJD_ZERO = datetime(1858, 11, 17, tzinfo=UTC)
SECOND = 1 / 86400


def stated(quantity, value):
    return Claim("Heron", Quantity(quantity), value).stated


@pytest.mark.parametrize(
    ("quantity", "text", "number", "half"),
    [
        # By hand: half a unit of the last digit that is written.
        ("probability", "43.5 %", 0.435, 0.0005),
        ("probability", "43.5%", 0.435, 0.0005),
        ("probability", "43,5 percent", 0.435, 0.0005),
        ("probability", "43.50 per cent", 0.435, 0.00005),
        ("probability", "44 %", 0.44, 0.005),
        ("probability", "0.435", 0.435, 0.0005),
        ("probability_in_90", ".4", 0.4, 0.05),
        ("probability", "0 %", 0.0, 0.005),
        ("probability", "100 %", 1.0, 0.005),
        ("area", "254 deg2", 254.0, 0.5),
        ("area", "254", 254.0, 0.5),
        ("area", "254. deg^2", 254.0, 0.5),
        ("area", "254.00 deg²", 254.0, 0.005),
        ("area_in_90", "2.5e2 square degrees", 250.0, 5.0),
        ("area", "12,5 sq. deg.", 12.5, 0.05),
        ("depth_median", "20.1", 20.1, 0.05),
        ("depth_median", "20.10 mag", 20.1, 0.005),
        ("depth_median", "−1", -1.0, 0.5),
        ("exposures", "120", 120.0, 0.5),
        ("exposures", "120 exposures", 120.0, 0.5),
    ],
)
def test_numbers_and_their_rounding(quantity, text, number, half):
    found = stated(quantity, text)
    assert found.number == pytest.approx(number, rel=1e-14, abs=1e-15)
    assert found.low == pytest.approx(number - half, rel=1e-12, abs=1e-15)
    assert found.high == pytest.approx(number + half, rel=1e-12, abs=1e-15)


@pytest.mark.parametrize(
    ("text", "moment", "unit"),
    [
        ("2031-03-14T05:49:30Z", datetime(2031, 3, 14, 5, 49, 30, tzinfo=UTC), 1.0),
        ("2031-03-14 05:49:30 UT", datetime(2031, 3, 14, 5, 49, 30, tzinfo=UTC), 1.0),
        ("2031-03-14T05:49:30", datetime(2031, 3, 14, 5, 49, 30, tzinfo=UTC), 1.0),
        ("2031-03-14T05:49", datetime(2031, 3, 14, 5, 49, tzinfo=UTC), 60.0),
        ("2031-03-14T07:49:30+02:00", datetime(2031, 3, 14, 5, 49, 30, tzinfo=UTC), 1.0),
        (
            "2031-03-14T05:49:30.25Z",
            datetime(2031, 3, 14, 5, 49, 30, 250_000, tzinfo=UTC),
            0.01,
        ),
    ],
)
def test_times_may_be_rounded_or_cut(text, moment, unit):
    found = stated("first_start", text)
    expected = (moment - MJD_ZERO).total_seconds() * SECOND
    # Double precision resolves an MJD to about a microsecond.
    assert found.number == pytest.approx(expected, rel=0, abs=1e-10)
    assert found.number - found.low == pytest.approx(unit / 2 * SECOND, rel=0, abs=1e-10)
    assert found.high - found.number == pytest.approx(unit * SECOND, rel=0, abs=1e-10)


@pytest.mark.parametrize(
    ("quantity", "text", "words"),
    [
        ("probability", "43.5", ["43.5 % if a percentage is meant"]),
        ("probability", "143 %", ["from 0 to 1"]),
        ("probability", "about 43 %", ["not a probability", "43.5 %"]),
        ("probability", "-3 %", ["from 0 to 1"]),
        ("probability", "43.5 deg2", ["unit", "'deg2'"]),
        ("area", "1,254 deg2", ["comma may mean two things", "Write 1254 or 1.254"]),
        ("area", "1,254.5 deg2", ["not an area"]),
        ("area", "254 arcmin2", ["'arcmin2'", "254 deg2"]),
        ("area", "41253 deg2", ["to 41253"]),
        ("area", "nan", ["not an area"]),
        ("area", "1e99", ["from 0 to 41253"]),
        ("depth_median", "20.1 AB", ["'ab'", "20.1"]),
        ("depth_median", "99", ["from -50 to 50"]),
        ("exposures", "12.5", ["whole number"]),
        ("exposures", "twelve", ["whole number"]),
        ("first_start", "2031-03-14", ["date and time", "2031-03-14T05:49:30Z"]),
        ("first_start", "2031-13-14T05:49Z", ["no such date"]),
        ("last_end", "05:49", ["date and time"]),
    ],
)
def test_values_that_cannot_be_read(quantity, text, words):
    with pytest.raises(InputError) as caught:
        Claim("Heron", Quantity(quantity), text)
    assert caught.value.column == "value"
    assert caught.value.remedy
    message = str(caught.value)
    assert all(word in message for word in words), message


@pytest.mark.parametrize(
    ("text", "quantity"),
    [
        ("area", Quantity.AREA),
        ("Area in 90 %", Quantity.AREA_IN_90),
        ("probability_in_90", Quantity.PROBABILITY_IN_90),
        ("depth median", Quantity.DEPTH_MEDIAN),
        ("median depth", Quantity.DEPTH_MEDIAN),
        ("number of exposures", Quantity.EXPOSURES),
        ("first start", Quantity.FIRST_START),
        ("last-end", Quantity.LAST_END),
    ],
)
def test_names_of_quantities(text, quantity):
    value = "2031-03-14T05:49Z" if quantity.is_time else "1"
    claim = parse_claim({"telescope": "Heron", "quantity": text, "value": value})
    assert claim.quantity is quantity


def test_a_claim_from_the_campaign_file():
    (entry,) = tomllib.loads(
        '[[claim]]\ntelescope = "Heron"\nmap = "2 arc"\nquantity = "probability"\n'
        'value = "43.50 %"\nband = "r"\nnight = "2031-03-14"\n'
        'stated_by = "the Heron team"\nwhere = "circular 12"\n'
    )["claim"]
    assert parse_claim(entry) == Claim(
        telescope="Heron",
        quantity=Quantity.PROBABILITY,
        value="43.50 %",
        map="2 arc",
        band="r",
        night="2031-03-14",
        stated_by="the Heron team",
        where="circular 12",
    )


WHOLE = {"telescope": "Heron", "quantity": "area", "value": "254 deg2"}


@pytest.mark.parametrize(
    ("change", "column", "words"),
    [
        ({"quantity": "aera"}, "quantity", ["Did you mean area?", "probability_in_90"]),
        ({"quantity": "volume"}, "quantity", ["not a quantity", "Choose one of area"]),
        ({"value": 254.0}, "value", ["254.0", "without quotes", "digits"]),
        ({"value": ""}, "value", ["the value is missing"]),
        ({"telescope": "  "}, "telescope", ["the telescope is missing"]),
        ({"telescop": "Heron"}, "telescop", ["Did you mean telescope?"]),
        ({"night": "14 March"}, "night", ["not a date", "2031-03-14"]),
        ({"where": "two\nlines"}, "where", ["printable"]),
        ({"where": "x" * 3000}, "where", ["at most 2000"]),
    ],
)
def test_entries_that_cannot_be_used(change, column, words):
    with pytest.raises(InputError) as caught:
        parse_claim({**WHOLE, **change})
    assert caught.value.column == column
    message = str(caught.value)
    assert all(word in message for word in words), message


def test_an_entry_must_have_what_a_claim_needs():
    for key in WHOLE:
        entry = {name: text for name, text in WHOLE.items() if name != key}
        with pytest.raises(InputError, match=f"the {key} is missing"):
            parse_claim(entry)


HEADER = "telescope,map,quantity,value,stated_by,where,band,night\n"


def test_a_table_of_claims(tmp_path):
    path = tmp_path / "claims.csv"
    path.write_bytes(
        (
            "\ufeff# what was sent in the first night\n" + HEADER + "\n"
            'Heron,2 arc,probability,"43.5 %",the Heron team,circular 12,r,2031-03-14\n'
            "all,,number of exposures,244,the desk,page 3,,\n"
        ).encode()
    )
    one, two = read_claims(path)
    assert one == Claim(
        *("Heron", Quantity.PROBABILITY, "43.5 %", "2 arc", "r", "2031-03-14"),
        *("the Heron team", "circular 12"),
    )
    assert two == Claim(
        *("all", Quantity.EXPOSURES, "244", None, None, None, "the desk", "page 3"),
    )


@pytest.mark.parametrize("separator", [";", "\t"])
def test_decimal_commas_and_few_columns(tmp_path, separator):
    path = tmp_path / "claims.csv"
    rows = [("Telescope", "Quantity", "Value"), ("Heron", "area", "12,5 deg2")]
    path.write_text("\n".join(separator.join(row) for row in rows))
    (claim,) = read_claims(str(path))
    assert claim.value == "12,5 deg2"
    assert claim.stated.number == 12.5
    assert claim.map is claim.band is claim.night is None
    assert claim.stated_by == claim.where == ""


@pytest.mark.parametrize(
    ("text", "row", "column", "words"),
    [
        ("", None, None, ["empty"]),
        (HEADER, None, None, ["no rows", "one row per claim"]),
        ("telescope,value\nHeron,1\n", None, None, ["0 columns 'quantity'", "expected one"]),
        (
            "telescope,quantity,value,Value\nHeron,area,1,2\n",
            None,
            None,
            ["2 columns 'value'"],
        ),
        (
            "telescope,quantity,Stated value\nHeron,area,1\n",
            None,
            "Stated value",
            ["not known in a table of claims", "only telescope, quantity, value must be there"],
        ),
        (
            "Telescope,quantity,value,stated by whom\nHeron,area,1,x\n",
            None,
            "stated by whom",
            ["Did you mean stated_by?"],
        ),
        (
            "telescope,quantity,The Value\nHeron,area,1\n",
            None,
            "The Value",
            ["Did you mean value?"],
        ),
        (
            HEADER + "Heron,,area,254,,,,\nHeron,,aera,254,,,,\n",
            3,
            "quantity",
            ["'aera'", "Did you mean area?"],
        ),
        (
            "telescope,quantity,VALUE\n# a comment\nHeron,probability,43.5\n",
            3,
            "VALUE",
            ["'43.5'", "Write 43.5 %"],
        ),
        (HEADER + ",,area,254,,,,\n", 2, "telescope", ["missing"]),
        (HEADER + "Heron,,area\n", 2, None, ["3 cells where the header has 8"]),
        (HEADER + "Heron,,area,254,,,,yesterday\n", 2, "night", ["not a date"]),
    ],
)
def test_tables_that_cannot_be_used(tmp_path, text, row, column, words):
    path = tmp_path / "claims.csv"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_claims(path)
    fault = caught.value
    assert (fault.file, fault.row, fault.column) == (str(path), row, column)
    message = str(fault)
    assert all(word in message for word in words), message


def test_only_files_on_this_machine(tmp_path):
    for path in ("https://example.org/claims.csv", tmp_path, tmp_path / "none.csv"):
        with pytest.raises(InputError) as caught:
            read_claims(path)
        assert caught.value.file == str(path)
        assert caught.value.remedy
