"""The whole tally of a campaign, and the numbers that the recipe has as well.

Run ``python tests/bench/whole_tally.py CAMPAIGN ANSWER``. The answer also holds how long
every stage took.
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

from skytally.account import account
from skytally.campaign import load_campaign

NUMBERS = (
    "probability",
    "area_deg2",
    "probability_unique",
    "probability_credit",
    "depth_over_50",
    "depth_over_90",
)


class Stages:
    """Seconds of each stage, from what progress is told."""

    def __init__(self):
        self.seconds = {}
        self.switch("Loading")

    def switch(self, stage):
        """Charge the time since the last stage to it."""
        now = time.perf_counter()
        if hasattr(self, "stage"):
            self.seconds[self.stage] = self.seconds.get(self.stage, 0.0) + now - self.since
        self.stage, self.since = stage, now

    def __call__(self, stage, done):
        self.switch("Laying fields" if stage.startswith("Laying") else stage)


def numbers_of(results):
    """What the recipe has, by map version and telescope."""
    found = {}
    for row in results.rows:
        if row.band is None and row.night is None:
            numbers = {name: getattr(row, name) for name in NUMBERS}
            numbers["probability_in_90"] = row.probability_in_90
            found.setdefault(row.map, {})[row.telescope or "all"] = numbers
    for row in results.source_rows:
        if row.telescope is None and row.band is None and row.night is None:
            found[row.map]["all"].setdefault("detectable", row.probability)
    for line in results.timelines:
        if line.telescope is None and line.band is None and line.night is None:
            half = line.probability[-1] / 2
            step = next(i for i, p in enumerate(line.probability) if p >= half)
            found[line.map]["all"]["half_time_days"] = line.hours[step] / 24
    return found


def main(campaign, answer):
    """Tally a campaign file."""
    stages = Stages()
    loaded = load_campaign(campaign)
    results = account(loaded, stages)
    stages.switch("")
    text = json.dumps({"numbers": numbers_of(results), "stages": stages.seconds})
    answer.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main(*map(Path, sys.argv[1:]))
