"""Every check on both sides of its threshold (METHODS §5)."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from helpers.surveys import counted_survey, drawn_survey, posed, two_depths

from remnantstats.inference import Check, checks, fit_problem
from remnantstats.inference.engine import _lowest_bfmi
from remnantstats.inference.influence import prior_conflict_check
from remnantstats.inference.quick import importance_draws
from remnantstats.sensitivity import ChannelSettings

GOOD = {"quantity": "a", "mean": 0.4, "sd": 0.1, "r_hat": 1.002, "ess_bulk": 900.0, "ess_tail": 800.0}


def summary(**changes):
    return pd.DataFrame([GOOD, GOOD | {"quantity": "b"} | changes])


def named(found, name):
    return next(check for check in found if check.name == name)


CONVERGENCE = [
    ("chains agree", {"r_hat": 1.0099}, {"r_hat": 1.0101}),
    ("enough independent draws", {"ess_bulk": 401.0}, {"ess_bulk": 400.0}),
    ("enough independent draws", {"ess_tail": 401.0}, {"ess_tail": 399.0}),
]


@pytest.mark.parametrize(("name", "good", "bad"), CONVERGENCE)
def test_convergence(name, good, bad):
    for change, verdict in ((good, "pass"), (bad, "fail")):
        found = checks.convergence_checks(summary(**change), 0.0, 1.0, 1000)
        assert named(found, name).verdict == verdict
        assert "b" in named(found, name).message
        assert [check.verdict for check in found if check.name != name] == ["pass"] * 3


def test_r_hat_of_exactly_the_limit_fails():
    assert named(checks.convergence_checks(summary(r_hat=1.01), 0, 1, 1000), "chains agree").verdict == "fail"


def test_a_quantity_that_does_not_move_is_not_judged():
    found = checks.convergence_checks(summary(sd=0.0, r_hat=np.nan, ess_bulk=np.nan, ess_tail=np.nan), 0.0, 1.0, 1000)
    assert checks.verdict(found) == "pass"


@pytest.mark.parametrize(("divergent", "e_bfmi", "verdicts"), [
    (0.001, 0.30, ["pass", "pass"]), (0.0011, 0.30, ["fail", "pass"]), (0.001, 0.29, ["pass", "fail"]),
])  # fmt: skip
def test_divergences_and_energy(divergent, e_bfmi, verdicts):
    found = checks.convergence_checks(summary(), divergent, e_bfmi, 1000)
    assert [named(found, name).verdict for name in ("no divergences", "energy explored")] == verdicts


def test_energy_fraction():
    rng = np.random.default_rng(0)
    free = rng.normal(size=(2, 4000))
    # independent energies: twice the variance between steps; a random walk of the energy: almost none
    assert _lowest_bfmi(free) == pytest.approx(2.0, rel=0.1)
    assert _lowest_bfmi(np.vstack([free[:1], free[1:].cumsum(axis=1)])) < 0.05


@pytest.mark.parametrize(("mean", "sd", "verdict"), [
    (0.424, 0.1, "pass"), (0.376, 0.1, "pass"), (0.426, 0.1, "fail"), (0.374, 0.1, "fail"),
    (0.4, 0.119, "pass"), (0.4, 0.121, "fail"), (0.4, 0.079, "fail"),
])  # fmt: skip
def test_engines(mean, sd, verdict):
    check = checks.engine_check(summary(), {"a": (0.4, 0.1), "b": (mean, sd)}, 0.2)
    assert check.verdict == verdict
    assert "b, mean" in check.message


def test_engines_are_not_compared_where_the_quick_one_does_not_serve():
    wrong = {"a": (0.9, 0.5), "b": (0.9, 0.5)}
    assert checks.engine_check(summary(), wrong, 0.70).verdict == "fail"
    for moments, k_hat in ((wrong, 0.71), (wrong, float("nan")), (None, float("inf"))):
        check = checks.engine_check(summary(), moments, k_hat)
        assert check.verdict == "pass" and "not compared" in check.message and np.isnan(check.value)


def test_engines_may_differ_in_the_far_tail_of_an_extrapolation_that_is_none():
    tail = pd.DataFrame([GOOD | {"quantity": "extrapolated_share", "mean": 1e-9, "sd": 1e-8}])
    assert checks.engine_check(tail, {"extrapolated_share": (3e-8, 1e-6)}, 0.2).verdict == "pass"
    assert checks.engine_check(tail, {"extrapolated_share": (0.05, 1e-6)}, 0.2).verdict == "fail"
    # only that quantity: a fraction as small is compared
    tail["quantity"] = "debris_fraction"
    assert checks.engine_check(tail, {"debris_fraction": (3e-8, 1e-6)}, 0.2).verdict == "fail"


@pytest.mark.parametrize(("k_hat", "effective", "verdicts"), [
    (0.70, 401, ["pass", "pass"]), (0.71, 401, ["fail", "pass"]), (0.1, 400, ["pass", "fail"]),
])  # fmt: skip
def test_quick_weights(k_hat, effective, verdicts):
    assert [check.verdict for check in checks.quick_check(k_hat, effective)] == verdicts


def test_predictive_p():
    verdicts = [checks.predictive_verdict(p, 4000).verdict for p in (0.001, 0.0009, 0.0)]
    assert verdicts == ["pass", "fail", "fail"]
    assert "below 0.0003" in checks.predictive_verdict(0.0, 4000).message
    nothing = checks.predictive_verdict(float("nan"), 0)
    assert nothing.verdict == "pass" and "not checked" in nothing.message


def test_influence():
    stars = ["Ash", "Birch", "Cedar"]
    assert checks.influence_check(np.array([0.1, 0.7, 0.3]), stars).verdict == "pass"
    check = checks.influence_check(np.array([0.71, 0.2, 0.9]), stars)
    assert check.verdict == "warn" and "posterior much: 2 (" in check.message
    assert "Cedar, Ash" in check.message and "Birch" not in check.message


def test_extrapolation():
    assert checks.extrapolation_check(0.30, 7.5).verdict == "pass"
    assert checks.extrapolation_check(0.301, 7.5).verdict == "warn"


def test_worst_verdict():
    made = {word: Check("x", word, 0.0, "", "") for word in ("pass", "warn", "fail")}
    assert checks.verdict([made["pass"]]) == "pass"
    assert checks.verdict([made["pass"], made["warn"]]) == "warn"
    assert checks.verdict([made["warn"], made["fail"], made["pass"]]) == "fail"


# whole fits -----------------------------------------------------------------------------------------------------------


def drawn(seed, deep=6.3, shallow=6.9, mean=7.7, sd=0.6, size=400):
    rng = np.random.default_rng(seed)
    return drawn_survey(rng, 0.5, mean, sd, two_depths(rng, size, deep, shallow), ChannelSettings())


def quick(table, **options):
    return fit_problem(posed(table, ChannelSettings()), 1, quick=True, **options)


def test_a_sound_survey_passes():
    fit = quick(drawn(1))
    assert fit.verdict == "pass", [check for check in fit.checks if check.verdict != "pass"]


def test_a_shallow_survey_warns_of_extrapolation():
    check = named(quick(drawn(2, 7.9, 8.1, size=800)).checks, "little extrapolation")
    assert check.verdict == "warn" and check.value > 0.3


def test_rates_of_another_shape_fail_the_predictive_check():
    """Two narrow clumps of rates where the model has one normal distribution."""
    rng = np.random.default_rng(5)
    table = drawn(5, size=600)
    seen = (table["pollution"] == "detected").to_numpy()
    clump = np.where(rng.random(len(table)) < 0.85, 7.3, 10.0) + 0.05 * rng.normal(size=len(table))
    fit = quick(table.assign(log_accretion=np.where(seen, clump, np.nan)))
    check = named(fit.checks, "data like the model's own")
    assert check.verdict == "fail" and check.value < 0.001
    assert fit.verdict == "fail" and any("unreliable" in mark for mark in fit.marks)


def test_missing_limits_warn_and_are_told():
    table = drawn(6)
    first = table.index[table["pollution"] == "detected"][:7]
    table.loc[first, "log_accretion_limit"] = np.nan
    fit = quick(table)
    check = named(fit.checks, "limits given")
    assert check.verdict == "warn" and check.value == 7
    assert any("7 limits" in note for note in fit.notes)
    assert fit.stars["log_accretion_limit_imputed"].sum() == 7


def test_a_prior_against_the_data_warns():
    """A mean rate sure to be near 5 before the data, which say 7.7."""
    problem = posed(drawn(1), ChannelSettings())
    prior = {"family": "normal", "mean": 5.0, "sd": 0.1, "basis": "test"}
    model = problem.model.with_priors({"mean_log_accretion": prior}, "test")
    against = fit_problem(posed(drawn(1), ChannelSettings(), model), 1, quick=True)
    names = ["debris_fraction", "mean_log_accretion"]
    assert prior_conflict_check(against.posterior, names).verdict == "warn"
    assert prior_conflict_check(fit_problem(problem, 1, quick=True).posterior, names).verdict == "pass"


def test_unusable_weights_are_no_cross_check():
    draws = importance_draws(posed(counted_survey(10, 30), ChannelSettings()), np.random.default_rng(0))
    assert draws.usable
    assert not replace(draws, k_hat=0.71).usable
