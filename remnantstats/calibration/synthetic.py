"""Synthetic surveys with known truth, in the sample table's own format."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..catalog import RowRules, Sample, read_sample, to_ecsv
from ..catalog.rules import ChannelRules
from ..errors import Fault, ModelError, nearest
from ..files import make_folder, write_text
from ..inference.design import survey_design
from ..population import PopulationModel, Problem, pose
from ..population.covariates import column_of
from ..population.parameters import GROUP_RAW, logit_of
from ..population.rows import DETECTED, Rows
from ..population.simulate import Simulated, simulate
from ..sensitivity import CHANNELS, ChannelSettings, midpoint_shift
from .builtin import builtin_table

__all__ = ["Design", "SyntheticSurvey", "draw_survey", "draw_truth", "posed_design", "survey_table", "write_survey"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Design:
    """A survey's design: whose limits, errors, covariates and selection are drawn again.

    Attributes
    ----------
    sample : Sample
    channels : mapping of str to ChannelSettings
    groups : str or None
    atmospheres : sequence of str
    name : str
        Where the design comes from, for the record.
    """

    sample: Sample
    channels: Mapping[str, ChannelSettings]
    groups: str | None = None
    atmospheres: Sequence[str] = ("H",)
    name: str = "built-in two-depth design"


@dataclass(frozen=True)
class SyntheticSurvey:
    """A synthetic survey.

    Attributes
    ----------
    table : pandas.DataFrame
        A row a star, in the sample table's format.
    truth : dict
        Parameters, and for each star whether it hosts debris, its true log values and whether it was genuinely
        detected.
    channels : mapping of str to ChannelSettings
    model : str
    """

    table: pd.DataFrame
    truth: dict[str, Any]
    channels: Mapping[str, ChannelSettings]
    model: str
    groups: str | None = None
    notes: tuple[str, ...] = field(default=())


def posed_design(model: PopulationModel, stars: int, rng: np.random.Generator, design: Design | None) -> tuple[
    Problem, Rows, pd.DataFrame, Mapping[str, ChannelSettings]
]:
    """Pose a model on a design and draw `stars` complete rows from it.

    Parameters
    ----------
    model : PopulationModel
    stars : int
    rng : numpy.random.Generator
    design : Design or None
        None: the built-in two-depth design.

    Returns
    -------
    problem : Problem
    rows : Rows
        Complete, in the drawn order.
    table : pandas.DataFrame
        The design's table rows in the same order.
    channels : mapping of str to ChannelSettings
    """
    if design is None:
        design = _builtin(model, stars, rng)
        index = np.arange(stars)
    else:
        index = rng.integers(0, len(design.sample), stars)
    problem = pose(model, design.sample, design.channels, design.groups, design.atmospheres)
    rows = survey_design(problem, int(rng.integers(2**31))).rows.take(index)
    return problem, rows, design.sample.table.iloc[index].reset_index(drop=True), design.channels


def _builtin(model: PopulationModel, stars: int, rng: np.random.Generator) -> Design:
    both = model.file.channels == "both"
    table = builtin_table(rng, stars, both)
    covariates = tuple(sorted({column_of(item.name) for item in model.covariates}))
    rules = RowRules(
        pollution=ChannelRules(),
        excess=ChannelRules() if both else None,
        atmospheres=("H",),
        covariates=covariates,
        groups="survey" if model.file.groups else None,
    )
    channels = {"pollution": ChannelSettings()} | ({"excess": ChannelSettings()} if both else {})
    sample = read_sample(table, rules=rules)
    return Design(sample, channels, "survey" if model.file.groups else None)


def draw_truth(
    problem: Problem, rng: np.random.Generator, given: Mapping[str, float], where: str = "the truth"
) -> dict[str, Any]:
    """Parameters of a synthetic population: those given, the rest drawn from their priors.

    Parameters
    ----------
    problem : Problem
    rng : numpy.random.Generator
    given : mapping of str to float
    where : str
        Where the given values come from, for messages.

    Returns
    -------
    dict
        As `Problem.theta` gives for one vector.

    Raises
    ------
    ModelError
        For a parameter that the model does not have, or a value outside its range.
    """
    known = [item.name for item in problem.parameters if item.size == 1]
    for name, value in given.items():
        if name not in known:
            raise ModelError(
                Fault(
                    f"the model has no parameter '{name}'",
                    where=where,
                    found=name,
                    allowed=", ".join(known),
                    remedy=nearest(name, known),
                )
            )
        low, high = problem.parameter(name).limits
        # a truth value is no number, though the language counts it as one
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if not (number and low <= value <= high):
            raise ModelError(
                Fault(
                    "the true value is no number, or outside the parameter's range",
                    where=f"{where}, key '{name}'",
                    found=repr(value),
                    allowed=f"{low:g} to {high:g}",
                    remedy="change it",
                )
            )
    theta: dict[str, Any] = {}
    for item in problem.parameters:
        if item.name == GROUP_RAW:
            theta[item.name] = rng.standard_normal(item.size)
            continue
        value = float(given[item.name]) if item.name in given else item.draw(rng)
        theta[item.name] = value
        if item.support == "unit":
            inside = min(max(value, 1e-300), 1 - 1e-16)
            theta[logit_of(item.name)] = float(np.log(inside) - np.log1p(-inside))
    return theta


def draw_survey(
    model: PopulationModel,
    stars: int,
    seed: int,
    *,
    design: Design | None = None,
    truth: Mapping[str, float] | None = None,
    where: str = "the truth",
) -> SyntheticSurvey:
    """Draw a synthetic survey.

    Parameters
    ----------
    model : PopulationModel
    stars : int
    seed : int
    design : Design, optional
    truth : mapping of str to float, optional
    where : str, optional
        Where the truth comes from, for messages.

    Returns
    -------
    SyntheticSurvey
    """
    rng = np.random.default_rng([seed, 21])
    problem, rows, base, channels = posed_design(model, stars, rng, design)
    theta = draw_truth(problem, rng, truth or {}, where)
    drawn = simulate(rng, problem, rows, theta)
    table = survey_table(rows, base, drawn, channels)
    values = {key: value for key, value in theta.items() if np.ndim(value) == 0 and not key.startswith("logit(")}
    record = {
        "schema_version": 1,
        "synthetic": "invented stars, drawn from a model; no observation stands behind them",
        "model": model.name,
        "seed": seed,
        "design": "built-in two-depth design" if design is None else design.name,
        "given": sorted(truth or {}),
        "parameters": values,
        "reference": dict(problem.reference),
        "stars": _star_truth(table, drawn),
    }
    if problem.groups:
        record["group_deviations"] = dict(zip(problem.groups, map(float, theta[GROUP_RAW]), strict=True))
    return SyntheticSurvey(table, record, channels, model.name, None if design is None else design.groups)


def survey_table(
    rows: Rows, base: pd.DataFrame, drawn: Simulated, channels: Mapping[str, ChannelSettings]
) -> pd.DataFrame:
    """Write what a simulated survey lists into the sample table's columns.

    Parameters
    ----------
    rows : Rows
        Complete design.
    base : pandas.DataFrame
        Table rows of the design, in the same order.
    drawn : Simulated
    channels : mapping of str to ChannelSettings

    Returns
    -------
    pandas.DataFrame
    """
    table = base.copy()
    width = len(str(len(table)))
    table["star"] = [f"SYN-{number:0{width}d}" for number in range(1, len(table) + 1)]
    for name, outcome in drawn.channels.items():
        names, channel = CHANNELS[name], rows.channels[name]
        detected = outcome.outcome == DETECTED
        noise = channel.width if channel.threshold_on == "measured" else channel.error
        table[name] = outcome.outcome
        table[names.value] = _rounded(outcome.value, channel.limit)
        table[names.error] = np.where(detected, np.round(noise, 4), np.nan)
        table[names.calibration] = np.where(detected, np.round(channel.calibration, 4), np.nan)
        quoted = channel.limit + channel.width * midpoint_shift(channels[name])
        # rounded down, so that a detection just above its limit stays above it
        table[names.limit] = np.floor(quoted * 1e4) / 1e4
        if not (channel.calibration > 0).any():
            table = table.drop(columns=names.calibration)
        again = channel.same & detected
        table.loc[again, "selection_limit"] = table.loc[again, names.limit]
    unused = [
        column
        for name, names in CHANNELS.items()
        if name not in drawn.channels
        for column in (name, names.calibration)
        if column in table
    ]
    return table.drop(columns=unused).dropna(axis=1, how="all")


def _rounded(value: FloatArray, limit: FloatArray) -> FloatArray:
    """Round to four decimals, but up where a value above its limit would otherwise fall to it."""
    plain = np.round(value, 4)
    with np.errstate(invalid="ignore"):
        falls = (value > limit) & (plain <= limit)
    return np.where(falls, np.ceil(value * 1e4) / 1e4, plain)


def _star_truth(table: pd.DataFrame, drawn: Simulated) -> list[dict[str, Any]]:
    stars = []
    for position, star in enumerate(table["star"]):
        entry: dict[str, Any] = {"star": star, "has_debris": bool(drawn.has_debris[position])}
        for name, outcome in drawn.channels.items():
            value = float(outcome.truth[position])
            entry[CHANNELS[name].value] = round(value, 4) if np.isfinite(value) else None
            entry[f"{name}_genuine"] = bool(outcome.genuine[position])
        stars.append(entry)
    return stars


def write_survey(survey: SyntheticSurvey, folder: Path) -> list[Path]:
    """Write `sample.ecsv` and `truth.json`.

    Parameters
    ----------
    survey : SyntheticSurvey
    folder : pathlib.Path

    Returns
    -------
    list of pathlib.Path
    """
    make_folder(folder)
    note = "synthetic: invented stars drawn by `remnantstats simulate`; see truth.json"
    to_ecsv(survey.table, folder / "sample.ecsv", {"comments": [note]})
    write_text(folder / "truth.json", json.dumps(survey.truth, indent=1) + "\n")
    return [folder / "sample.ecsv", folder / "truth.json"]
