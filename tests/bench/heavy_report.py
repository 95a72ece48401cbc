"""Measure the report of the heavy campaign against its bars.

Run ``python tests/bench/heavy_report.py FOLDER``. The campaign is written into the folder
by `heavy_night` if it is not there yet. The tally is not timed, only results to files.
Seconds are of the wall clock, so nothing else should run on the machine; beside them
stands the processor time of both processes. Exit code 1 if a bar is missed.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from pathlib import Path

import pypdf
from heavy_night import write_campaign
from skytally.account import account
from skytally.campaign import load_campaign
from skytally.outputs import write_outputs


def processor_seconds():
    """Processor time of this process and of those that it has waited for."""
    both = (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)
    usage = [resource.getrusage(who) for who in both]
    return sum(one.ru_utime + one.ru_stime for one in usage)


def measure(folder):
    """Write the report, and return what to print: name, value, bar, unit."""
    path = folder / "campaign.toml"
    results = account(load_campaign(path if path.exists() else write_campaign(folder)))
    with tempfile.TemporaryDirectory() as place:
        out = Path(place) / "out"
        wall, processor = time.perf_counter(), processor_seconds()
        write_outputs(results, out)
        wall, processor = time.perf_counter() - wall, processor_seconds() - processor
        sizes = [(out / name).stat().st_size / 1e6 for name in ("report.html", "report.pdf")]
        pages = len(pypdf.PdfReader(out / "report.pdf").pages)
    print(f"processor time {processor:.1f} s")
    return [
        ("report.html", sizes[0], 8, "MB"),
        ("report.pdf", sizes[1], 10, "MB"),
        ("pages", pages, 40, "pages"),
        ("rendering", wall, 45, "s"),
    ]


if __name__ == "__main__":
    found = measure(Path(sys.argv[1]))
    for name, value, bar, unit in found:
        verdict = "holds" if value <= bar else "MISSED"
        print(f"{name:12} {value:8.4g} {unit:6} at most {bar} {unit:6} {verdict}")
    sys.exit(any(value > bar for _, value, bar, _ in found))
