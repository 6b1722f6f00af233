"""Smooth densities of fractions from draws, on the logit scale, as tilts of a known density.

The density of t = logit f is written base(t) exp(s(t)), with s in the span of log f, log(1 − f) and, where the draws
ask for them, natural cubic splines in t; the coefficients maximise the likelihood of the draws (an exponential family:
Kooperberg & Stone 1991, Comput. Stat. Data Anal. 12, 327). With the prior of f as the base, s is the log likelihood of
f up to a constant, and it is exact for binomial data; unlike a kernel estimate it does not widen the posterior, and its
tails are straight lines in t.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.optimize
import scipy.special

from ..errors import InferenceError

__all__ = ["BetaFit", "LogitDensity", "beta_divergence", "fit_beta", "fit_density", "logit_logpdf", "logit_of"]

FloatArray = npt.NDArray[np.float64]
LogDensity = Callable[[FloatArray], FloatArray]

#: numbers of spline functions that are tried; the Bayesian information criterion chooses
SPLINES = (0, 2, 4, 6, 10)
#: fractions closer to 0 or 1 than a double can tell from them are moved to here
SMALLEST = 1e-300
LARGEST = 1.0 - 2.0**-53


@dataclass(frozen=True)
class LogitDensity:
    """A fitted density of t = logit f.

    Attributes
    ----------
    grid : ndarray, shape (points,)
        Values of t, rising.
    log_ratio : ndarray, shape (points,)
        s(t): log of the density over the base, up to a constant.
    log_mass : ndarray, shape (points,)
        Natural log of the probability that each grid point stands for; they sum to 1.
    log_total : float
        Natural log of the integral of base(t) exp(s(t)).
    splines : int
        Spline functions used besides log f and log(1 − f).
    misfit : float
        Largest distance between the fitted and the empirical distribution function.
    """

    grid: FloatArray
    log_ratio: FloatArray
    log_mass: FloatArray
    log_total: float
    splines: int
    misfit: float

    def ratio_at(self, t: npt.ArrayLike) -> FloatArray:
        """Return s at any t, in straight lines beyond the grid."""
        t = np.asarray(t, dtype=float)
        inside = np.interp(t, self.grid, self.log_ratio)
        low = (self.log_ratio[1] - self.log_ratio[0]) / (self.grid[1] - self.grid[0])
        high = (self.log_ratio[-1] - self.log_ratio[-2]) / (self.grid[-1] - self.grid[-2])
        below = np.minimum(t - self.grid[0], 0.0)
        above = np.maximum(t - self.grid[-1], 0.0)
        return np.asarray(inside + low * below + high * above, dtype=float)

    def expect(self, values: FloatArray) -> Any:
        """Expectation of a function given at the grid's points, along the last axis."""
        return values @ np.exp(self.log_mass)


@dataclass(frozen=True)
class BetaFit:
    """A Beta distribution fitted to draws by maximum likelihood.

    Attributes
    ----------
    alpha, beta : float
        Its parameters, both positive.
    divergence : float
        Estimated Kullback–Leibler divergence of the draws from the fit, in nats.
    """

    alpha: float
    beta: float
    divergence: float = 0.0


def logit_of(fraction: npt.ArrayLike) -> FloatArray:
    """Return logit f, finite also where f has been rounded to 0 or 1."""
    return np.asarray(scipy.special.logit(np.clip(np.asarray(fraction, dtype=float), SMALLEST, LARGEST)), dtype=float)


def logit_logpdf(distribution: Any) -> LogDensity:
    """Return the log density on the logit scale of a distribution of a fraction.

    Parameters
    ----------
    distribution : Distribution
        Any family with a density.

    Returns
    -------
    callable
        From t, any shape, to natural log density per unit t; minus infinity outside the support.
    """

    def density(t: FloatArray) -> FloatArray:
        log_f, log_rest = scipy.special.log_expit(t), scipy.special.log_expit(-t)
        if distribution.family == "beta":
            # written out, since 1 − f cannot be told from 0 above t = 37
            a, b = distribution.alpha, distribution.beta
            return np.asarray(a * log_f + b * log_rest - scipy.special.betaln(a, b), dtype=float)
        with np.errstate(divide="ignore"):
            inner = distribution.logpdf(scipy.special.expit(t))
        return np.asarray(np.where(np.isnan(inner), -np.inf, inner) + log_f + log_rest, dtype=float)

    return density


def standard_logistic(t: FloatArray) -> FloatArray:
    """Log density of t for f uniform on (0, 1)."""
    return np.asarray(scipy.special.log_expit(t) + scipy.special.log_expit(-t), dtype=float)


def fit_density(
    fraction: npt.ArrayLike, base: LogDensity = standard_logistic, *, splines: tuple[int, ...] = SPLINES
) -> LogitDensity:
    """Fit a smooth density to draws of a fraction.

    Parameters
    ----------
    fraction : array_like, shape (draws,)
        Draws in [0, 1], not all equal.
    base : callable, optional
        Log density on the logit scale that the fit tilts; of a uniform fraction by default.
    splines : tuple of int, optional
        Numbers of spline functions to try.

    Returns
    -------
    LogitDensity

    Raises
    ------
    InferenceError
        Where the base gives the draws no probability, or the draws do not vary.
    """
    t = np.sort(logit_of(fraction))
    if t.size < 2 or not t[-1] > t[0]:
        raise InferenceError("the draws of this fraction do not vary: no density can be fitted to them")
    centre, spread = float(np.median(t)), float(max(t.std(), 1e-8))
    u = np.linspace(-7.0, 7.0, 4001)
    # fine where the draws are, and far enough out that no tail is cut
    grid = centre + spread * np.sinh(u)
    with np.errstate(invalid="ignore"):
        log_base = base(grid) + np.log(spread * np.cosh(u) * (u[1] - u[0]))
    reachable = (grid >= t[0]) & (grid <= t[-1])
    if not np.any(np.isfinite(log_base[reachable])):
        raise InferenceError("the posterior draws of the fraction lie where its prior has no probability")
    fits = [_tilt(t, grid, log_base, count) for count in splines if count == 0 or t.size >= 100 * count]
    count, log_ratio, log_total, _ = min(fits, key=lambda item: item[3])
    log_mass = log_base + log_ratio - log_total
    return LogitDensity(grid, log_ratio, log_mass, log_total, count, _misfit(t, grid, log_mass))


def _tilt(t: FloatArray, grid: FloatArray, log_base: FloatArray, count: int) -> tuple[int, FloatArray, float, float]:
    """Fit with `count` splines: log ratio on the grid, log normaliser, information criterion."""
    # draws that repeat a few values give fewer knots
    knots = np.unique(np.quantile(t, np.linspace(0.005, 0.995, count + 2))) if count else np.empty(0)
    design = _basis(t, knots)
    mean = design.mean(axis=0)
    _, sizes, directions = np.linalg.svd((design - mean) / np.sqrt(t.size), full_matrices=False)
    kept = sizes > 1e-9 * sizes[0]
    whiten = directions[kept].T / sizes[kept]
    features = (_basis(grid, knots) - mean) @ whiten
    coefficients, log_total = _newton(features, log_base)
    criterion = 2 * t.size * log_total + features.shape[1] * np.log(t.size)
    return count, features @ coefficients, log_total, float(criterion)


def _basis(t: FloatArray, knots: FloatArray) -> FloatArray:
    """Values of log f, log(1 − f) and the natural cubic splines of `knots`, shape (points, functions)."""
    columns = [scipy.special.log_expit(t), scipy.special.log_expit(-t)]
    if knots.size > 2:
        x = (t - knots[0]) / (knots[-1] - knots[0])
        k = (knots - knots[0]) / (knots[-1] - knots[0])
        last = np.maximum(x - k[-1], 0.0) ** 3
        scaled = [(np.maximum(x - place, 0.0) ** 3 - last) / (k[-1] - place) for place in k[:-1]]
        columns += [item - scaled[-1] for item in scaled[:-1]]
    return np.stack(columns, axis=-1)


def _newton(features: FloatArray, log_base: FloatArray) -> tuple[FloatArray, float]:
    """Minimise log Σ exp(log_base + features·θ), convex, by damped Newton steps."""

    def total(theta: FloatArray) -> float:
        return float(scipy.special.logsumexp(log_base + features @ theta))

    theta = np.zeros(features.shape[1])
    value = total(theta)
    for _ in range(500):
        mass = np.exp(log_base + features @ theta - value)
        gradient = mass @ features
        if np.max(np.abs(gradient)) < 1e-10:
            break
        centred = features - gradient
        curvature = (centred * mass[:, None]).T @ centred
        curvature += 1e-10 * (np.trace(curvature) + 1e-300) * np.eye(theta.size)
        step = np.linalg.solve(curvature, gradient)
        scale = 1.0
        while scale > 1e-10 and not total(theta - scale * step) < value - 1e-4 * scale * float(gradient @ step):
            scale /= 2
        if scale <= 1e-10:
            break
        theta = theta - scale * step
        value = total(theta)
    return theta, value


def _misfit(t: FloatArray, grid: FloatArray, log_mass: FloatArray) -> float:
    mass = np.exp(log_mass)
    fitted = np.interp(t, grid, np.cumsum(mass) - mass / 2)
    steps = np.arange(t.size + 1) / t.size
    return float(max(np.max(np.abs(fitted - steps[1:])), np.max(np.abs(fitted - steps[:-1]))))


def fit_beta(fraction: npt.ArrayLike) -> BetaFit:
    """Fit a Beta distribution by maximum likelihood and estimate its divergence from the draws.

    Parameters
    ----------
    fraction : array_like, shape (draws,)
        Draws in (0, 1), not all equal.

    Returns
    -------
    BetaFit

    Raises
    ------
    InferenceError
        Where the draws do not vary.
    """
    t = logit_of(fraction)
    if not np.ptp(t) > 0:
        raise InferenceError("the draws of this fraction do not vary: no Beta distribution can be fitted to them")
    log_f, log_rest = scipy.special.log_expit(t).mean(), scipy.special.log_expit(-t).mean()

    def objective(logs: FloatArray) -> tuple[float, FloatArray]:
        a, b = np.exp(logs)
        common = scipy.special.digamma(a + b)
        value = scipy.special.betaln(a, b) - a * log_f - b * log_rest
        slope = [a * (scipy.special.digamma(a) - common - log_f), b * (scipy.special.digamma(b) - common - log_rest)]
        return float(value), np.array(slope)

    f = scipy.special.expit(t)
    size = max(f.mean() * (1 - f.mean()) / f.var() - 1, 1e-2)
    start = np.log([max(f.mean() * size, 1e-3), max((1 - f.mean()) * size, 1e-3)])
    found = scipy.optimize.minimize(objective, start, jac=True, method="L-BFGS-B", bounds=[(-12, 25)] * 2, tol=1e-13)
    # the minimum is flat to rounding well before the slope is zero; the root of the slope is sharp
    sharp = scipy.optimize.root(lambda logs: objective(logs)[1], found.x, tol=1e-13).x
    logs = sharp if objective(sharp)[0] <= found.fun + 1e-9 else found.x
    alpha, beta = (float(value) for value in np.exp(logs))
    return BetaFit(alpha, beta, beta_divergence(fraction, alpha, beta))


def beta_divergence(fraction: npt.ArrayLike, alpha: float, beta: float) -> float:
    """Estimate the Kullback–Leibler divergence of draws from a Beta distribution.

    Parameters
    ----------
    fraction : array_like, shape (draws,)
        Draws in (0, 1).
    alpha, beta : float
        Parameters of the Beta distribution.

    Returns
    -------
    float
        In nats, never negative; biased upwards by about 4/draws.
    """

    def base(t: FloatArray) -> FloatArray:
        log_f, log_rest = scipy.special.log_expit(t), scipy.special.log_expit(-t)
        return np.asarray(alpha * log_f + beta * log_rest - scipy.special.betaln(alpha, beta), dtype=float)

    count = 6 if np.size(fraction) >= 600 else 0
    fit = fit_density(fraction, base, splines=(count,))
    return max(0.0, float(np.mean(fit.ratio_at(logit_of(fraction)))) - fit.log_total)
