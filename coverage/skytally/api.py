"""The Python face: astropy objects in, astropy objects out."""

from __future__ import annotations

from collections.abc import Iterable
from functools import cached_property
from pathlib import Path

import numpy as np
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.table import MaskedColumn, QTable
from astropy.time import Time
from astropy_healpix import lonlat_to_healpix
from mocpy import MOC

from skytally.account import account, lay_coverage
from skytally.cache import Cache
from skytally.campaign import LoadedCampaign, load_campaign
from skytally.covered import Coverage
from skytally.errors import UsageError
from skytally.footprints import Progress
from skytally.leftover import LeftOver, left_overs
from skytally.moc import from_mocpy, to_mocpy
from skytally.results import Results
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Spans
from skytally.times import iso_to_mjd

__all__ = ["Campaign"]


class Campaign:
    """One event and everything observed for it.

    Parameters
    ----------
    loaded : LoadedCampaign
        What `skytally.campaign.load_campaign` returns; `Campaign.read` does both.
    cache : Cache, optional
        Where rasterised footprints are kept between runs, such as
        ``Cache(cache_folder())`` of `skytally.cache`, which is the command line's;
        nothing is kept without one.
    """

    def __init__(self, loaded: LoadedCampaign, cache: Cache | None = None) -> None:
        self.loaded = loaded
        self.cache = cache

    @classmethod
    def read(cls, path: str | Path, cache: Cache | None = None) -> Campaign:
        """Read a campaign file and all that it names; ``cache`` as above.

        Raises
        ------
        InputError
            If the file, or one that it names, cannot be used.
        """
        return cls(load_campaign(Path(path)), cache)

    def __repr__(self) -> str:
        return (
            f"<Campaign {self.name!r}: {len(self.map_versions)} map versions, "
            f"{len(self.telescopes)} telescopes>"
        )

    @property
    def name(self) -> str:
        """Name of the event."""
        return self.loaded.event_name

    @property
    def event_time(self) -> Time:
        """Time of the event, UTC."""
        return Time(self.loaded.event_mjd, format="mjd", scale="utc")

    @property
    def map_versions(self) -> tuple[str, ...]:
        """Labels of the map versions, newest last."""
        return tuple(m.label for m in self.loaded.maps)

    @property
    def telescopes(self) -> tuple[str, ...]:
        """Names of the telescopes."""
        return tuple(t.name for t in self.loaded.telescopes)

    def tally(self, progress: Progress | None = None) -> Results:
        """Return all the numbers.

        Parameters
        ----------
        progress : callable, optional
            Called now and then with what is being done and the fraction done.
        """
        if progress is None:
            return self._results
        coverage = lay_coverage(self.loaded, progress, self.cache)
        results = account(self.loaded, progress, coverage)
        self.__dict__.update(_coverage=coverage, _results=results)
        return results

    @cached_property
    def _coverage(self) -> Coverage:
        return lay_coverage(self.loaded, cache=self.cache)

    @cached_property
    def _results(self) -> Results:
        return account(self.loaded, coverage=self._coverage)

    def exposures(self) -> QTable:
        """Return the accepted exposures in order of their start.

        Returns
        -------
        QTable
            ``start`` and ``end`` are `~astropy.time.Time` (UTC); ``ra``, ``dec``
            (ICRS, masked where a region was given outright), ``area`` and
            ``depth`` have units; ``probability`` is the newest map's.
        """
        rows = self._results.exposures

        def number(name: str, unit: u.UnitBase) -> MaskedColumn:
            values = [getattr(row, name) for row in rows]
            missing = [value is None for value in values]
            filled = [np.nan if value is None else value for value in values]
            return MaskedColumn(filled, mask=missing, dtype=float, unit=unit)

        table = QTable()
        table["telescope"] = np.array([row.telescope for row in rows], dtype=str)
        table["exposure"] = np.array([row.exposure for row in rows], dtype=str)
        table["row"] = np.array([row.row for row in rows], dtype=np.int64)
        table["start"] = _times(row.start for row in rows)
        table["end"] = _times(row.end for row in rows)
        table["band"] = MaskedColumn(
            [row.band or "" for row in rows], mask=[row.band is None for row in rows], dtype=str
        )
        table["ra"] = number("ra_deg", u.deg)
        table["dec"] = number("dec_deg", u.deg)
        table["area"] = number("area_deg2", u.deg**2)
        table["depth"] = number("depth", u.mag)
        table["probability"] = number("probability_newest", u.dimensionless_unscaled)
        return table

    def coverage(self, telescope: str | None = None) -> MOC:
        """Return the region that was observed, by one telescope or by all together.

        Raises
        ------
        UsageError
            If there is no telescope of that name.
        """
        regions = dict(zip(self.telescopes, self._results.sky.covered, strict=True))
        if telescope is None:
            return to_mocpy(Spans.empty().union(*regions.values()))
        if telescope not in regions:
            raise UsageError(
                f"there is no telescope {telescope!r}",
                remedy=f"Choose one of: {', '.join(regions)}.",
            )
        return to_mocpy(regions[telescope])

    def map(self, version: str | None = None) -> SkyMap:
        """Return one map version, the newest if none is named.

        Raises
        ------
        UsageError
            If there is no such version.
        """
        return self.loaded.map(version)

    def left_over(self, map: str | None = None) -> dict[str | None, LeftOver]:
        """Return what is left of a map version, the newest if none is named.

        Returns
        -------
        dict
            Under None, the map without the covered sky; under each source's
            name, without what would have been seen of it (only where the map
            has distances).

        Raises
        ------
        UsageError
            If there is no such version.
        """
        return left_overs(self.loaded, self._coverage, self.loaded.map(map))

    def probability(self, region: MOC | Spans, map: str | None = None) -> float:
        """Return the probability inside a region, on the newest map or on a named version."""
        spans = region if isinstance(region, Spans) else from_mocpy(region)
        return self.map(map).probability.of_region(spans)

    def probability_density(self, position: SkyCoord, map: str | None = None) -> u.Quantity:
        """Return the probability per steradian at positions of any shape and frame.

        Raises
        ------
        UsageError
            If a position is not finite.
        """
        icrs = position.icrs
        lon, lat = np.broadcast_arrays(icrs.ra.deg, icrs.dec.deg)
        if not (np.isfinite(lon).all() and np.isfinite(lat).all()):
            raise UsageError(
                "a position is not finite", remedy="Leave out positions that are missing."
            )
        cell = lonlat_to_healpix(lon * u.deg, lat * u.deg, 1 << LINE_ORDER, order="nested")
        return self.map(map).density_at(np.asarray(cell, dtype=np.int64)) / u.sr


def _times(texts: Iterable[str]) -> Time:
    """Return UTC times; by way of MJD, since astropy warns of years beyond its leap seconds."""
    times = Time(np.array([iso_to_mjd(text) for text in texts], float), format="mjd", scale="utc")
    times.format = "isot"
    return times
