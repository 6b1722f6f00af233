"""The correction itself: two surveys of one population, to different depths, give one fraction."""

from __future__ import annotations

import numpy as np
import pytest
from helpers.surveys import drawn_survey

from remnantstats.api import infer
from remnantstats.catalog import read_sample
from remnantstats.sensitivity import ChannelSettings

FRACTION, MEAN, SD = 0.5, 7.6, 0.7


def survey(seed, depth, size, settings):
    rng = np.random.default_rng(seed)
    return drawn_survey(rng, FRACTION, MEAN, SD, depth + 0.2 * rng.normal(size=size), settings)


@pytest.fixture(scope="module")
def both():
    settings = ChannelSettings()
    found = {}
    for depth, limit, size in (("deep", 6.3, 500), ("shallow", 7.9, 2000)):
        table = survey(3, limit, size, settings)
        fit = infer(read_sample(table), "steady", seed=1, channels={"pollution": settings}, quick=True)
        found[depth] = (table["pollution"] == "detected").mean(), fit.table.set_index("quantity")
    return found


def test_raw_fractions_differ_by_two_and_more(both):
    assert both["deep"][0] > 2 * both["shallow"][0]


def test_corrected_fractions_are_the_same(both):
    (_, deep), (_, shallow) = both["deep"], both["shallow"]
    for name, truth in (("debris_fraction", FRACTION), ("mean_log_accretion", MEAN), ("sd_log_accretion", SD)):
        one, two = deep.loc[name], shallow.loc[name]
        assert one["mean"] == pytest.approx(two["mean"], abs=2.5 * np.hypot(one["sd"], two["sd"])), name
        for row in (one, two):
            assert row["mean"] == pytest.approx(truth, abs=3 * row["sd"]), name
    # and the shallow survey knows it less well than so many stars would
    assert shallow.loc["debris_fraction", "sd"] > 2 * deep.loc["debris_fraction", "sd"]


def test_raw_fraction_of_the_shallow_survey_lies_far_outside_the_posterior(both):
    raw, table = both["shallow"]
    assert raw < table.loc["debris_fraction", "q05"] - table.loc["debris_fraction", "sd"]


def test_fraction_above_the_shallow_limit_needs_no_extrapolation(both):
    """f·P(x > 8) is what the shallow survey measures: there both agree to a few per cent."""
    one, two = (both[depth][1].loc["debris_fraction_above[8]"] for depth in ("deep", "shallow"))
    assert one["mean"] == pytest.approx(two["mean"], abs=2.5 * np.hypot(one["sd"], two["sd"]))
    assert two["sd"] < 0.02
    deep, shallow = (both[depth][1].loc["extrapolated_share", "mean"] for depth in ("deep", "shallow"))
    assert deep < 0.3 < shallow
