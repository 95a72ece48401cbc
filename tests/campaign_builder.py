"""Campaigns built in memory, for tests of the numbers alone."""

from pathlib import Path

import numpy as np
from skytally.campaign import CampaignSettings, LoadedCampaign, Site, Telescope
from skytally.observations import LogTable

EVENT_MJD = 62_000.0


def log_table(name, ra, dec, *, angle=None, start=None, duration=60.0, band="r", depth=21.0):
    """A log of n accepted exposures; scalars are spread over all."""
    n = len(ra)

    def column(value, kind=float):
        return np.broadcast_to(np.asarray(value, dtype=kind), (n,)).copy()

    return LogTable(
        telescope=name,
        file=f"{name}.csv",
        sha256="0" * 64,
        read=n,
        row=np.arange(n) + 2,
        exposure=np.array([f"{i:04d}" for i in range(n)], dtype=object),
        ra_deg=column(ra),
        dec_deg=column(dec),
        angle_deg=column(0.0 if angle is None else angle),
        start_mjd=column(EVENT_MJD + np.arange(n) / 1440 if start is None else start),
        duration_s=column(duration),
        band=column(band, object),
        depth=column(depth),
        extinction=np.full(n, np.nan),
        region=np.full(n, "", dtype=object),
    )


def telescope(name, camera, log, *, longitude=0.0, **more):
    """A telescope at latitude 0 with a log."""
    return Telescope(name, Site(longitude, 0.0, 0.0), camera, "a camera", log, **more)


def campaign(telescopes, maps, **settings):
    """A campaign of these telescopes and maps."""
    return LoadedCampaign(
        path=Path("campaign.toml"),
        event_name="Lantern 7",
        event_mjd=EVENT_MJD,
        maps=tuple(maps),
        telescopes=tuple(telescopes),
        settings=CampaignSettings(**settings),
        inputs=(),
        notes=(),
    )
