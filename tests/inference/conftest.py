"""One fit by the engine of record, shared by the tests that look at it."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from helpers.surveys import drawn_survey, posed, two_depths

from remnantstats.inference import fit_problem
from remnantstats.sensitivity import ChannelSettings


@pytest.fixture(scope="session")
def recorded():
    """A survey with every term of the single-channel likelihood, its problem, and its fit by the engine of record."""
    rng = np.random.default_rng(12)
    settings = ChannelSettings(ceiling=0.85, false_positive=0.03)
    table = drawn_survey(rng, 0.45, 7.7, 0.7, two_depths(rng, 400), settings, calibration=0.2)
    problem = posed(table, settings)
    return SimpleNamespace(table=table, settings=settings, problem=problem, fit=fit_problem(problem, 1))
