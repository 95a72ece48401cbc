"""A commented campaign to start from, with sample logs and a map, that runs as it stands."""

from __future__ import annotations

import os
from importlib.resources import files
from pathlib import Path

import numpy as np
from astropy_healpix import healpix_to_lonlat
from numpy.typing import NDArray
from scipy.special import ndtr

from skytally.errors import OutputError, UsageError
from skytally.shapes import lonlat_to_vector
from skytally.skymap import DistanceLayer, SkyMap
from skytally.skymap_io import write_skymap
from skytally.spans import FULL_SKY_SR, cell_to_span

__all__ = ["write_campaign"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TEXTS = ("campaign.toml", "logs/heron.csv", "logs/plover.csv", "cameras/plover.csv")
_MAP = "maps/first.fits"

# The sample map: a Gaussian band along a great circle through its middle.
_MIDDLE_DEG = (150.0, -8.0)
_TILT_DEG = 35.0  # of the band, north of east
_ALONG_DEG, _ACROSS_DEG = 3.5, 1.1
_ORDER_FIRST, _ORDER_LAST = 2, 7
_SPLIT_ABOVE = 0.001  # probability of a cell


def write_campaign(directory: str | Path) -> list[Path]:
    """Write a sample campaign into a folder, which is made if need be.

    Parameters
    ----------
    directory : str or Path
        May hold other files, but none of those that are written.

    Returns
    -------
    list of Path
        The files written, the campaign file first.

    Raises
    ------
    UsageError
        If one of the files exists; then nothing is written.
    OutputError
        If the folder cannot be written to.
    """
    directory = Path(directory)
    names = (*_TEXTS, _MAP)
    if directory.exists() and not directory.is_dir():
        raise UsageError("this is a file, expected a folder", file=directory, remedy=_ELSEWHERE)
    for name in names:
        if os.path.lexists(directory / name):
            raise UsageError(
                "this file is there already and is not replaced; nothing was written",
                file=directory / name,
                remedy=_ELSEWHERE,
            )
    try:
        for name in names:
            (directory / name).parent.mkdir(parents=True, exist_ok=True)
        for name in _TEXTS:
            text = (files("skytally.templates") / "new" / name).read_bytes()
            with (directory / name).open("xb") as stream:
                stream.write(text)
    except OSError as fault:
        raise OutputError(
            f"the sample campaign cannot be written: {fault.strerror or fault}",
            file=directory,
            remedy="Check that you may write there, or choose another folder.",
        ) from fault
    write_skymap(directory / _MAP, _sample_map())
    return [directory / name for name in names]


_ELSEWHERE = "Choose a new folder: skytally new DIR."


def _sample_map() -> SkyMap:
    """Return the sample map on cells that are small where the probability is."""
    order = np.empty(0, dtype=np.int64)
    cell = np.empty(0, dtype=np.int64)
    active = np.arange(12 << (2 * _ORDER_FIRST), dtype=np.int64)
    for level in range(_ORDER_FIRST, _ORDER_LAST + 1):
        area_sr = FULL_SKY_SR / (12 << (2 * level))
        # The middle of a coarse cell may miss the band: judge by its descendants.
        deeper = 2 * (_ORDER_LAST - level)
        children = (active[:, None] << deeper) + np.arange(1 << deeper, dtype=np.int64)
        peak = _density(_ORDER_LAST, children)[0].max(axis=1)
        split = (peak * area_sr > _SPLIT_ABOVE) & (level < _ORDER_LAST)
        order = np.concatenate((order, np.full(int((~split).sum()), level, dtype=np.int64)))
        cell = np.concatenate((cell, active[~split]))
        active = ((active[split] << 2)[:, None] + np.arange(4, dtype=np.int64)).ravel()
    starts, stops = cell_to_span(order, cell)
    rank = np.argsort(starts)
    order, cell, starts, stops = order[rank], cell[rank], starts[rank], stops[rank]
    density = np.empty(order.size)
    along = np.empty(order.size)
    for level in np.unique(order):
        here = order == level
        density[here], along[here] = _density(int(level), cell[here])
    density /= np.sum(density * FULL_SKY_SR / (12 * 4.0**order))
    return SkyMap(starts, stops, density, int(order.max()), distance=_distance(along))


def _density(order: int, cell: Ints) -> tuple[Floats, Floats]:
    """Probability per steradian, nearly normalised, and degrees along the band at cell centres."""
    lon, lat = healpix_to_lonlat(cell, 1 << order, order="nested")
    vector = lonlat_to_vector(lon.deg, lat.deg)
    middle, east, north = _frame()
    tilt = np.radians(_TILT_DEG)
    axis = np.cos(tilt) * east + np.sin(tilt) * north
    along = np.degrees(np.arctan2(vector @ axis, vector @ middle))
    across = np.degrees(np.arcsin(np.clip(vector @ np.cross(middle, axis), -1, 1)))
    scale = 2 * np.pi * np.radians(_ALONG_DEG) * np.radians(_ACROSS_DEG)
    exponent = (along / _ALONG_DEG) ** 2 + (across / _ACROSS_DEG) ** 2
    return np.exp(-exponent / 2) / scale, along


def _frame() -> tuple[Floats, Floats, Floats]:
    """Unit vectors to the middle of the map, to its east and to its north."""
    lon, lat = _MIDDLE_DEG
    return (
        lonlat_to_vector(lon, lat),
        lonlat_to_vector(lon + 90, 0),
        lonlat_to_vector(lon, lat + 90),
    )


def _distance(along_deg: Floats) -> DistanceLayer:
    """Return distances that grow along the band, normalised in closed form.

    The integral of r² φ((r − μ)/σ)/σ over r ≥ 0 is
    (μ² + σ²) Φ(μ/σ) + μσ φ(μ/σ).
    """
    mu = 140.0 + 30.0 * np.tanh(along_deg / 5.0)
    sigma = np.full(mu.shape, 35.0)
    ratio = mu / sigma
    phi = np.exp(-(ratio**2) / 2) / np.sqrt(2 * np.pi)
    norm = 1.0 / ((mu**2 + sigma**2) * ndtr(ratio) + mu * sigma * phi)
    return DistanceLayer(mu, sigma, norm)
