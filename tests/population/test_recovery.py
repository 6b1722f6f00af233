"""Simulated surveys give back what went in; surveys read wrongly do not."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.stats

from remnantstats.sensitivity import ChannelSettings

TRUTH = {"debris_fraction": 0.4, "mean_log_accretion": 7.8, "sd_log_accretion": 0.8}
N = 6000
KINDS = ["measured", "true"]

#: settings, calibration error, number of known-polluted stars
DESIGNS: dict[str, tuple[dict[str, Any], float, int]] = {
    "plain": ({}, 0.0, 0),
    "spurious": ({"false_positive": 0.05}, 0.0, 0),
    "calibration": ({}, 0.25, 0),
    "ceiling": ({"ceiling": 0.75}, 0.0, 0),
    "targeted": ({}, 0.0, 1500),
    "everything": ({"false_positive": 0.04, "ceiling": 0.85}, 0.2, 1500),
}


def survey(kit: Any, seed: int, settings: ChannelSettings, calibration: float = 0.0, known: int = 0, n: int = N) -> Any:
    """A simulated table of the steady model."""
    rng = np.random.default_rng(seed)
    channels = {"pollution": settings}
    table = kit.design_table(rng, n, channels, {"pollution": known} if known else {})
    return kit.fill_in(rng, table, kit.load_model("steady"), channels, TRUTH, calibration)


def scores(kit: Any, table: Any, settings: ChannelSettings) -> dict[str, float]:
    problem = kit.pose_table(table, kit.load_model("steady"), {"pollution": settings})
    return kit.fit(problem, kit.vector(problem, TRUTH)).scores(TRUTH)


@pytest.mark.parametrize("design", list(DESIGNS))
@pytest.mark.parametrize("kind", KINDS)
def test_truth_is_recovered(kit: Any, kind: str, design: str) -> None:
    changes, calibration, known = DESIGNS[design]
    settings = ChannelSettings(threshold_on=kind, width=0.2, **changes)
    table = survey(kit, 21, settings, calibration, known)
    found = scores(kit, table, settings)
    assert max(map(abs, found.values())) < 3.5, found


@pytest.mark.parametrize("kind", KINDS)
def test_one_selection_is_not_the_other(kit: Any, kind: str) -> None:
    """METHODS §2: the efficiency factor in a "measured" detection, or its absence from a "true" one, biases f and μ."""
    right = ChannelSettings(threshold_on=kind, width=0.3)
    wrong = ChannelSettings(threshold_on=KINDS[1 - KINDS.index(kind)], width=0.3)
    table = survey(kit, 22, right, n=60_000)
    if kind == "true":
        # what a reader of "measured" would have to leave out: values below their limit
        table = table[~(table["log_accretion"] <= table["log_accretion_limit"])].reset_index(drop=True)
    assert max(map(abs, scores(kit, survey(kit, 22, right, n=60_000), right).values())) < 3.5
    found = scores(kit, table, wrong)
    assert max(map(abs, found.values())) > 4, found


def test_calibration_error_cannot_be_ignored(kit: Any) -> None:
    """METHODS §2: taken for part of the decision's noise, 0.2 dex of it moves f (there 0.49 for 0.3) and the mean."""
    rng = np.random.default_rng(50)
    truth = {"debris_fraction": 0.3, "mean_log_accretion": 7.5, "sd_log_accretion": 0.6}
    settings, model = {"pollution": ChannelSettings(width=0.1)}, kit.load_model("steady")
    table = kit.design_table(rng, 20_000, settings, {})
    table["log_accretion_limit"] = 8.0
    table = kit.fill_in(rng, table, model, settings, truth, 0.2)
    problem = kit.pose_table(table, model, settings)
    right = kit.fit(problem, kit.vector(problem, truth)).scores(truth)
    assert max(map(abs, right.values())) < 3.5, right
    wrong = table[~(table["log_accretion"] <= 8.0)].reset_index(drop=True)
    wrong["log_accretion_err"] = np.where(wrong["pollution"] == "detected", np.hypot(0.1, 0.2), np.nan)
    wrong["log_accretion_calibration_err"] = 0.0
    problem = kit.pose_table(wrong, model, settings)
    fit = kit.fit(problem, kit.vector(problem, truth))
    assert fit.scores(truth)["mean_log_accretion"] < -4
    assert problem.theta(fit.mode[None])["debris_fraction"][0] > 0.45


def test_selected_stars_are_not_cut_at_the_limit_of_their_follow_up(kit: Any) -> None:
    """Stars known from a shallow search and followed up deeply; cut at the deep limit, their mean is too high."""
    rng = np.random.default_rng(24)
    settings = {"pollution": ChannelSettings(width=0.15)}
    model = kit.pinned(kit.load_model("steady"), debris_fraction=0.4)
    table = kit.design_table(rng, 3000, settings, {"pollution": 3000})
    table["log_accretion_limit"], table["selection_limit"] = 5.0, 7.74
    table = kit.fill_in(rng, table, model, settings, TRUTH)
    assert (table["pollution"] == "detected").all()
    problem = kit.pose_table(table, model, settings)
    right = kit.fit(problem, kit.vector(problem, TRUTH))
    assert max(map(abs, right.scores(TRUTH).values())) < 3.5
    table["selection_limit"] = table["log_accretion_limit"]
    wrong = kit.fit(kit.pose_table(table, model, settings), right.mode)
    assert wrong.scores(TRUTH)["mean_log_accretion"] > 4
    # METHODS §2: 8.39 for 7.8; the mean of a normal above a soft threshold
    spread = np.hypot(0.8, 0.15)
    h = (7.8 - 7.74) / spread
    expected = 7.8 + 0.8**2 / spread * scipy.stats.norm.pdf(h) / scipy.stats.norm.cdf(h)
    assert expected == pytest.approx(8.39, abs=0.005)
    assert wrong.mode[0] == pytest.approx(expected, abs=0.05)


def test_rare_selection_is_refused(kit: Any) -> None:
    from remnantstats.errors import ModelError

    rng = np.random.default_rng(25)
    settings = {"pollution": ChannelSettings(width=0.15)}
    table = kit.design_table(rng, 20, settings, {"pollution": 5})
    with pytest.raises(ModelError, match="too rare"):
        kit.fill_in(rng, table, kit.load_model("steady"), settings, {**TRUTH, "mean_log_accretion": 0.0})


# the other shipped models --------------------------------------------------------------------------------------------

MODELS: dict[str, dict[str, float]] = {
    "cooling-trend": {"fraction_slope[log_cooling_age]": 0.6, "rate_slope[log_cooling_age]": -0.4},
    "heavy-tail": {"tail_weight": 4.0},
    "power-law": {"tail_index": 0.3},
    "grouped": {"group_sd": 0.8},
    "dust-always": {"mean_log_dust": -2.8, "sd_log_dust": 0.5, "rate_dust_correlation": 0.5, "dust_share": 1.0},
    "dust-sometimes": {"mean_log_dust": -2.8, "sd_log_dust": 0.5, "rate_dust_correlation": 0.5, "dust_share": 0.6},
}


@pytest.mark.parametrize("name", list(MODELS))
def test_shipped_models_are_recovered(kit: Any, name: str) -> None:
    rng = np.random.default_rng(26)
    model = kit.load_model(name)
    truth: dict[str, Any] = {**TRUTH, **MODELS[name]}
    settings = {"pollution": ChannelSettings(width=0.2)}
    if model.file.channels == "both":
        settings["excess"] = ChannelSettings(threshold_on="true", width=0.15)
    if name == "grouped":
        truth[kit.group_raw] = np.array([-0.8, 0.1, 1.1])
    table = kit.design_table(rng, 5000, settings, {"pollution": 500})
    problem = kit.pose_table(table, model, settings)
    truth = {key: value for key, value in truth.items() if problem.has(key)}
    table = kit.fill_in(rng, table, model, settings, truth)
    problem = kit.pose_table(table, model, settings)
    found = kit.fit(problem, kit.vector(problem, truth)).scores(truth)
    assert max(map(abs, found.values())) < 4, found


def test_helium_offsets_are_recovered(kit: Any) -> None:
    rng = np.random.default_rng(27)
    settings = {"pollution": ChannelSettings(width=0.2)}
    model = kit.load_model("steady")
    truth = {**TRUTH, "fraction_offset[He]": -0.8, "rate_offset[He]": 0.6}
    table = kit.design_table(rng, 8000, settings, {})
    table["atmosphere"] = np.where(np.arange(8000) % 2, "He", "H")
    table = kit.fill_in(rng, table, model, settings, truth, atmospheres=("H", "He"))
    problem = kit.pose_table(table, model, settings, atmospheres=("H", "He"))
    found = kit.fit(problem, kit.vector(problem, truth)).scores(truth)
    assert max(map(abs, found.values())) < 3.5, found


# limits in which the answer is known ---------------------------------------------------------------------------------


def test_censored_log_normal(kit: Any) -> None:
    """f fixed at 1, tiny errors and widths, flat priors: the mode is the censored maximum of the likelihood."""
    # scipy.stats.CensoredData and norm.fit; ammonium in water, left-censored, shipped with lifelines (load_nh4)
    from lifelines.datasets import load_nh4

    data = load_nh4()
    value = np.log10(data["NH4.mg.per.L"].to_numpy(dtype=float))
    censored = data["Censored"].to_numpy(dtype=bool)
    assert 0 < censored.sum() < len(value)
    expected = scipy.stats.norm.fit(scipy.stats.CensoredData(uncensored=value[~censored], left=value[censored]))
    import pandas as pd

    table = pd.DataFrame(
        {
            "star": [f"W{i}" for i in range(len(value))], "pollution": np.where(censored, "limit", "detected"),
            "log_accretion": np.where(censored, np.nan, value), "log_accretion_err": np.where(censored, np.nan, 1e-3),
            "log_accretion_limit": np.where(censored, value, value - 1.0),
        }
    )  # fmt: skip
    flat = {
        "mean_log_accretion": {"family": "uniform", "low": -50, "high": 50},
        "sd_log_accretion": {"family": "uniform", "low": 0, "high": 50},
    }
    model = kit.pinned(kit.load_model("steady").with_priors(flat, "test"), debris_fraction=1)
    problem = kit.pose_table(table, model, {"pollution": ChannelSettings(width=1e-3)})
    start = kit.vector(problem, {"mean_log_accretion": expected[0], "sd_log_accretion": expected[1]})

    def density(u: np.ndarray) -> np.ndarray:
        # the mode in (μ, σ): without the Jacobian of the unconstrained scale
        return problem.log_likelihood_of(u)

    found = problem.theta(scipy_mode(density, start)[None])
    assert found["mean_log_accretion"][0] == pytest.approx(expected[0], abs=1e-4)
    assert found["sd_log_accretion"][0] == pytest.approx(expected[1], abs=1e-4)


def scipy_mode(density: Any, start: np.ndarray) -> np.ndarray:
    import scipy.optimize

    options = {"xatol": 1e-9, "fatol": 1e-10, "maxiter": 4000}
    return scipy.optimize.minimize(
        lambda u: -density(u[None])[0], start + 0.01, method="Nelder-Mead", options=options
    ).x


# detected of observed; the surveys of CHECKS.md: Rocchetto et al. 2015, Wilson et al. 2019 (twice), Koester et al. 2014
@pytest.mark.parametrize(("k", "n"), [(5, 134), (3, 195), (76, 168), (48, 85)])
def test_binomial_limit(kit: Any, k: int, n: int) -> None:
    """Limits far below the population: the likelihood of f is binomial."""
    import pandas as pd

    seen = np.arange(n) < k
    rng = np.random.default_rng(28)
    table = pd.DataFrame(
        {
            "star": [f"B{i}" for i in range(n)], "pollution": np.where(seen, "detected", "limit"),
            "log_accretion": np.where(seen, rng.normal(8, 0.5, n), np.nan),
            "log_accretion_err": np.where(seen, 0.1, np.nan), "log_accretion_limit": -20.0,
        }
    )  # fmt: skip
    model = kit.pinned(kit.load_model("steady"), mean_log_accretion=8.0, sd_log_accretion=0.5)
    problem = kit.pose_table(table, model, {"pollution": ChannelSettings(width=0.1)})
    f = np.linspace(0.001, 0.95, 60)
    u = problem.parameter("debris_fraction").unconstrain(f)[:, None]
    found = problem.log_likelihood_of(u) - scipy.stats.binom.logpmf(k, n, f)
    np.testing.assert_allclose(found, found[0], atol=1e-9)


def test_imperfect_detection_without_depth(kit: Any) -> None:
    """Every star with the same efficiency and false-positive probability: Rogan & Gladen 1978 at the maximum."""
    # f = (p + Sp − 1)/(Se + Sp − 1), Se = P + (1 − P) q, Sp = 1 − q (Rogan & Gladen 1978)
    import pandas as pd

    n, k, q, limit, mean, sd, width = 1000, 300, 0.08, 7.5, 7.8, 0.6, 0.15
    seen = np.arange(n) < k
    rng = np.random.default_rng(29)
    # values carry no information on who is spurious where the two densities are alike; here the outcome alone is used
    chance = scipy.stats.norm.cdf((mean - limit) / np.hypot(sd, width))
    table = pd.DataFrame(
        {
            "star": [f"R{i}" for i in range(n)], "pollution": np.where(seen, "detected", "limit"),
            "log_accretion": np.where(seen, limit + np.abs(rng.normal(0, 0.3, n)), np.nan),
            "log_accretion_err": np.where(seen, width, np.nan), "log_accretion_limit": limit,
        }
    )  # fmt: skip
    model = kit.pinned(kit.load_model("steady"), mean_log_accretion=mean, sd_log_accretion=sd)
    settings = {"pollution": ChannelSettings(width=width, false_positive=q)}
    problem = kit.pose_table(table, model, settings)
    f = np.linspace(0.01, 0.99, 981)
    theta = problem.lift(problem.theta(problem.parameter("debris_fraction").unconstrain(f)[:, None]))
    from remnantstats.population.ops import NUMPY

    limits = next(
        terms
        for block, terms in zip(problem.blocks, problem.log_likelihood(NUMPY, theta), strict=True)
        if block.outcome["pollution"] == "limit"
    )
    missed = np.exp(limits[:, 0])
    np.testing.assert_allclose(missed, (1 - f * chance) * (1 - q), rtol=1e-12)
    best = f[np.argmax(k * np.log1p(-missed) + (n - k) * np.log(missed))]
    sensitivity, specificity = chance + (1 - chance) * q, 1 - q
    assert best == pytest.approx((k / n + specificity - 1) / (sensitivity + specificity - 1), abs=1.1e-3)
