"""The occurrence prior: what the remnants say of planets, ready for use elsewhere."""

from __future__ import annotations

import html
import importlib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import xarray as xr

from ..errors import Fault, InputError
from .density import BetaFit, fit_beta
from .settings import Assumption

__all__ = ["QUANTITIES", "OccurrencePrior", "build_prior"]

FloatArray = npt.NDArray[np.float64]

#: the draws' quantities and what they mean
QUANTITIES: Mapping[str, str] = {
    "rocky_system_fraction": "share of progenitors with a rocky system",
    "retention": "share of rocky systems that outlast the giant phases",
    "delivery": "share of retained systems that feed the star now",
    "earthlike": "share of rocky systems with the planet sought",
    "earthlike_fraction": "share of stars with the planet sought",
}

#: probabilities of the summary's columns q05 … q95; q16 and q84 bound the central 68.27 %
SUMMARY_POINTS = {"q05": 0.05, "q16": 0.1587, "q50": 0.5, "q84": 0.8413, "q95": 0.95}


@dataclass(frozen=True, repr=False)
class OccurrencePrior:
    """Joint draws of the occurrence rates, with all that they rest on.

    Attributes
    ----------
    draws : xarray.Dataset, dimension draw
        `rocky_system_fraction`, `retention`, `delivery`, `earthlike`, `earthlike_fraction`: equally weighted.
    beta : BetaFit
        Beta distribution fitted to `rocky_system_fraction`.
    earthlike_beta : BetaFit or None
        The same for `earthlike_fraction`; None where some of its draws are zero.
    assumptions : tuple of Assumption
        Every factor with its basis.
    method : str
        ``"importance weights"`` or ``"joint model"``.
    k_hat : float
        Pareto k̂ of the importance weights, also where the joint model was sampled instead.
    effective_draws : float
        Independent draws that the result is worth.
    reference : str
        To what stars the transferred debris fraction refers.
    seed : int or None
        Seed of the draws, where one was given.
    notes, marks : tuple of str
        What a reader should know; what every output must be marked with.
    """

    draws: xr.Dataset
    beta: BetaFit
    earthlike_beta: BetaFit | None
    assumptions: tuple[Assumption, ...]
    method: str
    k_hat: float
    effective_draws: float
    reference: str = ""
    seed: int | None = None
    notes: tuple[str, ...] = ()
    marks: tuple[str, ...] = ()

    def values(self, name: str = "rocky_system_fraction") -> FloatArray:
        """Return the draws of a quantity, shape (draws,).

        Raises
        ------
        InputError
            For an unknown quantity.
        """
        if name not in self.draws:
            raise InputError(
                Fault(
                    f"no quantity '{name}' in the occurrence prior", allowed=", ".join(QUANTITIES), remedy="choose one"
                )
            )
        return np.asarray(self.draws[name].values, dtype=float)

    def quantile(self, q: npt.ArrayLike, name: str = "rocky_system_fraction") -> Any:
        """Return quantiles of a quantity.

        Parameters
        ----------
        q : float or array_like
            Probabilities in [0, 1].
        name : str, optional
            The quantity.

        Returns
        -------
        float or ndarray, shape of `q`

        Raises
        ------
        InputError
            For an unknown quantity or a probability outside [0, 1].
        """
        asked = np.asarray(q, dtype=float)
        if not np.all((asked >= 0) & (asked <= 1)):
            raise InputError(Fault("a probability lies outside 0 to 1", found=repr(q)[:80], allowed="0 ≤ q ≤ 1"))
        return np.quantile(self.values(name), asked)

    def summary(self) -> pd.DataFrame:
        """Return a row a quantity: mean, sd and quantiles."""
        rows = []
        for name in QUANTITIES:
            values = self.values(name)
            points = np.quantile(values, list(SUMMARY_POINTS.values()))
            row = {"quantity": name, "mean": values.mean(), "sd": values.std(ddof=1)}
            rows.append(row | dict(zip(SUMMARY_POINTS, points, strict=True)))
        return pd.DataFrame(rows)

    def to_pymc(self, name: str, quantity: str = "rocky_system_fraction") -> Any:
        """Add the fitted Beta distribution to the PyMC model that is open.

        Parameters
        ----------
        name : str
            Name of the new variable.
        quantity : str, optional
            ``"rocky_system_fraction"`` or ``"earthlike_fraction"``.

        Returns
        -------
        pymc.Beta
            The variable. Check `beta.divergence`: the draws may not be a Beta distribution.

        Raises
        ------
        InputError
            Where no Beta distribution was fitted to the quantity.
        """
        fits = {"rocky_system_fraction": self.beta, "earthlike_fraction": self.earthlike_beta}
        fit = fits.get(quantity)
        if fit is None:
            raise InputError(
                Fault(
                    f"no Beta distribution is fitted to '{quantity}'",
                    allowed=", ".join(key for key, value in fits.items() if value is not None),
                    remedy="use the draws",
                )
            )
        # who calls this has a PyMC model open; for all others the package stays free of its start-up time
        pymc = importlib.import_module("pymc")
        return pymc.Beta(name, alpha=fit.alpha, beta=fit.beta)

    def __repr__(self) -> str:
        low, mid, high = self.quantile([0.05, 0.5, 0.95])
        lines = [
            f"OccurrencePrior: {self.draws.sizes['draw']} draws by {self.method}",
            f"  rocky_system_fraction {mid:.3g} ({low:.3g} to {high:.3g}, 5–95 %)",
            f"  near Beta({self.beta.alpha:.4g}, {self.beta.beta:.4g}), {self.beta.divergence:.2g} nats from the draws",
        ]
        return "\n".join(lines + [f"  {text}" for text in (*self.marks, *self.notes)])

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{html.escape(item.name)}</td><td>{html.escape(item.description)}</td>"
            f"<td>{html.escape(item.basis)}</td></tr>"
            for item in self.assumptions
        )
        table = self.summary().to_html(index=False, float_format=lambda value: f"{value:.4g}")
        head = "<tr><th>factor</th><th>assumed</th><th>basis</th></tr>"
        return f"<pre>{html.escape(repr(self))}</pre>{table}<table>{head}{rows}</table>"


def build_prior(draws: Mapping[str, FloatArray], **rest: Any) -> OccurrencePrior:
    """Put draws of η, R, D and h together, with the product ηh and the fitted Beta distributions.

    Parameters
    ----------
    draws : mapping
        `rocky_system_fraction`, `retention`, `delivery`, `earthlike`, each of shape (draws,).
    **rest
        The other attributes of `OccurrencePrior`, but for the fits.

    Returns
    -------
    OccurrencePrior
    """
    found = dict(draws)
    found["earthlike_fraction"] = found["rocky_system_fraction"] * found["earthlike"]
    beta = fit_beta(found["rocky_system_fraction"])
    product: BetaFit | None = beta
    if np.any(found["earthlike_fraction"] == 0):
        product = None
    elif np.any(found["earthlike"] != 1):
        product = fit_beta(found["earthlike_fraction"])
    return OccurrencePrior(draws=as_dataset(found), beta=beta, earthlike_beta=product, **rest)


def as_dataset(draws: Mapping[str, FloatArray]) -> xr.Dataset:
    """Return draws as a dataset with their meaning as attributes."""
    return xr.Dataset(
        {name: ("draw", draws[name], {"long_name": QUANTITIES[name], "units": "1"}) for name in QUANTITIES}
    )
