"""The output folder: whole or not at all, ours replaced, nobody else's touched."""

from __future__ import annotations

import errno
import hashlib
import json
import os
from dataclasses import replace
from pathlib import Path

import pytest
from quick_outputs import no_pdf, quick_renderers
from skytally import outputs
from skytally.circular import render_circular
from skytally.errors import OutputError
from skytally.moc import read_moc
from skytally.outputs import file_stems, write_outputs, write_regions
from skytally.results import Results
from skytally.serialise import to_json
from small_results import renamed, small_results

EVERYTHING = {
    "report.html",
    "report.pdf",
    "circular.txt",
    "circular-short.txt",
    "circulars/heron.txt",
    "circulars/plover.txt",
    "tally.json",
    "tally.ecsv",
    "manifest.json",
    "regions/heron.fits",
    "regions/plover.fits",
    "regions/all.fits",
}


@pytest.fixture(autouse=True)
def _quick_renderers(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_renderers(monkeypatch)


def tree(folder: Path) -> dict[str, bytes]:
    return {
        p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()
    }


def test_all_files_appear_and_hold_what_the_results_say(tmp_path: Path) -> None:
    results = small_results()
    written = write_outputs(results, tmp_path / "deep" / "night")
    found = tree(tmp_path / "deep" / "night")
    assert found.keys() == EVERYTHING
    assert {p.relative_to(tmp_path / "deep/night").as_posix() for p in written} == EVERYTHING
    assert written[-1].name == "manifest.json"
    assert found["tally.json"].decode() == to_json(results)
    assert found["circular.txt"].decode("ascii") == render_circular(results)
    assert [p.name for p in tmp_path.iterdir()] == ["deep"]
    assert [p.name for p in (tmp_path / "deep").iterdir()] == ["night"]


def test_region_files_hold_the_covered_regions(tmp_path: Path) -> None:
    results = small_results()
    write_outputs(results, tmp_path / "night")
    heron, plover = results.sky.covered
    assert read_moc(tmp_path / "night/regions/heron.fits") == heron
    assert read_moc(tmp_path / "night/regions/plover.fits") == plover
    assert read_moc(tmp_path / "night/regions/all.fits") == heron | plover


def test_the_manifest_lists_every_other_file_with_its_hash(tmp_path: Path) -> None:
    write_outputs(small_results(), tmp_path / "night")
    found = tree(tmp_path / "night")
    manifest = json.loads(found.pop("manifest.json"))
    assert manifest["format"] == "skytally/manifest"
    assert manifest["software"]["name"] == "skytally"
    assert {"python", "numpy", "astropy", "mocpy"} <= manifest["libraries"].keys()
    assert [i["path"] for i in manifest["inputs"]] == ["campaign.toml", "logs/heron.csv"]
    assert manifest["settings"]["significance"] == 5.0
    listed = {o["path"]: (o["bytes"], o["sha256"]) for o in manifest["outputs"]}
    assert listed == {n: (len(d), hashlib.sha256(d).hexdigest()) for n, d in found.items()}


def test_the_same_results_give_the_same_bytes(tmp_path: Path) -> None:
    for name in ("a", "b"):
        write_outputs(small_results(), tmp_path / name)
    assert tree(tmp_path / "a") == tree(tmp_path / "b")


def test_our_own_files_are_replaced_stale_ones_go_and_foreign_ones_stay(tmp_path: Path) -> None:
    night = tmp_path / "night"
    write_outputs(small_results(), night)
    (night / "notes.txt").write_text("mine")
    (night / "regions" / "mine.fits").write_text("mine too")
    event = replace(small_results().event, name="Lantern 8")
    write_outputs(renamed(small_results(event=event), "Heron", "Dunlin"), night)
    found = tree(night)
    changed = (EVERYTHING - {"regions/plover.fits", "circulars/plover.txt"}) | {
        "regions/dunlin.fits",
        "circulars/dunlin.txt",
    }
    assert found.keys() == changed | {"notes.txt", "regions/mine.fits"}
    assert found["report.html"] == b"<p>Lantern 8</p>\n"
    assert (found["notes.txt"], found["regions/mine.fits"]) == (b"mine", b"mine too")


@pytest.mark.parametrize("name", ["report.html", "manifest.json", "regions/plover.fits"])
def test_a_foreign_file_of_the_same_name_stops_everything(tmp_path: Path, name: str) -> None:
    (tmp_path / "regions").mkdir()
    (tmp_path / name).write_text("{}")
    with pytest.raises(OutputError, match="did not write") as caught:
        write_outputs(small_results(), tmp_path)
    assert caught.value.exit_code == 3
    assert name in str(caught.value)
    assert "--out" in str(caught.value)
    assert tree(tmp_path) == {name: b"{}"}


def test_a_folder_or_link_in_a_file_s_place_is_foreign(tmp_path: Path) -> None:
    write_outputs(small_results(), tmp_path / "night")
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (tmp_path / "night/report.html").unlink()
    (tmp_path / "night/report.html").mkdir()
    with pytest.raises(OutputError, match=r"report\.html"):
        write_outputs(small_results(), tmp_path / "night")
    (tmp_path / "links").mkdir()
    (tmp_path / "links/regions").symlink_to(elsewhere)
    with pytest.raises(OutputError, match="regions"):
        write_outputs(small_results(), tmp_path / "links")
    assert list(elsewhere.iterdir()) == []
    assert [p.name for p in (tmp_path / "links").iterdir()] == ["regions"]


def test_a_tampered_manifest_cannot_make_us_touch_other_files(tmp_path: Path) -> None:
    night = tmp_path / "night"
    write_outputs(small_results(), night)
    (tmp_path / "victim.fits").write_text("mine")
    (night / "thesis.tex").write_text("mine")
    manifest = json.loads((night / "manifest.json").read_text())
    names = [
        "../victim.fits",
        "thesis.tex",
        "regions/../../victim.fits",
        str(tmp_path / "victim.fits"),
    ]
    manifest["outputs"] += [{"path": n, "bytes": 4, "sha256": ""} for n in names]
    (night / "manifest.json").write_text(json.dumps(manifest))
    write_outputs(small_results(), night)
    assert (tmp_path / "victim.fits").read_text() == "mine"
    assert (night / "thesis.tex").read_text() == "mine"


@pytest.mark.parametrize(
    "text", ["", "[]", '{"format": 3}', '{"format": "skytally/manifest"}', "\0"]
)
def test_an_unreadable_manifest_is_a_foreign_file(tmp_path: Path, text: str) -> None:
    (tmp_path / "manifest.json").write_text(text)
    with pytest.raises(OutputError, match=r"manifest\.json"):
        write_outputs(small_results(), tmp_path)
    assert tree(tmp_path) == {"manifest.json": text.encode()}


@pytest.mark.parametrize("existing", [False, True])
def test_a_failed_rendering_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, existing: bool
) -> None:
    night = tmp_path / "night"
    if existing:
        write_outputs(small_results(), night)
    before = tree(tmp_path)

    def fail(results: Results, figures: object, style: object) -> str:
        raise RuntimeError("broken template")

    monkeypatch.setattr(outputs, "render_html", fail)
    with pytest.raises(RuntimeError):
        write_outputs(small_results(), night)
    assert tree(tmp_path) == before
    assert night.exists() == existing
    assert not [p for p in tmp_path.rglob("*") if p.name.startswith(".skytally")]


def test_without_a_pdf_the_rest_is_written_and_no_old_pdf_stays(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_outputs(small_results(), tmp_path)

    quick_renderers(monkeypatch, no_pdf)
    with pytest.raises(OutputError, match="libpango"):
        write_outputs(small_results(), tmp_path)
    assert tree(tmp_path).keys() == EVERYTHING - {"report.pdf"}
    listed = json.loads((tmp_path / "manifest.json").read_text())["outputs"]
    assert {o["path"] for o in listed} == EVERYTHING - {"report.pdf", "manifest.json"}


@pytest.mark.parametrize("links", [True, False])
@pytest.mark.parametrize("step", range(8))
def test_a_move_that_fails_midway_brings_everything_back(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: int, links: bool
) -> None:
    write_outputs(small_results(), tmp_path)
    before = tree(tmp_path)
    move, moved = os.replace, []

    def fail(source: Path, target: Path) -> None:
        moved.append(target)
        if len(moved) == step + 1:
            raise OSError(errno.EIO, "Input/output error")
        move(source, target)

    def refuse(source: Path, target: Path) -> None:
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "replace", fail)
    if not links:
        monkeypatch.setattr(os, "link", refuse)
    event = replace(small_results().event, name="Lantern 8")
    with pytest.raises(OutputError, match="input/output error"):
        write_outputs(renamed(small_results(event=event), "Heron", "Dunlin"), tmp_path)
    assert tree(tmp_path) == before


def test_a_full_disk_is_named_with_a_remedy(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(path: Path, content: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(outputs, "_put", full)
    with pytest.raises(OutputError, match=r"no space left on device.*Free some space") as caught:
        write_outputs(small_results(), tmp_path / "night")
    assert str(tmp_path / "night") in str(caught.value)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("place", ["/proc/night", "/dev/null/night", "/dev/null", "x" * 300])
def test_a_place_that_cannot_be_written_is_an_output_error(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, place: str
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(OutputError, match="--out"):
        write_outputs(small_results(), place)
    assert list(tmp_path.iterdir()) == []


def test_region_files_alone_have_a_folder_of_their_own(tmp_path: Path) -> None:
    write_outputs(small_results(), tmp_path / "night")
    before = tree(tmp_path / "night")
    with pytest.raises(OutputError, match="skytally report"):
        write_regions(small_results(), tmp_path / "night")
    assert tree(tmp_path / "night") == before
    for names in (("Heron", "Plover"), ("Heron", "Dunlin")):
        write_regions(renamed(small_results(), *names), tmp_path / "regions")
    found = tree(tmp_path / "regions")
    assert found.keys() == {"heron.fits", "dunlin.fits", "all.fits", "manifest.json"}
    assert found["heron.fits"] == before["regions/heron.fits"]


def test_file_names_are_safe_and_differ_whatever_the_telescopes_are_called() -> None:
    names = [
        *("Heron", "HERON", "heron ", "../../etc/passwd", "/", "", "..", "all", "Con", "LPT1"),
        *("七", "Plöver", "a" * 300, "a" * 301, "Heron-2", "x\x00y", ".hidden", "manifest.json"),
    ]
    stems = file_stems(names)
    assert len(set(stems)) == len(names)
    assert stems[:3] == ("heron", "heron-2", "heron-3")
    assert stems[names.index("Plöver")] == "plover"
    for stem in stems:
        assert stem not in {"all", "con", "lpt1"}
        assert outputs._REGION_FILE.fullmatch(f"regions/{stem}.fits")


def test_progress_names_each_file_in_turn(tmp_path: Path) -> None:
    seen: list[tuple[str, float]] = []
    write_outputs(small_results(), tmp_path, lambda stage, done: seen.append((stage, done)))
    files = {stage.removeprefix("Writing ") for stage, _ in seen}
    named = {name.partition("/")[0] for name in EVERYTHING} - {"manifest.json"}
    assert files == named | {"Drawing the figures"}
    fractions = [done for _, done in seen]
    assert fractions == sorted(fractions)
    assert 0 <= fractions[0] < fractions[-1] < 1
