"""The sample's own design, complete: what simulation needs to draw the survey again."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from ..population import Problem
from ..population.rows import UNOBSERVED, ChannelRows, Rows
from ..sensitivity import CHANNELS, FilledLimits, filled_limits

__all__ = ["SurveyDesign", "survey_design"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class SurveyDesign:
    """Rows with limits and errors for every observed star.

    Attributes
    ----------
    rows : Rows
    limits : mapping of str to FilledLimits
    """

    rows: Rows
    limits: Mapping[str, FilledLimits]

    @property
    def imputed(self) -> int:
        """How many limits were taken from other stars."""
        return sum(int(item.imputed.sum()) for item in self.limits.values())


def survey_design(problem: Problem, seed: int = 0) -> SurveyDesign:
    """Complete a posed problem's rows.

    Missing limits come from blind stars of the same survey and atmosphere; the errors of stars that were not detected
    from the detected ones.

    Parameters
    ----------
    problem : Problem
        With one row a star.
    seed : int

    Returns
    -------
    SurveyDesign
    """
    rng = np.random.default_rng(seed)
    limits, channels = {}, {}
    for name in problem.channels:
        limits[name] = filled_limits(problem.sample, name, problem.curves[name], seed)
        channels[name] = _complete(rng, problem, name, limits[name])
    return SurveyDesign(replace(problem.rows, channels=channels), limits)


def _complete(rng: np.random.Generator, problem: Problem, name: str, limits: FilledLimits) -> ChannelRows:
    channel, table = problem.rows.channels[name], problem.sample.table
    quoted = table[CHANNELS[name].false_positive].to_numpy(dtype=float)
    false_positive = np.where(problem.rows.blind & np.isfinite(quoted), quoted, channel.false_positive)
    return replace(
        channel,
        outcome=np.where(channel.outcome == UNOBSERVED, UNOBSERVED, "limit"),
        limit=limits.limit,
        error=_filled(rng, channel.error, channel.width),
        calibration=_filled(rng, np.where(np.isfinite(channel.value), channel.calibration, np.nan), 0.0),
        false_positive=false_positive,
    )


def _filled(rng: np.random.Generator, values: FloatArray, default: FloatArray | float) -> FloatArray:
    missing = ~np.isfinite(values)
    known = values[~missing]
    if not known.size:
        return np.where(missing, default, values)
    filled = values.copy()
    filled[missing] = rng.choice(known, int(missing.sum()))
    return filled
