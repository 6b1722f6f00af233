"""Efficiency from injection and recovery: what is refused, and what is recovered."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import scipy.special
from pydantic import ValidationError

from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.errors import InputError
from remnantstats.inference.quick import importance_draws
from remnantstats.population import load_model, pose
from remnantstats.sensitivity import ChannelSettings, detection_curve, read_recovery
from remnantstats.sensitivity.recovery import fit_efficiency

DEPTH = {"deep": 6.8, "wide": 8.1}
CEILING, WIDTH = 0.85, 0.25
TRUTH = {"debris_fraction": 0.4, "mean_log_accretion": 7.7, "sd_log_accretion": 0.8}
RULES = RowRules(pollution=ChannelRules("true", counted=True))
TABLE = ChannelSettings(threshold_on="true", efficiency_table="counts.csv")
COLUMNS = ["class", "log_accretion", "n_injected", "n_recovered"]
GRID = np.arange(5.5, 10, 0.5)


def chance(value, limit):
    return CEILING * scipy.special.ndtr((value - limit) / WIDTH)


def counts(rng, injected, labels=DEPTH, by="class"):
    rows = [
        (label, value, injected, rng.binomial(injected, chance(value, limit)))
        for label, limit in labels.items()
        for value in GRID
    ]
    return pd.DataFrame(rows, columns=[by, *COLUMNS[1:]])


def written(frame, folder):
    path = folder / "counts.csv"
    frame.to_csv(path, index=False)
    return read_recovery(path, "log_accretion")


def survey(rng, size):
    label = np.where(rng.random(size) < 0.4, "deep", "wide")
    limit = np.array([DEPTH[name] for name in label])
    rate = rng.normal(TRUTH["mean_log_accretion"], TRUTH["sd_log_accretion"], size)
    seen = (rng.random(size) < TRUTH["debris_fraction"]) & (rng.random(size) < chance(rate, limit))
    return pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": label,
            "atmosphere": "H",
            "pollution": np.where(seen, "detected", "limit"),
            "log_accretion": np.where(seen, rate + 0.1 * rng.normal(size=size), np.nan),
            "log_accretion_err": np.where(seen, 0.1, np.nan),
        }
    ), limit


# refusals -------------------------------------------------------------------------------------------------------------

PLAIN = pd.DataFrame({"log_accretion": [6.0, 7.0, 8.0], "n_injected": 50, "n_recovered": [2, 20, 48]})

REFUSED = [
    (PLAIN.assign(n_recovered=[2, 51, 48]), "row 2, column 'n_recovered'"),
    (PLAIN.assign(n_recovered=[2, -1, 48]), "row 2, column 'n_recovered'"),
    (PLAIN.assign(n_recovered=[2.5, 20, 48]), "row 1, column 'n_recovered'"),
    (PLAIN.assign(n_injected=[0, 50, 50], n_recovered=[0, 20, 48]), "row 1, column 'n_injected'"),
    (PLAIN.assign(log_accretion=[6.0, 7.0, "high"]), "row 3, column 'log_accretion'"),
    (PLAIN.assign(n_recovered=[45, 44, 10]), "rows 2 and 3"),
    (PLAIN.drop(columns="n_injected"), "no column 'n_injected'"),
    (PLAIN.rename(columns={"n_recovered": "n_recoverd"}), "n_recoverd"),
    (PLAIN.assign(note="x"), "unknown column 'note'"),
    (PLAIN.assign(star="a", **{"class": "b"}), "not both"),
    (PLAIN.iloc[:0], "no rows"),
]


@pytest.mark.parametrize(("frame", "place"), REFUSED)
def test_refused_tables(frame, place, tmp_path):
    with pytest.raises(InputError) as caught:
        written(frame, tmp_path)
    assert place in str(caught.value)


def test_a_fall_within_counting_error_is_taken(tmp_path):
    table = written(PLAIN.assign(n_recovered=[2, 49, 47]), tmp_path)
    assert table.by == "all" and table.recovered.tolist() == [2, 49, 47]


def test_absent_file(tmp_path):
    with pytest.raises(InputError, match="does not exist"):
        read_recovery(tmp_path / "none.csv", "log_accretion")


def test_a_threshold_on_the_measured_value_is_refused():
    with pytest.raises(ValidationError, match="efficiency of the true value"):
        ChannelSettings(efficiency_table="counts.csv")
    for given in ({"width": 0.2}, {"ceiling": 0.9}, {"limit_efficiency": 0.5}):
        with pytest.raises(ValidationError, match="which gives the curve itself"):
            ChannelSettings(threshold_on="true", efficiency_table="counts.csv", **given)


def test_a_class_without_counts_is_refused(tmp_path):
    rng = np.random.default_rng(0)
    recovery = written(counts(rng, 40, {"deep": 6.8}), tmp_path)
    table, _ = survey(rng, 30)
    sample = read_sample(table, rules=RULES)
    with pytest.raises(InputError, match="have no counts") as caught:
        pose(load_model("steady"), sample, {"pollution": TABLE}, recoveries={"pollution": recovery})
    assert "'wide'" in str(caught.value)


# what is recovered ----------------------------------------------------------------------------------------------------


def posterior(problem):
    draws = importance_draws(problem, np.random.default_rng(0), draws=4000)
    assert draws.usable
    return problem.theta(draws.resampled(np.random.default_rng(1), 4000))


@pytest.fixture(scope="module")
def fits(tmp_path_factory):
    """The same survey with few and with many injections, and with the efficiency given as known."""
    rng = np.random.default_rng(2)
    table, limit = survey(rng, 2000)
    sample = read_sample(table, rules=RULES)
    found = {}
    for name, injected in (("few", 10), ("many", 400)):
        recovery = written(counts(rng, injected), tmp_path_factory.mktemp(name))
        found[name] = posterior(
            pose(load_model("steady"), sample, {"pollution": TABLE}, recoveries={"pollution": recovery})
        )
    known = ChannelSettings(threshold_on="true", width=WIDTH, ceiling=CEILING)
    rules = RowRules(pollution=ChannelRules("true", width=WIDTH))
    sample = read_sample(table.assign(log_accretion_limit=limit), rules=rules)
    found["known"] = posterior(pose(load_model("steady"), sample, {"pollution": known}))
    return found


EFFICIENCY = {
    f"efficiency_{what}[pollution:{label}]": value
    for label, limit in DEPTH.items()
    for what, value in (("midpoint", limit), ("width", WIDTH), ("ceiling", CEILING))
}


@pytest.mark.parametrize("name", ["few", "many"])
def test_population_and_efficiency_are_recovered(fits, name):
    for quantity, truth in (TRUTH | EFFICIENCY).items():
        draws = fits[name][quantity]
        assert draws.mean() == pytest.approx(truth, abs=4 * draws.std()), quantity


def test_joint_posterior_is_wider_than_with_the_efficiency_known(fits):
    sd = {name: theta["debris_fraction"].std() for name, theta in fits.items()}
    assert sd["few"] > 1.1 * sd["known"]
    assert sd["few"] > sd["many"]
    assert sd["many"] == pytest.approx(sd["known"], rel=0.15)
    for quantity in EFFICIENCY:
        assert fits["few"][quantity].std() > 1.5 * fits["many"][quantity].std()


def test_a_table_per_star_widens_the_curve(tmp_path):
    """The curve of a star is its fit, its width that of the efficiency and of the midpoint's error together."""
    rng = np.random.default_rng(3)
    table, _ = survey(rng, 12)
    sample = read_sample(table, rules=RULES)
    depth = {star: DEPTH[label] for star, label in zip(table["star"], table["survey"], strict=True)}
    found = {}
    for injected in (12, 1200):
        recovery = written(counts(rng, injected, depth, by="star"), tmp_path)
        assert recovery.by == "star"
        curve = detection_curve(sample, "pollution", TABLE, recovery)
        fits = [fit_efficiency(*recovery.of(recovery.labels.index(star))) for star in table["star"]]
        own = np.array([fit.width for fit in fits])
        errors = np.array([fit.limit_error for fit in fits])
        assert curve.limit == pytest.approx([fit.limit for fit in fits])
        assert curve.width == pytest.approx(np.sqrt(own**2 + errors**2))
        assert curve.ceiling == pytest.approx([fit.ceiling for fit in fits])
        found[injected] = (curve.width / own).mean() - 1
        if injected == 1200:
            assert curve.limit == pytest.approx(list(depth.values()), abs=0.08)
            assert curve.ceiling == pytest.approx(CEILING, abs=0.04)
    assert found[12] > 0.1 > 20 * found[1200] > 0
    # in the joint problem there is nothing left to infer of the efficiency
    problem = pose(load_model("steady"), sample, {"pollution": TABLE}, recoveries={"pollution": recovery})
    assert not problem.recoveries and problem.dimension == 3


@pytest.mark.parametrize("injected", [30, 1000])
def test_error_of_the_midpoint_is_its_scatter(injected):
    """The standard error from curvature against the scatter of the fit over fresh counts."""
    rng = np.random.default_rng(4)
    size = np.full(GRID.size, injected)
    fits = [fit_efficiency(GRID, size, rng.binomial(injected, chance(GRID, 7.3))) for _ in range(60)]
    limits = np.array([fit.limit for fit in fits])
    errors = np.array([fit.limit_error for fit in fits])
    assert limits.mean() == pytest.approx(7.3, abs=0.05)
    assert np.median(errors) == pytest.approx(limits.std(), rel=0.3)
    # for every single star
    assert errors.max() < 3 * limits.std()
