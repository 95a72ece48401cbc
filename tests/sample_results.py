"""Synthetic results for the tests of everything that shows something.

All numbers come from flat arrays on the cells of one HEALPix order, by brute
force: a map is a density per cell, a footprint the cells whose centres lie in
it. Nothing here uses the accounting that the package does on the line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from astropy_healpix import healpix_to_lonlat
from skytally.cameras import MosaicCamera, lay_outlines
from skytally.results import (
    Event,
    ExposureInfo,
    InputFile,
    LogCount,
    MapInfo,
    Results,
    SetAsideInfo,
    Settings,
    SkyData,
    TelescopeInfo,
)
from skytally.skymap import SkyMap
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR, Spans, cell_to_span
from skytally.tally import AsPointed, TallyRow, Timeline
from skytally.times import hours_since, mjd_to_iso

__all__ = ["NAMES", "sample_map", "sample_results"]

ORDER = 7
CELLS = 12 << (2 * ORDER)
CELL_SR = FULL_SKY_SR / CELLS
CELL_DEG2 = CELL_SR * DEG2_PER_SR
EVENT_MJD = 62800.25
NAMES = ("Heron", "Plover", "Avocet", "Dunlin", "Curlew")
BANDS = ("g", "r", "i")
# Half of the bracket, in parts of the value; and the error of the centre rule.
HALF_BRACKET = 0.004
ERROR = 0.002


def _centres(order: int) -> np.ndarray:
    """Unit vectors (n, 3) of the centres of all NESTED cells of one order."""
    lon, lat = healpix_to_lonlat(np.arange(12 << (2 * order)), 1 << order, order="nested")
    return np.stack(
        (np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)), axis=-1
    ).value


def _vector(lon_deg: float, lat_deg: float) -> np.ndarray:
    lon, lat = np.radians(lon_deg), np.radians(lat_deg)
    return np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])


def sample_map(
    label: str,
    hours: float | None,
    *,
    axis: tuple[float, float] = (75.0, 20.0),
    radius_deg: float = 62.0,
    width_deg: float = 3.0,
    centres: Sequence[float] = (40.0, 215.0),
    spread_deg: float = 22.0,
    order: int = 6,
) -> SkyMap:
    """Return arcs of a ring about an axis, Gaussian along and across, as a map of flat cells."""
    vector = _centres(order)
    pole = _vector(*axis)
    east = np.cross([0.0, 0.0, 1.0], pole)
    east /= np.linalg.norm(east)
    north = np.cross(pole, east)
    away = np.degrees(np.arccos(np.clip(vector @ pole, -1, 1)))
    turn = np.degrees(np.arctan2(vector @ east, vector @ north))
    density = np.zeros(len(vector))
    for weight, centre in zip((1.0, 0.7, 0.5), centres):
        along = (turn - centre + 180) % 360 - 180
        density += weight * np.exp(
            -0.5 * ((away - radius_deg) / width_deg) ** 2 - 0.5 * (along / spread_deg) ** 2
        )
    density[density < 1e-12 * density.max()] = 0.0
    density /= density.sum() * FULL_SKY_SR / len(vector)
    starts, stops = cell_to_span(order, np.arange(len(vector)))
    issued = None if hours is None else EVENT_MJD + hours / 24
    return SkyMap(starts, stops, density, order, label=label, issued_mjd=issued)


@dataclass
class _Shot:
    telescope: int
    band: int
    start: float
    end: float
    depth: float | None
    ra: float
    dec: float
    cells: np.ndarray


def _rings(index: int, detectors: int, size_deg: float) -> MosaicCamera:
    if detectors == 1:
        return MosaicCamera.rectangle(size_deg, 0.75 * size_deg)
    side = round(detectors**0.5)
    step = size_deg / side
    half = 0.45 * step
    middle = (np.arange(side) - (side - 1) / 2) * step
    square = np.array([[-half, -half], [half, -half], [half, half], [-half, half]])
    corners = tuple(square + np.array([x, y]) for x in middle for y in middle)
    return MosaicCamera(corners, tuple(f"d{n}" for n in range(len(corners))))


def _shots(
    skymap: SkyMap, telescopes: int, exposures: int, bands: int, *, covered: bool
) -> list[_Shot]:
    """Point at the map's best cells, spaced out; visit every third field twice."""
    random = np.random.default_rng(7)
    vector = _centres(ORDER)
    lon, lat = healpix_to_lonlat(np.arange(12 << 10), 32, order="nested")
    lon, lat = lon.to_value("deg"), lat.to_value("deg")
    starts, _ = cell_to_span(5, np.arange(lon.size))
    density = skymap.density_at(starts + 1)
    best = np.argsort(-density if covered else density, kind="stable")[: max(exposures, 1) * 2]
    shots = []
    for number in range(exposures):
        telescope = number % telescopes
        size = 1.5 + 1.7 * (telescope % 3)
        field = best[int(random.integers(len(best)))]
        middle = _vector(lon[field], lat[field])
        cells = np.flatnonzero(vector @ middle > np.cos(np.radians(size / 2)))
        start = EVENT_MJD + 0.04 + 2.2 * number / exposures + 0.002 * telescope
        shots.append(
            _Shot(
                telescope,
                number // telescopes % (1 if telescope == 1 else bands),
                start,
                start + 0.0014 * (1 + telescope % 4),
                None if number % 11 == 0 else 19.0 + telescope % 5 * 0.6 + random.normal(0, 0.15),
                float(lon[field]),
                float(lat[field]),
                cells,
            )
        )
    return sorted(shots, key=lambda shot: shot.start)


class _Flat:
    """One map on the flat cells, and what a selection of shots is worth on it."""

    def __init__(self, skymap: SkyMap) -> None:
        starts, stops = cell_to_span(ORDER, np.arange(CELLS))
        self.skymap = skymap
        self.amount = skymap.probability.of_intervals(starts, stops)
        self.inside = {
            level: skymap.credible_region(level).contains(starts) for level in (0.5, 0.9)
        }

    def row(
        self,
        shots: list[_Shot],
        peers: dict[object, list[_Shot]],
        key: object,
        selection: tuple[str | None, str | None, str | None],
    ) -> TallyRow:
        mask = _mask(shots)
        amount = self.amount
        held = float(amount[mask].sum())
        area = float(mask.sum() * CELL_DEG2)
        sharing = np.sum([_mask(s) for s in peers.values()], axis=0)
        depth = [s.depth for s in shots if s.depth is not None]
        if len({s.band for s in shots}) != 1:
            depth = []
        deep = (min(depth), float(np.median(depth)), max(depth)) if depth else (None,) * 3
        return TallyRow(
            self.skymap.label,
            *selection,
            exposures=len(shots),
            area_deg2=area,
            area_low_deg2=area * (1 - HALF_BRACKET),
            area_high_deg2=area * (1 + HALF_BRACKET),
            area_in_50_deg2=float((mask & self.inside[0.5]).sum() * CELL_DEG2),
            area_in_90_deg2=float((mask & self.inside[0.9]).sum() * CELL_DEG2),
            probability=held,
            probability_low=held * (1 - HALF_BRACKET),
            probability_high=held + (1 - held) * held * HALF_BRACKET,
            probability_error=held * ERROR,
            probability_in_50=float(amount[mask & self.inside[0.5]].sum()),
            probability_in_90=float(amount[mask & self.inside[0.9]].sum()),
            probability_unique=float(amount[mask & (sharing == 1)].sum()),
            probability_credit=float((amount[mask] / np.maximum(sharing[mask], 1)).sum()),
            probability_revisited=float(amount[_count(shots) >= 2].sum()),
            depth_min=deep[0],
            depth_median=deep[1],
            depth_max=deep[2],
            depth_over_50=deep[1],
            depth_over_90=deep[0],
            depth_stacked_over_50=None if deep[1] is None else deep[1] + 0.3,
            depth_stacked_over_90=None if deep[0] is None else deep[0] + 0.1,
            volume_90_covered_mpc3=None,
            first_start=mjd_to_iso(min(s.start for s in shots)) if shots else None,
            last_end=mjd_to_iso(max(s.end for s in shots)) if shots else None,
        )

    def timeline(
        self, shots: list[_Shot], selection: tuple[str | None, str | None, str | None]
    ) -> Timeline:
        seen = np.zeros(CELLS, dtype=bool)
        steps = []
        for shot in sorted(shots, key=lambda s: s.end):
            before = int(seen.sum())
            seen[shot.cells] = True
            if int(seen.sum()) > before:
                steps.append((shot.end, float(self.amount[seen].sum()), seen.sum() * CELL_DEG2))
        return Timeline(
            self.skymap.label,
            *selection,
            end=tuple(mjd_to_iso(s[0]) for s in steps),
            hours=tuple(hours_since(s[0], EVENT_MJD) for s in steps),
            probability=tuple(s[1] for s in steps),
            area_deg2=tuple(float(s[2]) for s in steps),
        )


def _count(shots: list[_Shot]) -> np.ndarray:
    count = np.zeros(CELLS, dtype=int)
    for shot in shots:
        count[shot.cells] += 1
    return count


def _mask(shots: list[_Shot]) -> np.ndarray:
    return _count(shots) > 0


def _night(shot: _Shot) -> str:
    return mjd_to_iso(np.floor(shot.start - 0.5))[:10]


def _selections(
    shots: list[_Shot], names: Sequence[str], bands: Sequence[str]
) -> list[tuple[tuple[str | None, str | None, str | None], object, dict[object, list[_Shot]]]]:
    """Every selection with its key among its peers, in the order of the rows."""
    kinds = {
        "all": ({0: shots}, lambda key: (None, None, None)),
        "telescope": (
            {i: [s for s in shots if s.telescope == i] for i in range(len(names))},
            lambda key: (names[key], None, None),
        ),
        "band": (_grouped(shots, lambda s: s.band), lambda key: (None, bands[key], None)),
        "both": (
            _grouped(shots, lambda s: (s.telescope, s.band)),
            lambda key: (names[key[0]], bands[key[1]], None),
        ),
        "night": (_grouped(shots, _night), lambda key: (None, None, key)),
    }
    return [(label(key), key, peers) for peers, label in kinds.values() for key in peers]


def _grouped(shots: list[_Shot], key: object) -> dict[object, list[_Shot]]:
    groups: dict[object, list[_Shot]] = {}
    for shot in sorted(shots, key=key):
        groups.setdefault(key(shot), []).append(shot)
    return groups


def _map_info(skymap: SkyMap, *, distance: bool) -> MapInfo:
    issued = skymap.issued_mjd
    return MapInfo(
        version=skymap.label,
        issued=None if issued is None else mjd_to_iso(issued),
        hours=None if issued is None else hours_since(issued, EVENT_MJD),
        cells=int(skymap.starts.size),
        order_max=skymap.order_max,
        area_50_deg2=skymap.credible_region(0.5).area_deg2,
        area_90_deg2=skymap.credible_region(0.9).area_deg2,
        distance_mean_mpc=142.3 if distance else None,
        distance_sd_mpc=31.2 if distance else None,
        volume_50_mpc3=1.2e5 if distance else None,
        volume_90_mpc3=8.9e5 if distance else None,
        probability_without_distance=0.001 if distance else None,
        path=f"maps/{skymap.label.split()[0]}.fits",
        sha256="ab" * 32,
        notes=(),
    )


def _as_pointed(
    flats: list[_Flat], shots: list[_Shot], names: Sequence[str], bands: Sequence[str]
) -> list[AsPointed]:
    found = []
    for selection, key, peers in _selections(shots, names, bands):
        for number in range(-1, len(flats)):
            mine = [s for s in peers[key] if _force(flats, s) == number]
            if mine:
                mask = _mask(mine)
                found.append(
                    AsPointed(
                        None if number < 0 else flats[number].skymap.label,
                        *selection,
                        exposures=len(mine),
                        probability=None if number < 0 else float(flats[number].amount[mask].sum()),
                        probability_newest=float(flats[-1].amount[mask].sum()),
                    )
                )
    return found


def _force(flats: list[_Flat], shot: _Shot) -> int:
    issued = [f.skymap.issued_mjd for f in flats]
    return max((i for i, t in enumerate(issued) if t is None or t <= shot.start), default=-1)


def sample_results(
    *,
    names: Sequence[str] = NAMES,
    bands: Sequence[str] = BANDS,
    exposures: int = 60,
    maps: Sequence[SkyMap] | None = None,
    distance: bool = False,
    depth: bool = True,
    covered: bool = True,
    detectors: int = 1,
    event: str = "Lantern 7",
    set_aside: int = 8,
    outlines: bool = True,
) -> Results:
    """Return results as the accounting would, of an invented campaign.

    Parameters
    ----------
    names : sequence of str
        Telescopes, one or more.
    bands : sequence of str
        What they observe in, by turns; the second telescope in the first alone.
    exposures : int
        Accepted exposures in all; zero for a campaign where nothing counts.
    maps : sequence of SkyMap, optional
        Versions in order of issue; by default a double arc and an update.
    distance, depth, covered, outlines : bool
        Whether maps have a distance, logs have limits, any footprint touches
        the probability, and outlines are known.
    detectors : int
        Detectors of the first telescope; a square number.
    set_aside : int
        Rows of the first log that do not count.
    """
    if maps is None:
        maps = (
            sample_map("1 first", 0.2, spread_deg=30.0, width_deg=4.5),
            sample_map("2 update", 9.0, spread_deg=20.0, width_deg=3.0),
        )
    maps = tuple(maps)
    shots = _shots(maps[-1], len(names), exposures, len(bands), covered=covered)
    if not covered:
        # Off the map altogether: its density is zero in the emptiest cells only nearly.
        shots = [s for s in shots if maps[-1].density_at(_starts(s.cells)).sum() == 0]
    if not depth:
        for shot in shots:
            shot.depth = None
    flats = [_Flat(m) for m in maps]
    listed = _selections(shots, names, bands)
    mine = {i: [s for s in shots if s.telescope == i] for i in range(len(names))}
    rings = []
    for index in range(len(names)):
        camera = _rings(index, detectors if index == 0 else 1, 1.5 + 1.7 * (index % 3))
        ra, dec = (np.array([getattr(s, k) for s in mine[index]]) for k in ("ra", "dec"))
        laid = lay_outlines(camera, ra, dec, np.zeros(ra.size)) if outlines and ra.size else []
        rings.append(tuple(laid))
    lost = tuple(
        SetAsideInfo(
            names[0],
            "logs/first.csv",
            2 + n,
            f"x{n:04d}",
            ("not accepted", "unreadable")[n % 2],
            "column 'status' says 'aborted'; only 'good' is accepted.",
        )
        for n in range(set_aside)
    )
    return Results(
        software="skytally 0.1.0",
        event=Event(event, mjd_to_iso(EVENT_MJD), EVENT_MJD),
        settings=Settings("AB", 5.0, 2, 30.0, 0.005, "not corrected for Galactic extinction"),
        inputs=(
            InputFile("campaign", "campaign.toml", "12" * 32),
            *(InputFile("map", f"maps/{m.label}.fits", "ab" * 32) for m in maps),
            *(InputFile("log", f"logs/{i}.csv", "cd" * 32) for i in range(len(names))),
        ),
        maps=tuple(_map_info(m, distance=distance) for m in maps),
        telescopes=tuple(
            TelescopeInfo(
                name,
                "rectangle 1.5 x 1.1 deg",
                1.6,
                "+21.4100 deg east, -31.0700 deg, 1790 m" if index else None,
                tuple(sorted({bands[s.band] for s in mine[index]})),
                len(mine[index]),
                len(mine[index]),
                11 if mine[index] else None,
                14 if mine[index] else None,
                "Vega" if index == 1 else "AB",
                3.0 if index == 2 else 5.0,
            )
            for index, name in enumerate(names)
        ),
        logs=tuple(
            LogCount(
                name,
                f"logs/{index}.csv",
                len(mine[index]) + (set_aside if index == 0 else 0),
                len(mine[index]),
                set_aside if index == 0 else 0,
                (("not accepted", (set_aside + 1) // 2), ("unreadable", set_aside // 2))
                if index == 0 and set_aside
                else (),
            )
            for index, name in enumerate(names)
        ),
        rows=tuple(
            flat.row(peers[key], peers, key, selection)
            for flat in flats
            for selection, key, peers in listed
        ),
        timelines=tuple(
            flat.timeline(peers[key], selection)
            for flat in flats
            for selection, key, peers in listed
        ),
        as_pointed=tuple(_as_pointed(flats, shots, names, bands)),
        exposures=tuple(_exposure(flats, names, bands, n, shot) for n, shot in enumerate(shots)),
        set_aside=lost,
        notes=(f"{names[0]}: 1 row repeats an earlier one and is counted once.",),
        sky=SkyData(
            maps,
            tuple(
                Spans.from_cells(ORDER, np.flatnonzero(_mask(mine[i]))) for i in range(len(names))
            ),
            tuple(rings),
        ),
    )


def _starts(cells: np.ndarray) -> np.ndarray:
    return cell_to_span(ORDER, cells)[0]


def _exposure(
    flats: list[_Flat], names: Sequence[str], bands: Sequence[str], number: int, shot: _Shot
) -> ExposureInfo:
    force = _force(flats, shot)
    return ExposureInfo(
        telescope=names[shot.telescope],
        exposure=f"{number:04d}",
        row=number + 2,
        start=mjd_to_iso(shot.start),
        end=mjd_to_iso(shot.end),
        hours=hours_since(shot.start, EVENT_MJD),
        band=bands[shot.band],
        ra_deg=shot.ra,
        dec_deg=shot.dec,
        area_deg2=float(shot.cells.size * CELL_DEG2),
        depth=shot.depth,
        map_in_force=None if force < 0 else flats[force].skymap.label,
        probability_in_force=None if force < 0 else float(flats[force].amount[shot.cells].sum()),
        probability_newest=float(flats[-1].amount[shot.cells].sum()),
    )
