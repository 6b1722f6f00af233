"""The companion without an assumed shape: the survival library's own estimator, and shares counted by hand."""

import numpy as np
import pandas as pd
import pytest
from helpers.surveys import counted_survey, only
from lifelines import KaplanMeierFitter
from lifelines.datasets import load_nh4

from remnantstats.catalog import read_sample
from remnantstats.inference.companion import fraction_above_steps
from remnantstats.population import load_model, pose
from remnantstats.sensitivity import ChannelSettings


def posed(table, channel="pollution"):
    return pose(load_model("steady"), read_sample(table, rules=only(channel)), {channel: ChannelSettings()})


def survey(value, detected, limit=None, **columns):
    """Detections and limits as tabulated; an undetected star's value is its limit."""
    value = np.asarray(value, dtype=float)
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(len(value))],
            "survey": "a",
            "atmosphere": "H",
            "pollution": np.where(detected, "detected", "limit"),
            "log_accretion": np.where(detected, value, np.nan),
            "log_accretion_err": np.where(detected, 0.1, np.nan),
            "log_accretion_limit": np.where(detected, value - 0.5 if limit is None else limit, value),
        }
    ).assign(**columns)


def product_limit(value, detected, at):
    """Share above each of `at`, written out: one factor a detection, over the stars not above it."""
    steps = np.unique(value[detected])
    left = {v: 1 - (detected & (value == v)).sum() / (value <= v).sum() for v in steps}
    return np.array([1 - np.prod([left[v] for v in steps if v > x]) for x in at])


def test_ammonium_in_rain_as_the_survival_library_has_it():
    """NH4 in precipitation with detection limits, the example of lifelines for left-censored data (version 0.30)."""
    rain = load_nh4()
    detected = ~rain["Censored"].to_numpy()
    value = np.log10(rain["NH4.mg.per.L"].to_numpy()) + 9  # the order of the values decides, not their scale
    table = fraction_above_steps(posed(survey(value, detected)), "pollution")
    fitter = KaplanMeierFitter().fit_left_censoring(rain["NH4.mg.per.L"], event_observed=detected)
    below = fitter.cumulative_density_.iloc[1:, 0]
    assert len(detected) == 102 and 0 < (~detected).sum() < 102
    assert table["value"].to_numpy() == pytest.approx(np.log10(below.index) + 9)
    assert table["fraction"].to_numpy() == pytest.approx(1 - below.to_numpy(), abs=1e-12)
    assert table["fraction"].to_numpy() == pytest.approx(
        product_limit(value, detected, table["value"].to_numpy() + 1e-6), abs=1e-12
    )
    inner = table[table["fraction"].between(0.05, 0.95)]
    assert ((inner["low"] < inner["fraction"]) & (inner["fraction"] < inner["high"])).all()


def test_deep_limits_give_the_counted_share():
    table = counted_survey(30, 80)
    values = table["log_accretion"].dropna().to_numpy()
    steps = fraction_above_steps(posed(table), "pollution")
    for threshold in (6.0, 7.5, 7.8, 8.2):
        reached = steps[steps["value"] <= threshold]["fraction"].iloc[-1]
        assert reached == pytest.approx((values > threshold).sum() / 80, abs=1e-12)


def test_the_infrared_is_served():
    steps = fraction_above_steps(posed(counted_survey(12, 40, "excess"), "excess"), "excess")
    assert steps["fraction"].iloc[0] == pytest.approx(12 / 40)


def test_only_blind_observed_stars_count():
    value, detected = np.array([7.0, 7.4, 8.0, 8.5, 6.5, 6.8]), np.array([True, True, True, True, False, False])
    table = survey(value, detected)
    plain = fraction_above_steps(posed(table), "pollution")
    known = survey([9.5], np.array([True]), inclusion="known-polluted", selection_limit=8.0)
    unobserved = table.iloc[:1].assign(pollution="unobserved")
    unobserved[["log_accretion", "log_accretion_err", "log_accretion_limit"]] = np.nan
    more = pd.concat([table.assign(inclusion="blind"), known, unobserved], ignore_index=True)
    more["star"] = [f"s{i}" for i in range(len(more))]
    pd.testing.assert_frame_equal(fraction_above_steps(posed(more), "pollution"), plain)


def test_a_survey_without_detections_has_no_steps():
    assert fraction_above_steps(posed(counted_survey(0, 20)), "pollution").empty
