"""Planck's function against astropy; magnitudes."""

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.models import BlackBody
from hypothesis import given
from hypothesis import strategies as st

from remnantstats.physics import radiation
from remnantstats.physics.constants import K_B, SPEED_OF_LIGHT

wavelengths = st.floats(0.1, 1000.0)
temperatures = st.floats(50.0, 100_000.0)


@pytest.mark.parametrize("wavelength", [0.2, 2.2, 4.5, 24.0, 100.0])
@pytest.mark.parametrize("temperature", [300.0, 1000.0, 6000.0, 20_000.0])
def test_planck_against_astropy(wavelength, temperature):
    expected = BlackBody(temperature * u.K)(wavelength * u.um).to_value(u.W / u.m**2 / u.Hz / u.sr)
    assert radiation.planck(wavelength, temperature) == pytest.approx(expected, rel=1e-9)


def test_rayleigh_jeans_limit():
    wavelength, temperature = 1e5, 20_000.0
    classical = 2.0 * K_B * temperature * (1e6 / wavelength) ** 2
    assert radiation.planck(wavelength, temperature) == pytest.approx(classical, rel=1e-5)
    assert radiation.photon_over_thermal(wavelength, temperature) < 1e-5


def test_integral_is_stefan_boltzmann():
    frequency = np.geomspace(1e10, 1e17, 40_001)
    brightness = radiation.planck(SPEED_OF_LIGHT / frequency * 1e6, 10_000.0)
    # σ T⁴/π, CODATA 2018
    assert np.trapezoid(brightness * frequency, np.log(frequency)) == pytest.approx(
        5.670374419e-8 * 1e16 / np.pi, rel=1e-6
    )


@given(wavelengths, temperatures, st.floats(1.01, 3.0))
def test_hotter_is_brighter_and_finite(wavelength, temperature, factor):
    cool, hot = radiation.planck(wavelength, temperature), radiation.planck(wavelength, temperature * factor)
    assert np.isfinite(hot)
    assert hot > cool or cool == hot == 0.0


@given(wavelengths, temperatures, temperatures)
def test_ratio_agrees_with_the_quotient(wavelength, first, second):
    top, bottom = radiation.planck(wavelength, first), radiation.planck(wavelength, second)
    if top > 1e-280 and bottom > 1e-280:
        assert radiation.planck_ratio(wavelength, first, second) == pytest.approx(top / bottom, rel=1e-9)


def test_scaled_blackbody():
    flux = radiation.scaled_blackbody([2.2, 4.5], 15_000.0, 2.2, 1.5)
    expected = BlackBody(15_000.0 * u.K)
    assert flux[0] == pytest.approx(1.5)
    assert flux[1] == pytest.approx(1.5 * (expected(4.5 * u.um) / expected(2.2 * u.um)).value)


def test_magnitudes_against_astropy():
    magnitudes = np.array([12.0, 16.4, 20.0])
    expected = (magnitudes * u.ABmag).to_value(u.mJy)
    np.testing.assert_allclose(radiation.flux_of_magnitude(magnitudes, 3631.0), expected, rtol=1e-4)


def test_magnitude_error_is_the_slope():
    slope = radiation.flux_of_magnitude(15.0, 179.7) - radiation.flux_of_magnitude(15.0 + 1e-6, 179.7)
    assert radiation.flux_error_of_magnitude(15.0, 1e-6, 179.7) == pytest.approx(slope, rel=1e-5)


@given(st.floats(-5.0, 30.0), st.floats(0.01, 5.0))
def test_fainter_is_less(magnitude, step):
    assert radiation.flux_of_magnitude(magnitude + step, 100.0) < radiation.flux_of_magnitude(magnitude, 100.0)
