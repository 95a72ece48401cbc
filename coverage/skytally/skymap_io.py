"""Map versions from files and positions, and back into files."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
from astropy.io import fits

from skytally.errors import MapError
from skytally.local_files import expand, open_fits, read_local_file, write_whole
from skytally.skymap import Floats, SkyMap
from skytally.skymap_circle import circle_skymap
from skytally.skymap_frames import galactic_to_line
from skytally.skymap_table import MapCells, read_cells
from skytally.spans import UNIT_SR, Spans, spans_to_cells

__all__ = ["SIZE_LIMIT_BYTES", "circle_skymap", "read_skymap", "write_skymap"]

SIZE_LIMIT_BYTES = 2 << 30
_SUM_TOLERANCE = 0.01


def read_skymap(
    path: str | Path,
    *,
    label: str = "",
    issued_mjd: float | None = None,
    size_limit_bytes: int = SIZE_LIMIT_BYTES,
) -> SkyMap:
    """Read a HEALPix probability map from a local FITS file, plain or gzip.

    Multi-order maps (UNIQ with PROBDENSITY) and flat maps (RING or NESTED,
    every pixel or those listed), in ICRS or Galactic coordinates, with or
    without distance parameters. Cells of zero probability are dropped.

    Parameters
    ----------
    path : str or Path
        The file; URLs are refused.
    label, issued_mjd
        As in `SkyMap`.
    size_limit_bytes : int
        Largest size of the file, also when decompressed.

    Raises
    ------
    MapError
        If the file is no such map, is damaged, states neither ordering nor
        frame, lists a cell twice, or its probability does not sum to 1 within 1 %.
    """
    data, sha256 = read_local_file(path, size_limit_bytes=size_limit_bytes, error=MapError)
    whole = expand(
        data, path, size_limit_bytes=size_limit_bytes, error=MapError, must_begin=b"SIMPLE"
    )
    cells = read_cells(open_fits(whole, path, error=MapError), path)
    total = file_sum = _checked_sum(cells, path)
    notes = list(cells.notes)
    if abs(total - 1) > 1e-9:
        notes.append(f"The probability summed to {total:.7g}; it was normalised to 1.")
    if cells.galactic:
        source_order = cells.order_max
        cells, residual = galactic_to_line(cells)
        notes.append(
            f"The map is in Galactic coordinates, order {source_order}; it was resampled to ICRS "
            f"cells of up to order {cells.order_max}. The sum then differed by "
            f"{residual:+.1e} and was normalised."
        )
        total = _sum(cells)
    return SkyMap(
        cells.starts,
        cells.stops,
        cells.density_per_sr / total,
        cells.order_max,
        distance=cells.distance,
        label=label,
        issued_mjd=issued_mjd,
        path=str(path),
        sha256=sha256,
        notes=tuple(notes),
        file_sum=file_sum,
    )


def _sum(cells: MapCells) -> float:
    return float(np.sum((cells.stops - cells.starts) * UNIT_SR * cells.density_per_sr))


def _checked_sum(cells: MapCells, path: str | Path) -> float:
    total = _sum(cells)
    if not abs(total - 1) <= _SUM_TOLERANCE:
        raise MapError(
            f"the probability sums to {total:.6g}, expected 1 within 1 %",
            file=path,
            remedy="Check the unit of the column (per pixel, per sr, per deg2) and that the map "
            "is complete and not cut to a part of the sky.",
        )
    return total


def write_skymap(path: str | Path, skymap: SkyMap, fingerprint: str = "") -> None:
    """Write a map version as multi-order HEALPix FITS; gzip where the name ends in ``.gz``.

    ``fingerprint``, if given, says in the header which account the map is from.

    Sky that the map does not list is written as cells of zero density, because
    many readers expect the whole sky. The file appears whole or not at all,
    and holds no time stamp: the same map gives the same bytes.

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    order, cell = spans_to_cells(Spans._from_sorted(skymap.starts, skymap.stops))
    row = np.searchsorted(skymap.starts, cell << (2 * (29 - order)), side="right") - 1
    listed = Spans.from_intervals(skymap.starts, skymap.stops)
    empty_order, empty_cell = spans_to_cells(~listed)
    order, cell = np.append(order, empty_order), np.append(cell, empty_cell)
    uniq = np.left_shift(np.int64(4), 2 * order) + cell
    rank = np.argsort(uniq)

    def column(name: str, unit: str, values: Floats, elsewhere: float) -> fits.Column:
        filled = np.append(values[row], np.full(empty_cell.size, elsewhere))
        return fits.Column(name, "D", unit=unit, array=filled[rank])

    columns = [
        fits.Column("UNIQ", "K", array=uniq[rank]),
        column("PROBDENSITY", "sr-1", skymap.density_per_sr, 0.0),
    ]
    if skymap.distance is not None:
        columns += [
            column("DISTMU", "Mpc", skymap.distance.mu_mpc, np.inf),
            column("DISTSIGMA", "Mpc", skymap.distance.sigma_mpc, 1.0),
            column("DISTNORM", "Mpc-2", skymap.distance.norm_per_mpc2, 0.0),
        ]
    table = fits.BinTableHDU.from_columns(columns)
    _describe(table, skymap, int(order.max()))
    if fingerprint:
        table.header["TALLYID"] = (fingerprint, "fingerprint of the account")
    buffer = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(buffer)
    data = buffer.getvalue()
    write_whole(path, gzip.compress(data, mtime=0) if str(path).endswith(".gz") else data)


def _describe(table: fits.BinTableHDU, skymap: SkyMap, order_max: int) -> None:
    """Write the header that says how to read the table."""
    for key, value, meaning in (
        ("PIXTYPE", "HEALPIX", "HEALPix cells"),
        ("ORDERING", "NUNIQ", "order and index in one number"),
        ("COORDSYS", "C", "ICRS"),
        ("INDXSCHM", "EXPLICIT", "every row names its cell"),
        ("MOCORDER", order_max, "deepest order"),
        ("CREATOR", "skytally", "written by"),
    ):
        table.header[key] = (value, meaning)
    if skymap.distance is not None:
        for key, number, meaning in (
            ("DISTMEAN", skymap.distance.header_mean_mpc, "mean distance (Mpc)"),
            ("DISTSTD", skymap.distance.header_sd_mpc, "standard deviation of distance (Mpc)"),
        ):
            if number is not None:
                table.header[key] = (number, meaning)
