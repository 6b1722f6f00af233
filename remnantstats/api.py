"""Each step of the job as one function, for notebooks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from .calibration import SyntheticSurvey, draw_survey
from .calibration.synthetic import Design
from .catalog import Sample
from .fields import parse_settings
from .inference import Fit, fit_problem
from .population import PopulationModel, load_model, pose
from .population.quantities import Thresholds
from .sensitivity import ChannelSettings

__all__ = ["infer", "simulate_sample"]


def infer(
    sample: Sample,
    model: PopulationModel | str | Path,
    *,
    seed: int,
    channels: Mapping[str, ChannelSettings | Mapping[str, Any]] | None = None,
    groups: str | None = None,
    atmospheres: Sequence[str] = ("H",),
    quick: bool = False,
    thresholds: Thresholds | None = None,
) -> Fit:
    """Infer a population from a sample.

    Parameters
    ----------
    sample : Sample
    model : PopulationModel, str or path
        A model, its name or its file.
    seed : int
        Same seed, same result.
    channels : mapping of str to ChannelSettings or mapping, optional
        How "pollution" and "excess" decide; default those that the sample was read with, by the default selection.
    groups : str, optional
        Column that defines groups.
    atmospheres : sequence of str, optional
        Atmospheres admitted.
    quick : bool, optional
        Use the quick engine.
    thresholds : Thresholds, optional
        Values above which the fraction is reported.

    Returns
    -------
    Fit

    Raises
    ------
    InputError, ModelError
        Where sample and model do not go together.
    """
    if not isinstance(model, PopulationModel):
        model = load_model(model)
    wanted = channels if channels is not None else {name: {} for name in sample.rules.channels}
    settings = {
        name: item if isinstance(item, ChannelSettings) else parse_settings(ChannelSettings, dict(item), name)
        for name, item in wanted.items()
    }
    problem = pose(model, sample, settings, groups, atmospheres)
    return fit_problem(problem, seed, quick=quick, thresholds=thresholds)


def simulate_sample(
    model: PopulationModel | str | Path, stars: int, *, seed: int, design: Design | None = None, **truth: float
) -> SyntheticSurvey:
    """Draw a synthetic survey with known truth.

    Parameters
    ----------
    model : PopulationModel, str or path
    stars : int
    seed : int
    design : Design, optional
        A sample whose limits, errors, covariates and selection are drawn again; default a built-in two-depth design.
    **truth : float
        Parameters by name; others are drawn from their priors.

    Returns
    -------
    SyntheticSurvey
        `.table` (DataFrame in the sample format) and `.truth` (dict).
    """
    if not isinstance(model, PopulationModel):
        model = load_model(model)
    return draw_survey(model, stars, seed, design=design, truth=truth)
