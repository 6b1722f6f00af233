"""Several models of one sample: leave-one-out comparison and stacking."""

from __future__ import annotations

import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from inspect import signature
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from .checks import LIMITS
from .fit import Fit

__all__ = ["Comparison", "compare"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Comparison:
    """Models side by side.

    Attributes
    ----------
    table : pandas.DataFrame
        A row a model, best first, and a last row for the stacked mixture: `model, elpd, elpd_se, p_loo,
        elpd_difference, difference_se, weight, worst_k, stars_above_k`, and the fraction's `mean, q05, q16, q50, q84,
        q95`.
    weights : dict of str to float
        Stacking weights.
    fraction : ndarray, shape (S,)
        Draws of the fraction under the stacked mixture.
    above : pandas.DataFrame
        Fractions above each threshold under each model and stacked: `model, quantity, q05, q16, q50, q84, q95`.
    """

    table: pd.DataFrame
    weights: dict[str, float]
    fraction: FloatArray
    above: pd.DataFrame

    @property
    def stacked(self) -> pd.Series:
        """The row of the stacked mixture."""
        return self.table.iloc[-1]


def compare(fits: Sequence[Fit], seed: int) -> Comparison:
    """Compare fits of the same sample.

    Parameters
    ----------
    fits : sequence of Fit
        At least two, of different models.
    seed : int
        For the draws of the stacked mixture.

    Returns
    -------
    Comparison

    Notes
    -----
    Pareto-smoothed leave-one-out cross-validation: Vehtari, Gelman & Gabry 2017, Stat. Comput. 27, 1413. Stacking: Yao,
    Vehtari, Simpson & Gelman 2018, Bayesian Anal. 13, 917.
    """
    results = {fit.model.name: _leave_one_out(fit) for fit in fits}
    pointwise: list[FloatArray] = []
    rows: list[dict[str, Any]] = []
    for fit in fits:
        result = results[fit.model.name]
        elpd = np.asarray(result.elpd_i).reshape(-1)
        k_hat = np.nan_to_num(np.asarray(result.pareto_k).reshape(-1), nan=0.0)
        pointwise.append(elpd)
        rows.append(
            {
                "model": fit.model.name,
                "elpd": float(elpd.sum()),
                "elpd_se": float(np.sqrt(len(elpd)) * elpd.std()),
                "p_loo": float(result.p),
                "worst_k": float(k_hat.max()),
                "stars_above_k": int((k_hat > LIMITS.pareto_k).sum()),
            }
        )
    weights = _stacking(results)
    best = int(np.argmax([row["elpd"] for row in rows]))
    for row, elpd, weight, fit in zip(rows, pointwise, weights, fits, strict=True):
        gap = elpd - pointwise[best]
        row["elpd_difference"] = float(gap.sum())
        row["difference_se"] = float(np.sqrt(len(gap)) * gap.std())
        row["weight"] = float(weight)
        row.update(_points(fit.draws(fit.fraction)))
    rng = np.random.default_rng([seed, 41])
    named = {fit.model.name: float(weight) for fit, weight in zip(fits, weights, strict=True)}
    fraction = _mixture([fit.draws(fit.fraction) for fit in fits], weights, rng)
    table = pd.DataFrame(rows).sort_values("elpd", ascending=False, ignore_index=True)
    table = pd.concat([table, pd.DataFrame([{"model": "stacked", **_points(fraction)}])], ignore_index=True)
    return Comparison(table, named, fraction, _above(fits, weights, rng))


def _leave_one_out(fit: Fit) -> Any:
    # imported here for start-up time alone
    import arviz_stats

    with warnings.catch_warnings():
        # stars of high influence are counted in the table
        warnings.simplefilter("ignore")
        return arviz_stats.loo(fit.posterior, pointwise=True)


def _stacking(results: Mapping[str, Any]) -> FloatArray:
    """Stacking weights, in the order of `results`."""
    # imported here for start-up time alone
    import arviz_stats

    # the newer of the two library stacks rounds its table unless told not to
    options = {"round_to": "none"} if "round_to" in signature(arviz_stats.compare).parameters else {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        table = arviz_stats.compare(dict(results), method="stacking", **options)
    weight = np.array([float(table.loc[name, "weight"]) for name in results])
    return np.asarray(weight / weight.sum())


def _mixture(draws: Sequence[FloatArray], weights: FloatArray, rng: np.random.Generator) -> FloatArray:
    size = min(len(item) for item in draws)
    which = rng.choice(len(draws), size=size, p=weights)
    return np.array([rng.choice(draws[index]) for index in which])


def _points(draws: FloatArray) -> dict[str, float]:
    points = np.quantile(draws, [0.05, 0.1587, 0.5, 0.8413, 0.95])
    names = ("q05", "q16", "q50", "q84", "q95")
    return {"mean": float(draws.mean()), **dict(zip(names, map(float, points), strict=True))}


def _above(fits: Sequence[Fit], weights: FloatArray, rng: np.random.Generator) -> pd.DataFrame:
    names = [name for name in fits[0].table["quantity"] if "_above[" in name]
    rows: list[dict[str, Any]] = []
    for name in names:
        draws = [fit.draws(name) for fit in fits]
        for fit, values in zip(fits, draws, strict=True):
            rows.append({"model": fit.model.name, "quantity": name, **_points(values)})
        rows.append({"model": "stacked", "quantity": name, **_points(_mixture(draws, weights, rng))})
    return pd.DataFrame(rows)
