"""The tally against a brute-force twin, and the laws that its numbers must obey.

The twin (`tally_twin`) works from the definitions, pixel by pixel. Campaigns are
random and seeded; their exposures hand regions made of HEALPix cells, so both
sides see the very same sky and must agree to rounding.
"""

from dataclasses import replace
from datetime import timedelta

import healpy
import numpy as np
import pytest
from astropy.io import fits
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from skytally.account import account
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.observations import night_of
from skytally.skymap import SkyMap
from skytally.skymap_io import circle_skymap, read_skymap
from skytally.spans import Spans, cell_to_span
from skytally.tally import maps_in_force
from tally_twin import tally
from twin_campaigns import DAY, EVENT, load, random_plan, with_exposures

seeds = st.integers(0, 2**32 - 1)


# --- the twin --------------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(80))
def test_every_number_agrees_with_the_twin(seed):
    plan = random_plan(seed)
    results = account(load(plan))
    expected = tally(plan.plain)
    assert {(row.map, row.selection) for row in results.rows} == set(expected)
    assert len(results.rows) == len(expected)
    for row in results.rows:
        numbers = expected[row.map, row.selection]
        for name, value in numbers.values.items():
            found = getattr(row, name)
            if value is None or isinstance(value, str):
                assert found == value, (name, row.selection)
            else:
                assert found == pytest.approx(value, rel=1e-9, abs=1e-9), (name, row.selection)
        # Regions handed as cells are exact: the bracket closes.
        assert row.probability_low == pytest.approx(row.probability, abs=1e-12)
        assert row.probability_high == pytest.approx(row.probability, abs=1e-12)
        assert row.area_low_deg2 == row.area_high_deg2 == row.area_deg2
        assert row.probability_error == 0.0
    compare_timelines(results, expected)
    compare_as_pointed(results, expected)


def compare_timelines(results, expected):
    assert len(results.timelines) == len(results.rows)
    for line in results.timelines:
        numbers = expected[line.map, (line.telescope, line.band, line.night)]
        ends = list(numbers.timeline)
        iso = [(EVENT + timedelta(seconds=s)).strftime("%Y-%m-%dT%H:%M:%SZ") for s in ends]
        assert line.end == tuple(iso)
        assert line.hours == pytest.approx([s / 3600 for s in ends], abs=1e-4)
        probability, area = zip(*numbers.timeline.values()) if ends else ((), ())
        assert line.probability == pytest.approx(probability, abs=1e-9)
        assert line.area_deg2 == pytest.approx(area, rel=1e-9)


def compare_as_pointed(results, expected):
    labels = results.maps[0].version
    found = {}
    for one in results.as_pointed:
        selection = (one.telescope, one.band, one.night)
        assert one.map not in found.setdefault(selection, {})
        found[selection][one.map] = one
    for (label, selection), numbers in expected.items():
        if label != labels:
            continue
        mine = found.pop(selection, {})
        assert set(mine) == set(numbers.as_pointed)
        for version, (count, then, newest) in numbers.as_pointed.items():
            assert mine[version].exposures == count
            assert mine[version].probability_newest == pytest.approx(newest, abs=1e-9)
            if then is None:
                assert mine[version].probability is None
            else:
                assert mine[version].probability == pytest.approx(then, abs=1e-9)
    assert not found


def test_the_random_campaigns_hold_what_they_should():
    """The comparison is worth something only if the hard cases occur in it."""
    plans = [random_plan(seed) for seed in range(80)]
    plain = [p.plain for p in plans]
    rows = [numbers for one in plain[:30] for numbers in tally(one).values()]
    assert {len(p.telescopes) for p in plain} == {1, 2, 3, 4, 5}
    assert {len({e.band for e in p.exposures}) for p in plain} >= {1, 2, 3, 4}
    assert any(not e.band for p in plain for e in p.exposures)
    assert any(m.issued_s is None for p in plain for m in p.maps)
    assert any(m.issued_s is not None for p in plain for m in p.maps)
    assert any(t.longitude_deg is None for p in plain for t in p.telescopes)
    assert any(t.depth_system == "Vega" for p in plain for t in p.telescopes)
    assert sum(bool(p.masks) for p in plans) > 10
    assert sum(bool(p.searchable) for p in plans) > 10
    for name in ("probability_revisited", "probability_unique", "depth_over_90"):
        assert sum(bool(r.values[name]) for r in rows) > 50
    assert sum(r.values["depth_over_50"] != r.values["depth_stacked_over_50"] for r in rows) > 20
    assert sum(0 < r.values["probability_in_50"] < r.values["probability"] for r in rows) > 50
    assert sum(len(r.timeline) > 3 for r in rows) > 50
    assert any(None in r.as_pointed for r in rows)


# --- laws ------------------------------------------------------------------------------


def rows_by_selection(results):
    return {(row.map, row.selection): row for row in results.rows}


def assert_same(one, two, but=(), tolerance=1e-12):
    """Every number of every row, to rounding; the fields named in ``but`` may differ."""
    one, two = rows_by_selection(one), rows_by_selection(two)
    assert set(one) == set(two)
    for key, row in one.items():
        for name, value in vars(row).items():
            if name in but:
                continue
            other = getattr(two[key], name)
            if isinstance(value, float) and isinstance(other, float):
                assert other == pytest.approx(value, rel=tolerance, abs=tolerance), (key, name)
            else:
                assert other == value, (key, name)


@given(seeds)
@settings(max_examples=25)
def test_order_of_rows_and_telescopes_does_not_matter(seed):
    rng = np.random.default_rng(seed)
    plan = random_plan(seed)
    shuffled = with_exposures(plan, rng.permutation(len(plan.plain.exposures)))
    plain = replace(
        shuffled.plain,
        telescopes=[plan.plain.telescopes[i] for i in rng.permutation(len(plan.plain.telescopes))],
    )
    one, two = account(load(plan)), account(load(replace(shuffled, plain=plain)))
    assert_same(one, two)
    kind = {(t.map, t.telescope, t.band, t.night): t for t in two.timelines}
    for line in one.timelines:
        other = kind[line.map, line.telescope, line.band, line.night]
        assert other.end == line.end
        assert other.probability == pytest.approx(line.probability, abs=1e-12)


@given(seeds)
@settings(max_examples=25)
def test_more_exposures_never_cover_less(seed):
    plan = random_plan(seed)
    count = len(plan.plain.exposures)
    keep = np.flatnonzero(np.random.default_rng(seed).uniform(size=count) < 0.7)
    some = rows_by_selection(account(load(with_exposures(plan, keep))))
    every = rows_by_selection(account(load(plan)))
    assert set(some) <= set(every)
    for key, row in some.items():
        for name in (
            "probability",
            "probability_in_50",
            "probability_in_90",
            "probability_revisited",
            "area_deg2",
            "area_in_50_deg2",
            "area_in_90_deg2",
        ):
            assert getattr(row, name) <= getattr(every[key], name) + 1e-12
        assert every[key].probability <= 1 + 1e-12


def kinds(row):
    return tuple(part is not None for part in row.selection)


@given(seeds)
@settings(max_examples=25)
def test_shares_of_each_kind(seed):
    """Credits sum to the union; what is covered alone ≤ credit ≤ what is covered."""
    results = account(load(random_plan(seed)))
    total, sums = {}, {}
    for row in results.rows:
        if row.selection == (None, None, None):
            total[row.map] = row.probability
        sums.setdefault((row.map, kinds(row)), []).append(row.probability_credit)
        assert -1e-15 <= row.probability_unique <= row.probability_credit + 1e-12
        assert row.probability_credit <= row.probability + 1e-12
        assert row.probability_revisited <= row.probability + 1e-12
        assert row.probability_in_50 <= row.probability_in_90 + 1e-12
        assert row.probability_in_90 <= row.probability + 1e-12
    assert len(sums) >= 2 * len(total)
    for (label, _), credits in sums.items():
        assert sum(credits) == pytest.approx(total[label], abs=1e-12)


@given(seeds)
@settings(max_examples=25)
def test_a_repeated_exposure_changes_only_what_counts_visits(seed):
    plan = random_plan(seed)
    count = len(plan.plain.exposures)
    assume(count > 0)
    again = int(np.random.default_rng(seed).integers(count))
    one = account(load(plan))
    two = account(load(with_exposures(plan, [*range(count), again])))
    assert_same(
        one,
        two,
        # The median is over exposures, so it counts them too.
        but=(
            "exposures",
            "probability_revisited",
            "depth_median",
            "depth_stacked_over_50",
            "depth_stacked_over_90",
        ),
    )
    for row, more in zip(one.rows, two.rows):
        own = plan.plain.exposures[again]
        chosen = row.telescope in (None, own.telescope) and row.band in (
            None,
            own.band or "unstated",
        )
        if row.night is None:
            assert more.exposures == row.exposures + chosen
        assert more.probability_revisited >= row.probability_revisited - 1e-15
        if row.depth_stacked_over_90 is not None:
            assert more.depth_stacked_over_90 >= row.depth_stacked_over_90 - 1e-12
    assert two.rows[0].exposures == one.rows[0].exposures + 1


@given(seeds)
@settings(max_examples=25)
def test_a_log_split_over_two_telescopes_leaves_the_rest_alone(seed):
    plan = random_plan(seed)
    rng = np.random.default_rng(seed)
    rule = plan.plain.telescopes[0]
    other = replace(rule, name="Wren")
    exposures = [
        replace(e, telescope="Wren") if e.telescope == rule.name and rng.uniform() < 0.5 else e
        for e in plan.plain.exposures
    ]
    plain = replace(plan.plain, exposures=exposures, telescopes=[*plan.plain.telescopes, other])
    masks = plan.masks | ({"Wren": plan.masks[rule.name]} if rule.name in plan.masks else {})
    searchable = plan.searchable | (
        {"Wren": plan.searchable[rule.name]} if rule.name in plan.searchable else {}
    )
    one = account(load(plan))
    two = account(load(replace(plan, plain=plain, masks=masks, searchable=searchable)))

    def without(results):
        rows = tuple(r for r in results.rows if r.telescope is None)
        return replace(results, rows=rows)

    # Stacks are made per telescope.
    assert_same(without(one), without(two), but=("depth_stacked_over_50", "depth_stacked_over_90"))


def split_cells(skymap, chosen):
    """A map whose chosen cells are replaced by their four children of the same density."""
    starts = np.repeat(skymap.starts, np.where(chosen, 4, 1))
    quarter = np.where(chosen, (skymap.stops - skymap.starts) // 4, 0)
    within = np.arange(starts.size) - np.repeat(
        np.cumsum(np.where(chosen, 4, 1)) - np.where(chosen, 4, 1), np.where(chosen, 4, 1)
    )
    starts = starts + within * np.repeat(quarter, np.where(chosen, 4, 1))
    length = np.where(chosen, quarter, skymap.stops - skymap.starts)
    repeat = np.where(chosen, 4, 1)
    return replace(
        skymap,
        starts=starts,
        stops=starts + np.repeat(length, repeat),
        density_per_sr=np.repeat(skymap.density_per_sr, repeat),
        order_max=skymap.order_max + 1,
    )


@given(seeds)
@settings(max_examples=25)
def test_refining_the_cells_of_a_map_leaves_numbers_alone(seed):
    loaded = load(random_plan(seed))
    rng = np.random.default_rng(seed)
    finer = []
    for skymap in loaded.maps:
        chosen = rng.uniform(size=skymap.starts.size) < 0.6
        # A credible region ends with one cell: that one must stay whole, for by its
        # definition the region would be smaller if the cell were smaller.
        for level in (0.5, 0.9):
            inside = skymap.credible_cells(level)
            chosen[inside & (skymap.density_per_sr == skymap.density_per_sr[inside].min())] = False
        finer.append(split_cells(skymap, chosen))
    assert any(f.starts.size > m.starts.size for f, m in zip(finer, loaded.maps))
    assert_same(account(loaded), account(replace(loaded, maps=tuple(finer))))


# --- laws with cameras, whose footprints are rasterised ------------------------------


def camera_campaign(seed, turn_deg=0.0, maps=None, **options):
    """Three cameras near one place of the sky, all turned in right ascension."""
    rng = np.random.default_rng(seed)
    lon, lat = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-1, 1)))
    square, step = 0.2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]), np.array([0.25, 0])
    cameras = {
        "Heron": MosaicCamera((square - step, square + step), ("a", "b")),
        "Plover": MosaicCamera.rectangle(1.6, 1.2),
        "Avocet": CircleCamera(0.5),
    }
    telescopes = []
    for name, camera in cameras.items():
        n = int(rng.integers(1, 5))
        ra = lon + rng.uniform(-1.5, 1.5, n) / max(np.cos(np.radians(lat)), 0.05)
        dec = np.clip(lat + rng.uniform(-1.5, 1.5, n), -90, 90)
        log = log_table(
            name,
            (ra + turn_deg) % 360,
            dec,
            angle=rng.uniform(0, 360, n),
            start=EVENT_MJD + rng.uniform(0, 2, n),
            band=rng.choice(["g", "r"], n),
            depth=rng.normal(21, 0.5, n),
        )
        telescopes.append(telescope(name, camera, log))
    if maps is None:
        maps = [circle_skymap(lon, lat, 2.0, label="1")]
    return campaign(telescopes, maps, **options), (lon, lat)


@given(seeds)
@settings(max_examples=10)
def test_brackets_hold_the_value(seed):
    loaded, _ = camera_campaign(seed)
    for row in account(loaded).rows:
        assert 0 <= row.probability_low <= row.probability <= row.probability_high <= 1 + 1e-12
        assert 0 <= row.area_low_deg2 <= row.area_deg2 <= row.area_high_deg2
        assert row.probability_error <= row.probability_high - row.probability_low + 1e-15


def quarter_turn(skymap):
    """The map turned by 90° in right ascension: every base face moves to the next of its ring."""
    face = np.int64(1) << 58
    number = skymap.starts // face
    shift = (number // 4 * 4 + (number + 1) % 4 - number) * face
    rank = np.argsort(skymap.starts + shift)
    return replace(
        skymap,
        starts=(skymap.starts + shift)[rank],
        stops=(skymap.stops + shift)[rank],
        density_per_sr=skymap.density_per_sr[rank],
    )


def test_a_quarter_turn_moves_base_faces():
    """healpy confirms the symmetry that `quarter_turn` uses."""
    cell = np.arange(12 * 16)
    lon, lat = healpy.pix2ang(4, cell, nest=True, lonlat=True)
    turned = healpy.ang2pix(4, lon + 90, lat, nest=True, lonlat=True)
    face, within = np.divmod(cell, 16)
    np.testing.assert_array_equal(turned, (face // 4 * 4 + (face + 1) % 4) * 16 + within)


@given(seeds)
@settings(max_examples=10)
def test_turning_the_sky_leaves_all_numbers_alone(seed):
    _, (lon, lat) = camera_campaign(seed)
    nside = 32
    cell = np.arange(12 * nside**2)
    place = healpy.ang2vec(*healpy.pix2ang(nside, cell, nest=True, lonlat=True), lonlat=True)
    density = np.exp(2000 * (place @ healpy.ang2vec(lon, lat, lonlat=True) - 1)) + 1e-5
    density *= np.random.default_rng(seed).uniform(0.5, 1.5, cell.size)
    start, stop = cell_to_span(5, cell)
    density /= density.sum() * healpy.nside2pixarea(nside)
    skymap = SkyMap(start, stop, density, 5, label="1")
    turned = quarter_turn(skymap)
    # A bracket of 1 asks for no refining, which picks among cells of equal worth.
    one = account(camera_campaign(seed, maps=[skymap], bracket=1.0)[0])
    two = account(camera_campaign(seed, 90.0, maps=[turned], bracket=1.0)[0])
    assert one.row().probability > 0.01
    assert_same(one, two)
    refined = account(camera_campaign(seed, 90.0, maps=[turned])[0])
    for row, fine in zip(one.rows, refined.rows):
        assert row.probability_low - 1e-12 <= fine.probability_low
        assert fine.probability_high <= row.probability_high + 1e-12


def write_map(path, columns, **header):
    table = fits.BinTableHDU.from_columns(columns)
    table.header.update(PIXTYPE="HEALPIX", COORDSYS="C", **header)
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)


@pytest.mark.parametrize("seed", range(4))
def test_forms_of_one_map_agree(seed, tmp_path):
    """RING, NESTED and multi-order files of one map, the latter with coarse cells off the blob."""
    loaded, (lon, lat) = camera_campaign(seed)
    nside = 128
    place = healpy.ang2vec(
        *healpy.pix2ang(nside, np.arange(12 * nside**2), nest=True, lonlat=True), lonlat=True
    )
    value = np.exp(1000 * (place @ healpy.ang2vec(lon, lat, lonlat=True) - 1))
    blocks = value.reshape(-1, 16)
    faint = blocks.max(axis=1) < 1e-6 * value.max()
    blocks = np.where(faint[:, None], 1e-9, blocks)
    value = blocks.ravel() / blocks.sum()
    area = healpy.nside2pixarea(nside)
    order = int(np.log2(nside))
    nested, ring = tmp_path / "nested.fits", tmp_path / "ring.fits"
    multi = tmp_path / "multi.fits"
    for path, ordering, column in (
        (nested, "NESTED", value),
        (ring, "RING", healpy.reorder(value, n2r=True)),
    ):
        write_map(
            path,
            [fits.Column("PROB", "D", array=column, unit="pix-1")],
            ORDERING=ordering,
            NSIDE=nside,
            INDXSCHM="IMPLICIT",
        )
    bright = np.flatnonzero(~np.repeat(faint, 16))
    uniq = np.concatenate((4 ** (order - 1) + np.flatnonzero(faint), 4 ** (order + 1) + bright))
    density = np.concatenate((value.reshape(-1, 16)[faint, 0], value[bright])) / area
    write_map(
        multi,
        [
            fits.Column("UNIQ", "K", array=uniq),
            fits.Column("PROBDENSITY", "D", array=density, unit="sr-1"),
        ],
        ORDERING="NUNIQ",
        INDXSCHM="EXPLICIT",
    )
    results = [
        account(replace(loaded, maps=(read_skymap(path, label="1"),)))
        for path in (nested, ring, multi)
    ]
    assert results[0].row().probability > 0.05
    assert_same(results[0], results[1])
    assert_same(results[0], results[2])


# --- single cases ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("longitude", "noon_hours"),
    [(None, 12.0), (0.0, 12.0), (90.0, 6.0), (-90.0, 18.0), (270.0, 18.0), (180.0, 0.0)],
)
def test_nights_break_at_local_mean_noon(longitude, noon_hours):
    """Local mean time is ahead of UTC by an hour per 15° east (common practice)."""
    second = 1 / DAY
    noon = 62_000 + noon_hours / 24
    before, after = night_of(np.array([noon - second, noon + second]), longitude)
    assert after == before + 1
    # The night is named by the evening's local date.
    if longitude in (-90.0, 270.0):
        assert after == 62_000
    same = night_of(np.array([noon + second, noon + 1 - second]), longitude)
    assert same[0] == same[1]


def test_one_meridian_has_one_night_however_it_is_written():
    start = np.linspace(62_000, 62_003, 500)
    for east in (181.0, 200.5, 270.0, 350.0, 360.0):
        np.testing.assert_array_equal(night_of(start, east), night_of(start, east - 360))


def test_a_version_is_in_force_from_the_moment_of_its_issue():
    def issued(*times):
        sky = np.array([0]), np.array([12 << 58]), np.array([1.0])
        return [SkyMap(*sky, 0, label=str(i), issued_mjd=t) for i, t in enumerate(times)]

    start = np.array([0.0, 1.0, 1.5, 2.0, 9.0])
    for times, expected in [
        ((1.0, 2.0), [-1, 0, 0, 1, 1]),
        ((None, 2.0), [0, 0, 0, 1, 1]),
        ((None, None), [1, 1, 1, 1, 1]),
        ((1.0, 1.0), [-1, 1, 1, 1, 1]),
        # The file's order stands where one version has no time: the last of those issued.
        ((None, 2.0, 1.0), [0, 2, 2, 2, 2]),
        ((2.0, None, 1.5), [1, 1, 2, 2, 2]),
    ]:
        np.testing.assert_array_equal(maps_in_force(start, issued(*times)), expected)


def test_a_telescope_that_covers_nothing_has_a_row_of_zeros():
    """A log without accepted rows, and a mask that takes everything."""
    here = MosaicCamera.rectangle(1.0, 1.0)
    idle = telescope("Heron", here, log_table("Heron", [], []))
    blind = telescope(
        "Plover", here, log_table("Plover", [10.0, 11.0], [5.0, 5.0]), mask=(Spans.full(),)
    )
    results = account(campaign([idle, blind], [circle_skymap(10, 5, 3, label="1")]))
    for name, exposures in (("Heron", 0), ("Plover", 2), (None, 2)):
        row = results.row(None, name)
        assert row.exposures == exposures
        assert row.probability == row.probability_high == row.area_deg2 == 0
        assert row.probability_unique == row.probability_credit == 0
        assert row.depth_over_50 is None
    assert results.row(None, "Heron").first_start is None
    assert results.row(None, "Plover").depth_min == 21.0
