"""Mosaic cameras from tables."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from bad_log_inputs import BAD_CAMERAS, DETECTOR, BadInput
from skytally.camera_io import read_mosaic
from skytally.errors import RegionError


def test_detectors_in_order_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "camera.csv"
    path.write_text(
        "# two detectors, the second an L\ndetector,xi,eta\n"
        "B2,-0.2,-0.1\nB2,-0.1,-0.1\nB2,-0.1,0.1\nB2,-0.2,0.1\nB2,-0.2,-0.1\n"
        "A1,0,0\nA1,2,0\nA1,2,1\nA1,1,1\nA1,1,2\nA1,0,2\n"
    )
    camera = read_mosaic(path)
    assert camera.names == ("B2", "A1")
    assert camera.corners[0].tolist() == [[-0.2, -0.1], [-0.1, -0.1], [-0.1, 0.1], [-0.2, 0.1]]
    assert camera.corners[1].shape == (6, 2)


@pytest.mark.parametrize(
    "text",
    [
        DETECTOR.replace(",", ";").replace(".", ","),
        DETECTOR.replace(",", "\t"),
        "Detector,XI,ETA\n" + DETECTOR.split("\n", 1)[1].replace("\n", "\r\n"),
        "detector,xi (arcmin),eta [arcmin]\nA,-6,-6\nA,6,-6\nA,6,6\nA,-6,6\n",
        "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: detector, datatype: string}\n"
        "# - {name: xi, unit: arcmin, datatype: float64}\n"
        "# - {name: eta, unit: arcsec, datatype: float64}\n"
        "detector xi eta\nA -6 -360\nA 6 -360\nA 6 360\nA -6 360\n",
    ],
)
def test_forms_of_one_camera(tmp_path: Path, text: str) -> None:
    path = tmp_path / "camera.csv"
    path.write_bytes(text.encode())
    expected = [[-0.1, -0.1], [0.1, -0.1], [0.1, 0.1], [-0.1, 0.1]]
    camera = read_mosaic(str(path))
    assert camera.names == ("A",)
    np.testing.assert_allclose(camera.corners[0], expected, rtol=1e-15)


@pytest.mark.parametrize("case", BAD_CAMERAS, ids=str)
def test_broken_cameras(case: BadInput, tmp_path: Path) -> None:
    with pytest.raises(RegionError) as caught:
        read_mosaic(case.write(tmp_path))
    message = str(caught.value)
    assert all(word in message for word in case.words), message
