"""Findings: what was noticed about the inputs, what was done, and what to do."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from skytally.skymap import SkyMap
from skytally.space import Space

__all__ = ["Finding", "extinction_findings", "map_findings"]

# Greatest relative difference between a map's header and its own cells.
_HEADER_TOLERANCE = 1e-3


@dataclass(frozen=True)
class Finding:
    """Something that a reader of the numbers must know.

    Attributes
    ----------
    code : str
        Stable name of the kind of finding.
    severity : {"error", "caution", "note"}
        The numbers cannot be right; look; good to know.
    subject : str
        The telescope, map version or band concerned.
    rows : tuple of int
        Rows of the log, if any.
    text, done, remedy : str
        What was seen, what the tally did about it, and what to do.
    """

    code: str
    severity: str
    subject: str
    rows: tuple[int, ...]
    text: str
    done: str
    remedy: str


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
