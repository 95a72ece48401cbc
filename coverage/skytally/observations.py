"""Executed observations in columns, and the rows that could not be used."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["LogTable", "Observations", "SetAside", "night_of"]

SECONDS_PER_DAY = 86400.0

# The fields of `LogTable` that hold one value per accepted row.
_COLUMNS = (
    "row",
    "exposure",
    "ra_deg",
    "dec_deg",
    "angle_deg",
    "start_mjd",
    "duration_s",
    "band",
    "depth",
    "extinction",
    "region",
)
_KINDS: dict[str, type] = {
    "row": np.int64,
    **dict.fromkeys(("exposure", "band", "region"), np.object_),
}


@dataclass(frozen=True)
class SetAside:
    """One row of a log that does not count, and why.

    Attributes
    ----------
    telescope, file : str
        Where it stands.
    row : int
        Line of a text file (first line is 1) or row of a binary table (first is 1).
    exposure : str
        The exposure's name, empty if unreadable.
    reason : str
        Short reason, the same words for the same cause, to count by:
        "before the event", "not accepted", "duplicate", "unreadable", "missing".
    detail : str
        A sentence with column, value and what to do.
    column : str
        The column at fault, empty where none is.
    """

    telescope: str
    file: str
    row: int
    exposure: str
    reason: str
    detail: str
    column: str = ""

    @property
    def is_fault(self) -> bool:
        """Whether somebody should mend the log (unlike a plain aborted exposure)."""
        return self.reason in {"unreadable", "missing"}


@dataclass(frozen=True, eq=False)
class LogTable:
    """What one log held: accepted rows in columns, the others with reasons.

    All arrays have shape (n,), n accepted rows in the order of the file.

    Attributes
    ----------
    telescope, file, sha256 : str
        Whose log, which file (as given), and the hash of what was read.
    read : int
        Rows in the file; equals n + len(set_aside).
    row : int64 array
        Line or row number in the file, as in `SetAside.row`.
    exposure : object array of str
        Name of each exposure, never empty.
    ra_deg, dec_deg : float64 arrays
        Pointing, ICRS; ra in [0, 360). NaN where only a region is given.
    angle_deg : float64 array
        Position angle of the camera's η axis, east of north.
    start_mjd : float64 array
        UTC start.
    duration_s : float64 array
        Exposure time, ≥ 0; NaN never (0 where unknown, and noted).
    band : object array of str
        Band as written; empty where missing.
    depth : float64 array
        Limiting magnitude as written; NaN where missing.
    extinction : float64 array
        Galactic extinction A_b in magnitudes from an `extinction` column; NaN
        where missing or no such column.
    region : object array of str
        Region text or the path of a MOC file; empty where the camera is meant.
    set_aside : tuple of SetAside
        The other rows.
    notes : tuple of str
        What the reader noticed or assumed about the file as a whole.
    fov_deg : float64 array or None
        Diameter of the field as the log states it (degrees), NaN where it does not;
        None where the log has no such column.
    before_event : LogTable or None
        The rows set aside as taken before the event, for the audit of clocks.
    modified_mjd : float or None
        When the file was last changed (UTC), None where that is not known.
    fault : str
        Why the log could not be read at all; empty where it could. Then it has no rows.
    """

    telescope: str
    file: str
    sha256: str
    read: int
    row: NDArray[np.int64]
    exposure: NDArray[np.object_]
    ra_deg: NDArray[np.float64]
    dec_deg: NDArray[np.float64]
    angle_deg: NDArray[np.float64]
    start_mjd: NDArray[np.float64]
    duration_s: NDArray[np.float64]
    band: NDArray[np.object_]
    depth: NDArray[np.float64]
    extinction: NDArray[np.float64]
    region: NDArray[np.object_]
    set_aside: tuple[SetAside, ...] = ()
    notes: tuple[str, ...] = ()
    fov_deg: NDArray[np.float64] | None = None
    before_event: LogTable | None = None
    modified_mjd: float | None = None
    fault: str = ""

    def __len__(self) -> int:
        return int(self.row.size)

    @classmethod
    def unread(cls, telescope: str, file: str, fault: str) -> LogTable:
        """Stand for a log that could not be read at all."""
        none: dict[str, Any] = {
            name: np.empty(0, dtype=_KINDS.get(name, np.float64)) for name in _COLUMNS
        }
        return cls(telescope=telescope, file=file, sha256="", read=0, fault=fault, **none)

    def take(self, rows: NDArray[np.int64]) -> LogTable:
        """Keep the accepted rows at these positions; all else stays as it is."""
        fov = None if self.fov_deg is None else self.fov_deg[rows]
        columns = {name: getattr(self, name)[rows] for name in _COLUMNS}
        return replace(self, fov_deg=fov, **columns)


@dataclass(frozen=True, eq=False)
class Observations:
    """All accepted exposures of a campaign, sorted by start.

    All arrays have shape (n,).

    Attributes
    ----------
    telescopes, bands, nights : tuple of str
        Names; the index arrays below point into them. Nights are dates
        ("2031-03-14") of the evening, in order.
    telescope, night : int64 arrays
        Index of the telescope and of the night.
    band : int64 array
        Index of the band, −1 where the log gives none.
    footprint : int64 array
        Index of the footprint (owner in the footprint tables).
    row : int64 array
        Row in the telescope's log.
    exposure : object array of str
        Names.
    ra_deg, dec_deg, angle_deg : float64 arrays
        Pointing (ICRS); NaN where a region was given outright.
    start_mjd, end_mjd : float64 arrays
        UTC.
    depth : float64 array
        Limiting magnitude in the campaign's system and significance; NaN where
        missing.
    extinction : float64 array
        A_b in magnitudes from the log; NaN where the log gives none.
    """

    telescopes: tuple[str, ...]
    bands: tuple[str, ...]
    nights: tuple[str, ...]
    telescope: NDArray[np.int64]
    night: NDArray[np.int64]
    band: NDArray[np.int64]
    footprint: NDArray[np.int64]
    row: NDArray[np.int64]
    exposure: NDArray[np.object_]
    ra_deg: NDArray[np.float64]
    dec_deg: NDArray[np.float64]
    angle_deg: NDArray[np.float64]
    start_mjd: NDArray[np.float64]
    end_mjd: NDArray[np.float64]
    depth: NDArray[np.float64]
    extinction: NDArray[np.float64]

    def __len__(self) -> int:
        return int(self.row.size)


def night_of(start_mjd: NDArray[np.float64], longitude_deg: float | None) -> NDArray[np.int64]:
    """Night of each exposure, as the MJD of the date on which it began.

    Nights break at local mean noon of the site's longitude (degrees east, −180
    to 360), at 12:00 UTC where there is no site.
    """
    east = 0.0 if longitude_deg is None else longitude_deg
    # Beyond 180° east the date is that of the western hemisphere: 350° is −10°.
    local = start_mjd + (east - 360.0 if east > 180.0 else east) / 360.0
    return np.floor(local - 0.5).astype(np.int64)
