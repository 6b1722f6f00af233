"""Chances of finding none, one or many planets, mixed over the draws of the occurrence."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.special

from ..occurrence.density import fit_density

__all__ = ["NoneFound", "none_found", "planets_found"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

#: relative Monte Carlo error of P(none) above which a fitted density takes the draws' place
LARGEST_ERROR = 0.05
#: draws that represent the occurrence in the yield's distribution
YIELD_DRAWS = 400
#: elements of a temporary array
CHUNK = 2_000_000


@dataclass(frozen=True)
class NoneFound:
    """Probability of finding no planet after 1, 2, … targets.

    Attributes
    ----------
    probability : ndarray, shape (targets,)
        E[Π (1 − q c_j)] over the occurrence q; never rising.
    error : ndarray, shape (targets,)
        Monte Carlo standard error of the mean over draws.
    naive : ndarray, shape (targets,)
        The product at the mean occurrence, which promises too much.
    from_draws : ndarray of bool, shape (targets,)
        False where the fitted density was used.
    fit : str
        Name of that density; empty where it was not needed or there is none.
    """

    probability: FloatArray
    error: FloatArray
    naive: FloatArray
    from_draws: npt.NDArray[np.bool_]
    fit: str


def none_found(occurrence: FloatArray, completeness: FloatArray, effective_draws: float) -> NoneFound:
    """Compute the probability of finding none, target by target.

    Parameters
    ----------
    occurrence : ndarray, shape (draws,)
        Draws of the share of stars with the planet sought, in [0, 1].
    completeness : ndarray, shape (targets,)
        Of each target, in the order of observation, in (0, 1].
    effective_draws : float
        Independent draws that `occurrence` is worth.

    Returns
    -------
    NoneFound
    """
    equal = np.full(occurrence.size, 1.0 / occurrence.size)
    mean, square = _expectations(occurrence, equal, completeness)
    error = np.sqrt(np.maximum(square - mean**2, 0.0) / effective_draws)
    naive = np.exp(np.cumsum(_log_miss(completeness * occurrence.mean())))
    rough = (error > LARGEST_ERROR * mean) & (mean > 0)
    # an occurrence of exactly zero has no density near it; P(none) then ends at its probability, without noise
    if not np.any(rough) or np.any(occurrence == 0) or not np.ptp(occurrence) > 0:
        return NoneFound(mean, error, naive, np.ones(mean.size, dtype=bool), "")
    from_draws = np.arange(mean.size) < int(np.argmax(rough))
    fitted, name = _from_fit(occurrence, completeness)
    probability = np.minimum.accumulate(np.where(from_draws, mean, fitted))
    return NoneFound(probability, error, naive, from_draws, name)


def _log_miss(chance: FloatArray) -> FloatArray:
    """log(1 − chance), minus infinity for a chance of 1."""
    with np.errstate(divide="ignore"):
        return np.asarray(np.log1p(-chance), dtype=float)


def _expectations(q: FloatArray, weights: FloatArray, completeness: FloatArray) -> tuple[FloatArray, FloatArray]:
    """First and second moment of Π (1 − q c_j) after each target."""
    mean, square = np.empty(completeness.size), np.empty(completeness.size)
    total = np.zeros(q.size)
    step = max(1, CHUNK // q.size)
    for start in range(0, completeness.size, step):
        part = completeness[start : start + step]
        logs = total + np.cumsum(_log_miss(part[:, None] * q), axis=0)
        mean[start : start + step] = np.exp(logs) @ weights
        square[start : start + step] = np.exp(2 * logs) @ weights
        total = logs[-1]
    # weights that sum to 1 but for rounding must not make a probability above 1
    return np.minimum(mean, 1.0), square


def _from_fit(occurrence: FloatArray, completeness: FloatArray) -> tuple[FloatArray, str]:
    """P(none) under a smooth density fitted to the draws, and the density's name."""
    fit = fit_density(occurrence)
    mean, _ = _expectations(scipy.special.expit(fit.grid), np.exp(fit.log_mass), completeness)
    name = "fitted Beta" if fit.splines == 0 else "fitted Beta times a spline"
    return mean, name


def planets_found(
    occurrence: FloatArray, completeness: FloatArray, probabilities: tuple[float, ...] = (0.05, 0.5, 0.95)
) -> IntArray:
    """Compute quantiles of the number of planets found, after each target.

    The number is a mixture, over the occurrence, of sums of independent trials (Poisson-binomial); the occurrence is
    represented by 400 of its quantiles.

    Parameters
    ----------
    occurrence : ndarray, shape (draws,)
        As in `none_found`.
    completeness : ndarray, shape (targets,)
        As in `none_found`.
    probabilities : tuple of float, optional
        Of the quantiles.

    Returns
    -------
    ndarray of int, shape (targets, probabilities)
        The smallest number that is not exceeded with at least that probability.
    """
    q = np.quantile(occurrence, (np.arange(YIELD_DRAWS) + 0.5) / YIELD_DRAWS)
    asked = np.asarray(probabilities)
    result = np.zeros((completeness.size, asked.size), dtype=np.int64)
    # chance of k planets, by row k, for each occurrence
    chance = np.zeros((64, q.size))
    chance[0] = 1.0
    top = 0
    for index, c in enumerate(completeness):
        hit = q * c
        if top + 2 > chance.shape[0]:
            chance = np.concatenate([chance, np.zeros_like(chance)])
        moved = chance[: top + 1] * hit
        chance[: top + 1] *= 1 - hit
        chance[1 : top + 2] += moved
        # counts that no occurrence reaches with a chance worth keeping are never grown into
        top = top + 1 if np.max(chance[top + 1]) > 1e-15 else top
        cumulative = np.cumsum(chance[: top + 1].mean(axis=1))
        result[index] = np.searchsorted(cumulative, asked - 1e-12).clip(max=top)
    return result
