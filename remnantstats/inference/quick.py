"""The quick engine: mode, curvature, a proposal along the posterior's ridge, Pareto-smoothed importance weights.

No compiler is loaded. It serves a handful of parameters; its Pareto k̂ says when it does not.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import scipy.linalg
import scipy.optimize
import scipy.special

from ..errors import InferenceError
from ..population import Problem
from ..population.parameters import DEBRIS_FRACTION
from .pareto import smooth_weights
from .proposal import LogDensity, Mixture, Proposal, RidgeProposal, SplitStudent, fitted_mixture

__all__ = ["QuickDraws", "importance_draws", "mode_and_covariance", "starting_points"]

FloatArray = npt.NDArray[np.float64]

#: above this Pareto k̂ the weights cannot be trusted (Vehtari et al. 2024, JMLR 25, 72)
K_LIMIT = 0.7
#: below this a further round is not worth its time
_K_GOOD = 0.4
_EFFECTIVE_GOOD = 0.5
#: draws from which a further proposal is learnt
_LEARN = 2000
#: parameters up to which the ridge is traced: its cost grows with the square of their number
_CURVED_LIMIT = 12
#: share of the draws along the ridge; the rest guards against a ridge that was traced badly
_RIDGE_SHARE = 0.9
_STEP = 1e-4


@dataclass(frozen=True)
class QuickDraws:
    """Weighted draws from the posterior on the unconstrained scale.

    Attributes
    ----------
    u : ndarray, shape (S, dimension)
    log_weight : ndarray, shape (S,)
        Pareto-smoothed and normalised.
    k_hat : float
        Pareto k̂ of the raw weights.
    effective : float
        Effective number of draws, 1 / Σ w².
    mode : ndarray, shape (dimension,)
    covariance : ndarray, shape (dimension, dimension)
        Of the weighted draws: the spread of the whole posterior. From the curvature at the mode where not `usable`.
    evidence : float
        Log of the mean raw weight: the log marginal likelihood, up to the likelihood's own constant.
    """

    u: FloatArray
    log_weight: FloatArray
    k_hat: float
    effective: float
    mode: FloatArray
    covariance: FloatArray
    evidence: float

    @property
    def usable(self) -> bool:
        """Whether the weights can be trusted."""
        return bool(self.k_hat <= K_LIMIT)

    def resampled(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Equally weighted draws, by systematic resampling, shuffled."""
        positions = (rng.random() + np.arange(size)) / size
        cumulative = np.cumsum(np.exp(self.log_weight))
        index = np.searchsorted(cumulative / cumulative[-1], positions)
        return np.asarray(self.u[rng.permutation(np.minimum(index, len(self.u) - 1))])


def importance_draws(problem: Problem, rng: np.random.Generator, draws: int = 6000, rounds: int = 4) -> QuickDraws:
    """Draw from a posed model's posterior.

    The first proposal comes from mode and curvature, a Student-t with its own scale on either side of each axis. Where
    the debris fraction is free and parameters are few, most draws come from a proposal that follows the curved ridge of
    the posterior along the fraction. Where the weights have a heavy tail or few draws count, a mixture is fitted to the
    weighted draws and drawn from, up to `rounds` times.

    Parameters
    ----------
    problem : Problem
    rng : numpy.random.Generator
    draws : int
        Number of weighted draws.
    rounds : int
        Proposals at most.

    Returns
    -------
    QuickDraws

    Raises
    ------
    InferenceError
        Where the posterior has no finite mode.
    """
    mode, covariance = mode_and_covariance(problem.log_posterior, starting_points(problem))
    curved = problem.free[0].name == DEBRIS_FRACTION and problem.dimension <= _CURVED_LIMIT
    return _improved(problem.log_posterior, rng, mode, covariance, draws, rounds, curved)


def _improved(
    log_density: LogDensity,
    rng: np.random.Generator,
    mode: FloatArray,
    covariance: FloatArray,
    draws: int,
    rounds: int,
    curved: bool,
) -> QuickDraws:
    """Draw in rounds, and keep the draws with the lightest tail of weights."""
    parts: list[Proposal] = [SplitStudent.about(log_density, mode, covariance)]
    shares = [1.0]
    ridge = RidgeProposal.traced(log_density, mode, covariance) if curved else None
    if ridge is not None:
        parts, shares = [ridge, *parts], [_RIDGE_SHARE, 1 - _RIDGE_SHARE]
    best = current = _weighted(log_density, rng, Mixture(parts, shares), mode, draws)
    for _ in range(rounds - 1):
        if current.k_hat < _K_GOOD and current.effective > _EFFECTIVE_GOOD * draws:
            break
        learnt = fitted_mixture(best.resampled(rng, _LEARN), best.covariance)
        # the first proposals stay, so that what the fit has not seen is still reached
        wide = SplitStudent.about(log_density, mode, best.covariance)
        again = Mixture([learnt, wide, *parts], [0.5, 0.2, *(0.3 * share for share in shares)])
        current = _weighted(log_density, rng, again, mode, draws)
        best = max(best, current, key=_quality)
    # weights that cannot be trusted do not tell the spread either: a few of them may carry everything
    return best if best.usable else replace(best, covariance=covariance)


def _quality(found: QuickDraws) -> tuple[float, float]:
    """Lighter tails first; among light tails, more effective draws."""
    return -max(found.k_hat, _K_GOOD), found.effective


def mode_and_covariance(log_density: LogDensity, starts: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mode of a log density, and the inverse of its negative curvature there.

    Parameters
    ----------
    log_density : callable
        Takes points of shape (S, d), gives shape (S,).
    starts : ndarray, shape (k, d)
        Starting points; the best end point is taken.

    Returns
    -------
    mode : ndarray, shape (d,)
    covariance : ndarray, shape (d, d)

    Raises
    ------
    InferenceError
        Where no start leads to a finite mode.
    """
    start_values = log_density(starts)
    order = np.argsort(-np.where(np.isfinite(start_values), start_values, -np.inf))[:2]
    best_value, best = -np.inf, None
    for start in starts[order]:
        result = scipy.optimize.minimize(
            lambda u: -float(log_density(u[None, :])[0]),
            start,
            jac=lambda u: -_gradient(log_density, u),
            method="BFGS",
            options={"maxiter": 400, "gtol": 1e-3},
        )
        if np.isfinite(result.fun) and -result.fun > best_value:
            best_value, best = -result.fun, result.x
    if best is None:
        raise InferenceError("the posterior has no finite mode: check limits, errors and priors")
    return best, _regular(scipy.linalg.pinvh(_curvature(log_density, best)))


def starting_points(problem: Problem) -> FloatArray:
    """Starting points on the unconstrained scale: prior centres, and the detected values where there are some."""
    rng = np.random.default_rng(0)
    centre, spread = [], []
    for parameter in problem.free:
        drawn = parameter.unconstrain(parameter.sample_prior(rng, 200))
        centre += [float(np.median(drawn))] * parameter.size
        spread += [float(np.std(drawn))] * parameter.size
    base = np.array(centre)
    informed = base.copy()
    at = 0
    for parameter in problem.free:
        guess = _guess(problem, parameter.name)
        if guess is not None:
            informed[at] = float(parameter.unconstrain(guess))
        at += parameter.size
    nearby = informed + 0.3 * np.array(spread) * rng.standard_normal((6, len(base)))
    return np.vstack([informed, base, nearby])


def _guess(problem: Problem, name: str) -> float | None:
    for channel in problem.rows.channels.values():
        detected = np.isfinite(channel.value)
        prefix = "log_dust" if channel is problem.rows.channels.get("excess") else "log_accretion"
        if detected.sum() < 2:
            continue
        if name == f"mean_{prefix}":
            return float(np.mean(channel.value[detected]))
        if name == f"sd_{prefix}":
            return max(float(np.std(channel.value[detected])), 0.05)
    return None


def _gradient(log_density: LogDensity, u: FloatArray) -> FloatArray:
    steps = _STEP * np.eye(len(u))
    values = log_density(np.vstack([u + steps, u - steps]))
    return (values[: len(u)] - values[len(u) :]) / (2 * _STEP)


def _curvature(log_density: LogDensity, u: FloatArray) -> FloatArray:
    """Negative Hessian by central differences, all points evaluated in one call."""
    size, step = len(u), 3e-3
    pairs = [(i, j) for i in range(size) for j in range(i, size)]
    points = [u + step * (a * _unit(size, i) + b * _unit(size, j)) for i, j in pairs for a in (1, -1) for b in (1, -1)]
    values = log_density(np.array(points)).reshape(len(pairs), 4)
    hessian = np.empty((size, size))
    for (i, j), (pp, pm, mp, mm) in zip(pairs, values, strict=True):
        hessian[i, j] = hessian[j, i] = (pp - pm - mp + mm) / (4 * step**2)
    return -hessian


def _unit(size: int, i: int) -> FloatArray:
    unit = np.zeros(size)
    unit[i] = 1.0
    return unit


def _regular(matrix: FloatArray) -> FloatArray:
    """Nearest matrix with eigenvalues in a sane range: a flat direction must not send the proposal to infinity."""
    if not np.all(np.isfinite(matrix)):
        return np.eye(len(matrix))
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2)
    return np.asarray((vectors * np.clip(np.where(values > 0, values, 25.0), 1e-10, 25.0)) @ vectors.T)


def _weighted(
    log_density: LogDensity, rng: np.random.Generator, proposal: Proposal, mode: FloatArray, draws: int
) -> QuickDraws:
    """Draw from a proposal and weigh."""
    u = proposal.draw(rng, draws)
    raw = log_density(u) - proposal.log_density(u)
    raw = np.where(np.isfinite(raw), raw, -np.inf)
    if not np.any(np.isfinite(raw)):
        raise InferenceError("the quick engine found no point of finite posterior density")
    log_weight, k_hat = smooth_weights(raw)
    effective = float(1 / np.sum(np.exp(2 * log_weight)))
    evidence = float(scipy.special.logsumexp(raw) - np.log(draws))
    weight = np.exp(log_weight)
    deviation = u - weight @ u
    covariance = _regular((deviation * weight[:, None]).T @ deviation)
    return QuickDraws(u, log_weight, k_hat, effective, mode, covariance, evidence)
