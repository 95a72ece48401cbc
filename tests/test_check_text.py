"""What `skytally check` prints: for eyes of 80 columns, and for machines."""

from __future__ import annotations

import io
import json
import re
from dataclasses import replace

import pytest
from skytally.audit_tables import audit_tables
from skytally.check_text import render_check, to_check_json
from skytally.claims import ClaimVerdict, Verdict
from skytally.claims_io import Claim, Quantity
from skytally.findings import Finding
from skytally.results import Results
from small_results import small_results

MANY = tuple(range(2, 40))
ERROR = Finding(
    "ra-in-hours",
    "error",
    "Plover",
    MANY,
    "All right ascensions lie below 24, and 36 of 38 fields lie on the map only when multiplied "
    "by 15.",
    "The numbers are as logged.",
    'Set ra_unit = "hour" if that is what they are.',
)
NOTE = Finding("rows-set-aside", "note", "Heron", (7,), "One row.", "It does not count.", "Look.")
CAUTION = replace(NOTE, code="depth-outlier", severity="caution", subject="Avocet")
CLAIM = ClaimVerdict(
    Claim("all", Quantity.PROBABILITY, "61 %", stated_by="A. Observer", where="circular 12"),
    Verdict.DIFFERS,
    map="2 update",
    own=0.435,
    own_low=0.433,
    own_high=0.437,
    difference=0.175,
    own_text="43.5 %",
    difference_text="17.5 percentage points greater",
    text="Stated are 61 %; the tally gives 43.5 %.",
)


def results(**more: object) -> Results:
    return replace(small_results(), **more)


def text_of(one: Results, encoding: str = "utf-8") -> str:
    return render_check(one, io.TextIOWrapper(io.BytesIO(), encoding=encoding))


def test_findings_stand_in_groups_the_gravest_first() -> None:
    text = text_of(results(findings=(NOTE, CAUTION, ERROR), silenced=(NOTE,), claims=(CLAIM,)))
    heads = re.findall(r"^[A-Z]{5,}", text, re.M)
    assert heads == ["ERRORS", "CAUTIONS", "NOTES", "CLAIMS", "SILENCED"]
    plain = text.replace("\u00a0", " ")
    assert plain.startswith("Lantern 7: 1 error, 1 caution and 1 note in 5 rows")
    assert "Plover [ra-in-hours], rows 2, 3, 4" in text
    assert "and 26 more" in text
    assert "To do: Set ra_unit" in text
    assert "  all, probability (A. Observer, circular 12)\n" in plain
    assert "Differs. Stated are 61 %" in plain


@pytest.mark.parametrize("encoding", ["utf-8", "ascii"])
def test_it_fits_a_terminal_and_steers_none(encoding: str) -> None:
    evil = replace(ERROR, subject="Pl\x1b[31mover", text="word " * 60 + "°")
    text = text_of(results(findings=(evil,)), encoding)
    assert max(map(len, text.splitlines())) <= 80
    assert "\x1b" not in text
    text.encode(encoding)


def test_nothing_found_is_said() -> None:
    text = text_of(results(findings=(), silenced=(), claims=()))
    assert "nothing to remark" in text
    assert len(text.splitlines()) <= 3


def test_the_json_lists_every_row() -> None:
    content = json.loads(to_check_json(results(findings=(ERROR,), claims=(CLAIM,))))
    assert content["format"] == "skytally/check"
    assert content["findings"][0]["rows"] == list(MANY)
    assert content["claims"][0]["own"] == 0.435
    assert content["claims"][0]["claim"]["quantity"] == "probability"
    assert content["silenced"] == []
    assert [log["read"] for log in content["logs"]] == [log.read for log in small_results().logs]


def test_the_report_has_a_table_of_each() -> None:
    tables = audit_tables(results(findings=(NOTE, ERROR), silenced=(NOTE,), claims=(CLAIM,)))
    found = tables["findings"].rows
    assert [row[0].text for row in found] == ["error", "note"]
    assert found[0][1].detail.endswith("and 26 more")
    assert [row[0].text for row in tables["silenced"].rows] == ["rows-set-aside"]
    (row,) = tables["claims"].rows
    assert (row[1].text, row[1].detail) == ("61 %", "A. Observer, circular 12")
    assert row[2].text == "43.5 %"
    assert "2 update" in row[0].detail
