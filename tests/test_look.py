"""The look of the sheets against small pictures of them that somebody has looked at.

After a change that is meant to be seen, look at the new sheets and take them as they are:
``SKYTALLY_NEW_LOOK=1 python -m pytest tests/test_look.py``
"""

from __future__ import annotations

import os
import subprocess
from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from sample_results import sample_results
from skytally.figure_style import Drawing
from skytally.figures import draw_figures
from skytally.paper import make_pdf
from skytally.report import render_paper
from space_results import with_space

KEPT = Path(__file__).parent / "look"
WIDTH, FINER = 120, 4
BLOCK = 10
# Of 255 levels of grey, in the mean of a block. Two rasterisers that have nothing in common
# differ by 9.8 at most, in fine lines; the least of the tables that vanish by 12.9.
TOLERANCE = 11.0

Drawn = tuple[str, dict[str, Drawing]]


def pictures(pdf: bytes, folder: Path, *how: str) -> list[np.ndarray]:
    """Small grey pictures (height, width) of the sheets, by one of poppler's rasterisers.

    They are painted larger and then averaged: how a line finer than a pixel is painted is
    each rasteriser's own affair.
    """
    folder.mkdir(parents=True, exist_ok=True)
    size = ("-scale-to-x", str(FINER * WIDTH), "-scale-to-y", "-1")
    source = folder / "report.pdf"
    source.write_bytes(pdf)
    command = [*(how or ("pdftoppm",)), "-png", "-gray", *size, source, folder / "sheet"]
    subprocess.run(command, check=True)
    return [means(read(path), FINER) for path in sorted(folder.glob("sheet*.png"))]


def means(picture: np.ndarray, side: int) -> np.ndarray:
    """Mean of each block of so many pixels; what is left over at the edges is cut off."""
    rows, columns = (n // side for n in picture.shape)
    cut = picture[: rows * side, : columns * side].reshape(rows, side, columns, side)
    return cut.mean(axis=(1, 3))


def read(path: Path) -> np.ndarray:
    return np.asarray(Image.open(path).convert("L"), dtype=float)


def differences(some: list[np.ndarray], others: list[np.ndarray]) -> list[float]:
    """For each sheet, by how much the mean grey of the most different block differs."""
    assert len(some) == len(others), f"{len(some)} sheets, not {len(others)}"
    return [float(np.abs(means(a, BLOCK) - means(b, BLOCK)).max()) for a, b in zip(some, others)]


@pytest.fixture(scope="module")
def drawn() -> Drawn:
    results = with_space(sample_results(exposures=40))
    figures = draw_figures(results)
    return render_paper(results, figures), figures


@pytest.fixture(scope="module")
def pdf(drawn: Drawn) -> bytes:
    page, figures = drawn
    return make_pdf(page, lambda name: figures[name].svg)


def test_the_sheets_look_as_they_did(pdf: bytes, tmp_path: Path) -> None:
    found = pictures(pdf, tmp_path)
    if os.environ.get("SKYTALLY_NEW_LOOK"):
        KEPT.mkdir(exist_ok=True)
        for old in KEPT.glob("*.png"):
            old.unlink()
        for number, picture in enumerate(found, 1):
            image = Image.fromarray(picture.astype(np.uint8))
            image.quantize(32).save(KEPT / f"sheet-{number:02d}.png", optimize=True)
    kept = [read(path) for path in sorted(KEPT.glob("*.png"))]
    other = {n: d for n, d in enumerate(differences(kept, found), 1) if d > TOLERANCE}
    assert not other, f"sheets look different: {other}; see the head of {Path(__file__).name}"


def test_another_rasteriser_is_within_the_tolerance(pdf: bytes, tmp_path: Path) -> None:
    cairo = pictures(pdf, tmp_path / "cairo", "pdftocairo")
    splash = pictures(pdf, tmp_path / "splash")
    assert 0 < max(differences(cairo, splash)) < TOLERANCE


def test_a_figure_or_a_table_that_vanishes_is_seen(
    drawn: Drawn, pdf: bytes, tmp_path: Path
) -> None:
    page, figures = drawn
    empty = '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 1 1"></svg>'
    hidden = "#table-logs *, #table-nights * { visibility: hidden; }</style>"
    spoilt = make_pdf(
        page.replace("</style>", hidden, 1),
        lambda name: empty if name == "versions" else figures[name].svg,
    )
    found = differences(pictures(pdf, tmp_path / "a"), pictures(spoilt, tmp_path / "b"))
    assert sum(d > TOLERANCE for d in found) == 3
    assert sum(d == 0 for d in found) == len(found) - 3
