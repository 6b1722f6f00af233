"""Simulation-based calibration (Talts et al. 2018, arXiv:1804.06788): ranks of the truth are uniform."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import scipy.stats

from remnantstats.calibration import CalibrationReport, Design, calibrate, sbc
from remnantstats.calibration.builtin import builtin_table
from remnantstats.calibration.synthetic import posed_design, survey_table
from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.population import load_model, model_names
from remnantstats.population.simulate import ChannelOutcome, Simulated
from remnantstats.sensitivity import ChannelSettings, midpoint_shift


def agrees(report, share=0.95):
    """Uniform ranks and honest intervals for every parameter; refused surveys are few."""
    assert report.surveys - report.refused >= share * report.surveys
    table = report.coverage()
    assert len(table) >= 2
    # a family of tests: the bound is shared among the parameters
    assert (table["uniform_p"] > 0.001 / len(table)).all(), report
    for level in (50, 68, 90, 95):
        assert (abs(table[f"covered_{level}"] - level / 100) <= 4 * table[f"error_{level}"]).all(), report


def test_sixty_surveys_of_the_steady_model():
    report = calibrate(load_model("steady"), surveys=60, stars=300, seed=2)
    agrees(report)
    table = report.coverage()
    assert (table["uniform_p"] > 0.001).all()
    assert set(table["quantity"]) == {"debris_fraction", "mean_log_accretion", "sd_log_accretion"}


#: models whose thirty surveys take half a minute and less
FAST = ("cooling-trend", "grouped", "progenitor-trend")
OTHERS = [
    pytest.param(name, marks=[] if name in FAST else pytest.mark.slow) for name in model_names() if name != "steady"
]


@pytest.mark.parametrize("name", OTHERS)
def test_thirty_surveys_of_each_other_model(name):
    agrees(calibrate(load_model(name), surveys=30, stars=150, seed=3), share=0.8)


@pytest.mark.slow
@pytest.mark.parametrize("name", model_names())
def test_hundreds_of_surveys(name):
    agrees(calibrate(load_model(name), surveys=500 if name == "steady" else 300, stars=300, seed=4), share=0.8)


def test_a_likelihood_that_ignores_limits_is_caught(monkeypatch):
    """Surveys read as if every star had been observed to the deepest limit: the fraction comes out too low."""
    pose = sbc.pose

    def blind_to_depth(model, sample, *rest):
        table = sample.table.assign(log_accretion_limit=5.0)
        return pose(model, replace(sample, table=table), *rest)

    monkeypatch.setattr(sbc, "pose", blind_to_depth)
    table = calibrate(load_model("steady"), surveys=60, stars=300, seed=2).coverage().set_index("quantity")
    assert table.loc["debris_fraction", "uniform_p"] < 1e-4
    assert table.loc["debris_fraction", "covered_90"] < 0.9 - 4 * table.loc["debris_fraction", "error_90"]


def test_one_selection_read_as_the_other_is_caught(monkeypatch):
    """A given design with wide noise: honest as made, biased where the threshold is taken to act on the truth."""
    settings = ChannelSettings(width=0.6)
    rules = RowRules(pollution=ChannelRules(width=0.6))
    sample = read_sample(builtin_table(np.random.default_rng(0), 300, False), rules=rules)
    design = Design(sample, {"pollution": settings})
    agrees(calibrate(load_model("steady"), surveys=60, stars=300, seed=2, design=design))
    pose, other = sbc.pose, ChannelSettings(threshold_on="true", width=0.6)
    monkeypatch.setattr(sbc, "pose", lambda model, sample, _, *rest: pose(model, sample, {"pollution": other}, *rest))
    biased = calibrate(load_model("steady"), surveys=60, stars=300, seed=2, design=design)
    uniform = biased.coverage().set_index("quantity")["uniform_p"]
    assert uniform["debris_fraction"] < 1e-3 and uniform["mean_log_accretion"] < 1e-3
    with pytest.raises(AssertionError):
        agrees(biased)


def test_coverage_of_known_ranks():
    even = (np.arange(100) + 0.5) / 100
    narrow = 0.5 + (even - 0.5) / 4
    frame = pd.concat(
        [
            pd.DataFrame({"survey": range(100), "quantity": name, "truth": 0.0, "mean": 0.5, "sd": 2.0, "rank": rank})
            for name, rank in (("even", even), ("narrow", narrow))
        ]
    )
    table = CalibrationReport(frame, 0, 100, 10, "none").coverage().set_index("quantity")
    for level in (50, 68, 90, 95):
        assert table.loc["even", f"covered_{level}"] == pytest.approx(level / 100, abs=0.011)
        assert table.loc["narrow", f"covered_{level}"] == 1.0
        assert table.loc["even", f"error_{level}"] == pytest.approx(scipy.stats.bernoulli(level / 100).std() / 10)
    assert table.loc["even", "uniform_p"] > 0.99 and table.loc["narrow", "uniform_p"] < 1e-6
    assert table.loc["even", "bias_sd"] == pytest.approx(0.25)


def test_same_seed_same_ranks():
    one, two, other = (calibrate(load_model("steady"), surveys=3, stars=100, seed=seed).ranks for seed in (1, 1, 2))
    pd.testing.assert_frame_equal(one, two)
    assert not np.array_equal(one["truth"], other["truth"])


def test_truth_can_be_held():
    report = calibrate(load_model("steady"), surveys=4, stars=100, seed=1, truth={"debris_fraction": 0.3})
    held = report.ranks[report.ranks["quantity"] == "debris_fraction"]
    assert (held["truth"] == 0.3).all() and len(held) == 4 - report.refused


@pytest.mark.parametrize("efficiency", [None, 0.7])
def test_values_just_above_their_limit_stay_above_it_when_written(efficiency):
    """Four decimals are written; a value 2e-6 dex above its limit must not fall to it: the reader would refuse it."""
    channels = {"pollution": ChannelSettings(limit_efficiency=efficiency)}
    rng = np.random.default_rng(0)
    rules = RowRules(pollution=ChannelRules(midpoint_shift=midpoint_shift(channels["pollution"])))
    base = read_sample(builtin_table(rng, 500, False), rules=rules)
    problem, rows, table, _ = posed_design(load_model("steady"), 500, rng, Design(base, channels))
    # limits with more decimals than are written
    rows = replace(rows, channels={"pollution": replace(rows.channels["pollution"], limit=rng.uniform(6, 8, 500))})
    close, yes = rows.channels["pollution"].limit + 2e-6, np.ones(500, dtype=bool)
    outcome = ChannelOutcome(np.full(500, "detected"), close, yes, close)
    written = survey_table(rows, table, Simulated({"pollution": outcome}, yes, yes), channels)
    assert np.abs(written["log_accretion"] - close).max() <= 1e-4
    assert len(read_sample(written, rules=problem.sample.rules)) == 500
