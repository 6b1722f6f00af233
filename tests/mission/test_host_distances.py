"""Nearest hosts against the closed form, published constants and simulation; the aperture against its formula."""

import numpy as np
import pytest
import scipy.stats
from helpers.known_priors import beta_prior, known_prior, single_prior

from remnantstats.mission import size_mission
from remnantstats.mission.distances import aperture, neighbour_quantile


def test_mean_nearest_distance_at_fixed_density():
    # Chandrasekhar 1943, Rev. Mod. Phys. 15, 1: 0.55396 n^(−1/3); the mean as the integral of the quantiles
    density = 0.02
    points = (np.arange(2000) + 0.5) / 2000
    distances = [neighbour_quantile(1, p, np.full(1, density)) for p in points]
    assert np.mean(distances) == pytest.approx(0.55396 * density ** (-1 / 3), rel=2e-4)


@pytest.mark.parametrize("k", [1, 2, 5])
def test_fixed_density_gives_the_gamma_law(k):
    # METHODS §9: (4π/3) n d³ ~ Gamma(k, 1)
    for p in (0.05, 0.5, 0.95):
        distance = neighbour_quantile(k, p, np.full(10, 0.004))
        assert 4 * np.pi / 3 * 0.004 * distance**3 == pytest.approx(scipy.stats.gamma.ppf(p, k), rel=1e-9)


def test_distances_against_simulated_stars():
    rng = np.random.default_rng(7)
    density, radius, fields = 0.01, 30.0, 4000
    occurrence = np.repeat(rng.beta(6, 10, 400), 10)
    nearest = np.full((fields, 3), np.inf)
    for field in range(fields):
        # stars in a sphere about the Sun, each a host or not
        stars = rng.poisson(density * 4 * np.pi / 3 * radius**3)
        distance = np.sort(radius * rng.random(stars)[rng.random(stars) < occurrence[field]] ** (1 / 3))
        nearest[field, : min(3, distance.size)] = distance[:3]
    for k in (1, 2, 3):
        for p in (0.05, 0.5, 0.95):
            found = neighbour_quantile(k, p, density * occurrence)
            # share of the fields with a nearer k-th host, within 4 binomial standard errors
            assert np.mean(nearest[:, k - 1] < found) == pytest.approx(p, abs=4 * np.sqrt(p * (1 - p) / fields))


def test_draws_without_hosts_push_the_quantiles_to_infinity():
    earthlike = np.where(np.arange(1000) < 300, 0.0, 1.0)
    size = size_mission(
        known_prior(np.linspace(0.2, 0.3, 1000), earthlike), {"completeness": 1, "max_targets": 3, "density": 0.01}
    )
    assert np.all(np.isfinite(size.distances[["q05", "q50"]]))
    assert np.all(np.isinf(size.distances["q95"]))
    nothing = size_mission(
        known_prior(np.linspace(0.2, 0.3, 1000), 0.0), {"completeness": 1, "max_targets": 3, "density": 0.01}
    )
    assert np.all(np.isinf(nothing.distances[["q05", "q50", "q95"]]))
    assert nothing.table["p_at_least_one"].iloc[-1] == 0


def test_distances_of_a_prior_that_reaches_to_zero_are_finite():
    size = size_mission(beta_prior(0.2, 5), {"completeness": 1, "max_targets": 3, "density": 0.01})
    values = size.distances[["q05", "q50", "q95"]].to_numpy()
    assert np.all(np.isfinite(values))
    assert np.all(np.diff(values, axis=0) > 0)
    assert np.all(np.diff(values, axis=1) > 0)


def test_aperture_formula():
    # METHODS §9: D = κ λ 206265 d/a; by hand, 3 · 0.8e-6 · 206265 · 10 = 4.95036 m at 10 pc and 1 au
    assert aperture(10.0, 1.0, 0.8, 3.0) == pytest.approx(4.95036)
    mission = {
        "completeness": 1,
        "max_targets": 3,
        "density": 0.01,
        "planet_separation": 1,
        "wavelength": 0.8,
        "inner_working_angle": 3,
    }
    table = size_mission(single_prior(0.1), mission).distances
    np.testing.assert_allclose(table["aperture_q50"], 0.495036 * table["q50"])
