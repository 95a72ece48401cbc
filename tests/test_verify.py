"""``skytally verify``: what changed since a folder was written, and why.

Nothing here has an outside source: each test changes one thing by hand and asks
whether that very thing is named.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from pathlib import Path

import pytest
from astropy.io import fits
from astropy.table import Table
from quick_outputs import quick_renderers
from skytally import manifest as manifest_module
from skytally import verify as verify_module
from skytally.account import account
from skytally.campaign import load_campaign
from skytally.changes import compare
from skytally.circular import render_circular
from skytally.cli import app
from skytally.errors import InputError
from skytally.leftover import left_overs
from skytally.outputs import write_outputs, write_regions
from skytally.serialise import to_dict, to_json
from skytally.verify import verify
from typer.testing import CliRunner

EXAMPLE = Path(__file__).parent.parent / "examples" / "one-telescope"


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """The one-telescope example and its report, made once."""
    base = tmp_path_factory.mktemp("verify")
    shutil.copytree(EXAMPLE, base / "night", ignore=shutil.ignore_patterns("report"))
    with pytest.MonkeyPatch.context() as patch:
        quick_renderers(patch)
        loaded = load_campaign(base / "night" / "campaign.toml")
        write_outputs(account(loaded), base / "out", campaign=base / "night" / "campaign.toml")
    return base


@pytest.fixture
def night(written, tmp_path):
    """A copy of both, to be changed; the way from the one to the other is the same."""
    shutil.copytree(written, tmp_path / "copy")
    return tmp_path / "copy"


def change(path, old, new):
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new, 1))


def manifest_of(night):
    return json.loads((night / "out" / "manifest.json").read_text())


def names(verdict):
    return {(reason.kind, reason.name) for reason in verdict.reasons}


def test_an_untouched_folder_verifies_wherever_it_is_moved(night):
    verdict = verify(night / "out")
    assert verdict.same
    assert (verdict.changes, verdict.reasons, verdict.rounded) == ((), (), 0)
    assert verdict.fingerprint == verdict.fingerprint_now == manifest_of(night)["fingerprint"]
    assert verdict.compared > 300


def test_the_manifest_says_all_that_the_numbers_rest_on(night):
    found = manifest_of(night)
    read = {(item["role"], item["path"]): item["sha256"] for item in found["inputs"]}
    for role, name in (("campaign", "campaign.toml"), ("log", "wren.csv")):
        data = (night / "night" / name).read_bytes()
        assert read[role, name] == hashlib.sha256(data).hexdigest()
    # Of the libraries, those that we ask for, and those that these stand on.
    assert {"python", "numpy", "astropy", "pyerfa", "scipy", "typer", "rich"} <= set(
        found["libraries"]
    )
    assert found["seed"] is None
    low, high = found["working_orders"]["Wren"]
    assert 10 <= low <= high <= 18
    assert found["campaign"] == "../night/campaign.toml"
    assert found["settings"]["significance"] == 5.0
    assert set(found["results"]["parts"]) >= {"rows", "maps", "exposures", "findings"}


def test_every_output_carries_the_fingerprint(night):
    short = manifest_of(night)["fingerprint"]
    out = night / "out"
    assert json.loads((out / "tally.json").read_text())["fingerprint"] == short
    assert Table.read(out / "tally.ecsv", format="ascii.ecsv").meta["fingerprint"] == short
    for name in ("circular.txt", "circular-short.txt", "circulars/wren.txt"):
        assert f"fingerprint {short}" in " ".join((out / name).read_text().split())
    for name in ("all", "wren"):
        assert fits.getheader(out / "regions" / f"{name}.fits", 1)["TALLYID"] == short


def test_page_and_paper_and_left_over_maps_carry_the_fingerprint(night):
    from skytally.figures import sketch_figures
    from skytally.report import render_html, render_paper

    loaded = load_campaign(night / "night" / "campaign.toml")
    results = account(loaded)
    short = results.identity.fingerprint
    figures = {name: sketch.draw() for name, sketch in sketch_figures(results).items()}
    assert short in render_html(results, figures, None)
    assert short in render_paper(results, sketch_figures(results), None)
    from skytally.account import lay_coverage

    left = left_overs(loaded, lay_coverage(loaded), loaded.map(None))
    out = night / "regions-out"
    write_regions(results, out, left, night / "night" / "campaign.toml")
    assert fits.getheader(out / "left-over" / "coverage.fits.gz", 1)["TALLYID"] == short
    verdict = verify(out)
    assert verdict.same
    assert verdict.changes is None  # no tally.json to tell single numbers from


def test_the_fingerprint_is_of_inputs_settings_and_numbers_alone(night):
    """It does not change with the folder, and does with a byte of a log that moves no number."""
    results = account(load_campaign(night / "night" / "campaign.toml"))
    before = manifest_of(night)["fingerprint"]
    assert results.identity.fingerprint == before
    log = night / "night" / "wren.csv"
    log.write_text(log.read_text() + "\n")
    verdict = verify(night / "out")
    assert verdict.fingerprint_now != before
    assert verdict.same_numbers
    assert names(verdict) == {("input", "wren.csv (log)")}


def test_a_changed_log_is_named_and_so_are_the_numbers_that_it_moved(night):
    change(night / "night" / "wren.csv", "202.20", "202.90")
    verdict = verify(night / "out")
    assert not verdict.same
    assert names(verdict) == {("input", "wren.csv (log)")}
    old = json.loads((night / "out" / "tally.json").read_text())["rows"][0]
    new = account(load_campaign(night / "night" / "campaign.toml")).row()
    changes = {(c.part, c.of, c.name): (c.before, c.after) for c in verdict.changes}
    assert changes["rows", "map 1 position", "probability"] == (
        old["probability"],
        new.probability,
    )
    assert ("rows", "map 1 position", "exposures") not in changes


def test_a_changed_setting_is_named(night):
    campaign = night / "night" / "campaign.toml"
    campaign.write_text(campaign.read_text() + "\n[settings]\nsignificance = 3.0\n")
    verdict = verify(night / "out")
    assert names(verdict) == {("input", "campaign.toml (campaign)"), ("setting", "significance")}
    # A limit at 3 sigma is deeper by 2.5 log10(5/3) magnitudes (background-limited).
    moved = [c for c in verdict.changes if c.name == "depth_median" and c.part == "rows"]
    assert moved
    for one in moved:
        assert one.after - one.before == pytest.approx(0.5546, abs=1e-4)
    assert not [c for c in verdict.changes if c.part == "rows" and c.name == "probability"]


def test_changed_code_and_libraries_are_named_and_move_nothing_by_themselves(night, monkeypatch):
    monkeypatch.setattr(verify_module, "code_sha256", lambda: "0" * 64)
    now = manifest_module.libraries() | {"numpy": "99.0", "quenna": "1.0"}
    monkeypatch.setattr(verify_module, "libraries", lambda: now)
    verdict = verify(night / "out")
    assert verdict.same
    assert {kind for kind, _ in names(verdict)} == {"code", "library"}
    assert {("library", "numpy"), ("library", "quenna")} <= names(verdict)
    monkeypatch.setattr(verify_module, "__version__", "9.9")
    assert ("code", "skytally") in names(verify(night / "out"))


def test_altered_missing_and_linked_outputs_are_named(night):
    out = night / "out"
    (out / "circular.txt").write_text("something else")
    (out / "report.pdf").unlink()
    target = night / "elsewhere.fits"
    (out / "regions" / "wren.fits").rename(target)
    (out / "regions" / "wren.fits").symlink_to(target)
    verdict = verify(out)
    assert verdict.same_numbers
    assert not verdict.same
    assert set(verdict.altered) == {"circular.txt", "regions/wren.fits"}
    assert verdict.missing == ("report.pdf",)


def test_an_altered_tally_is_no_witness(night):
    change(night / "out" / "tally.json", '"exposures": 10', '"exposures": 11')
    verdict = verify(night / "out")
    assert verdict.altered == ("tally.json",)
    assert verdict.changes is None
    assert verdict.same_numbers
    change(night / "night" / "wren.csv", "202.20", "202.90")
    assert "rows" in verify(night / "out").changed_parts


def test_nothing_is_written(night):
    def state():
        return {p: (p.stat().st_mtime_ns, p.read_bytes()) for p in night.rglob("*") if p.is_file()}

    before = state()
    verify(night / "out")
    assert state() == before


# --- what cannot be verified ------------------------------------------------------------


def fails(night, match, **more):
    with pytest.raises(InputError, match=match) as caught:
        verify(night / "out", **more)
    assert caught.value.exit_code == 2


def test_a_moved_campaign_is_named_by_hand(night):
    (night / "night").rename(night / "moved")
    fails(night, "--campaign")
    assert verify(night / "out", night / "moved" / "campaign.toml").same


def test_missing_inputs(night):
    (night / "night" / "wren.csv").unlink()
    fails(night, r"wren\.csv")
    fails(night, "campaign", campaign=night / "nowhere.toml")


def test_folders_that_are_none_of_ours(night, tmp_path):
    for folder in (tmp_path / "nowhere", tmp_path, night / "night" / "campaign.toml"):
        with pytest.raises(InputError, match=r"folder"):
            verify(folder)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "\0\0",
        "[]",
        "{}",
        "[" * 100_000,
        '{"format": "skytally/manifest"}',
        '{"format": "skytally/manifest", "format_version": 99}',
        '{"format": ' + "9" * 5000 + "}",
    ],
)
def test_broken_manifests(night, text):
    (night / "out" / "manifest.json").write_text(text)
    fails(night, "not as skytally wrote it")


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("fingerprint", "0" * 12),
        ("fingerprint", None),
        ("settings", {"significance": 3.0}),
        ("settings", {"significance": float("nan")}),
        ("inputs", []),
        ("inputs", [{"role": "log", "path": 3, "sha256": "x"}]),
        ("results", {"sha256": "0" * 64, "parts": {}}),
        ("outputs", 17),
        ("libraries", {"numpy": ["1"]}),
        ("command", "rm -rf"),
        ("campaign", "../" * 5000),
    ],
)
def test_a_manifest_that_contradicts_itself(night, key, value):
    path = night / "out" / "manifest.json"
    path.write_text(json.dumps(manifest_of(night) | {key: value}))
    fails(night, "not as skytally wrote it")


@pytest.mark.parametrize(
    "named", ["/etc/passwd", "https://quenna.example/campaign.toml", "a\0b", "../night", "x" * 4000]
)
def test_a_manifest_leads_to_no_other_place(night, named):
    path = night / "out" / "manifest.json"
    path.write_text(json.dumps(manifest_of(night) | {"campaign": named}))
    fails(night, "--campaign")


def test_a_manifest_cannot_have_other_files_hashed(night):
    path, found = night / "out" / "manifest.json", manifest_of(night)
    (night / "secret.txt").write_text("canary")
    digest = hashlib.sha256(b"canary").hexdigest()
    for name in ("../secret.txt", str(night / "secret.txt"), "regions/../../secret.txt"):
        found["outputs"].append({"path": name, "bytes": 6, "sha256": digest})
    path.write_text(json.dumps(found))
    assert len(verify(night / "out").missing) == 3


def test_numbers_that_the_manifest_did_not_hash_are_refused(night):
    """A tally.json whose file hash was forged into the manifest too."""
    tally, path = night / "out" / "tally.json", night / "out" / "manifest.json"
    for text in (
        "[]",
        "[" * 100_000,
        tally.read_text().replace('"exposures": 10', '"exposures": 9'),
    ):
        tally.write_text(text)
        found = manifest_of(night)
        for item in found["outputs"]:
            if item["path"] == "tally.json":
                item["sha256"] = hashlib.sha256(text.encode()).hexdigest()
        path.write_text(json.dumps(found))
        fails(night, "hashed")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes here")
def test_pipes_and_links_in_place_of_the_manifest(night):
    path = night / "out" / "manifest.json"
    path.rename(night / "manifest.json")
    os.mkfifo(path)
    fails(night, "regular file")
    path.unlink()
    path.symlink_to(night / "manifest.json")
    fails(night, "no manifest")


# --- comparing --------------------------------------------------------------------------


def test_rounding_is_told_from_change():
    before = {"rows": [{"map": "1", "a": 1.0, "b": 0.5, "c": 0.0, "d": 3, "e": None}]}
    after = {
        "rows": [{"map": "1", "a": 1.0 + 1e-12, "b": 0.5 + 1e-6, "c": 1e-15, "d": 4, "e": 1.0}]
    }
    found = compare(before, after, ["rows"])
    assert found.rounded == 2
    assert [(c.of, c.name, c.before) for c in found.changes] == [
        ("map 1", "b", 0.5),
        ("map 1", "d", 3),
        ("map 1", "e", None),
    ]


def test_entries_are_matched_by_what_they_are_of():
    def rows(*names):
        return {"rows": [{"map": "1", "telescope": n, "exposures": len(n)} for n in names]}

    found = compare(rows("Heron", "Wren"), rows("Wren", "Dunlin"), ["rows"])
    assert [(c.of, c.before, c.after) for c in found.changes] == [
        ("map 1, Heron", "there", "missing"),
        ("map 1, Dunlin", "missing", "there"),
    ]
    found = compare({"x": {"y": [1.0, 2.0]}}, {"x": {"y": [1.0, 2.5]}}, ["x"])
    assert [(c.name, c.after) for c in found.changes] == [("y[1]", 2.5)]
    found = compare({"x": {"y": [1.0]}}, {"x": {"y": [1.0, 2.5]}}, ["x"])
    assert [(c.before, c.after) for c in found.changes] == [("1 values", "2 values")]
    found = compare({"x": {"y": [1.0]}}, {"x": {"y": "\x1b"}}, ["x"])
    assert [(c.before, c.after) for c in found.changes] == [("there", "\x1b")]


def test_results_by_hand_have_no_fingerprint():
    from small_results import small_results

    results = small_results()
    assert to_dict(results)["fingerprint"] is None
    assert '"fingerprint": null' in to_json(results)
    assert "fingerprint" not in render_circular(results)


# --- the command ------------------------------------------------------------------------


def run(*words):
    return CliRunner().invoke(app, ["verify", *map(str, words)])


def test_the_command_answers_and_ends_as_it_should(night):
    done = run(night / "out")
    assert done.exit_code == 0
    assert "the numbers are the same" in " ".join(done.stdout.split())
    change(night / "night" / "wren.csv", "202.20", "202.90")
    (night / "out" / "circular.txt").write_text("\x1b[31m")
    done = run(night / "out")
    assert done.exit_code == 1
    text = " ".join(done.stdout.split())
    for wanted in ("changed", "Input changed: wren.csv (log)", "FILES ALTERED", "circular.txt"):
        assert wanted in text
    assert "\x1b" not in done.stdout
    found = json.loads(run(night / "out", "--json").stdout)
    assert found["format"] == "skytally/verify"
    assert not found["same"]
    assert len(found["changes"]) > 10
    done = run(night / "night")
    assert done.exit_code == 2
    assert done.stdout == ""
    assert "manifest.json" in done.stderr
