"""The general-purpose way to tally a campaign: full-sky arrays at order 12, sums by masks.

Run ``python tests/bench/recipe.py CAMPAIGN ANSWER``. Every detector goes through healpy's
``query_polygon``, which counts a pixel where its centre lies inside; deepest limit, first
time and count are kept for every pixel and telescope, and each map is flattened with its
distance columns. It answers for fewer things than the tally does: no brackets, one source
that is as bright all the time, no rows by band or night. It imports nothing of skytally.
"""

from __future__ import annotations

import csv
import json
import sys
import tomllib
from datetime import datetime
from pathlib import Path

import healpy as hp
import numpy as np
from astropy.table import Table
from scipy.special import ndtr

ORDER = 12
NSIDE = 2**ORDER
PIXELS = 12 * NSIDE**2
AREA_DEG2 = 360**2 / np.pi / PIXELS
MAGNITUDE = -16.0
AT_ONCE = 2_000_000


def corners(camera, folder):
    """Detectors as corners (detectors, 4, 2) in degrees, or the radius of a circle."""
    if camera["shape"] == "circle":
        return camera["radius"]
    if camera["shape"] == "rectangle":
        x, y = camera["width"] / 2, camera["height"] / 2
        return np.array([[(-x, -y), (x, -y), (x, y), (-x, y)]])
    detectors = {}
    with open(folder / camera["file"], encoding="utf-8") as file:
        for row in csv.DictReader(file):
            detectors.setdefault(row["detector"], []).append((float(row["xi"]), float(row["eta"])))
    return np.array(list(detectors.values()))


def pixels_of(camera, ra, dec, angle):
    """Pixels of a field, detector by detector."""
    centre = hp.ang2vec(ra, dec, lonlat=True)
    if np.isscalar(camera):
        yield hp.query_disc(NSIDE, centre, np.radians(camera), nest=True)
        return
    a, d, t = np.radians((ra, dec, angle))
    east = np.array((-np.sin(a), np.cos(a), 0.0))
    north = np.array((-np.sin(d) * np.cos(a), -np.sin(d) * np.sin(a), np.cos(d)))
    xi = camera[..., 0] * np.cos(t) + camera[..., 1] * np.sin(t)
    eta = camera[..., 1] * np.cos(t) - camera[..., 0] * np.sin(t)
    place = centre + np.radians(xi)[..., None] * east + np.radians(eta)[..., None] * north
    place /= np.linalg.norm(place, axis=-1, keepdims=True)
    for detector in place:
        yield hp.query_polygon(NSIDE, detector, nest=True)


def cover(telescope, folder, event):
    """Deepest limit (0 for none), first end in days (0 for none) and count of every pixel."""
    camera = corners(telescope["camera"], folder)
    deepest = np.zeros(PIXELS, dtype=np.float32)
    first = np.zeros(PIXELS, dtype=np.float32)
    count = np.zeros(PIXELS, dtype=np.uint16)
    with open(folder / telescope["log"], encoding="utf-8") as file:
        for row in csv.DictReader(file):
            start = (datetime.fromisoformat(row["start"]) - event).total_seconds()
            end = (start + float(row["duration"])) / 86400
            limit = float(row["depth"] or 0.0)
            for pixels in pixels_of(camera, *(float(row[k]) for k in ("ra", "dec", "angle"))):
                deepest[pixels] = np.maximum(deepest[pixels], limit)
                before = first[pixels]
                first[pixels] = np.where((before == 0) | (before > end), end, before)
                count[pixels] += 1
    return deepest, first, count


def flattened(path):
    """Probability, μ, σ and norm of every pixel, and the 90 % region."""
    table = Table.read(path)
    uniq = np.asarray(table["UNIQ"], dtype=np.int64)
    order = np.floor(np.log2(uniq // 4) / 2).astype(int)
    cell = uniq - 4 * 4**order
    rank = np.argsort(cell << (2 * (ORDER - order)))
    repeat = 4 ** (ORDER - order[rank])
    density = np.asarray(table["PROBDENSITY"])[rank]
    held = density * 4 * np.pi / PIXELS
    falling = np.argsort(-density)
    below = np.cumsum((held * repeat)[falling])
    inside = np.zeros(cell.size, dtype=bool)
    inside[falling[: np.searchsorted(below, 0.9) + 1]] = True
    columns = [np.asarray(table[name])[rank] for name in ("DISTMU", "DISTSIGMA", "DISTNORM")]
    return [np.repeat(column, repeat) for column in (held, *columns, inside)]


def within(reach, mu, sigma, norm):
    """Chance of lying within a reach: ∫ N r² φ((r−μ)/σ)/σ dr (ApJL 829 L15, 2016)."""
    known = np.isfinite(mu) & (norm > 0)
    mu, sigma, norm = (np.where(known, x, 1.0) for x in (mu, sigma, norm))
    a, b = -mu / sigma, (reach - mu) / sigma
    phi_a, phi_b = (np.exp(-0.5 * x * x) / np.sqrt(2 * np.pi) for x in (a, b))
    found = (mu**2 + sigma**2) * (ndtr(b) - ndtr(a)) - 2 * mu * sigma * (phi_b - phi_a)
    found -= sigma**2 * (b * phi_b - a * phi_a)
    return np.where(known & (reach > 0), norm * found, 0.0)


def deep_over(share, limit, held):
    """Limit that a share of the probability reaches; None where so much has none."""
    order = np.argsort(-limit)
    below = np.cumsum(held[order])
    value = limit[order[min(np.searchsorted(below, share * below[-1]), limit.size - 1)]]
    return float(value) if value > 0 else None


def tally(held, mu, sigma, norm, inside, covered):
    """The sums of one map version."""
    telescopes = np.zeros(PIXELS, dtype=np.uint8)
    for _, _, count in covered.values():
        telescopes += count > 0
    union = np.flatnonzero(telescopes)
    found = {}
    for name, (deepest, _, count) in covered.items():
        mine = np.flatnonzero(count)
        found[name] = {
            "probability": float(held[mine].sum()),
            "area_deg2": float(mine.size * AREA_DEG2),
            "probability_unique": float(held[mine][telescopes[mine] == 1].sum()),
            "probability_credit": float((held[mine] / telescopes[mine]).sum()),
            "depth_over_50": deep_over(0.5, deepest[mine], held[mine]),
            "depth_over_90": deep_over(0.9, deepest[mine], held[mine]),
        }
    deepest = np.max([c[0][union] for c in covered.values()], axis=0).astype(float)
    first = np.full(union.size, np.inf)
    for _, ends, count in covered.values():
        first = np.minimum(first, np.where(count[union] > 0, ends[union], np.inf))
    order = np.argsort(first)
    timeline = np.cumsum(held[union][order])
    reach = np.where(deepest > 0, 10 ** ((deepest - MAGNITUDE) / 5 - 5), 0.0)
    detectable = 0.0
    for start in range(0, union.size, AT_ONCE):
        some = union[start : start + AT_ONCE]
        chance = within(reach[start : start + AT_ONCE], mu[some], sigma[some], norm[some])
        detectable += float(held[some] @ chance)
    found["all"] = {
        "probability": float(held[union].sum()),
        "area_deg2": float(union.size * AREA_DEG2),
        "probability_in_90": float(held[union][inside[union]].sum()),
        "detectable": detectable,
        "half_time_days": float(first[order][np.searchsorted(timeline, timeline[-1] / 2)]),
    }
    return found


def main(campaign, answer):
    """Tally a campaign file."""
    settings = tomllib.loads(campaign.read_text(encoding="utf-8"))
    event = settings["event"]["time"].replace(tzinfo=None)
    covered = {t["name"]: cover(t, campaign.parent, event) for t in settings["telescope"]}
    found = {
        m["version"]: tally(*flattened(campaign.parent / m["file"]), covered)
        for m in settings["map"]
    }
    answer.write_text(json.dumps(found), encoding="utf-8")


if __name__ == "__main__":
    main(*map(Path, sys.argv[1:]))
