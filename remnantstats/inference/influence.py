"""Influence of single stars, and conflict between prior and data."""

from __future__ import annotations

import logging
import warnings
from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from .checks import Check

__all__ = ["prior_conflict_check", "star_influence"]

FloatArray = npt.NDArray[np.float64]
_DRAWS = 2000
#: sensitivity above which power-scaling speaks of dependence (Kallioinen et al. 2024, Stat. Comput. 34, 57)
_SENSITIVE = 0.05


def star_influence(log_likelihood: FloatArray) -> FloatArray:
    """Leave-one-out Pareto k̂ of every star.

    Parameters
    ----------
    log_likelihood : ndarray, shape (S, n)

    Returns
    -------
    ndarray, shape (n,)
        Zero for stars that carry no information.
    """
    # imported here for start-up time alone
    from arviz_stats.base import array_stats

    step = max(1, len(log_likelihood) // _DRAWS)
    thinned = log_likelihood[::step]
    result = np.zeros(thinned.shape[1])
    moving = np.flatnonzero(np.ptp(thinned, axis=0) > 1e-9)
    for star in moving:
        # weights of leaving a star out are 1 / likelihood: the function takes the log-likelihood itself
        result[star] = float(array_stats.psislw(thinned[:, star] - thinned[:, star].min())[1])
    return result


def prior_conflict_check(tree: Any, quantities: Sequence[str]) -> Check:
    """Power-scaling check: does raising prior or likelihood to a power move the posterior?

    Parameters
    ----------
    tree : xarray.DataTree
        With groups posterior, log_likelihood and log_prior.
    quantities : sequence of str
        Names of scalar quantities.

    Returns
    -------
    Check
    """
    # imported here for start-up time alone
    import arviz_stats

    allowed = f"power-scaling sensitivity to prior and likelihood not both above {_SENSITIVE}"
    moving = [name for name in quantities if float(np.ptp(np.asarray(tree["posterior"][name]))) > 0]
    # the library also speaks of the result itself; the check's own words are enough
    speaker = logging.getLogger("arviz_stats")
    level = speaker.level
    speaker.setLevel(logging.ERROR)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            table = arviz_stats.psense_summary(tree, var_names=moving)
    finally:
        speaker.setLevel(level)
    conflict = [
        str(name)
        for name, row in table.iterrows()
        if float(row["prior"]) > _SENSITIVE and float(row["likelihood"]) > _SENSITIVE
    ]
    worst = float(table["prior"].astype(float).max()) if len(table) else 0.0
    text = "no conflict of prior and data"
    if conflict:
        text = "prior and data may be in conflict for " + ", ".join(conflict)
    return Check("prior and data agree", "warn" if conflict else "pass", worst, allowed, text)
