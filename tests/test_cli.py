"""The commands: exit codes, messages, what goes to which stream."""

from __future__ import annotations

import io
import json
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import skytally
from astropy.coordinates import SkyCoord
from astropy.table import Table
from quick_outputs import no_pdf, quick_renderers
from skytally import cli
from skytally.account import account
from skytally.campaign import load_campaign
from skytally.cli import app
from skytally.errors import CampaignError, LogError, OutputError
from skytally.results import Results
from skytally.scaffold import write_campaign
from skytally.terminal import render_tally
from small_results import renamed, small_results
from typer.testing import CliRunner, Result

HEAVY = {
    *("numpy", "scipy", "astropy", "astropy_healpix", "mocpy", "matplotlib"),
    *("jinja2", "weasyprint", "pydantic"),
}


def run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(app, [str(a) for a in arguments])


def python(*arguments: str, **options: Any) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, timeout=120, **options
    )


@pytest.fixture
def campaign(tmp_path: Path) -> Path:
    return write_campaign(tmp_path / "night")[0]


@pytest.fixture
def _quick_renderers(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_renderers(monkeypatch)


def test_help_and_import_load_nothing_heavy() -> None:
    code = f"import sys, skytally, skytally.cli; print({HEAVY!r} & set(sys.modules))"
    assert python("-c", code).stdout == "set()\n"


def test_the_face_hands_out_its_names_and_no_others() -> None:
    assert skytally.Campaign.__module__ == "skytally.api"
    assert skytally.read_skymap.__module__ == "skytally.skymap_io"
    assert set(skytally.__all__) <= set(dir(skytally))
    with pytest.raises(AttributeError, match="no attribute 'campaing'"):
        _ = skytally.campaing


def test_version_and_module_form() -> None:
    assert run("--version").stdout == f"skytally {skytally.__version__}\n"
    done = python("-m", "skytally", "--version")
    assert (done.returncode, done.stdout) == (0, f"skytally {skytally.__version__}\n")


def test_help_names_commands_and_exit_codes() -> None:
    done = run("--help")
    assert done.exit_code == 0
    for word in ("new", "report", "tally", "regions", "Exit codes"):
        assert word in done.stdout


@pytest.mark.parametrize(
    "arguments",
    [(), ("frob",), ("report", "night.toml"), ("tally",), ("tally", "a", "b"), ("tally", "--x")],
)
def test_usage_errors_end_with_two_and_leave_stdout_alone(arguments: tuple[str, ...]) -> None:
    done = run(*arguments)
    assert done.exit_code == 2
    assert done.stdout == ""
    assert "Usage: skytally" in done.stderr or "Usage: root" in done.stderr


def test_new_writes_a_campaign_that_runs(tmp_path: Path) -> None:
    done = run("new", tmp_path / "night")
    assert (done.exit_code, done.stdout) == (0, "")
    done = run("tally", tmp_path / "night" / "campaign.toml", "--json")
    assert done.exit_code == 0
    assert json.loads(done.stdout)["format"] == "skytally/tally"
    assert run("new", tmp_path / "night").exit_code == 2


def test_tally_prints_what_the_python_face_returns(campaign: Path) -> None:
    found = json.loads(run("tally", campaign, "--json").stdout)
    results = skytally.Campaign.read(campaign).tally()
    assert [row["probability"] for row in found["rows"]] == [r.probability for r in results.rows]
    version = results.maps[0].version
    one = json.loads(run("tally", campaign, "--json", "--map", version).stdout)
    assert one["rows"] == [row for row in found["rows"] if row["map"] == version]
    unknown = run("tally", campaign, "--map", "9")
    assert unknown.exit_code == 2
    assert version in unknown.stderr


@pytest.mark.usefixtures("_quick_renderers")
def test_report_writes_the_folder_and_prints_the_answer(campaign: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    done = run("report", campaign, "--out", out)
    assert done.exit_code == 0
    assert "covered" in done.stdout
    assert f"to {out}" in done.stderr
    assert (out / "report.pdf").read_bytes() == b"%PDF-"
    again = run("report", campaign, "--out", out, "--json")
    assert again.exit_code == 0
    assert again.stdout == (out / "tally.json").read_text(encoding="utf-8")


@pytest.mark.usefixtures("_quick_renderers")
def test_a_report_without_pdf_ends_with_three(
    campaign: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    quick_renderers(monkeypatch, no_pdf)
    done = run("report", campaign, "--out", tmp_path / "out")
    assert done.exit_code == 3
    assert "libpango" in done.stderr
    assert (tmp_path / "out" / "report.html").exists()
    assert not (tmp_path / "out" / "report.pdf").exists()


def test_regions_writes_moc_files(campaign: Path, tmp_path: Path) -> None:
    done = run("regions", campaign, "--out", tmp_path / "out")
    assert done.exit_code == 0
    names = {p.name for p in (tmp_path / "out").iterdir()}
    assert names == {"heron.fits", "plover.fits", "all.fits", "left-over", "manifest.json"}


@pytest.mark.parametrize("version", ["1 first", "3 update"])
def test_regions_writes_what_is_left_of_a_map(version: str, tmp_path: Path) -> None:
    example = Path(__file__).parents[1] / "examples/lantern-7/campaign.toml"
    done = run("regions", example, "--out", tmp_path / "out", "--map", version)
    assert done.exit_code == 0, done.stderr
    files = sorted(p.name for p in (tmp_path / "out/left-over").iterdir())
    lines = done.stdout.splitlines()
    assert version in lines[0]
    assert "still out there unseen" in lines[0]
    assert len(files) == len(lines) - 1 >= 1
    results = account(load_campaign(example))
    all_covered = results.row(map=version).probability
    for line in lines[1:]:
        share, name = line.split("%")[0], line.rpartition("left-over/")[2].rstrip(")")
        # Read back by a general reader: the densities of all cells sum to one.
        table = Table.read(tmp_path / "out/left-over" / name)
        order = np.asarray(np.log2(table["UNIQ"] / 4) // 2, dtype=int)
        area = 4 * np.pi / (12 * 4.0**order)
        assert np.sum(area * table["PROBDENSITY"]) == pytest.approx(1, abs=1e-9)
        if name == "coverage.fits.gz":
            assert float(share) / 100 == pytest.approx(1 - all_covered, abs=0.0006)
        else:
            wanted = {
                row.source: row.probability
                for row in results.source_rows
                if (row.map, row.telescope, row.band, row.night) == (version, None, None, None)
            }
            source = line.split("  as ")[1].split(" (")[0]
            assert float(share) / 100 == pytest.approx(1 - wanted[source], abs=0.0011)


def test_regions_refuses_an_unknown_map_version(campaign: Path, tmp_path: Path) -> None:
    done = run("regions", campaign, "--out", tmp_path / "out", "--map", "9")
    assert (done.exit_code, done.stdout) == (2, "")
    assert "there is no map version '9'" in done.stderr
    assert not (tmp_path / "out").exists()


def test_check_ends_with_one_where_it_finds_an_error(campaign: Path) -> None:
    good = run("check", campaign)
    assert good.exit_code == 0, good.stdout
    assert good.stdout.startswith("Lantern 7: ")
    assert good.stderr == ""
    log = campaign.parent / "logs/heron.csv"
    log.write_text("")
    bad = run("check", campaign, "--json")
    assert bad.exit_code == 1
    content = json.loads(bad.stdout)
    errors = [(f["code"], f["subject"]) for f in content["findings"] if f["severity"] == "error"]
    assert errors == [("log-unreadable", "Heron")]


def test_where_tells_of_a_position_and_of_a_table(campaign: Path, tmp_path: Path) -> None:
    one = account(load_campaign(campaign)).exposures[0]
    assert one.ra_deg is not None
    assert one.dec_deg is not None
    told = run("where", campaign, str(one.ra_deg), str(one.dec_deg))
    assert told.exit_code == 0, told.stderr
    assert one.exposure in told.stdout
    hours = SkyCoord(one.ra_deg, one.dec_deg, unit="deg").to_string("hmsdms", sep=":").split()
    again = run("where", campaign, *hours, "--json")
    assert again.exit_code == 0, again.stderr
    assert one.exposure in again.stdout
    table = tmp_path / "places.csv"
    table.write_text(f"name,ra,dec\nhere,{one.ra_deg},{one.dec_deg}\nthere,{one.ra_deg},89\n")
    both = run("where", campaign, "--positions", table, "--json")
    assert both.exit_code == 0, both.stderr
    assert json.loads(both.stdout)["format"] == "skytally/where"


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((), "RA and DEC, or --positions"),
        (("150.0",), "RA and DEC, or --positions"),
        (("150.0", "95"), "-90 to 90"),
        (("150.0", "-8", "--weight", "size"), "none, luminosity, mass"),
        (("150.0", "-8", "--completeness", "1.5"), "such as 0.6"),
        (("--positions", "absent.csv"), "absent.csv"),
    ],
)
def test_where_refuses_what_it_cannot_look_up(
    campaign: Path, arguments: tuple[str, ...], words: str
) -> None:
    done = run("where", campaign, *arguments)
    assert (done.exit_code, done.stdout) == (2, "")
    assert words in done.stderr
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (LogError("no column", file="a.csv", row=3, remedy="Add it."), 2, "a.csv, row 3: no col"),
        (CampaignError(["first", "second"], file="c.toml"), 2, "c.toml: 2 faults:\n  first\n"),
        (OutputError("no room", file="out", remedy="Make some."), 3, "out: no room. Make some."),
        (PermissionError(13, "Permission denied", "a.csv"), 2, "a.csv: it could not be read"),
        (MemoryError(), 2, "memory ran out"),
        (KeyboardInterrupt(), 130, "Stopped."),
        (RuntimeError("boo"), 70, "RuntimeError: boo"),
        (AssertionError("odd"), 70, "Please report it"),
    ],
)
def test_every_exception_becomes_one_message_and_a_code(
    monkeypatch: pytest.MonkeyPatch, error: BaseException, code: int, words: str
) -> None:
    def fail(path: object) -> None:
        raise error

    monkeypatch.delenv("SKYTALLY_DEBUG", raising=False)
    monkeypatch.setattr("skytally.campaign.load_campaign", fail)
    done = run("tally", "night.toml")
    assert done.exit_code == code
    assert done.stdout == ""
    assert words in done.stderr
    assert "Traceback" not in done.stderr
    monkeypatch.setenv("SKYTALLY_DEBUG", "1")
    done = run("tally", "night.toml")
    assert done.exit_code == code
    assert "Traceback" in done.stderr


@pytest.mark.parametrize("path", ["https://skytally.invalid/night.toml", ".", "nowhere.toml"])
def test_what_is_no_campaign_file_is_refused_in_words(path: str) -> None:
    done = run("tally", path)
    assert done.exit_code == 2
    assert path in done.stderr
    assert "Traceback" not in done.stderr


def break_rows(campaign: Path, count: int) -> None:
    """Add rows to the sample log whose right ascension is no number."""
    log = campaign.parent / "logs" / "heron.csv"
    text = log.read_text(encoding="utf-8")
    assert "\nImage,RA_DEG," in text
    last = text.rstrip("\n").splitlines()[-1].split(",")
    for i in range(count):
        text += ",".join([f"bad{i}", "clo\x1b[2Jud", *last[2:]]) + "\n"
    log.write_text(text, encoding="utf-8")


@pytest.mark.parametrize(
    ("count", "rest"), [(10, ""), (11, "and 1 more row set aside;"), (13, "3 more rows")]
)
def test_faulty_rows_are_listed_up_to_ten_and_do_not_stop(
    campaign: Path, count: int, rest: str
) -> None:
    break_rows(campaign, count)
    done = run("tally", campaign)
    assert done.exit_code == 0
    listed = [line for line in done.stderr.splitlines() if "heron.csv, row " in line]
    assert len(listed) == 10
    assert rest in done.stderr
    assert ("more row" in done.stderr) == bool(rest)
    assert "\x1b" not in done.stderr + done.stdout


def test_a_full_or_closed_standard_output(campaign: Path) -> None:
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "skytally", "tally", str(campaign)],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            timeout=120,
            check=False,
        )
    assert done.returncode == 3
    assert "standard output could not be written" in done.stderr
    assert "Traceback" not in done.stderr
    assert "Exception ignored" not in done.stderr
    closed = python(
        "-c",
        "import os, subprocess, sys\n"
        "reader, writer = os.pipe(); os.close(reader)\n"
        "sys.exit(subprocess.run([sys.executable, '-m', 'skytally', *sys.argv[1:]],"
        " stdout=writer).returncode)",
        *("tally", str(campaign)),
    )
    assert closed.returncode == 0
    assert "rror" not in closed.stderr


class Stream(io.StringIO):
    """A standard output of a given kind."""

    def __init__(self, encoding: str, terminal: bool) -> None:
        super().__init__()
        self._encoding, self._terminal = encoding, terminal

    @property
    def encoding(self) -> str:  # type: ignore[override]
        return self._encoding

    def isatty(self) -> bool:
        return self._terminal


def long_names() -> Results:
    return renamed(small_results(), "Heron\x1b[2J\n" + "q" * 60, "Plover")


@pytest.mark.parametrize("make", [small_results, long_names])
@pytest.mark.parametrize("encoding", ["utf-8", "ascii"])
def test_the_terminal_tables_fit_eighty_columns(make: Callable[[], Results], encoding: str) -> None:
    text = render_tally(make(), Stream(encoding, terminal=False))
    assert max(map(len, text.splitlines())) <= 80
    assert all(c == "\n" or c.isprintable() or c == "\u00a0" for c in text)
    assert text.isascii() == (encoding == "ascii")
    assert "33.33" in text
    assert "16.67" in text
    assert "3 used" not in text
    assert "3 rows read = 1 used + 2 set aside (1 not accepted, 1 unreadable)" in text.replace(
        "\u00a0", " "
    )


def test_only_a_terminal_gets_bold() -> None:
    assert "\x1b[1m" in render_tally(small_results(), Stream("utf-8", terminal=True))


@pytest.mark.parametrize("terminal", [True, False])
def test_a_bar_appears_on_a_terminal_only(monkeypatch: pytest.MonkeyPatch, terminal: bool) -> None:
    stream = Stream("utf-8", terminal)
    monkeypatch.setattr(sys, "stderr", stream)
    monkeypatch.setattr(cli, "SECONDS_BEFORE_BAR", 0.0)
    with cli._progress("Reading\x1b[2J") as advance:
        assert (advance is not None) == terminal
        if advance is not None:
            advance("Laying \x1b[2JHeron", 0.25)
            time.sleep(0.5)  # The bar starts by itself, and draws ten times a second.
    assert ("Laying [2JHeron" in stream.getvalue()) == terminal
    assert "\x1b[2J" not in stream.getvalue()
    assert stream.getvalue().count("25%") >= terminal
