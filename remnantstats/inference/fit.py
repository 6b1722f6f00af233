"""The result of an inference."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from html import escape
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..catalog import Sample
from ..population import PopulationModel, Problem
from ..population.parameters import DEBRIS_FRACTION
from ..population.quantities import fraction_name
from .checks import Check, verdict
from .predictive import Predictive
from .reference import fraction_at

__all__ = ["Fit"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, repr=False)
class Fit:
    """A posterior with its checks.

    Attributes
    ----------
    posterior : xarray.DataTree
        Groups in the ArviZ schema: posterior, sample_stats, log_likelihood, log_prior, prior, posterior_predictive,
        observed_data, constant_data.
    problem : Problem
        The model posed on the sample.
    table : pandas.DataFrame
        A row a quantity: `quantity, mean, sd, q05, q16, q50, q84, q95, ess_bulk, ess_tail, r_hat`.
    checks : tuple of Check
    stars : pandas.DataFrame
        A row a star.
    completeness : pandas.DataFrame
    predictive : Predictive
    engine : {"full", "quick"}
    seed : int
    notes : tuple of str
        What was imputed or assumed on the way.
    timings : dict
        Seconds by stage.
    """

    posterior: Any
    problem: Problem
    table: pd.DataFrame
    checks: tuple[Check, ...]
    stars: pd.DataFrame
    completeness: pd.DataFrame
    predictive: Predictive
    engine: str
    seed: int
    notes: tuple[str, ...]
    timings: dict[str, float]

    @property
    def sample(self) -> Sample:
        """The sample."""
        return self.problem.sample

    @property
    def model(self) -> PopulationModel:
        """The population model."""
        return self.problem.model

    @property
    def verdict(self) -> str:
        """Worst verdict of the checks: pass, warn or fail."""
        return verdict(self.checks)

    @property
    def marks(self) -> tuple[str, ...]:
        """What every output of this fit must carry."""
        found = ["quick look: importance sampling, not the engine of record"] if self.engine == "quick" else []
        failed = [check for check in self.checks if check.verdict == "fail"]
        found += [f"unreliable: {check.name} failed ({check.message})" for check in failed]
        return tuple(found)

    @property
    def fraction(self) -> str:
        """Name of the fraction: `debris_fraction`, or `dusty_fraction` in an infrared-only study."""
        return fraction_name(self.problem)

    def transferred(self, at: Mapping[str, float] | None = None) -> tuple[FloatArray, Any, str]:
        """Draws of the fraction that is carried to planets, its prior, and to which stars it refers.

        Parameters
        ----------
        at : mapping of str to float, optional
            Covariate values; default the reference.

        Returns
        -------
        draws : ndarray, shape (S,)
        prior : Distribution or ndarray
        text : str
        """
        wanted = [item.name for item in self.problem.parameters if item.size == 1]
        posterior = {name: self.draws(self.fraction if name == DEBRIS_FRACTION else name) for name in wanted}
        return fraction_at(self.problem, posterior, at or {})

    @property
    def fraction_prior(self) -> Any:
        """Prior of the fraction that is carried to planets, or draws from it."""
        return self.transferred()[1]

    def fraction_draws(self) -> FloatArray:
        """Posterior draws of the fraction that is carried to planets; shape (S,)."""
        return self.transferred()[0]

    def draws(self, quantity: str) -> FloatArray:
        """Posterior draws of a quantity named as in the summary, chains end to end; shape (S,)."""
        stem, _, label = quantity.partition("[")
        values = self.posterior["posterior"][stem]
        if not label:
            return np.asarray(values).reshape(-1)
        dim = values.dims[-1]
        labels = [item if isinstance(item, str) else f"{float(item):g}" for item in values[dim].to_numpy().tolist()]
        return np.asarray(values.isel({dim: labels.index(label[:-1])})).reshape(-1)

    def summary(self) -> pd.DataFrame:
        """A row a quantity, as in `summary.csv`."""
        return self.table.copy()

    def __repr__(self) -> str:
        row = self.table.iloc[0]
        lines = [
            f"Fit of '{self.model.name}' to {len(self.sample)} stars ({self.engine} engine): {self.verdict}",
            f"  {row.quantity} = {row.q50:.3f} (+{row.q84 - row.q50:.3f} −{row.q50 - row.q16:.3f})",
        ]
        lines += [f"  {mark}" for mark in self.marks]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        head = escape(repr(self).splitlines()[0])
        table: str = self.table.to_html(index=False, float_format=lambda x: f"{x:.4g}")
        return f"<p>{head}</p>{table}"
