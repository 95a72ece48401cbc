"""What might have been there: a source's brightness in time, and what counts as seeing it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import expit

from skytally.magnitudes import standard_band

__all__ = ["Detection", "LightCurves", "Source", "same_band"]

Floats = NDArray[np.float64]
LightCurves = Mapping[str, tuple[Floats, Floats]]


@dataclass(frozen=True)
class Detection:
    """The chance that one exposure shows a source, against its brightness.

    With x = m − limit: plateau / (1 + exp((x − offset)/width)), the logistic
    form in common use for the efficiency of transient searches; with width 0
    the plateau up to the offset and 0 beyond.

    Attributes
    ----------
    offset : float
        Magnitudes from the limit to where the efficiency is half the plateau.
    width : float
        How gradual the fall is, in magnitudes, ≥ 0.
    plateau : float
        Efficiency for what is bright, in (0, 1].
    """

    offset: float = 0.0
    width: float = 0.0
    plateau: float = 1.0

    def efficiency(self, magnitude_minus_limit: ArrayLike) -> Floats:
        """Chance of detection at m − limit (magnitudes), any shape; 0 for NaN."""
        beyond = np.asarray(magnitude_minus_limit, dtype=np.float64) - self.offset
        if self.width == 0:
            return np.where(beyond <= 0, self.plateau, 0.0)
        return np.where(np.isnan(beyond), 0.0, self.plateau * expit(-beyond / self.width))

    @property
    def text(self) -> str:
        """The efficiency in words."""
        place = "the limit"
        if self.offset:
            side = "fainter" if self.offset > 0 else "brighter"
            place = f"{abs(self.offset):g} mag {side} than the limit"
        chance = "certain" if self.plateau == 1 else f"{100 * self.plateau:g} % likely"
        if self.width == 0:
            return f"detection {chance} down to {place} and impossible beyond"
        return (
            f"detection {chance} for bright sources, half as likely at {place}, "
            f"falling as a logistic of width {self.width:g} mag"
        )


@dataclass(frozen=True, eq=False)
class Source:
    """One source whose visibility is asked for.

    Attributes
    ----------
    name : str
        As the campaign calls it.
    bands : tuple of str or None
        Bands in which its brightness is given; None for the same in any band.
    kind : {"constant", "fade", "light curve"}
        How the brightness goes in time.
    magnitudes : float or mapping of str to float
        Absolute magnitude at peak, or constant; a number holds in any band.
        Empty for a light curve.
    fade_per_day : float
        Magnitudes per day, from the end of the rise on.
    rise_days : float
        Days from the event to the peak, in which the flux grows in
        proportion to time; 0 for a source that begins at its peak.
    curves : mapping of str to (days, magnitude)
        Light curve per band, days since the event in rising order.
    k_correction : {"none", "flat"}
        None, or −2.5 log₁₀(1+z), that of a flat spectrum.
    detection : Detection
        What an exposure sees.
    visits, gap_minutes : int, float
        It counts as seen in so many exposures, the first and the last at
        least so long apart.
    magnitude_system : {"AB", "Vega"}
        System of the absolute magnitudes.
    """

    name: str
    bands: tuple[str, ...] | None
    kind: Literal["constant", "fade", "light curve"]
    magnitudes: Mapping[str, float] | float
    fade_per_day: float = 0.0
    rise_days: float = 0.0
    curves: LightCurves = field(default_factory=dict)
    k_correction: Literal["none", "flat"] = "none"
    detection: Detection = Detection()
    visits: int = 1
    gap_minutes: float = 0.0
    magnitude_system: str = "AB"

    def band_key(self, band: str) -> str | None:
        """Return the source's own band that an exposure's band means; None if there is none."""
        if self.bands is None:
            return band
        if band in self.bands:
            return band
        return next((own for own in self.bands if same_band(own, band)), None)

    def absolute_magnitude(self, days: ArrayLike, band: str) -> Floats:
        """Absolute magnitude at times after the event.

        Parameters
        ----------
        days : array_like, any shape
            Days since the event.
        band : str
            As the log of the exposure writes it.

        Returns
        -------
        float64 array
            NaN where the source is unseen or nothing is said about it: in
            another band, before the event, outside its light curve.
        """
        time = np.asarray(days, dtype=np.float64)
        key = self.band_key(band)
        if key is None:
            return np.full(time.shape, np.nan)
        if self.kind == "light curve":
            at, magnitude = self.curves[key]
            # Nothing is extrapolated: what lies outside is unseen.
            return np.asarray(np.interp(time, at, magnitude, left=np.nan, right=np.nan))
        peak = self.magnitudes if isinstance(self.magnitudes, int | float) else self.magnitudes[key]
        return np.asarray(peak + self._below_peak(time))

    def _below_peak(self, days: Floats) -> Floats:
        """Magnitudes below the peak at times after the event; NaN before it begins."""
        rising = (days > 0) & (days < self.rise_days)
        fading = days >= self.rise_days
        below = np.full(days.shape, np.nan)
        below[rising] = -2.5 * np.log10(days[rising] / self.rise_days)
        below[fading] = self.fade_per_day * (days[fading] - self.rise_days)
        return below

    @property
    def text(self) -> str:
        """The source and every assumption about it, as one sentence."""
        parts = [self._brightness_text()]
        parts.append(
            "flat-spectrum K-correction -2.5 log10(1+z)"
            if self.k_correction == "flat"
            else "no K-correction"
        )
        parts.append(self.detection.text)
        if self.visits > 1:
            apart = f" at least {self.gap_minutes:g} min apart" if self.gap_minutes else ""
            parts.append(f"seen means in {self.visits} exposures{apart}")
        else:
            parts.append("seen means in one exposure")
        return f"{self.name}: {'; '.join(parts)}."

    def _brightness_text(self) -> str:
        if self.kind == "light curve":
            spans = [f"{b} ({t[0]:g} to {t[-1]:g} d)" for b, (t, _) in self.curves.items()]
            return (
                f"a light curve of absolute {self.magnitude_system} magnitudes in "
                f"{', '.join(spans)} after the event, interpolated, unseen outside it and in "
                "other bands"
            )
        if isinstance(self.magnitudes, Mapping):
            values = ", ".join(f"{m:.4g} in {band}" for band, m in self.magnitudes.items())
            level = f"{self.magnitude_system} magnitude {values}, unseen in other bands"
        else:
            level = f"{self.magnitude_system} magnitude {self.magnitudes:.4g} in every band"
        if self.kind == "constant":
            return f"absolute {level}, constant from the event on"
        rise = f"rising in proportion to time for {self.rise_days:g} d, then "
        return (
            f"peak absolute {level}, {rise if self.rise_days else ''}"
            f"fading by {self.fade_per_day:g} mag/day"
            + ("" if self.rise_days else " from the event on")
        )


def same_band(one: str, other: str) -> bool:
    """Tell whether two spellings mean one band: r and r', but not r and R."""
    return one == other or standard_band(one) == standard_band(other)
