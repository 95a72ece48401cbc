"""Which exposures a row of the tally is about."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.observations import Observations
from skytally.spans import Ints

__all__ = ["Selection", "selections"]

Bools = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Selection:
    """A choice of exposures: all, or those of a telescope, a band, both, or a night.

    Attributes
    ----------
    telescope, band, night : str or None
        None means all.
    chosen : bool array, shape (exposures,)
        The exposures selected.
    peers : int64 array, shape (exposures,)
        Number of the selection of the same kind that each exposure belongs to:
        telescopes among telescopes, bands among bands, …; uniqueness and
        credit are counted among these.
    peer : int
        This selection's own number among its peers.
    """

    telescope: str | None
    band: str | None
    night: str | None
    chosen: Bools
    peers: Ints
    peer: int


def selections(observations: Observations) -> list[Selection]:
    """List the selections of DESIGN section 6 in the order of the rows."""
    o = observations
    both = o.telescope * max(len(o.bands), 1) + o.band
    found = [
        Selection(None, None, None, np.ones(len(o), dtype=bool), np.zeros(len(o), dtype=int), 0)
    ]
    for index, name in enumerate(o.telescopes):
        found.append(Selection(name, None, None, o.telescope == index, o.telescope, index))
    for index, name in enumerate(o.bands):
        found.append(Selection(None, name, None, o.band == index, o.band, index))
    for peer in np.unique(both):
        telescope, band = divmod(int(peer), len(o.bands))
        found.append(
            Selection(o.telescopes[telescope], o.bands[band], None, both == peer, both, int(peer))
        )
    for index, name in enumerate(o.nights):
        found.append(Selection(None, None, name, o.night == index, o.night, index))
    return found
