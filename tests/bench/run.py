"""The benchmark: the heavy night tallied here and by the recipe, side by side.

Run ``python tests/bench/run.py``. Both programs take turns, each in a process of its own
below this one, at least three times; what is printed are medians, ratios within this one
run, the peak of memory, and how far their numbers agree. Then follow how the time grows
with exposures, map versions and working order, and where it goes. ``--write`` puts the
lines into ``results.txt`` beside this file.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import re
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import healpy
import heavy_night
import numpy as np
import scipy

HERE = Path(__file__).parent
BARS = {
    "time": (0.5, "time, tally : recipe"),
    "memory": (0.25, "peak memory, tally : recipe"),
    "exposures": (2.2, "time, twice the exposures : once"),
    "rerun": (0.1, "time, one log changed : first run"),
    "peak": (1.0, "peak memory of the tally, GB"),
}


def run(program, campaign, answer):
    """Run a program of this folder; return seconds, peak memory in GB and its answer."""
    since = time.perf_counter()
    child = subprocess.Popen([sys.executable, str(HERE / program), str(campaign), str(answer)])
    _, status, usage = os.wait4(child.pid, 0)
    seconds = time.perf_counter() - since
    if status:
        raise SystemExit(f"{program} failed on {campaign.name}")
    return seconds, usage.ru_maxrss * 1024 / 1e9, json.loads(answer.read_text(encoding="utf-8"))


def variant(campaign, name, change):
    """Write another campaign file beside one."""
    path = campaign.with_name(f"{name}.toml")
    path.write_text(change(campaign.read_text(encoding="utf-8")), encoding="utf-8")
    return path


def with_one_source(text):
    """Keep the source that the recipe can answer for: it is as bright all the time."""
    first, *others = re.split(r"(?=\[\[source\]\])", text, maxsplit=1)
    sources, rest = others[0].split("[[map]]", 1)
    only = sources.split("[[source]]")[1]
    return f"{first}[[source]]{only}[[map]]{rest}"


def with_maps(text, count):
    """Keep the last map versions."""
    first, *maps = re.split(r"(?=\[\[map\]\])", text.split("[[telescope]]", 1)[0])
    return "".join([first, *maps[-count:], "[[telescope]]" + text.split("[[telescope]]", 1)[1]])


def with_part_of_logs(campaign, every):
    """Keep one row of so many in each log."""

    def change(text):
        for log in campaign.parent.glob("logs/*.csv"):
            head, *rows = log.read_text(encoding="utf-8").splitlines(keepends=True)
            folder = campaign.parent / f"logs-{every}"
            folder.mkdir(exist_ok=True)
            (folder / log.name).write_text(head + "".join(rows[::every]), encoding="utf-8")
        return text.replace('"logs/', f'"logs-{every}/')

    return variant(campaign, f"one-of-{every}", change)


def worst_agreement(numbers, recipe):
    """Greatest difference of each number over versions and telescopes."""
    worst = {}
    for version, telescopes in recipe.items():
        for telescope, values in telescopes.items():
            for name, value in values.items():
                other = numbers[version][telescope].get(name)
                if value is not None and other is not None:
                    worst[name] = max(worst.get(name, 0.0), abs(value - other))
    return worst


def facts():
    """The machine and the libraries."""
    memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9
    return (
        f"{os.cpu_count()} cores ({platform.machine()}), {memory:.0f} GB, "
        f"Python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}, "
        f"healpy {healpy.__version__}"
    )


def compare(campaign, folder, rounds, say):
    """Let both take turns; return the ratios."""
    tallies, recipes = [], []
    for _ in range(rounds):
        tallies.append(run("whole_tally.py", campaign, folder / "tally.json"))
        recipes.append(run("recipe.py", campaign, folder / "recipe.json"))
    (own_s, own_gb), (other_s, other_gb) = (
        (statistics.median(r[0] for r in runs), max(r[1] for r in runs))
        for runs in (tallies, recipes)
    )
    say(f"Whole tally        {own_s:7.1f} s  {own_gb:6.2f} GB  (median of {rounds}, greatest peak)")
    say(f"Recipe             {other_s:7.1f} s  {other_gb:6.2f} GB")
    say("")
    say("Greatest difference between the two, over versions and telescopes:")
    for name, value in worst_agreement(tallies[-1][2]["numbers"], recipes[-1][2]).items():
        say(f"  {name:22s} {value:.2g}")
    say("")
    say("Where the time of the tally goes, s:")
    for stage, seconds in tallies[-1][2]["stages"].items():
        say(f"  {stage:22s} {seconds:6.1f}")
    return {"time": own_s / other_s, "memory": own_gb / other_gb, "peak": own_gb}


def scale(campaign, folder, say):
    """How the time grows; return the ratio for twice the exposures."""
    say("")
    say("Growth, s and GB:")
    taken = {}
    for every in (4, 2, 1):
        path = campaign if every == 1 else with_part_of_logs(campaign, every)
        taken[every], peak, _ = run("whole_tally.py", path, folder / "part.json")
        say(f"  1/{every} of the exposures   {taken[every]:6.1f}  {peak:5.2f}")
    for count in (1, 2, 5):
        path = variant(campaign, f"maps-{count}", lambda text, n=count: with_maps(text, n))
        seconds, peak, _ = run("whole_tally.py", path, folder / "part.json")
        say(f"  {count} map version{'s' if count > 1 else ' '}       {seconds:6.1f}  {peak:5.2f}")
    return max(taken[2] / taken[4], taken[1] / taken[2])


def rerun(campaign, folder, say):
    """Run the command itself with an empty cache, a full one, and after one log changed."""
    environment = {**os.environ, "SKYTALLY_CACHE": str(folder / "cache")}
    command = [sys.executable, "-m", "skytally", "tally", "--json", str(campaign)]
    log = campaign.parent / "logs/Curlew.csv"
    taken = []
    say("")
    say("The command itself, s:")
    for state in ("nothing kept", "everything kept", "one log changed"):
        if state == "one log changed":
            rows = log.read_text(encoding="utf-8").splitlines(keepends=True)
            log.write_text("".join(rows[:-1]), encoding="utf-8")
        since = time.perf_counter()
        subprocess.run(command, env=environment, stdout=subprocess.DEVNULL, check=True)
        taken.append(time.perf_counter() - since)
        say(f"  {state:20s} {taken[-1]:6.1f}")
    return taken[2] / taken[0]


def orders(campaign, say):
    """Time and area of the raster alone at each working order."""
    from skytally.campaign import load_campaign
    from skytally.footprints import lay_footprints

    loaded = load_campaign(campaign)
    say("")
    say("Laying the fields at one working order, s and summed area in square degrees:")
    for order in (10, 11, 12, 13):
        since = time.perf_counter()
        raster = lay_footprints(loaded, order=order).raster
        area = raster.centre.area_sr().sum() * np.degrees(1) ** 2
        say(f"  order {order}             {time.perf_counter() - since:6.1f}  {area:.3f}")


def main():
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=3, help="turns of each program")
    parser.add_argument("--write", action="store_true", help="put the lines into results.txt")
    options = parser.parse_args()
    lines = []

    def say(line):
        lines.append(line)
        print(line, flush=True)

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        whole = heavy_night.write_campaign(folder / "night")
        say("The heavy night: 2,200 exposures, 65,200 detectors, five map versions")
        say(facts())
        say("")
        campaign = variant(whole, "one-source", with_one_source)
        ratios = compare(campaign, folder, options.rounds, say)
        seconds, peak, _ = run("whole_tally.py", whole, folder / "part.json")
        say("")
        say(f"With all three sources, one of them seen gradually: {seconds:.1f} s, {peak:.2f} GB")
        ratios["exposures"] = scale(campaign, folder, say)
        orders(campaign, say)
        ratios["rerun"] = rerun(campaign, folder, say)
    say("")
    for name, (bar, words) in BARS.items():
        state = "met" if ratios[name] <= bar else "MISSED"
        say(f"{words:36s} {ratios[name]:5.2f}   bar {bar:.2f}   {state}")
    if options.write:
        (HERE / "results.txt").write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
