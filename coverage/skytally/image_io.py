"""FITS images into a log: each file's headers give time, band and footprint."""

from __future__ import annotations

import glob
import hashlib
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy import log, units
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS
from astropy.wcs.utils import wcs_to_celestial_frame
from numpy.typing import NDArray

from skytally.errors import LogError, RegionError
from skytally.fits_layout import walk_headers
from skytally.local_files import is_url, open_bounded
from skytally.log_cells import (
    TIME_SCALES,
    CellFault,
    read_cells,
    read_depth,
    read_duration,
    read_times,
    shown,
    visible,
)
from skytally.observations import LogTable, SetAside
from skytally.region_text import parse_region
from skytally.shapes import lonlat_to_vector

__all__ = ["ImageOptions", "read_images"]

_EDGE_STEPS = 8
# That a compressed file may expand to; headers may stand anywhere in it.
SIZE_LIMIT_BYTES = 4 << 30
# Of an edge's length; a straight chord this close changes no area by as much as 0.1 %.
_STRAIGHT = 1e-4
_FRAMES = ("icrs", "fk5", "fk4", "galactic")
# The SIP convention (ASP Conference Series 347, 491, 2005) goes up to order 9.
_DISTORTION_ORDERS = ("A_ORDER", "B_ORDER", "AP_ORDER", "BP_ORDER")
_DISTORTION_LIMIT = 9

_NO_DATA = fits.PrimaryHDU().header.tostring().encode()

Values = dict[str, Any]


@dataclass(frozen=True)
class ImageOptions:
    """Which header keywords say what.

    Attributes
    ----------
    start, duration, band : str
        Keywords of start (ISO 8601, MJD or JD; in the scale of TIMESYS, else
        UTC), exposure time in seconds, and band.
    depth, exposure : str, optional
        Keywords of limiting magnitude and name; no depth, and the file's name,
        where not given.
    not_before_mjd : float, optional
        Exposures that start earlier (UTC) are set aside as reference.
    default_band, default_duration, default_depth : optional
        Used where the keyword is missing.
    """

    start: str = "DATE-OBS"
    duration: str = "EXPTIME"
    band: str = "FILTER"
    depth: str | None = None
    exposure: str | None = None
    not_before_mjd: float | None = None
    default_band: str | None = None
    default_duration: float | None = None
    default_depth: float | None = None


def read_images(
    pattern: str, telescope: str, options: ImageOptions | None = None, base: str | Path = "."
) -> LogTable:
    """Read the headers of FITS images as a log; no pixels are read.

    Parameters
    ----------
    pattern : str
        Glob pattern of local files, relative to ``base``; `**` goes into folders.
    telescope : str
        Whose images they are.
    options : ImageOptions, optional
        The keywords.
    base : str or Path
        Folder that a relative pattern starts from.

    Returns
    -------
    LogTable
        One row per file, numbered from 1 in the order of sorted paths. The
        region of a row is the union of its image extensions, by the outer
        edges of the corner pixels; ``ra_deg`` and ``dec_deg`` are its middle.
        ``sha256`` is the hash of all paths and headers read.

    Raises
    ------
    LogError
        If no file matches, or no file can be used and most are at fault.
    """
    options = options or ImageOptions()
    if is_url(pattern):
        raise LogError(
            "this is a URL, expected a pattern of local files",
            file=pattern,
            remedy="Fetch the images first.",
        )
    base = Path(base)
    names = sorted(glob.glob(pattern, root_dir=base, recursive=True))
    if not names:
        raise LogError(
            f"no file in {visible(str(base))} matches this pattern",
            file=pattern,
            remedy="Check the folder; a relative pattern counts from the campaign file.",
        )
    digest = hashlib.sha256()
    frames: list[_Frame] = []
    aside: list[SetAside] = []
    first: dict[tuple[object, ...], int] = {}
    for row, name in enumerate(names, start=1):
        frame = _Frame(row, name)
        try:
            headers, text = _headers(base / name)
            digest.update(name.encode("utf-8", "surrogateescape") + b"\0" + text)
            _fill(frame, headers, options)
            _check_place(frame, options, first)
        except _Aside as exc:
            aside.append(
                SetAside(
                    *(telescope, visible(name), row, frame.exposure),
                    *(exc.reason, exc.detail, exc.keyword),
                )
            )
            continue
        frames.append(frame)
    _refuse_if_hopeless(pattern, frames, aside)
    return _table(pattern, telescope, digest.hexdigest(), frames, aside)


@dataclass
class _Frame:
    """What one file says."""

    row: int
    name: str
    exposure: str = ""
    start_mjd: float = np.nan
    duration_s: float = np.nan
    band: str = ""
    depth: float = np.nan
    region: str = ""
    ra_deg: float = np.nan
    dec_deg: float = np.nan


class _Aside(Exception):
    """A file that does not count."""

    def __init__(self, reason: str, detail: str, keyword: str = "") -> None:
        super().__init__(detail)
        self.reason = reason
        self.detail = detail
        self.keyword = keyword


def _headers(path: Path) -> tuple[list[fits.Header], bytes]:
    """Headers of a file, primary first, of compressed images those of the image; and their text."""
    if not path.is_file():
        raise _Aside("unreadable", f"{path.name!r} is no regular file; narrow the pattern.")
    try:
        with (
            warnings.catch_warnings(),
            open_bounded(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=LogError) as stream,
        ):
            warnings.simplefilter("ignore")
            # Other archives would be unpacked to disk whole before a header is seen.
            if not stream.read(9) == b"SIMPLE  =":
                raise OSError("it begins neither as FITS nor as gzip of it")
            stream.seek(0)
            headers = [_header(x) for x, _ in walk_headers(stream, path.name, LogError)]
            text = "".join(x.tostring() for x in headers).encode("utf-8", "replace")
    except LogError as fault:
        raise _Aside("unreadable", f"{path.name!r}: {fault.message}. {fault.remedy}") from fault
    except Exception as exc:  # damaged FITS raises many kinds
        reason = next(iter(str(exc).strip().splitlines()), type(exc).__name__)
        raise _Aside(
            "unreadable", f"{path.name!r} is no readable FITS file ({reason}); fetch it again."
        ) from exc
    if not headers:
        raise _Aside("unreadable", f"{path.name!r} holds no FITS header; fetch it again.")
    return headers, text


def _header(text: bytes) -> fits.Header:
    """Read a header; of a compressed image that of the image."""
    if b"ZIMAGE  =" not in text:
        return fits.Header.fromstring(text)
    # The library translates it when it opens a file, which here has no data.
    with fits.HDUList.fromstring(_NO_DATA + text) as hdus:
        header: fits.Header = hdus[1].header
        return header


def _value(headers: list[fits.Header], keyword: str | None) -> str:
    """First value of a keyword, primary header first, as text; empty where absent."""
    if keyword is None:
        return ""
    for header in headers:
        try:
            value = header.get(keyword)
        except fits.VerifyError:
            continue  # a card that is no FITS says nothing
        if value is not None and not isinstance(value, fits.card.Undefined):
            text = visible(str(value).strip())
            if text:
                return text
    return ""


def _fill(frame: _Frame, headers: list[fits.Header], options: ImageOptions) -> None:
    frame.exposure = _value(headers, options.exposure) or visible(Path(frame.name).name)
    frame.start_mjd = _start(headers, options.start)
    frame.band = _value(headers, options.band) or options.default_band or ""
    frame.duration_s = _number(headers, options.duration, _duration, options.default_duration)
    frame.depth = _number(headers, options.depth, _depth, options.default_depth)
    frame.region, frame.ra_deg, frame.dec_deg = _footprint(headers)


def _duration(text: str) -> float | None:
    return read_duration(text, "s", False)


def _depth(text: str) -> float | None:
    return read_depth(text, False)


def _number(
    headers: list[fits.Header], keyword: str | None, read: Any, default: float | None
) -> float:
    text = _value(headers, keyword)
    values, faults = read_cells([text], read)
    if faults:
        raise _keyword_fault(faults[0], str(keyword), text)
    return float(values[0]) if np.isfinite(values[0]) or default is None else default


def _keyword_fault(fault: CellFault, keyword: str, text: str) -> _Aside:
    detail = f"Keyword {keyword!r} holds {shown(text)}, {fault.why}; {fault.remedy}."
    return _Aside(fault.reason, detail, keyword)


def _start(headers: list[fits.Header], keyword: str) -> float:
    """UTC start. FITS 4.0, section 9.2.1: the scale is TIMESYS, UTC where absent."""
    text = _value(headers, keyword)
    if not text:
        raise _Aside(
            "missing",
            f"Keyword {keyword!r} holds nothing, so the start is unknown; "
            'name another keyword with start = "...".',
            keyword,
        )
    hours = _value(headers, "TIME-OBS")
    if hours and ":" in hours and ":" not in text and "-" in text:
        text = f"{text}T{hours}"
    scale = _value(headers, "TIMESYS").lower() or "utc"
    scale = {"et": "tt", "tdt": "tt", "iat": "tai", "gmt": "utc", "ut": "utc"}.get(scale, scale)
    if scale not in TIME_SCALES:
        raise _Aside(
            "unreadable",
            f"Keyword 'TIMESYS' holds {shown(scale)}, a time scale that is not known; "
            f"expected one of {', '.join(TIME_SCALES)}.",
            "TIMESYS",
        )
    mjd, faults, _ = read_times([text], scale, False)
    if faults:
        raise _keyword_fault(faults[0], keyword, text)
    if np.isnan(mjd[0]):
        raise _Aside("missing", f"Keyword {keyword!r} holds {shown(text)}, no value.", keyword)
    return float(mjd[0])


def _footprint(headers: list[fits.Header]) -> tuple[str, float, float]:
    """Region text of all images of a file, and the middle of it."""
    rings = list(_rings(headers))
    if not rings:
        raise _Aside(
            "missing",
            "No image in the file has celestial coordinates (CTYPE1, CTYPE2), so its footprint "
            "is unknown; solve the astrometry first.",
            "CTYPE1",
        )
    texts = ["Polygon ICRS " + " ".join(f"{x:.9f}" for x in ring.ravel()) for ring in rings]
    region = texts[0] if len(texts) == 1 else f"Union ICRS ( {' '.join(texts)} )"
    try:
        parse_region(region)
    except RegionError as exc:
        raise _Aside(
            "unreadable",
            f"The coordinates in the header give no footprint ({exc.message}); "
            "solve the astrometry again.",
            "CTYPE1",
        ) from exc
    corners = np.concatenate(rings)
    x, y, z = lonlat_to_vector(corners[:, 0], corners[:, 1]).sum(axis=0)
    middle = np.degrees(np.arctan2(y, x)) % 360.0, np.degrees(np.arctan2(z, np.hypot(x, y)))
    return region, float(middle[0]), float(middle[1])


def _rings(headers: list[fits.Header]) -> Iterator[NDArray[np.float64]]:
    """Yield the outline of each image with celestial coordinates, shape (m, 2), ICRS degrees."""
    for header in headers:
        if header.get("XTENSION", "IMAGE") != "IMAGE" or "CTYPE1" not in header:
            continue
        try:
            if int(header["NAXIS"]) < 2:
                continue
            with _quiet():
                _check_distortion(header)
                wcs = WCS(header)
                if not wcs.has_celestial:
                    continue
                ring = _ring(wcs.celestial)
        except Exception as exc:  # coordinate keywords can be wrong in many ways
            reason = next(iter(str(exc).strip().splitlines()), type(exc).__name__)
            raise _Aside(
                "unreadable",
                f"The coordinates in the header cannot be used ({reason}); "
                "solve the astrometry again.",
                "CTYPE1",
            ) from exc
        yield ring


@contextmanager
def _quiet() -> Iterator[None]:
    """Keep the library from what it would tell, some of it on standard output."""
    level = log.level
    log.setLevel("ERROR")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        log.setLevel(level)


def _check_distortion(header: fits.Header) -> None:
    """Refuse a distortion whose table of coefficients would fill the memory."""
    for key in _DISTORTION_ORDERS:
        order = header.get(key, 0)
        if not isinstance(order, int) or not 0 <= order <= _DISTORTION_LIMIT:
            raise ValueError(f"{key} is {order!r:.40}, expected 0 to {_DISTORTION_LIMIT}")


def _ring(wcs: WCS) -> NDArray[np.float64]:
    """Outline in ICRS: the four corners, or points along the edges where these bend."""
    width, height = wcs.pixel_shape
    t = np.arange(_EDGE_STEPS) / _EDGE_STEPS
    corner = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]])
    edge = np.roll(corner, -1, axis=0) - corner
    unit = (corner[:, None, :] + t[None, :, None] * edge[:, None, :]).reshape(-1, 2)
    # FITS pixel 1 spans 0.5 to 1.5 (FITS 4.0, section 8.1).
    world = wcs.all_pix2world(unit * [width, height] + 0.5, 1)
    if not np.isfinite(world).all():
        raise ValueError("a corner of the image lies off the sky")
    world = world[:, [wcs.wcs.lng, wcs.wcs.lat]]
    vector = lonlat_to_vector(world[:, 0], world[:, 1]).reshape(4, _EDGE_STEPS, 3)
    if _is_straight(vector):
        world = world[::_EDGE_STEPS]
    frame = wcs_to_celestial_frame(wcs)
    if frame.name not in _FRAMES:
        # Others turn with the Earth or the Sun, whose tables the library would fetch.
        raise ValueError(f"positions in the frame {frame.name!r}, expected {', '.join(_FRAMES)}")
    if frame.name != "icrs":
        icrs = SkyCoord(world * units.deg, frame=frame).icrs
        world = np.stack((icrs.ra.deg, icrs.dec.deg), axis=1)
    return np.asarray(world, dtype=float)


def _is_straight(vector: NDArray[np.float64]) -> bool:
    """Tell whether points along edges, shape (4, k, 3), lie on great circles."""
    start = vector[:, 0]
    stop = np.roll(start, -1, axis=0)
    pole = np.cross(start, stop)
    length = np.linalg.norm(pole, axis=1)
    off = np.abs(np.einsum("eki,ei->ek", vector, pole)).max(axis=1)
    # off / length is the sine of the distance from the great circle.
    return bool((off <= _STRAIGHT * length**2).all())


def _check_place(
    frame: _Frame, options: ImageOptions, first: dict[tuple[object, ...], int]
) -> None:
    """Set aside what precedes the event or repeats another file."""
    limit = options.not_before_mjd
    if limit is not None and frame.start_mjd < limit:
        raise _Aside(
            "before the event",
            f"Keyword {options.start!r} is {(limit - frame.start_mjd) * 24:.2f} h before the "
            "event; the image is kept as reference only, so correct the time if it is wrong.",
            options.start,
        )
    same = first.setdefault((frame.start_mjd, frame.band, frame.region), frame.row)
    if same != frame.row:
        raise _Aside(
            "duplicate",
            f"Keyword {options.start!r}, band and footprint are those of file {same}; "
            "take one of the two out.",
            options.start,
        )


def _refuse_if_hopeless(pattern: str, frames: list[_Frame], aside: list[SetAside]) -> None:
    faults = [x for x in aside if x.is_fault]
    if frames or 2 * len(faults) <= len(aside):
        return
    raise LogError(
        f"no file of {len(aside)} can be used; the first fault, in {faults[0].file}: "
        f"{faults[0].detail}",
        file=pattern,
        column=faults[0].column or None,
    )


def _table(
    pattern: str, telescope: str, sha256: str, frames: list[_Frame], aside: list[SetAside]
) -> LogTable:
    def numbers(name: str) -> NDArray[np.float64]:
        return np.array([getattr(x, name) for x in frames], dtype=float)

    def texts(name: str) -> NDArray[np.object_]:
        array = np.empty(len(frames), dtype=object)
        array[:] = [getattr(x, name) for x in frames]
        return array

    duration = numbers("duration_s")
    notes: tuple[str, ...] = ()
    if unknown := int(np.isnan(duration).sum()):
        notes = (
            f"{unknown} of {len(frames)} exposures have no exposure time and count as 0 s long; "
            "name the keyword with duration, or set a default.",
        )
    return LogTable(
        telescope=telescope,
        file=pattern,
        sha256=sha256,
        read=len(frames) + len(aside),
        row=np.array([x.row for x in frames], dtype=np.int64),
        exposure=texts("exposure"),
        ra_deg=numbers("ra_deg"),
        dec_deg=numbers("dec_deg"),
        angle_deg=np.zeros(len(frames)),
        start_mjd=numbers("start_mjd"),
        duration_s=np.nan_to_num(duration, nan=0.0),
        band=texts("band"),
        depth=numbers("depth"),
        extinction=np.full(len(frames), np.nan),
        region=texts("region"),
        set_aside=tuple(aside),
        notes=notes,
    )
