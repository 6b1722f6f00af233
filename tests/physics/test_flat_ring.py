"""The flat opaque ring against its analytic limits."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from remnantstats.errors import InputError
from remnantstats.physics import ring
from remnantstats.physics.constants import K_B, PARSEC, R_SUN, SPEED_OF_LIGHT
from remnantstats.physics.dust import dust_per_excess
from remnantstats.physics.radiation import planck

STAR = {"teff": 12_000.0, "stellar_radius": 0.013, "distance": 40.0}


def flux(wavelength=4.5, inner=12.0, outer=50.0, cos_inclination=1.0, **changes):
    return ring.ring_flux(wavelength, inner=inner, outer=outer, cos_inclination=cos_inclination, **(STAR | changes))


@given(st.floats(0.0, 1.0))
def test_tilt_scales_the_flux(cos_inclination):
    assert flux(cos_inclination=cos_inclination) == pytest.approx(cos_inclination * flux())


def test_narrow_ring_is_one_temperature():
    inner, outer = 20.0, 20.001
    temperature = ring.ring_temperature(20.0005, 12_000.0)
    area = np.pi * (outer**2 - inner**2) * (0.013 * R_SUN) ** 2
    expected = 0.7 * area * planck(4.5, temperature) / (40.0 * PARSEC) ** 2 * 1e29
    assert flux(inner=inner, outer=outer, cos_inclination=0.7) == pytest.approx(expected, rel=1e-6)


def test_against_adaptive_quadrature():
    def element(radius):
        return float(planck(4.5, ring.ring_temperature(radius, 12_000.0))) * radius

    for inner, outer in ((5.0, 8.0), (12.0, 50.0), (2.0, 200.0)):
        integral = quad(element, inner, outer, epsabs=0.0, epsrel=1e-11, limit=500)[0]
        expected = 2 * np.pi * (0.013 * R_SUN / (40.0 * PARSEC)) ** 2 * integral * 1e29
        assert flux(inner=inner, outer=outer) == pytest.approx(expected, rel=1e-8)


def test_long_waves():
    # Rayleigh–Jeans: ∫ 2kT ν²/c² R dR with T ∝ R^(−3/4)
    wavelength, inner, outer = 1e5, 12.0, 50.0
    first = ring.ring_temperature(1.0, 12_000.0)
    integral = 2 * K_B * first / (wavelength * 1e-6) ** 2 * (outer**1.25 - inner**1.25) / 1.25
    expected = 2 * np.pi * (0.013 * R_SUN / (40.0 * PARSEC)) ** 2 * integral * 1e29
    assert flux(wavelength=wavelength) == pytest.approx(expected, rel=1e-3)


def test_apparent_luminosity_is_the_integral_of_the_flux():
    frequency = np.geomspace(1e10, 1e16, 4001)
    wavelength = SPEED_OF_LIGHT / frequency * 1e6
    of_ring = np.trapezoid(flux(wavelength=wavelength, cos_inclination=0.4) * frequency, np.log(frequency))
    of_star = np.trapezoid(ring.star_flux(wavelength, **STAR) * frequency, np.log(frequency))
    assert ring.ring_dust(12.0, 50.0, 0.4) == pytest.approx(of_ring / of_star, rel=1e-4)


def test_energy_is_kept():
    """The mean over tilts is what both faces take up: 2 ∫ (2/3π)(R_star/R)³ σT⁴ 2πR dR over 4πR_star² σT⁴."""
    taken_up = quad(lambda r: 2 * (2 / (3 * np.pi)) * r**-3 * 2 * np.pi * r, 12.0, 50.0)[0] / (4 * np.pi)
    mean = quad(lambda mu: float(ring.ring_dust(12.0, 50.0, mu)), 0.0, 1.0)[0]
    assert mean == pytest.approx(taken_up)


def test_temperature_of_jura():
    # Jura 2003: T = (2/3π)^(1/4) (R_star/R)^(3/4) T_star
    assert ring.ring_temperature(16.0, 10_000.0) == pytest.approx((2 / (3 * np.pi)) ** 0.25 * 10_000.0 / 8.0)


def test_one_band_does_not_depend_on_distance():
    value = ring.ring_band_dust(4.5, 12_000.0, 12.0, 50.0, 0.5, 1000.0)
    by_hand = flux(cos_inclination=0.5) / ring.star_flux(4.5, **STAR)
    assert value == pytest.approx(by_hand * dust_per_excess(4.5, 12_000.0, 1000.0))
    # a band near the peak of the ring's light gives its luminosity to a factor of two
    assert 0.5 < value / ring.ring_dust(12.0, 50.0, 0.5) < 2.0


@given(st.floats(2.0, 30.0), st.floats(1.1, 10.0), st.floats(1.01, 3.0))
def test_wider_rings_are_brighter(inner, width, factor):
    base = flux(inner=inner, outer=inner * width)
    assert np.isfinite(base)
    assert flux(inner=inner, outer=inner * width * factor) > base
    assert flux(inner=inner, outer=inner * width, teff=14_000.0) > base
    assert ring.ring_dust(inner, inner * width * factor, 1.0) > ring.ring_dust(inner, inner * width, 1.0)


def test_inclination_scatter_against_draws():
    tilt = 1.0 - np.random.default_rng(0).random(400_000)
    assert np.log10(tilt).mean() == pytest.approx(ring.INCLINATION_MEAN, abs=0.003)
    assert np.log10(tilt).std() == pytest.approx(ring.INCLINATION_SD, abs=0.005)


def test_simulation():
    n = 20_000
    drawn = ring.simulate_rings(
        [3.4, 4.5], np.full(n, 12_000.0), 0.013, 12.0, 50.0, np.linspace(20.0, 80.0, n), rng=np.random.default_rng(7)
    )
    assert drawn.flux.shape == drawn.photosphere.shape == (n, 2)
    face_on = np.log10(ring.ring_dust(12.0, 50.0, 1.0))
    assert drawn.log_dust.mean() - face_on == pytest.approx(ring.INCLINATION_MEAN, abs=0.015)
    assert drawn.log_dust.std() == pytest.approx(ring.INCLINATION_SD, abs=0.02)
    np.testing.assert_allclose(drawn.flux[0, 1], flux(distance=20.0, cos_inclination=drawn.cos_inclination[0]))
    again = ring.simulate_rings(
        [3.4, 4.5], np.full(n, 12_000.0), 0.013, 12.0, 50.0, np.linspace(20.0, 80.0, n), rng=np.random.default_rng(7)
    )
    np.testing.assert_array_equal(drawn.flux, again.flux)


@pytest.mark.parametrize(("inner", "outer"), [(50.0, 12.0), (0.5, 12.0), (12.0, 12.0), (np.nan, 12.0)])
def test_edges_out_of_order_are_refused(inner, outer):
    for call in (
        lambda: flux(inner=[12.0, inner], outer=[50.0, outer]),
        lambda: ring.ring_dust([12, inner], [50, outer], 1),
    ):
        with pytest.raises(InputError) as caught:
            call()
        text = str(caught.value)
        assert "edges of a ring are not in order" in text and "ring 1" in text
        assert f"inner = {inner:.4g}, outer = {outer:.4g}" in text and "1 < inner < outer" in text
