"""Infrared excess to the dust's luminosity and its limit."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from remnantstats.physics import dust

BANDS = np.array([3.4, 4.5, 8.0])
FIXED = dust.DustTemperature(np.array([1000.0]), np.array([1.0]))
WIDE = dust.lognormal_temperature(1000.0, 0.15)


def test_the_two_figures_of_the_methods():
    # METHODS §11: at 4.5 µm, 20,000 K and 1,000 K, a unit of F_exc/F_phot
    assert dust.dust_per_excess(4.5, 20_000.0, 1000.0) == pytest.approx(8.46e-4, abs=0.005e-4)
    assert dust.dust_per_excess_rayleigh_jeans(4.5, 20_000.0, 1000.0) == pytest.approx(9.17e-4, abs=0.005e-4)


def test_the_two_forms_meet_for_hot_stars():
    exact, classical = dust.dust_per_excess(20.0, 1e6, 300.0), dust.dust_per_excess_rayleigh_jeans(20.0, 1e6, 300.0)
    assert classical / exact == pytest.approx(1.0, abs=1e-3)


@given(st.floats(1.0, 30.0), st.floats(6000.0, 30_000.0), st.floats(300.0, 2000.0), st.floats(1.01, 2.0))
def test_conversion_is_finite_positive_and_falls_with_the_star(wavelength, teff, temperature, factor):
    value = dust.dust_per_excess(wavelength, teff, temperature)
    assert 0.0 < value < np.inf
    assert dust.dust_per_excess(wavelength, teff * factor, temperature) < value
    assert dust.dust_per_excess_rayleigh_jeans(wavelength, teff, temperature) > value


def test_significance_and_its_floor():
    assert dust.excess_significance(1.5, 0.03, 1.0, 0.04) == pytest.approx(10.0)
    # a few per cent of calibration sets the floor, however deep the photometry
    assert dust.excess_error(1e-9, 0.05) == pytest.approx(0.05)


def test_bands_combine_by_inverse_variance():
    mean, error = dust.combine_bands([[1.0, 3.0, np.nan], [np.nan, np.nan, 1.0], [np.nan] * 3], [[1.0, 2.0, 1.0]] * 3)
    np.testing.assert_allclose(mean, [1.4, 1.0, np.nan])
    np.testing.assert_allclose(error, [np.sqrt(0.8), 1.0, np.nan])


def observe(tau, teff=15_000.0, temperature=1000.0, err=0.03, calibration=0.03, bands=BANDS):
    """Fluxes over a photosphere of 1 mJy, without noise."""
    excess = np.atleast_1d(tau)[:, None] / dust.dust_per_excess(bands, teff, temperature)
    return 1.0 + excess, np.full_like(excess, err), np.ones_like(excess), np.full_like(excess, calibration)


def test_one_band_is_the_formula():
    flux, err, star, star_err = observe([2e-3], bands=BANDS[1:2])
    result = dust.dust_from_bands(flux, err, star, star_err, BANDS[1:2], [15_000.0], FIXED)
    unit = float(dust.dust_per_excess(4.5, 15_000.0, 1000.0))
    assert result.log_dust[0] == pytest.approx(np.log10(2e-3))
    assert result.log_limit[0] == pytest.approx(np.log10(3.0 * np.hypot(0.03, 0.03) * unit))
    assert result.significance[0] == pytest.approx(dust.excess_significance(flux, err, star, star_err)[0, 0])
    assert result.decision_err[0] == pytest.approx(1.0 / (result.significance[0] * np.log(10.0)))
    assert result.calibration_err[0] == pytest.approx(0.0, abs=1e-12)


def test_several_bands_agree_with_the_weighted_mean():
    rng = np.random.default_rng(3)
    flux, err, star, star_err = observe(np.full(20, 3e-3))
    flux = flux + rng.normal(0.0, 0.04, flux.shape)
    result = dust.dust_from_bands(flux, err, star, star_err, BANDS, np.full(20, 15_000.0), FIXED)
    unit = dust.dust_per_excess(BANDS, 15_000.0, 1000.0)
    mean, error = dust.combine_bands((flux - star) * unit, dust.excess_error(err, star_err) * unit)
    np.testing.assert_allclose(10**result.log_dust, mean)
    np.testing.assert_allclose(result.significance, mean / error)
    np.testing.assert_allclose(10**result.log_limit, 3.0 * error)


def test_decision_error_against_brute_force():
    rng = np.random.default_rng(4)
    flux, err, star, star_err = observe(np.full(40_000, 4e-3))
    noisy = flux + rng.normal(0.0, np.hypot(0.03, 0.03), flux.shape)
    result = dust.dust_from_bands(noisy, err, star, star_err, BANDS, np.full(40_000, 15_000.0), FIXED)
    assert np.std(result.log_dust) == pytest.approx(np.median(result.decision_err), rel=0.03)


def test_a_star_at_its_limit_is_found_half_the_time():
    rng = np.random.default_rng(5)
    silent = observe([0.0])
    limit = dust.dust_from_bands(*silent, BANDS, [15_000.0], FIXED).log_limit[0]
    flux, err, star, star_err = observe(np.full(20_000, 10**limit))
    noisy = flux + rng.normal(0.0, np.hypot(0.03, 0.03), flux.shape)
    found = dust.dust_from_bands(noisy, err, star, star_err, BANDS, np.full(20_000, 15_000.0), FIXED).detected
    assert found.mean() == pytest.approx(0.5, abs=4 * 0.5 / np.sqrt(20_000))


def test_a_shared_error_is_not_averaged_away():
    rng = np.random.default_rng(6)
    n, shared = 40_000, 0.05
    flux, err, star, star_err = observe(np.zeros(n))
    noisy = flux + rng.normal(0.0, np.hypot(0.03, 0.03), flux.shape) + shared * rng.normal(size=(n, 1))
    arguments = (noisy, err, star, star_err, BANDS, np.full(n, 15_000.0), FIXED)
    assert dust.dust_from_bands(*arguments, common_err=shared).significance.std() == pytest.approx(1.0, abs=0.02)
    assert dust.dust_from_bands(*arguments).significance.std() > 1.3


@given(st.floats(-4.5, -1.0), st.floats(600.0, 1800.0), st.floats(8000.0, 25_000.0))
def test_value_exceeds_limit_just_where_detected(log_tau, temperature, teff):
    result = dust.dust_from_bands(*observe([10**log_tau], teff, temperature), BANDS, [teff], WIDE)
    assert np.isfinite(result.log_limit[0])
    assert result.detected[0] == (result.significance[0] >= 3.0)
    if result.detected[0]:
        assert result.log_dust[0] >= result.log_limit[0] - 1e-12
        assert result.log_dust[0] - result.log_limit[0] == pytest.approx(np.log10(result.significance[0] / 3.0))
    else:
        assert np.isnan(result.log_dust[0]) and np.isnan(result.decision_err[0])


def test_one_band_tells_nothing_of_the_temperature():
    faint, bright = (
        dust.dust_from_bands(*observe([tau], bands=BANDS[1:2]), BANDS[1:2], [15_000.0], WIDE) for tau in (0.0, 0.02)
    )
    unit = np.log10(dust.dust_per_excess(4.5, 15_000.0, WIDE.nodes))
    spread = np.sqrt(WIDE.weights @ (unit - WIDE.weights @ unit) ** 2)
    np.testing.assert_allclose([faint.calibration_err[0], bright.calibration_err[0]], spread)
    assert bright.dust_temperature[0] == pytest.approx(WIDE.weights @ WIDE.nodes)


@pytest.mark.parametrize("temperature", [800.0, 1300.0])
def test_colours_narrow_the_temperature(temperature):
    prior = dust.uniform_temperature(500.0, 1800.0, 40)
    flux, err, star, star_err = observe([0.03], temperature=temperature, err=0.05, calibration=0.03)
    result = dust.dust_from_bands(flux, err, star, star_err, BANDS, [15_000.0], prior)
    assert result.dust_temperature[0] == pytest.approx(temperature, rel=0.05)
    assert result.log_dust[0] == pytest.approx(np.log10(0.03), abs=0.03)
    single = dust.dust_from_bands(flux[:, :1], err[:, :1], star[:, :1], star_err[:, :1], BANDS[:1], [15_000.0], prior)
    assert result.calibration_err[0] < 0.5 * single.calibration_err[0]


def test_missing_bands_are_left_out():
    flux, err, star, star_err = observe([0.01, 0.01])
    flux[0, 2] = np.nan
    flux[1] = np.nan
    result = dust.dust_from_bands(flux, err, star, star_err, BANDS, [15_000.0, 15_000.0], WIDE)
    pair = dust.dust_from_bands(flux[:1, :2], err[:1, :2], star[:1, :2], star_err[:1, :2], BANDS[:2], [15_000.0], WIDE)
    assert result.log_dust[0] == pytest.approx(pair.log_dust[0])
    assert not result.detected[1]
    for values in (result.log_limit, result.significance, result.calibration_err, result.dust_temperature):
        assert np.isnan(values[1])


def test_temperature_priors():
    assert WIDE.weights.sum() == pytest.approx(1.0)
    assert WIDE.reference == pytest.approx(1000.0)
    assert np.sqrt(WIDE.weights @ np.log10(WIDE.nodes / 1000.0) ** 2) == pytest.approx(0.15)
    flat = dust.uniform_temperature(600.0, 1400.0)
    assert flat.weights.sum() == pytest.approx(1.0)
    assert flat.weights @ flat.nodes == pytest.approx(1000.0)
    assert np.sqrt(flat.weights @ (flat.nodes - 1000.0) ** 2) == pytest.approx(800.0 / np.sqrt(12.0))
