"""The fraction that is carried to planets: at which covariates, for which stars."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.special

from ..errors import Fault, InputError, nearest
from ..population import Problem
from ..population.parameters import DEBRIS_FRACTION, GROUP_SD, fraction_slope

__all__ = ["fraction_at"]

FloatArray = npt.NDArray[np.float64]
_PRIOR_DRAWS = 20_000


def fraction_at(
    problem: Problem, posterior: Mapping[str, FloatArray], at: Mapping[str, float]
) -> tuple[FloatArray, Any, str]:
    """Draws of the debris fraction at given covariates, with the prior that it had there.

    Parameters
    ----------
    problem : Problem
    posterior : mapping of str to ndarray, shape (S,)
        Draws by name as in the summary: `debris_fraction`, slopes, `group_sd`.
    at : mapping of str to float
        Covariate values; those not named stay at the reference.

    Returns
    -------
    draws : ndarray, shape (S,)
    prior : Distribution or ndarray
        The prior itself at the reference without groups, else draws from the prior.
    text : str
        To which stars the fraction refers.

    Raises
    ------
    InputError
        For a covariate that the model does not have.
    """
    acting = [item.name for item in problem.model.covariates if "fraction" in item.acts_on]
    for name in at:
        if name not in acting:
            raise InputError(
                Fault(
                    f"the model has no covariate '{name}' on the fraction",
                    where="key 'transfer.at'",
                    found=name,
                    allowed=", ".join(acting) or "nothing: the model has no such covariate",
                    remedy=nearest(name, acting) if acting else "remove 'at'",
                )
            )
    text = _describe(problem, acting, at)
    draws = posterior[DEBRIS_FRACTION]
    prior = problem.parameter(DEBRIS_FRACTION).prior
    shift = {name: value - problem.reference[name] for name, value in at.items()}
    if not problem.groups and not any(shift.values()):
        return draws, prior, text
    rng = np.random.default_rng(0)
    drawn = {item.name: item.sample_prior(rng, _PRIOR_DRAWS) for item in problem.parameters if item.size == 1}
    return _shifted(problem, posterior, shift, 1), _shifted(problem, drawn, shift, 2), text


def _shifted(
    problem: Problem, values: Mapping[str, FloatArray], shift: Mapping[str, float], seed: int
) -> FloatArray:
    odds = scipy.special.logit(np.clip(values[DEBRIS_FRACTION], 1e-15, 1 - 1e-15))
    for name, step in shift.items():
        odds = odds + values[fraction_slope(name)] * step
    if problem.groups:
        odds = odds + values[GROUP_SD] * np.random.default_rng(seed).standard_normal(len(odds))
    return np.asarray(scipy.special.expit(odds))


def _describe(problem: Problem, acting: list[str], at: Mapping[str, float]) -> str:
    parts = [f"{name} = {at.get(name, problem.reference[name]):.3g}" for name in acting]
    what = "fraction with warm dust" if problem.channels == ("excess",) else "debris fraction"
    where = (" at " + ", ".join(parts)) if parts else ""
    group = " in a group not yet seen" if problem.groups else ""
    atmosphere = " of stars with hydrogen atmospheres" if "fraction_offset[He]" in problem.model.priors else ""
    dust = "; delivery must then include the share of debris hosts with warm dust"
    dust = dust if problem.channels == ("excess",) else ""
    return f"{what}{atmosphere}{where}{group}; delivery must refer to the same stars{dust}"
