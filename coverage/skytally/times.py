"""Times as text: UTC in ISO 8601, and hours since the event."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

__all__ = ["hours_since", "iso_to_mjd", "mjd_to_iso"]

_MJD_EPOCH = datetime(1858, 11, 17, tzinfo=UTC)


def mjd_to_iso(mjd: float) -> str:
    """UTC time of a Modified Julian Date to the whole second, as 2031-03-14T05:21:08Z."""
    moment = _MJD_EPOCH + timedelta(seconds=round(mjd * 86400.0))
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def iso_to_mjd(text: str) -> float:
    """Convert an ISO 8601 time that states its offset or Z to a Modified Julian Date.

    Raises
    ------
    ValueError
        If the text is no such time.
    """
    moment = datetime.fromisoformat(text)
    if moment.tzinfo is None:
        raise ValueError(f"{text!r} states no offset from UTC")
    return (moment - _MJD_EPOCH) / timedelta(days=1)


def hours_since(mjd: float, event_mjd: float) -> float:
    """Hours from the event to a time, both MJD (UTC), to a ten-thousandth."""
    return round((mjd - event_mjd) * 24.0, 4)
