"""One study through the engine of record, from file to files: what is written, what it says, and what a rerun does."""

from __future__ import annotations

import hashlib
import json
import shutil
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from helpers.small_studies import MISSION, drawn_study
from typer.testing import CliRunner

import remnantstats
from remnantstats import study as pipeline
from remnantstats.cli import app
from remnantstats.inference import checks, engine
from remnantstats.study_file import load_study

STARS = 120
SUMMARY = ["quantity", "mean", "sd", "q05", "q16", "q50", "q84", "q95", "ess_bulk", "ess_tail", "r_hat"]
QUANTITIES = [
    "debris_fraction", "mean_log_accretion", "sd_log_accretion", "debris_fraction_above[6]",
    "debris_fraction_above[7]", "debris_fraction_above[8]", "extrapolated_share",
]  # fmt: skip
#: q16 and q84 are the 15.87 and 84.13 % points: those of a normal distribution one sd from its mean
POINTS = {"q05": 0.05, "q16": 0.1587, "q50": 0.5, "q84": 0.8413, "q95": 0.95}
GROUPS = {
    "posterior", "sample_stats", "log_likelihood", "log_prior", "posterior_predictive", "prior", "observed_data",
    "constant_data",
}  # fmt: skip
REPEATED = ["summary.csv", "stars.csv", "completeness.csv", "mission.csv", "mission.json", "occurrence_prior.json"]


def listen():
    """A list of stages, and what fills it."""
    stages: list[str] = []
    return stages, stages.append


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    """A run of the whole job, its folder and its stages."""
    folder = tmp_path_factory.mktemp("study")
    path = drawn_study(folder, STARS)
    stages, say = listen()
    result = remnantstats.run(path, progress=say)
    return SimpleNamespace(
        path=path, result=result, folder=folder / "results", stages=stages,
        summary=pd.read_csv(folder / "results" / "summary.csv"), sample=folder / "sample.ecsv",
        truth=json.loads((folder / "truth.json").read_text()),
    )  # fmt: skip


@pytest.fixture
def kept(done, tmp_path):
    """The draws of that run alone, in a folder of their own."""
    shutil.copytree(done.folder / ".stages", tmp_path / "again" / ".stages")
    return tmp_path / "again"


def same_files(done, folder: Path, names=tuple(REPEATED)) -> None:
    for name in names:
        assert (folder / name).read_bytes() == (done.folder / name).read_bytes(), name


# what is written ------------------------------------------------------------------------------------------------------


def test_every_file_of_one_channel_is_written(done):
    figures = {path.stem for path in (done.folder / "figures").glob("*.png")}
    assert figures and figures == {path.stem for path in (done.folder / "figures").glob("*.pdf")}
    names = {path.name for path in done.folder.iterdir()}
    assert names >= {*REPEATED, "posterior.nc", "occurrence_prior.nc", "report.html", "run.json"}
    # one model, no row rejected: neither a comparison nor rejects
    assert not names & {"comparison.csv", "rejected_rows.csv"}
    # whole or not at all: no temporary name is left
    assert [name for name in names if name.startswith(".")] == [".stages"]
    assert all(path.stat().st_size > 0 for path in done.folder.rglob("*") if path.is_file())
    listed = {path.name for path in done.result.files}
    assert listed == names - {".stages", "figures"} | listed & {"figures"}


def test_summary_has_the_columns_of_the_contract(done):
    assert list(done.summary.columns) == SUMMARY
    assert list(done.summary["quantity"]) == QUANTITIES
    assert np.isfinite(done.summary[SUMMARY[1:]].to_numpy()).all()


def test_summary_is_that_of_the_stored_draws(done):
    with xr.open_datatree(done.folder / "posterior.nc") as tree:
        posterior = tree["posterior"].to_dataset().load()
    draws = {name: posterior[name].to_numpy().reshape(-1) for name in QUANTITIES if "[" not in name}
    for threshold in (6, 7, 8):
        above = posterior["debris_fraction_above"].sel(log_accretion_threshold=threshold)
        draws[f"debris_fraction_above[{threshold}]"] = above.to_numpy().reshape(-1)
    table = done.summary.set_index("quantity")
    for name, values in draws.items():
        assert table.loc[name, "mean"] == pytest.approx(values.mean(), rel=1e-9), name
        assert table.loc[name, "sd"] == pytest.approx(values.std(), rel=1e-9), name
        for column, level in POINTS.items():
            assert table.loc[name, column] == pytest.approx(np.quantile(values, level), rel=1e-9), name
    # shares of the same population, draw by draw: f P(x > T) from the normal distribution
    assert (draws["debris_fraction"] >= draws["debris_fraction_above[6]"]).all()
    assert (draws["debris_fraction_above[7]"] > draws["debris_fraction_above[8]"]).all()


def test_truth_lies_where_it_should(done):
    table = done.summary.set_index("quantity")
    for name, value in done.truth["parameters"].items():
        assert abs(table.loc[name, "mean"] - value) < 3 * table.loc[name, "sd"], name


def test_targets_of_convergence_were_met(done):
    assert done.result.reliable
    assert (done.summary["r_hat"] < 1.01).all()
    assert (done.summary[["ess_bulk", "ess_tail"]] > 400).all(axis=None)


def test_posterior_opens_with_xarray(done):
    with xr.open_datatree(done.folder / "posterior.nc") as tree:
        assert set(tree.children) == GROUPS
        posterior, likelihood = tree["posterior"], tree["log_likelihood"]["stars"]
        assert posterior.sizes["chain"] == 4
        assert likelihood.dims == ("chain", "draw", "star") and likelihood.sizes["star"] == STARS
        assert set(tree["log_prior"].data_vars) == {"debris_fraction", "mean_log_accretion", "sd_log_accretion"}
        assert set(tree["prior"].data_vars) == set(posterior.data_vars)
        assert {"diverging", "energy"} <= set(tree["sample_stats"].data_vars)
        observed = tree["observed_data"]
        seen = observed["pollution_detected"].to_numpy() == 1
        assert (np.isfinite(observed["log_accretion"].to_numpy()) == seen).all()
        assert {"log_accretion_limit_50", "log_accretion_width", "inclusion"} <= set(tree["constant_data"].data_vars)
        assert tree["posterior_predictive"]["pollution_detected"].sizes["star"] == STARS
        assert tree.attrs["seed"] == 5 and tree.attrs["model"] == "steady"


def test_posterior_serves_arviz_alone(done):
    import arviz_base
    import arviz_stats

    tree = arviz_base.convert_to_datatree(str(done.folder / "posterior.nc"))
    summary = arviz_stats.summary(tree, var_names=["debris_fraction"], round_to="none")
    assert float(summary["mean"].iloc[0]) == pytest.approx(done.summary["mean"].iloc[0], rel=1e-6)
    left_out = arviz_stats.loo(tree)
    assert np.isfinite(left_out.elpd) and 0.5 < left_out.p < 10


def test_stored_log_likelihood_is_the_models(done):
    """Detected and unseen stars written out from METHODS §2 at the first draws of each chain."""
    from scipy.special import ndtr
    from scipy.stats import norm

    with xr.open_datatree(done.folder / "posterior.nc") as tree:
        posterior = tree["posterior"].to_dataset().isel(draw=slice(0, 5)).load()
        stored = tree["log_likelihood"]["stars"].isel(draw=slice(0, 5)).to_numpy()
    table = done.result.sample.table
    f, mean, sd = (posterior[name].to_numpy()[..., None] for name in QUANTITIES[:3])
    limit, value = table["log_accretion_limit"].to_numpy(), table["log_accretion"].to_numpy()
    spread = np.hypot(sd, 0.15)
    unseen = np.log1p(-f * ndtr((mean - limit) / spread))
    expected = np.where(np.isfinite(value), np.log(f) + norm.logpdf(value, mean, spread), unseen)
    np.testing.assert_allclose(stored, expected, atol=1e-8)


def test_stars_are_the_followup_list(done):
    stars = pd.read_csv(done.folder / "stars.csv")
    assert list(stars["star"]) == list(done.result.sample.table["star"])
    wanted = {"debris_probability", "log_accretion_limit_50", "pollution_sensitivity", "expected_log_accretion"}
    assert wanted <= set(stars.columns)
    seen = stars["pollution"] == "detected"
    assert (stars.loc[seen, "debris_probability"] == 1).all()
    # a star in which nothing was seen is less likely a host than any star; the deeper its limit, the less
    unseen = stars[~seen].sort_values("log_accretion_limit_50")
    f = done.summary.set_index("quantity").loc["debris_fraction"]
    # the table averages over 200 of the draws
    assert unseen["debris_probability"].between(0, f["mean"] + 4 * f["sd"] / 200**0.5).all()
    assert unseen["debris_probability"].is_monotonic_increasing


def test_completeness_rises_from_none_to_all(done):
    table = pd.read_csv(done.folder / "completeness.csv")
    assert list(table.columns) == ["quantity", "value", "efficiency", "lowest", "highest"]
    assert set(table["quantity"]) == {"log_accretion"}
    assert table["value"].is_monotonic_increasing and table["efficiency"].is_monotonic_increasing
    assert table["efficiency"].iloc[0] < 1e-6 and table["efficiency"].iloc[-1] > 1 - 1e-6
    assert (table["lowest"] <= table["highest"]).all()


def test_prior_and_mission_come_from_these_draws(done):
    exported = json.loads((done.folder / "occurrence_prior.json").read_text())
    assert {"draws", "quantiles", "beta", "assumptions"} <= set(exported)
    bases = {item["name"]: item["basis"] for item in exported["assumptions"]}
    assert bases["retention"] == "invented: retention" and bases["earthlike"] == "invented: half"
    mission = pd.read_csv(done.folder / "mission.csv")
    assert {"n_targets", "p_at_least_one", "expected", "q05", "q50", "q95"} <= set(mission.columns)
    assert mission["p_at_least_one"].is_monotonic_increasing
    # one target: completeness 0.6 times the mean of the occurrence, half of the rocky systems
    with xr.open_dataset(done.folder / "occurrence_prior.nc") as prior:
        mean = float(prior["rocky_system_fraction"].mean())
    assert mission["p_at_least_one"].iloc[0] == pytest.approx(0.6 * 0.5 * mean, rel=1e-6)
    # the JSON file keeps fewer draws, evenly through the sorted ones
    assert np.mean(exported["draws"]["rocky_system_fraction"]) == pytest.approx(mean, rel=1e-3)
    needs = json.loads((done.folder / "mission.json").read_text())["needs"]
    for need in needs:
        assert mission.set_index("n_targets").loc[need["n_targets"], "p_at_least_one"] >= need["success"]
        assert mission.set_index("n_targets").loc[need["n_targets"] - 1, "p_at_least_one"] < need["success"]


def test_record_tells_what_was_done(done):
    record = json.loads((done.folder / "run.json").read_text())
    assert record["study"]["sha256"] == hashlib.sha256(done.path.read_bytes()).hexdigest()
    [table] = record["tables"]
    assert table["sha256"] == hashlib.sha256(done.sample.read_bytes()).hexdigest() and table["n_rows"] == STARS
    assert record["seed"] == 5 and record["engine"] == "full" and record["marks"] == []
    assert {"remnantstats", "python", "numpy", "pymc", "pytensor", "nutpie"} <= set(record["versions"])
    assert record["versions"]["remnantstats"] == remnantstats.__version__
    [model] = record["models"]
    assert model["name"] == "steady" and set(model["priors"]) == set(QUANTITIES[:3])
    assert model["priors"]["mean_log_accretion"]["mean"] == 8.0
    assert {check["verdict"] for check in record["checks"]} <= {"pass", "warn"}
    names = [check["name"] for check in record["checks"]]
    assert len(set(names)) == len(names) and {"chains agree", "no divergences", "two engines, one answer"} <= set(names)
    assert {"reading", "compilation", "occurrence prior", "mission size", "report"} <= set(record["seconds"])
    assert record["compression"] is None and record["rejected_rows"] == 0


def test_report_tells_the_summarys_numbers(done):
    from remnantstats.report.numbers import row_measure

    page = (done.folder / "report.html").read_text(encoding="utf-8")
    assert "A small study" in page and "unreliable" not in page and "quick look" not in page
    for row in done.summary.itertuples():
        assert row_measure(row) in page, row.quantity


def test_stages_are_told_in_order(done):
    firsts = ["reading the sample", "quick engine", "compilation", "sampling 4 × 1000"]
    assert done.stages[: len(firsts)] == firsts
    assert done.stages[-5:] == ["checks", "stars", "occurrence prior", "mission size", "report"]


# what a rerun does ----------------------------------------------------------------------------------------------------


def test_rerun_keeps_the_draws_and_every_byte(done, kept):
    stages, say = listen()
    again = pipeline.run(done.path, out=kept, progress=say)
    assert "draws of an earlier run" in stages
    assert not [stage for stage in stages if stage.startswith(("compilation", "sampling"))]
    same_files(done, kept)
    assert (kept / "report.html").is_file() and again.reliable
    with xr.open_datatree(done.folder / "posterior.nc") as one, xr.open_datatree(kept / "posterior.nc") as two:
        xr.testing.assert_identical(one, two)


def test_fresh_samples_anew_to_the_same_end(done, kept):
    stages, say = listen()
    pipeline.infer_study(done.path, out=kept, fresh=True, progress=say)
    assert "draws of an earlier run" not in stages and "compilation" in stages
    same_files(done, kept, ("summary.csv", "stars.csv"))


def test_damaged_draws_are_not_used(done, kept):
    [stored] = (kept / ".stages").iterdir()
    stored.write_bytes(stored.read_bytes()[: stored.stat().st_size // 2])
    stages, say = listen()
    pipeline.infer_study(done.path, out=kept, progress=say)
    assert "draws of an earlier run" not in stages
    same_files(done, kept, ("summary.csv",))


class Stopped(BaseException):
    """Stands for a kill."""


@pytest.mark.parametrize("stage", ["checks", "mission size"])
def test_a_stopped_run_started_again_ends_the_same(done, kept, stage, monkeypatch):
    # the page takes the longest and is looked at elsewhere
    monkeypatch.setattr(pipeline, "_write_report", lambda result: result.folder / "report.html")

    def stop(name):
        if name == stage:
            raise Stopped

    with pytest.raises(Stopped):
        pipeline.run(done.path, out=kept, progress=stop)
    assert not (kept / "mission.csv").exists()
    pipeline.run(done.path, out=kept)
    same_files(done, kept)


def test_draws_are_kept_under_all_they_depend_on(done, tmp_path):
    """Anything that moves the posterior makes another key; what comes after does not."""

    def key(old="", new="", versions="1", table="a"):
        path = tmp_path / "study.toml"
        text = done.path.read_text()
        assert old in text
        shutil.copy(done.sample, tmp_path)
        path.write_text(text.replace(old, new, 1))
        study = load_study(path)
        return study.fingerprint(study.models[0], {"sample.ecsv": table, "remnantstats": versions})

    plain = key()
    others = [
        key("seed = 5", "seed = 6"),
        key("[pollution]", "[pollution]\nwidth = 0.2"),
        key("[pollution]", '[pollution]\nthreshold_on = "true"'),
        key('name = "steady"', 'name = "steady"\natmospheres = ["H", "He"]'),
        key("[pollution]", '[model.priors]\nsd_log_accretion = { family = "halfnormal", sd = 1 }\n[pollution]'),
        key("[pollution]", "[thresholds]\nlog_accretion = [6.5]\n[pollution]"),
        key(versions="2"),
        key(table="b"),
    ]
    assert len({plain, *others}) == len(others) + 1
    assert key("A small study", "Another title") == plain
    assert key(MISSION) == plain


# what a failed check does ---------------------------------------------------------------------------------------------


def test_failed_check_marks_every_output(done, kept, monkeypatch):
    # no chain explores its energy that well
    monkeypatch.setattr(checks, "LIMITS", checks.Limits(e_bfmi=99.0))
    called = CliRunner().invoke(app, ["run", str(done.path), "--out", str(kept)])
    assert called.exit_code == 3, called.stderr
    mark = "unreliable: energy explored failed"
    assert mark in " ".join(called.stdout.split())
    for name in ("summary.csv", "stars.csv", "completeness.csv", "mission.csv"):
        table = pd.read_csv(kept / name)
        assert table["mark"].str.startswith(mark).all(), name
    for name in ("occurrence_prior.json", "mission.json", "run.json"):
        assert json.loads((kept / name).read_text())["marks"][0].startswith(mark), name
    page = (kept / "report.html").read_text(encoding="utf-8")
    assert mark.capitalize() in page and "<title>[unreliable] " in page
    with xr.open_datatree(kept / "posterior.nc") as tree:
        assert tree.attrs["marks"].startswith(mark)
    with xr.open_dataset(kept / "occurrence_prior.nc") as prior:
        assert any(mark in str(value) for value in prior.attrs.values())
    record = json.loads((kept / "run.json").read_text())
    assert record["verdict"] == "fail"
    assert [check["name"] for check in record["checks"] if check["verdict"] == "fail"] == ["energy explored"]
    # the numbers themselves are still the same
    pd.testing.assert_frame_equal(pd.read_csv(kept / "summary.csv")[SUMMARY], done.summary)


def test_sampling_goes_on_until_its_targets_or_its_cap(done, tmp_path, monkeypatch):
    monkeypatch.setattr(engine, "_FIRST", 250)
    stages, say = listen()
    fit = pipeline.infer_study(done.path, out=tmp_path / "on", progress=say).fit
    sizes = [int(stage.split("×")[1]) for stage in stages if stage.startswith("sampling")]
    assert len(sizes) > 1 and sizes == [250 * 2**step for step in range(len(sizes))]
    assert fit.posterior["posterior"].sizes["draw"] == sizes[-1]
    assert (fit.summary()[["ess_bulk", "ess_tail"]] > 400).all(axis=None)
    monkeypatch.setattr(engine, "_CAP", 250)
    called = CliRunner().invoke(app, ["infer", str(done.path), "--out", str(tmp_path / "cap")])
    assert called.exit_code == 3
    assert "enough independent draws failed" in pd.read_csv(tmp_path / "cap" / "summary.csv")["mark"].iloc[0]
    # inference alone: nothing beyond it is written
    assert not {"report.html", "mission.csv", "occurrence_prior.json"} & {p.name for p in (tmp_path / "cap").iterdir()}
