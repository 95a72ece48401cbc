"""Everything that is tried hard, in one command: ``python tests/bench/stress.py``.

Tallies random campaigns beside the slow twin, holds others to the laws, fuzzes the
readers and kills runs at random moments; prints the worst difference of each number
and ends with the counts. Exit code 1 if anything failed.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import warnings
from collections.abc import Callable
from pathlib import Path

TESTS = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(TESTS))

from laws import LAWS  # noqa: E402 - the tests' own modules
from twin_campaigns import deep_plan  # noqa: E402
from twin_check import Ledger, check_plan  # noqa: E402

# Programs that print their counts in their last line, and the option that says how many.
PROGRAMS = {
    "fuzz": (TESTS / "fuzz" / "run.py", "--cases"),
    "kills": (TESTS / "kill" / "run.py", "--kills"),
}


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--campaigns", type=int, default=200, help="beside the twin")
    parser.add_argument("--laws", type=int, default=10, help="campaigns held to each law")
    parser.add_argument("--fuzz", type=int, default=200_000, help="files given to the readers")
    parser.add_argument("--kills", type=int, default=50, help="runs killed")
    options = parser.parse_args()
    counts = [twin(options.campaigns), laws(options.laws)]
    for name, (script, option) in PROGRAMS.items():
        counts.append(program(name, script, option, getattr(options, name)))
    print("\nCounts")
    for line, _ in counts:
        print(f"  {line}")
    return int(any(failed for _, failed in counts))


def twin(campaigns: int) -> tuple[str, bool]:
    """Compare every number of random campaigns, and print the worst difference of each."""
    ledger = Ledger()
    failed = each("twin", campaigns, lambda seed: check_plan(deep_plan(seed), ledger))
    print(f"\n{'number':45} {'compared':>9} {'worst':>8}")
    for name, count in ledger.count.items():
        print(f"{name:45} {count:9} {ledger.worst[name]:8.1e}")
    numbers = sum(ledger.count.values())
    text = f"twin: {campaigns} campaigns, {numbers} numbers compared, {failed} campaigns disagree"
    return text, failed > 0


def laws(campaigns: int) -> tuple[str, bool]:
    """Hold random campaigns to every law."""
    failed = sum(each(name, campaigns, law) for name, law in LAWS.items())
    cases = len(LAWS) * campaigns
    return f"laws: {cases} cases of {len(LAWS)} laws, {failed} broken", failed > 0


def each(name: str, count: int, check: Callable[[int], None]) -> int:
    """Run a check on so many seeds; return how many fail, and say which."""
    failed = 0
    for seed in range(count):
        print(f"{name}, campaign {seed + 1} of {count}", end="\r", file=sys.stderr)
        try:
            # As in the tests, a warning is a fault.
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                check(seed)
        except Exception as fault:  # whatever it is, it is counted
            failed += 1
            print(f"{name}, seed {seed}: {type(fault).__name__}: {str(fault)[:300]}")
    return failed


def program(name: str, script: Path, option: str, count: int) -> tuple[str, bool]:
    """Run one of the other programs and return its last line."""
    if not script.exists():
        return f"{name}: there is no {script.relative_to(TESTS.parent)}", True
    if count == 0:
        return f"{name}: left out", False
    done = subprocess.run(
        [sys.executable, str(script), option, str(count)],
        stdout=subprocess.PIPE,
        text=True,
        check=False,
    )
    print(f"\n{done.stdout}")
    lines = done.stdout.strip().splitlines() or ["it printed nothing"]
    return f"{name}: {lines[-1]}", done.returncode != 0


if __name__ == "__main__":
    sys.exit(main())
