"""Two engines, one answer; and one seed, one answer."""

from __future__ import annotations

import numpy as np
import pytest
from helpers.surveys import counted_survey, posed

from remnantstats.errors import InferenceError
from remnantstats.inference import engine, fit_problem
from remnantstats.inference.nuts import NutsSampler
from remnantstats.sensitivity import ChannelSettings


def test_the_engines_agree(recorded):
    quick = fit_problem(recorded.problem, 1, quick=True).table.set_index("quantity")
    full = recorded.fit.table.set_index("quantity")
    assert list(quick.index) == list(full.index)
    for name in full.index:
        assert quick.loc[name, "mean"] == pytest.approx(full.loc[name, "mean"], abs=0.1 * full.loc[name, "sd"]), name
        assert quick.loc[name, "sd"] == pytest.approx(full.loc[name, "sd"], rel=0.1), name


def test_a_sound_fit_passes_its_checks(recorded):
    assert recorded.fit.engine == "full"
    assert recorded.fit.verdict != "fail"
    assert not recorded.fit.marks
    compared = next(check for check in recorded.fit.checks if check.name == "two engines, one answer")
    assert compared.verdict == "pass" and 0 <= compared.value < 0.25
    assert recorded.fit.posterior["posterior"]["debris_fraction"].sizes["chain"] == 4


def test_quick_engine_by_seed(recorded):
    one, two, other = (fit_problem(recorded.problem, seed, quick=True) for seed in (7, 7, 8))
    np.testing.assert_array_equal(one.draws("debris_fraction"), two.draws("debris_fraction"))
    assert one.table.equals(two.table)
    assert not np.array_equal(one.draws("debris_fraction"), other.draws("debris_fraction"))
    assert one.marks and "quick look" in one.marks[0]


def test_engine_of_record_by_seed():
    problem = posed(counted_survey(12, 40), ChannelSettings())
    one, two, other = (NutsSampler(problem, seed, None).draw(200).u for seed in (3, 3, 4))
    assert one.shape == (4, 200, 3)
    np.testing.assert_array_equal(one, two)
    assert not np.array_equal(one, other)
    # chains of one run are not copies of each other
    assert not np.array_equal(one[0], one[1])


def test_quick_refuses_weights_that_cannot_be_trusted(recorded, monkeypatch):
    monkeypatch.setattr(engine, "_quick_or_none", lambda problem, seed: None)
    with pytest.raises(InferenceError, match="run without --quick"):
        fit_problem(recorded.problem, 1, quick=True)


def test_kept_draws_are_used_again(recorded):
    """Draws of an earlier run give the same fit, and nothing is sampled."""

    class Shelf:
        kept = None
        loads = 0

        def load(self):
            self.loads += 1
            return self.kept

        def save(self, arrays):
            self.kept = arrays

    shelf, stages = Shelf(), []
    problem = posed(counted_survey(12, 40), ChannelSettings())
    first = fit_problem(problem, 2, memory=shelf)
    again = fit_problem(problem, 2, memory=shelf, progress=stages.append)
    assert shelf.loads == 2
    assert first.table.equals(again.table)
    assert "draws of an earlier run" in stages and "compilation" not in stages
