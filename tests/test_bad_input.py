"""Every broken input ends in its exit code, with one message and nothing half-written."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from bad_input_cases import CAMPAIGNS, MAPS
from bad_input_changes import Case
from bad_input_data_cases import CAMERAS, COMMANDS, IMAGES, LOGS, OUTPUTS, REGION_CASES, ROWS
from quick_outputs import quick_renderers
from skytally.cli import app
from skytally.scaffold import write_campaign
from typer.testing import CliRunner

CASES = (*MAPS, *CAMPAIGNS, *LOGS, *CAMERAS, *REGION_CASES, *IMAGES, *COMMANDS, *OUTPUTS)
# A log that cannot be read does not stop the other telescopes' accounts.
UNREAD = tuple(case for case in CASES if case.code == 1)
STOPPING = tuple(case for case in CASES if case.code != 1)

# What only those understand who wrote the libraries below us: names of classes and
# modules, codes, and objects as a programmer would print them.
JARGON = re.compile(
    r"Traceback|pydantic|astropy|mocpy|numpy|tomllib|HDU|NoneType|Errno|input_value"
    r"|\w(?:Error|Exception|Warning)\b|<class|object at 0x|\b(?:str|bytes|object)\d+\b"
    r"|\b[EW]\d\d:|\b0x[0-9a-f]{4}|codec|\bb['\"]|\bNone\b"
)
# Notes of the sample campaign as it stands.
SAMPLE_NOTE = "Note: Map 2 update: Built from a position"


@pytest.fixture(scope="module")
def sample(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("sample") / "night"
    write_campaign(folder)
    return folder


@pytest.fixture
def night(sample: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(sample, tmp_path / "night"))


@pytest.fixture(autouse=True)
def _quick_renderers(monkeypatch: pytest.MonkeyPatch) -> None:
    """What a page looks like is no matter here; that none is left behind is."""
    quick_renderers(monkeypatch)


def arguments(case: Case, folder: Path) -> list[str]:
    return [word.format(folder=folder) for word in case.command]


def listing(folder: Path) -> dict[str, bytes | None]:
    """Everything below a folder and what the files hold, without following links."""
    return {
        str(path): path.read_bytes() if path.is_file() and not path.is_symlink() else None
        for path in folder.rglob("*")
    }


def check_words(case: Case, message: str) -> None:
    for word in (*case.place, case.remedy):
        assert word in message
    assert JARGON.search(message) is None
    # Names and values of the user's are cut where they are quoted.
    assert max(map(len, message.splitlines())) < 1000


def test_there_are_enough_cases_and_each_has_its_name() -> None:
    names = [case.name for case in (*CASES, *ROWS)]
    assert len(names) >= 60
    assert len(set(names)) == len(names)


@pytest.mark.parametrize("case", STOPPING, ids=str)
def test_what_cannot_be_used_stops_with_one_message(case: Case, night: Path) -> None:
    case.change(night)
    before = listing(night)
    done = CliRunner().invoke(app, arguments(case, night), prog_name="skytally")
    assert done.exit_code == case.code
    assert done.stdout == ""
    said = [x for x in done.stderr.splitlines() if not x.startswith(SAMPLE_NOTE)]
    assert sum("Error: " in line for line in said) == 1
    check_words(case, "\n".join(said))
    if not done.stderr.startswith("Usage: skytally"):
        assert said[0].startswith("Error: ")
        if said[0].endswith(" 1 fault:"):
            assert len(said) == 2
        assert said[-1].endswith((".", "?", "DIR"))
    assert listing(night) == before


@pytest.mark.parametrize("case", UNREAD, ids=str)
def test_a_log_that_cannot_be_read_does_not_stop_the_others(case: Case, night: Path) -> None:
    case.change(night)
    before = listing(night)
    done = CliRunner().invoke(app, ["tally", str(night / "campaign.toml")], prog_name="skytally")
    assert done.exit_code == 1
    said = [line for line in done.stderr.splitlines() if line.startswith("Error: ")]
    assert len(said) == 1
    check_words(case, said[0])
    assert str(night) not in said[0]
    left_out = re.search(r"The answer is without (\w+)\.$", said[0])
    assert left_out is not None
    first = f"Without {left_out[1]}, whose log could not be read: by 2031"
    assert plain(done.stdout).startswith(first)
    assert listing(night) == before


def test_where_no_log_can_be_read_there_is_no_answer(night: Path) -> None:
    for log in (night / "logs").iterdir():
        log.write_text("")
    done = CliRunner().invoke(app, ["tally", str(night / "campaign.toml")], prog_name="skytally")
    assert (done.exit_code, done.stdout) == (2, "")
    assert "2 faults" in done.stderr
    assert "heron.csv" in done.stderr
    assert "plover.csv" in done.stderr


@pytest.mark.parametrize("case", ROWS, ids=str)
def test_a_row_at_fault_is_listed_and_the_others_count(case: Case, night: Path) -> None:
    case.change(night)
    before = listing(night)
    done = CliRunner().invoke(app, arguments(case, night), prog_name="skytally")
    assert done.exit_code == case.code == 0
    said = [x for x in done.stderr.splitlines() if not x.startswith(SAMPLE_NOTE)]
    fault = [line for line in said if all(word in line for word in (*case.place, case.remedy))]
    assert len(fault) == 1
    check_words(case, fault[0])
    aside = case.place[0].startswith("heron.csv, row")
    assert ("12 rows read = 10 used + 2 set aside" in plain(done.stdout)) == aside
    assert listing(night) == before


def plain(text: str) -> str:
    return " ".join(text.replace("\u00a0", " ").split())


@pytest.mark.parametrize(
    "name", ["campaign.toml", "maps/first.fits", "logs/heron.csv", "cameras/plover.csv"]
)
def test_a_file_without_permission(name: str, night: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    opened = open

    # The super-user may read everything, so the refusal is made here.
    def refuse(file: Any, *rest: Any, **more: Any) -> Any:
        if isinstance(file, str | Path) and Path(file) == night / name:
            raise PermissionError(13, "Permission denied", str(file))
        return opened(file, *rest, **more)

    monkeypatch.setattr("builtins.open", refuse)
    monkeypatch.setattr("io.open", refuse)
    done = CliRunner().invoke(app, ["tally", str(night / "campaign.toml")])
    if "logs/" in name:  # The others are tallied without it.
        assert done.exit_code == 1
        assert f"{name}:" in done.stderr
    else:
        assert (done.exit_code, done.stdout) == (2, "")
        assert f"{night / name}:" in done.stderr
    assert "permission denied" in done.stderr
    assert "permissions." in done.stderr
    assert JARGON.search(done.stderr) is None


@pytest.mark.parametrize(
    "name",
    [
        "map NaN",
        "campaign a pipe",
        "unknown command",
        "declination 95",
        "a region of somebody else",
    ],
)
def test_a_process_of_its_own_says_the_same(name: str, night: Path) -> None:
    case = next(case for case in (*STOPPING, *ROWS) if case.name == name)
    case.change(night)
    words = arguments(case, night)
    alone = subprocess.run(
        [sys.executable, "-m", "skytally", *words],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
        env={**os.environ, "PYTHONIOENCODING": "utf-8"},
    )
    here = CliRunner().invoke(app, words, prog_name="skytally")
    assert alone.returncode == here.exit_code == case.code
    assert plain(alone.stderr) == plain(here.stderr)
    assert alone.stdout == here.stdout
