"""Limiting magnitudes: systems, significance, stacking, extinction, modulus.

Limits are of point sources against the background's noise (background-limited):
the least flux seen scales with the significance asked for, and the noise of a
stack with the square root of the time.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from skytally.errors import InputError

__all__ = [
    "EXTINCTION_COEFFICIENTS",
    "EXTINCTION_SOURCE",
    "VEGA_TO_AB",
    "VEGA_TO_AB_SOURCE",
    "absolute_limit",
    "change_significance",
    "convert_system",
    "extinction_coefficient",
    "flat_spectrum_k_correction",
    "reach_mpc",
    "stack_depths",
    "stack_groups",
    "standard_band",
    "vega_to_ab",
]

Floats = NDArray[np.float64]

VEGA_TO_AB_SOURCE = "AJ 133 734 (2007), table 1, DOI 10.1086/510127"
"""Where `VEGA_TO_AB` comes from."""

VEGA_TO_AB: Mapping[str, float] = {
    "u": 0.91,
    "g": -0.08,
    "r": 0.16,
    "i": 0.37,
    "z": 0.54,
    "U": 0.79,
    "B": -0.09,
    "V": 0.02,
    "Rc": 0.21,
    "Ic": 0.45,
    "J": 0.91,
    "H": 1.39,
    "Ks": 1.85,
}
"""m_AB − m_Vega in magnitudes per standard band."""

EXTINCTION_SOURCE = "ApJ 737 103 (2011), table 6, R_V = 3.1, DOI 10.1088/0004-637X/737/2/103"
"""Where `EXTINCTION_COEFFICIENTS` comes from."""

# The paper lists a band once per filter set. Taken here: u to z of the first
# ugriz set, y of the six-band ugrizy set with its filter near 0.97 µm, U to Ic
# of the standard-star set, and J, H, K of the infrared set with the 2.2 µm K;
# K and Ks differ by less than the law itself is uncertain.
EXTINCTION_COEFFICIENTS: Mapping[str, float] = {
    "u": 4.239,
    "g": 3.303,
    "r": 2.285,
    "i": 1.698,
    "z": 1.263,
    "y": 1.088,
    "U": 4.334,
    "B": 3.626,
    "V": 2.742,
    "Rc": 2.169,
    "Ic": 1.505,
    "J": 0.709,
    "H": 0.449,
    "Ks": 0.302,
}
"""A_b / E(B−V) per standard band, E(B−V) on the scale of the dust map of 1998."""

# Case tells bands apart (r is not R), so only spellings that mean one band are here.
_ALIASES: Mapping[str, str] = {
    **{f"{band}'": band for band in "ugriz"},
    **{f"{band}p": band for band in "ugriz"},
    **{f"{band}_p": band for band in "ugriz"},
    "R": "Rc",
    "R_c": "Rc",
    "RC": "Rc",
    "I": "Ic",
    "I_c": "Ic",
    "IC": "Ic",
    "K": "Ks",
    "K_s": "Ks",
    "KS": "Ks",
    "Kshort": "Ks",
    "j": "J",
    "h": "H",
    "k": "Ks",
    "ks": "Ks",
}

# log10(10 pc / 1 Mpc)
_LOG_TEN_PARSECS = -5.0


def _floats(values: ArrayLike) -> Floats:
    return np.asarray(values, dtype=np.float64)


def standard_band(band: str) -> str:
    """Name of a band in its photometric system; the text itself if it is no known alias.

    ``r`` and ``r'`` are the r of ugriz; ``R`` is the Rc of UBVRcIc.
    """
    text = band.strip().replace("’", "'").replace("′", "'")
    return _ALIASES.get(text, text)


def _look_up(band: str, own: Mapping[str, float] | None, published: Mapping[str, float]) -> float:
    """Value for a band, the user's own before the published; NaN if there is neither."""
    own = own or {}
    if band in own:
        return float(own[band])
    name = standard_band(band)
    for key, value in own.items():
        if standard_band(key) == name:
            return float(value)
    return published.get(name, np.nan)


def vega_to_ab(band: str, offsets: Mapping[str, float] | None = None) -> float:
    """m_AB − m_Vega of a band in magnitudes.

    Parameters
    ----------
    band : str
        Band as a log writes it.
    offsets : mapping of str to float, optional
        The user's own offsets; they come before the published ones
        (AJ 133 734, 2007, table 1, DOI 10.1086/510127).

    Raises
    ------
    InputError
        If neither the user nor the table has the band.
    """
    offset = _look_up(band, offsets, VEGA_TO_AB)
    if not np.isfinite(offset):
        named = f"band {band.strip()!r}" if band.strip() else "an exposure without a band"
        key = band.strip() or "the band"
        raise InputError(
            f"No published offset between Vega and AB magnitudes is known for {named} "
            f"(known: {', '.join(VEGA_TO_AB)})",
            remedy=(
                "Give m_AB - m_Vega yourself in the telescope's depth table, as in "
                f'depth = {{ system = "Vega", vega_offset = {{ "{key}" = 0.16 }} }}, '
                "or give its limits as AB magnitudes."
            ),
        )
    return offset


def convert_system(
    depth: ArrayLike,
    band: str,
    from_system: str,
    to_system: str,
    offsets: Mapping[str, float] | None = None,
) -> Floats:
    """Convert magnitudes of one band between the AB and the Vega system.

    Parameters
    ----------
    depth : array_like
        Magnitudes, any shape; NaN is missing and stays so.
    band : str
        Band as a log writes it.
    from_system, to_system : {"AB", "Vega"}
        The two systems.
    offsets : mapping of str to float, optional
        The user's own m_AB − m_Vega per band, as in `vega_to_ab`.

    Raises
    ------
    InputError
        If a system is neither, or the band has no offset.
    """
    magnitude = np.array(depth, dtype=np.float64)
    for system in (from_system, to_system):
        if system not in {"AB", "Vega"}:
            raise InputError(
                f"Found magnitude system {system!r}, expected AB or Vega",
                remedy='Write "AB" or "Vega".',
            )
    if from_system == to_system:
        return magnitude
    offset = vega_to_ab(band, offsets)
    return magnitude + (offset if to_system == "AB" else -offset)


def change_significance(depth: ArrayLike, from_sigma: float, to_sigma: float) -> Floats:
    """Bring a limit from one significance to another, m(n₂) = m(n₁) − 2.5 log₁₀(n₂/n₁).

    Holds where the background sets the noise, whatever the source's flux.

    Parameters
    ----------
    depth : array_like
        Limiting magnitudes, any shape; NaN is missing and stays so.
    from_sigma, to_sigma : float
        Signal to noise of the limit as given and as wanted, > 0.

    Raises
    ------
    InputError
        If a significance is not a positive number.
    """
    for sigma in (from_sigma, to_sigma):
        if not (np.isfinite(sigma) and sigma > 0):
            raise InputError(
                f"Found a significance of {sigma}, expected a number above 0",
                remedy="Give the signal to noise of the limits, for example 5.",
            )
    return np.asarray(_floats(depth) - 2.5 * np.log10(to_sigma / from_sigma))


def stack_groups(depths: ArrayLike, first: ArrayLike) -> Floats:
    """Depth of the stack of each group, 1.25 log₁₀ Σ 10^{0.8 mᵢ}.

    Flux errors σᵢ ∝ 10^{−0.4 mᵢ} combined with inverse-variance weights.

    Parameters
    ----------
    depths : array_like, shape (n,)
        Limiting magnitudes of one band, system and significance, group after
        group; what is not finite is missing and adds nothing.
    first : int array_like, shape (groups,)
        Where each group begins: 0 first, strictly rising, below n.

    Returns
    -------
    float64 array, shape (groups,)
        NaN where a group has no depth at all.
    """
    start = np.asarray(first, dtype=np.int64)
    if start.size == 0:
        return np.empty(0)
    values = _floats(depths)
    known = np.where(np.isfinite(values), values, -np.inf)
    deepest = np.maximum.reduceat(known, start)
    # Relative to the deepest of its group no power can overflow.
    finite = np.where(np.isfinite(deepest), deepest, 0.0)
    lengths = np.diff(start, append=values.size)
    gain = np.add.reduceat(10.0 ** (0.8 * (known - np.repeat(finite, lengths))), start)
    empty = gain == 0
    return np.where(empty, np.nan, finite + 1.25 * np.log10(np.where(empty, 1.0, gain)))


def stack_depths(depths: ArrayLike, axis: int = -1) -> Floats:
    """Depth of the stack along one axis; otherwise as `stack_groups`.

    Parameters
    ----------
    depths : array_like
        Limiting magnitudes; what is not finite is missing and adds nothing.
    axis : int
        The axis that is stacked and disappears, of length ≥ 1.
    """
    rows = np.moveaxis(_floats(depths), axis, -1)
    first = np.arange(rows.size // rows.shape[-1]) * rows.shape[-1]
    return stack_groups(rows.ravel(), first).reshape(rows.shape[:-1])


def extinction_coefficient(
    band: str, coefficients: Mapping[str, float] | None = None
) -> float | None:
    """A_b / E(B−V) of a band; None where nobody has given one.

    None is not zero: such a limit is not corrected for extinction, and that
    must be said.

    Parameters
    ----------
    band : str
        Band as a log writes it.
    coefficients : mapping of str to float, optional
        The user's own; they come before the published ones (ApJ 737 103, 2011,
        table 6, DOI 10.1088/0004-637X/737/2/103, R_V = 3.1).
    """
    value = _look_up(band, coefficients, EXTINCTION_COEFFICIENTS)
    return value if np.isfinite(value) else None


def reach_mpc(
    limit: ArrayLike,
    absolute: ArrayLike,
    extinction: ArrayLike = 0.0,
    k_correction: ArrayLike = 0.0,
) -> Floats:
    """Luminosity distance (Mpc) at which a source is at the limit.

    log₁₀(d/10 pc) = (m − M − A − K)/5, the definition of the distance modulus.

    Parameters
    ----------
    limit, absolute : array_like
        Limiting and absolute magnitude in one system; NaN gives NaN, a limit
        of −inf a reach of 0.
    extinction, k_correction : array_like
        A_b and K in magnitudes; all four broadcast together.
    """
    modulus = _floats(limit) - _floats(absolute) - _floats(extinction) - _floats(k_correction)
    return np.asarray(10.0 ** (modulus / 5.0 + _LOG_TEN_PARSECS))


def absolute_limit(
    limit: ArrayLike,
    distance_mpc: ArrayLike,
    extinction: ArrayLike = 0.0,
    k_correction: ArrayLike = 0.0,
) -> Floats:
    """Faintest absolute magnitude seen at a luminosity distance: the inverse of `reach_mpc`.

    Parameters
    ----------
    limit : array_like
        Limiting magnitude.
    distance_mpc : array_like
        Luminosity distance; NaN is returned where it is not above 0.
    extinction, k_correction : array_like
        A_b and K in magnitudes; all four broadcast together.
    """
    distance = _floats(distance_mpc)
    log_distance = np.log10(np.where(distance > 0, distance, np.nan)) - _LOG_TEN_PARSECS
    modulus = 5.0 * log_distance
    return np.asarray(_floats(limit) - modulus - _floats(extinction) - _floats(k_correction))


def flat_spectrum_k_correction(redshift: ArrayLike) -> Floats:
    """K-correction of a source with constant flux per unit frequency, −2.5 log₁₀(1+z)."""
    return np.asarray(-2.5 * np.log10(1.0 + _floats(redshift)))
