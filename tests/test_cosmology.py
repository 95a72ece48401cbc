"""Redshift, comoving volume and K-corrected reach against astropy, evaluated directly."""

from __future__ import annotations

import astropy.cosmology
import numpy as np
import pytest
from astropy import units as u
from skytally.cosmology import DEFAULT_COSMOLOGY, Cosmology, known_cosmologies
from skytally.errors import InputError
from skytally.magnitudes import flat_spectrum_k_correction, reach_mpc

# Between the table's knots and down to where redshift is lost in the last digits.
REDSHIFTS = np.concatenate((np.geomspace(1e-6, 2.6, 97), np.geomspace(2.7, 990.0, 41)))


@pytest.mark.parametrize("name", known_cosmologies())
def test_redshift_and_volume_against_astropy(name: str) -> None:
    model = getattr(astropy.cosmology, name)
    ours = Cosmology.named(name)
    distance = model.luminosity_distance(REDSHIFTS).to_value(u.Mpc)
    assert distance[96] > 20_000
    np.testing.assert_allclose(ours.redshift(distance), REDSHIFTS, rtol=1e-7)
    volume = model.comoving_volume(REDSHIFTS).to_value(u.Mpc**3) / (4 * np.pi)
    np.testing.assert_allclose(ours.comoving_volume_per_sr(distance), volume, rtol=1e-7)


def test_nearby_the_volume_is_euclidean() -> None:
    ours = Cosmology.named()
    assert ours.comoving_volume_per_sr(0.01) == pytest.approx(0.01**3 / 3, rel=1e-5)
    assert ours.comoving_volume_per_sr(0.0) == 0.0
    assert ours.redshift(0.0) == 0.0


def test_the_default_is_named() -> None:
    assert DEFAULT_COSMOLOGY == "Planck18"
    assert Cosmology.named().name == "Planck18"
    at = astropy.cosmology.Planck18.luminosity_distance(0.1).to_value(u.Mpc)
    assert Cosmology.named().redshift(at) == pytest.approx(0.1, rel=1e-6)


def test_flat_spectrum_reach_satisfies_the_distance_modulus() -> None:
    # m = M + 5 log10(d/10 pc) + K at the reach, with astropy's redshift there.
    model = astropy.cosmology.Planck18
    absolute = np.array([-10.0, -16.0, -20.0, -24.0, -26.0])
    plain = reach_mpc(22.5, absolute)
    reach = Cosmology.named().flat_spectrum_reach(plain)
    assert np.all(reach > plain)
    z = astropy.cosmology.z_at_value(model.luminosity_distance, reach * u.Mpc).to_value(u.one)
    modulus = 5 * np.log10(reach * 1e6 / 10)
    np.testing.assert_allclose(absolute + modulus + flat_spectrum_k_correction(z), 22.5, atol=3e-6)


def test_out_of_range_is_missing() -> None:
    ours = Cosmology.named()
    for function in (ours.redshift, ours.comoving_volume_per_sr, ours.flat_spectrum_reach):
        assert np.isnan(function([-1.0, np.nan, np.inf, 1e12])).all()
        assert function(np.full((2, 3), 100.0)).shape == (2, 3)
    assert ours.redshift(ours.limit_mpc) == pytest.approx(1000.0, rel=1e-6)


@pytest.mark.parametrize("name", ["Planck81", "", "planck18", "FlatLambdaCDM", "__doc__"])
def test_an_unknown_cosmology_is_refused_with_the_names(name: str) -> None:
    with pytest.raises(InputError, match="expected one that astropy knows") as caught:
        Cosmology.named(name)
    assert repr(name) in str(caught.value)
    assert all(known in str(caught.value) for known in known_cosmologies())
