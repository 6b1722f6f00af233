"""Draws of (η, R, D) from their joint density, prior times likelihood of the product, by quadrature.

With logit η on a fine grid and (R, D) on a low-discrepancy design of equal weights, the marginal of η is
p(η) mean_j L(η R_j D_j); η is drawn from it by its inverse, then (R, D) by their weights at that η. The only errors are
those of the quadrature and of L.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.special
import scipy.stats

from ..errors import InferenceError
from .density import LogitDensity, logit_logpdf, logit_of
from .settings import TransferSettings

__all__ = ["DESIGN", "sample_joint"]

FloatArray = npt.NDArray[np.float64]

#: points of the design in (R, D); a power of two, as the Sobol sequence asks
DESIGN = 4096
#: nodes in logit η, of the first look and of the result
COARSE, FINE = 801, 1201
#: nodes with less than this share of the largest are left out of the fine grid
NEGLIGIBLE = 1e-9
#: draws used where η's own prior is given as draws
MOST_NODES = 2000


@dataclass(frozen=True)
class _Nodes:
    """Values of η with the log prior mass of each; `continuous` where they stand for a density."""

    logit: FloatArray
    log_mass: FloatArray
    continuous: bool


def sample_joint(
    transfer: TransferSettings, likelihood: LogitDensity, rng: np.random.Generator, draws: int
) -> dict[str, FloatArray]:
    """Draw (η, R, D) from prior times likelihood.

    Parameters
    ----------
    transfer : TransferSettings
        The priors.
    likelihood : LogitDensity
        Log likelihood of logit f by its `ratio_at`.
    rng : numpy.random.Generator
        Source of randomness.
    draws : int
        How many.

    Returns
    -------
    dict of ndarray, each of shape (draws,)
        `rocky_system_fraction`, `retention`, `delivery`.

    Raises
    ------
    InferenceError
        Where no value of η, R and D that the priors allow agrees with the data.
    """
    retention, delivery = _design(transfer, rng)
    product = retention * delivery
    nodes = _nodes(transfer.prior, likelihood, product, rng)
    log_joint = _log_likelihood(nodes.logit, product, likelihood)
    log_marginal = nodes.log_mass + scipy.special.logsumexp(log_joint, axis=1)
    if not np.any(np.isfinite(log_marginal)):
        raise InferenceError("the priors of [transfer] leave no value that agrees with the data")
    # strata keep the noise of the draws far below that of independent ones
    points = rng.permutation((np.arange(draws) + rng.random(draws)) / draws)
    logit, index = _invert(nodes, log_marginal, points)
    partner = _partners(log_joint, index, rng)
    return {
        "rocky_system_fraction": scipy.special.expit(logit),
        "retention": retention[partner],
        "delivery": delivery[partner],
    }


def _design(transfer: TransferSettings, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Points in (R, D) of equal prior mass; one point where both are fixed."""
    if transfer.retention.is_fixed and transfer.delivery.is_fixed:
        return np.array([transfer.retention.mean()]), np.array([transfer.delivery.mean()])
    unit = scipy.stats.qmc.Sobol(2, seed=rng).random(DESIGN)
    return _quantile(transfer.retention, unit[:, 0]), _quantile(transfer.delivery, unit[:, 1])


def _quantile(distribution: Any, unit: FloatArray) -> FloatArray:
    if distribution.is_fixed:
        return np.full(unit.size, distribution.mean())
    if distribution.family == "draws":
        return np.asarray(np.quantile(np.asarray(distribution.values), unit, method="inverted_cdf"), dtype=float)
    return np.asarray(distribution.frozen.ppf(unit), dtype=float)


def _nodes(prior: Any, likelihood: LogitDensity, product: FloatArray, rng: np.random.Generator) -> _Nodes:
    """Nodes in logit η where prior times likelihood is not negligible."""
    if prior.family == "draws":
        values = np.asarray(prior.values)
        if values.size > MOST_NODES:
            values = np.quantile(values, (np.arange(MOST_NODES) + 0.5) / MOST_NODES, method="inverted_cdf")
        return _Nodes(np.sort(logit_of(values)), np.full(values.size, -np.log(values.size)), continuous=False)
    density = logit_logpdf(prior)
    few = product if product.size == 1 else rng.choice(product, 256, replace=False)
    few = np.append(few, [product.min(), product.max()])
    low, high = _range(prior)
    for _ in range(3):
        coarse = np.linspace(low, high, COARSE)
        log_marginal = density(coarse) + scipy.special.logsumexp(_log_likelihood(coarse, few, likelihood), axis=1)
        kept = np.flatnonzero(log_marginal > np.max(log_marginal) + np.log(NEGLIGIBLE))
        if kept.size == 0:
            break
        low, high = coarse[max(kept[0] - 1, 0)], coarse[min(kept[-1] + 1, COARSE - 1)]
    fine = np.linspace(low, high, FINE)
    return _Nodes(fine, density(fine) + np.log(fine[1] - fine[0]), continuous=True)


def _range(prior: Any) -> tuple[float, float]:
    """Widest range of logit η that the prior reaches, but for 1e-12 of it on each side."""
    return float(logit_of(prior.frozen.ppf(1e-12))), float(logit_of(prior.frozen.isf(1e-12)))


def _log_likelihood(logit: FloatArray, product: FloatArray, likelihood: LogitDensity) -> FloatArray:
    """Log L at every node times every point, shape (nodes, points)."""
    eta = scipy.special.expit(logit)
    # in slices, so that the temporaries stay small beside the result
    slices = np.array_split(eta, max(1, eta.size * product.size // 400_000))
    return np.concatenate([likelihood.ratio_at(logit_of(part[:, None] * product[None, :])) for part in slices])


def _invert(nodes: _Nodes, log_marginal: FloatArray, points: FloatArray) -> tuple[FloatArray, npt.NDArray[np.intp]]:
    """Values of logit η at cumulative probabilities, and the node nearest to each."""
    mass = np.exp(log_marginal - log_marginal.max())
    if not nodes.continuous:
        total = np.cumsum(mass) / mass.sum()
        index = np.searchsorted(total, points).clip(max=mass.size - 1)
        return nodes.logit[index], index
    total = np.append(0.0, np.cumsum((mass[1:] + mass[:-1]) / 2))
    logit = np.interp(points, total / total[-1], nodes.logit)
    step = nodes.logit[1] - nodes.logit[0]
    index = np.rint((logit - nodes.logit[0]) / step).astype(np.intp)
    return logit, index


def _partners(log_joint: FloatArray, index: npt.NDArray[np.intp], rng: np.random.Generator) -> npt.NDArray[np.intp]:
    """For each draw of η a point of the design, by its weight at that η."""
    partner = np.empty(index.size, dtype=np.intp)
    for node in np.unique(index):
        mine = np.flatnonzero(index == node)
        weights = np.exp(log_joint[node] - log_joint[node].max())
        total = np.cumsum(weights)
        found = np.searchsorted(total / total[-1], rng.random(mine.size))
        partner[mine] = found.clip(max=weights.size - 1)
    return partner
