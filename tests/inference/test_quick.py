"""The quick engine against exact answers: a grid, Beta posteriors, and a density it must refuse."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import scipy.special
import scipy.stats

from remnantstats.catalog import read_sample
from remnantstats.inference import quick
from remnantstats.inference.proposal import Mixture, RidgeProposal, SplitStudent
from remnantstats.inference.quick import importance_draws, mode_and_covariance, starting_points
from remnantstats.population import load_model, pose
from remnantstats.population.simulate import simulate
from remnantstats.sensitivity import ChannelSettings

WIDTH = 0.15
TRUTH = {"debris_fraction": 0.4, "mean_log_accretion": 7.6, "sd_log_accretion": 0.8}


def posed(table, model="steady"):
    model = load_model(model) if isinstance(model, str) else model
    return pose(model, read_sample(table), {"pollution": ChannelSettings(width=WIDTH)})


def survey(size, detected=0, limit=-20.0, values=None):
    """Stars of which the first few are detected; a limit of −20 is one that nothing escapes."""
    values = np.random.default_rng(2).normal(7.6, 0.8, detected) if values is None else values
    blank = np.full(size - detected, np.nan)
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": "a",
            "atmosphere": "H",
            "pollution": ["detected"] * detected + ["limit"] * (size - detected),
            "log_accretion": np.concatenate([values, blank]),
            "log_accretion_err": np.concatenate([np.full(detected, WIDTH), blank]),
            "log_accretion_limit": limit,
        }
    )


def simulated(size, seed, model="steady", truth=TRUTH, ages=False, **columns):
    """A survey drawn from the model itself, with limits of two depths."""
    rng = np.random.default_rng(seed)
    limit = np.where(rng.random(size) < 0.5, 6.8, 8.3) + 0.1 * rng.normal(size=size)
    table = survey(size, limit=limit).assign(**columns)
    if ages:
        table["cooling_age"] = 10 ** rng.normal(-0.5, 0.4, size)
    problem = posed(table, model)
    channel = problem.rows.channels["pollution"]
    design = replace(channel, error=np.full(size, WIDTH), calibration=np.zeros(size))
    theta = {key: np.float64(value) for key, value in truth.items()}
    theta["logit(debris_fraction)"] = scipy.special.logit(truth["debris_fraction"])
    listed = simulate(rng, problem, replace(problem.rows, channels={"pollution": design}), theta).channels["pollution"]
    seen = np.where(np.isfinite(listed.value), WIDTH, np.nan)
    return table.assign(pollution=listed.outcome, log_accretion=listed.value, log_accretion_err=seen)


def moments(draws, problem):
    weight = np.exp(draws.log_weight)
    found = {}
    for name, value in problem.theta(draws.u).items():
        if np.ndim(value):
            mean = float(weight @ value)
            found[name] = mean, float(np.sqrt(weight @ (value - mean) ** 2))
    return found


def on_grid(problem, axes):
    """Exact moments of a three-parameter posterior, the cumulative masses of the log-odds, and the evidence."""
    u = np.stack([axis.ravel() for axis in np.meshgrid(*axes, indexing="ij")], axis=1)
    log_density = problem.log_posterior(u)
    weight = np.exp(log_density - log_density.max())
    weight /= weight.sum()
    found = {}
    for name, value in problem.theta(u).items():
        mean = float(weight @ value)
        found[name] = mean, float(np.sqrt(weight @ (value - mean) ** 2))
    volume = np.prod([axis[1] - axis[0] for axis in axes])
    evidence = float(scipy.special.logsumexp(log_density) + np.log(volume))
    return found, np.cumsum(weight.reshape(len(axes[0]), -1).sum(axis=1)), evidence


def close(found, exact, mean=0.03, sd=0.02):
    for name, (centre, spread) in exact.items():
        assert found[name][0] == pytest.approx(centre, abs=mean * spread), name
        assert found[name][1] == pytest.approx(spread, rel=sd), name


@pytest.mark.parametrize("seed", [14, 19])
def test_thin_curved_tail_matches_grid(seed):
    problem = posed(simulated(200, seed))
    axes = np.linspace(-2.5, 10, 101), np.linspace(3.5, 9.5, 49), np.linspace(-1.2, 1.6, 36)
    exact, below, evidence = on_grid(problem, axes)
    draws = importance_draws(problem, np.random.default_rng(0), draws=50_000)
    assert draws.usable and draws.effective > 25_000
    close(moments(draws, problem), exact)
    weight = np.exp(draws.log_weight)
    between = axes[0][:-1] + np.diff(axes[0]) / 2
    drawn = np.array([weight[draws.u[:, 0] < edge].sum() for edge in between])
    assert drawn == pytest.approx(below[:-1], abs=0.005)
    # the thin end, which an ellipsoid about the mode misses
    thin = between > 1
    assert 1 - below[:-1][thin][0] > 0.015
    assert 1 - drawn[thin][:20] == pytest.approx(1 - below[:-1][thin][:20], rel=0.15)
    assert draws.evidence == pytest.approx(evidence, abs=0.02)


@pytest.mark.parametrize(("size", "detected"), [(1, 1), (2, 2), (2, 1), (1, 0)])
def test_one_or_two_stars_match_grid(size, detected):
    problem = posed(survey(size, detected, limit=7.0, values=np.array([7.4, 8.1])[:detected]))
    exact, _, _ = on_grid(problem, (np.linspace(-12, 12, 80), np.linspace(1.5, 14.5, 180), np.linspace(-9, 2.3, 80)))
    draws = importance_draws(problem, np.random.default_rng(1), draws=50_000)
    assert draws.usable
    del exact["logit(debris_fraction)"]
    close(moments(draws, problem), exact, sd=0.03)


@pytest.mark.parametrize(("size", "detected"), [(40, 0), (400, 0), (30, 30), (100, 40), (400, 399), (4, 2)])
def test_deep_limits_give_the_beta_posterior(size, detected):
    problem = posed(survey(size, detected))
    draws = importance_draws(problem, np.random.default_rng(3), draws=50_000)
    exact = scipy.stats.beta(detected + 1, size - detected + 1)
    mean, sd = moments(draws, problem)["debris_fraction"]
    assert draws.usable
    assert mean == pytest.approx(exact.mean(), rel=0.01)
    assert sd == pytest.approx(exact.std(), rel=0.02)
    fraction = problem.theta(draws.resampled(np.random.default_rng(4), 40_000))["debris_fraction"]
    levels = np.array([0.05, 0.5, 0.95])
    assert exact.cdf(np.quantile(fraction, levels)) == pytest.approx(levels, abs=0.01)


def test_a_fraction_alone():
    fixed = {"family": "fixed", "basis": "test"}
    model = load_model("steady").with_priors(
        {"mean_log_accretion": fixed | {"value": 7.6}, "sd_log_accretion": fixed | {"value": 0.8}}, "test"
    )
    problem = posed(survey(50, 10), model)
    assert problem.dimension == 1
    mean, sd = moments(importance_draws(problem, np.random.default_rng(0)), problem)["debris_fraction"]
    assert (mean, sd) == pytest.approx((scipy.stats.beta(11, 41).mean(), scipy.stats.beta(11, 41).std()), rel=0.02)


def test_a_fixed_fraction_takes_the_plain_proposal():
    model = load_model("steady").with_priors(
        {"debris_fraction": {"family": "fixed", "value": 1.0, "basis": "test"}}, "test"
    )
    problem = posed(simulated(100, 4), model)
    axes = np.meshgrid(np.linspace(3, 9, 150), np.linspace(-2, 2, 150), indexing="ij")
    u = np.stack([axis.ravel() for axis in axes], axis=1)
    weight = scipy.special.softmax(problem.log_posterior(u))
    draws = importance_draws(problem, np.random.default_rng(0), draws=50_000)
    mean = np.exp(draws.log_weight) @ draws.u
    spread = np.sqrt(np.diag(draws.covariance))
    assert draws.usable
    assert mean == pytest.approx(weight @ u, abs=0.03 * spread.min())
    assert spread == pytest.approx(np.sqrt(weight @ (u - weight @ u) ** 2), rel=0.02)


def test_known_polluted_stars_and_uncertain_covariates_are_served():
    selected = np.arange(60) < 15
    chosen = simulated(
        60, 6, inclusion=np.where(selected, "known-polluted", "blind"), selection_limit=np.where(selected, 8.0, np.nan)
    )
    slopes = {"fraction_slope[log_cooling_age]": -0.5, "rate_slope[log_cooling_age]": -0.4}
    trend = simulated(60, 7, "cooling-trend", TRUTH | slopes, ages=True)
    trend["cooling_age_err"] = 0.2 * trend["cooling_age"]
    for problem, dimension in ((posed(chosen), 3), (posed(trend, "cooling-trend"), 7)):
        draws = importance_draws(problem, np.random.default_rng(0), draws=3000)
        assert problem.dimension == dimension
        assert draws.usable and draws.effective > 1000


def test_same_seed_same_draws():
    problem = posed(survey(3, 2, limit=7.0))
    one, two = (importance_draws(problem, np.random.default_rng(5), draws=2000) for _ in range(2))
    np.testing.assert_array_equal(one.u, two.u)
    np.testing.assert_array_equal(one.log_weight, two.log_weight)
    assert one.evidence == two.evidence
    other = importance_draws(problem, np.random.default_rng(6), draws=2000)
    assert not np.array_equal(one.u, other.u)


def two_modes(u):
    """A narrow mode at 0 and a wide one that its curvature knows nothing of."""
    narrow = -0.5 * np.sum(u**2, axis=1)
    wide = -0.5 * np.sum((u - 6.0) ** 2, axis=1) / 9 - 3 * np.log(3)
    return np.logaddexp(narrow, wide)


def test_two_modes_are_refused():
    proposal = SplitStudent(np.zeros(3), np.eye(3), np.full((2, 3), 1.1))
    draws = quick._weighted(two_modes, np.random.default_rng(0), proposal, np.zeros(3), 20_000)
    assert draws.k_hat > 0.7
    assert not draws.usable


def funnel(u):
    """Neal's funnel, its neck along the first coordinate."""
    rest = u.shape[1] - 1
    return -0.5 * u[:, 0] ** 2 - 0.5 * np.sum(u[:, 1:] ** 2, axis=1) * np.exp(-2 * u[:, 0]) - rest * u[:, 0]


def test_a_funnel_is_served_along_its_ridge_and_refused_without():
    start = np.full((1, 8), 0.3)
    mode, covariance = mode_and_covariance(funnel, start)
    plain, ridge = (
        quick._improved(funnel, np.random.default_rng(0), mode, covariance, 6000, 2, curved) for curved in (False, True)
    )
    assert not plain.usable
    assert plain.covariance == pytest.approx(covariance)
    assert ridge.usable
    assert ridge.evidence == pytest.approx(4 * np.log(2 * np.pi), abs=0.05)
    assert np.exp(ridge.log_weight) @ ridge.u[:, 0] == pytest.approx(0.0, abs=0.05)


def test_proposals_are_densities():
    problem = posed(survey(4, 1, limit=7.0))
    mode, covariance = mode_and_covariance(problem.log_posterior, starting_points(problem))
    ridge = RidgeProposal.traced(problem.log_posterior, mode, covariance)
    plain = SplitStudent.about(problem.log_posterior, mode, covariance)
    rng = np.random.default_rng(0)
    # the mean of the ratio of two normalised densities is 1
    for part in (ridge, plain):
        mixture = Mixture([part, SplitStudent(mode, 2.0 * np.eye(3), np.ones((2, 3)))], [0.5, 0.5])
        u = mixture.draw(rng, 100_000)
        ratio = np.exp(part.log_density(u) - mixture.log_density(u))
        assert ratio.mean() == pytest.approx(1.0, abs=5 * ratio.std() / np.sqrt(len(u)))


def test_resampled_draws_keep_the_moments():
    problem = posed(survey(20, 5, limit=5.0))
    draws = importance_draws(problem, np.random.default_rng(0))
    equal = draws.resampled(np.random.default_rng(1), 20_000)
    assert equal.shape == (20_000, 3)
    assert equal.mean(axis=0) == pytest.approx(np.exp(draws.log_weight) @ draws.u, abs=0.01)
    assert np.cov(equal.T) == pytest.approx(draws.covariance, abs=0.02 * np.abs(draws.covariance).max())
