"""What is fuzzed: each reader with a folder to read from and what must hold of a result."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from random import Random
from unittest.mock import patch

import numpy as np
from skytally import campaign
from skytally.camera_io import read_mosaic
from skytally.claims_io import read_claims
from skytally.cosmology import Cosmology
from skytally.dust_io import read_dust
from skytally.image_io import ImageOptions, read_images
from skytally.light_curve_io import read_light_curve
from skytally.log_io import LogOptions, read_log
from skytally.log_regions import resolve_regions
from skytally.moc import read_moc
from skytally.observations import LogTable
from skytally.positions_io import read_positions
from skytally.region_text import parse_region
from skytally.skymap_circle import circle_skymap
from skytally.skymap_io import read_skymap
from skytally.spans import LINE_END

__all__ = ["CORPUS", "TARGETS", "Target", "seeds"]

CORPUS = Path(__file__).parent / "corpus"


@dataclass(frozen=True)
class Target:
    """A reader.

    Attributes
    ----------
    name : str
        Also the folder of its seeds.
    suffix : str
        Of the file that it is given.
    read : callable
        Reads the file, and fails where the result contradicts itself.
    share : int
        Cases of each hundred.
    """

    name: str
    suffix: str
    read: Callable[[Path, Random], None]
    share: int


@cache
def seeds(name: str) -> list[bytes]:
    """Return the saved files of a reader, in a fixed order."""
    return [path.read_bytes() for path in sorted((CORPUS / name).iterdir())]


def _map(path: Path, rng: Random) -> None:
    found = read_skymap(path)
    assert abs(found.probability.total - 1) < 1e-9
    assert (found.starts[1:] >= found.stops[:-1]).all()
    assert (found.density_per_sr > 0).all()
    assert np.isfinite(found.density_per_sr).all()


def _dust(path: Path, rng: Random) -> None:
    found = read_dust(path, allow_holes=rng.random() < 0.5)
    assert (found.starts[1:] >= found.stops[:-1]).all()
    values = found.at(np.arange(0, LINE_END, LINE_END // 50))
    known = values[np.isfinite(values)]
    assert ((known >= 0) & (known <= 50)).all()


def _moc(path: Path, rng: Random) -> None:
    edges = read_moc(path).edges
    assert edges.size % 2 == 0
    assert (np.diff(edges) > 0).all()
    assert not edges.size or (edges[0] >= 0 and edges[-1] <= LINE_END)


def _log(path: Path, rng: Random) -> None:
    options = LogOptions(
        time_scale=rng.choice(("utc", "utc", "tai", "tdb")),
        accept=rng.choice((None, None, ("good", "Performed"))),
        ra_unit=rng.choice((None, "deg", "hour")),
        delimiter=rng.choice((None, None, None, ",", " ", "\t")),
        decimal=rng.choice((None, None, ",")),
        depth=rng.choice((None, 20.0)),
        not_before_mjd=rng.choice((None, 62939.0)),
        use_fov=rng.random() < 0.5,
    )
    log = read_log(path, "Heron", options)
    assert log.read == len(log) + len(log.set_aside)
    given = log.region != ""
    assert (np.isfinite(log.ra_deg) | given).all()
    assert ((log.ra_deg[~given] >= 0) & (log.ra_deg[~given] < 360)).all()
    assert (np.abs(log.dec_deg[~given]) <= 90).all()
    assert np.isfinite(log.start_mjd).all()
    assert (np.isfinite(log.duration_s) & (log.duration_s >= 0)).all()
    assert not np.isinf(log.depth).any()
    resolved, _, _ = resolve_regions(log, path.parent)
    assert log.read == len(resolved) + len(resolved.set_aside)
    _check_words(resolved)


def _check_words(log: LogTable) -> None:
    """What is shown of a log holds nothing that steers a terminal or a page."""
    rows = [(row.exposure, row.detail, row.column) for row in log.set_aside]
    words = [*log.exposure, *log.band, *log.notes, *(word for row in rows for word in row)]
    assert all(c.isprintable() or c == "\u00a0" for word in words for c in word)


def _region(path: Path, rng: Random) -> None:
    parse_region(path.read_bytes().decode("utf-8", "replace"))


# Most campaigns of the fuzzer have the same error circle, which takes a while to lay.
_circle = cache(circle_skymap)


def _campaign(path: Path, rng: Random) -> None:
    with patch.object(campaign, "circle_skymap", _circle):
        campaign.load_campaign(path)


def _claims(path: Path, rng: Random) -> None:
    for claim in read_claims(path):
        stated = claim.stated
        assert stated.low <= stated.number <= stated.high


def _positions(path: Path, rng: Random) -> None:
    found = read_positions(path, Cosmology.named())
    assert found.read == len(found) + len(found.set_aside)
    assert (np.abs(found.dec_deg) <= 90).all()
    assert not (found.distance_mpc <= 0).any()
    assert not np.isinf(found.distance_mpc).any()


def _mosaic(path: Path, rng: Random) -> None:
    read_mosaic(path)


def _light_curve(path: Path, rng: Random) -> None:
    for days, magnitude in read_light_curve(path).values():
        assert (np.diff(days) > 0).all()
        assert np.isfinite(magnitude).all()


def _image(path: Path, rng: Random) -> None:
    depth = rng.choice((None, "LIMMAG"))
    log = read_images(path.name, "Heron", ImageOptions(depth=depth), path.parent)
    assert log.read == len(log) + len(log.set_aside)
    assert np.isfinite(log.start_mjd).all()
    for region in log.region:
        parse_region(region)
    _check_words(log)


TARGETS = {
    target.name: target
    for target in (
        Target("map", ".fits", _map, 16),
        Target("log", ".csv", _log, 26),
        Target("region", ".txt", _region, 26),
        Target("campaign", ".toml", _campaign, 10),
        Target("image", ".fits", _image, 6),
        Target("moc", ".fits", _moc, 4),
        Target("dust", ".fits", _dust, 2),
        Target("claims", ".csv", _claims, 3),
        Target("positions", ".csv", _positions, 2),
        Target("mosaic", ".csv", _mosaic, 3),
        Target("light_curve", ".csv", _light_curve, 2),
    )
}
