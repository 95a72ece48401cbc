"""Renderers that take no time, for tests of everything around them."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import nullcontext

import pytest
from skytally import outputs, paper
from skytally.errors import OutputError

__all__ = ["no_pdf", "quick_renderers"]


class _Paper:
    def __init__(self, pdf: Callable[[], bytes]) -> None:
        self.pdf = pdf

    def send_page(self, page: str) -> None:
        pass


def quick_renderers(
    monkeypatch: pytest.MonkeyPatch, pdf: Callable[[], bytes] = lambda: b"%PDF-"
) -> None:
    """Replace figures, page and PDF: they have tests of their own."""
    monkeypatch.setattr(outputs, "sketch_figures", lambda results: {})
    monkeypatch.setattr(outputs, "render_paper", lambda results, figures, style: "")
    monkeypatch.setattr(
        outputs, "render_html", lambda results, figures, style: f"<p>{results.event.name}</p>\n"
    )
    monkeypatch.setattr(outputs, "open_paper", lambda: nullcontext(_Paper(pdf)))
    monkeypatch.setattr(paper, "open_paper", lambda: nullcontext(_Paper(pdf)))


def no_pdf() -> bytes:
    """Fail as the PDF does where its text library is missing."""
    raise OutputError("the PDF could not be made", remedy="Install libpango-1.0-0.")
