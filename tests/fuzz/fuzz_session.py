"""Runs cases, tells results and refusals from bugs, and keeps what it finds."""

from __future__ import annotations

import hashlib
import resource
import signal
import time
import traceback
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from random import Random
from types import FrameType
from typing import NoReturn

from fuzz_build import BUILDERS
from fuzz_mutate import mutate
from fuzz_targets import CORPUS, TARGETS, Target, seeds
from skytally.errors import SkytallyError

__all__ = [
    "FOUND",
    "Bug",
    "Counts",
    "case",
    "furnish",
    "keep",
    "run_case",
    "run_cases",
    "saved_cases",
]

FOUND = Path(__file__).parent / "found"
# Of processor time; a case takes a few thousandths of a second.
SECONDS_LIMIT = 5
# By which a few cases together may raise the most memory ever held.
MEMORY_LIMIT_BYTES = 256 << 20
WEIGHED = 16


class _TooLong(BaseException):
    """Ends a case that takes too long; no reader may catch it."""


@dataclass(frozen=True)
class Bug:
    """A case that ended in neither a result nor an error of ours."""

    target: str
    data: bytes
    seed: str
    what: str
    place: str


@dataclass
class Counts:
    """What became of the cases of one reader."""

    outcomes: Counter[str] = field(default_factory=Counter)
    bugs: list[Bug] = field(default_factory=list)


def case(target: str, seed: str) -> bytes:
    """Return the file of a case: a seed of the corpus spoilt, or one made from nothing."""
    rng = Random(seed)
    if rng.random() < 0.4:
        built = BUILDERS[target](rng)
        return mutate(rng, built, [built]) if rng.random() < 0.3 else built
    corpus = seeds(target)
    return mutate(rng, rng.choice(corpus), corpus)


def furnish(folder: Path) -> None:
    """Put the files there that campaigns and logs of the corpus name."""
    names = {
        "maps/first.fits": "map/ring.fits",
        "maps/dust.fits": "dust/ring.fits",
        "maps/moc.json": "moc/moc.json",
        "field.json": "moc/moc.json",
        "logs/heron.csv": "log/plain.csv",
        "cameras/heron.csv": "mosaic/camera.csv",
        "sources/ember.csv": "light_curve/ember.csv",
        "claims.csv": "claims/claims.csv",
        "frames/one.fits": "image/plain.fits",
    }
    for name, source in names.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes((CORPUS / source).read_bytes())


def run_case(target: Target, data: bytes, seed: str, folder: Path) -> Bug | str:
    """Give a file to a reader; return what came of it, or the bug.

    The seed also picks the options that it is read with.
    """
    path = folder / f"case{target.suffix}"
    path.write_bytes(data)
    try:
        with _bounded():
            target.read(path, Random(seed + "/options"))
    except SkytallyError as error:
        if _is_plain(str(error)):
            return "refused"
        return Bug(target.name, data, seed, "message with control characters", str(error))
    except (Exception, _TooLong) as error:
        return Bug(target.name, data, seed, f"{type(error).__name__}: {error}"[:200], _place(error))
    return "result"


def _peak_bytes() -> int:
    """Return the most memory that this process has held."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def _is_plain(message: str) -> bool:
    """Tell whether a message can be shown on a terminal as it is."""
    return all(c.isprintable() or c in "\n\u00a0" for c in message)


@contextmanager
def _bounded() -> Iterator[None]:
    def stop(number: int, frame: FrameType | None) -> NoReturn:
        raise _TooLong(f"more than {SECONDS_LIMIT} s")

    earlier = signal.signal(signal.SIGPROF, stop)
    signal.setitimer(signal.ITIMER_PROF, SECONDS_LIMIT)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)
        signal.signal(signal.SIGPROF, earlier)


def _place(error: BaseException) -> str:
    """Name our last line before the fault, and the line of the fault itself."""
    frames = traceback.extract_tb(error.__traceback__)
    ours = [x for x in frames if "skytally" in Path(x.filename).parts]
    names = [*ours[-1:], *frames[-1:]]
    return " < ".join(f"{Path(x.filename).name}:{x.lineno} {x.name}" for x in names)


def run_cases(
    counts: dict[str, int], seed: int, folder: Path, say: Callable[[str], None] | None = None
) -> dict[str, Counts]:
    """Run so many cases of each reader, each made from the seed, the reader and its number."""
    furnish(folder)
    found = {name: Counts() for name in counts}
    for name, count in counts.items():
        began = time.process_time()
        for first in range(0, count, WEIGHED):
            block = range(first, min(first + WEIGHED, count))
            before = _peak_bytes()
            outcomes = [_run_numbered(name, f"{seed}/{name}/{i}", folder) for i in block]
            grown = _peak_bytes() - before
            if grown > MEMORY_LIMIT_BYTES:
                what = f"one of {len(block)} cases took {grown >> 20} MiB"
                outcomes[0] = Bug(name, case(name, f"{seed}/{name}/{first}"), "", what, "memory")
            for number, outcome in zip(block, outcomes, strict=True):
                kind = outcome if isinstance(outcome, str) else "bug"
                found[name].outcomes[kind] += 1
                if isinstance(outcome, Bug):
                    found[name].bugs.append(outcome)
                    if say is not None:
                        say(f"{name}: {outcome.what} [{outcome.place}] {seed}/{name}/{number}")
        if say is not None and count:
            each = 1000 * (time.process_time() - began) / count
            say(f"{name}: {count} cases, {each:.1f} ms each")
    return found


def _run_numbered(name: str, label: str, folder: Path) -> Bug | str:
    return run_case(TARGETS[name], case(name, label), label, folder)


def keep(bug: Bug) -> Path:
    """Save the file of a bug among the pinned cases."""
    FOUND.mkdir(exist_ok=True)
    digest = hashlib.sha256(bug.data).hexdigest()[:12]
    path = FOUND / f"{bug.target}-{digest}{TARGETS[bug.target].suffix}"
    path.write_bytes(bug.data)
    return path


def saved_cases() -> list[Path]:
    """Return the files of bugs found earlier."""
    return sorted(FOUND.iterdir()) if FOUND.is_dir() else []
