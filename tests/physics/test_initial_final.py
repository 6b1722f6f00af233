"""The initial–final mass relation against the statements of its source, and the density of progenitor mass."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import norm

from remnantstats.errors import InputError
from remnantstats.physics import initial_final as ifr

progenitors = st.floats(0.83, 7.2)


@pytest.mark.parametrize(("mass", "lost"), [(0.85, 0.33), (7.2, 0.83)])
def test_mass_lost_is_what_the_abstract_says(mass, lost):
    # Cummings et al. 2018, ApJ 866, 21 (arXiv:1809.01673), abstract: 33 % at 0.85 to 83 % at 7.5 Msun
    assert ifr.mass_lost_fraction(mass) == pytest.approx(lost, abs=0.02)


def test_mass_lost_by_the_coefficients():
    # CHECKS.md: the coefficients (from memory) give 34.5 % at 0.85 and 83 % at 7.2
    np.testing.assert_allclose(ifr.mass_lost_fraction([0.85, 7.2]), [0.345, 0.83], atol=0.003)


@pytest.mark.parametrize(
    ("mass", "slope", "intercept"), [(1.0, 0.080, 0.489), (2.0, 0.080, 0.489), (3.2, 0.187, 0.184), (5.0, 0.107, 0.471)]
)
def test_lines_are_kept_away_from_the_breaks(mass, slope, intercept):
    assert ifr.remnant_mass(mass) == pytest.approx(slope * mass + intercept, abs=1e-12)


def test_the_lines_are_joined_within_a_thousandth():
    masses = np.linspace(0.83, 7.2, 20_001)
    printed = np.select(
        [masses <= 2.85, masses <= 3.60], [0.080 * masses + 0.489, 0.187 * masses + 0.184], 0.107 * masses + 0.471
    )
    assert np.abs(ifr.remnant_mass(masses) - printed).max() <= 0.001 + 1e-12


@given(progenitors, progenitors)
def test_a_heavier_star_never_leaves_a_lighter_remnant(first, second):
    low, high = sorted((first, second))
    assert ifr.remnant_mass(low) <= ifr.remnant_mass(high)


@given(st.floats(0.5555, 1.2413))
def test_inverse_returns_the_remnant(remnant):
    assert ifr.remnant_mass(ifr.progenitor_mass(remnant)) == pytest.approx(remnant, abs=1e-12)


def test_orbits_widen_two_to_five_times():
    # common practice, no source: the usual mass loss widens orbits 2 to 5 times
    masses = np.linspace(1.2, 5.0, 50)
    factor = ifr.orbit_expansion(masses, ifr.remnant_mass(masses))
    assert factor.min() > 2.0
    assert factor.max() < 5.0


def test_total_age_adds_the_main_sequence():
    np.testing.assert_allclose(ifr.total_age([1.0, 0.5], [1.0, 4.0]), [11.0, 0.5 + 10 / 32])


def test_nodes_integrate_a_kinked_function_exactly():
    nodes, weights = ifr.progenitor_nodes(8)
    assert weights.sum() == pytest.approx(7.2 - 0.83)
    exact = sum(
        quad(lambda m: float(ifr.remnant_mass(m)), low, high, points=[low + 0.02], epsabs=1e-12)[0]
        for low, high in zip(ifr.BREAKS[:-1], ifr.BREAKS[1:], strict=True)
    )
    assert weights @ ifr.remnant_mass(nodes) == pytest.approx(exact, abs=1e-5)
    assert np.all(np.diff(nodes) > 0)


@pytest.mark.parametrize(("remnant", "err"), [(0.6, 0.02), (0.72, 0.05), (0.5, 0.03), (1.2, 0.1)])
def test_density_against_direct_integration(remnant, err):
    def unnormalised(mass):
        return mass**-2.3 * norm.pdf(remnant, float(ifr.remnant_mass(mass)), np.hypot(err, 0.06))

    total = quad(unnormalised, 0.83, 7.2, points=[2.85, 3.6, 3.61], limit=400)[0]
    grid = np.array([0.9, 1.5, 2.85, 4.0, 7.0])
    expected = np.log([unnormalised(mass) / total for mass in grid])
    np.testing.assert_allclose(ifr.log_density_of_progenitor(grid, remnant, err)[0], expected, atol=1e-6)
    mean = quad(lambda m: m * unnormalised(m), 0.83, 7.2, points=[2.85, 3.6], limit=400)[0] / total
    square = quad(lambda m: m * m * unnormalised(m), 0.83, 7.2, points=[2.85, 3.6], limit=400)[0] / total
    moments = ifr.progenitor_moments(remnant, err)
    assert moments.mean[0] == pytest.approx(mean, abs=1e-5)
    assert moments.sd[0] == pytest.approx(np.sqrt(square - mean**2), abs=1e-5)


def test_density_of_a_narrow_star_is_still_normalised():
    nodes, weights = ifr.progenitor_nodes(2000)
    density = np.exp(ifr.log_density_of_progenitor(nodes, [0.58, 1.0], [0.002, 0.002], scatter=0.0))
    np.testing.assert_allclose(density @ weights, 1.0, atol=1e-6)


def test_density_is_nothing_outside_and_finite_inside_for_an_impossible_star():
    inside = ifr.log_density_of_progenitor([0.83, 3.0, 7.2], 0.1, 0.001)
    assert np.isfinite(inside).all()
    assert np.isneginf(ifr.log_density_of_progenitor([0.5, 8.0], 0.6, 0.02)).all()


def test_the_prior_matters_as_much_as_stated():
    # METHODS §1: at slope 0.08 a scatter of 0.06 Msun is 0.75 Msun in the progenitor; the mass function pulls down
    moments = ifr.progenitor_moments(0.66, 0.001)
    assert moments.mean[0] < ifr.progenitor_mass(0.66) - 0.2
    assert 0.3 < moments.sd[0] < 0.75


@given(st.floats(0.45, 1.3), st.floats(0.0, 0.2))
def test_moments_stay_on_the_relation(remnant, err):
    moments = ifr.progenitor_moments(remnant, err)
    if not moments.outside[0]:
        assert 0.83 < moments.mean[0] < 7.2
        assert 0.0 < moments.sd[0] < 3.2


def test_moments_rise_with_the_remnant():
    assert np.all(np.diff(ifr.progenitor_moments(np.linspace(0.45, 1.3, 40), np.full(40, 0.02)).mean) > 0)


def test_three_sigma_marks_the_stars_to_refuse():
    reach = 3 * np.hypot(0.02, 0.06)
    low, high = 0.83 * 0.080 + 0.489, 0.107 * 7.2 + 0.471
    remnants = np.array([low - reach - 1e-6, low - reach + 1e-6, 0.6, high + reach - 1e-6, high + reach + 1e-6, np.nan])
    expected = [True, False, False, False, True, True]
    assert ifr.outside_relation(remnants, 0.02).tolist() == expected
    moments = ifr.progenitor_moments(remnants, 0.02)
    assert moments.outside.tolist() == np.isnan(moments.mean).tolist() == np.isnan(moments.sd).tolist() == expected


def test_progenitor_outside_is_refused_by_name():
    with pytest.raises(InputError) as caught:
        ifr.progenitor_mass([0.6, 0.45, 1.3], labels=["A", "B", "C"])
    text = str(caught.value)
    assert "2 faults" in text
    assert "star B" in text and "remnant mass = 0.45 Msun" in text
    assert "star C" in text and "remnant mass = 1.3 Msun" in text
    assert "0.5554 to 1.241 Msun" in text
    assert "give progenitor_mass" in text
    assert np.isnan(ifr.progenitor_mass([0.45, 1.3], refuse=False)).all()


@pytest.mark.parametrize("mass", [0.8, 7.3, np.nan])
def test_remnant_of_a_star_off_the_relation_is_refused(mass):
    with pytest.raises(InputError, match=rf"(?s)row 0.*progenitor mass = {mass:.4g} Msun.*0\.83 to 7\.2 Msun"):
        ifr.remnant_mass(mass)


def test_no_spread_at_all_is_refused():
    with pytest.raises(InputError, match=r"(?s)too small together.*err = 0 Msun, scatter = 0 Msun.*at least 0\.001"):
        ifr.progenitor_moments(0.6, 0.0, scatter=0.0)
