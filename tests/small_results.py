"""A small, invented `Results` to test what shows it; numbers are made up, not computed."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
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
from skytally.spans import FULL_SKY_SR, Spans
from skytally.tally import AsPointed, TallyRow, Timeline

VERSIONS = ("1 first", "2 update")

_ROW = TallyRow(
    map="2 update",
    telescope=None,
    band=None,
    night=None,
    exposures=3,
    area_deg2=5.75,
    area_low_deg2=5.74,
    area_high_deg2=5.76,
    area_in_50_deg2=1.5,
    area_in_90_deg2=4.25,
    probability=1 / 3,
    probability_low=0.3325,
    probability_high=0.3341,
    probability_error=0.0002,
    probability_in_50=0.125,
    probability_in_90=0.3,
    probability_unique=1 / 3,
    probability_credit=1 / 3,
    probability_revisited=0.0,
    depth_min=20.9,
    depth_median=21.25,
    depth_max=21.4,
    depth_over_50=21.3,
    depth_over_90=21.0,
    depth_stacked_over_50=21.35,
    depth_stacked_over_90=21.0,
    volume_90_covered_mpc3=None,
    first_start="2031-03-14T19:43:12Z",
    last_end="2031-03-15T01:26:00Z",
)


def small_row(**changes: Any) -> TallyRow:
    return replace(_ROW, **changes)


def _rows() -> tuple[TallyRow, ...]:
    none: dict[str, Any] = dict.fromkeys(
        (
            "depth_min",
            "depth_median",
            "depth_max",
            "depth_over_50",
            "depth_over_90",
            "depth_stacked_over_50",
            "depth_stacked_over_90",
        )
    )
    rows = []
    for version, scale in zip(VERSIONS, (0.5, 1.0)):
        p = {
            "map": version,
            "probability": scale / 3,
            "probability_low": scale * 0.3325,
            "probability_high": scale * 0.3341,
        }
        rows += [
            small_row(**p),
            small_row(**p, telescope="Heron", exposures=2),
            small_row(**p, telescope="Plover", exposures=1, **none),
            small_row(**p, band="g", exposures=2),
            small_row(**p, band="r", exposures=1, **none),
            small_row(**p, telescope="Heron", band="g", exposures=2),
            small_row(**p, telescope="Plover", band="r", exposures=1, **none),
            small_row(**p, night="2031-03-14"),
        ]
    return tuple(rows)


def _telescope(name: str, camera: str, bands: tuple[str, ...], exposures: int) -> TelescopeInfo:
    return TelescopeInfo(
        name=name,
        camera=camera,
        camera_area_deg2=1.92,
        site=None,
        bands=bands,
        exposures=exposures,
        footprints=exposures,
        order_min=12,
        order_max=13,
        depth_system="AB",
        depth_significance=5.0,
    )


def _exposure(telescope: str, name: str, row: int, hours: float, **changes: Any) -> ExposureInfo:
    base = ExposureInfo(
        telescope=telescope,
        exposure=name,
        row=row,
        start="2031-03-14T19:43:12Z",
        end="2031-03-14T19:45:12Z",
        hours=hours,
        band="g",
        ra_deg=150.25,
        dec_deg=-20.5,
        area_deg2=1.92,
        depth=20.9,
        map_in_force="2 update",
        probability_in_force=0.125,
        probability_newest=0.125,
    )
    return replace(base, **changes)


def _map(version: str, hours: float) -> MapInfo:
    return MapInfo(
        version=version,
        issued="2031-03-14T05:27:00Z" if hours < 1 else "2031-03-14T11:02:00Z",
        hours=hours,
        cells=12,
        order_max=0,
        area_50_deg2=25.0,
        area_90_deg2=80.0,
        distance_mean_mpc=None,
        distance_sd_mpc=None,
        volume_50_mpc3=None,
        volume_90_mpc3=None,
        probability_without_distance=None,
        path=f"maps/{version[0]}.fits",
        sha256="ab" * 32,
        notes=(),
    )


def small_results(**changes: Any) -> Results:
    """Two map versions, two telescopes, three exposures, two rows set aside."""
    order0 = Spans.from_cells(0, np.arange(12))
    whole_sky = SkyMap(order0.starts, order0.stops, np.array([1 / FULL_SKY_SR]), 0)
    heron = Spans.from_cells(6, np.array([100, 101, 102]))
    plover = Spans.from_cells(6, np.array([102, 200]))
    base = Results(
        software="skytally 0.1.0",
        event=Event("Lantern 7", "2031-03-14T05:21:08Z", 62939.22300925926),
        settings=Settings("AB", 5.0, 2, 30.0, 0.005, "not corrected for Galactic extinction"),
        inputs=(
            InputFile("campaign", "campaign.toml", "01" * 32),
            InputFile("log of Heron", "logs/heron.csv", "02" * 32),
        ),
        maps=(_map("1 first", 0.0978), _map("2 update", 5.6811)),
        telescopes=(
            _telescope("Heron", "rectangle 1.6 x 1.2 deg", ("g",), 2),
            _telescope("Plover", "circle of radius 0.9 deg", ("r",), 1),
        ),
        logs=(
            LogCount("Heron", "logs/heron.csv", 2, 2, 0, ()),
            LogCount(
                "Plover", "logs/plover.csv", 3, 1, 2, (("not accepted", 1), ("unreadable", 1))
            ),
        ),
        rows=_rows(),
        timelines=tuple(
            Timeline(
                version,
                None,
                None,
                None,
                ("2031-03-14T19:45:12Z", "2031-03-15T01:26:00Z"),
                (14.4011, 20.0811),
                (0.125, 1 / 3),
                (1.92, 5.75),
            )
            for version in VERSIONS
        ),
        as_pointed=(AsPointed("2 update", None, None, None, 3, 1 / 3, 1 / 3),),
        exposures=(
            _exposure("Heron", "0012", 2, 14.3678),
            _exposure("Heron", "1e5", 3, 14.4, depth=21.4),
            _exposure("Plover", "p-01", 2, 20.05, band="r", depth=None, ra_deg=None, dec_deg=None),
        ),
        set_aside=(
            SetAsideInfo(
                "Plover", "logs/plover.csv", 3, "p-02", "not accepted", "status 'aborted'"
            ),
            SetAsideInfo(
                "Plover", "logs/plover.csv", 4, "p-03", "unreadable", "RA is 'cloud', not a number."
            ),
        ),
        notes=("Map 1 first: the sum was 0.999 and was normalised.",),
        sky=SkyData((whole_sky, whole_sky), (heron, plover), ((), ())),
    )
    return replace(base, **changes)


def renamed(results: Results, *names: str) -> Results:
    """Call the telescopes something else, wherever they are named."""
    new = dict(zip((t.name for t in results.telescopes), names, strict=True))
    return replace(
        results,
        telescopes=tuple(replace(t, name=new[t.name]) for t in results.telescopes),
        rows=tuple(replace(r, telescope=new.get(r.telescope or "")) for r in results.rows),
        exposures=tuple(replace(e, telescope=new[e.telescope]) for e in results.exposures),
    )
