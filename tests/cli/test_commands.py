"""What each command does, prints and writes."""

import json
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
from helpers.known_priors import beta_prior
from helpers.small_studies import MISSION, drawn_study, sound_study, study_text
from typer.testing import CliRunner

import remnantstats
from remnantstats.cli import app
from remnantstats.occurrence import write_prior

COMMANDS = ["run", "inspect", "infer", "simulate", "calibrate", "size", "models"]
QUICK_LOOK = "quick look"


def invoke(*arguments):
    return CliRunner().invoke(app, [str(item) for item in arguments], env={"NO_COLOR": "1", "TERM": "dumb"})


def done(*arguments):
    result = invoke(*arguments)
    assert result.exit_code == 0, f"{result.stdout}\n{result.stderr}"
    return result


def marks_of(path):
    return json.loads(path.read_text(encoding="utf-8"))["marks"]


def in_process_of_its_own(code, *arguments):
    return subprocess.run([sys.executable, "-c", code, *map(str, arguments)], capture_output=True, text=True)


# ---- help, version, models ----


def test_help_names_every_command():
    text = done("--help").stdout
    for command in COMMANDS:
        assert command in text


@pytest.mark.parametrize("command", COMMANDS)
def test_help_of_command(command):
    text = done(command, "--help").stdout
    assert "Usage" in text and "--help" in text


def test_no_command_shows_help():
    result = invoke()
    assert "Usage" in result.stdout + result.stderr


def test_version():
    assert done("--version").stdout.strip() == f"remnantstats {remnantstats.__version__}"


def test_models_lists_each_with_its_title():
    lines = done("models").stdout.splitlines()
    names = [line.split()[0] for line in lines]
    assert {"steady", "cooling-trend"} <= set(names)
    assert all(len(line.split(maxsplit=1)) == 2 for line in lines)


def test_models_shows_one_as_its_file():
    shown = done("models", "steady").stdout
    assert shown == (Path(__file__).parents[2] / "models" / "steady.toml").read_text(encoding="utf-8")


def test_unknown_model_names_the_nearest():
    result = invoke("models", "stedy")
    assert result.exit_code == 2
    assert "steady" in result.stderr


# ---- inspect ----


def test_inspect_prints_census_and_depth_and_writes_nothing(tmp_path):
    study = sound_study(tmp_path)
    before = sorted(tmp_path.rglob("*"))
    text = done("inspect", study).stdout
    assert "A small study: 6 stars" in text
    assert "Census" in text and "Depth of the pollution limits" in text
    assert "could_show_7" in text and "could_show_8" in text
    assert "no rows rejected" in text
    assert sorted(tmp_path.rglob("*")) == before


def test_inspect_counts_by_survey_and_outcome(tmp_path):
    lines = done("inspect", sound_study(tmp_path)).stdout.splitlines()
    deep = next(line.split() for line in lines if "deep" in line)
    assert "3" in deep and "2" in deep and "1" in deep


# ---- quick looks ----


@pytest.fixture(scope="module")
def quick(tmp_path_factory):
    """Folder and printed text of a quick run on 60 synthetic stars."""
    folder = tmp_path_factory.mktemp("quick")
    result = done("run", drawn_study(folder, 60), "--quick")
    return folder / "results", result


def test_quick_run_marks_the_tables(quick):
    folder, _ = quick
    for name in ("summary.csv", "stars.csv", "completeness.csv"):
        assert pd.read_csv(folder / name)["mark"].str.startswith(QUICK_LOOK).all(), name


def test_quick_run_marks_the_occurrence_prior_and_the_mission(quick):
    folder, _ = quick
    for name in ("occurrence_prior.json", "mission.json", "run.json"):
        assert any(QUICK_LOOK in mark for mark in marks_of(folder / name)), name


def test_quick_run_marks_the_report_and_the_terminal(quick):
    folder, result = quick
    assert QUICK_LOOK in (folder / "report.html").read_text(encoding="utf-8")
    assert QUICK_LOOK in result.stdout
    assert str(folder / "report.html") in result.stdout.replace("\n", "")


def test_run_tells_its_stages_on_standard_error(quick):
    _, result = quick
    for stage in ("reading the sample", "quick engine", "checks", "occurrence prior", "mission size", "report"):
        assert stage in result.stderr, stage
        assert stage + " …" not in result.stdout


def test_quick_infer_stops_after_the_checks(tmp_path):
    out = tmp_path / "chosen"
    result = done("infer", drawn_study(tmp_path / "study", 60), "--quick", "--out", out)
    assert "debris_fraction" in result.stdout and "Checks" in result.stdout
    assert {"summary.csv", "posterior.nc", "run.json"} <= {path.name for path in out.iterdir()}
    assert not (out / "report.html").exists()
    assert not (out / "mission.csv").exists()
    assert not (tmp_path / "study" / "results").exists()


def test_quick_run_repeats_byte_for_byte(quick, tmp_path):
    folder, _ = quick
    done("run", drawn_study(tmp_path, 60), "--quick")
    for name in ("summary.csv", "stars.csv", "mission.csv"):
        assert (tmp_path / "results" / name).read_bytes() == (folder / name).read_bytes(), name


# ---- simulate ----


def test_simulate_repeats_byte_for_byte(tmp_path):
    for name in ("one", "two"):
        done("simulate", "steady", "--stars", 40, "--seed", 3, "--out", tmp_path / name)
    done("simulate", "steady", "--stars", 40, "--seed", 4, "--out", tmp_path / "other")
    for name in ("sample.ecsv", "truth.json"):
        first = (tmp_path / "one" / name).read_bytes()
        assert first == (tmp_path / "two" / name).read_bytes()
        assert first != (tmp_path / "other" / name).read_bytes()


def test_simulated_sample_is_a_sample(tmp_path):
    result = done("simulate", "steady", "--stars", 40, "--seed", 3, "--out", tmp_path)
    assert "sample.ecsv" in result.stdout and "truth.json" in result.stdout
    study = tmp_path / "study.toml"
    study.write_text(study_text(table="sample.ecsv"), encoding="utf-8")
    assert "40 stars" in done("inspect", study).stdout


def test_simulate_with_given_truth(tmp_path):
    truth = tmp_path / "truth.toml"
    truth.write_text("debris_fraction = 0.25\nmean_log_accretion = 9.0\n", encoding="utf-8")
    done("simulate", "steady", "--stars", 400, "--seed", 3, "--truth", truth, "--out", tmp_path / "drawn")
    record = json.loads((tmp_path / "drawn" / "truth.json").read_text(encoding="utf-8"))
    assert record["given"] == ["debris_fraction", "mean_log_accretion"]
    assert record["parameters"]["debris_fraction"] == 0.25
    hosts = sum(star["has_debris"] for star in record["stars"])
    assert abs(hosts / 400 - 0.25) < 4 * (0.25 * 0.75 / 400) ** 0.5


@pytest.mark.parametrize(
    ("line", "word"),
    [
        ("debris_fracton = 0.25", "did you mean 'debris_fraction'?"),
        ("debris_fraction = 1.5", "outside the parameter's range"),
        ("debris_fraction = 'half'", "half"),
        ("debris_fraction = true", "True"),
        ("debris_fraction = ", "truth.toml"),
    ],
)
def test_simulate_refuses_a_faulty_truth(line, word, tmp_path):
    truth = tmp_path / "truth.toml"
    truth.write_text(line + "\n", encoding="utf-8")
    result = invoke("simulate", "steady", "--stars", 9, "--seed", 3, "--truth", truth, "--out", tmp_path / "drawn")
    assert result.exit_code == 2
    assert word in result.stderr and "truth.toml" in result.stderr
    assert not (tmp_path / "drawn").exists()


def test_simulate_draws_limits_from_a_design(tmp_path):
    study = sound_study(tmp_path / "design")
    done("simulate", "steady", "--stars", 80, "--seed", 3, "--design", study, "--out", tmp_path / "drawn")
    table = remnantstats.read_sample(tmp_path / "drawn" / "sample.ecsv").table
    limits = {7.0, 7.1, 8.0, 8.2, 6.9}
    assert set(table["log_accretion_limit"].dropna().round(3)) <= limits
    assert set(table["survey"]) == {"deep", "wide"}
    record = json.loads((tmp_path / "drawn" / "truth.json").read_text(encoding="utf-8"))
    assert record["design"] == "study.toml"


# ---- size ----


@pytest.fixture(scope="module")
def exported(tmp_path_factory):
    folder = tmp_path_factory.mktemp("prior")
    write_prior(beta_prior(4, 12), folder)
    (folder / "mission.toml").write_text(MISSION, encoding="utf-8")
    return folder


def test_size_from_either_export_gives_the_same_table(exported, tmp_path):
    for ending in ("json", "nc"):
        result = done(
            "size", exported / f"occurrence_prior.{ending}", exported / "mission.toml", "--out", tmp_path / ending
        )
        assert "mission.csv" in result.stdout
    assert (tmp_path / "json" / "mission.csv").read_bytes() == (tmp_path / "nc" / "mission.csv").read_bytes()
    table = pd.read_csv(tmp_path / "json" / "mission.csv")
    assert list(table.columns[:6]) == ["n_targets", "p_at_least_one", "expected", "q05", "q50", "q95"]
    assert table["p_at_least_one"].is_monotonic_increasing


@pytest.mark.parametrize(("ending", "tolerance"), [("nc", 1e-12), ("json", 5e-4)])
def test_size_of_a_run_is_that_of_its_export(ending, tolerance, quick, exported, tmp_path):
    """NetCDF holds every draw, JSON at most 4,000 spread evenly through them."""
    folder, _ = quick
    done("size", folder / f"occurrence_prior.{ending}", exported / "mission.toml", "--out", tmp_path)
    again, first = pd.read_csv(tmp_path / "mission.csv"), pd.read_csv(folder / "mission.csv")
    for column in ("n_targets", "p_at_least_one", "expected"):
        assert again[column].to_list() == pytest.approx(first[column].to_list(), rel=tolerance), column
    needs = [json.loads((place / "mission.json").read_text(encoding="utf-8"))["needs"] for place in (folder, tmp_path)]
    assert [item["n_targets"] for item in needs[0]] == [item["n_targets"] for item in needs[1]]


def test_size_keeps_the_mark_of_a_quick_look(quick, exported, tmp_path):
    folder, _ = quick
    for ending in ("json", "nc"):
        done("size", folder / f"occurrence_prior.{ending}", exported / "mission.toml", "--out", tmp_path / ending)
        assert any(QUICK_LOOK in mark for mark in marks_of(tmp_path / ending / "mission.json")), ending


@pytest.mark.parametrize(
    ("prior", "mission", "word"),
    [
        ("none.json", "mission.toml", "none.json"),
        ("mission.toml", "mission.toml", "mission.toml"),
        ("occurrence_prior.json", "none.toml", "none.toml"),
        ("occurrence_prior.json", "misspelt.toml", "did you mean 'completeness'?"),
        ("empty.json", "mission.toml", "empty.json"),
        ("empty.nc", "mission.toml", "empty.nc"),
        ("list.json", "mission.toml", "list.json"),
    ],
)
def test_size_refuses(prior, mission, word, exported, tmp_path):
    (exported / "misspelt.toml").write_text("[mission]\ncompletness = 0.5\n", encoding="utf-8")
    (exported / "list.json").write_text("[1, 2]", encoding="utf-8")
    for name in ("empty.json", "empty.nc"):
        (exported / name).write_bytes(b"")
    result = invoke("size", exported / prior, exported / mission, "--out", tmp_path / "sized")
    assert result.exit_code == 2, result.stderr
    assert word in result.stderr and "Traceback" not in result.stderr
    assert not (tmp_path / "sized").exists()


# ---- calibrate ----


def test_calibrate_prints_and_writes_coverage(tmp_path):
    result = done("calibrate", "steady", "--surveys", 10, "--stars", 60, "--seed", 2, "--out", tmp_path)
    assert "10 surveys of 60 stars" in result.stdout
    coverage = pd.read_csv(tmp_path / "coverage.csv")
    assert "debris_fraction" in set(coverage.iloc[:, 0])
    assert len(pd.read_csv(tmp_path / "ranks.csv"))


# ---- what is loaded ----


def test_import_is_light():
    ran = in_process_of_its_own(
        "import sys, remnantstats\n"
        "print(sorted({'pymc', 'pytensor', 'matplotlib', 'nutpie', 'numba'} & set(sys.modules)))"
    )
    assert ran.stdout.strip() == "[]", ran.stdout + ran.stderr


def test_quick_run_loads_no_compiler(tmp_path):
    code = (
        "import sys\n"
        "from remnantstats.cli import app\n"
        "try:\n"
        "    app(['run', sys.argv[1], '--quick'])\n"
        "except SystemExit as stop:\n"
        "    print('exit', stop.code)\n"
        "print('loaded', sorted({'pymc', 'pytensor', 'nutpie', 'numba'} & set(sys.modules)))\n"
    )
    ran = in_process_of_its_own(code, drawn_study(tmp_path, 60))
    assert "exit 0" in ran.stdout, ran.stdout + ran.stderr
    assert "loaded []" in ran.stdout
    assert (tmp_path / "results" / "report.html").is_file()


# ---- errors that are ours, and interruption ----


def test_a_fault_of_ours_exits_with_one(tmp_path, monkeypatch):
    monkeypatch.setattr("remnantstats.study.read_study_sample", lambda _: 1 / 0)
    result = invoke("inspect", sound_study(tmp_path))
    assert result.exit_code == 1
    assert "a fault of remnantstats, not of your input" in result.stderr
    assert "--debug" in result.stderr and "Traceback" not in result.stderr


def test_debug_lets_the_error_through(tmp_path, monkeypatch):
    monkeypatch.setattr("remnantstats.study.read_study_sample", lambda _: 1 / 0)
    assert isinstance(invoke("inspect", sound_study(tmp_path), "--debug").exception, ZeroDivisionError)


def test_interruption_exits_with_130(tmp_path, monkeypatch):
    def interrupted(_):
        raise KeyboardInterrupt

    monkeypatch.setattr("remnantstats.study.read_study_sample", interrupted)
    result = invoke("inspect", sound_study(tmp_path))
    assert result.exit_code == 130
    assert "finished stages are kept" in result.stderr
