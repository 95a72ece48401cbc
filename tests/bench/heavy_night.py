"""Write a heavy campaign: three nights, five telescopes, five map versions with distances.

Run ``python tests/bench/heavy_night.py FOLDER``; ``FOLDER/campaign.toml`` is then what to
measure. The same files come out every time. One telescope takes 1,000 pointings of 64
detectors with gaps between them, 700 of them on a repeated grid; four others take 300
exposures each, one of these with fields of 6 arcmin. Nothing here is real.
"""

from __future__ import annotations

import sys
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from astropy_healpix import HEALPix
from skytally.distance import normalisation
from skytally.skymap import DistanceLayer, SkyMap
from skytally.skymap_io import write_skymap
from skytally.spans import FULL_SKY_SR, cell_to_span

SEED = 11
EVENT = datetime(2031, 3, 14, 5, 21, 8)
PEAK = (172.0, -18.0)
GAP = 0.03  # degrees between the detectors

# Hours from the event to the issue, cells, standard deviations along and across (degrees),
# mean and standard deviation of the distance (Mpc).
MAPS = {
    "1": (0.1, 20_000, 24.0, 6.0, 140.0, 45.0),
    "2": (1.0, 40_000, 18.0, 4.0, 130.0, 40.0),
    "3": (6.0, 80_000, 12.0, 3.0, 125.0, 35.0),
    "4": (24.0, 120_000, 9.0, 2.5, 120.0, 32.0),
    "5": (40.0, 200_000, 8.0, 2.0, 118.0, 30.0),
}

# Camera, bands in turn, limit at its best.
OTHERS = {
    "Plover": ('{ shape = "rectangle", width = 1.6, height = 1.2 }', "rz", 21.4),
    "Avocet": ('{ shape = "circle", radius = 0.95 }', "ug", 20.2),
    "Dunlin": ('{ shape = "rectangle", width = 0.1, height = 0.1 }', "iJ", 21.9),
    "Curlew": ('{ shape = "rectangle", width = 3.1, height = 3.1 }', "gr", 19.6),
}

SETTINGS = f"""
[event]
name = "Lantern 7"
time = {EVENT.isoformat()}Z

[[source]]
name = "Ash"
magnitude = -16.0

[[source]]
name = "Kindling"
magnitude = -16.6
rise = 0.3
fade = 0.7
k_correction = "flat"
detection = {{ width = 0.15, plateau = 0.95 }}

[[source]]
name = "Ember"
magnitude = {{ g = -16.2, r = -16.5, i = -16.6, z = -16.6 }}
fade = 0.4
visits = 2
gap_minutes = 30
"""


def plane_offsets(ra, dec):
    """Angles (degrees) along and across a band through PEAK."""
    turn, at, up = np.radians(ra - PEAK[0]), np.radians(dec), np.radians(PEAK[1])
    x = np.cos(at) * np.cos(turn) * np.cos(up) + np.sin(at) * np.sin(up)
    y = np.cos(at) * np.sin(turn)
    z = np.sin(at) * np.cos(up) - np.cos(at) * np.cos(turn) * np.sin(up)
    tilt = np.radians(35.0)
    along, across = y * np.cos(tilt) + z * np.sin(tilt), z * np.cos(tilt) - y * np.sin(tilt)
    return np.degrees(np.arctan2(along, x)), np.degrees(np.arcsin(np.clip(across, -1, 1)))


def density(version, ra, dec):
    """Relative probability per solid angle, with a faint floor everywhere."""
    _, _, length, width, _, _ = MAPS[version]
    along, across = plane_offsets(ra, dec)
    return 1e-5 + np.exp(-0.5 * ((along / length) ** 2 + (across / width) ** 2))


def middles(order, cell):
    """Centres of NESTED cells, degrees."""
    ra, dec = np.empty(cell.size), np.empty(cell.size)
    for level in np.unique(order):
        rows = order == level
        lon, lat = HEALPix(2 ** int(level), order="nested").healpix_to_lonlat(cell[rows])
        ra[rows], dec[rows] = lon.deg, lat.deg
    return ra, dec


def cells_of(version):
    """Cells of mixed orders: those that hold most are cut until there are enough."""
    count = MAPS[version][1]
    order, cell = np.full(12 * 4**4, 4), np.arange(12 * 4**4)
    while True:
        ra, dec = middles(order, cell)
        held = density(version, ra, dec) / 4.0**order
        more = min((count - cell.size) // 3, cell.size // 4)
        if more <= 0:
            return order, cell, ra, dec, held / held.sum()
        cut = np.isin(np.arange(cell.size), np.argsort(-held, kind="stable")[:more])
        children = (4 * cell[cut][:, None] + np.arange(4)).ravel()
        order = np.append(order[~cut], np.repeat(order[cut] + 1, 4))
        cell = np.append(cell[~cut], children)


def skymap(version):
    """One map version; on its far side there is a little probability without distance."""
    order, cell, ra, dec, held = cells_of(version)
    starts, stops = cell_to_span(order, cell)
    rank = np.argsort(starts)
    along, across = plane_offsets(ra, dec)
    *_, mean, sd = MAPS[version]
    mu = mean + 0.8 * np.clip(along, -30, 30) - 2.0 * np.clip(across, -10, 10)
    sigma = sd - 0.2 * np.clip(along, -30, 30)
    mu[np.abs(along) > 150] = np.inf
    norm = np.nan_to_num(normalisation(mu, sigma))
    layer = DistanceLayer(mu[rank], sigma[rank], norm[rank])
    per_sr = held / (FULL_SKY_SR / (12 * 4.0**order))
    return SkyMap(starts[rank], stops[rank], per_sr[rank], int(order.max()), layer)


def best_fields(version, step, count):
    """Most probable fields of a fixed grid of declination strips."""
    fields = []
    for dec in np.arange(-80.0, 80.0, step):
        strip = int(360 / step * np.cos(np.radians(dec)))
        fields += [(ra, dec) for ra in np.arange(strip) * 360 / strip]
    ra, dec = np.array(fields).T
    chosen = np.argsort(-density(version, ra, dec), kind="stable")[:count]
    return ra[chosen], dec[chosen]


def drawn_fields(rng, version, count):
    """Fields drawn from a map, as a search in nobody's grid would place them."""
    _, _, ra, dec, held = cells_of(version)
    chosen = rng.choice(held.size, count, p=held)
    return ra[chosen] + rng.normal(0, 0.2, count), dec[chosen] + rng.normal(0, 0.2, count)


def log_text(rng, ra, dec, angle, bands, depth):
    """CSV of exposures, a third of them on each of three nights; one in twenty has no limit."""
    count = len(ra)
    night, turn = np.divmod(np.arange(count), -(-count // 3))
    days = 0.05 + night + turn * (0.3 / turn.max())
    band = [bands[int(i)] for i in np.arange(count) // 20 % len(bands)]
    limit = depth - rng.exponential(0.25, count)
    lines = ["exposure,ra,dec,angle,start,duration,band,depth"]
    for i in range(count):
        start = (EVENT + timedelta(days=float(days[i]))).isoformat(timespec="milliseconds")
        shown = "" if rng.random() < 0.05 else f"{limit[i]:.2f}"
        lines.append(
            f"{i:04d},{ra[i] % 360:.4f},{dec[i]:.4f},{angle[i]:.2f},{start},60,{band[i]},{shown}"
        )
    return "\n".join(lines) + "\n"


def mosaic_text():
    """Corners of 8 by 8 detectors of 0.28 degrees."""
    lines = ["detector,xi,eta"]
    for number, (row, column) in enumerate(np.ndindex(8, 8)):
        xi, eta = ((i - 3.5) * (0.28 + GAP) for i in (column, row))
        for x, y in ((-1, -1), (1, -1), (1, 1), (-1, 1)):
            lines.append(f"D{number:02d},{xi + 0.14 * x:.4f},{eta + 0.14 * y:.4f}")
    return "\n".join(lines) + "\n"


def heron_log(rng):
    """Four passes over a grid of 175 fields, and 300 pointings in nobody's grid."""
    grid_ra, grid_dec = best_fields("2", 2.4, 175)
    free_ra, free_dec = drawn_fields(rng, "3", 300)
    ra = np.concatenate((np.tile(grid_ra, 4), free_ra))
    dec = np.concatenate((np.tile(grid_dec, 4), free_dec))
    angle = np.concatenate((np.zeros(700), rng.uniform(0, 360, 300)))
    return log_text(rng, ra, dec, angle, "gri", 21.6)


def write_campaign(folder):
    """Write everything into a folder; return the path of the campaign file."""
    for name in ("maps", "logs"):
        (folder / name).mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(SEED)
    parts = [SETTINGS]
    for version, (hours, *_) in MAPS.items():
        write_skymap(folder / f"maps/{version}.fits", skymap(version))
        issued = (EVENT + timedelta(hours=hours)).isoformat()
        parts.append(f'[[map]]\nversion = "{version}"\nfile = "maps/{version}.fits"\n')
        parts.append(f"issued = {issued}Z\n")
    (folder / "camera.csv").write_text(mosaic_text(), encoding="utf-8")
    cameras = {"Heron": '{ shape = "mosaic", file = "camera.csv" }'}
    logs = {"Heron": heron_log(rng)}
    for name, (camera, bands, depth) in OTHERS.items():
        ra, dec = drawn_fields(rng, "4", 300)
        cameras[name] = camera
        logs[name] = log_text(rng, ra, dec, rng.uniform(0, 360, 300), bands, depth)
    for name, camera in cameras.items():
        (folder / f"logs/{name}.csv").write_text(logs[name], encoding="utf-8")
        parts.append(f'[[telescope]]\nname = "{name}"\ncamera = {camera}\n')
        parts.append(f'log = "logs/{name}.csv"\ndepth = {{ system = "AB", significance = 5 }}\n')
    path = folder / "campaign.toml"
    path.write_text("\n".join(parts), encoding="utf-8")
    return path


if __name__ == "__main__":
    print(write_campaign(Path(sys.argv[1])))
