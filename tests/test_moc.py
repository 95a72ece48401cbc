"""MOC files and texts, against the standard's own strings and an independent library."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given, settings
from hypothesis import strategies as st
from mocpy import MOC
from skytally.errors import OutputError, RegionError
from skytally.moc import from_mocpy, parse_moc_ascii, read_moc, to_ascii, to_mocpy, write_moc
from skytally.spans import LINE_END, Spans, cell_to_span

# The example string of the MOC 2.0 recommendation, section 4.3.2 (from memory),
# and the same with the commas of MOC 1.1.
STANDARD = "1/1-2 4 2/12-14 21 23 25 8/"
COMMAS = "1/1-2,4 2/12-14,21,23,25 8/"
PROPERTY = settings(derandomize=True, deadline=None, max_examples=100)

spans_anywhere = st.lists(
    st.tuples(st.integers(0, LINE_END), st.one_of(st.integers(0, 100), st.integers(0, 1 << 55))),
    max_size=10,
).map(
    lambda pairs: Spans.from_intervals(
        np.array([a for a, _ in pairs], dtype=np.int64),
        np.array([min(a + b, LINE_END) for a, b in pairs], dtype=np.int64),
    )
)


def standard_region() -> Spans:
    return Spans.from_cells(
        np.array([1, 1, 1, 2, 2, 2, 2, 2, 2]), np.array([1, 2, 4, 12, 13, 14, 21, 23, 25])
    )


@pytest.fixture
def corners() -> Spans:
    """First and last cells of every order, no two of them touching."""
    order = np.arange(1, 30, dtype=np.int64)
    first = np.full(order.size, 1, dtype=np.int64)
    last = (np.int64(12) << (2 * order)) - 2
    return Spans.from_cells(np.append(order, order), np.append(first, last))


@pytest.mark.parametrize("text", [STANDARD, COMMAS, STANDARD.replace(" ", "\n"), f"  {STANDARD}\n"])
def test_the_standards_example_in_ascii(text: str, tmp_path: Path) -> None:
    assert parse_moc_ascii(text) == standard_region()
    file = tmp_path / "region.txt"
    file.write_text(text, encoding="utf-8-sig")
    assert read_moc(file) == standard_region()


def test_the_standards_example_against_mocpy() -> None:
    assert from_mocpy(MOC.from_string(STANDARD)) == standard_region()


def test_json_form(tmp_path: Path) -> None:
    file = tmp_path / "region.json"
    file.write_text('{"1": [1, 2, 4], "2": [12, 13, 14, 21, 23, 25], "8": []}')
    assert read_moc(file) == standard_region()
    file.write_text(MOC.from_string(STANDARD).to_string("json"))
    assert read_moc(file) == standard_region()


def test_empty_and_full_sky() -> None:
    assert parse_moc_ascii("0/0-11") == Spans.full()
    assert parse_moc_ascii("0/") == Spans.empty()
    assert to_ascii(Spans.full()) == "0/0-11"
    assert to_ascii(Spans.empty()) == "0/"


@PROPERTY
@given(spans_anywhere)
def test_ascii_round_trip(spans: Spans) -> None:
    assert parse_moc_ascii(to_ascii(spans)) == spans


@PROPERTY
@given(spans_anywhere)
def test_mocpy_round_trip_and_its_reading_of_our_text(spans: Spans) -> None:
    assert from_mocpy(to_mocpy(spans)) == spans
    assert from_mocpy(MOC.from_string(to_ascii(spans))) == spans


@pytest.mark.parametrize("name", ["corners", "full", "empty", "one"])
def test_fits_round_trip(name: str, corners: Spans, tmp_path: Path) -> None:
    spans = {
        "corners": corners,
        "full": Spans.full(),
        "empty": Spans.empty(),
        "one": Spans.from_cells(29, np.array([LINE_END - 1])),
    }[name]
    file = tmp_path / "region.fits"
    write_moc(spans, file)
    assert read_moc(file) == spans
    # Independent reader.
    assert from_mocpy(MOC.load(str(file))) == spans
    header = fits.getheader(file, 1)
    assert header["ORDERING"] == "NUNIQ"
    assert header["COORDSYS"] == "C"
    assert [p.name for p in tmp_path.iterdir()] == ["region.fits"]


@pytest.mark.parametrize("old", [False, True])
def test_fits_written_by_mocpy(old: bool, corners: Spans, tmp_path: Path) -> None:
    file = tmp_path / "region.fits"
    # RANGE ordering unless asked for the older NUNIQ.
    to_mocpy(corners).save(str(file), v1_compatible=old)
    assert fits.getheader(file, 1)["ORDERING"] == ("NUNIQ" if old else "RANGE")
    assert read_moc(file) == corners
    packed = tmp_path / "region.fits.gz"
    packed.write_bytes(gzip.compress(file.read_bytes()))
    assert read_moc(packed) == corners


def test_written_bytes_are_the_same_every_time(corners: Spans, tmp_path: Path) -> None:
    write_moc(corners, tmp_path / "a.fits")
    write_moc(corners, tmp_path / "b.fits")
    assert (tmp_path / "a.fits").read_bytes() == (tmp_path / "b.fits").read_bytes()


def test_nuniq_of_32_bits_and_overlapping_cells() -> None:
    # MOC 1.1 files use 32 bits up to order 13; a cell listed with its parent counts once.
    order, cell = np.array([1, 1, 0]), np.array([4, 5, 1])
    start, stop = cell_to_span(order, cell)
    assert Spans.from_intervals(start, stop) == Spans.from_cells(0, np.array([1]))


@pytest.mark.parametrize(
    ("text", "named"),
    [
        ("", "empty"),
        ("   \n", "empty"),
        ("hello sky", "hello"),
        ("1/1-2 junk", "junk"),
        ("12 13", "12"),
        ("1/48", "48"),
        ("0/12", "12"),
        ("30/1", "30"),
        ("1/3-1", "3-1"),
        ("1/1-", "1/1-"),
        ("/1", "/1"),
        ("1/-3", "1/-3"),
        ("s1/1", "s1/1"),
        ("t29/1 s1/1", "t29/1"),
        ("29/" + "9" * 5000, "digits"),
        ("99999999999999999999999999/", "digits"),
        ("[1, 2]", "[1"),
    ],
)
def test_ascii_that_is_no_moc(text: str, named: str, tmp_path: Path) -> None:
    with pytest.raises(RegionError) as caught:
        parse_moc_ascii(text)
    assert named in str(caught.value)
    assert caught.value.remedy
    file = tmp_path / "region.txt"
    file.write_text(text)
    with pytest.raises(RegionError, match=r"region\.txt"):
        read_moc(file)


@pytest.mark.parametrize(
    ("content", "named"),
    [
        ({"1": [48]}, "48"),
        ({"30": [1]}, "30"),
        ({"a": [1]}, "'a'"),
        ({"1": 3}, "'1'"),
        ({"1": [-1]}, "-1"),
        ({"1": [1.5]}, "1.5"),
        ({"1": ["2"]}, "'2'"),
        ({"1": [True]}, "True"),
        ({"t": {"1": [2]}}, "'t'"),
        ("{broken", "JSON"),
        ('{"1":' + "[" * 100_000, "JSON"),
    ],
)
def test_json_that_is_no_moc(content: object, named: str, tmp_path: Path) -> None:
    file = tmp_path / "region.json"
    file.write_text(content if isinstance(content, str) else json.dumps(content))
    with pytest.raises(RegionError) as caught:
        read_moc(file)
    assert named in str(caught.value)
    assert "region.json" in str(caught.value)


def moc_table(numbers: list[int], kind: str = "K", **header: object) -> fits.HDUList:
    column = fits.Column("UNIQ", kind, array=np.array(numbers))
    table = fits.BinTableHDU.from_columns([column])
    table.header.update(header)
    return fits.HDUList([fits.PrimaryHDU(), table])


@pytest.mark.parametrize(
    ("numbers", "kind", "header", "named"),
    [
        ([4], "K", {}, "none stated"),
        ([4], "K", {"ORDERING": "NESTED"}, "NESTED"),
        ([4], "K", {"ORDERING": "NUNIQ", "MOCDIM": "TIME"}, "TIME"),
        ([4], "K", {"ORDERING": "NUNIQ", "MOCDIM": "TIME.SPACE"}, "TIME.SPACE"),
        ([4], "K", {"ORDERING": "NUNIQ", "COORDSYS": "G"}, "'G'"),
        ([3], "K", {"ORDERING": "NUNIQ"}, "3"),
        ([-9, 4], "K", {"ORDERING": "NUNIQ"}, "-9"),
        ([16 << 58], "K", {"ORDERING": "NUNIQ"}, str(16 << 58)),
        ([4], "D", {"ORDERING": "NUNIQ"}, "float64"),
        ([1, 2, 3], "K", {"ORDERING": "RANGE"}, "odd count"),
        ([5, 0], "K", {"ORDERING": "RANGE"}, "from 5 to 0"),
        ([0, LINE_END + 1], "K", {"ORDERING": "RANGE"}, str(LINE_END + 1)),
        ([-1, 1], "K", {"ORDERING": "RANGE"}, "-1"),
    ],
)
def test_fits_that_is_no_moc_of_the_sky(
    numbers: list[int], kind: str, header: dict[str, object], named: str, tmp_path: Path
) -> None:
    file = tmp_path / "region.fits"
    moc_table(numbers, kind, **header).writeto(file)
    with pytest.raises(RegionError) as caught:
        read_moc(file)
    assert named in str(caught.value)
    assert "region.fits" in str(caught.value)
    assert caught.value.remedy


def test_a_column_of_32_bits(tmp_path: Path) -> None:
    file = tmp_path / "region.fits"
    moc_table([4, 5], "J", ORDERING="NUNIQ").writeto(file)
    assert read_moc(file) == Spans.from_cells(0, np.array([0, 1]))


def test_damaged_files(corners: Spans, tmp_path: Path) -> None:
    good = tmp_path / "good.fits"
    write_moc(corners, good)
    data = good.read_bytes()
    bad = tmp_path / "bad.fits"
    for content, word in (
        (data[:100], "headers cannot be read"),
        (data[:3000], "no table"),
        (data[:5800], "not whole"),
        (data[:5760], "not whole"),
        (gzip.compress(data, mtime=0)[:-40], "ends too early"),
        (b"\xff\xfe\x00binary", "neither FITS nor text"),
    ):
        bad.write_bytes(content)
        with pytest.raises(RegionError, match=word) as caught:
            read_moc(bad)
        assert "bad.fits" in str(caught.value)


def test_places_that_are_no_local_file(tmp_path: Path) -> None:
    for place, word in (
        ("http://127.0.0.1:9/moc.fits", "URL"),
        (tmp_path, "directory"),
        (tmp_path / "absent.fits", "no such file"),
    ):
        with pytest.raises(RegionError, match=word):
            read_moc(place)
    with pytest.raises(OutputError, match="cannot be written"):
        write_moc(Spans.full(), tmp_path / "absent" / "region.fits")


def test_only_a_mocpy_moc_is_taken() -> None:
    with pytest.raises(RegionError, match="str"):
        from_mocpy("1/1-2")
