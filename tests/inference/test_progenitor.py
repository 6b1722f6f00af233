"""Covariates known with error are latent, with the sample's own distribution as prior (METHODS §1)."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import scipy.special

from remnantstats.catalog import RowRules, read_sample
from remnantstats.errors import ModelError
from remnantstats.inference.quick import importance_draws
from remnantstats.physics import initial_final
from remnantstats.population import load_model, pose
from remnantstats.population.masses import gauss_nodes, progenitor_posterior
from remnantstats.population.parameters import covariate_mean, covariate_sd
from remnantstats.population.rows import blocks
from remnantstats.sensitivity import ChannelSettings


def slope_of(problem, name):
    draws = importance_draws(problem, np.random.default_rng(0), draws=1500)
    assert draws.usable
    theta = problem.theta(draws.resampled(np.random.default_rng(1), 3000))
    return theta[name].mean(), theta[name].std(), theta


def deep_survey(rng, host, rate):
    """Every host is seen, and its rate measured to 0.15 dex."""
    size = len(host)
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": "a",
            "atmosphere": "H",
            "pollution": np.where(host, "detected", "limit"),
            "log_accretion": np.where(host, rate + 0.15 * rng.normal(size=size), np.nan),
            "log_accretion_err": np.where(host, 0.15, np.nan),
            "log_accretion_limit": -5.0,
        }
    )


# a covariate with normal errors ---------------------------------------------------------------------------------------

SLOPE = "fraction_slope[cooling_age]"
MODEL = """
title = "A covariate known with error"
channels = "one"
family = "normal"

[[covariates]]
name = "cooling_age"
acts_on = ["fraction"]

[priors]
debris_fraction = { family = "beta", alpha = 1, beta = 1, basis = "test" }
mean_log_accretion = { family = "fixed", value = 7.8, basis = "test" }
sd_log_accretion = { family = "fixed", value = 0.7, basis = "test" }
"fraction_slope[cooling_age]" = { family = "normal", mean = 0, sd = 3, basis = "test" }
"""


@pytest.fixture(scope="module")
def age_model(tmp_path_factory):
    path = tmp_path_factory.mktemp("model") / "age-error.toml"
    path.write_text(MODEL)
    return load_model(path)


@pytest.fixture(scope="module")
def noisy():
    """True slope 1.5; the covariate's error is as large as its spread."""
    rng = np.random.default_rng(6)
    true = rng.normal(size=4000)
    host = rng.random(4000) < scipy.special.expit(1.5 * true)
    table = deep_survey(rng, host, rng.normal(7.8, 0.7, 4000))
    return table.assign(cooling_age=20 + true + rng.normal(size=4000))


def test_a_latent_covariate_gives_the_true_slope(noisy, age_model):
    sample = read_sample(noisy.assign(cooling_age_err=1.0), rules=RowRules(covariates=("cooling_age",)))
    problem = pose(age_model, sample, {"pollution": ChannelSettings()})
    mean, sd, theta = slope_of(problem, SLOPE)
    assert mean == pytest.approx(1.5, abs=3 * sd)
    assert sd < 0.2
    # and the sample's own distribution, deconvolved
    assert theta[covariate_sd("cooling_age")].mean() == pytest.approx(1.0, abs=0.1)
    assert theta[covariate_mean("cooling_age")].mean() == pytest.approx(0.0, abs=0.1)


def test_plugging_in_the_estimates_attenuates(noisy, age_model):
    # METHODS §1: plug-in 0.71 for a true 1.5
    sample = read_sample(noisy, rules=RowRules(covariates=("cooling_age",)))
    mean, sd, _ = slope_of(pose(age_model, sample, {"pollution": ChannelSettings()}), SLOPE)
    assert mean == pytest.approx(0.7, abs=0.12)
    assert mean < 1.5 - 8 * sd


def test_a_stars_own_error_distribution_alone_attenuates(noisy, age_model):
    """The same nodes, placed on N(z; ẑ, s) without the sample's distribution: METHODS §1 gives 0.73 for a true 1.5."""
    sample = read_sample(noisy.assign(cooling_age_err=1.0), rules=RowRules(covariates=("cooling_age",)))
    problem = pose(age_model, sample, {"pollution": ChannelSettings()})
    at, weight = np.polynomial.hermite_e.hermegauss(11)
    latent = problem.rows.latent
    nodes = latent.estimate[:, None] + latent.error[:, None] * at
    log_weights = np.broadcast_to(np.log(weight / weight.sum()), nodes.shape)
    rows = replace(problem.rows, latent=replace(latent, nodes=nodes, log_weights=log_weights))
    kept = tuple(item for item in problem.parameters if not item.name.startswith("covariate_"))
    assert len(kept) == len(problem.parameters) - 2
    alone = replace(problem, rows=rows, blocks=tuple(blocks(rows)), parameters=kept)
    mean, sd, _ = slope_of(alone, SLOPE)
    assert 0.6 < mean < 1.0
    assert mean < 1.5 - 4 * sd


def test_decline_of_rates_with_age(tmp_path):
    """Hollands, Gaensicke & Koester 2018, MNRAS 477, 93 (arXiv:1801.07714): about 3 dex over 6.5 Gyr, an e-folding time
    near 1 Gyr: −0.434 dex per Gyr, linear in age."""
    decline = -np.log10(np.e)
    assert 6.5 * decline == pytest.approx(-3, abs=0.3)
    text = MODEL.replace('["fraction"]', '["rate"]').replace("fraction_slope", "rate_slope")
    for line, prior in (("mean", 'family = "normal", mean = 8, sd = 1.5'), ("sd", 'family = "halfnormal", sd = 1.5')):
        start = text.index(f"{line}_log_accretion")
        end = text.index("\n", start)
        text = text[:start] + f'{line}_log_accretion = {{ {prior}, basis = "test" }}' + text[end:]
    path = tmp_path / "decline.toml"
    path.write_text(text)
    rng = np.random.default_rng(7)
    age = rng.uniform(1, 7.5, 2000)
    host = rng.random(2000) < 0.5
    rate = 9.2 + decline * age + 0.7 * rng.normal(size=2000)
    limit = np.where(rng.random(2000) < 0.5, 6.0, 7.5)
    noisy = rate + 0.15 * rng.normal(size=2000)
    seen = host & (noisy > limit)
    table = deep_survey(rng, seen, rate).assign(
        log_accretion=np.where(seen, noisy, np.nan), log_accretion_limit=limit, cooling_age=age
    )
    sample = read_sample(table, rules=RowRules(covariates=("cooling_age",)))
    problem = pose(load_model(path), sample, {"pollution": ChannelSettings()})
    mean, sd, _ = slope_of(problem, "rate_slope[cooling_age]")
    assert mean == pytest.approx(decline, abs=3 * sd)
    assert sd < 0.05
    # detections alone show a shallower decline: the faint old ones are missing
    assert np.polyfit(age[seen], noisy[seen], 1)[0] > mean + 3 * sd


# progenitor mass ------------------------------------------------------------------------------------------------------

MASS_SLOPE = "fraction_slope[progenitor_mass]"
TRUE_SLOPE = 0.8


@pytest.fixture(scope="module")
def remnants():
    """Stars of the initial mass function, their remnants by the relation and its scatter, weighed to 0.02 Msun."""
    rng = np.random.default_rng(1)
    power = 1 + initial_final.MASS_FUNCTION_SLOPE
    low, high = (edge**power for edge in (initial_final.BREAKS[0], initial_final.BREAKS[-1]))
    mass = (low + rng.random(2600) * (high - low)) ** (1 / power)
    mass_now = initial_final.remnant_mass(mass) + initial_final.SCATTER * rng.normal(size=mass.size)
    weighed = mass_now + 0.02 * rng.normal(size=mass.size)
    inside = ~initial_final.outside_relation(weighed, np.full(mass.size, 0.02))
    assert inside.mean() > 0.97
    host = rng.random(mass.size) < scipy.special.expit(TRUE_SLOPE * (mass - 1.8))
    table = deep_survey(rng, host, rng.normal(7.8, 0.7, mass.size)).assign(mass=weighed, mass_err=0.02)
    return table[inside].reset_index(drop=True)


@pytest.fixture(scope="module")
def mass_model():
    fixed = {"family": "fixed", "basis": "test"}
    return load_model("progenitor-trend").with_priors(
        {
            "mean_log_accretion": fixed | {"value": 7.8}, "sd_log_accretion": fixed | {"value": 0.7},
            "rate_slope[progenitor_mass]": fixed | {"value": 0.0},
        },
        "test",
    )  # fmt: skip


def test_slope_with_progenitor_mass_through_the_relation(remnants, mass_model):
    problem = pose(mass_model, read_sample(remnants), {"pollution": ChannelSettings()})
    mean, sd, theta = slope_of(problem, MASS_SLOPE)
    assert mean == pytest.approx(TRUE_SLOPE, abs=3.5 * sd)
    assert 0 < sd < 0.2
    odds = TRUE_SLOPE * (problem.reference["progenitor_mass"] - 1.8)
    fraction = theta["debris_fraction"]
    assert fraction.mean() == pytest.approx(scipy.special.expit(odds), abs=4 * fraction.std())


def test_inverting_the_relation_star_by_star_is_biased(remnants, mass_model):
    grid = np.linspace(initial_final.BREAKS[0], initial_final.BREAKS[-1], 4001)
    inverted = np.interp(remnants["mass"], initial_final.remnant_mass(grid), grid)
    table = remnants.drop(columns=["mass", "mass_err"]).assign(progenitor_mass=inverted)
    problem = pose(mass_model, read_sample(table), {"pollution": ChannelSettings()})
    assert problem.rows.latent is None
    mean, sd, _ = slope_of(problem, MASS_SLOPE)
    assert mean < TRUE_SLOPE - 5 * sd


def posterior_of(columns, **options):
    table = deep_survey(np.random.default_rng(0), np.zeros(2, dtype=bool), np.zeros(2)).assign(**columns)
    return progenitor_posterior(read_sample(table), **options)


@pytest.mark.parametrize("slope", [initial_final.MASS_FUNCTION_SLOPE, 0.0])
def test_mass_posterior_by_quadrature(slope):
    """Moments of p(M) ∝ M^slope N(M_f; relation(M), error and scatter) on 0.83–7.2 Msun."""
    nodes, log_weights = posterior_of({"mass": [0.60, 0.75], "mass_err": 0.02}, slope=slope)
    weight = np.exp(log_weights)
    grid = np.linspace(0.83, 7.2, 200_001)
    for row, remnant in enumerate((0.60, 0.75)):
        shift = (remnant - initial_final.remnant_mass(grid)) / np.hypot(0.02, initial_final.SCATTER)
        density = grid**slope * np.exp(-0.5 * shift**2)
        density /= density.sum()
        mean = grid @ density
        sd = np.sqrt((grid - mean) ** 2 @ density)
        assert weight[row].sum() == pytest.approx(1)
        assert weight[row] @ nodes[row] == pytest.approx(mean, abs=2e-3)
        assert np.sqrt(weight[row] @ (nodes[row] - mean) ** 2) == pytest.approx(sd, rel=5e-3)


def test_a_tabulated_progenitor_mass_goes_before_the_relation():
    nodes, log_weights = posterior_of({"progenitor_mass": [2.0, 3.0], "progenitor_mass_err": 0.1, "mass": 0.6})
    mean = (np.exp(log_weights) * nodes).sum(axis=1)
    # the prior's slope moves the mean by slope × variance / mass
    shift = initial_final.MASS_FUNCTION_SLOPE * 0.1**2 / np.array([2.0, 3.0])
    assert mean == pytest.approx(np.array([2.0, 3.0]) + shift, abs=1e-3)
    assert posterior_of({"progenitor_mass": [2.0, 3.0]}) is None


@pytest.mark.parametrize(("columns", "message"), [
    ({"mass": [0.6, 1.6], "mass_err": 0.02}, "outside the initial–final mass relation"),
    ({"mass": [0.6, 0.3], "mass_err": 0.02}, "outside the initial–final mass relation"),
    ({"progenitor_mass": [2.0, 9.0], "progenitor_mass_err": 0.1}, "outside the initial–final mass relation"),
    ({"mass": [0.6, np.nan], "mass_err": 0.02}, "no progenitor mass with its error"),
    ({"mass": [0.6, 0.7]}, "no progenitor mass with its error"),
])  # fmt: skip
def test_refused_masses(columns, message):
    with pytest.raises(ModelError, match=message) as caught:
        posterior_of(columns)
    assert "star s1" in str(caught.value) or "s1" in str(caught.value)


def test_gauss_nodes_integrate_polynomials_exactly():
    rng = np.random.default_rng(5)
    grid = np.sort(rng.uniform(0.8, 3.0, 60))
    weight = rng.dirichlet(np.ones(60), size=4)
    nodes, log_weights = gauss_nodes(grid, weight, 5)
    for degree in range(10):
        found = (np.exp(log_weights) * nodes**degree).sum(axis=1)
        assert found == pytest.approx(weight @ grid**degree, rel=1e-8), degree
    # and no further
    assert (np.exp(log_weights) * nodes**10).sum(axis=1) != pytest.approx(weight @ grid**10, rel=1e-8)
    # Gauss–Legendre on a fine grid of even weights
    even = np.linspace(-1, 1, 4001)
    nodes, _ = gauss_nodes(even, np.full((1, 4001), 1 / 4001), 3)
    assert nodes[0] == pytest.approx(np.polynomial.legendre.leggauss(3)[0], abs=1e-3)
