"""Posteriors written anew in the tests, from METHODS §2 and §4, against both engines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
import scipy.special
import scipy.stats
from helpers.surveys import drawn_survey, posed, two_depths

from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.inference import fit_problem
from remnantstats.inference.quick import importance_draws
from remnantstats.population import load_model, pose
from remnantstats.sensitivity import ChannelSettings

NAMES = ("debris_fraction", "mean_log_accretion", "sd_log_accretion")
normal, below = scipy.stats.norm.pdf, scipy.special.ndtr


def single_channel(table, settings, fraction, mean, sd):
    """Log-likelihood of a blind survey of one channel, METHODS §2; parameters of shape (S, 1)."""
    c, q, w, scale = settings.ceiling, settings.false_positive, settings.width, settings.spurious_scale
    limit = table["log_accretion_limit"].to_numpy()
    seen = (table["pollution"] == "detected").to_numpy()
    value = table["log_accretion"].to_numpy()[seen]
    s2 = table["log_accretion_err"].to_numpy()[seen] ** 2
    e2 = table["log_accretion_calibration_err"].to_numpy()[seen] ** 2
    chance = c * below((mean - limit) / np.sqrt(sd**2 + w**2))
    total = np.zeros(len(fraction))
    if settings.threshold_on == "measured":
        density = c * normal(value, mean, np.sqrt(sd**2 + s2 + e2))
        if (e2 > 0).any():
            centre = mean + (sd**2 + s2) / (sd**2 + s2 + e2) * (value - mean)
            spread = np.sqrt((sd**2 + s2) * e2 / (sd**2 + s2 + e2))
            density = density * below((centre - limit[seen]) / spread)
    else:
        s2 = s2 + e2
        v2 = 1 / (1 / sd**2 + 1 / s2)
        centre = v2 * (mean / sd**2 + value / s2)
        density = normal(value, mean, np.sqrt(sd**2 + s2)) * c * below((centre - limit[seen]) / np.sqrt(w**2 + v2))
    above = value - limit[seen]
    spurious = np.where(above > 0, 2 * normal(above / scale) / scale, 0.0)
    total += np.log(fraction * density + (1 - fraction * chance[:, seen]) * q * spurious).sum(axis=1)
    return total + (np.log1p(-fraction * chance[:, ~seen]) + np.log1p(-q)).sum(axis=1)


def grid_moments(table, settings, points=36):
    """Exact means and sds, on a grid of the fraction, the mean and the spread, with the shipped priors of `steady`."""
    axes = [np.linspace(0.01, 0.99, points + 14), np.linspace(6.0, 9.0, points), np.linspace(0.1, 2.5, points)]
    for _ in range(2):
        fraction, mean, sd = (axis.ravel()[:, None] for axis in np.meshgrid(*axes, indexing="ij"))
        parts = [slice(start, start + 4000) for start in range(0, len(fraction), 4000)]
        log = [single_channel(table, settings, fraction[part], mean[part], sd[part]) for part in parts]
        prior = scipy.stats.norm.logpdf(mean[:, 0], 8, 1.5) + scipy.stats.halfnorm.logpdf(sd[:, 0], scale=1.5)
        weight = scipy.special.softmax(np.concatenate(log) + prior)
        found = []
        for values in (fraction, mean, sd):
            centre = float(weight @ values[:, 0])
            found.append((centre, float(np.sqrt(weight @ (values[:, 0] - centre) ** 2))))
        # once more, about the posterior
        axes = [np.linspace(m - 6 * s, m + 6 * s, len(axis)) for (m, s), axis in zip(found, axes, strict=True)]
        axes[0], axes[2] = np.clip(axes[0], 1e-4, 1 - 1e-4), np.maximum(axes[2], 0.02)
        axes = [np.linspace(axis[0], axis[-1], len(axis)) for axis in axes]
    return dict(zip(NAMES, found, strict=True))


def test_engine_of_record_agrees_with_an_independent_grid(recorded):
    exact = grid_moments(recorded.table, recorded.settings)
    table = recorded.fit.table.set_index("quantity")
    for name, (mean, sd) in exact.items():
        assert table.loc[name, "mean"] == pytest.approx(mean, abs=0.15 * sd), name
        assert table.loc[name, "sd"] == pytest.approx(sd, rel=0.10), name


SELECTIONS = [
    (ChannelSettings(), 0.0),
    (ChannelSettings(ceiling=0.8), 0.3),
    (ChannelSettings(threshold_on="true", width=0.25), 0.0),
    (ChannelSettings(threshold_on="true", width=0.25, ceiling=0.8, false_positive=0.04), 0.2),
]


@pytest.mark.parametrize(("settings", "calibration"), SELECTIONS)
def test_quick_engine_agrees_with_an_independent_grid(settings, calibration):
    rng = np.random.default_rng(4)
    table = drawn_survey(rng, 0.5, 7.8, 0.6, two_depths(rng, 250), settings, calibration, noise=0.1)
    problem = posed(table, settings)
    draws = importance_draws(problem, np.random.default_rng(0))
    theta = problem.theta(draws.resampled(np.random.default_rng(1), 6000))
    for name, (mean, sd) in grid_moments(table, settings, 28).items():
        assert theta[name].mean() == pytest.approx(mean, abs=0.10 * sd), name
        assert theta[name].std() == pytest.approx(sd, rel=0.08), name


@pytest.mark.slow
def test_explicit_latents_in_plain_pymc():
    """Every star's true rate sampled, and no integral taken by hand."""
    import pymc as pm

    settings = ChannelSettings(threshold_on="true", width=0.25)
    rng = np.random.default_rng(8)
    table = drawn_survey(rng, 0.6, 7.8, 0.6, two_depths(rng, 120, 6.8, 7.8), settings, noise=0.1)
    seen = (table["pollution"] == "detected").to_numpy()
    limit = table["log_accretion_limit"].to_numpy()
    with pm.Model():
        fraction = pm.Beta("debris_fraction", 1, 1)
        mean = pm.Normal("mean_log_accretion", 8, 1.5)
        sd = pm.HalfNormal("sd_log_accretion", 1.5)
        rate = mean + sd * pm.Normal("deviation", 0, 1, shape=len(table))
        efficiency = 0.5 * pm.math.erfc(-(rate - limit) / settings.width / np.sqrt(2))
        pm.Normal("value", rate[seen], 0.1, observed=table["log_accretion"].to_numpy()[seen])
        pm.Potential("seen", (pm.math.log(fraction) + pm.math.log(efficiency[seen] + 1e-300)).sum())
        pm.Potential("unseen", pm.math.log(1 - fraction * efficiency[~seen]).sum())
        trace = pm.sample(
            2000, tune=2000, chains=4, cores=2, random_seed=3, target_accept=0.95, progressbar=False,
            compute_convergence_checks=False,
        )  # fmt: skip
    fit = fit_problem(posed(table, settings), 1).table.set_index("quantity")
    for name in NAMES:
        values = np.asarray(trace.posterior[name]).ravel()
        assert fit.loc[name, "mean"] == pytest.approx(values.mean(), abs=0.15 * values.std()), name
        assert fit.loc[name, "sd"] == pytest.approx(values.std(), rel=0.10), name


# two channels ---------------------------------------------------------------------------------------------------------

X, Y = np.linspace(-1, 17, 601), np.linspace(-13, 8, 701)
CELL = (X[1] - X[0]) * (Y[1] - Y[0])


@dataclass
class OneSide:
    """A channel as one grid of true values sees it, a row a star."""

    seen: np.ndarray
    genuine: np.ndarray
    missed: np.ndarray
    spurious: np.ndarray

    @classmethod
    def of(cls, table, outcome, value, settings, grid):
        seen = (table[outcome] == "detected").to_numpy()
        limit = table[f"{value}_limit"].to_numpy()[:, None]
        listed = np.where(seen, table[value].to_numpy(dtype=float), 0.0)[:, None]
        error = np.where(seen, table[f"{value}_err"].to_numpy(dtype=float), 1.0)[:, None]
        efficiency = settings.ceiling * below((grid[None, :] - limit) / settings.width)
        # "measured": the value itself has crossed; "true": the efficiency of the true value decides
        passed = settings.ceiling if settings.threshold_on == "measured" else efficiency
        above = (listed - limit)[:, 0]
        tail = 2 * normal(above / settings.spurious_scale) / settings.spurious_scale
        spurious = np.where(above > 0, settings.false_positive * tail, 0.0)
        return cls(seen, normal(listed, grid[None, :], error) * passed, 1 - efficiency, spurious)

    def listing(self, quiet):
        """Density of what is listed, at each true value, where the star is a host and where it is none."""
        host = np.where(
            self.seen[:, None], self.genuine + self.missed * self.spurious[:, None], self.missed * (1 - quiet)
        )
        return host, np.where(self.seen, self.spurious, 1 - quiet)


def resolved(theta):
    """Where the grid is fine and wide enough for the population."""
    sx, sy = theta["sd_log_accretion"], theta["sd_log_dust"]
    narrow = np.minimum(sx, sy) * np.sqrt(1 - theta["rate_dust_correlation"] ** 2)
    return (narrow > 0.08) & (sx < 1.4) & (sy < 1.4)


def two_channels(table, settings, theta):
    """Log-likelihood of a blind survey of two channels by double quadrature over the true values; shape (S,)."""
    first = OneSide.of(table, "pollution", "log_accretion", settings["pollution"], X)
    second = OneSide.of(table, "excess", "log_dust", settings["excess"], Y)
    (host_x, none_x), (host_y, none_y) = (
        side.listing(item.false_positive) for side, item in zip((first, second), settings.values(), strict=True)
    )
    total = []
    keys = ("mean_log_accretion", "sd_log_accretion", "mean_log_dust", "sd_log_dust", "rate_dust_correlation")
    for f, d, mx, sx, my, sy, rho in zip(
        theta["debris_fraction"], theta["dust_share"], *(theta[key] for key in keys), strict=True
    ):
        zx, zy = ((X - mx) / sx)[:, None], ((Y - my) / sy)[None, :]
        power = -0.5 * (zx**2 - 2 * rho * zx * zy + zy**2) / (1 - rho**2)
        joint = np.exp(power) / (2 * np.pi * sx * sy * np.sqrt(1 - rho**2)) * CELL
        both = ((host_x @ joint) * host_y).sum(axis=1)
        alone = host_x @ (normal(X, mx, sx) * (X[1] - X[0]))
        star = f * (d * both + (1 - d) * alone * none_y) + (1 - f) * none_x * none_y
        total.append(np.log(star).sum())
    return np.array(total)


def joint_survey(rng, size, settings, fraction=0.6, dust=0.6, rho=0.5):
    host = rng.random(size) < fraction
    dusty = host & (rng.random(size) < dust)
    zx, zy = rng.normal(size=(2, size))
    truth = {"pollution": 7.8 + 0.7 * zx, "excess": -2.6 + 0.4 * (rho * zx + np.sqrt(1 - rho**2) * zy)}
    table = pd.DataFrame({"star": [f"s{i}" for i in range(size)], "survey": "a", "atmosphere": "H"})
    for (name, item), column, there, depths in zip(
        settings.items(), ("log_accretion", "log_dust"), (host, dusty), ((6.8, 7.9), (-3.2, -2.7)), strict=True
    ):
        limit = two_depths(rng, size, *depths)
        noisy = truth[name] + item.width * rng.normal(size=size)
        if item.threshold_on == "measured":
            seen, error = noisy > limit, item.width
        else:
            error = 0.1
            seen = rng.random(size) < below((truth[name] - limit) / item.width)
            noisy = truth[name] + error * rng.normal(size=size)
        seen &= there & (rng.random(size) < item.ceiling)
        false = ~seen & (rng.random(size) < item.false_positive)
        noisy = np.where(false, limit + item.spurious_scale * np.abs(rng.normal(size=size)), noisy)
        table[name] = np.where(seen | false, "detected", "limit")
        table[column] = np.where(seen | false, noisy, np.nan)
        table[f"{column}_err"] = np.where(seen | false, error, np.nan)
        table[f"{column}_limit"] = limit
    return table


def joint_problem(table, settings):
    rules = {
        name: ChannelRules(item.threshold_on, spurious=item.false_positive > 0, width=item.width)
        for name, item in settings.items()
    }
    return pose(load_model("dust-sometimes"), read_sample(table, rules=RowRules(**rules)), settings)


JOINT_SELECTIONS = [
    {"pollution": ChannelSettings(), "excess": ChannelSettings()},
    {
        "pollution": ChannelSettings(ceiling=0.9, false_positive=0.04),
        "excess": ChannelSettings(threshold_on="true", width=0.2, ceiling=0.8, false_positive=0.02),
    },
]


@pytest.mark.parametrize("settings", JOINT_SELECTIONS)
def test_joint_posterior_agrees_with_double_quadrature(settings):
    """The engine's draws, weighted anew by the likelihood of this file: the weights are constant."""
    problem = joint_problem(joint_survey(np.random.default_rng(5), 60, settings), settings)
    draws = importance_draws(problem, np.random.default_rng(0), draws=4000)
    assert draws.usable
    u = draws.resampled(np.random.default_rng(1), 100)
    theta = problem.theta(u)
    fine = resolved(theta)
    assert fine.mean() > 0.8
    theta = {key: value[fine] if np.ndim(value) else value for key, value in theta.items()}
    difference = two_channels(problem.sample.table, settings, theta) - problem.log_likelihood_of(u[fine])
    assert difference.std() < 1e-3
    # constants of the likelihood agree too
    assert difference.mean() == pytest.approx(0.0, abs=1e-3)


@pytest.mark.slow
def test_joint_engine_of_record_agrees_with_double_quadrature():
    """Means within 0.2 sd of those of an importance sample weighted by the likelihood of this file alone."""
    settings = JOINT_SELECTIONS[1]
    problem = joint_problem(joint_survey(np.random.default_rng(5), 80, settings), settings)
    fit = fit_problem(problem, 1).table.set_index("quantity")
    names = [item.name for item in problem.free]
    rng = np.random.default_rng(2)
    guide = importance_draws(problem, rng)
    # a Student-t about the quick engine's mean, widened: what it knows of the target cancels in the weights
    centre = np.exp(guide.log_weight) @ guide.u
    proposal = scipy.stats.multivariate_t(centre, 1.3 * guide.covariance, df=6, seed=rng)
    u = proposal.rvs(2500)
    theta = problem.theta(u)
    fine = resolved(theta)
    u, theta = u[fine], {key: value[fine] if np.ndim(value) else value for key, value in theta.items()}
    own = two_channels(problem.sample.table, settings, theta)
    weight = scipy.special.softmax(own + problem.log_prior(u) - proposal.logpdf(u))
    assert 1 / np.sum(weight**2) > 400
    for name in names:
        mean = float(weight @ theta[name])
        sd = float(np.sqrt(weight @ (theta[name] - mean) ** 2))
        assert fit.loc[name, "mean"] == pytest.approx(mean, abs=0.2 * sd), name
