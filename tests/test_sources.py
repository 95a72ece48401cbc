"""Sources in time and the efficiency of detection, against formulas by hand."""

from __future__ import annotations

import numpy as np
import pytest
from skytally.sources import Detection, Source, same_band

NAN = float("nan")


def test_a_constant_source_is_there_from_the_event_on_in_any_band() -> None:
    source = Source("Ash", None, "constant", -16.0)
    for band in ("r", "w", ""):
        np.testing.assert_array_equal(
            source.absolute_magnitude([-0.1, 0.0, 1.0, 400.0], band), [NAN, -16.0, -16.0, -16.0]
        )


def test_magnitudes_by_band_leave_other_bands_unseen() -> None:
    source = Source("Ash", ("g", "r"), "constant", {"g": -15.5, "r": -16.0})
    assert source.absolute_magnitude(np.array([1.0]), "g") == -15.5
    assert source.absolute_magnitude(np.array([1.0]), "r'") == -16.0
    # R of the older system is another filter than r.
    for band in ("i", "R", ""):
        assert np.isnan(source.absolute_magnitude(np.array([1.0]), band)).all()


def test_a_spelling_of_its_own_comes_before_an_alias() -> None:
    source = Source("Ash", ("R", "Rc"), "constant", {"R": -15.0, "Rc": -16.0})
    assert source.absolute_magnitude([1.0], "Rc") == -16.0
    assert source.absolute_magnitude([1.0], "R") == -15.0
    assert same_band("r", "r'")
    assert not same_band("r", "R")


def test_a_fading_source_by_hand() -> None:
    """M = peak + fade·(t − rise); the flux before is linear, so M = peak − 2.5 log₁₀(t/rise)."""
    source = Source("Kindling", ("r",), "fade", {"r": -16.4}, fade_per_day=0.5, rise_days=0.8)
    days = np.array([-1.0, 0.0, 0.08, 0.4, 0.8, 2.8])
    expected = [NAN, NAN, -16.4 + 2.5, -16.4 + 2.5 * np.log10(2), -16.4, -15.4]
    np.testing.assert_allclose(source.absolute_magnitude(days, "r"), expected, rtol=1e-14)
    # The flux itself, relative to the peak, is t / rise.
    flux = 10 ** (-0.4 * (source.absolute_magnitude(days[2:5], "r") + 16.4))
    np.testing.assert_allclose(flux, days[2:5] / 0.8, rtol=1e-12)


def test_without_a_rise_it_begins_at_its_peak() -> None:
    source = Source("Kindling", None, "fade", -16.0, fade_per_day=0.25)
    np.testing.assert_allclose(
        source.absolute_magnitude([-1e-9, 0.0, 4.0], "z"), [NAN, -16.0, -15.0]
    )


def test_a_light_curve_is_interpolated_and_never_extrapolated() -> None:
    curves = {
        "r": (np.array([0.5, 1.0, 3.0]), np.array([-14.0, -16.0, -15.0])),
        "g": (np.array([0.2, 0.4]), np.array([-13.0, -14.0])),
    }
    source = Source("Ember", ("r", "g"), "light curve", {}, curves=curves)
    days = [0.499, 0.5, 0.75, 1.0, 2.0, 3.0, 3.001, NAN]
    np.testing.assert_allclose(
        source.absolute_magnitude(days, "r"), [NAN, -14.0, -15.0, -16.0, -15.5, -15.0, NAN, NAN]
    )
    np.testing.assert_allclose(source.absolute_magnitude([0.3, 0.5], "g"), [-13.5, NAN])
    assert np.isnan(source.absolute_magnitude([1.0], "i")).all()


def test_shapes_are_kept() -> None:
    source = Source("Kindling", None, "fade", -16.0, rise_days=1.0)
    assert source.absolute_magnitude(0.5, "r").shape == ()
    assert source.absolute_magnitude(np.empty((0,)), "r").shape == (0,)
    assert source.absolute_magnitude(np.full((2, 3), 2.0), "r").shape == (2, 3)
    assert Detection(width=0.1).efficiency(np.zeros((2, 3))).shape == (2, 3)


def test_the_default_detection_is_a_step_at_the_limit() -> None:
    at = [-5.0, -1e-9, 0.0, 1e-9, 5.0, NAN]
    np.testing.assert_array_equal(Detection().efficiency(at), [1, 1, 1, 0, 0, 0])
    shifted = Detection(offset=-0.3, plateau=0.9)
    np.testing.assert_array_equal(shifted.efficiency([-0.31, -0.29]), [0.9, 0.0])


@pytest.mark.parametrize("offset", [-0.5, 0.0, 0.2])
@pytest.mark.parametrize("width", [0.05, 0.3])
@pytest.mark.parametrize("plateau", [0.6, 1.0])
def test_the_logistic_by_hand(offset: float, width: float, plateau: float) -> None:
    """plateau / (1 + exp((m − limit − offset)/width)), written out."""
    detection = Detection(offset, width, plateau)
    assert detection.efficiency(offset) == pytest.approx(plateau / 2, rel=1e-15)
    at = np.linspace(-3, 3, 61)
    expected = plateau / (1 + np.exp((at - offset) / width))
    np.testing.assert_allclose(detection.efficiency(at), expected, rtol=1e-12)
    # One width brighter: plateau · e/(1 + e).
    assert detection.efficiency(offset - width) == pytest.approx(plateau * np.e / (1 + np.e))
    assert detection.efficiency(NAN) == 0
    np.testing.assert_array_equal(detection.efficiency([-np.inf, np.inf]), [plateau, 0.0])
    # Far from the limit nothing overflows.
    np.testing.assert_array_equal(detection.efficiency([-1e6, 1e6]), [plateau, 0.0])


def test_a_narrow_logistic_tends_to_the_step() -> None:
    at = np.array([-0.2, -0.01, 0.01, 0.2])
    np.testing.assert_allclose(
        Detection(width=1e-4).efficiency(at), Detection().efficiency(at), atol=1e-12
    )


def test_the_text_states_every_assumption() -> None:
    constant = Source("Ash", None, "constant", -16.0).text
    for words in ("Ash", "AB", "-16 in every band", "constant", "no K-correction", "one exposure"):
        assert words in constant
    assert "certain down to the limit and impossible beyond" in constant
    fading = Source(
        "Kindling",
        ("g", "r"),
        "fade",
        {"g": -15.25, "r": -16.0},
        fade_per_day=0.5,
        rise_days=0.8,
        k_correction="flat",
        detection=Detection(-0.2, 0.15, 0.95),
        visits=2,
        gap_minutes=30,
        magnitude_system="Vega",
    ).text
    for words in (
        *("Vega magnitude -15.25 in g, -16 in r", "unseen in other bands", "0.8 d", "0.5 mag/day"),
        *("flat-spectrum", "-2.5 log10(1+z)", "95 % likely", "0.2 mag brighter than the limit"),
        *("logistic of width 0.15 mag", "2 exposures at least 30 min apart"),
    ):
        assert words in fading
    curves = {"i": (np.array([0.05, 4.5]), np.array([-15.0, -14.0]))}
    curve = Source("Ember", ("i",), "light curve", {}, curves=curves).text
    assert "i (0.05 to 4.5 d)" in curve
    assert "unseen outside it" in curve
