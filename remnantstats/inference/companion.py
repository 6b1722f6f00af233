"""Non-parametric companion: the fraction above a threshold without an assumed distribution.

A visual check beside the parametric posterior, not an estimate of record: it knows neither errors, nor ceilings, nor
spurious detections.
"""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd

from ..population import Problem
from ..population.rows import DETECTED, DOUBTFUL, UNOBSERVED

__all__ = ["fraction_above_steps"]

#: log values are moved up by this much: the survival library wants positive numbers
_SHIFT = 100.0


def fraction_above_steps(problem: Problem, channel: str) -> pd.DataFrame:
    """Step function of the share of stars above each value, limits taken as left-censored.

    Parameters
    ----------
    problem : Problem
    channel : {"pollution", "excess"}

    Returns
    -------
    pandas.DataFrame
        Columns `value` (log10), `fraction`, `low`, `high` (95 % pointwise interval); blind observed stars alone.
        Between two rows the fraction is that of the lower one. Below the deepest limit it is not determined.

    Notes
    -----
    Kaplan & Meier 1958, J. Am. Stat. Assoc. 53, 457, for left-censored values (detections and upper limits); with one
    limit a star and limits that differ from star to star. The estimate is right where the limit of a star tells nothing
    of its rate.
    """
    # imported here for start-up time alone
    from lifelines import KaplanMeierFitter

    rows = problem.rows.channels[channel]
    detected = np.isin(rows.outcome, (DETECTED, DOUBTFUL))
    use = problem.rows.blind & (rows.outcome != UNOBSERVED) & (detected | np.isfinite(rows.limit))
    if not (use & detected).any():
        return pd.DataFrame({"value": [], "fraction": [], "low": [], "high": []})
    value = np.where(detected, rows.value, rows.limit)[use] + _SHIFT
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        fitter = KaplanMeierFitter().fit_left_censoring(value, event_observed=detected[use])
    below = fitter.cumulative_density_.iloc[:, 0]
    interval = fitter.confidence_interval_cumulative_density_
    table = pd.DataFrame(
        {
            "value": below.index.to_numpy(dtype=float) - _SHIFT,
            "fraction": 1.0 - below.to_numpy(),
            "low": 1.0 - interval.max(axis=1).to_numpy(),
            "high": 1.0 - interval.min(axis=1).to_numpy(),
        }
    )
    return table[table["value"] > -_SHIFT / 2].reset_index(drop=True)
