"""Several models of one sample: against ArviZ, against refits without a star, and through a study."""

import json

import arviz_stats
import numpy as np
import pandas as pd
import pytest
import scipy.special
from helpers.small_studies import TRANSFER, drawn_study, study_text

import remnantstats as rs
from remnantstats.api import simulate_sample
from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.inference import fit_problem
from remnantstats.inference.compare import compare
from remnantstats.population import load_model, pose
from remnantstats.sensitivity import ChannelSettings

SETTINGS = {"pollution": ChannelSettings()}
NAMES = ("steady", "cooling-trend")


def problem_of(table, model="steady"):
    rules = RowRules(
        pollution=ChannelRules(), excess=None, covariates=("cooling_age",) if model == "cooling-trend" else ()
    )
    return pose(load_model(model), read_sample(table, rules=rules), SETTINGS)


@pytest.fixture(scope="module")
def fits():
    """A fraction that falls steeply with age, seen by a model that knows of it and by one that does not."""
    survey = simulate_sample(
        "cooling-trend",
        300,
        seed=3,
        debris_fraction=0.5,
        mean_log_accretion=8.0,
        sd_log_accretion=0.6,
        **{"fraction_slope[log_cooling_age]": -3.0, "rate_slope[log_cooling_age]": -0.8},
    )
    return [fit_problem(problem_of(survey.table, name), 2, quick=True) for name in NAMES]


@pytest.fixture(scope="module")
def comparison(fits):
    return compare(fits, 7)


def test_scores_are_those_of_arviz(fits, comparison):
    rows = comparison.table.set_index("model")
    pointwise = {}
    for fit in fits:
        own = arviz_stats.loo(fit.posterior, pointwise=True)
        row = rows.loc[fit.model.name]
        assert row["elpd"] == pytest.approx(float(own.elpd), rel=1e-9)
        # one of the two library stacks divides by n − 1
        assert row["elpd_se"] == pytest.approx(float(own.se), rel=1 / len(fit.stars))
        assert row["p_loo"] == pytest.approx(float(own.p), rel=1e-6)
        assert row["worst_k"] == pytest.approx(float(np.max(own.pareto_k)))
        pointwise[fit.model.name] = np.asarray(own.elpd_i)
    gap = pointwise["steady"] - pointwise["cooling-trend"]
    assert rows.loc["steady", "elpd_difference"] == pytest.approx(gap.sum())
    assert rows.loc["steady", "difference_se"] == pytest.approx(np.sqrt(len(gap)) * gap.std())
    assert rows.loc["cooling-trend", "elpd_difference"] == 0


def test_the_model_that_the_data_demand_leads(comparison):
    assert list(comparison.table["model"]) == ["cooling-trend", "steady", "stacked"]
    behind = comparison.table.iloc[1]
    assert behind["elpd_difference"] < -3 * behind["difference_se"]
    assert comparison.weights["cooling-trend"] > 0.9


def test_the_stacked_fraction_lies_between(fits, comparison):
    assert sum(comparison.weights.values()) == pytest.approx(1)
    assert all(weight >= 0 for weight in comparison.weights.values())
    means = [fit.draws(fit.fraction).mean() for fit in fits]
    weighted = sum(comparison.weights[fit.model.name] * mean for fit, mean in zip(fits, means, strict=True))
    error = comparison.fraction.std() / np.sqrt(len(comparison.fraction))
    assert min(means) - 4 * error < comparison.stacked["mean"] < max(means) + 4 * error
    assert comparison.fraction.mean() == pytest.approx(weighted, abs=4 * error)
    for _, rows in comparison.above.groupby("quantity"):
        by_model = rows.set_index("model")["mean"]
        assert by_model[list(NAMES)].min() - 0.01 < by_model["stacked"] < by_model[list(NAMES)].max() + 0.01


def test_the_same_seed_gives_the_same_mixture(fits, comparison):
    np.testing.assert_array_equal(comparison.fraction, compare(fits, 7).fraction)
    assert not np.array_equal(comparison.fraction, compare(fits, 8).fraction)


def test_scores_agree_with_refits_without_the_star():
    """Exact leave-one-out: fit all others, then ask for the star's own density; no importance weights."""
    survey = simulate_sample("steady", 40, seed=9, debris_fraction=0.5, mean_log_accretion=8.0, sd_log_accretion=0.7)
    table = pd.DataFrame(survey.table)
    whole = problem_of(table)
    scores = np.asarray(arviz_stats.loo(fit_problem(whole, 1, quick=True).posterior, pointwise=True).elpd_i)
    found = np.flatnonzero((table["pollution"] == "detected").to_numpy())
    values = table["log_accretion"].to_numpy(dtype=float)
    limit = int(np.flatnonzero((table["pollution"] == "limit").to_numpy())[0])
    for star in (found[np.argmin(values[found])], found[np.argmax(values[found])], limit):
        others = problem_of(table.drop(index=star).reset_index(drop=True))
        fit = fit_problem(others, 4, quick=True)
        u = np.stack([item.unconstrain(fit.draws(item.name)) for item in others.free], axis=1)
        density = whole.pointwise(whole.theta(u))[:, star]
        exact = scipy.special.logsumexp(density) - np.log(len(density))
        assert scores[star] == pytest.approx(exact, abs=0.05)


@pytest.fixture(scope="module")
def studies(tmp_path_factory):
    """The same study twice: the first-named model carried on, and the stacked fraction."""
    found = {}
    for stacking in ("false", "true"):
        path = drawn_study(tmp_path_factory.mktemp(f"stacking_{stacking}"), stars=60)
        model = f'name = ["steady", "heavy-tail"]\nstacking = {stacking}'
        path.write_text(study_text(table="sample.ecsv", model=model, more=TRANSFER), encoding="utf-8")
        found[stacking] = rs.run(path, quick=True)
    return found


def test_a_study_of_two_models_writes_their_comparison(studies):
    result = studies["false"]
    table = pd.read_csv(result.folder / "comparison.csv")
    assert sorted(table["model"]) == ["heavy-tail", "stacked", "steady"]
    assert table["weight"].sum() == pytest.approx(1)
    assert result.fit.model.name == "steady"
    record = json.loads((result.folder / "run.json").read_text(encoding="utf-8"))
    assert [item["name"] for item in record["models"]] == ["steady", "heavy-tail"]


def test_stacking_changes_what_is_carried_on(studies):
    plain, stacked = (studies[name].prior.reference for name in ("false", "true"))
    assert "stacking" not in plain
    assert "models averaged by stacking" in stacked and "steady" in stacked and "heavy-tail" in stacked


@pytest.mark.parametrize("stacking", ["false", "true"])
def test_the_report_shows_the_models(studies, stacking):
    page = (studies[stacking].folder / "report.html").read_text(encoding="utf-8")
    assert '<h2 id="head-models">Models compared</h2>' in page
    assert "stacked (models averaged by weight)" in page
    assert ("come from the stacked fraction, as the study asks" in page) == (stacking == "true")
    assert (studies[stacking].folder / "figures" / "models.pdf").read_bytes().startswith(b"%PDF")
