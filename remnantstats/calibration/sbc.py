"""Simulation-based calibration and interval coverage of a model at a survey design.

Parameters are drawn from the prior, a survey from them, the posterior from the survey; the ranks of the true values
among posterior draws are then uniform (Talts et al. 2018, arXiv:1804.06788).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.stats

from ..catalog import read_sample
from ..errors import InferenceError
from ..inference.quick import importance_draws
from ..population import PopulationModel, Problem, pose
from ..population.parameters import GROUP_RAW
from ..population.rows import blocks
from ..population.simulate import simulate
from .synthetic import Design, draw_truth, posed_design, survey_table

__all__ = ["CalibrationReport", "calibrate"]

FloatArray = npt.NDArray[np.float64]
LEVELS = (0.50, 0.68, 0.90, 0.95)
_RANK_DRAWS = 500


@dataclass(frozen=True)
class CalibrationReport:
    """Result of a calibration.

    Attributes
    ----------
    ranks : pandas.DataFrame
        A row a survey and parameter: `survey, quantity, truth, mean, sd, rank` (share of posterior draws below truth).
    refused : int
        Surveys for which the quick engine's weights could not be trusted.
    surveys, stars : int
    model : str
    """

    ranks: pd.DataFrame
    refused: int
    surveys: int
    stars: int
    model: str

    def coverage(self) -> pd.DataFrame:
        """Share of central intervals that cover the truth, with its binomial error, and the test of uniform ranks."""
        rows = []
        for quantity, part in self.ranks.groupby("quantity", sort=False):
            rank = part["rank"].to_numpy()
            row: dict[str, Any] = {"quantity": quantity, "surveys": len(rank)}
            for level in LEVELS:
                covered = np.abs(rank - 0.5) <= level / 2
                row[f"covered_{100 * level:.0f}"] = float(covered.mean())
                row[f"error_{100 * level:.0f}"] = float(np.sqrt(level * (1 - level) / len(rank)))
            row["bias_sd"] = float(((part["mean"] - part["truth"]) / part["sd"]).mean())
            row["uniform_p"] = float(scipy.stats.kstest(rank, "uniform").pvalue)
            rows.append(row)
        return pd.DataFrame(rows)

    def __repr__(self) -> str:
        head = f"calibration of '{self.model}': {self.surveys} surveys of {self.stars} stars, {self.refused} refused"
        table: str = self.coverage().to_string(index=False, float_format=lambda x: f"{x:.3f}")
        return f"{head}\n{table}"


def calibrate(
    model: PopulationModel,
    *,
    surveys: int = 100,
    stars: int = 300,
    seed: int = 1,
    design: Design | None = None,
    truth: Mapping[str, float] | None = None,
    progress: Callable[[int], None] | None = None,
) -> CalibrationReport:
    """Calibrate a model.

    Parameters
    ----------
    model : PopulationModel
    surveys, stars : int
    seed : int
        Same seed, same numbers.
    design : Design, optional
        Default the built-in two-depth design, drawn anew for each survey.
    truth : mapping, optional
        Parameters held at given values; ranks are then not uniform, and only bias and width are of use.
    progress : callable, optional
        Called with the number of surveys done.

    Returns
    -------
    CalibrationReport
    """
    rows: list[dict[str, Any]] = []
    refused = 0
    for number in range(surveys):
        found = one_survey(model, stars, seed, number, design, truth or {})
        refused += found is None
        rows += found or []
        if progress is not None:
            progress(number + 1)
    return CalibrationReport(pd.DataFrame(rows), refused, surveys, stars, model.name)


def one_survey(
    model: PopulationModel, stars: int, seed: int, number: int, design: Design | None, truth: Mapping[str, float]
) -> list[dict[str, Any]] | None:
    """Ranks of one simulated survey; None where the quick engine refuses."""
    rng = np.random.default_rng([seed, 31, number])
    problem, rows, base, channels = posed_design(model, stars, rng, design)
    theta = draw_truth(problem, rng, truth)
    drawn = simulate(rng, problem, rows, theta)
    table = survey_table(rows, base, drawn, channels)
    sample = read_sample(table, rules=problem.sample.rules)
    groups = None if design is None else design.groups
    again = pose(model, sample, channels, groups or ("survey" if problem.groups else None), _atmospheres(design))
    return _ranks(_same_reference(again, problem), theta, rng, number)


def _atmospheres(design: Design | None) -> Any:
    return ("H",) if design is None else design.atmospheres


def _same_reference(problem: Problem, truth: Problem) -> Problem:
    """Centre the covariates where the truth's were: a resampled design has another mean."""
    moved = {
        name: z + problem.reference[name] - truth.reference[name] for name, z in problem.rows.covariates.items()
    }
    latent = problem.rows.latent
    if latent is not None and latent.nodes is None:
        step = problem.reference[latent.name] - truth.reference[latent.name]
        latent = replace(latent, estimate=latent.estimate + step)
    rows = replace(problem.rows, covariates=moved, latent=latent)
    return replace(problem, rows=rows, blocks=tuple(blocks(rows)), reference=truth.reference)


def _ranks(
    problem: Problem, truth: Mapping[str, Any], rng: np.random.Generator, number: int
) -> list[dict[str, Any]] | None:
    try:
        draws = importance_draws(problem, rng)
    except InferenceError:
        return None
    if not draws.usable:
        return None
    posterior = problem.theta(draws.resampled(rng, _RANK_DRAWS))
    rows = []
    for item in problem.free:
        if item.name == GROUP_RAW or item.name not in truth:
            continue
        values = posterior[item.name]
        rows.append(
            {
                "survey": number,
                "quantity": item.name,
                "truth": float(truth[item.name]),
                "mean": float(values.mean()),
                "sd": float(values.std()),
                # between the draws below and those not above, so that ranks lie inside (0, 1)
                "rank": (float((values < truth[item.name]).sum()) + 0.5) / (len(values) + 1),
            }
        )
    return rows
