"""Runs that are killed, stopped, out of room or in one another's way: nothing is lost."""

from __future__ import annotations

import hashlib
import io
import os
import shutil
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest
from quick_outputs import quick_renderers
from skytally import local_files, outputs, staging
from skytally.campaign import load_campaign
from skytally.errors import LogError, OutputError
from skytally.local_files import read_local_file
from skytally.outputs import write_outputs
from skytally.results import Results
from skytally.scaffold import write_campaign
from small_results import renamed, small_results

TESTS = Path(__file__).parent
needs_locks = pytest.mark.skipif(staging.fcntl is None, reason="there are no locks on folders")

Tree = dict[str, bytes]


def tree(folder: Path) -> Tree:
    return {
        p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()
    }


def python(code: str, *arguments: Path, **options: object) -> subprocess.Popen[str]:
    """Run code beside this process, which finds the tests' own modules."""
    return subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(code), *map(str, arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONPATH": str(TESTS)},
        **options,  # type: ignore[call-overload]
    )


def test_killed_runs_leave_whole_files_a_sound_cache_and_a_right_next_run() -> None:
    done = subprocess.run(
        [sys.executable, str(TESTS / "kill" / "run.py"), "--kills", "8", "--quick"],
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.startswith("8 runs killed, 0 folders with a half-written file")


WORKING = """
    import os, sys, time
    from skytally import cli, workers

    def stuck(item):
        os.write(1, b"at work\\n")  # in one piece, whoever else writes
        time.sleep(60)

    cli._tally = lambda campaign, no_cache, rest: workers.side_by_side(stuck, range(9))
    workers._WORKERS = 2
    sys.argv = ["skytally", "tally", "night.toml"]
    cli.main()
"""


@pytest.mark.parametrize(("number", "code"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_threads_at_work_do_not_delay_the_end(number: signal.Signals, code: int) -> None:
    process = python(WORKING)
    assert process.stdout is not None
    assert process.stdout.readline() == "at work\n"
    sent = time.monotonic()
    process.send_signal(number)
    _, told = process.communicate(timeout=30)
    assert time.monotonic() - sent < 10  # of 60
    assert process.returncode == code
    assert "Traceback" not in told


def test_ctrl_c_during_the_imports_is_quiet(tmp_path: Path) -> None:
    (tmp_path / "typer.py").write_text("raise KeyboardInterrupt\n")
    done = subprocess.run(
        [sys.executable, "-m", "skytally", "--help"],
        capture_output=True,
        env=os.environ | {"PYTHONPATH": str(tmp_path)},
        timeout=60,
    )
    assert (done.returncode, done.stdout, done.stderr) == (130, b"", b"")


@pytest.mark.skipif(not hasattr(signal, "SIGXFSZ"), reason="there is no limit on a file's size")
def test_a_disk_without_room_ends_with_3_and_the_old_outputs(tmp_path: Path) -> None:
    """The system itself refuses to write on; `setrlimit` of POSIX.1-2017."""
    code = """
        import resource, sys
        from quick_outputs import quick_renderers
        import pytest
        from skytally import cli
        from small_results import small_results

        quick_renderers(pytest.MonkeyPatch())
        cli._tally = lambda campaign, no_cache, rest: small_results()
        if sys.argv[2] != "0":
            resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[2]),) * 2)
        sys.argv = ["skytally", "report", "night.toml", "--out", sys.argv[1]]
        cli.main()
    """
    unlimited = python(code, tmp_path / "out", Path("0"))
    _, told = unlimited.communicate(timeout=60)
    assert unlimited.returncode == 0, told
    before = tree(tmp_path)
    process = python(code, tmp_path / "out", Path("600"))
    _, told = process.communicate(timeout=60)
    assert process.returncode == 3, told
    assert "nothing there was changed" in told
    assert "Free some space" in told
    assert tree(tmp_path) == before


@pytest.fixture
def _quick(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_renderers(monkeypatch)


@pytest.mark.usefixtures("_quick")
@pytest.mark.parametrize("gone", ["out", "base"])
def test_a_folder_that_vanishes_is_an_output_error(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, gone: str
) -> None:
    out = tmp_path / "base" / "out"
    write_outputs(small_results(), out)

    def vanish(results: Results, figures: object, style: object) -> str:
        shutil.rmtree(out if gone == "out" else out.parent)
        return "page"

    monkeypatch.setattr(outputs, "render_html", vanish)
    with pytest.raises(OutputError, match=r"could not be written.*--out") as caught:
        write_outputs(small_results(), out)
    assert caught.value.exit_code == 3
    assert tree(tmp_path) == {}


@pytest.mark.usefixtures("_quick")
@pytest.mark.skipif(hasattr(os, "geteuid") and os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_that_may_not_be_written_is_an_output_error(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_outputs(small_results(), out)
    before = tree(out)
    out.chmod(0o500)
    try:
        with pytest.raises(OutputError, match="permission denied"):
            write_outputs(small_results(), out)
    finally:
        out.chmod(0o700)
    assert tree(out) == before


@needs_locks
@pytest.mark.usefixtures("_quick")
def test_a_run_that_ends_while_another_is_at_work_is_replaced_whole(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Both begin when there is no folder; each one's files are all its own."""
    mine, others = renamed(small_results(), "Heron", "Dunlin"), small_results()
    write_outputs(mine, tmp_path / "alone")
    html = outputs.render_html

    def meanwhile(*arguments: object) -> str:
        monkeypatch.setattr(outputs, "render_html", html)
        write_outputs(others, tmp_path / "out")
        return html(*arguments)  # type: ignore[arg-type]

    monkeypatch.setattr(outputs, "render_html", meanwhile)
    write_outputs(mine, tmp_path / "out")
    assert tree(tmp_path / "out") == tree(tmp_path / "alone")
    assert sorted(os.listdir(tmp_path)) == ["alone", "out"]


@needs_locks
def test_many_runs_into_one_folder_leave_the_files_of_one(tmp_path: Path) -> None:
    code = """
        import sys
        import pytest
        from quick_outputs import quick_renderers
        from skytally.outputs import write_outputs
        from small_results import renamed, small_results

        quick_renderers(pytest.MonkeyPatch())
        print("ready", flush=True)
        sys.stdin.readline()
        for _ in range(8):
            write_outputs(renamed(small_results(), "Heron", sys.argv[2]), sys.argv[1])
    """
    names = ["Dunlin", "Plover"]
    running = [python(code, tmp_path / "out", Path(name), stdin=subprocess.PIPE) for name in names]
    for process in running:
        assert process.stdout is not None
        assert process.stdout.readline() == "ready\n"
    told = [process.communicate("go\n", timeout=120)[1] for process in running]
    assert [process.returncode for process in running] == [0, 0], told
    alone = []
    with pytest.MonkeyPatch.context() as patch:
        quick_renderers(patch)
        for name in names:
            write_outputs(renamed(small_results(), "Heron", name), tmp_path / name)
            alone.append(tree(tmp_path / name))
    assert tree(tmp_path / "out") in alone


@needs_locks
@pytest.mark.usefixtures("_quick")
def test_a_folder_held_for_too_long_is_an_output_error(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(staging, "_PATIENCE_S", 0.1)
    with staging.hold_folder(tmp_path) as held:
        assert held
        with pytest.raises(OutputError, match="another run"):
            write_outputs(small_results(), tmp_path / "out")
    write_outputs(small_results(), tmp_path / "out")
    assert os.listdir(tmp_path) == ["out"]


@needs_locks
@pytest.mark.usefixtures("_quick")
def test_what_a_killed_run_left_is_cleared_and_what_a_live_one_uses_is_not(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_outputs(small_results(), out)
    (out / ".skytally-0123456789ab" / "new").mkdir(parents=True)
    (out / ".skytally-notes").mkdir()
    with staging.staging_folder(out) as live:
        write_outputs(small_results(), out)
        assert live.is_dir()
    hidden = [name for name in os.listdir(out) if name.startswith(".")]
    assert hidden == [".skytally-notes"]


@pytest.mark.usefixtures("_quick")
def test_without_locks_everything_else_works(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(staging, "fcntl", None)
    left = tmp_path / ".skytally-0123456789ab"
    left.mkdir()
    for _ in range(2):
        write_outputs(small_results(), tmp_path / "out")
    assert sorted(os.listdir(tmp_path)) == [left.name, "out"]


def test_a_log_that_grows_while_it_is_read_is_hashed_as_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The hash of the very bytes that were parsed, by hashlib; each file is opened once."""
    path = write_campaign(tmp_path / "night")[0]
    opened: list[str] = []

    def growing(name: str | Path, mode: str) -> io.FileIO:
        assert mode == "rb"
        opened.append(str(name))
        stream = io.FileIO(str(name))
        with open(name, "ab") as more:
            more.write(b"\n# one more row\n")
        return stream

    before = {str(p): hashlib.sha256(p.read_bytes()).hexdigest() for p in path.parent.rglob("*.*")}
    monkeypatch.setattr(local_files, "open", growing, raising=False)
    loaded = load_campaign(path)
    assert len(opened) == len(set(opened)) > 2
    for role, name, digest in loaded.inputs:
        assert digest == before[str(path.parent / name)], role
    assert any(role == "log" for role, _, _ in loaded.inputs)


def test_a_file_cut_while_it_is_read_is_hashed_as_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "log.csv"
    path.write_bytes(b"a" * 100)
    stat = os.stat

    def cut(name: object, *arguments: object, **options: object) -> os.stat_result:
        found = stat(name, *arguments, **options)  # type: ignore[arg-type]
        if name == path:
            os.truncate(path, 10)
        return found

    monkeypatch.setattr(local_files.os, "stat", cut)
    data, digest = read_local_file(path, size_limit_bytes=1000, error=LogError)
    assert data == b"a" * 10
    assert digest == hashlib.sha256(data).hexdigest()
