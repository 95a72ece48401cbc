"""A tour of the Python API, cell by cell, on the "Lantern 7" example.

Run it whole (``python examples/api_tour.py``) or cell by cell in an editor that
understands ``# %%``.
"""

# %% Read a campaign: the file names the event, the map versions and the logs.
import warnings
from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.coordinates import SkyCoord
from mocpy import MOC
from skytally import Campaign

# The invented event is set in 2031, for which no leap seconds are announced yet.
warnings.filterwarnings("ignore", message=".*dubious year")

here = Path(__file__).parent
campaign = Campaign.read(here / "lantern-7" / "campaign.toml")
print(f"{campaign.name}: {', '.join(campaign.telescopes)}")
print(f"at {campaign.event_time.isot} UTC; map versions: {', '.join(campaign.map_versions)}")

# %% All the numbers at once, and the answer for each map version.
results = campaign.tally()
for version in campaign.map_versions:
    row = results.row(map=version)
    print(
        f"{version:10s} {row.area_deg2:6.1f} deg2 observed hold {100 * row.probability:.1f} % "
        f"(between {100 * row.probability_low:.1f} and {100 * row.probability_high:.1f} %)"
    )

# %% Who did what, on the newest map.
for name in campaign.telescopes:
    row = results.row(telescope=name)
    print(
        f"{name:8s} {100 * row.probability:5.1f} %, of which {100 * row.probability_unique:4.1f} % "
        "nobody else saw"
    )

# %% The exposures are an astropy table with units, Time columns and masked gaps.
exposures = campaign.exposures()
print(exposures["telescope", "exposure", "start", "band", "area", "depth"][:5])
hours = (exposures["start"] - campaign.event_time).to(u.hour)
print(f"{len(exposures)} exposures from {hours.min():.1f} to {hours.max():.1f} after the event")

# %% Regions are MOCs, ready for any tool that takes them.
heron, plover = campaign.coverage("Heron"), campaign.coverage("Plover")
both = heron.intersection(plover)
print(f"Heron and Plover: {100 * campaign.probability(both):.1f} % seen by both")

# %% Any region can be asked about, on any map version.
around = MOC.from_cone(172 * u.deg, -25 * u.deg, radius=3 * u.deg, max_depth=11)
missed = around.difference(campaign.coverage())
for version in campaign.map_versions:
    inside = campaign.probability(around, map=version)
    left = campaign.probability(missed, map=version)
    print(f"{version:10s} within 3 deg: {100 * inside:.1f} %, not observed: {100 * left:.1f} %")

# %% So can positions: which of these candidates is the more likely place?
candidates = SkyCoord([171.9, 165.2] * u.deg, [-24.6, -9.8] * u.deg)
density = campaign.probability_density(candidates).to(1 / u.deg**2)
best = int(np.argmax(density))
where = candidates[best].to_string("hmsdms", precision=0)
print(f"candidate {best + 1}, at {where}: {density[best]:.4f}")
