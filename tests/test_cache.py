"""The cache: the same numbers with and without it, and nothing in it believed unchecked."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from hypothesis import given
from hypothesis import strategies as st
from skytally import cache as cache_module
from skytally import footprints as footprints_module
from skytally import kept_raster, refinement
from skytally.account import account, lay_coverage
from skytally.api import Campaign
from skytally.cache import Cache, cache_folder, key_of
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.campaign import LoadedCampaign
from skytally.cli import app
from skytally.raster import Raster
from skytally.scaffold import write_campaign
from skytally.serialise import to_json
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon
from skytally.skymap_circle import circle_skymap
from skytally.spans import LINE_END, Spans, SpanTable
from typer.testing import CliRunner

KEY = "a" * 64
ARRAYS = [np.arange(5), np.array([[1.5, np.nan]]), np.empty((0, 3), dtype=np.uint32)]


def a_night(*, shift: float = 0.0, bracket: float = 0.005, extra: float = 0.0) -> LoadedCampaign:
    """Three telescopes, one of them masked; ``shift`` moves the first one's fields."""
    rng = np.random.default_rng(11)
    ra, dec = rng.uniform(140, 150, 12), rng.uniform(-12, -4, 12)
    return campaign(
        [
            telescope(
                "Heron", MosaicCamera.rectangle(1.6, 1.2), log_table("Heron", ra + shift, dec)
            ),
            telescope(
                "Plover", CircleCamera(0.7), log_table("Plover", ra - 1, dec, band="g"), mask=[HOLE]
            ),
            telescope(
                "Dunlin",
                MosaicCamera.rectangle(0.3, 0.3),
                log_table("Dunlin", ra + extra, dec + 0.4),
            ),
        ],
        [circle_skymap(145.0, -8.0, 4.0, label="1", issued_mjd=EVENT_MJD)],
        bracket=bracket,
    )


HOLE = Circle(144.0, -8.0, 0.8)


def numbers(loaded: LoadedCampaign, cache: Cache | None = None) -> str:
    return to_json(account(loaded, coverage=lay_coverage(loaded, cache=cache)))


def spans(loaded: LoadedCampaign, cache: Cache | None = None) -> list[bytes]:
    """Return every bit of the rasters."""
    raster = lay_coverage(loaded, cache=cache).footprints.raster
    tables = (raster.centre, raster.inner, raster.outer)
    arrays = [array for one in tables for array in (one.starts, one.stops, one.offsets)]
    return [array.dtype.str.encode() + array.tobytes() for array in (*arrays, raster.order)]


def entries(cache: Cache) -> set[Path]:
    return set(cache.folder.glob("*.kept"))


@pytest.fixture
def cache(tmp_path: Path) -> Cache:
    return Cache(tmp_path / "kept")


@pytest.fixture
def no_raster(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing may be rasterised from here on."""

    def refuse(*arguments: object) -> Raster:
        raise AssertionError("a footprint was rasterised")

    for module in (footprints_module, refinement):
        for name in ("rasterise", "rasterise_shape", "rasterise_to_target"):
            monkeypatch.setattr(module, name, refuse, raising=False)


def test_the_numbers_are_the_same_to_the_last_digit(cache: Cache) -> None:
    without = numbers(a_night())
    assert numbers(a_night(), cache) == without
    kept = entries(cache)
    assert len(kept) == 5  # three telescopes, a mask, and what refining made of all
    assert numbers(a_night(), cache) == without
    assert entries(cache) == kept
    assert cache.notes == []


def test_a_second_run_rasterises_nothing(cache: Cache, request: pytest.FixtureRequest) -> None:
    before = spans(a_night(), cache)
    request.getfixturevalue("no_raster")
    assert spans(a_night(), cache) == before
    with pytest.raises(AssertionError, match="rasterised"):
        spans(a_night())


def test_one_changed_log_leaves_the_other_telescopes_as_they_are(cache: Cache) -> None:
    spans(a_night(), cache)
    kept = entries(cache)
    without = spans(a_night(extra=0.1))
    assert spans(a_night(extra=0.1), cache) == without
    assert len(entries(cache) - kept) == 2  # Dunlin's own, and what refining made of all


@pytest.mark.parametrize(
    ("changed", "entries_more"),
    [
        ({"shift": 1e-9}, 2),  # the pointings of one telescope
        ({"bracket": 0.004}, 1),  # the bracket's target
    ],
)
def test_what_decides_a_raster_is_in_its_key(
    cache: Cache, changed: dict[str, float], entries_more: int
) -> None:
    spans(a_night(), cache)
    kept = entries(cache)
    spans(a_night(**changed), cache)
    assert len(entries(cache) - kept) == entries_more


def test_a_band_that_joins_rows_otherwise_makes_a_new_entry(cache: Cache) -> None:
    """The working order serves the total of each band and night."""
    ra, dec = np.arange(140.0, 146.0), np.full(6, -8.0)
    maps = a_night().maps

    def laid(band: object) -> int:
        log = log_table("Heron", ra, dec, band=band)
        night = campaign([telescope("Heron", CircleCamera(0.5), log)], maps)
        lay_coverage(night, cache=cache)
        return len(entries(cache))

    assert laid("r") == 2
    assert laid("g") == 2  # another name for the same rows
    assert laid(np.array(list("rrrggg"), dtype=object)) == 4


def test_a_map_that_changes_moves_what_was_refined_alone(cache: Cache) -> None:
    night = a_night()
    spans(night, cache)
    kept = entries(cache)
    other = circle_skymap(145.5, -8.0, 4.0, label="1", issued_mjd=EVENT_MJD)
    moved = replace(night, maps=(other,))
    without = spans(moved)
    assert spans(moved, cache) == without
    assert len(entries(cache) - kept) == 1


SHAPES = [
    Circle(10.0, 20.0, 1.0),
    Circle(10.0, 20.0, 1.0000000001),
    Circle(20.0, 10.0, 1.0),
    Polygon(np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0]])),
    NotIn(Circle(10.0, 20.0, 1.0)),
    AnyOf((Circle(10.0, 20.0, 1.0),)),
    AllOf((Circle(10.0, 20.0, 1.0),)),
    AnyOf((Circle(10.0, 20.0, 1.0), Circle(20.0, 10.0, 1.0))),
    AnyOf((AnyOf((Circle(10.0, 20.0, 1.0),)), Circle(20.0, 10.0, 1.0))),
    Spans.full(),
    Spans.empty(),
]
PARTS = [
    *((shape,) for shape in SHAPES),
    *((), (None,), (0,), (0.0,), ("0",), (False,), ((),), ((), ()), (((),),), ("", "0"), ("0", "")),
    *((np.zeros(2),), (np.zeros((2, 1)),), (np.zeros(2, dtype=np.int64),), (np.zeros(2), 0)),
    *((1, 2, 3), ((1, 2), 3), (1, (2, 3)), ([1], [2, 3])),
]


def test_different_parts_have_different_keys_and_equal_ones_the_same() -> None:
    keys = [key_of("laid", *parts) for parts in PARTS]
    assert len(set(keys)) == len(PARTS)
    assert keys == [key_of("laid", *parts) for parts in PARTS]
    assert key_of("laid", np.zeros((4, 2))[:, 0]) == key_of("laid", np.zeros(4))
    assert key_of("mask") != key_of("laid")
    with pytest.raises(TypeError, match="object"):
        key_of("laid", object())
    with pytest.raises(TypeError, match="ndarray"):
        key_of("laid", np.array([None]))


@pytest.mark.parametrize("name", ["__version__", "code_sha256"])
def test_other_code_has_other_keys(monkeypatch: pytest.MonkeyPatch, name: str) -> None:
    before = key_of("laid", 1)
    monkeypatch.setattr(cache_module, name, "x" if name == "__version__" else lambda: "0" * 64)
    assert key_of("laid", 1) != before


def test_arrays_come_back_as_they_were(cache: Cache) -> None:
    assert cache.fetch(KEY) is None
    cache.store(KEY, ARRAYS)
    found = cache.fetch(KEY)
    assert found is not None
    assert [a.dtype for a in found] == [a.dtype for a in ARRAYS]
    for one, other in zip(found, ARRAYS, strict=True):
        np.testing.assert_array_equal(one, other)
    assert os.listdir(cache.folder) == [f"{KEY}.kept"]
    assert cache.notes == []


def test_objects_are_neither_kept_nor_read(cache: Cache) -> None:
    """Reading a pickle would run what is in it."""
    with pytest.raises(ValueError, match="pickle"):
        cache.store(KEY, [np.array([object()], dtype=object)])
    assert not entries(cache)


@given(st.data())
def test_no_damaged_entry_is_believed(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    """Any bit turned, any end cut off, anything added, or another's content."""
    cache = Cache(tmp_path_factory.getbasetemp() / "damaged")
    cache.store(KEY, ARRAYS)
    path = cache.folder / f"{KEY}.kept"
    whole = path.read_bytes()
    place = data.draw(st.integers(0, len(whole) - 1))
    bit = 1 << data.draw(st.integers(0, 7))
    turned = whole[:place] + bytes([whole[place] ^ bit]) + whole[place + 1 :]
    spoilt = data.draw(st.sampled_from([turned, whole[:place], whole + b"\0"]))
    path.write_bytes(spoilt)
    assert cache.fetch(KEY) is None
    (note,) = cache.notes
    assert "damaged" in note
    assert str(path) in note
    assert not path.exists()


def test_an_entry_under_another_s_name_is_not_believed(cache: Cache) -> None:
    cache.store(KEY, ARRAYS)
    other = "b" * 64
    shutil.copy(cache.folder / f"{KEY}.kept", cache.folder / f"{other}.kept")
    assert cache.fetch(other) is None
    assert cache.fetch(KEY) is not None


def test_a_damaged_entry_is_made_anew_with_one_note(tmp_path: Path) -> None:
    cache = Cache(tmp_path / "kept")
    without = spans(a_night(), cache)
    for path in entries(cache):
        path.write_bytes(path.read_bytes()[:-1])
    again = Cache(tmp_path / "kept")
    assert spans(a_night(), again) == without
    assert len(again.notes) == 5
    last = Cache(tmp_path / "kept")
    assert spans(a_night(), last) == without
    assert last.notes == []


def test_the_least_recently_used_goes_first(tmp_path: Path) -> None:
    size = 1000
    one = [np.zeros(size, dtype=np.uint8)]
    cache = Cache(tmp_path, limit_bytes=3 * (size + 300))
    keys = [letter * 64 for letter in "abc"]
    for age, key in enumerate(keys):
        cache.store(key, one)
        used = time.time() - 100 + age
        os.utime(tmp_path / f"{key}.kept", (used, used))
    assert cache.fetch(keys[0]) is not None  # used now
    cache.store("d" * 64, one)
    assert {path.name[0] for path in entries(cache)} == {"a", "c", "d"}
    assert sum(path.stat().st_size for path in entries(cache)) <= cache.limit_bytes
    cache.store("e" * 64, [np.zeros(4 * size, dtype=np.uint8)])
    assert {path.name[0] for path in entries(cache)} == {"a", "c", "d"}, "it can never fit"
    assert cache.notes == []


def test_what_a_killed_run_left_goes_and_foreign_files_stay(cache: Cache) -> None:
    cache.folder.mkdir()
    names = ["unfinished-old.tmp", "unfinished-new.tmp", "notes.txt"]
    for name in names:
        (cache.folder / name).write_text("x")
        used = time.time() - (0 if "new" in name else 7200)
        os.utime(cache.folder / name, (used, used))
    cache.store(KEY, ARRAYS)
    assert set(os.listdir(cache.folder)) == {*names[1:], f"{KEY}.kept"}


def test_a_folder_that_cannot_be_is_one_note(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("mine")
    cache = Cache(tmp_path / "file" / "kept")
    assert spans(a_night(), cache) == spans(a_night())
    assert {note.split(" could")[0] for note in cache.notes} == {
        f"the cache in {tmp_path / 'file' / 'kept'}"
    }
    assert (tmp_path / "file").read_text() == "mine"


def test_a_folder_that_cannot_be_written_is_still_read(
    cache: Cache, monkeypatch: pytest.MonkeyPatch
) -> None:
    without = spans(a_night(), cache)

    def refuse(*arguments: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(cache_module.tempfile, "mkstemp", refuse)
    monkeypatch.setattr(cache_module.os, "utime", refuse)
    assert spans(a_night(), cache) == without
    assert cache.notes == []
    spans(a_night(shift=0.1), cache)
    (note,) = cache.notes
    assert "permission denied" in note
    assert "SKYTALLY_CACHE" in note


def test_a_full_disk_leaves_no_part_of_an_entry(
    cache: Cache, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*arguments: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(cache_module.os, "replace", full)
    cache.store(KEY, ARRAYS)
    (note,) = cache.notes
    assert "no space left" in note
    assert os.listdir(cache.folder) == []


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="there are no pipes with names")
def test_what_is_no_file_is_not_waited_for(cache: Cache) -> None:
    cache.folder.mkdir()
    os.mkfifo(cache.folder / f"{KEY}.kept")
    assert cache.fetch(KEY) is None
    (cache.folder / f"{KEY}.kept").mkdir()
    assert cache.fetch(KEY) is None
    cache.store(KEY, ARRAYS)
    assert cache.notes


WRITER = """
import sys
import numpy as np
from skytally.cache import Cache
cache = Cache(sys.argv[1], limit_bytes=60_000)
for turn in range(150):
    key = f"{turn % 7:064x}"
    expected = np.full(1000 + turn % 7, turn % 7)
    found = cache.fetch(key)
    if found is None:
        cache.store(key, [expected])
    else:
        assert np.array_equal(found[0], expected)
print(cache.notes)
"""


def test_two_processes_share_a_folder(tmp_path: Path) -> None:
    """Both write, read and make room at once; the limit holds seven entries, or nearly."""
    running = [
        subprocess.Popen(
            [sys.executable, "-c", WRITER, str(tmp_path)], stdout=subprocess.PIPE, text=True
        )
        for _ in range(2)
    ]
    told = [process.communicate(timeout=60)[0] for process in running]
    assert [process.returncode for process in running] == [0, 0]
    assert told == ["[]\n", "[]\n"]
    assert not [name for name in os.listdir(tmp_path) if not name.endswith(".kept")]


@given(st.lists(st.integers(0, LINE_END - 1), max_size=12, unique=True), st.integers(0, 29))
def test_packing_loses_nothing(edges: list[int], order: int) -> None:
    """At any order, up to the end of the line."""
    step = 1 << (2 * (29 - order))
    even = sorted({edge // step * step for edge in edges} | {LINE_END})
    spans = Spans(np.array(even[len(even) % 2 :], dtype=np.int64))
    table = SpanTable.from_regions([spans, Spans.empty(), Spans.full()])
    raster = Raster(table, SpanTable.from_regions([]), table, np.array([order, -1, 3]))
    back = kept_raster._unpacked(kept_raster._packed(raster))
    assert [back.centre.region(owner) for owner in range(3)] == [
        table.region(owner) for owner in range(3)
    ]
    assert back.inner.owners == 0
    np.testing.assert_array_equal(back.order, raster.order)


def test_the_folder_is_the_user_s_or_the_one_named(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """XDG Base Directory Specification, version 0.8: $XDG_CACHE_HOME, else ~/.cache."""
    monkeypatch.setenv("SKYTALLY_CACHE", str(tmp_path / "named"))
    assert cache_folder() == tmp_path / "named"
    monkeypatch.delenv("SKYTALLY_CACHE")
    if sys.platform == "linux":
        monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "xdg"))
        assert cache_folder() == tmp_path / "xdg" / "skytally"
        monkeypatch.delenv("XDG_CACHE_HOME")
        monkeypatch.setenv("HOME", str(tmp_path))
        assert cache_folder() == tmp_path / ".cache" / "skytally"


def test_a_command_gives_the_same_with_and_without_the_cache(
    tmp_path: Path, cache_folder: Path
) -> None:
    path = str(write_campaign(tmp_path / "night")[0])

    def run(*arguments: str) -> tuple[str, list[str]]:
        done = CliRunner().invoke(app, [*arguments])
        assert done.exit_code == 0, done.stderr
        return done.stdout, done.stderr.splitlines()

    without = run("tally", path, "--json", "--no-cache")
    assert not cache_folder.exists()
    assert run("tally", path, "--json") == without
    (spoilt, *_) = kept = sorted(entries(Cache(cache_folder)))
    spoilt.write_bytes(b"")
    answer, notes = run("tally", path, "--json")
    assert answer == without[0]
    (note,) = set(notes) - set(without[1])
    assert note == f"Note: an entry of the cache was damaged and is made anew ({spoilt})"
    assert sorted(entries(Cache(cache_folder))) == kept


@pytest.mark.parametrize(
    "arguments",
    [("report", "--out", "x"), ("tally",), ("regions", "--out", "x"), ("check",), ("where",)],
)
def test_every_command_that_lays_footprints_has_a_cache_unless_told_otherwise(
    monkeypatch: pytest.MonkeyPatch, arguments: tuple[str, ...]
) -> None:
    made: list[Path] = []

    class Watched(Cache):
        def __init__(self, folder: Path) -> None:
            super().__init__(folder)
            made.append(folder)
            self.notes.append("watched")

    monkeypatch.setattr(cache_module, "Cache", Watched)
    command, *options = arguments
    place = ["1", "2"] if command == "where" else []
    for more, count in ((["--no-cache"], 0), ([], 1)):
        done = CliRunner().invoke(app, [command, "none.toml", *place, *options, *more])
        assert done.exit_code == 2
        assert "none.toml" in done.stderr
        assert len(made) == count
        assert ("Note: watched" in done.stderr) == bool(count)


def test_python_keeps_nothing_unless_asked(tmp_path: Path, cache_folder: Path) -> None:
    path = write_campaign(tmp_path / "night")[0]
    without = Campaign.read(path).coverage()
    assert not cache_folder.exists()
    assert Campaign.read(path, Cache(cache_folder)).coverage() == without
    assert entries(Cache(cache_folder))
