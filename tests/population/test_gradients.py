"""The compiled form of every shipped model: same values as the plain form, gradients that are right and finite."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from remnantstats.population import Problem, model_names
from remnantstats.population.distributions import parse_distribution
from remnantstats.sensitivity import ChannelSettings

Density = Callable[[np.ndarray], tuple[float, np.ndarray]]


def compiled(problem: Problem) -> Density:
    """Log posterior and gradient from the PyMC model, neither rewritten nor compiled: the graph as it was built."""
    import pytensor
    import pytensor.tensor as pt
    from pytensor.graph.replace import clone_replace

    from remnantstats.inference.compiler import build_model

    model = build_model(problem)
    u = pt.vector("u")
    start, parts, at = model.initial_point(), {}, 0
    for variable in model.value_vars:
        size = int(np.size(start[variable.name]))
        parts[variable] = u[at] if variable.ndim == 0 else u[at : at + size]
        at += size
    assert at == problem.dimension
    (density,) = clone_replace([model.logp()], replace=parts)
    mode = pytensor.compile.mode.Mode(linker="py", optimizer="merge")
    function = pytensor.function([u], [density, pt.grad(density, u)], mode=mode)
    return lambda x: (lambda pair: (float(pair[0]), np.asarray(pair[1])))(function(x))


def check(problem: Problem, density: Density, u: np.ndarray) -> None:
    """Value as in NumPy, gradient as by central differences; NaN and infinity fail."""
    value, slope = density(u)
    plain = float(problem.log_posterior(u[None])[0])
    assert np.isfinite(value) and np.isfinite(plain)
    assert value == pytest.approx(plain, rel=1e-8)
    h = 1e-4 * np.eye(len(u))
    points = np.concatenate([u + h, u - h, u + 2 * h, u - 2 * h])
    up, down, far_up, far_down = problem.log_posterior(points).reshape(4, -1)
    difference = (8 * (up - down) - (far_up - far_down)) / 12e-4
    assert np.all(np.isfinite(slope))
    np.testing.assert_allclose(slope, difference, rtol=1e-5, atol=1e-5 + 1e-10 * abs(plain))


def problem_of(kit: Any, name: str, kind: str = "measured", n: int = 150, plain: bool = False) -> Problem:
    """A small survey with every outcome: doubtful and sure detections, selected stars, both atmospheres, ceilings.

    A plain one has neither ceilings, calibration errors nor selected stars: fewer formulas, a smaller graph.
    """
    rng = np.random.default_rng(11)
    model = kit.load_model(name)
    channels = ["pollution", "excess"] if model.file.channels == "both" else ["pollution"]
    settings = {
        channel: ChannelSettings(threshold_on=kind, ceiling=1.0 if plain else 0.85, false_positive=0.05, width=0.2)
        for channel in channels
    }
    known = {} if plain else dict.fromkeys(channels, 16)
    table = kit.design_table(rng, n, settings, known)
    table.loc[: n // 8, "atmosphere"] = "He"
    for covariate in model.covariates:
        column = covariate.name.removeprefix("log_")
        table[column] = table.get(column, rng.uniform(1, 3, n))
        table[f"{column}_err"] = 0.2 * table[column]
    truth = {"debris_fraction": 0.5, "mean_log_accretion": 7.8, "sd_log_accretion": 0.7, "dust_share": 0.6}
    problem = kit.pose_table(table, model, settings, atmospheres=("H", "He"))
    truth = {name: value for name, value in truth.items() if problem.has(name) and problem.parameter(name).free}
    table = kit.fill_in(rng, table, model, settings, truth, 0.0 if plain else 0.25, atmospheres=("H", "He"))
    # half of the detections without calibration error, where their value allows it
    value, limit = table["log_accretion"], table["log_accretion_limit"]
    table.loc[(np.arange(n) % 2 == 0) & (value > limit), "log_accretion_calibration_err"] = 0.0
    # some of the selected stars by the tabulated value itself
    same = (table["inclusion"] == "known-polluted") & (value > limit) & (np.arange(n) % 2 == 0)
    table.loc[same, "selection_limit"] = limit[same]
    if len(channels) == 2:
        table.loc[n - 10 : n - 5, ["excess", "log_dust", "log_dust_err"]] = ["unobserved", np.nan, np.nan]
    return kit.pose_table(table, model, settings, atmospheres=("H", "He"))


def points_of(problem: Problem, rng: np.random.Generator, count: int) -> np.ndarray:
    centre = [
        np.full(parameter.size, parameter.unconstrain(np.median(parameter.sample_prior(rng, 400))))
        for parameter in problem.free
    ]
    return np.concatenate(centre) + rng.normal(0, 0.3, (count, problem.dimension))


TWO_CHANNELS = ["dust-always", "dust-sometimes"]
ONE_CHANNEL = [name for name in model_names() if name not in TWO_CHANNELS]


@pytest.mark.parametrize("kind", ["measured", "true"])
@pytest.mark.parametrize("name", [*ONE_CHANNEL, *[pytest.param(name, marks=pytest.mark.slow) for name in TWO_CHANNELS]])
def test_gradient(kit: Any, name: str, kind: str) -> None:
    problem = problem_of(kit, name, kind)
    outcomes = {value for block in problem.blocks for value in block.outcome.values()}
    assert outcomes >= {"limit", "detected", "doubtful"} or kind == "true"
    assert any(block.selected_by for block in problem.blocks)
    check_at_random(problem)


@pytest.mark.parametrize(("name", "kind"), [("dust-always", "measured"), ("dust-sometimes", "true")])
def test_gradient_of_two_channels(kit: Any, name: str, kind: str) -> None:
    problem = problem_of(kit, name, kind, plain=True)
    assert {"limit", "doubtful"} <= {value for block in problem.blocks for value in block.outcome.values()}
    check_at_random(problem)


def check_at_random(problem: Problem) -> None:
    density = compiled(problem)
    for u in points_of(problem, np.random.default_rng(12), 3):
        check(problem, density, u)


@pytest.mark.parametrize("name", ["steady", "dust-sometimes", "heavy-tail", "power-law"])
def test_limits_far_from_the_population(kit: Any, name: str) -> None:
    """Values and gradients stay finite with every limit 15 and 30 standard deviations from the population."""
    problem = problem_of(kit, name, n=60, plain=name == "dust-sometimes")
    density = compiled(problem)
    for away in (15.0, -15.0, 30.0, -30.0):
        u = far_from_limits(problem, away)
        value, slope = density(u)
        assert np.isfinite(value) and np.all(np.isfinite(slope))
        assert value == pytest.approx(problem.log_posterior(u[None])[0], rel=1e-8)


def far_from_limits(problem: Problem, away: float) -> np.ndarray:
    """A population of spread 0.5 so many standard deviations from the middle of the limits."""
    u = points_of(problem, np.random.default_rng(13), 1)[0]
    at = {parameter.name: i for i, parameter in enumerate(problem.free)}
    for channel, centre in (("log_accretion", 7.5), ("log_dust", -2.8)):
        if f"mean_{channel}" in at:
            u[at[f"mean_{channel}"]], u[at[f"sd_{channel}"]] = centre + 0.5 * away, np.log(0.5)
    if "tail_index" in at:
        u[at["tail_index"]] = away / 2
    return u


PRIORS = {
    "debris_fraction": [
        {"family": "beta", "alpha": 2, "beta": 5}, {"family": "beta", "alpha": 1, "beta": 1},
        {"family": "uniform", "low": 0.1, "high": 0.8}, {"family": "uniform", "low": 0, "high": 1},
        {"family": "fixed", "value": 0.4},
    ],
    "mean_log_accretion": [
        {"family": "normal", "mean": 8, "sd": 1}, {"family": "uniform", "low": 5, "high": 11},
        {"family": "student_t", "df": 4, "mean": 8, "sd": 1}, {"family": "fixed", "value": 8},
        {"family": "exponential", "scale": 8}, {"family": "lognormal", "mean_log": 2, "sd_log": 0.3},
    ],
    "sd_log_accretion": [
        {"family": "halfnormal", "sd": 1.5}, {"family": "lognormal", "mean_log": 0, "sd_log": 0.5},
        {"family": "exponential", "scale": 1}, {"family": "uniform", "low": 0.1, "high": 3},
        {"family": "uniform", "low": 0, "high": 3}, {"family": "beta", "alpha": 2, "beta": 2},
    ],
}  # fmt: skip


@pytest.mark.parametrize(("name", "prior"), [(name, prior) for name, priors in PRIORS.items() for prior in priors])
def test_priors_agree(kit: Any, name: str, prior: dict[str, Any]) -> None:
    """PyMC's log density at u is ours, Jacobians included, for every family of priors."""
    rng = np.random.default_rng(14)
    settings = {"pollution": ChannelSettings(width=0.2)}
    table = kit.design_table(rng, 20, settings, {})
    model = kit.load_model("steady").with_priors({name: prior}, "test")
    problem = kit.pose_table(table, model, settings)
    density = compiled(problem)
    for u in rng.normal(0, 0.8, (3, problem.dimension)):
        value, _ = density(u)
        # PyMC keeps the normal's constant, 0.9189, in single precision: off by 1e-8 each
        assert value == pytest.approx(float(problem.log_posterior(u[None])[0]), rel=1e-10, abs=2e-7)


@pytest.mark.parametrize(
    "prior", [{"family": "uniform", "low": 0.02, "high": 0.5}, {"family": "beta", "alpha": 2, "beta": 5}]
)
def test_prior_on_the_inverse(kit: Any, prior: dict[str, Any]) -> None:
    rng = np.random.default_rng(15)
    problem = kit.pose_table(
        kit.design_table(rng, 20, {"pollution": None}, {}),
        kit.load_model("heavy-tail"),
        {"pollution": ChannelSettings()},
    )
    weight = problem.parameter("tail_weight")
    assert weight.inverse and weight.constrain(np.zeros(1))["tail_weight"] == pytest.approx(1 / 0.26)
    other = replace(weight, prior=parse_distribution(prior, "test", "prior"))
    u = np.linspace(-6, 6, 2001)
    value = other.constrain(u)["tail_weight"]
    np.testing.assert_allclose(other.unconstrain(value), u, rtol=1e-6, atol=1e-8)
    assert np.exp(other.log_prior(np.linspace(-40, 40, 8001))).sum() * 0.01 == pytest.approx(1, abs=1e-3)
    drawn = other.sample_prior(rng, 4000)
    inverse = other.prior.frozen.cdf
    assert np.mean(drawn < 4) == pytest.approx(1 - inverse(0.25), abs=0.03)
