"""Every kind of faulty input ends with exit 2, a message that names place and remedy, and no output."""

import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest
from helpers.small_studies import SOUND_TABLE, sound_study, study_text
from typer.testing import CliRunner

from remnantstats.cli import app

HEADER, *ROWS = SOUND_TABLE.splitlines()


def table_with(row: str, number: int = 0, header: str = HEADER) -> str:
    """The sound table with one row replaced."""
    rows = list(ROWS)
    rows[number] = row
    return "\n".join([header, *rows]) + "\n"


@dataclass(frozen=True)
class Bad:
    """A faulty study: what replaces the sound parts, and words that the message must hold."""

    name: str
    words: tuple[str, ...]
    table: str | bytes = SOUND_TABLE
    text: str | None = None
    files: tuple[tuple[str, str | bytes], ...] = ()

    def write(self, folder: Path) -> Path:
        for name, content in self.files:
            (folder / name).write_bytes(content if isinstance(content, bytes) else content.encode())
        return sound_study(folder, self.text, self.table)


RECOVERY_FALLS = "log_accretion,n_injected,n_recovered\n6,200,20\n7,200,150\n8,200,40\n9,200,199\n"
RECOVERY_SOUND = "log_accretion,n_injected,n_recovered\n6,200,20\n7,200,100\n8,200,190\n"

TABLES = [
    Bad("duplicate star", ("sample.csv", "WD-1", "row 2", "column 'star'"),
        table_with("WD-1,deep,blind,H,0.4,detected,7.6,0.15,7.1", 1)),
    Bad("text in a number", ("sample.csv", "WD-1", "row 1", "log_accretion", "high"),
        table_with("WD-1,deep,blind,H,0.5,detected,high,0.15,7.0")),
    Bad("missing limit", ("sample.csv", "WD-3", "row 3", "log_accretion_limit"),
        table_with("WD-3,wide,blind,H,0.9,limit,,,", 2)),
    Bad("detected without a value", ("sample.csv", "WD-1", "row 1", "log_accretion"),
        table_with("WD-1,deep,blind,H,0.5,detected,,0.15,7.0")),
    Bad("measured detection below its limit", ("sample.csv", "WD-1", "row 1", "log_accretion_calibration_err"),
        table_with("WD-1,deep,blind,H,0.5,detected,6.8,0.15,7.0")),
    Bad("measured detection at its limit", ("sample.csv", "WD-1", "row 1", "log_accretion_calibration_err"),
        table_with("WD-1,deep,blind,H,0.5,detected,7.0,0.15,7.0")),
    Bad("known-polluted without selection limit", ("sample.csv", "WD-1", "row 1", "selection_limit"),
        table_with("WD-1,deep,known-polluted,H,0.5,detected,8.2,0.15,7.0")),
    Bad("He stars not admitted", ("sample.csv", "WD-2", "atmosphere", "He"),
        table_with("WD-2,deep,blind,He,0.4,detected,7.6,0.15,7.1", 1)),
    Bad("error of zero", ("sample.csv", "WD-1", "row 1", "log_accretion_err"),
        table_with("WD-1,deep,blind,H,0.5,detected,8.2,0,7.0")),
    Bad("negative error", ("sample.csv", "WD-1", "row 1", "log_accretion_err", "-0.15"),
        table_with("WD-1,deep,blind,H,0.5,detected,8.2,-0.15,7.0")),
    Bad("infinity", ("sample.csv", "WD-3", "row 3", "log_accretion_limit", "inf"),
        table_with("WD-3,wide,blind,H,0.9,limit,,,inf", 2)),
    Bad("unknown outcome", ("sample.csv", "WD-3", "row 3", "pollution", "maybe", "limit"),
        table_with("WD-3,wide,blind,H,0.9,maybe,,,8.0", 2)),
    Bad("unknown atmosphere", ("sample.csv", "WD-3", "row 3", "atmosphere", "Q"),
        table_with("WD-3,wide,blind,Q,0.9,limit,,,8.0", 2)),
    Bad("misspelt column", ("sample.csv", "log_acretion", "log_accretion"),
        SOUND_TABLE.replace("log_accretion,", "log_acretion,", 1)),
    Bad("ragged row", ("sample.csv", "row 2"), table_with("WD-2,deep,blind,H,0.4,detected,7.6,0.15,7.1,8,9", 1)),
    Bad("empty table", ("sample.csv",), HEADER + "\n"),
    Bad("empty file", ("sample.csv",), b""),
    Bad("NUL bytes", ("sample.csv", "NUL"), SOUND_TABLE.replace("WD-3", "WD\0-3").encode()),
    Bad("negative age", ("sample.csv", "WD-1", "row 1", "cooling_age", "-0.5"),
        table_with("WD-1,deep,blind,H,-0.5,detected,8.2,0.15,7.0"), study_text(model='name = "cooling-trend"')),
]

STUDIES = [
    Bad("unknown key", ("study.toml", "atmosphere", "did you mean 'atmospheres'"),
        text=study_text(model='name = "steady"\natmosphere = ["H"]')),
    Bad("unknown table", ("study.toml", "misson", "did you mean 'mission'"), text=study_text(more="[misson]\nx = 1")),
    Bad("wrong type", ("study.toml", "seed"), text=study_text().replace("seed = 5", 'seed = "five"')),
    Bad("number for a list", ("study.toml", "log_accretion"), text=study_text(more="[thresholds]\nlog_accretion = 7")),
    Bad("absent table", ("none.csv",), text=study_text(table="none.csv")),
    Bad("absent model", ("study.toml, key 'model.name'", "stedy", "did you mean 'steady'?"),
        text=study_text(model='name = "stedy"')),
    Bad("path that is no model", ("sample.csv",), text=study_text(model='name = "sample.csv"')),
    Bad("path to TOML that is no model", ("other.toml",), text=study_text(model='name = "other.toml"'),
        files=(("other.toml", "colour = 3\n"),)),
    Bad("efficiency of one", ("study.toml", "limit_efficiency"), text=study_text(pollution="limit_efficiency = 1.0")),
    Bad("efficiency of zero", ("study.toml", "limit_efficiency"), text=study_text(pollution="limit_efficiency = 0.0")),
    Bad("efficiency above ceiling", ("study.toml", "limit_efficiency", "0.8"),
        text=study_text(pollution="limit_efficiency = 0.9\nceiling = 0.8")),
    Bad("improper prior: infinite range", ("study.toml", "debris_fraction"),
        text=study_text(more='[model.priors]\ndebris_fraction = { family = "uniform", low = 0, high = inf }')),
    Bad("improper prior: Haldane", ("study.toml", "debris_fraction", "alpha"),
        text=study_text(more='[model.priors]\ndebris_fraction = { family = "beta", alpha = 0, beta = 0 }')),
    Bad("improper prior: unknown family", ("study.toml", "mean_log_accretion", "flat"),
        text=study_text(more='[model.priors]\nmean_log_accretion = { family = "flat" }')),
    Bad("prior of no parameter", ("study.toml", "debris_fracton", "debris_fraction"),
        text=study_text(more='[model.priors]\ndebris_fracton = { family = "beta", alpha = 1, beta = 1 }')),
    Bad("broken TOML", ("study.toml", "line"), text=study_text() + "\n[thresholds\n"),
    Bad("unit that cannot convert", ("cooling_age", "kg"), text=study_text(more='[sample.units]\ncooling_age = "kg"')),
    Bad("unit that is none", ("cooling_age", "yonks"),
        text=study_text(more='[sample.units]\ncooling_age = "yonks"')),
    Bad("efficiency table on measured", ("study.toml", "pollution", 'threshold_on = "true"'),
        text=study_text(pollution='threshold_on = "measured"\nefficiency_table = "recovery.csv"'),
        files=(("recovery.csv", RECOVERY_SOUND),)),
    Bad("efficiency table that falls", ("recovery.csv", "rows 2 and 3", "0.750 at 7", "0.200 at 8"),
        text=study_text(pollution='threshold_on = "true"\nefficiency_table = "recovery.csv"'),
        files=(("recovery.csv", RECOVERY_FALLS),)),
    Bad("absent efficiency table", ("recovery.csv",),
        text=study_text(pollution='threshold_on = "true"\nefficiency_table = "recovery.csv"')),
    Bad("mission without transfer", ("study.toml", "[mission]", "[transfer]"),
        text=study_text(more="[mission]\ncompleteness = 0.5\n")),
]

ALL = [*TABLES, *STUDIES]


def named(case: Bad) -> str:
    return case.name


def check_refusal(code: int, stdout: str, stderr: str, words: tuple[str, ...], out: Path) -> None:
    assert code == 2, f"{stdout}\n{stderr}"
    message = stderr
    assert "error: " in message
    assert "Traceback" not in message + stdout
    for word in words:
        assert word in message, f"{word!r} is not in:\n{message}"
    # place, value found, what is allowed, remedy
    for part in ("where:", "found:", "allowed:", "to do:"):
        assert part in message, f"{part} is not in:\n{message}"
    assert not out.exists(), f"output was written: {sorted(out.rglob('*'))}"


@pytest.mark.parametrize("case", ALL, ids=named)
def test_run_refuses(case, tmp_path):
    study = case.write(tmp_path)
    result = CliRunner().invoke(app, ["run", str(study), "--quick"])
    check_refusal(result.exit_code, result.stdout, result.stderr, case.words, tmp_path / "results")


@pytest.mark.parametrize("case", ALL, ids=named)
def test_every_refusal_tells_what_to_do(case, tmp_path):
    study = case.write(tmp_path)
    result = CliRunner().invoke(app, ["inspect", str(study)])
    assert result.exit_code == 2
    assert "to do:" in result.stderr, result.stderr


def test_sound_study_is_accepted(tmp_path):
    """The base from which the faulty ones differ by one fault."""
    result = CliRunner().invoke(app, ["inspect", str(sound_study(tmp_path))])
    assert result.exit_code == 0, result.stderr


@pytest.mark.parametrize("command", ["infer", "run"])
def test_full_engine_refuses_before_writing(command, tmp_path):
    case = TABLES[0]
    out = tmp_path / "elsewhere"
    result = CliRunner().invoke(app, [command, str(case.write(tmp_path)), "--out", str(out)])
    check_refusal(result.exit_code, result.stdout, result.stderr, case.words, out)
    assert not (tmp_path / "results").exists()


def test_every_fault_in_one_go(tmp_path):
    table = table_with("WD-1,deep,blind,H,0.5,detected,high,0.15,7.0").replace("0.9,limit,,,8.0", "0.9,maybe,,,8.0")
    result = CliRunner().invoke(app, ["inspect", str(sound_study(tmp_path, table=table))])
    assert result.exit_code == 2
    assert "2 faults" in result.stderr
    assert "WD-1" in result.stderr and "WD-3" in result.stderr


def test_every_wrong_key_in_one_go(tmp_path):
    text = study_text(model='name = "steady"\ngroop = "survey"', pollution="widht = 0.2")
    result = CliRunner().invoke(app, ["inspect", str(sound_study(tmp_path, text))])
    assert result.exit_code == 2
    assert "did you mean 'groups'?" in result.stderr
    assert "did you mean 'width'?" in result.stderr


def test_absent_study(tmp_path):
    result = CliRunner().invoke(app, ["run", str(tmp_path / "none.toml")])
    assert result.exit_code == 2
    assert "none.toml" in result.stderr and "to do:" in result.stderr


def test_bad_rows_rejected_where_the_study_says_so(tmp_path):
    text = study_text().replace('table = "sample.csv"', 'table = "sample.csv"\non_bad_rows = "reject"')
    table = table_with("WD-3,wide,blind,H,0.9,limit,,,", 2)
    result = CliRunner().invoke(app, ["inspect", str(sound_study(tmp_path, text, table))])
    assert result.exit_code == 0, result.stderr
    assert "WD-3" in result.stdout and "log_accretion_limit" in result.stdout


FLAGS = [
    (["run", "study.toml", "--slow"], "--slow"),
    (["simulate", "steady", "--stars", "10", "--seed", "1"], "--out"),
    (["simulate", "steady", "--stars", "many", "--seed", "1", "--out", "drawn"], "--stars"),
    (["simulate", "steady", "--stars", "0", "--seed", "1", "--out", "drawn"], "--stars"),
    (["simulate", "steady", "--stars", "10", "--seed", "-1", "--out", "drawn"], "--seed"),
    (["calibrate", "steady", "--surveys", "2", "--out", "drawn"], "--surveys"),
    (["size", "prior.json"], "Missing"),
    (["run"], "Missing"),
    (["walk"], "walk"),
]


@pytest.mark.parametrize(("arguments", "word"), FLAGS, ids=[" ".join(arguments) for arguments, _ in FLAGS])
def test_wrong_flags(arguments, word, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(app, arguments, env={"NO_COLOR": "1", "TERM": "dumb"})
    assert result.exit_code == 2
    assert word in result.stderr
    assert not (tmp_path / "drawn").exists()


def test_scheduler_is_refused_plainly(tmp_path):
    result = CliRunner().invoke(app, ["run", str(sound_study(tmp_path)), "--scheduler", "tcp://127.0.0.1:1"])
    check_refusal(result.exit_code, result.stdout, result.stderr, ("--scheduler",), tmp_path / "results")


SUBPROCESS = ("duplicate star", "NUL bytes", "broken TOML", "path that is no model")


@pytest.mark.parametrize("case", [case for case in ALL if case.name in SUBPROCESS], ids=named)
def test_run_refuses_in_a_process_of_its_own(case, tmp_path):
    study = case.write(tmp_path)
    done = subprocess.run(
        [sys.executable, "-m", "remnantstats.cli", "run", study.name], cwd=tmp_path, capture_output=True, text=True
    )
    check_refusal(done.returncode, done.stdout, done.stderr, case.words, tmp_path / "results")
    assert done.stdout == ""
