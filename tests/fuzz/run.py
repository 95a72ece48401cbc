"""Fuzz the readers: ``python tests/fuzz/run.py --cases 200000``.

Prints how many cases ended in a result, in a refusal with a message of ours, and in
anything else, which is a bug: its file is kept in ``tests/fuzz/found``, where the
tests replay it.
"""

from __future__ import annotations

import argparse
import resource
import sys
import tempfile
import warnings
from pathlib import Path

from fuzz_session import keep, run_cases
from fuzz_targets import TARGETS

ADDRESS_LIMIT_BYTES = 6 << 30


def main() -> int:
    """Run what the command line asks for; 1 where there are bugs."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--cases", type=int, default=2000, help="cases in all")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--reader", action="append", choices=list(TARGETS), help="only these")
    options = parser.parse_args()
    chosen = {name: TARGETS[name].share for name in options.reader or TARGETS}
    counts = {name: options.cases * share // sum(chosen.values()) for name, share in chosen.items()}
    counts[next(iter(counts))] += options.cases - sum(counts.values())
    # A case that asks for more gets a MemoryError, which is a bug too, and not the machine.
    resource.setrlimit(resource.RLIMIT_AS, (ADDRESS_LIMIT_BYTES, ADDRESS_LIMIT_BYTES))
    # As the command does.
    warnings.simplefilter("ignore")
    kept: set[tuple[str, str]] = set()
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if memory.is_dir() else None) as folder:
        found = run_cases(counts, options.seed, Path(folder), lambda x: print(x, file=sys.stderr))
    print(f"{'reader':12} {'cases':>8} {'result':>8} {'refused':>8} {'bugs':>6}")
    total = dict.fromkeys(("result", "refused", "bug"), 0)
    for name, of_one in found.items():
        numbers = [of_one.outcomes[kind] for kind in total]
        print(f"{name:12} {sum(numbers):8} {numbers[0]:8} {numbers[1]:8} {numbers[2]:6}")
        for kind, number in zip(total, numbers, strict=True):
            total[kind] += number
        for bug in of_one.bugs:
            if (bug.target, bug.place) not in kept:
                kept.add((bug.target, bug.place))
                print(f"  {bug.what}\n    {bug.place}\n    kept as {keep(bug).name}")
    print(
        f"{sum(total.values())} cases, {total['result']} results, {total['refused']} refused, "
        f"{total['bug']} bugs of {len(kept)} kinds (seed {options.seed})"
    )
    return int(bool(total["bug"]))


if __name__ == "__main__":
    sys.exit(main())
