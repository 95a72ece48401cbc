"""Random campaigns, told in plain terms to the slow twin and as loaded to the package.

Exposures hand regions made of HEALPix cells, so both sides see the very same sky
and must agree to rounding. Everything is seeded.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta

import numpy as np
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.campaign import Site
from skytally.dust import Dust
from skytally.skymap import DistanceLayer, SkyMap
from skytally.sources import Detection, Source
from skytally.spans import Spans, cell_to_span
from tally_twin import PlainCampaign, PlainExposure, PlainMap, PlainSource, PlainTelescope

__all__ = [
    "BIRDS",
    "DAY",
    "EVENT",
    "ORDER",
    "Plan",
    "deep_plan",
    "load",
    "pixels_of",
    "random_plan",
    "skymap_of",
    "spans_of",
    "with_exposures",
]

EVENT = datetime(1858, 11, 17, tzinfo=UTC) + timedelta(days=EVENT_MJD)
ORDER = 9  # of the twin's pixels: the deepest order in any random region or map
BIRDS = ("Heron", "Plover", "Avocet", "Dunlin", "Curlew")
DAY = 86400


@dataclass(frozen=True)
class Plan:
    """One random campaign in plain terms; regions as (order, cell) lists."""

    plain: PlainCampaign
    regions: tuple[tuple[tuple[int, int], ...], ...]  # per exposure
    masks: dict
    searchable: dict


def pixels_of(cells):
    """Pixels of the twin's order in cells of any order up to it."""
    return frozenset(
        pixel
        for order, cell in cells
        for pixel in range(cell << 2 * (ORDER - order), (cell + 1) << 2 * (ORDER - order))
    )


def spans_of(cells):
    order, cell = np.array(sorted(set(cells)), dtype=np.int64).reshape(-1, 2).T
    return Spans.from_cells(order, cell)


def random_cells(rng, windows, least, most):
    """A patch of the windows: a block of order 6 or 7, some of its order-8 and 9 cells left out."""
    window = int(rng.choice(windows))
    level = int(rng.integers(6, 8))
    block = (window << 2 * (level - 5)) + int(rng.integers(4 ** (level - 5)))
    cells = []
    for child in range(block << 2 * (8 - level), (block + 1) << 2 * (8 - level)):
        chance = rng.uniform()
        if chance < least:
            continue
        if chance < most:
            cells.append((8, child))
        else:
            cells.extend((9, 4 * child + k) for k in rng.permutation(4)[: rng.integers(1, 4)])
    return tuple((int(o), int(c)) for o, c in cells) or ((level, block),)


def random_map(rng, label, issued_s, windows):
    """Cells of mixed orders, finer near the windows; some maps leave sky unlisted."""
    finest = int(rng.integers(5, ORDER + 1))
    leaves, pending = [], [(0, cell) for cell in range(12)]
    while pending:
        order, cell = pending.pop()
        if order < 5:
            near = any(w >> 2 * (5 - order) == cell for w in windows)
        else:
            near = any(w == cell >> 2 * (order - 5) for w in windows)
        if near and order < finest and rng.uniform() < 0.93:
            pending.extend((order + 1, 4 * cell + k) for k in range(4))
        else:
            leaves.append((order, cell, near and order >= 3))
    unlisted, dark = rng.choice([0, 0.2]), rng.choice([0, 0.1])
    weights = []
    for order, cell, near in leaves:
        density = rng.lognormal(sigma=1.5) * (3e4 if near else 1.0)
        chance = rng.uniform()
        if chance < unlisted and len(leaves) > 12:
            continue
        weights.append((order, cell, 0.0 if chance > 1 - dark else density / 4.0**order))
    total = sum(w for *_, w in weights)
    return PlainMap(label, issued_s, [(o, c, w / total) for o, c, w in weights])


def random_maps(rng, windows):
    count = int(rng.integers(1, 4))
    issued = sorted(int(s) for s in rng.integers(0, 3 * DAY, count))
    known = {"all": [True] * count, "none": [False] * count, "some": rng.uniform(size=count) < 0.5}
    kind = rng.choice(list(known))
    if kind == "some":
        rng.shuffle(issued)  # the file's order stands where a version states no time
        known["some"][0] = False
    return [
        random_map(rng, f"version {i}", s if known[kind][i] else None, windows)
        for i, s in enumerate(issued)
    ]


def random_exposures(rng, rule, windows, bands, blind):
    """One telescope's log; some exposures repeat an earlier region or an earlier moment."""
    exposures, regions = [], []
    for _ in range(int(rng.integers(0, 9)) or int(rng.integers(0, 2))):
        band = str(rng.choice(bands))
        region = random_cells(rng, windows, 0.15, 0.9)
        start = int(rng.integers(0, 3 * DAY))
        if exposures and rng.uniform() < 0.45:
            pick = int(rng.integers(len(exposures)))
            region = regions[pick]
            # A revisit after the very gap that counts, just under it, or at any time.
            start = exposures[pick].start_s + int(rng.choice([1800, 1799, 600, start]))
        missing = rng.uniform() < blind or (not band and rule.depth_system == "Vega")
        depth = None if missing else round(float(rng.normal(21, 0.8)), 1)
        duration = int(rng.choice([0, 30, 60, 90, 3000]))
        exposures.append(PlainExposure(rule.name, band, start, duration, depth, pixels_of(region)))
        regions.append(region)
    return exposures, regions


def random_plan(seed):
    rng = np.random.default_rng(seed)
    first = int(rng.integers(12 * 4**5))
    windows = [first, first ^ 1, int(rng.integers(12 * 4**5))]
    bands = list(rng.permutation(["g", "r", "i", ""])[: rng.integers(1, 5)])
    rules, exposures, regions, masks, searchable = [], [], [], {}, {}
    for name in BIRDS[: rng.integers(1, 6)]:
        if rng.uniform() < 0.3:
            masks[name] = random_cells(rng, windows, 0.3, 0.9)
        if rng.uniform() < 0.2:
            searchable[name] = tuple((5, w) for w in windows[1:]) + random_cells(
                rng, windows, 0.2, 0.9
            )
        rule = PlainTelescope(
            name,
            None if rng.uniform() < 0.3 else round(float(rng.uniform(-180, 360)), 3),
            "Vega" if rng.uniform() < 0.2 else "AB",
            float(rng.choice([3.0, 5.0])),
            {"g": -0.08, "r": 0.16, "i": 0.37},
            pixels_of(masks.get(name, ())),
            pixels_of(searchable[name]) if name in searchable else None,
        )
        more, where = random_exposures(rng, rule, windows, bands, rng.choice([0, 0.3, 1]))
        rules.append(rule)
        exposures += more
        regions += where
    plain = PlainCampaign(
        event=EVENT,
        maps=random_maps(rng, windows),
        telescopes=rules,
        exposures=exposures,
        order=ORDER,
        significance=float(rng.choice([5.0, 3.0])),
        visits=int(rng.integers(1, 4)),
        gap_s=int(rng.choice([1800, 0, 7200])),
    )
    return Plan(plain, tuple(regions), masks, searchable)


def skymap_of(plain):
    order, cell, amount = (np.array(column) for column in zip(*plain.cells))
    start, stop = cell_to_span(order, cell)
    rank = np.argsort(start)
    density = amount * 12 * 4.0**order / (4 * np.pi)
    issued = None if plain.issued_s is None else EVENT_MJD + plain.issued_s / DAY
    layer = None
    if plain.distances is not None:
        layer = DistanceLayer(*(np.array(column)[rank] for column in zip(*plain.distances)))
    return SkyMap(
        start[rank],
        stop[rank],
        density[rank],
        int(order.max()),
        distance=layer,
        label=plain.label,
        issued_mjd=issued,
    )


def telescope_of(plan, rule):
    """A telescope whose every exposure hands its region outright."""
    mine = [i for i, e in enumerate(plan.plain.exposures) if e.telescope == rule.name]
    own = [plan.plain.exposures[i] for i in mine]
    number = {}
    texts = [f"region {number.setdefault(plan.regions[i], i)}" for i in mine]
    log = log_table(
        rule.name,
        np.full(len(own), np.nan),
        np.nan,
        start=[EVENT_MJD + e.start_s / DAY for e in own],
        duration=[e.duration_s for e in own],
        band=[e.band for e in own],
        depth=[np.nan if e.depth is None else e.depth for e in own],
    )
    region = np.array(texts, dtype=object) if texts else np.empty(0, dtype=object)
    stated = np.array([np.nan if e.extinction is None else e.extinction for e in own])
    one = telescope(
        rule.name,
        None,
        replace(log, region=region, extinction=stated),
        depth_system=rule.depth_system,
        depth_significance=rule.depth_significance,
        vega_offsets=rule.vega_offset,
        mask=(spans_of(plan.masks[rule.name]),) if rule.name in plan.masks else (),
        searchable=spans_of(plan.searchable[rule.name]) if rule.name in plan.searchable else None,
        regions={text: spans_of(plan.regions[i]) for text, i in zip(texts, mine)},
    )
    site = None if rule.longitude_deg is None else Site(rule.longitude_deg, 0.0, 0.0)
    return replace(one, site=site)


def load(plan):
    """The plan as the package sees it."""
    plain = plan.plain
    loaded = campaign(
        [telescope_of(plan, rule) for rule in plain.telescopes],
        [skymap_of(m) for m in plain.maps],
        significance=plain.significance,
        revisit_visits=plain.visits,
        revisit_gap_minutes=plain.gap_s / 60,
    )
    return replace(
        loaded,
        dust=dust_of(plain.dust) if plain.dust else None,
        extinction_coefficients={
            band: value for band, value in plain.coefficients.items() if band not in PUBLISHED
        },
        sources=tuple(source_of(one) for one in plain.sources),
    )


def with_exposures(plan, keep):
    """The same campaign with the exposures numbered in ``keep``, in that order."""
    plain = replace(plan.plain, exposures=[plan.plain.exposures[i] for i in keep])
    return replace(plan, plain=plain, regions=tuple(plan.regions[i] for i in keep))


# --- the third dimension ---------------------------------------------------------------


COEFFICIENTS = {"g": 3.3, "r": 2.3}
# The package's own for a band that the campaign leaves out: ApJ 737 103 (2011), table 6.
PUBLISHED = {"i": 1.698}


def random_distances(rng, cells):
    """Mostly proper distributions; some far below zero, some marked as without distance."""
    found = []
    for _ in cells:
        mu, sigma, norm = rng.normal(130, 35), rng.uniform(12, 45), 1.0
        chance = rng.uniform()
        if chance < 0.06:
            mu = float(rng.choice([-40.0, -150.0, -400.0]))
        elif chance < 0.10:
            mu, norm = np.inf, 0.0
        elif chance < 0.12:
            norm = 0.0
        found.append((float(mu), float(sigma), norm))
    return found


def random_dust(rng, windows):
    """Cells of two orders over the windows, a tenth of them holes."""
    order = int(rng.integers(5, 7))
    scale = rng.choice([0.05, 0.4])
    cells = []
    for window in sorted(set(windows)):
        for child in range(window << 2 * (order - 5), (window + 1) << 2 * (order - 5)):
            finer = rng.uniform() < 0.3
            for cell in [4 * child + k for k in range(4)] if finer else [child]:
                if rng.uniform() < 0.9:
                    value = float(rng.exponential(scale)) if rng.uniform() < 0.9 else 0.0
                    cells.append((order + finer, int(cell), value))
    return cells


def random_source(rng, name):
    """One of every kind: constant, fading, a light curve; steps and logistics; once or often."""
    magnitude = float(rng.uniform(-18.0, -14.5))
    by_band = {band: magnitude + float(rng.normal(0, 0.5)) for band in ("g", "r")}
    kind = rng.choice(["constant", "per band", "fade", "curve"])
    more = {}
    if kind == "fade":
        more = {"fade_per_day": float(rng.uniform(0, 1.5))}
        more["rise_days"] = float(rng.choice([0.0, 0.4]))
    if kind == "curve":
        times = np.sort(rng.uniform(0, 2.5, 4)).round(3) + np.arange(4) * 0.01
        more = {
            "curve": {
                band: [(float(t), magnitude + float(rng.normal(0, 0.7))) for t in times]
                for band in rng.permutation(["g", "r", "i"])[: rng.integers(1, 3)].tolist()
            }
        }
    detection = rng.choice(["step", "step", "step", "offset", "plateau", "logistic"])
    if detection == "offset":
        more["offset"] = float(rng.uniform(-0.6, 0.3))
    if detection in ("plateau", "logistic"):
        more["plateau"] = float(rng.uniform(0.6, 0.95))
    if detection == "logistic":
        more |= {"width": float(rng.uniform(0.05, 0.4)), "offset": float(rng.uniform(-0.4, 0.2))}
    visits = int(rng.choice([1, 1, 2, 3]))
    if visits > 1:
        more |= {"visits": visits, "gap_s": int(rng.choice([0, 1800, 1799, 7200]))}
    flat = bool(rng.uniform() < 0.3)
    given = by_band if kind in ("per band", "fade") else magnitude
    return PlainSource(name, given, flat=flat, **more)


def deep_plan(seed):
    """A random campaign whose maps carry distances, mostly behind dust, with three sources."""
    plan = random_plan(seed)
    rng = np.random.default_rng([seed, 3])
    windows = sorted({c >> 2 * (o - 5) for region in plan.regions for o, c in region}) or [0]
    if plan.regions and rng.uniform() < 0.4:
        plan = well_covered(plan, windows)
    maps = [
        replace(m, distances=random_distances(rng, m.cells)) if rng.uniform() < 0.8 else m
        for m in plan.plain.maps
    ]
    with_dust, own = rng.uniform() < 0.7, rng.choice([0.0, 0.2])
    exposures = [
        replace(e, extinction=round(float(rng.exponential(0.2)), 3)) if rng.uniform() < own else e
        for e in plan.plain.exposures
    ]
    plain = replace(
        plan.plain,
        maps=maps,
        # Off the edges of histograms, which lie at quarters of a magnitude.
        exposures=[
            replace(e, depth=None if e.depth is None else e.depth - 1.437) for e in exposures
        ],
        dust=random_dust(rng, windows) if with_dust else None,
        coefficients=COEFFICIENTS | PUBLISHED,
        sources=tuple(random_source(rng, f"source {i}") for i in range(3)),
    )
    return replace(plan, plain=plain)


def well_covered(plan, windows):
    """The plan with nearly all probability in the windows, and these observed whole at first."""
    maps = []
    for m in plan.plain.maps:
        weights = [
            (o, c, p if o >= 5 and c >> 2 * (o - 5) in windows else 1e-3 * p) for o, c, p in m.cells
        ]
        total = sum(p for *_, p in weights)
        maps.append(replace(m, cells=[(o, c, p / total) for o, c, p in weights]))
    whole = tuple((5, window) for window in windows)
    first = replace(plan.plain.exposures[0], pixels=pixels_of(whole))
    plain = replace(plan.plain, maps=maps, exposures=[first, *plan.plain.exposures[1:]])
    return replace(plan, plain=plain, regions=(whole, *plan.regions[1:]))


def source_of(plain):
    """The source as the package sees it."""
    kind, bands, curves = "constant", None, {}
    if isinstance(plain.magnitude, dict):
        bands = tuple(plain.magnitude)
    if plain.curve is not None:
        kind, bands = "light curve", tuple(plain.curve)
        curves = {band: tuple(map(np.array, zip(*points))) for band, points in plain.curve.items()}
    elif plain.fade_per_day or plain.rise_days:
        kind = "fade"
    return Source(
        plain.name,
        bands,
        kind,
        {} if curves else plain.magnitude,
        plain.fade_per_day,
        plain.rise_days,
        curves,
        "flat" if plain.flat else "none",
        Detection(plain.offset, plain.width, plain.plateau),
        plain.visits,
        plain.gap_s / 60,
    )


def dust_of(cells):
    order, cell, ebv = (np.array(column) for column in zip(*cells))
    start, stop = cell_to_span(order, cell)
    rank = np.argsort(start)
    return Dust(start[rank], stop[rank], ebv[rank])
