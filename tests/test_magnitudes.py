"""Photometry: each number against a definition, a second source or a slower twin.

The two tables of magnitudes.py were written from memory of the papers they
cite, so they are also held against zero points and an extinction curve that
other papers publish.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline
from skytally.errors import InputError
from skytally.magnitudes import (
    EXTINCTION_COEFFICIENTS,
    VEGA_TO_AB,
    absolute_limit,
    change_significance,
    convert_system,
    extinction_coefficient,
    flat_spectrum_k_correction,
    reach_mpc,
    stack_depths,
    stack_groups,
    standard_band,
    vega_to_ab,
)

# Effective wavelengths in µm of the standard bands, common practice.
WAVELENGTH = {
    "u": 0.356,
    "g": 0.475,
    "r": 0.6204,
    "i": 0.7519,
    "z": 0.8992,
    "y": 0.971,
    "U": 0.366,
    "B": 0.438,
    "V": 0.545,
    "Rc": 0.641,
    "Ic": 0.798,
    "J": 1.235,
    "H": 1.662,
    "Ks": 2.159,
}


def test_five_sigma_to_three_sigma_gains_half_a_magnitude() -> None:
    # 2.5 log10(5/3) = 0.555, background-limited noise, common practice.
    assert change_significance(20.0, 5.0, 3.0) == pytest.approx(20.555, abs=5e-4)
    assert change_significance(20.0, 3.0, 5.0) == pytest.approx(19.445, abs=5e-4)


@pytest.mark.parametrize("sigma", [0.0, -5.0, np.nan, np.inf])
def test_a_significance_that_is_not_positive_is_refused(sigma: float) -> None:
    with pytest.raises(InputError, match="significance"):
        change_significance(20.0, 5.0, sigma)
    with pytest.raises(InputError, match="significance"):
        change_significance(20.0, sigma, 5.0)


def test_stacking_equal_exposures_follows_the_square_root_of_the_time() -> None:
    # n equal exposures: noise falls by sqrt(n), so the gain is 1.25 log10 n.
    assert stack_depths([20.0, 20.0]) == pytest.approx(20.376, abs=5e-4)
    assert stack_depths([20.0] * 4) == pytest.approx(20.753, abs=5e-4)


def test_stacking_unequal_exposures_matches_inverse_variance_weights() -> None:
    # Twin in flux: sigma_i from each limit, weights 1/sigma², the error of the mean.
    depths = np.array([19.1, 20.7, 21.3])
    sigma = 10 ** (-0.4 * depths) / 5.0
    combined = 1.0 / np.sqrt(np.sum(1.0 / sigma**2))
    assert stack_depths(depths) == pytest.approx(-2.5 * np.log10(5.0 * combined), abs=1e-12)


def test_groups_agree_with_stacking_one_by_one_and_leave_out_what_is_missing() -> None:
    depths = [20.0, np.nan, 21.0, np.nan, 19.0, np.inf, 18.0, 18.0]
    got = stack_groups(depths, [0, 3, 4, 6])
    expected = [stack_depths([20.0, 21.0]), np.nan, 19.0, stack_depths([18.0, 18.0])]
    np.testing.assert_allclose(got, expected, rtol=1e-14)
    assert stack_groups([], []).shape == (0,)


def test_stacking_does_not_overflow() -> None:
    # 10^(0.8 · 500) is beyond double precision; the gain of two is not.
    assert stack_depths([500.0, 500.0]) == pytest.approx(500.0 + 1.25 * np.log10(2.0))
    assert stack_depths([-900.0, -900.0]) == pytest.approx(-900.0 + 1.25 * np.log10(2.0))


def test_stacking_along_an_axis() -> None:
    depths = np.array([[20.0, np.nan], [20.0, 19.0], [20.0, 19.0]])
    gain = 1.25 * np.log10([3.0, 2.0])
    np.testing.assert_allclose(stack_depths(depths, axis=0), 20.0 - np.array([0.0, 1.0]) + gain)
    assert stack_depths(np.empty((0, 3))).shape == (0,)


@given(st.lists(st.floats(-30.0, 40.0), min_size=1, max_size=9))
def test_a_stack_is_at_least_as_deep_as_its_best_and_ignores_the_order(
    depths: list[float],
) -> None:
    stacked = float(stack_depths(depths))
    assert stacked >= max(depths) - 1e-12
    assert stacked <= max(depths) + 1.25 * np.log10(len(depths)) + 1e-12
    assert float(stack_depths(sorted(depths))) == pytest.approx(stacked, abs=1e-12)


def test_vega_offsets_agree_with_published_zero_points() -> None:
    # Flux (Jy) of a star of magnitude 0: A&A 333 231 (1998), for U to Ic;
    # AJ 126 1090 (2003), for J to Ks; values from memory. AB zero is
    # 3631 Jy by definition (ApJ 266 713, 1983).
    flux = {"U": 1790.0, "B": 4063.0, "V": 3636.0, "Rc": 3064.0, "Ic": 2416.0}
    flux |= {"J": 1594.0, "H": 1024.0, "Ks": 666.7}
    for band, value in flux.items():
        offset = -2.5 * np.log10(value / 3631.0)
        assert VEGA_TO_AB[band] == pytest.approx(offset, abs=0.04), band
    # g to z lie between those bands, and the star's spectrum is smooth there; u
    # lies beyond the Balmer jump, where it is not.
    at = [WAVELENGTH[b] for b in ("B", "V", "Rc", "Ic", "J")]
    between = [-2.5 * np.log10(flux[b] / 3631.0) for b in ("B", "V", "Rc", "Ic", "J")]
    for band in "griz":
        offset = np.interp(WAVELENGTH[band], at, between)
        assert VEGA_TO_AB[band] == pytest.approx(offset, abs=0.05), band


def test_vega_offsets_are_the_published_ones() -> None:
    # AJ 133 734 (2007), table 1, DOI 10.1086/510127; from memory.
    values = [0.91, -0.08, 0.16, 0.37, 0.54, 0.79, -0.09, 0.02, 0.21, 0.45, 0.91, 1.39, 1.85]
    bands = ["u", "g", "r", "i", "z", "U", "B", "V", "R", "I", "J", "H", "K"]
    assert [vega_to_ab(b) for b in bands] == values


def test_conversion_between_systems() -> None:
    np.testing.assert_allclose(
        convert_system([20.0, np.nan], "R", "Vega", "AB"), [20.21, np.nan], rtol=1e-15
    )
    assert convert_system(20.0, "r", "AB", "Vega") == pytest.approx(19.84)
    assert convert_system(20.0, "clear", "AB", "AB") == 20.0


def test_conversion_leaves_what_it_was_given_alone() -> None:
    depth = np.array([20.0, 21.0])
    same = convert_system(depth, "r", "AB", "AB")
    same[0] = 0.0
    convert_system(depth, "r", "Vega", "AB")
    np.testing.assert_array_equal(depth, [20.0, 21.0])


def test_own_offsets_come_first_and_extend_the_table() -> None:
    assert convert_system(20.0, "r'", "Vega", "AB", {"r": 0.2}) == pytest.approx(20.2)
    assert convert_system(20.0, "clear", "Vega", "AB", {"clear": 0.1}) == pytest.approx(20.1)
    # The log's own spelling goes before another spelling of the same band.
    assert vega_to_ab("R", {"Rc": 0.3, "R": 0.4}) == 0.4


@pytest.mark.parametrize("band", ["clear", "", "Z", "v"])
def test_a_band_without_offset_is_named_with_a_remedy(band: str) -> None:
    with pytest.raises(InputError, match="No published offset") as caught:
        convert_system(20.0, band, "Vega", "AB")
    assert repr(band) in str(caught.value) or "without a band" in str(caught.value)
    assert "vega_offset" in str(caught.value.remedy)


def test_an_unknown_system_is_refused() -> None:
    with pytest.raises(InputError, match="'ST', expected AB or Vega"):
        convert_system(20.0, "r", "ST", "AB")


@pytest.mark.parametrize(
    ("written", "band"),
    [("r", "r"), (" r' ", "r"), ("rp", "r"), ("R", "Rc"), ("I", "Ic"), ("K", "Ks"), ("g′", "g")],
)
def test_spellings_of_a_band(written: str, band: str) -> None:
    assert standard_band(written) == band


def test_case_tells_two_bands_apart() -> None:
    assert extinction_coefficient("r") != extinction_coefficient("R")
    assert standard_band("clear") == "clear"


def test_extinction_coefficients_are_the_published_ones() -> None:
    # ApJ 737 103 (2011), table 6, R_V = 3.1; from memory.
    published = {"u": 4.239, "g": 3.303, "r": 2.285, "i": 1.698, "z": 1.263, "y": 1.088}
    published |= {"U": 4.334, "B": 3.626, "V": 2.742, "R": 2.169, "I": 1.505}
    published |= {"J": 0.709, "H": 0.449, "K": 0.302}
    assert {band: extinction_coefficient(band) for band in published} == published


def test_extinction_coefficients_follow_the_published_curve() -> None:
    # The curve they were computed from: PASP 111 63 (1999), the anchors and the
    # recipe for its spline, R_V = 3.1, as A(λ)/E(B−V) against 1/λ in µm⁻¹;
    # ApJ 737 103 (2011) scales it to 0.86 of the map's E(B−V). From memory.
    inverse = [0.0, 0.377, 0.820, 1.667, 1.828, 2.141, 2.433, 3.704]
    curve = CubicSpline(inverse, [0.0, 0.265, 0.829, 2.688, 3.055, 3.806, 4.315, 6.265])
    for band, value in EXTINCTION_COEFFICIENTS.items():
        assert value == pytest.approx(0.86 * curve(1.0 / WAVELENGTH[band]), rel=0.08), band


def test_a_band_without_coefficient_has_none_and_not_zero() -> None:
    assert extinction_coefficient("clear") is None
    assert extinction_coefficient("clear", {"clear": 2.5}) == 2.5
    assert extinction_coefficient("r", {"r": 2.3}) == 2.3


@pytest.mark.parametrize("modulus", [0.0, 20.0, 33.2, 40.0, 45.0])
def test_reach_is_the_distance_of_the_modulus(modulus: float) -> None:
    expected = Distance(distmod=modulus * u.mag).to_value(u.Mpc)
    assert reach_mpc(modulus - 16.0, -16.0) == pytest.approx(expected, rel=1e-13)
    assert reach_mpc(modulus - 16.0 + 0.4, -16.0, 0.3, 0.1) == pytest.approx(expected, rel=1e-13)


def test_absolute_limit_against_the_modulus_of_astropy() -> None:
    distance = np.array([1e-5, 40.0, 400.0, 20000.0])
    expected = 21.0 - 0.3 - Distance(distance * u.Mpc).distmod.to_value(u.mag)
    np.testing.assert_allclose(absolute_limit(21.0, distance, 0.2, 0.1), expected, atol=1e-12)


def test_reach_and_absolute_limit_undo_each_other() -> None:
    limits = np.linspace(15.0, 25.0, 11)
    distance = reach_mpc(limits, -16.3, 0.25)
    np.testing.assert_allclose(absolute_limit(limits, distance, 0.25), -16.3, rtol=1e-12)


def test_no_limit_gives_no_reach() -> None:
    assert np.isnan(reach_mpc(np.nan, -16.0))
    assert reach_mpc(-np.inf, -16.0) == 0.0
    assert np.all(np.isnan(absolute_limit(20.0, [0.0, -1.0, np.nan])))


def test_k_correction_of_a_flat_spectrum() -> None:
    # Constant flux per unit frequency: the band is only squeezed, by (1+z).
    # arXiv:astro-ph/0210394, eq. 8, with L_ν constant; from memory.
    np.testing.assert_allclose(
        flat_spectrum_k_correction([0.0, 1.0]), [0.0, -2.5 * np.log10(2.0)], atol=1e-15
    )
