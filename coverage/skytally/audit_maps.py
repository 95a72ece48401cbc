"""Findings on the maps and on what they are tallied with."""

from __future__ import annotations

from collections.abc import Sequence

from skytally.campaign_data import LoadedCampaign
from skytally.findings import Finding
from skytally.skymap import SkyMap
from skytally.space import Space
from skytally.times import mjd_to_iso

__all__ = ["extinction_findings", "map_findings", "sum_findings", "version_findings"]

# Greatest relative difference between a map's header and its own cells.
_HEADER_TOLERANCE = 1e-3
# Sums of float32 cells miss 1 by less than the first; more than the second is no rounding.
_SUM_ROUNDING, _SUM_SLIP = 1e-5, 1e-3
# Some alerts are sent ahead of the event itself, by minutes at most (common practice).
_EARLY_ALERT_DAYS = 10.0 / 1440.0


def map_findings(spaces: Sequence[tuple[SkyMap, Space | None]]) -> list[Finding]:
    """Compare each map's stated distance with that of its own cells."""
    found = []
    for skymap, space in spaces:
        layer = skymap.distance
        if space is None or layer is None:
            continue
        stated = layer.header_mean_mpc, layer.header_sd_mpc
        for name, header, own in zip(("DISTMEAN", "DISTSTD"), stated, space.moments):
            if header is not None and not abs(header - own) <= _HEADER_TOLERANCE * own:
                found.append(
                    Finding(
                        "map-distance-header",
                        "caution",
                        skymap.label,
                        (),
                        f"The header of map version {skymap.label} states {name} = {header:.6g} "
                        f"Mpc, its own cells give {own:.6g} Mpc.",
                        "The value of the cells is used.",
                        "Ask the issuer of the map which of the two is right.",
                    )
                )
    return found


def sum_findings(totals: Sequence[tuple[SkyMap, float]]) -> list[Finding]:
    """Report map versions whose file did not sum to 1.

    Parameters
    ----------
    totals : sequence of (SkyMap, float)
        Each map version and what its file's probability summed to.
    """
    return [
        Finding(
            "map-not-normalised",
            "caution" if abs(total - 1) > _SUM_SLIP else "note",
            skymap.label,
            (),
            f"The probability of map version {skymap.label} sums to {total:.6g} in its file.",
            "It is normalised to 1.",
            "Ask the issuer whether the file is whole if the difference is more than rounding.",
        )
        for skymap, total in totals
        if abs(total - 1) > _SUM_ROUNDING
    ]


def version_findings(campaign: LoadedCampaign) -> list[Finding]:
    """Report when map versions were issued, where that is odd."""
    return [
        *_issued_before_event(campaign),
        *_out_of_order(campaign),
        *_not_followed(campaign),
    ]


def _issued_before_event(campaign: LoadedCampaign) -> list[Finding]:
    found = []
    for skymap in campaign.maps:
        early = campaign.event_mjd - (skymap.issued_mjd or campaign.event_mjd)
        if early > 0:
            found.append(
                Finding(
                    "map-before-event",
                    "error" if early > _EARLY_ALERT_DAYS else "caution",
                    skymap.label,
                    (),
                    f"Map version {skymap.label} was issued {_span_text(early)} before the event.",
                    "Both times are used as given.",
                    "Check the time of the event and the map's time of issue; both are UTC.",
                )
            )
    return found


def _out_of_order(campaign: LoadedCampaign) -> list[Finding]:
    """Report versions that the campaign file does not list as they were issued."""
    maps = campaign.maps
    times = [m.issued_mjd for m in maps if m.issued_mjd is not None]
    if len(times) == len(maps):
        # Sorted by issue when loaded; the inputs still stand as the file lists them.
        listed = [path for role, path, _ in campaign.inputs if role == "map"]
        files = [m for m in maps if m.path in listed]
        places = [listed.index(str(m.path)) for m in files]
        ahead = [m.label for m, one, next_ in zip(files[1:], places, places[1:]) if next_ < one]
        if not ahead or len(set(places)) < len(places):
            return []
        text = f"The campaign file lists {ahead[0]} before a map version issued earlier."
        done = f"They are taken in the order of issue; {maps[-1].label} counts as the newest."
    else:
        if times == sorted(times):
            return []
        text = "Some map versions have no time of issue, and the others are not in its order."
        done = f"They are taken in the order of the campaign file; {maps[-1].label} counts as "
        done += "the newest."
    return [
        Finding(
            "map-order",
            "caution",
            maps[-1].label,
            (),
            text,
            done,
            "Check the times of issue, and give one to every version.",
        )
    ]


def _not_followed(campaign: LoadedCampaign) -> list[Finding]:
    """Report versions issued after the last exposure had begun."""
    starts = [float(t.log.start_mjd.max()) for t in campaign.telescopes if len(t.log)]
    if not starts:
        return []
    last = max(starts)
    return [
        Finding(
            "map-after-exposures",
            "note",
            skymap.label,
            (),
            f"Map version {skymap.label} was issued {_span_text(skymap.issued_mjd - last)} after "
            f"the last exposure began ({mjd_to_iso(last)[:16].replace('T', ' ')} UTC): nobody "
            "followed it.",
            "It is tallied with what had been observed before.",
            "See whether logs of later exposures are missing.",
        )
        for skymap in campaign.maps
        if skymap.issued_mjd is not None and skymap.issued_mjd > last
    ]


def _span_text(days: float) -> str:
    """Return a span of time for a sentence: "40 min", "5.2 h", "12 days"."""
    hours = 24.0 * days
    if hours < 2:
        return f"{60 * hours:.0f} min"
    return f"{hours:.1f} h" if hours < 72 else f"{days:.0f} days"


def extinction_findings(bands: Sequence[str]) -> list[Finding]:
    """Say which bands the dust map could not be applied to."""
    return [
        Finding(
            "band-without-extinction",
            "caution",
            band,
            (),
            f"No extinction coefficient is known for band {band}.",
            f"Limits in {band} are not corrected for Galactic extinction.",
            f'Give one in the campaign: [extinction] coefficients = {{ "{band}" = … }}.',
        )
        for band in bands
    ]
