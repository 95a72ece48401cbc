"""The PDF, made from a page and its drawings, here or in a process of its own.

To lay out a report takes as long as to draw its figures, and neither needs the
other: a page keeps a place of known size for each figure, and asks for the drawing
when it is painted. So the page goes to a second process first and the drawings
follow. That process is handed all that it needs through a pipe, reads no file but
our fonts, leaves none behind, and ends at once when this one does.
"""

from __future__ import annotations

import hashlib
import importlib.util
import json
import os
import subprocess
import sys
import threading
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from html import escape
from pathlib import Path
from typing import Any, BinaryIO, Protocol

from skytally.errors import OutputError

__all__ = ["Paper", "figure_place", "make_pdf", "open_paper", "serve"]

# A reader finds the way in so many without a list of contents.
_FEW_PAGES = 6

_FONT = "skytally-font:"
_FONTS = frozenset(
    f"{name}.ttf"
    for name in (
        *("DejaVuSans", "DejaVuSans-Bold", "DejaVuSans-Oblique", "DejaVuSansMono"),
        *("STIXGeneral", "STIXGeneralBol", "STIXGeneralItalic", "STIXGeneralBolIta"),
    )
)
# A place of some size, in points, which asks for the drawing of the same name.
_PLACE, _DRAWING = "skytally-place:", "skytally-drawing:"

Drawings = Callable[[str], str]


def figure_place(name: str, alt: str, width_in: float, height_in: float) -> str:
    """Return the element that keeps the place of a figure on a page for `make_pdf`."""
    source = f"{_PLACE}{name}/{72 * width_in:.6g}/{72 * height_in:.6g}"
    return f'<img class="figure" alt="{escape(alt)}" src="{source}">'


def make_pdf(page: str, drawings: Drawings) -> bytes:
    """Lay out a page as a PDF document with its own fonts.

    The bytes depend on page and drawings alone if ``SOURCE_DATE_EPOCH`` is set.

    Parameters
    ----------
    page : str
        HTML, with a `figure_place` for each figure.
    drawings : callable
        Returns the ``<svg>`` element of a figure by name; KeyError where there is none.

    Raises
    ------
    OutputError
        If the text layout library that WeasyPrint needs is not installed.
    """
    html, css, font_configuration = _weasyprint()
    document = html(string=page, url_fetcher=_fetcher(drawings), base_url=None)
    options = {
        "pdf_tags": True,
        "pdf_identifier": hashlib.sha256(page.encode("utf-8", "replace")).digest()[:16],
    }
    fonts = font_configuration()
    laid = document.render(fonts, **options)
    if len(laid.pages) <= _FEW_PAGES:
        without = css(string="nav { display: none !important }")
        laid = document.render(fonts, stylesheets=[without], **options)
    return bytes(laid.write_pdf(**options))


def _weasyprint() -> tuple[Any, Any, Any]:
    """Import what lays out pages."""
    # Not at the top: without Pango the import itself fails, and then everything
    # but the PDF must still work.
    try:
        from weasyprint import CSS, HTML
        from weasyprint.text.fonts import FontConfiguration
    except OSError as error:
        raise OutputError(
            f"the PDF cannot be made because the Pango text library is missing ({error})",
            remedy="On Debian or Ubuntu install it with: apt-get install "
            "libpango-1.0-0 libpangoft2-1.0-0 libharfbuzz-subset0",
        ) from error
    return HTML, CSS, FontConfiguration


def _fetcher(drawings: Drawings) -> Any:
    """Return a fetcher that hands out our fonts and drawings and data URIs, and nothing else."""
    from weasyprint.urls import URLFetcher, URLFetcherResponse

    class OwnFilesOnly(URLFetcher):  # type: ignore[misc]
        def fetch(self, url: str, headers: dict[str, str] | None = None) -> Any:
            if url.startswith(_FONT):
                return answer(url, _font(url.removeprefix(_FONT)), "font/ttf")
            if url.startswith(_PLACE):
                return answer(url, _place(url.removeprefix(_PLACE)).encode(), "image/svg+xml")
            if url.startswith(_DRAWING):
                svg = drawings(url.removeprefix(_DRAWING)).encode("utf-8", "replace")
                return answer(url, svg, "image/svg+xml")
            return super().fetch(url, headers)

    def answer(url: str, body: bytes, kind: str) -> Any:
        return URLFetcherResponse(url, body, {"Content-Type": kind})

    return OwnFilesOnly(allowed_protocols=("data",))


def _font(name: str) -> bytes:
    if name not in _FONTS:
        raise ValueError(f"there is no font {name!r}")
    # Found without an import, which takes a while.
    spec = importlib.util.find_spec("matplotlib")
    assert spec is not None
    assert spec.origin is not None
    return (Path(spec.origin).parent / "mpl-data" / "fonts" / "ttf" / name).read_bytes()


def _place(text: str) -> str:
    """Return a drawing of the size stated that holds the one of the name stated."""
    name, width, height = text.split("/")
    box = f'width="{float(width):g}" height="{float(height):g}"'
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" {box} viewBox="0 0 {float(width):g} '
        f'{float(height):g}"><image href="{_DRAWING}{escape(name)}" {box}/></svg>'
    )


class Paper(Protocol):
    """A PDF in the making."""

    def send_page(self, page: str) -> None:
        """Hand over the page."""

    def send_drawing(self, name: str, svg: str) -> None:
        """Hand over a drawing; after the last of them comes `pdf`."""

    def pdf(self) -> bytes:
        """Return the document; errors as in `make_pdf`."""


@contextmanager
def open_paper() -> Iterator[Paper]:
    """Begin a PDF in a process of its own, or in this one where none can be started.

    However the context is left, the process has ended then.
    """
    process = _start()
    if process is None:
        yield _PaperHere()
        return
    try:
        yield _PaperThere(process)
    finally:
        process.kill()
        for stream in (process.stdin, process.stdout):
            # What could not be sent would be tried again.
            with suppress(OSError):
                stream.close()  # type: ignore[union-attr]
        process.wait()


class _PaperHere:
    """Everything kept, and made at the end."""

    def __init__(self) -> None:
        self.page = ""
        self.drawings: dict[str, str] = {}

    def send_page(self, page: str) -> None:
        self.page = page

    def send_drawing(self, name: str, svg: str) -> None:
        self.drawings[name] = svg

    def pdf(self) -> bytes:
        return make_pdf(self.page, self.drawings.__getitem__)


class _PaperThere:
    """Our end of the pipes to a process that runs `serve`."""

    def __init__(self, process: subprocess.Popen[bytes]) -> None:
        self.process = process

    def send_page(self, page: str) -> None:
        self._send(["page", "", page])

    def send_drawing(self, name: str, svg: str) -> None:
        self._send(["drawing", name, svg])

    def pdf(self) -> bytes:
        self._send(["end", "", ""])
        assert self.process.stdout is not None
        head, body = self.process.stdout.readline(), self.process.stdout.read()
        if not head:
            raise OutputError(
                f"the PDF cannot be made because its process ended ({self.process.wait()})",
                remedy="Try again with more memory free.",
            )
        kind, message, remedy = json.loads(head)
        if kind == "output":
            raise OutputError(message, remedy=remedy)
        if kind == "memory":
            raise MemoryError
        if kind == "fault":
            raise RuntimeError(f"{message}\n\nin the process that makes the PDF:\n{remedy}")
        return body

    def _send(self, message: list[str]) -> None:
        stream = self.process.stdin
        assert stream is not None
        # If the process has ended early, its answer says why.
        with suppress(BrokenPipeError):
            stream.write(json.dumps(message).encode() + b"\n")
            stream.flush()


def _start() -> subprocess.Popen[bytes] | None:
    """Start a process that runs `serve`; None where that cannot be."""
    if not sys.executable or getattr(sys, "frozen", False):
        return None
    code = (
        # It lives for one document, so what it no longer needs may stay.
        "import gc, json, os, sys; gc.disable(); sys.path[:] = json.loads(sys.argv[1]); "
        "from skytally.paper import serve; serve(sys.stdin.buffer, sys.stdout.buffer); "
        # Not by the usual way out, which would wait for who still reads.
        "os._exit(0)"
    )
    # Out of reach of Ctrl-C: what is typed is for the process that waits for this one.
    if os.name == "posix":
        apart: dict[str, Any] = {"process_group": 0}
    else:
        apart = {"creationflags": getattr(subprocess, "CREATE_NEW_PROCESS_GROUP", 0)}
    try:
        return subprocess.Popen(
            [sys.executable, "-P", "-c", code, json.dumps(sys.path)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            **apart,
        )
    except OSError:
        return None


def serve(requests: BinaryIO, answers: BinaryIO) -> None:
    """Read a page and drawings, and answer with a PDF or with what went wrong.

    Ends the process if the requests break off.
    """
    arrived = threading.Condition()
    drawings: dict[str, str] = {}
    page: list[str] = []
    ended = False

    def read() -> None:
        nonlocal ended
        for line in requests:
            kind, name, text = json.loads(line)
            with arrived:
                if kind == "page":
                    page.append(text)
                elif kind == "drawing":
                    drawings[name] = text
                else:
                    ended = True
                arrived.notify_all()
        if not ended:
            os._exit(1)

    def drawing(name: str) -> str:
        with arrived:
            arrived.wait_for(lambda: ended or name in drawings)
            return drawings[name]

    threading.Thread(target=read, daemon=True).start()
    body = b""
    try:
        # While the page is on its way.
        _weasyprint()
        with arrived:
            arrived.wait_for(lambda: page)
        body = make_pdf(page[0], drawing)
        answer = ["pdf", "", ""]
    except OutputError as error:
        answer = ["output", error.message, error.remedy or ""]
    except MemoryError:
        answer = ["memory", "", ""]
    except Exception as error:
        answer = ["fault", f"{type(error).__name__}: {error}", traceback.format_exc()]
    answers.write(json.dumps(answer).encode() + b"\n" + body)
    answers.flush()
