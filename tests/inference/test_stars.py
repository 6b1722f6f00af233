"""The follow-up list against Bayes' theorem star by star, by numerical integration."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.special
import scipy.stats
from helpers.surveys import drawn_survey, posed, two_depths

from remnantstats.inference.design import survey_design
from remnantstats.inference.stars import completeness_table, star_table
from remnantstats.sensitivity import ChannelSettings

GRID = np.linspace(0, 16, 6401)
STEP = GRID[1] - GRID[0]
normal = scipy.stats.norm.pdf
SETTINGS = [
    ChannelSettings(ceiling=0.9, false_positive=0.05),
    ChannelSettings(threshold_on="true", width=0.25, ceiling=0.8, false_positive=0.05),
    ChannelSettings(),
]


def posterior_draws(problem, size=12):
    """A few parameter vectors; any will do."""
    rng = np.random.default_rng(9)
    f, mean, sd = rng.uniform(0.2, 0.8, size), rng.normal(7.6, 0.3, size), rng.uniform(0.4, 0.9, size)
    u = np.stack([scipy.special.logit(f), mean, np.log(sd)], axis=1)
    theta = problem.theta(u)
    assert theta["debris_fraction"] == pytest.approx(f) and theta["sd_log_accretion"] == pytest.approx(sd)
    return theta


def by_hand(table, settings, theta):
    """Debris probability and expected rate of each star, averaged over draws."""
    q, scale = settings.false_positive, settings.spurious_scale
    debris, rate = [], []
    for row in table.itertuples():
        efficiency = settings.ceiling * scipy.special.ndtr((GRID - row.log_accretion_limit) / settings.width)
        if row.pollution == "limit":
            given, none = (1 - efficiency) * (1 - q), 1 - q
        else:
            passed = settings.ceiling if settings.threshold_on == "measured" else efficiency
            above = row.log_accretion - row.log_accretion_limit
            none = q * 2 * normal(above / scale) / scale if above > 0 else 0.0
            given = normal(row.log_accretion, GRID, row.log_accretion_err) * passed + (1 - efficiency) * none
        probability, expected = [], []
        for f, mean, sd in zip(*(theta[key] for key in PARAMETERS), strict=True):
            prior = normal(GRID, mean, sd)
            host = (prior * given).sum() * STEP
            probability.append(f * host / (f * host + (1 - f) * none))
            expected.append((GRID * prior * given).sum() * STEP / host)
        debris.append(np.mean(probability))
        rate.append(np.mean(expected))
    return np.array(debris), np.array(rate)


PARAMETERS = ("debris_fraction", "mean_log_accretion", "sd_log_accretion")


@pytest.fixture(params=SETTINGS, ids=["measured", "true", "measured, no spurious"])
def case(request):
    rng = np.random.default_rng(10)
    table = drawn_survey(rng, 0.6, 7.6, 0.7, two_depths(rng, 60), request.param)
    problem = posed(table, request.param)
    theta = posterior_draws(problem)
    design = survey_design(problem, 0)
    return table, request.param, problem, design, theta, star_table(problem, design, theta, 0)


def test_debris_probability_and_expected_rate(case):
    table, settings, _, _, theta, stars = case
    debris, rate = by_hand(table, settings, theta)
    limits = (table["pollution"] == "limit").to_numpy()
    assert 10 < limits.sum() < 50
    assert stars["debris_probability"].to_numpy() == pytest.approx(debris, abs=1e-6)
    assert stars["expected_log_accretion"].to_numpy() == pytest.approx(rate, abs=2e-3)
    # a limit lowers the probability below the fraction, the deep ones the most
    assert (stars["debris_probability"][limits] < theta["debris_fraction"].mean()).all()
    deep = limits & (table["log_accretion_limit"] < 7.5).to_numpy()
    assert stars["debris_probability"][deep].max() < stars["debris_probability"][limits & ~deep].min()
    doubtful = stars["debris_probability"][~limits]
    assert doubtful.min() < 0.999 if settings.false_positive else (doubtful == 1).all()


def test_sensitivity(case):
    table, settings, _, _, theta, stars = case
    limit = table["log_accretion_limit"].to_numpy()
    spread = np.hypot(theta["sd_log_accretion"], settings.width)[:, None]
    chance = settings.ceiling * scipy.special.ndtr((theta["mean_log_accretion"][:, None] - limit) / spread)
    assert stars["pollution_sensitivity"].to_numpy() == pytest.approx(chance.mean(axis=0), abs=1e-9)


def test_completeness(case):
    table, settings, problem, design, _, _ = case
    found = completeness_table(problem, design)
    limit = table["log_accretion_limit"].to_numpy()
    grid = found["value"].to_numpy()
    each = settings.ceiling * scipy.special.ndtr((grid - limit[:, None]) / settings.width)
    assert (found["quantity"] == "log_accretion").all()
    assert found["efficiency"].to_numpy() == pytest.approx(each.mean(axis=0), abs=1e-9)
    assert found["lowest"].to_numpy() == pytest.approx(np.quantile(each, 0.1, axis=0), abs=1e-9)
    assert found["highest"].to_numpy() == pytest.approx(np.quantile(each, 0.9, axis=0), abs=1e-9)
    assert found["efficiency"].iloc[-1] == pytest.approx(settings.ceiling)


def test_unobserved_and_known_polluted_stars():
    rng = np.random.default_rng(11)
    table = drawn_survey(rng, 0.6, 7.6, 0.7, two_depths(rng, 40), ChannelSettings(false_positive=0.05))
    table.loc[0, "pollution"] = "unobserved"
    table.loc[0, ["log_accretion", "log_accretion_err", "log_accretion_limit"]] = np.nan
    seen = table.index[(table["pollution"] == "detected") & (table.index > 0)][0]
    table["inclusion"], table["selection_limit"] = "blind", np.nan
    table.loc[seen, ["inclusion", "selection_limit"]] = ["known-polluted", 7.0]
    problem = posed(table, ChannelSettings(false_positive=0.05))
    theta = posterior_draws(problem)
    stars = star_table(problem, survey_design(problem, 0), theta, 0)
    assert stars["debris_probability"][0] == pytest.approx(theta["debris_fraction"].mean())
    assert np.isnan(stars["expected_log_accretion"][0])
    assert stars["pollution_sensitivity"][0] == 0
    assert stars["debris_probability"][seen] == 1
