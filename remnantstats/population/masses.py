"""Progenitor mass as a latent covariate: each star's own posterior as a few Gauss nodes."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.special

from ..catalog import Sample
from ..errors import Fault, ModelError
from ..physics import initial_final as relation

__all__ = ["PROGENITOR_MASS", "gauss_nodes", "progenitor_posterior"]

FloatArray = npt.NDArray[np.float64]

PROGENITOR_MASS = "progenitor_mass"
#: nodes per star: exact for polynomials of the mass to degree 2K − 1
_K = 9


def progenitor_posterior(
    sample: Sample, slope: float = relation.MASS_FUNCTION_SLOPE, scatter: float = relation.SCATTER
) -> tuple[FloatArray, FloatArray] | None:
    """Nodes and log weights of every star's initial mass.

    The mass is latent with the prior p(M) ∝ M^slope on 0.83–7.2 Msun, times the likelihood of the tabulated progenitor
    mass, or of the remnant's mass through the initial–final relation with its scatter.

    Parameters
    ----------
    sample : Sample
    slope : float, optional
        Slope of the initial mass function.
    scatter : float, optional
        Scatter of the relation, Msun.

    Returns
    -------
    nodes, log_weights : ndarray, shape (n, K), Msun
        None where the table gives progenitor masses without errors: they are then taken as exact.

    Raises
    ------
    ModelError
        Where a star has neither mass with its error, or a mass outside the relation by more than 3σ.
    """
    table = sample.table
    mass = _column(table, PROGENITOR_MASS)
    error = _column(table, f"{PROGENITOR_MASS}_err")
    remnant, remnant_error = _column(table, "mass"), _column(table, "mass_err")
    direct = np.isfinite(mass)
    if direct.all() and not (error > 0).any():
        return None
    lacking = np.where(direct, ~(error > 0), ~(np.isfinite(remnant) & (remnant_error > 0)))
    _refuse(
        sample, lacking,
        "have no progenitor mass with its error, and no remnant mass with its error",
        "progenitor_mass and progenitor_mass_err, or mass and mass_err, for every star (or no errors at all)",
    )
    reach = 3 * np.where(direct, error, 0.0)
    beyond = direct & ((mass + reach < relation.BREAKS[0]) | (mass - reach > relation.BREAKS[-1]))
    beyond |= ~direct & relation.outside_relation(remnant, remnant_error, scatter)
    _refuse(
        sample, beyond, "lie outside the initial–final mass relation by more than 3σ",
        f"progenitors of {relation.BREAKS[0]} to {relation.BREAKS[-1]} Msun",
    )
    grid, weight = relation.progenitor_nodes(96)
    model = np.where(direct[:, None], grid[None, :], relation.remnant_mass(grid)[None, :])
    centre = np.where(direct, mass, remnant)[:, None]
    sd = np.where(direct, error, np.hypot(remnant_error, scatter))[:, None]
    log_density = slope * np.log(grid) + np.log(weight) - 0.5 * ((centre - model) / sd) ** 2
    log_density -= scipy.special.logsumexp(log_density, axis=1, keepdims=True)
    return gauss_nodes(grid, np.exp(log_density), _K)


def _column(table: pd.DataFrame, name: str) -> FloatArray:
    if name not in table:
        return np.full(len(table), np.nan)
    return np.asarray(table[name], dtype=np.float64)


def _refuse(sample: Sample, bad: npt.NDArray[np.bool_], what: str, allowed: str) -> None:
    rows = np.flatnonzero(bad)
    if rows.size:
        raise ModelError(
            Fault(
                f"{rows.size} stars {what}",
                where="; ".join(sample.place(int(row)) for row in rows[:5]),
                allowed=allowed,
                remedy="complete or correct these rows, or leave these stars out",
            )
        )


def gauss_nodes(grid: FloatArray, weight: FloatArray, k: int) -> tuple[FloatArray, FloatArray]:
    """Gauss quadrature of discrete measures, one a row.

    Parameters
    ----------
    grid : ndarray, shape (g,)
        Points.
    weight : ndarray, shape (n, g)
        Weights of each measure; each row sums to 1.
    k : int
        Nodes wanted.

    Returns
    -------
    nodes, log_weights : ndarray, shape (n, k)
        Integrate polynomials to degree 2k − 1 as the measure does.

    Notes
    -----
    Stieltjes recurrence, then the eigenvalues of the Jacobi matrix (Golub & Welsch 1969, Math. Comp. 23, 221).
    """
    mean = weight @ grid
    sd = np.sqrt(np.maximum(weight @ grid**2 - mean**2, 1e-12))
    x = (grid[None, :] - mean[:, None]) / sd[:, None]
    before, now = np.zeros_like(x), np.ones_like(x)
    alpha, beta = np.zeros((len(weight), k)), np.zeros((len(weight), k))
    norm_before = np.ones(len(weight))
    for step in range(k):
        norm = (weight * now**2).sum(axis=1)
        alpha[:, step] = (weight * x * now**2).sum(axis=1) / norm
        beta[:, step] = norm / norm_before
        before, now = now, (x - alpha[:, step, None]) * now - (beta[:, step, None] if step else 0.0) * before
        norm_before = norm
    jacobi = np.zeros((len(weight), k, k))
    index = np.arange(k)
    jacobi[:, index, index] = alpha
    side = np.sqrt(np.maximum(beta[:, 1:], 0.0))
    jacobi[:, index[1:], index[:-1]] = side
    jacobi[:, index[:-1], index[1:]] = side
    values, vectors = np.linalg.eigh(jacobi)
    log_weight = np.log(np.maximum(vectors[:, 0, :] ** 2, 1e-300))
    return mean[:, None] + sd[:, None] * values, log_weight
