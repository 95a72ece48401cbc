"""Files that mean harm, reader by reader: sizes, counts, depth, links and searches without end."""

from __future__ import annotations

import ast
import gzip
import importlib
import io
import re
import socket
import time
import tracemalloc
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import skytally
from astropy.io import fits
from skytally import campaign_faults, fits_layout
from skytally.camera_io import read_mosaic
from skytally.campaign import load_campaign
from skytally.claims_io import read_claims
from skytally.cosmology import Cosmology
from skytally.dust_io import read_dust
from skytally.errors import CampaignError, InputError, LogError, SkytallyError, UsageError
from skytally.image_io import read_images
from skytally.light_curve_io import read_light_curve
from skytally.local_files import SIZE_VARIABLE
from skytally.log_io import LogOptions, read_log
from skytally.log_regions import resolve_regions
from skytally.moc import read_moc
from skytally.positions_io import read_positions
from skytally.skymap_io import read_skymap

MIB = 1 << 20
READERS: dict[str, Callable[[Path], Any]] = {
    "log": lambda path: read_log(path, "Heron"),
    "positions": lambda path: read_positions(path, Cosmology.named()),
    "claims": read_claims,
    "mosaic": read_mosaic,
    "light curve": read_light_curve,
    "map": read_skymap,
    "dust": read_dust,
    "moc": read_moc,
    "images": lambda path: read_images(str(path), "Heron"),
}
BINARY = {"map", "dust", "moc", "images"}


def _bomb(name: str, size: int) -> bytes:
    """A small gzip file that expands to this many bytes, of the kind that a reader takes."""
    card = b"SIMPLE  =                    T".ljust(80)
    start = card if name in BINARY else b"ra,dec,start\n"
    return gzip.compress(start + b" " * (size - len(start)), mtime=0)


@pytest.mark.parametrize("name", READERS)
def test_what_expands_beyond_the_limit_is_refused_and_costs_no_more(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv(SIZE_VARIABLE, "1")
    path = tmp_path / "bomb.fits.gz"
    path.write_bytes(_bomb(name, 32 * MIB))
    tracemalloc.start()
    try:
        with pytest.raises(InputError) as caught:
            READERS[name](path)
        _, peak = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert "limit of 1 MiB" in str(caught.value)
    assert SIZE_VARIABLE in str(caught.value)
    assert peak < 16 * MIB


@pytest.mark.parametrize("name", sorted(set(READERS) - {"images"}))
def test_the_environment_moves_the_limit_both_ways(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "large.txt"
    with path.open("wb") as stream:
        stream.truncate(2 * MIB)
    monkeypatch.setenv(SIZE_VARIABLE, "1")
    with pytest.raises(InputError, match=r"holds 2 MiB, more than the limit of 1 MiB"):
        READERS[name](path)
    monkeypatch.setenv(SIZE_VARIABLE, "3")
    with pytest.raises(InputError) as caught:
        READERS[name](path)
    assert "limit" not in str(caught.value)


@pytest.mark.parametrize("value", ["", "4 GiB", "0", "-1", "1e3", "9" * 30, "٣"])
def test_a_limit_is_a_whole_number_of_mebibytes(
    value: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.csv"
    path.write_text("ra,dec,start\n1,2,62939\n")
    monkeypatch.setenv(SIZE_VARIABLE, value)
    if value == "":
        assert len(read_log(path, "Heron")) == 1
        return
    with pytest.raises(UsageError, match=f"{SIZE_VARIABLE}=4096"):
        read_log(path, "Heron")


@pytest.mark.parametrize("scheme", ["http", "https", "ftp", "file", "s3", "data", "jar"])
@pytest.mark.parametrize("name", READERS)
def test_no_reader_takes_a_url(
    name: str, scheme: str, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    def no_socket(*_: object, **__: object) -> None:
        raise AssertionError("a socket was asked for")

    monkeypatch.setattr(socket, "socket", no_socket)
    monkeypatch.setattr(socket, "getaddrinfo", no_socket)
    there = tmp_path / "there.fits"
    there.write_bytes(b"")
    place = there if scheme == "file" else "/skytally.invalid/a.fits"
    with pytest.raises(InputError, match="URL"):
        READERS[name](f"{scheme}:/{place}")  # type: ignore[arg-type]


def _header(**cards: object) -> bytes:
    text = b"".join(str(fits.Card(k, v)).encode().ljust(80) for k, v in cards.items())
    text += b"END".ljust(80)
    return text + b" " * (-len(text) % 2880)


PRIMARY = _header(SIMPLE=True, BITPIX=8, NAXIS=0)
IMAGE: dict[str, object] = {
    **{"SIMPLE": True, "BITPIX": 8, "NAXIS": 2, "NAXIS1": 4, "NAXIS2": 4},
    **{"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CRVAL1": 150.0, "CRVAL2": -8.0},
    **{"CD1_1": -0.1, "CD1_2": 0.0, "CD2_1": 0.0, "CD2_2": 0.1, "CRPIX1": 2, "CRPIX2": 2},
    **{"DATE-OBS": "2031-03-14T19:30:00", "EXPTIME": 60.0, "FILTER": "r"},
}
TABLE = {
    **{"XTENSION": "BINTABLE", "BITPIX": 8, "NAXIS": 2, "NAXIS1": 8, "NAXIS2": 1},
    **{"PCOUNT": 0, "GCOUNT": 1, "TFIELDS": 1, "TTYPE1": "ra", "TFORM1": "D"},
}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"NAXIS": 1_000_000}, "NAXIS of a FITS header is 1000000, expected 0 to 999"),
        ({"NAXIS": -1}, "NAXIS of a FITS header is -1"),
        ({"NAXIS1": -8}, "NAXIS1 of a FITS header is -8"),
        ({"NAXIS2": 10**17}, "not whole"),
        ({"NAXIS1": 0, "NAXIS2": 10**12, "TFORM1": "0D"}, "1000000000000 rows of 0 bytes"),
        ({"NAXIS2": 10**18 - 1, "PCOUNT": 10**17}, "bytes of data"),
        ({"NAXIS2": 2.5}, "NAXIS2 of a FITS header is '2.5', no whole number"),
        ({"NAXIS2": "12"}, "no whole number"),
        ({"TFIELDS": 1_000_000}, "TFIELDS of a FITS header is 1000000, expected 0 to 999"),
        ({"PCOUNT": -(10**9)}, "PCOUNT"),
        ({"GCOUNT": 10**17, "NAXIS2": 10**9}, "bytes of data"),
        ({"BITPIX": 7}, "BITPIX"),
        ({"TUNIT1": "10**99999999 sr-1"}, "no unit that can be meant"),
        ({"TUNIT1": "((10**999)**999)**999"}, "no unit that can be meant"),
    ],
)
@pytest.mark.parametrize("name", ["log", "map", "moc", "dust"])
def test_sizes_that_a_header_states_are_not_believed(
    name: str, change: dict[str, object], words: str, tmp_path: Path
) -> None:
    path = tmp_path / "a.fits"
    path.write_bytes(PRIMARY + _header(**{**TABLE, **change}) + bytes(2880))
    with pytest.raises(InputError) as caught:
        READERS[name](path)
    assert words in str(caught.value)
    assert "copy or download it again" in str(caught.value)


def test_a_number_that_stands_twice_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.fits"
    header = _header(**TABLE).replace(b"END ", b"naxis2  = 99".ljust(80) + b"END ")[:2880]
    path.write_bytes(PRIMARY + header + bytes(2880))
    with pytest.raises(LogError, match="NAXIS2 of a FITS header stands twice"):
        read_log(path, "Heron")


def test_cells_that_share_their_bytes_are_refused(tmp_path: Path) -> None:
    """A heap of 1 MB, which each of 1,000 rows claims for its own: 1 GB of text."""
    path = tmp_path / "a.fits"
    count, heap = 1000, 10**6
    cards = {**TABLE, "NAXIS2": count, "PCOUNT": heap, "TTYPE1": "region", "TFORM1": "PA"}
    rows = np.array([[heap, 0]] * count, dtype=">i4").tobytes()
    body = rows + b"x" * heap
    path.write_bytes(PRIMARY + _header(**cards) + body + bytes(-len(body) % 2880))
    with pytest.raises(LogError, match="variable length state 1000000000 bytes"):
        read_log(path, "Heron")


def test_many_headers_and_long_ones_are_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "a.fits"
    monkeypatch.setattr(fits_layout, "HDU_LIMIT", 3)
    image = _header(XTENSION="IMAGE", BITPIX=8, NAXIS=0, PCOUNT=0, GCOUNT=1)
    path.write_bytes(PRIMARY + image * 3)
    with pytest.raises(InputError, match="more than 3 headers"):
        read_skymap(path)
    monkeypatch.setattr(fits_layout, "HEADER_LIMIT_BYTES", MIB)
    path.write_bytes(PRIMARY[:160] + b"COMMENT ".ljust(80) * 20_000)
    with pytest.raises(InputError, match="does not end within 1 MiB"):
        read_skymap(path)
    with pytest.raises(LogError, match="does not end within 1 MiB"):
        read_images("a.fits", "Heron", base=tmp_path)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"A_ORDER": 20_000, "B_ORDER": 20_000}, "A_ORDER is 20000, expected 0 to 9"),
        ({"CTYPE1": "TLON-CAR", "CTYPE2": "TLAT-CAR"}, "positions in the frame"),
        ({"CTYPE1": "RA---TAN", "EQUINOX": 1e300, "RADESYS": "FK5"}, "solve the astrometry"),
        ({"NAXIS": 999}, "solve the astrometry"),
    ],
)
def test_image_headers_that_ask_for_too_much(
    change: dict[str, object], words: str, tmp_path: Path
) -> None:
    cards = IMAGE
    good = tmp_path / "good.fits"
    good.write_bytes(_header(**cards) + bytes(2880))
    (tmp_path / "hostile.fits").write_bytes(_header(**{**cards, **change}) + bytes(2880))
    log = read_images("*.fits", "Heron", base=tmp_path)
    assert log.exposure.tolist() == ["good.fits"]
    assert words in log.set_aside[0].detail


def test_what_the_library_says_of_a_header_is_not_printed(
    tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    """Of distortions that no CTYPE names it tells on standard output, where data goes."""
    cards = {**IMAGE, "A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-6, "B_0_2": 1e-6}
    (tmp_path / "a.fits").write_bytes(_header(**cards) + bytes(2880))
    assert len(read_images("a.fits", "Heron", base=tmp_path)) == 1
    assert capfd.readouterr() == ("", "")


def _log(path: Path, text: str) -> Any:
    path.write_text(text)
    return read_log(path, "Heron")


def test_a_million_columns(tmp_path: Path) -> None:
    with pytest.raises(LogError, match="1,000,000 columns, expected at most 2,000"):
        _log(tmp_path / "a.csv", ",".join(["ra"] * 10**6) + "\n1,2\n")


def test_a_cell_of_ten_megabytes_costs_its_row_alone(tmp_path: Path) -> None:
    long = "x" * 10_000_000
    log = _log(tmp_path / "a.csv", f'exposure,ra,dec,start\n"{long}",1,2,62939\nb,1,2,62939\n')
    assert log.exposure.tolist() == ["b"]
    assert "1100000 characters" in log.set_aside[0].detail
    assert len(log.set_aside[0].detail) < 300


def test_more_lines_than_memory_holds(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("skytally.table_io._ROW_LIMIT", 1000)
    with pytest.raises(LogError, match=r"2,000 rows, expected at most 1,000"):
        _log(tmp_path / "a.csv", "ra,dec,start" + "\n" * 2000)


ECSV = "# %ECSV 1.0\n# ---\n{}\nra dec start\n1 2 62939\n"


@pytest.mark.parametrize(
    ("header", "words"),
    [
        (  # nine levels of ten: a billion words of one
            "# a0: &a0 [x]\n"
            + "\n".join(f"# a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 10)}]" for i in range(1, 10))
            + "\n# datatype: [{name: *a9}]",
            "refers from one place to another",
        ),
        ("# datatype: [{name: !!python/object/apply:os.getcwd []}]", "names others"),
        ("# datatype: [{name: [ra]}]", "no text"),
        ("# datatype: " + "[" * 5000, "no YAML"),
        ("# datatype: [{name: ra}]\n# meta: " + "x" * 300_000, "more than 262144 characters"),
    ],
)
def test_an_ecsv_header_is_plain_data(header: str, words: str, tmp_path: Path) -> None:
    with pytest.raises(LogError) as caught:
        _log(tmp_path / "a.ecsv", ECSV.format(header))
    assert words in str(caught.value)


def test_a_power_in_a_unit_of_a_votable_is_not_worked_out(tmp_path: Path) -> None:
    field = '<FIELD name="ra" datatype="double" unit="10**99999999"/>'
    with pytest.raises(LogError, match="states the unit"):
        _log(tmp_path / "a.vot", f"<VOTABLE><RESOURCE><TABLE>{field}</TABLE></RESOURCE></VOTABLE>")


@pytest.mark.parametrize("attribute", ['nrows="999999999999"', 'nrows="6000000"'])
def test_counts_of_a_votable_are_not_believed(attribute: str, tmp_path: Path) -> None:
    text = f"<VOTABLE><RESOURCE><TABLE {attribute}></TABLE></RESOURCE></VOTABLE>"
    with pytest.raises(LogError, match="nrows"):
        _log(tmp_path / "a.vot", text)
    text = '<VOTABLE><RESOURCE><TABLE><FIELD arraysize="9999x9999"/></TABLE></RESOURCE></VOTABLE>'
    with pytest.raises(LogError, match="arraysize"):
        _log(tmp_path / "a.vot", text)


@pytest.mark.parametrize(
    "text",
    [
        "a = " + "[" * 100_000,
        "a = " + "[" * 400 + "]" * 400,
        ".".join(["a"] * 100_000) + " = 1",
        "[extinction]\ncoefficients.r" + ".a" * 50_000 + " = 1",
        "[event]\nname = 0x" + "f" * 100_000,
        "[event]\nname = " + "9" * 100_000,
        "[extinction]\ncoefficients = { r = 0x" + "f" * 10_000 + " }",
        '["' + "('" * 50_000 + '"]\n["' + "('" * 50_000 + '"]',
        "\n".join(f"key{i} = 1" for i in range(20_000)),
        "[event]\n" + "\n".join(f"key{i} = 1" for i in range(20_000)),
        "[[map]]\n" * 20_000,
    ],
    ids=range(11),
)
def test_a_campaign_file_without_end(text: str, tmp_path: Path) -> None:
    path = tmp_path / "campaign.toml"
    path.write_text(text)
    with pytest.raises(CampaignError) as caught:
        load_campaign(path)
    assert len(str(caught.value)) < 100_000


def test_a_log_reaches_mocs_of_the_campaign_and_no_others(tmp_path: Path) -> None:
    campaign = tmp_path / "night"
    for place in ("night/logs", "night/mocs", "elsewhere"):
        (tmp_path / place).mkdir(parents=True)
        (tmp_path / place / "a.json").write_text('{"3": [1]}')
    (campaign / "logs/link.json").symlink_to(tmp_path / "elsewhere/a.json")
    (campaign / "logs/loop.json").symlink_to(campaign / "logs/loop.json")
    cells = {
        **dict.fromkeys(("a.json", "../mocs/a.json", str(campaign / "mocs/a.json")), True),
        **dict.fromkeys(("../../elsewhere/a.json", str(tmp_path / "elsewhere/a.json")), False),
        **dict.fromkeys(("link.json", "loop.json", "../logs/../../elsewhere/a.json"), False),
    }
    rows = (f"62939.{i},{cell}" for i, cell in enumerate(cells))
    log = _log(campaign / "logs/a.csv", "\n".join(["start,region", *rows]))
    used, shapes, inputs = resolve_regions(log, campaign / "logs", campaign)
    assert set(used.region) == {cell for cell, fine in cells.items() if fine}
    assert set(shapes) == {path for _, path, _ in inputs} == set(used.region)
    assert sum("outside the folders" in row.detail for row in used.set_aside) == 4


def test_names_with_hidden_characters_are_shown_with_a_mark(tmp_path: Path) -> None:
    log = _log(
        tmp_path / "a.csv",
        "exposure,ra,dec,start,band\na\u202eb,1,2,62939,r\u200b\n\x1b[2Jc,1,2,62940,r\n",
    )
    assert log.exposure.tolist() == ["a\ufffdb", "\ufffd[2Jc"]
    assert log.band.tolist() == ["r\ufffd", "r"]
    text = "exposure,ra,dec,date-\u2066obs (\u2067)\na,1,2,62939\nb,1,2,x\nc,1,2,62940\n"
    (tmp_path / "b.csv").write_text(text)
    columns = {"start": "date-\u2066obs (\u2067)"}
    aside = read_log(tmp_path / "b.csv", "Heron", LogOptions(columns=columns)).set_aside[0]
    assert aside.column == "date-\ufffdobs (\ufffd)"
    assert aside.detail.isprintable()


def test_no_error_of_ours_steers_a_terminal() -> None:
    fault = InputError("a\x1b[2Jb\u202e", file="c\x07", row=1, column="d\n\u2066", remedy="e\r.")
    assert str(fault) == "c?, row 1, column 'd\\n\\u2066': a?[2Jb?. e?."


def _sources() -> Iterator[tuple[Path, ast.AST]]:
    for path in sorted(Path(skytally.__file__).parent.glob("*.py")):
        yield path, ast.parse(path.read_text("utf-8"))


def test_nothing_in_the_package_runs_what_it_reads() -> None:
    """No pickles, no evaluation, no shell: neither imported nor asked for."""
    modules = {"pickle", "cPickle", "dill", "shelve", "marshal", "joblib", "code"}
    for path, tree in _sources():
        for node in ast.walk(tree):
            if isinstance(node, ast.Import | ast.ImportFrom):
                names = {alias.name for alias in node.names} | {getattr(node, "module", "")}
                assert not names & modules, path
            elif isinstance(node, ast.Call):
                words = ast.unparse(node.func)
                last = words.rpartition(".")[2]
                assert words not in {"eval", "exec", "compile", "os.system", "os.popen"}, path
                assert last not in {"load_module", "fromfile", "memmap"}, path
                assert words not in {"np.load", "numpy.load", "yaml.load", "torch.load"}, path
                for keyword in node.keywords:
                    is_refused = ast.unparse(keyword.value) == "False"
                    assert keyword.arg not in {"allow_pickle", "shell"} or is_refused, path


# Methods that try one place of a text, and those that try every one.
ONE_PLACE = {"match": "match", "fullmatch": "fullmatch"}
EVERY_PLACE = dict.fromkeys(("search", "sub", "split", "finditer", "findall"), "search")
METHODS = ONE_PLACE | EVERY_PLACE


def _searches() -> dict[str, tuple[str, re.Pattern[str]]]:
    """Every search of the package by module and line: how it looks, and for what."""
    found = {}
    for path, tree in _sources():
        module = importlib.import_module(f"skytally.{path.stem}")
        for node in ast.walk(tree):
            if not isinstance(node, ast.Call) or not isinstance(node.func, ast.Attribute):
                continue
            how = METHODS.get(node.func.attr)
            name = getattr(node.func.value, "id", "")
            pattern = getattr(module, name, None)
            if name == "re" and isinstance(node.args[0], ast.Constant):
                pattern = re.compile(node.args[0].value)
            if how and isinstance(pattern, re.Pattern):
                found[f"{path.stem}:{node.lineno}"] = how, pattern
    return found


# Characters that a text is known not to exceed before it is searched: cells, cards, claims,
# what a parser says; and of drawings, which hold no attributes but our own, a few numbers.
BOUNDS = {
    **{"log_cells": 80, "image_io": 80, "fits_layout": 80, "claims_io": 2000},
    **{"campaign_faults": 200, "figure_style": 200},
}
UNITS = (
    *(
        " ",
        "\t",
        "1",
        "9",
        "0",
        "a",
        "E",
        "(",
        "[",
        ")",
        "'",
        '"',
        ",",
        ".",
        "-",
        ":",
        "/",
        "_",
        "é",
    ),
    *(
        "1.",
        "1:",
        "('",
        "()",
        "', '",
        "a:",
        "1 ",
        " 1",
        ":1",
        "x ",
        "1/",
        "1-",
        "-.",
        "url(#",
        "E1",
    ),
)
HEADS = ("", "1", "(", "2031-03-14T05:30", "10:20", "(at line ", ":1:1: E1", "circle ")
TAILS = ("", "!", "x", ")", "\n", "\x00")


def _seconds(search: Callable[[str], object], text: str) -> float:
    best = float("inf")
    for _ in range(3):
        began = time.process_time()
        search(text)
        best = min(best, time.process_time() - began)
    return best


def _blow_up(search: Callable[[str], object], bound: int) -> str | None:
    """Name a text for which twice the length takes much more than twice the time."""
    size = bound // 2
    for unit in UNITS:
        for head in HEADS:
            for tail in TAILS:
                short = head + unit * (size // len(unit)) + tail
                long = head + unit * (2 * size // len(unit)) + tail
                began = time.process_time()
                search(long)
                # Most take microseconds, which say nothing.
                if time.process_time() - began < 0.02:
                    continue
                if _seconds(search, long) > 3 * _seconds(search, short):
                    return f"{head!r} + {unit!r} * n + {tail!r}"
    return None


_searches_found = _searches()


@pytest.mark.parametrize("place", _searches_found)
def test_no_search_takes_more_than_the_length_of_its_text(place: str) -> None:
    how, pattern = _searches_found[place]
    if isinstance(pattern.pattern, bytes):
        pattern = re.compile(pattern.pattern.decode(), pattern.flags)
    # The key of a campaign is searched for in the whole file.
    whole = pattern is campaign_faults._LONG_KEY
    bound = 8000 if whole else BOUNDS.get(place.partition(":")[0], 8000)
    assert _blow_up(getattr(pattern, how), bound) is None


@pytest.mark.parametrize(
    "pattern", [r"\s*[(\[]([^()\[\]]*)[)\]]\s*$", r"^[0-9]+\.?[0-9]*$", r"^(a|aa)*b"]
)
def test_a_search_that_blows_up_is_found(pattern: str) -> None:
    """The first two once stood here; the third is the textbook's, on a shorter text."""
    bound = 30 if "aa" in pattern else 8000
    assert _blow_up(re.compile(pattern).search, bound) is not None


def test_a_long_word_for_a_number_is_refused_in_its_length(tmp_path: Path) -> None:
    from skytally.region_text import parse_region

    for word in ("1" * 200_000 + "x", "(" * 200_000, " " * 200_000 + "(", "'" * 200_001):
        with pytest.raises(SkytallyError):
            parse_region(f"circle {word} 2 3")
    stream = io.StringIO()
    stream.write("exposure,ra,dec,start,x(" + " " * 500_000 + "y\nb,1,2,62939,\n")
    assert len(_log(tmp_path / "a.csv", stream.getvalue())) == 1
