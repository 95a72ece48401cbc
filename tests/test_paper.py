"""The PDF in a process of its own: the same document, the same errors, and nothing left over."""

from __future__ import annotations

import contextlib
import io
import json
import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pypdf
import pytest
from sample_results import sample_results
from skytally import outputs, paper
from skytally.errors import OutputError
from skytally.figures import draw_figures
from skytally.outputs import write_outputs
from skytally.paper import figure_place, make_pdf, open_paper, serve
from skytally.report import render_paper, render_pdf
from skytally.results import Results

SQUARE = (
    '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 72 36">'
    '<path d="M 0 0 L 72 0 L 72 36 z" fill="#123456"/></svg>'
)
PAGE = f"<html lang=en><title>T</title><p>words {figure_place('one', 'a <wedge>', 1.0, 0.5)}</p>"


@pytest.fixture(scope="module")
def results() -> Results:
    return sample_results(exposures=30)


def text_of(pdf: bytes) -> str:
    return "".join(page.extract_text() for page in pypdf.PdfReader(io.BytesIO(pdf)).pages)


def pieces_of(pdf: bytes) -> bytes:
    """All that is painted, in the document's own language."""
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    content = b"".join(page.get_contents().get_data() for page in reader.pages)
    objects = (reader.get_object(n) for n in range(1, reader.trailer["/Size"]))
    return content + b"".join(
        o.get_data() for o in objects if getattr(o, "get", lambda _: None)("/Subtype") == "/Form"
    )


def alone(*arguments: str | Path, **options: object) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, *map(str, arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        **options,
    )


def children_of(parent: int) -> list[int]:
    """Process numbers, zombies included, from Linux's /proc."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                fields = (entry / "stat").read_text().rpartition(")")[2].split()
            except OSError:
                continue
            if int(fields[1]) == parent:
                found.append(int(entry.name))
    return found


def gone(number: int) -> bool:
    """Tell whether a process has ended within five seconds."""
    for _ in range(100):
        try:
            state = Path(f"/proc/{number}/stat").read_text().rpartition(")")[2].split()[0]
        except OSError:
            return True
        if state == "Z":  # ours no more: whoever inherits orphans has not looked yet
            return True
        time.sleep(0.05)
    return False


def test_a_process_of_its_own_makes_the_same_bytes(
    results: Results, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1900000000")
    figures = draw_figures(results)
    with open_paper() as there:
        assert isinstance(there, paper._PaperThere)
        there.send_page(render_paper(results, figures))
        for name, drawing in figures.items():
            there.send_drawing(name, drawing.svg)
        pdf = there.pdf()
    assert pdf == render_pdf(results, figures)
    assert there.process.returncode is not None


def test_without_a_second_process_this_one_does(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1900000000")

    def refuse(*arguments: object, **options: object) -> None:
        raise OSError("no processes here")

    made = []
    for change in (None, ("executable", ""), ("frozen", True), ("Popen", refuse)):
        with monkeypatch.context() as m:
            if change is not None:
                target = subprocess if change[0] == "Popen" else sys
                m.setattr(target, *change, raising=False)
            with open_paper() as one:
                assert isinstance(one, paper._PaperThere) == (change is None)
                one.send_page(PAGE)
                one.send_drawing("one", SQUARE)
                made.append(one.pdf())
    assert len(set(made)) == 1


def test_a_figure_is_painted_in_its_place_with_its_words() -> None:
    pdf = make_pdf(PAGE, {"one": SQUARE}.__getitem__)
    assert "words" in text_of(pdf)
    # #123456 in parts of one, and the wedge's corners.
    painted = pieces_of(pdf)
    assert b"0.0705" in painted
    assert b"72 36 l" in painted
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    objects = [reader.get_object(n) for n in range(1, reader.trailer["/Size"])]
    said = [str(o["/Alt"]) for o in objects if isinstance(o, dict) and "/Alt" in o]
    assert said == ["a <wedge>"]


def test_every_figure_of_a_report_says_what_it_shows(results: Results) -> None:
    figures = draw_figures(results)
    reader = pypdf.PdfReader(io.BytesIO(render_pdf(results, figures)))
    objects = [reader.get_object(n) for n in range(1, reader.trailer["/Size"])]
    said = {
        " ".join(str(o["/Alt"]).split()) for o in objects if isinstance(o, dict) and "/Alt" in o
    }
    assert {" ".join(drawing.alt.split()) for drawing in figures.values()} <= said


def test_the_page_is_laid_out_before_the_drawings_are_there() -> None:
    """What the process needs of a drawing it asks for when it paints, and waits."""
    with open_paper() as there:
        there.send_page(PAGE)
        time.sleep(0.5)
        assert there.process.poll() is None
        there.send_drawing("one", SQUARE)
        assert b"72 36 l" in pieces_of(there.pdf())


@pytest.mark.parametrize(
    "url",
    [
        "file:///etc/passwd",
        "http://127.0.0.1:9/x.png",
        "https://localhost/x",
        "skytally-font:../../matplotlibrc",
        "skytally-font:unknown.ttf",
        "skytally-drawing:two",
        "skytally-place:two",
        "skytally-place:two/wide/high",
    ],
)
def test_the_paper_form_reads_nothing_but_its_own(url: str) -> None:
    with pytest.raises(
        (ValueError, KeyError), match=r"disallowed protocol|there is no font|two|unpack|convert"
    ):
        paper._fetcher({"one": SQUARE}.__getitem__).fetch(url)


def test_a_missing_text_library_is_told_from_the_other_process(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, results: Results
) -> None:
    """Found first on the path: a module that fails as WeasyPrint does without Pango."""
    (tmp_path / "weasyprint.py").write_text("raise OSError(\"cannot load 'libpango-1.0-0'\")")
    monkeypatch.syspath_prepend(tmp_path)
    with pytest.raises(OutputError, match=r"libpango.*libharfbuzz-subset0") as caught:
        write_outputs(results, tmp_path / "out")
    assert caught.value.exit_code == 3
    assert (tmp_path / "out" / "report.html").exists()
    assert not (tmp_path / "out" / "report.pdf").exists()


@pytest.mark.parametrize(
    ("module", "error", "words"),
    [
        ("raise RuntimeError('one\\ntwo')", RuntimeError, r"(?s)one.*in the process.*Traceback"),
        ("raise MemoryError", MemoryError, None),
        ("import os; os._exit(7)", OutputError, r"its process ended \(7\)"),
        ("import os; os.kill(os.getpid(), 9)", OutputError, r"its process ended \(-9\)"),
    ],
)
def test_what_befalls_the_other_process_is_told(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    module: str,
    error: type[Exception],
    words: str | None,
) -> None:
    (tmp_path / "weasyprint.py").write_text(module)
    monkeypatch.syspath_prepend(tmp_path)
    with open_paper() as there:
        # More than a pipe holds: the process may have gone before it is sent.
        there.send_page(PAGE + "x" * 1_000_000)
        there.send_drawing("one", SQUARE)
        with pytest.raises(error, match=words):
            there.pdf()
    assert there.process.returncode is not None


def test_a_module_in_the_working_folder_is_not_taken_for_ours(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in ("json", "weasyprint", "skytally"):
        (tmp_path / f"{name}.py").write_text("raise SystemExit('taken in')")
    monkeypatch.chdir(tmp_path)
    with open_paper() as there:
        there.send_page(PAGE)
        there.send_drawing("one", SQUARE)
        assert there.pdf().startswith(b"%PDF-")


def test_leaving_early_ends_the_process_at_once() -> None:
    began = time.monotonic()
    with contextlib.suppress(ZeroDivisionError), open_paper() as there:
        there.send_page(PAGE)
        raise ZeroDivisionError
    assert there.process.returncode is not None
    assert time.monotonic() - began < 5
    assert there.process.pid not in children_of(os.getpid())


WAITING = """
    import sys, time
    from skytally import cli, outputs
    from small_results import small_results

    def wait(results):
        print("drawing", flush=True)
        time.sleep(60)

    outputs.sketch_figures = wait
    cli._tally = lambda campaign, no_cache, rest: small_results()
    sys.argv = ["skytally", "report", "night.toml", "--out", sys.argv[1]]
    cli.main()
"""


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks at /proc")
@pytest.mark.parametrize(
    ("number", "code"),
    [(signal.SIGINT, 130), (signal.SIGTERM, 143), (signal.SIGKILL, -signal.SIGKILL)],
)
def test_a_signal_leaves_no_process_and_no_file(
    tmp_path: Path, number: signal.Signals, code: int
) -> None:
    """Ctrl-C reaches all processes in front of the terminal: a group, as here."""
    parent = alone(
        "-c",
        textwrap.dedent(WAITING),
        tmp_path / "out",
        env=os.environ | {"PYTHONPATH": str(Path(__file__).parent)},
        start_new_session=True,
    )
    assert parent.stdout is not None
    assert parent.stdout.readline() == "drawing\n"
    (child,) = children_of(parent.pid)
    sent = time.monotonic()
    os.killpg(parent.pid, number)
    _, told = parent.communicate(timeout=20)
    assert parent.returncode == code
    assert gone(child)
    assert time.monotonic() - sent < 5
    assert "Traceback" not in told
    if number != signal.SIGKILL:
        assert list(tmp_path.iterdir()) == []


def test_requests_that_break_off_end_the_process() -> None:
    code = (
        "import sys; from skytally.paper import serve; serve(sys.stdin.buffer, sys.stdout.buffer)"
    )
    for sent in ("", json.dumps(["page", "", PAGE]) + "\n"):
        done = subprocess.run(
            [sys.executable, "-c", code], input=sent.encode(), capture_output=True, timeout=60
        )
        assert (done.returncode, done.stdout, done.stderr) == (1, b"", b"")


def test_an_unknown_drawing_leaves_its_place_empty() -> None:
    """A template may ask for anything; the process must not wait for what never comes."""
    requests = [["page", "", PAGE], ["drawing", "other", SQUARE], ["end", "", ""]]
    answers = io.BytesIO()
    serve(io.BytesIO(b"".join(json.dumps(r).encode() + b"\n" for r in requests)), answers)
    head, _, body = answers.getvalue().partition(b"\n")
    assert json.loads(head)[0] == "pdf"
    assert "words" in text_of(body)
    assert b"72 36 l" not in pieces_of(body)


def test_nothing_but_the_report_is_left_in_the_folder(tmp_path: Path, results: Results) -> None:
    written = write_outputs(results, tmp_path / "out")
    assert {p for p in tmp_path.rglob("*") if p.is_file()} == set(written)
    assert (tmp_path / "out" / "report.pdf").read_bytes().startswith(b"%PDF-")
    assert outputs.open_paper is open_paper
