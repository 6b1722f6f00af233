"""Student-t and power law: against SciPy's densities and integrals done by brute force."""

from __future__ import annotations

from itertools import product
from typing import Any

import numpy as np
import pytest
import scipy.integrate
import scipy.stats
from scipy.stats import norm

from remnantstats.errors import ModelError
from remnantstats.population.families import FAMILIES
from remnantstats.population.families.power_law import by_closed_form, by_quadrature, log_mass
from remnantstats.population.gaussian import Decision, HostState, Value
from remnantstats.population.ops import NUMPY
from remnantstats.population.spec import CovariateSpec, ModelFile, PopulationModel
from remnantstats.sensitivity import ChannelSettings

LN10 = np.log(10)
ENDS = (5.0, 11.0)


def student(nu: float, mean: float = 7.5, sd: float = 0.6) -> tuple[HostState, Any]:
    state = HostState({"pollution": mean}, {"pollution": sd}, None, {"tail_weight": nu})
    return state, scipy.stats.t(nu, loc=mean, scale=sd).pdf


def power(beta: float) -> tuple[HostState, Any]:
    shape = {"tail_index": beta, "log_rate_low": ENDS[0], "log_rate_high": ENDS[1]}
    slope = LN10 * beta
    mass = -np.expm1(-slope * 6) / slope if beta else 6.0

    def density(x: np.ndarray) -> np.ndarray:
        return np.where((x >= 5) & (x <= 11), np.exp(-slope * (x - 5)) / mass, 0.0)

    return HostState({"pollution": 0.0}, {"pollution": 0.0}, None, shape), density


def brute(density: Any, value: Value | None, decisions: list[Decision]) -> float:
    """Panels of Gauss–Legendre nodes, 0.01 dex each, over everything that matters."""
    low, high = (-60.0, 75.0) if value is None else (float(value.value) - 3, float(value.value) + 3)
    low, high = (max(low, 5.0), min(high, 11.0)) if density(np.array(11.5)) == 0 else (low, high)
    nodes, weights = np.polynomial.legendre.leggauss(8)
    edges = np.linspace(low, high, int((high - low) / 0.01) + 2)
    width = np.diff(edges)[:, None]
    x = edges[:-1, None] + width * (nodes + 1) / 2
    total = density(x) * width * weights / 2
    if value is not None:
        total = total * norm.pdf(value.value, x, np.sqrt(value.variance))
    for item in decisions:
        total = total * norm.cdf(item.sign * (item.slope * x + item.offset) / np.sqrt(item.variance))
    return float(total.sum())


VALUES = [None, Value(7.9, 0.15**2), Value(7.9, 0.02**2), Value(6.2, 0.3**2)]
DECISIONS: list[list[Decision]] = [
    [],
    [Decision("pollution", -1, 1.0, -7.4, 0.15**2)],
    [Decision("pollution", 1, 1.0, -7.4, 0.05**2)],
    [Decision("pollution", 1, 1.0, -8.0, 0.15**2), Decision("pollution", -1, 1.0, -7.6, 0.1**2)],
    [Decision("pollution", 1, 0.4, -0.4 * 7.5, 0.08**2)],
]
CASES = [(v, d) for v, d in product(VALUES, DECISIONS) if v is not None or d]


@pytest.mark.parametrize(("value", "decisions"), CASES)
@pytest.mark.parametrize("nu", [2.0, 3.7, 12.0, 50.0])
def test_student_t(value: Value | None, decisions: list[Decision], nu: float) -> None:
    state, density = student(nu)
    values = {} if value is None else {"pollution": value}
    found = float(FAMILIES["student_t"].log_integral(NUMPY, state, values, decisions))
    # brute force loses what lies beyond 60 scales: at ν = 2 that is 1e-4 of a probability of order one
    loose = 3e-4 if value is None and nu < 3 else 1e-6 if value is None else 1e-7
    assert found == pytest.approx(np.log(brute(density, value, decisions)), abs=loose)


@pytest.mark.parametrize("nu", [2.0, 5.0, 20.0, 50.0])
@pytest.mark.parametrize("z", [0.0, 1.0, 4.0, 15.0, 30.0])
def test_student_t_of_an_exact_value(nu: float, z: float) -> None:
    # scipy.stats.t
    state, _ = student(nu)
    values = {"pollution": Value(7.5 + 0.6 * z, 1e-14)}
    found = FAMILIES["student_t"].log_integral(NUMPY, state, values, [])
    assert found == pytest.approx(scipy.stats.t.logpdf(7.5 + 0.6 * z, nu, 7.5, 0.6), abs=1e-8)
    decision = [Decision("pollution", 1, 1.0, -(7.5 + 0.6 * z), 1e-14)]
    found = FAMILIES["student_t"].log_integral(NUMPY, state, {}, decision)
    assert found == pytest.approx(scipy.stats.t.logsf(z, nu), abs=1e-7)


def test_student_t_tends_to_the_normal() -> None:
    state, _ = student(500.0)
    normal = HostState(state.mean, state.sd)
    for value, decisions in CASES:
        values = {} if value is None else {"pollution": value}
        found = FAMILIES["student_t"].log_integral(NUMPY, state, values, decisions)
        expected = float(FAMILIES["normal"].log_integral(NUMPY, normal, values, decisions))
        assert found == pytest.approx(expected, abs=0.02)


@pytest.mark.parametrize(("value", "decisions"), CASES)
@pytest.mark.parametrize("beta", [-1.5, 0.0, 1e-9, 0.4, 3.0])
def test_power_law(value: Value | None, decisions: list[Decision], beta: float) -> None:
    state, density = power(beta)
    values = {} if value is None else {"pollution": value}
    found = float(FAMILIES["power_law"].log_integral(NUMPY, state, values, decisions))
    assert found == pytest.approx(np.log(brute(density, value, decisions)), abs=1e-8)


def test_power_law_two_forms() -> None:
    """Closed form and quadrature, narrow errors and values outside the support included."""
    rng = np.random.default_rng(1)
    value = Value(rng.uniform(4.5, 11.5, 400), rng.choice([0.02, 0.1, 0.4], 400) ** 2)
    for beta in (-2.0, 0.0, 0.7, 2.5):
        closed = by_closed_form(NUMPY, LN10 * beta, ENDS, value)
        summed = by_quadrature(NUMPY, np.asarray(LN10 * beta), ENDS, value, [])
        np.testing.assert_allclose(closed, summed, rtol=0, atol=1e-8)


def test_power_law_probability_by_parts() -> None:
    """∫ e^(−bx) Φ((L − x)/w) by parts: exponentials and normal distribution functions."""
    limit, width, b = 7.3, 0.02, LN10 * 0.6
    found = by_quadrature(NUMPY, np.asarray(b), ENDS, None, [Decision("pollution", -1, 1.0, -limit, width**2)])
    ends = np.array(ENDS)
    surface = -np.exp(-b * ends) * norm.cdf((limit - ends) / width) / b
    tilted = norm.cdf((ends - limit + b * width**2) / width)
    rest = -np.exp(-b * limit + 0.5 * b**2 * width**2) * tilted / b
    assert np.exp(found) == pytest.approx(np.diff(surface + rest)[0], rel=1e-9)


@pytest.mark.parametrize("beta", [-3.0, -1e-5, 0.0, 1e-4, 1e-3, 2.0])
def test_power_law_mass(beta: float) -> None:
    b = LN10 * beta
    expected = scipy.integrate.quad(lambda x: np.exp(-b * (x - 8)), *ENDS, epsrel=1e-12)[0]
    assert log_mass(NUMPY, np.asarray(b), ENDS) + 8 * b == pytest.approx(np.log(expected), abs=1e-11)


@pytest.mark.parametrize("name", ["student_t", "power_law"])
def test_simulated_values_follow_the_density(name: str) -> None:
    state, _ = student(4.0) if name == "student_t" else power(0.5)
    drawn = FAMILIES[name].simulate(np.random.default_rng(2), state, 20_000)["pollution"]
    if name == "student_t":
        expected = scipy.stats.t(4.0, loc=7.5, scale=0.6).cdf
    else:
        expected = scipy.stats.truncexpon(b=6 * 0.5 * LN10, loc=5, scale=1 / (0.5 * LN10)).cdf
    assert scipy.stats.kstest(drawn, expected).pvalue > 0.01


def test_power_law_at_index_zero_is_uniform() -> None:
    state, _ = power(0.0)
    drawn = FAMILIES["power_law"].simulate(np.random.default_rng(3), state, 20_000)["pollution"]
    assert scipy.stats.kstest(drawn, scipy.stats.uniform(5, 6).cdf).pvalue > 0.01


def power_law_model(kit: Any, **changes: Any) -> PopulationModel:
    shipped = kit.load_model("power-law")
    data = shipped.file.model_dump() | changes
    return PopulationModel("mine", "mine.toml", ModelFile(**data), shipped.priors)


def test_power_law_refuses_what_acts_on_a_mean(kit: Any) -> None:
    table = kit.design_table(np.random.default_rng(4), 6, {"pollution": None}, {})
    acting = [CovariateSpec(name="cooling_age", acts_on=["fraction", "rate"])]
    with pytest.raises(ModelError, match="no mean rate on which a covariate could act"):
        kit.pose_table(table, power_law_model(kit, covariates=acting), {"pollution": ChannelSettings()})
    with pytest.raises(ModelError, match="lacks a constant"):
        kit.pose_table(table, power_law_model(kit, constants={"log_rate_low": 5.0}), {"pollution": ChannelSettings()})
    dust = kit.design_table(np.random.default_rng(4), 6, {"excess": None}, {})
    with pytest.raises(ModelError, match="describes accretion rates"):
        kit.pose_table(dust, power_law_model(kit), {"excess": ChannelSettings()})
