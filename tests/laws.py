"""Laws that every account must obey when its campaign is changed in a way that is understood.

Each law takes a seed, makes a random campaign, changes it, accounts for both and says
what must be the same, or by how much it must have moved. No expected number is ever
written down: one account is held against the other.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from datetime import datetime, timedelta

import numpy as np
from campaign_builder import campaign, log_table, telescope
from skytally.account import account, lay_coverage
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.leftover import left_overs
from skytally.serialise import to_dict
from skytally.skymap import SkyMap
from skytally.skymap_io import circle_skymap
from tally_twin import PlainCampaign
from twin_campaigns import (
    ORDER,
    Plan,
    deep_plan,
    load,
    pixels_of,
    with_exposures,
)

__all__ = ["LAWS", "account_of", "differences", "mirrored", "turned", "upside_down"]

EXACT = 1e-9
# A crossing is solved for to a millionth of a magnitude.
SOLVED = {"magnitude_50": 3e-6, "magnitude_90": 3e-6}
# Names of rows of a log, and whatever tells the order in which files were given.
_LABELS = {"software", "fingerprint", "inputs", "settings", "notes", "set_aside", "logs"}
_KEYS = ("map", "version", "telescope", "band", "night", "source", "name", "telescopes", "start")


# --- accounts, and what differs between them --------------------------------------------


def account_of(loaded) -> dict:
    """Everything that is said of a campaign, and what is left of its newest map."""
    coverage = lay_coverage(loaded)
    found = to_dict(account(loaded, coverage=coverage))
    found = {key: value for key, value in found.items() if key not in _LABELS}
    # Findings speak of rows and files, which are numbered; other tests are about them.
    del found["findings"], found["silenced"]
    for one in found["exposures"]:
        del one["row"], one["exposure"]
    left = left_overs(loaded, coverage, loaded.maps[-1])
    found["left"] = [
        {"source": name, "remaining": one.remaining, **_by_face(one.skymap)}
        for name, one in left.items()
    ]
    return found


def _by_face(skymap) -> dict:
    """Sums of a map that do not depend on how it is cut into cells."""
    held = skymap.probability.amount
    return {"total": float(held.sum()), "brightest": float(skymap.density_per_sr.max(initial=0))}


def _key(entry):
    return tuple(str(entry.get(key)) for key in _KEYS)


def differences(one, two, path=()):
    """Yield (path, value, value) of all that differs by more than rounding."""
    if isinstance(one, dict) and isinstance(two, dict):
        for key in sorted({*one, *two}):
            yield from differences(one.get(key), two.get(key), (*path, key))
    elif isinstance(one, list) and isinstance(two, list):
        if len(one) != len(two):
            yield path, f"{len(one)} long", f"{len(two)} long"
            return
        if one and isinstance(one[0], dict) and any(key in one[0] for key in _KEYS):
            one, two = _sorted(one), _sorted(two)
        for number, (left, right) in enumerate(zip(one, two)):
            inner = _key(left) if isinstance(left, dict) else number
            yield from differences(left, right, (*path, inner))
    elif isinstance(one, float) and isinstance(two, float):
        allowed = SOLVED.get(path[-1], EXACT)
        if abs(one - two) > allowed * max(abs(one), abs(two), 1.0):
            yield path, one, two
    elif one != two:
        yield path, one, two


def _sorted(entries):
    """By what an entry is of, then by all else, rounded: of two alike any comes first."""

    def rest(entry):
        return [round(v, 6) if isinstance(v, float) else v for v in entry.values()]

    return sorted(entries, key=lambda entry: (_key(entry), repr(rest(entry))))


def assert_alike(one, two, may_differ: Callable[[tuple], bool] = lambda path: False):
    """Fail on every difference that is not expected."""
    found = [d for d in differences(one, two) if not may_differ(d[0])]
    assert not found, found[:5]


def fields(*names):
    """Paths that end in, or pass through, one of these names."""
    return lambda path: any(name in path for name in names)


# --- order and names --------------------------------------------------------------------


def reordering(seed):
    """Rows of a log and telescopes of a campaign in another order."""
    plan, rng = deep_plan(seed), np.random.default_rng(seed)
    other = with_exposures(plan, rng.permutation(len(plan.plain.exposures)))
    telescopes = [plan.plain.telescopes[i] for i in rng.permutation(len(plan.plain.telescopes))]
    other = replace(other, plain=replace(other.plain, telescopes=telescopes))
    one, two = account_of(load(plan)), account_of(load(other))
    # Lists that follow the order of the campaign's telescopes are turned into tables.
    assert_alike(_as_tables(one), _as_tables(two))


def _as_tables(found):
    tables = []
    for sharing in found["between_telescopes"]:
        names = sharing["telescopes"]
        tables.append(
            {
                "map": sharing["map"],
                **{
                    field: dict(zip(names, sharing[field]))
                    for field in ("first_hours", "added", "unique", "credit")
                },
                "pairs": {
                    f"{a} {b}": sharing["pairs"][i][j]
                    for i, a in enumerate(names)
                    for j, b in enumerate(names)
                },
                "sets": {
                    " ".join(sorted(s["telescopes"])): [s["probability"], s["area_deg2"]]
                    for s in sharing["sets"]
                },
            }
        )
    return found | {"between_telescopes": tables}


def renaming(seed):
    """Telescopes under other names, in the same order."""
    plan = deep_plan(seed)
    new = {t.name: f"Wren {i}" for i, t in enumerate(plan.plain.telescopes)}
    other = _renamed(plan, new)
    one, two = account_of(load(plan)), account_of(load(other))
    back = {name: old for old, name in new.items()}

    def restore(value):
        if isinstance(value, dict):
            return {restore(k): restore(v) for k, v in value.items()}
        if isinstance(value, list):
            return [restore(v) for v in value]
        return back.get(value, value) if isinstance(value, str) else value

    # Two sets that hold the same stand in the order of their names.
    assert_alike(_as_tables(one), _as_tables(restore(two)))


def _renamed(plan: Plan, new: dict) -> Plan:
    plain = plan.plain
    return replace(
        plan,
        plain=replace(
            plain,
            telescopes=[replace(t, name=new[t.name]) for t in plain.telescopes],
            exposures=[replace(e, telescope=new[e.telescope]) for e in plain.exposures],
        ),
        masks={new[name]: cells for name, cells in plan.masks.items()},
        searchable={new[name]: cells for name, cells in plan.searchable.items()},
    )


def splitting_a_log(seed):
    """Half of a log under the name of another telescope of the same kind."""
    plan, rng = deep_plan(seed), np.random.default_rng(seed)
    rule = plan.plain.telescopes[0]
    moved = [e.telescope == rule.name and rng.uniform() < 0.5 for e in plan.plain.exposures]
    plain = replace(
        plan.plain,
        telescopes=[*plan.plain.telescopes, replace(rule, name="Wren")],
        exposures=[
            replace(e, telescope="Wren") if go else e for e, go in zip(plan.plain.exposures, moved)
        ],
    )
    also = {
        kind: cells | ({"Wren": cells[rule.name]} if rule.name in cells else {})
        for kind, cells in (("masks", plan.masks), ("searchable", plan.searchable))
    }
    one, two = account_of(load(plan)), account_of(load(replace(plan, plain=plain, **also)))

    def whole(found):
        parts = {
            key: [e for e in found[key] if e["telescope"] is None]
            for key in ("rows", "timelines", "as_pointed")
        }
        untouched = ("maps", "exclusion", "fading", "distance_profiles", "depth_histograms", "left")
        return parts | {key: found[key] for key in untouched}

    # Stacks are made per telescope.
    stacks = fields("depth_stacked_over_50", "depth_stacked_over_90")
    assert_alike(whole(one), whole(two), stacks)
    for label in {e["map"] for e in two["rows"]}:
        before, after = (_credit(found, label) for found in (one, two))
        assert math.isclose(before, after, abs_tol=1e-12)


def _credit(found, label):
    return sum(
        e["probability_credit"]
        for e in found["rows"]
        if e["map"] == label and e["telescope"] and e["band"] is None
    )


# --- the sky moved ----------------------------------------------------------------------


def turned(order: int, cell: int) -> int:
    """A cell after a turn by 90° in longitude: the next base face of the same ring."""
    face, within = divmod(cell, 4**order)
    return (face // 4 * 4 + (face + 1) % 4) * 4**order + within


def mirrored(order: int, cell: int) -> int:
    """A cell after longitude has changed its sign: x and y of the face are exchanged."""
    face, within = divmod(cell, 4**order)
    face = (3, 2, 1, 0, 4, 7, 6, 5, 11, 10, 9, 8)[face]
    even, odd = within & 0x5555555555555555, within & 0xAAAAAAAAAAAAAAA
    return face * 4**order + ((even << 1) | (odd >> 1))


def upside_down(order: int, cell: int) -> int:
    """A cell after latitude has changed its sign: x and y are exchanged and run backwards."""
    face, within = divmod(cell, 4**order)
    face = (face + 8) % 16 if face // 4 != 1 else face
    even, odd = within & 0x5555555555555555, within & 0xAAAAAAAAAAAAAAA
    return face * 4**order + (4**order - 1) - ((even << 1) | (odd >> 1))


def moved(plan: Plan, move: Callable[[int, int], int]) -> Plan:
    """The campaign with all of its sky moved."""

    def cells(some):
        return tuple((o, move(o, c)) for o, c in some)

    def weighted(some):
        return [(o, move(o, c), value) for o, c, value in some]

    plain: PlainCampaign = plan.plain
    regions = tuple(cells(region) for region in plan.regions)
    return replace(
        plan,
        plain=replace(
            plain,
            maps=[replace(m, cells=weighted(m.cells)) for m in plain.maps],
            exposures=[
                replace(e, pixels=pixels_of(region)) for e, region in zip(plain.exposures, regions)
            ],
            dust=None if plain.dust is None else weighted(plain.dust),
        ),
        regions=regions,
        masks={name: cells(some) for name, some in plan.masks.items()},
        searchable={name: cells(some) for name, some in plan.searchable.items()},
    )


def moving_the_sky(seed):
    """A quarter turn, and both reflections: HEALPix cells fall upon cells."""
    plan = deep_plan(seed)
    one = account_of(load(plan))
    move = (turned, mirrored, upside_down)[seed % 3]
    assert_alike(one, account_of(load(moved(plan, move))))


def turning_the_sky_anyhow(seed):
    """Cameras and a circular map under any rotation: brackets must have values in common.

    The map is sampled anew, which may move its probability by as much as the
    smallest that the project promises, 0.0005.
    """
    rng = np.random.default_rng(seed)
    matrix = _rotation(rng)
    here = _camera_campaign(np.random.default_rng([seed, 1]), np.eye(3))
    there = _camera_campaign(np.random.default_rng([seed, 1]), matrix)
    for one, two in zip(account(here).rows, account(there).rows, strict=True):
        assert one.selection == two.selection
        assert one.exposures == two.exposures
        for low, high, slack in (
            ("area_low_deg2", "area_high_deg2", 0.0),
            ("probability_low", "probability_high", 5e-4),
        ):
            assert getattr(one, low) <= getattr(two, high) + slack
            assert getattr(two, low) <= getattr(one, high) + slack
        # Any total is within 0.1 % of the exact area: two of them within twice that.
        assert math.isclose(one.area_deg2, two.area_deg2, rel_tol=2e-3)
        assert abs(one.probability - two.probability) <= 1.5e-3


def _rotation(rng):
    matrix, upper = np.linalg.qr(rng.normal(size=(3, 3)))
    matrix = matrix * np.sign(np.diag(upper))
    return matrix * np.sign(np.linalg.det(matrix))


def _camera_campaign(rng, matrix):
    """Rectangles, circles and a mosaic about one place, with their angles, all rotated."""
    lon, lat = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-0.9, 0.9)))
    square, step = 0.3 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]), np.array([0.35, 0])
    cameras = (
        MosaicCamera((square - step, square + step), ("a", "b")),
        MosaicCamera.rectangle(1.6, 1.2),
        CircleCamera(0.6),
    )
    telescopes = []
    for name, camera in zip(("Heron", "Plover", "Avocet"), cameras):
        n = int(rng.integers(1, 5))
        ra = lon + rng.uniform(-1.5, 1.5, n) / np.cos(np.radians(lat))
        dec = np.clip(lat + rng.uniform(-1.5, 1.5, n), -89, 89)
        ra, dec, angle = _rotated(matrix, ra, dec, rng.uniform(0, 360, n))
        log = log_table(name, ra, dec, angle=angle, band=rng.choice(["g", "r"], n))
        telescopes.append(telescope(name, camera, log))
    lon, lat, _ = _rotated(matrix, np.array([lon]), np.array([lat]), np.zeros(1))
    return campaign(telescopes, [circle_skymap(float(lon[0]), float(lat[0]), 2.0, label="1")])


def _rotated(matrix, ra, dec, angle):
    """Positions and position angles after a rotation: the north of the field goes along."""
    ra, dec, angle = np.radians([ra, dec, angle])
    at = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    east = np.array([-np.sin(ra), np.cos(ra), np.zeros(ra.size)])
    north = np.cross(at.T, east.T).T
    up = np.cos(angle) * north + np.sin(angle) * east
    at, up = matrix @ at, matrix @ up
    ra, dec = np.arctan2(at[1], at[0]), np.arcsin(at[2])
    east = np.array([-np.sin(ra), np.cos(ra), np.zeros(ra.size)])
    north = np.cross(at.T, east.T).T
    angle = np.arctan2((up * east).sum(axis=0), (up * north).sum(axis=0))
    return np.degrees(ra) % 360, np.degrees(dec), np.degrees(angle) % 360


# --- the map cut finer ------------------------------------------------------------------


def refining_the_map(seed):
    """Cells of the maps replaced by 4 or by 16 children of the same density and distance."""
    plan, rng = deep_plan(seed), np.random.default_rng(seed)
    # The steps of an integral over a detection curve suit the cells of the map.
    sources = tuple(s for s in plan.plain.sources if s.width == 0)
    loaded = load(replace(plan, plain=replace(plan.plain, sources=sources)))
    finer = tuple(_finer(skymap, rng) for skymap in loaded.maps)
    assert all(f.starts.size > m.starts.size for f, m in zip(finer, loaded.maps))
    one, two = account_of(loaded), account_of(replace(loaded, maps=finer))
    assert_alike(one, two, fields("cells", "order_max"))


def _finer(skymap: SkyMap, rng) -> SkyMap:
    parts = rng.choice([1, 4, 16], skymap.starts.size, p=[0.4, 0.3, 0.3])
    # A credible region ends with one cell: that one must stay whole, for by its
    # definition the region would be smaller if the cell were smaller.
    for level in (0.5, 0.9):
        inside = skymap.credible_cells(level)
        parts[inside & (skymap.density_per_sr == skymap.density_per_sr[inside].min())] = 1
    row = np.repeat(np.arange(parts.size), parts)
    within = np.arange(row.size) - np.repeat(np.cumsum(parts) - parts, parts)
    length = (skymap.stops - skymap.starts)[row] // parts[row]
    starts = skymap.starts[row] + within * length
    layer = skymap.distance
    if layer is not None:
        columns = (layer.mu_mpc, layer.sigma_mpc, layer.norm_per_mpc2)
        layer = type(layer)(*(column[row] for column in columns))
    return replace(
        skymap,
        starts=starts,
        stops=starts + length,
        density_per_sr=skymap.density_per_sr[row],
        order_max=skymap.order_max + 2,
        distance=layer,
    )


# --- exposures added --------------------------------------------------------------------


def repeating_everything(seed):
    """Every exposure twice, and twice as many asked for: only counts and stacks move."""
    plan = deep_plan(seed)
    count = len(plan.plain.exposures)
    # Where detection is not certain, a second look is a second chance; such sources stay out.
    steps = tuple(s for s in plan.plain.sources if s.width == 0 and s.plateau == 1)
    plan = replace(plan, plain=replace(plan.plain, sources=steps))
    twice = with_exposures(plan, [*range(count), *range(count)])
    twice = replace(
        twice,
        plain=replace(
            twice.plain,
            visits=2 * plan.plain.visits,
            sources=tuple(replace(s, visits=2 * s.visits) for s in steps),
        ),
    )
    one, two = account_of(load(plan)), account_of(load(twice))
    stacks = ("depth_stacked_over_50", "depth_stacked_over_90")
    # The text of a source says how many visits it asks for.
    assert_alike(one, two, fields("exposures", "sources", *stacks))
    assert len(two["exposures"]) == 2 * len(one["exposures"])
    # What `fields` let pass within a row is looked at here.
    for row, more in zip(one["rows"], two["rows"]):
        assert more["exposures"] == 2 * row["exposures"]
        for name in stacks:
            if row[name] is None:
                assert more[name] is None
            else:
                assert math.isclose(more[name] - row[name], 1.25 * math.log10(2), abs_tol=1e-9)
        assert_alike(row["sources"], more["sources"])
    for pointed, more in zip(one["as_pointed"], two["as_pointed"]):
        assert more["exposures"] == 2 * pointed["exposures"]


def adding_nothing(seed):
    """One more exposure of sky that no map lists: area, and what counts exposures, moves alone."""
    plan, rng = deep_plan(seed), np.random.default_rng(seed)
    if not plan.plain.exposures:
        return
    far, plan = _with_a_hole(plan)
    again = int(rng.integers(len(plan.plain.exposures)))
    own = plan.plain.exposures[again]
    area = 4.0 ** (3 - ORDER) * len(pixels_of(far))
    more = replace(own, pixels=pixels_of(far))
    plain = replace(plan.plain, exposures=[*plan.plain.exposures, more])
    other = replace(plan, plain=plain, regions=(*plan.regions, far))
    # It must not be taken away again by what the telescope may not look at.
    searchable = {
        name: (*cells, *far) if name == own.telescope else cells
        for name, cells in plan.searchable.items()
    }
    mine = replace(plan, searchable=searchable)
    other = replace(other, searchable=searchable)
    one, two = account_of(load(mine)), account_of(load(other))
    moves = fields(
        *("exposures", "area_deg2", "area_low_deg2", "area_high_deg2", "timelines", "sets"),
        *("depth_min", "depth_median", "depth_max", "extinction", "extinction_median"),
        *("absolute_limits", "volume_mpc3", "volume_comoving_mpc3", "depth_histograms"),
        *("reach_min_mpc", "reach_max_mpc", "footprints", "first_hours"),
    )
    assert_alike(one, two, moves)
    band = own.band or "unstated"
    solid = area * math.pi / 3 / 64 * (180 / math.pi) ** 2  # cells of order 3 in deg²
    for row, after in zip(one["rows"], two["rows"]):
        if row["night"] is not None:
            continue
        chosen = row["telescope"] in (None, own.telescope) and row["band"] in (None, band)
        assert after["exposures"] == row["exposures"] + chosen
        gained = after["area_deg2"] - row["area_deg2"]
        assert math.isclose(gained, solid if chosen else 0.0, abs_tol=1e-9)
    for before, after in zip(one["depth_histograms"], two["depth_histograms"], strict=True):
        # There may be empty bins more.
        assert _filled(before) == _filled(after)
    for before, after in zip(one["timelines"], two["timelines"]):
        # Steps may be more, but no probability is.
        assert math.isclose(
            max(before["probability"], default=0.0),
            max(after["probability"], default=0.0),
            abs_tol=1e-12,
        )


def _filled(histogram):
    bins = zip(histogram["edges"], histogram["probability"])
    return {edge: round(held, 12) for edge, held in bins if held > 0}


def _with_a_hole(plan: Plan):
    """A patch far from everything, and the campaign without it on any map."""
    used = {c >> 2 * (o - 3) for region in plan.regions for o, c in region}
    used |= {c >> 2 * (o - 3) for cells in plan.searchable.values() for o, c in cells}
    patch = next(cell for cell in range(12 * 4**3) if cell not in used)
    maps = []
    for m in plan.plain.maps:
        keep = [
            i
            for i, (o, c, _) in enumerate(m.cells)
            if (c >> 2 * (o - 3) if o >= 3 else patch >> 2 * (3 - o)) != (patch if o >= 3 else c)
        ]
        total = sum(m.cells[i][2] for i in keep)
        if total <= 0:
            keep, total = range(len(m.cells)), 1.0
        cells = [(*m.cells[i][:2], m.cells[i][2] / total) for i in keep]
        distances = None if m.distances is None else [m.distances[i] for i in keep]
        maps.append(replace(m, cells=cells, distances=distances))
    far = ((5, patch << 4), (6, (patch << 6) + 9))
    return far, replace(plan, plain=replace(plan.plain, maps=maps))


def one_more_exposure(seed):
    """A real one more: nothing that counts sky, chance or reach becomes less."""
    plan = deep_plan(seed)
    count = len(plan.plain.exposures)
    if count < 2:
        return
    fewer = with_exposures(plan, range(count - 1))
    one, two = account_of(load(fewer)), account_of(load(plan))
    after = {_key(row): row for row in two["rows"]}
    names = (
        *("area_deg2", "area_in_50_deg2", "area_in_90_deg2", "probability", "exposures"),
        *("probability_in_50", "probability_in_90", "probability_revisited"),
        *("volume_90_covered_mpc3", "volume_90_covered_comoving_mpc3"),
    )
    # A field's mean extinction is its own, so that no limit changes.
    for row in one["rows"]:
        more = after[_key(row)]
        for name in names:
            if row[name] is not None:
                assert more[name] >= row[name] - 1e-9 * max(1.0, row[name]), name
        for source, gained in zip(row["sources"], more["sources"]):
            slack = 3e-4  # two integrals over detection curves, each on its own steps
            assert gained["probability"] >= source["probability"] - slack
            for name in ("volume_mpc3", "volume_90_within_reach_mpc3"):
                if source[name] is not None:
                    assert gained[name] >= source[name] * (1 - 1e-9) - 1e-6


# --- time -------------------------------------------------------------------------------


def passing_time(seed):
    """Everything later by whole days: dates move by as many, and nothing else."""
    loaded, days = load(deep_plan(seed)), int(np.random.default_rng(seed).integers(1, 4000))
    later = replace(
        loaded,
        event_mjd=loaded.event_mjd + days,
        maps=tuple(
            replace(m, issued_mjd=None if m.issued_mjd is None else m.issued_mjd + days)
            for m in loaded.maps
        ),
        telescopes=tuple(
            replace(t, log=replace(t.log, start_mjd=t.log.start_mjd + days))
            for t in loaded.telescopes
        ),
    )
    one, two = account_of(loaded), account_of(later)

    def shifted(value):
        if isinstance(value, dict):
            return {k: shifted(v) for k, v in value.items()}
        if isinstance(value, list):
            return [shifted(v) for v in value]
        for form in ("%Y-%m-%dT%H:%M:%SZ", "%Y-%m-%d"):
            try:
                moment = datetime.strptime(value, form)
            except (TypeError, ValueError):
                continue
            return (moment + timedelta(days=days)).strftime(form)
        return value

    assert_alike(shifted(one), two, fields("time_mjd"))


# --- cameras ----------------------------------------------------------------------------


def halving_a_camera(seed):
    """A rectangle, its two halves as detectors, and its two halves as telescopes: one union."""
    rng = np.random.default_rng(seed)
    lon, lat = rng.uniform(0, 360), rng.uniform(-80, 80)
    width, height, n = rng.uniform(0.5, 2.0), rng.uniform(0.5, 2.0), int(rng.integers(1, 6))
    ra = (lon + rng.uniform(-2, 2, n) / np.cos(np.radians(lat))) % 360
    dec, angle = lat + rng.uniform(-2, 2, n), rng.uniform(0, 360, n)
    log = log_table("Heron", ra, dec, angle=angle)
    x, y = width / 2, height / 2
    west = np.array([[-x, -y], [0, -y], [0, y], [-x, y]])
    east = np.array([[0, -y], [x, -y], [x, y], [0, y]])
    maps = [circle_skymap(lon, lat, 2.5, label="1")]
    whole = telescope("Heron", MosaicCamera.rectangle(width, height), log)
    halves = telescope("Heron", MosaicCamera((west, east), ("a", "b")), log)
    apart = [
        telescope(name, MosaicCamera((half,), ("a",)), replace(log, telescope=name))
        for name, half in (("Heron", west), ("Plover", east))
    ]
    rows = [account(campaign(telescopes, maps)).row() for telescopes in ([whole], [halves], apart)]
    for one in rows:
        for other in rows:
            assert one.area_low_deg2 <= other.area_high_deg2
            assert one.probability_low <= other.probability_high
            # Any total is within 0.1 %: two of them within twice that.
            assert math.isclose(one.area_deg2, other.area_deg2, rel_tol=2e-3)
            assert abs(one.probability - other.probability) <= 1e-3


LAWS = {
    law.__name__.replace("_", " "): law
    for law in (
        reordering,
        renaming,
        splitting_a_log,
        moving_the_sky,
        turning_the_sky_anyhow,
        refining_the_map,
        repeating_everything,
        adding_nothing,
        one_more_exposure,
        passing_time,
        halving_a_camera,
    )
}
