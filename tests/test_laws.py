"""How an account must move when its campaign is changed: one campaign for each law.

The laws are in `laws`; ``pytest tests/test_laws.py --campaigns 100`` tries each on ten.
"""

from __future__ import annotations

import healpy
import numpy as np
import pytest
from laws import LAWS, differences, mirrored, turned, upside_down


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    if "law_seed" in metafunc.fixturenames:
        count = max(metafunc.config.getoption("campaigns") // 10, 1)
        # Others than the twin's.
        metafunc.parametrize("law_seed", range(1000, 1000 + count))


@pytest.mark.parametrize("name", LAWS)
def test_accounts_obey_the_law(name, law_seed):
    LAWS[name](law_seed)


@pytest.mark.parametrize(
    ("move", "where"),
    [
        (turned, lambda lon, lat: (lon + 90, lat)),
        (mirrored, lambda lon, lat: (-lon, lat)),
        (upside_down, lambda lon, lat: (lon, -lat)),
    ],
)
@pytest.mark.parametrize("order", [0, 1, 3, 5])
def test_the_symmetries_are_those_of_healpix(move, where, order):
    """healpy places the centre of every cell where the moved cell's centre is."""
    cells = np.arange(12 * 4**order)
    lon, lat = healpy.pix2ang(1 << order, cells, nest=True, lonlat=True)
    expected = healpy.ang2pix(1 << order, *where(lon, lat), nest=True, lonlat=True)
    np.testing.assert_array_equal([move(order, int(cell)) for cell in cells], expected)


def test_differences_are_found():
    """The comparison that the laws rest on sees values, lengths, kinds and entries."""
    one = {"rows": [{"map": "1", "band": "g", "p": 0.5}, {"map": "1", "band": "r", "p": 0.25}]}
    same = {"rows": one["rows"][::-1]}
    assert not list(differences(one, same))
    for other in (
        {"rows": [{**one["rows"][0], "p": 0.5 + 1e-8}, one["rows"][1]]},
        {"rows": [{**one["rows"][0], "p": None}, one["rows"][1]]},
        {"rows": one["rows"][:1]},
        {},
    ):
        assert list(differences(one, other))
