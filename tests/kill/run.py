"""Kill runs at random moments and look at what is left: ``python tests/kill/run.py --kills 50``.

Two campaigns that differ in every number are reported into one folder in turn. A run is
killed (SIGKILL) at a random moment of its usual length or, every other time, just before
it moves a random file into place. Afterwards every file in the folder must be whole, of
the one campaign or the other, every entry of the cache sound, and the next run right.
"""

from __future__ import annotations

import argparse
import os
import random
import shutil
import signal
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import pytest
from quick_outputs import quick_renderers
from skytally import account, outputs  # noqa: F401 - imported once, for every run
from skytally.cache import Cache
from skytally.cli import app
from skytally.code_hash import code_sha256
from skytally.scaffold import write_campaign

STEPS = 12  # files that a run moves into place, or more

Tree = dict[str, bytes]


def tree(folder: Path) -> Tree:
    """Every file that a reader would look at; staging folders are hidden."""
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and ".skytally-" not in path.as_posix()
    }


def start(campaign: Path, out: Path, last_step: int | None = None) -> int:
    """Report in a process of its own, which kills itself before it moves a certain file."""
    child = os.fork()
    if child:
        return child
    quiet = os.open(os.devnull, os.O_WRONLY)
    os.dup2(quiet, 1)
    os.dup2(quiet, 2)
    if last_step is not None:
        die_at(last_step)
    try:
        app(["report", str(campaign), "--out", str(out)])
    except SystemExit as leaving:
        os._exit(int(leaving.code or 0))
    os._exit(99)


def die_at(step: int) -> None:
    """Kill this process before so many files have moved within the output folder."""
    move: Callable[[Path | str, Path | str], None] = os.replace
    moved = 0

    def replace(source: Path | str, target: Path | str) -> None:
        nonlocal moved
        if ".skytally-" in str(source):
            moved += 1
            if moved > step:
                os.kill(os.getpid(), signal.SIGKILL)
        move(source, target)

    os.replace = replace  # type: ignore[assignment]


def ended(child: int) -> int:
    """Wait for a process; return its exit code, negative for a signal."""
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


def is_whole(found: Tree, whole: list[Tree]) -> bool:
    """Tell whether each file is, to the last byte, that of one campaign or another."""
    return all(any(data == one.get(name) for one in whole) for name, data in found.items())


def sound_cache(folder: Path) -> bool:
    """Tell whether every entry can be read."""
    cache = Cache(folder)
    keys = [path.stem for path in folder.glob("*.kept")]
    return all(cache.fetch(key) is not None for key in keys) and not cache.notes


def kill_runs(kills: int, base: Path, seed: int) -> Counter[str]:
    """Kill so many runs; return what was found."""
    rng = random.Random(seed)
    cache = Path(os.environ["SKYTALLY_CACHE"])
    campaigns = [write_campaign(base / name)[0] for name in ("one", "other")]
    text = campaigns[1].read_text()
    campaigns[1].write_text(text.replace("[event]\nname", "[event]\n# the other\nname", 1))
    assert campaigns[1].read_text() != text
    out, whole, spent = base / "out", [], []
    for campaign in campaigns:
        began = time.monotonic()
        assert ended(start(campaign, out)) == 0
        spent.append(time.monotonic() - began)
        whole.append(tree(out))
    assert whole[0] != whole[1]
    counts: Counter[str] = Counter()
    while counts["killed"] < kills:
        which = rng.randrange(2)
        counts["runs"] += 1
        if rng.random() < 0.5:
            shutil.rmtree(cache, ignore_errors=True)
        if rng.random() < 0.2:
            shutil.rmtree(out, ignore_errors=True)
        if counts["runs"] % 2:
            child = start(campaigns[which], out)
            time.sleep(rng.uniform(0, max(spent)))
            os.kill(child, signal.SIGKILL)
        else:
            child = start(campaigns[which], out, rng.randrange(STEPS))
        code = ended(child)
        counts["killed"] += code == -signal.SIGKILL
        counts["failed"] += code not in (0, -signal.SIGKILL)
        found = tree(out)
        counts["half-written"] += not is_whole(found, whole)
        counts["of both runs"] += not any(found == one for one in (*whole, {}))
        counts["corrupt cache"] += not sound_cache(cache)
        if counts["runs"] % 5 == 0:
            which = rng.randrange(2)
            counts["next runs"] += 1
            code = ended(start(campaigns[which], out))
            left = [name for name in os.listdir(out) + os.listdir(base) if "skytally-" in name]
            counts["next wrong"] += code != 0 or tree(out) != whole[which] or bool(left)
    return counts


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--seed", type=int, default=7)
    parser.add_argument("--quick", action="store_true", help="without figures, page and PDF")
    options = parser.parse_args()
    code_sha256()  # remembered, so that all runs are of one code even if it is edited meanwhile
    os.environ["SOURCE_DATE_EPOCH"] = "1931212800"
    with tempfile.TemporaryDirectory() as base, pytest.MonkeyPatch.context() as patch:
        os.environ["SKYTALLY_CACHE"] = f"{base}/cache"
        if options.quick:
            quick_renderers(patch)
        counts = kill_runs(options.kills, Path(base), options.seed)
    bad = counts["half-written"] + counts["corrupt cache"] + counts["next wrong"] + counts["failed"]
    print(
        f"{counts['killed']} runs killed, {counts['half-written']} folders with a half-written "
        f"file, {counts['of both runs']} with files of two runs, {counts['corrupt cache']} corrupt "
        f"caches, {counts['next wrong']} of {counts['next runs']} next runs wrong, "
        f"{counts['failed']} runs failed"
    )
    return int(bad > 0)


if __name__ == "__main__":
    sys.exit(main())
