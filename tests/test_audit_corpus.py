"""The audit whole, from text to finding, on logs with one planted fault each and clean twins.

What is clean and what a fault does is decided by an independent ephemeris, PyPI "ephem".
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from audit_corpus import CASES, UNREACHABLE, clean_cautions, judge_all, summary
from audit_faults import Planted
from skytally.findings import CODES


def test_every_code_that_a_log_can_bring_about_is_planted() -> None:
    planted = {case.code for case in CASES}
    assert planted | UNREACHABLE.keys() == set(CODES)
    assert not planted & UNREACHABLE.keys()


def test_the_corpus_is_large_and_varied() -> None:
    assert len({case.name for case in CASES}) == len(CASES) >= 44
    assert len({case.observer for case in CASES}) == 10
    names = {case.name for case in CASES}
    assert {f"clock {h} h {way}" for h in range(1, 13) for way in ("slow", "fast")} <= names


def test_the_judge_sees_misses_surprises_and_errors_on_a_twin(tmp_path: Path) -> None:
    case = next(case for case in CASES if case.name == "limits of zero")
    elsewhere = replace(case, plant=lambda work: Planted([0], near=case.plant(work).rows))
    sought_amiss = replace(case, code="depth-missing")
    in_both = replace(case, prepare=case.plant, plant=lambda _: Planted(()))
    misses = list(judge_all(tmp_path, [elsewhere, sought_amiss, in_both]))
    assert [v.found for v in misses] == [False] * 3
    (error,) = misses[1].surprises
    assert error == "depth-out-of-range of Plover"
    assert misses[2].false_errors == (error,)


def test_every_planted_fault_is_found_and_no_clean_twin_is_in_error(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """All in one test, so that the corpus is judged once however tests are shared out."""
    verdicts = list(judge_all(tmp_path))
    with capsys.disabled():
        print(f"\n{summary(verdicts)}")
    assert [(v.case.name, v.case.code, v.text) for v in verdicts if not v.found] == []
    assert [(v.case.name, v.false_errors) for v in verdicts if v.false_errors] == []
    # Errors other than the fault's own must follow from it, as its case says with the reason.
    assert [(v.case.name, v.surprises) for v in verdicts if v.surprises] == []
    # A finding on the fault names no row that is right.
    assert [(v.case.name, v.strays) for v in verdicts if v.strays] == []


def test_random_clean_campaigns_have_no_error_and_hardly_a_caution(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    errors, cautions, logs = clean_cautions(tmp_path, seed=7, count=10)
    with capsys.disabled():
        print(f"\n{logs} further clean logs: errors {dict(errors)}, cautions {dict(cautions)}")
    assert not errors
    # Two in twenty logs is what an observer would still read (a value of our own).
    assert cautions.total() <= 2
