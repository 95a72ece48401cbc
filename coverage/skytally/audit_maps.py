"""Findings on the maps and on what they are tallied with."""

from __future__ import annotations

from collections.abc import Sequence

from skytally.findings import Finding
from skytally.skymap import SkyMap
from skytally.space import Space

__all__ = ["extinction_findings", "map_findings"]

# Greatest relative difference between a map's header and its own cells.
_HEADER_TOLERANCE = 1e-3


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
