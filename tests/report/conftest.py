"""Small invented surveys, fitted by the quick engine once a session."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.inference import Fit, fit_problem
from remnantstats.inference.compare import compare
from remnantstats.mission import size_mission
from remnantstats.occurrence import occurrence_prior
from remnantstats.occurrence.settings import TransferSettings, parse_transfer
from remnantstats.population import load_model, pose
from remnantstats.population.quantities import Thresholds
from remnantstats.report import ReportContents
from remnantstats.sensitivity import ChannelSettings

HOSTILE = "<script>alert('x')</script>\"$\\frac&"
TRANSFER = {
    "retention": {"family": "beta", "alpha": 8, "beta": 2, "basis": "an invented <b>engulfment</b> argument"},
    "delivery": {"family": "beta", "alpha": 5, "beta": 5},
    "earthlike": {"family": "beta", "alpha": 2, "beta": 6, "basis": "an invented transit survey"},
}
MISSION = {
    "success": [0.9, 0.95, 0.99],
    "completeness": 0.6,
    "max_targets": 60,
    "density": 0.01,
    "planet_separation": 1.0,
    "wavelength": 0.8,
    "inner_working_angle": 3.0,
}


def pollution_table(stars: int, seed: int, known: int = 6) -> pd.DataFrame:
    """A survey of two depths; the last `known` stars were observed because they were known to be polluted."""
    rng = np.random.default_rng(seed)
    deep = rng.random(stars) < 0.5
    limit = np.where(deep, 6.8, 8.3) + 0.1 * rng.normal(size=stars)
    blind = np.arange(stars) < stars - known
    selection = np.where(blind, np.nan, 8.0)
    host = rng.random(stars) < np.where(blind, 0.4, 1.0)
    truth = rng.normal(7.6, 0.8, stars)
    while True:
        hidden = ~blind & (truth + 0.15 * rng.normal(size=stars) < 8.0)
        if not hidden.any():
            break
        truth[hidden] = rng.normal(7.6, 0.8, hidden.sum())
    measured = truth + 0.15 * rng.normal(size=stars)
    found = host & (measured > limit)
    teff = rng.uniform(8000, 25000, stars)
    return pd.DataFrame(
        {
            "star": [f"star {i:03d}" for i in range(stars)],
            "survey": np.where(deep, "deep spectra", "wide spectra"),
            "atmosphere": "H",
            "inclusion": np.where(blind, "blind", "known-polluted"),
            "teff": teff,
            "cooling_age": 10 ** (0.6 - (teff - 8000) / 9000),
            "pollution": np.where(found, "detected", "limit"),
            "log_accretion": np.where(found, measured, np.nan),
            "log_accretion_err": np.where(found, 0.15, np.nan),
            "log_accretion_limit": limit,
            "selection_limit": selection,
        }
    )


def dust_table(stars: int, seed: int) -> pd.DataFrame:
    """An infrared survey without temperatures."""
    rng = np.random.default_rng(seed)
    limit = rng.normal(-3.0, 0.3, stars)
    measured = rng.normal(-2.6, 0.6, stars) + 0.15 * rng.normal(size=stars)
    found = (rng.random(stars) < 0.2) & (measured > limit)
    return pd.DataFrame(
        {
            "star": [f"star {i:03d}" for i in range(stars)],
            "survey": "infrared",
            "atmosphere": "H",
            "distance": rng.uniform(10, 100, stars),
            "excess": np.where(found, "detected", "limit"),
            "log_dust": np.where(found, measured, np.nan),
            "log_dust_err": np.where(found, 0.15, np.nan),
            "log_dust_limit": limit,
        }
    )


GROUPED = """
title = "Fractions that pool over surveys"
channels = "one"
family = "normal"
groups = true
[priors]
debris_fraction = { family = "beta", alpha = 1, beta = 1, basis = "flat" }
group_sd = { family = "halfnormal", sd = 1, basis = "weak" }
mean_log_accretion = { family = "normal", mean = 8, sd = 1.5 }
sd_log_accretion = { family = "halfnormal", sd = 1.5 }
"""


def fitted(table: pd.DataFrame, model: str | Path, channel: str = "pollution", *, quick: bool = True) -> Fit:
    """Fit a table by the quick engine."""
    settings = {channel: ChannelSettings()}
    rules = RowRules(
        pollution=ChannelRules() if channel == "pollution" else None,
        excess=ChannelRules() if channel == "excess" else None,
        covariates=("cooling_age",) if model == "cooling-trend" else (),
    )
    sample = read_sample(table, rules=rules)
    problem = pose(load_model(model), sample, settings, "survey")
    return fit_problem(problem, 1, quick=quick, thresholds=Thresholds())


def contents_of(fit: Fit, *, transfer: Any = None, mission: Any = None, **rest: Any) -> ReportContents:
    """A report's contents from a fit, carried on as far as the settings go."""
    settings: TransferSettings | None = None if transfer is None else parse_transfer(transfer, "test", Path())
    prior = None if settings is None else occurrence_prior(fit, settings, seed=1, draws=4000)
    plan = None if mission is None or prior is None else size_mission(prior, mission)
    given = {
        "title": "An invented survey",
        "provenance": {"study file": "study.toml, sha256 " + "ab" * 32, "numpy": np.__version__, "seed": "1"},
        "marks": fit.marks,
        "thresholds": Thresholds(),
        "channels": {name: ChannelSettings() for name in fit.problem.channels},
        "transfer": settings,
    }
    return ReportContents(fit=fit, prior=prior, plan=plan, **(given | rest))


@pytest.fixture(scope="session")
def fit() -> Fit:
    """250 stars with a cooling trend; one star and one survey have hostile names."""
    table = pollution_table(250, 4)
    table.loc[table.index[table["pollution"] == "limit"][0], "star"] = HOSTILE
    table.loc[table["survey"] == "wide spectra", "survey"] = HOSTILE
    return fitted(table, "cooling-trend")


@pytest.fixture(scope="session")
def contents(fit: Fit) -> ReportContents:
    """The whole line, to a mission that cannot reach its last success level."""
    return contents_of(fit, transfer=TRANSFER, mission=MISSION, title=f"An invented survey {HOSTILE}")


@pytest.fixture(scope="session")
def dust_contents() -> ReportContents:
    """An infrared survey alone, not carried to planets."""
    return contents_of(fitted(dust_table(200, 5), "steady", "excess"), title="Dust alone")


@pytest.fixture(scope="session")
def grouped_contents(tmp_path_factory: pytest.TempPathFactory) -> ReportContents:
    """Two surveys that pool, without temperatures or ages."""
    path = tmp_path_factory.mktemp("model") / "grouped.toml"
    path.write_text(GROUPED)
    table = pollution_table(200, 6).drop(columns=["teff", "cooling_age"])
    table["survey"] = np.where(np.arange(200) % 3 == 0, HOSTILE, table["survey"])
    return contents_of(fitted(table, path), transfer=TRANSFER, title="Pooled")


@pytest.fixture(scope="session")
def compared_contents() -> ReportContents:
    """Two models of one sample, the first without the age trend."""
    table = pollution_table(150, 8)
    fits = tuple(fitted(table, name) for name in ("steady", "cooling-trend"))
    return contents_of(fits[0], transfer=TRANSFER, title="Compared", comparison=compare(fits, 1), fits=fits)


@pytest.fixture(scope="session")
def failed_contents(contents: ReportContents) -> ReportContents:
    """The same fit with a failed check."""
    broken = replace(contents.fit.checks[0], verdict="fail")
    fit = replace(contents.fit, checks=(broken, *contents.fit.checks[1:]))
    return replace(contents, fit=fit, marks=fit.marks)
