"""The [transfer] table: what is refused, and what is said of it (INTERFACE §2)."""

import pytest

from remnantstats.errors import InputError
from remnantstats.occurrence import parse_transfer

GOOD = {
    "retention": {"family": "beta", "alpha": 8, "beta": 2, "basis": "a reason"},
    "delivery": {"family": "uniform", "low": 0, "high": 1},
}


def refusal(data, folder):
    with pytest.raises(InputError) as caught:
        parse_transfer(data, "study.toml", folder)
    return str(caught.value)


def test_defaults_and_bases(tmp_path):
    transfer = parse_transfer(GOOD, "study.toml", tmp_path)
    basis = {item.name: item.basis for item in transfer.assumptions()}
    assert basis == {
        "retention": "a reason",
        "delivery": "assumed, no basis given",
        "prior": "uniform, the default",
        "earthlike": "assumed, no basis given",
    }
    assert "fixed at 1" in transfer.assumptions()[3].description


def test_unknown_key_names_the_nearest(tmp_path):
    text = refusal(GOOD | {"retension": GOOD["retention"]}, tmp_path)
    assert "transfer.retension" in text
    assert "did you mean 'retention'?" in text


def test_missing_key_is_named(tmp_path):
    assert "key 'transfer.delivery'" in refusal({"retention": GOOD["retention"]}, tmp_path)


@pytest.mark.parametrize(
    "value",
    [
        {"family": "normal", "mean": 0.5, "sd": 0.1},
        {"family": "fixed", "value": 1.5},
        {"family": "uniform", "low": -0.1, "high": 0.5},
        {"family": "halfnormal", "sd": 0.1},
    ],
)
def test_a_distribution_that_leaves_zero_to_one_is_refused(value, tmp_path):
    text = refusal(GOOD | {"earthlike": value}, tmp_path)
    assert "key 'transfer.earthlike'" in text
    assert "[0, 1]" in text


def test_all_faults_at_once(tmp_path):
    text = refusal({"retention": {"family": "bta"}, "prior": {"family": "fixed", "value": 0.5}, "x": 1}, tmp_path)
    assert text.startswith("4 faults")


def test_draws_outside_zero_to_one_are_refused(tmp_path):
    (tmp_path / "h.csv").write_text("\n".join(["0.5"] * 150 + ["1.2"]))
    assert "1.2" in refusal(GOOD | {"earthlike": {"family": "draws", "file": "h.csv"}}, tmp_path)


def test_not_a_table(tmp_path):
    assert "not a table" in refusal([1, 2], tmp_path)
