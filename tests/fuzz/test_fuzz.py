"""A batch of hostile files for each reader, and those that once did harm.

Nothing is compared with a number: a reader gives a result that does not contradict
itself, or refuses with an error of ours. ``run.py`` beside this does the same at length.
"""

from __future__ import annotations

import warnings
from pathlib import Path

import pytest
from fuzz_session import Bug, case, furnish, run_case, run_cases, saved_cases
from fuzz_targets import TARGETS, Target, seeds
from skytally.errors import InputError

SEED = 20310314


@pytest.mark.parametrize("name", TARGETS)
def test_a_result_or_an_error_of_ours(name: str, tmp_path: Path) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # as the command does
        found = run_cases({name: max(120, 18 * TARGETS[name].share)}, SEED, tmp_path)[name]
    assert [(bug.what, bug.place, bug.seed) for bug in found.bugs] == []
    assert found.outcomes["refused"] > 0


@pytest.mark.parametrize("name", TARGETS)
def test_the_files_that_are_spoilt_are_good_ones(name: str, tmp_path: Path) -> None:
    furnish(tmp_path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for data in seeds(name):
            # Some of the options that a seed picks do not fit every log.
            outcomes = {run_case(TARGETS[name], data, str(i), tmp_path) for i in range(4)}
            assert "result" in outcomes
            assert outcomes <= {"result", "refused"}


@pytest.mark.parametrize("path", saved_cases(), ids=lambda path: path.name)
def test_what_did_harm_once(path: Path, tmp_path: Path) -> None:
    target = TARGETS[path.name.rpartition("-")[0]]
    furnish(tmp_path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        outcome = run_case(target, path.read_bytes(), "0", tmp_path)
    assert not isinstance(outcome, Bug), (outcome.what, outcome.place)


def _reader(fault: BaseException | None) -> Target:
    def read(path: Path, rng: object) -> None:
        if fault is not None:
            raise fault

    return Target("log", ".csv", read, 1)


def test_the_fuzzer_tells_a_bug_from_a_refusal(tmp_path: Path) -> None:
    assert run_case(_reader(None), b"", "0", tmp_path) == "result"
    assert run_case(_reader(InputError("no")), b"", "0", tmp_path) == "refused"
    bug = run_case(_reader(ZeroDivisionError("x")), b"spoilt", "0", tmp_path)
    assert isinstance(bug, Bug)
    assert bug.data == b"spoilt"
    assert "ZeroDivisionError" in bug.what


def test_a_reader_that_hangs_is_a_bug(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def read(path: Path, rng: object) -> None:
        while True:
            pass

    monkeypatch.setattr("fuzz_session.SECONDS_LIMIT", 0.05)
    bug = run_case(Target("log", ".csv", read, 1), b"", "0", tmp_path)
    assert isinstance(bug, Bug)
    assert "more than" in bug.what


def test_a_case_depends_on_its_seed_alone() -> None:
    for name in TARGETS:
        assert case(name, "1") == case(name, "1")
        assert len({case(name, str(i)) for i in range(20)}) > 10
