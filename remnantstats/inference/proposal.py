"""Proposals for importance sampling: a split Student-t, and one that follows a curved ridge.

A posterior of a fraction and of a distribution that is only seen above limits is a banana: a larger fraction goes with
fainter hosts and a wider spread. An ellipsoid about the mode misses its thin end, and the weights cannot tell. So the
first coordinate is drawn from its approximate marginal (Tierney & Kadane 1986, JASA 81, 82), and the others from a
Student-t about their conditional mode, which is traced along the first: a mixture of Student-t components along the
profile, taken to the limit of dense nodes.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Protocol

import numpy as np
import numpy.typing as npt
import scipy.interpolate
import scipy.special

__all__ = ["LogDensity", "Mixture", "Proposal", "RidgeProposal", "SplitStudent", "fitted_mixture"]

FloatArray = npt.NDArray[np.float64]
LogDensity = Callable[[FloatArray], FloatArray]

_DF = 5.0
_WIDEN = 1.1
#: where the fall of the density is looked at, in standard deviations
_LOOK = (1.0, 2.0, 4.0, 7.0)
#: fall of the log marginal at which the ridge ends, nodes at most on either side, growth of their spacing
_FALL = 10.0
_NODES = 12
_GROWTH = 1.2
#: the marginal is flattened a little, so that weights fall outwards
_TEMPER = 0.9
#: components of a fitted mixture at most, draws behind each parameter of a component at least, steps of the fit
_COMPONENTS = 8
_BEHIND = 8
_EM_STEPS = 12
#: step of numeric derivatives and longest Newton step, in conditional standard deviations
_DELTA = 0.1
_LONGEST = 3.0


class Proposal(Protocol):
    """A density that can be drawn from."""

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draws, shape (size, d)."""

    def log_density(self, u: FloatArray) -> FloatArray:
        """Log density, shape (S,)."""


def _unit_draws(rng: np.random.Generator, scales: FloatArray, size: int) -> FloatArray:
    """Split Student-t about 0; `scales` broadcasts to (2, size, d): upward and downward."""
    dimension = scales.shape[-1]
    normal = rng.standard_normal((size, dimension)) * np.sqrt(_DF / rng.chisquare(_DF, size))[:, None]
    # the sides carry mass in proportion to their scales, so that the density is continuous at the centre
    upward = rng.random((size, dimension)) < scales[0] / scales.sum(axis=0)
    return np.asarray(np.where(upward, scales[0], -scales[1]) * np.abs(normal))


def _unit_density(z: FloatArray, scales: FloatArray) -> FloatArray:
    size = z.shape[1]
    constant = scipy.special.gammaln((_DF + size) / 2) - scipy.special.gammaln(_DF / 2)
    constant -= 0.5 * size * np.log(_DF * np.pi)
    scaled = z / np.where(z > 0, scales[0], scales[1])
    fall = 0.5 * (_DF + size) * np.log1p(np.sum(scaled**2, axis=1) / _DF)
    return np.asarray(constant - np.log(scales.mean(axis=0)).sum(axis=-1) - fall)


def split_scales(log_density: LogDensity, centre: FloatArray, factor: FloatArray) -> FloatArray:
    """Scales of a proposal along the columns of `factor`, one for either side of the centre; shape (2, columns).

    A side on which the density falls more slowly than its curvature says gets a wider scale (Geweke 1989,
    Econometrica 57, 1317).
    """
    size, steps = factor.shape[1], np.array(_LOOK)
    offsets = np.concatenate([side * steps[:, None, None] * factor.T for side in (1.0, -1.0)])
    values = log_density(np.vstack([centre, (centre + offsets).reshape(-1, len(centre))]))
    top, around = values[0], values[1:].reshape(2, len(steps), size)
    fall = np.maximum(np.where(np.isfinite(around), top - around, np.inf), 1e-3)
    return np.asarray(np.clip(np.max(steps[None, :, None] / np.sqrt(2 * fall), axis=1), 0.8, 8.0))


@dataclass(frozen=True)
class SplitStudent:
    """A multivariate Student-t with its own scale on either side of each axis.

    Attributes
    ----------
    centre : ndarray, shape (d,)
    factor : ndarray, shape (d, d)
        Columns are the axes.
    scales : ndarray, shape (2, d)
        Upward and downward, in units of the axes.
    """

    centre: FloatArray
    factor: FloatArray
    scales: FloatArray

    @classmethod
    def about(cls, log_density: LogDensity, centre: FloatArray, covariance: FloatArray) -> SplitStudent:
        """The proposal about a mode, its axes those of a covariance."""
        values, vectors = np.linalg.eigh(covariance)
        factor = vectors * np.sqrt(values)
        return cls(centre, factor, _WIDEN * split_scales(log_density, centre, factor))

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draws, shape (size, d)."""
        return np.asarray(self.centre + _unit_draws(rng, self.scales[:, None, :], size) @ self.factor.T)

    def log_density(self, u: FloatArray) -> FloatArray:
        """Log density, shape (S,)."""
        z: FloatArray = np.linalg.solve(self.factor, (u - self.centre).T).T.astype(float)
        return np.asarray(_unit_density(z, self.scales[:, None, :]) - np.linalg.slogdet(self.factor)[1])


@dataclass(frozen=True)
class Mixture:
    """Proposals side by side, in fixed shares.

    Attributes
    ----------
    parts : sequence of Proposal
    shares : sequence of float
        Sum to 1.
    """

    parts: Sequence[Proposal]
    shares: Sequence[float]

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draws, shape (size, d); each part gives its share exactly, up to rounding."""
        ends = np.rint(np.cumsum(self.shares) * size).astype(int)
        counts = np.diff(ends, prepend=0)
        return np.concatenate([part.draw(rng, int(count)) for part, count in zip(self.parts, counts, strict=True)])

    def log_density(self, u: FloatArray) -> FloatArray:
        """Log density, shape (S,)."""
        terms = [np.log(share) + part.log_density(u) for part, share in zip(self.parts, self.shares, strict=True)]
        return np.asarray(scipy.special.logsumexp(terms, axis=0))


def fitted_mixture(u: FloatArray, covariance: FloatArray) -> Mixture:
    """A mixture of Student-t components fitted to draws by expectation and maximisation (Cappé et al. 2008).

    For posteriors that are no ridge along one coordinate: a funnel of mean and spread, as one or two detections give.

    Parameters
    ----------
    u : ndarray, shape (S, d)
        Equally weighted draws.
    covariance : ndarray, shape (d, d)
        Of the draws; sets the least spread of a component.

    Returns
    -------
    Mixture
    """
    size, dimension = u.shape
    count = int(np.clip(size // (_BEHIND * (dimension + 2) ** 2), 1, _COMPONENTS))
    # started from slices along the longest axis in units of each coordinate's spread
    scaled = (u - u.mean(axis=0)) / np.sqrt(np.diag(covariance))
    order = np.argsort(scaled @ np.linalg.eigh(np.cov(scaled.T).reshape(dimension, dimension))[1][:, -1])
    belonging = np.zeros((count, size))
    for row, part in zip(belonging, np.array_split(order, count), strict=True):
        row[part] = 1.0
    for _ in range(_EM_STEPS):
        shares = np.maximum(belonging.sum(axis=1) / size, 1e-6)
        parts = [_component(u, row / (size * share), covariance) for row, share in zip(belonging, shares, strict=True)]
        shares = shares / shares.sum()
        terms = np.array([np.log(share) + part.log_density(u) for part, share in zip(parts, shares, strict=True)])
        belonging = np.exp(terms - scipy.special.logsumexp(terms, axis=0))
    return Mixture(parts, [float(share) for share in shares])


def _component(u: FloatArray, weight: FloatArray, covariance: FloatArray) -> SplitStudent:
    centre = weight @ u
    deviation = u - centre
    spread = (deviation * weight[:, None]).T @ deviation + 1e-3 * covariance
    return SplitStudent(centre, _cholesky(spread), np.full((2, u.shape[1]), _WIDEN))


@dataclass(frozen=True)
class _LogLinear:
    """A density in one dimension whose log is linear between knots and beyond them."""

    knots: FloatArray
    heights: FloatArray
    slopes: tuple[float, float]

    @classmethod
    def through(cls, x: FloatArray, log_height: FloatArray) -> _LogLinear:
        """Through the log density at the nodes, flattened by `_TEMPER`."""
        fine = np.concatenate([np.linspace(a, b, 16, endpoint=False) for a, b in pairwise(x)])
        knots = np.append(fine, x[-1])
        heights = _TEMPER * scipy.interpolate.PchipInterpolator(x, log_height)(knots)
        slope = np.diff(_TEMPER * log_height) / np.diff(x)
        # where the nodes ran out before the density fell, the tail still has to end
        least = 0.5 / np.diff(x)[[0, -1]]
        slopes = (max(_TEMPER * slope[0], least[0]), min(_TEMPER * slope[-1], -least[-1]))
        density = cls(knots, heights, slopes)
        return cls(knots, heights - scipy.special.logsumexp(density._log_mass()), slopes)

    def _log_mass(self) -> FloatArray:
        """Log mass of the lower tail, of each segment, of the upper tail."""
        rise = np.diff(self.heights)
        # log of (e^x - 1) / x, from the higher end of the segment
        steep = np.maximum(np.abs(rise), 1e-9)
        higher = np.maximum(self.heights[1:], self.heights[:-1])
        inner = higher + np.log(-np.expm1(-steep) / steep * np.diff(self.knots))
        lower, upper = self.heights[0] - np.log(self.slopes[0]), self.heights[-1] - np.log(-self.slopes[1])
        return np.concatenate([[lower], inner, [upper]])

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Systematic draws, in rising order."""
        mass = np.exp(self._log_mass())
        cumulative = np.cumsum(mass) / mass.sum()
        p = (rng.random(size) + np.arange(size)) / max(size, 1)
        segment = np.minimum(np.searchsorted(cumulative, p, side="right"), len(mass) - 1)
        share = np.clip((p - (cumulative - mass)[segment]) / mass[segment], 1e-15, 1 - 1e-15)
        x = np.empty(size)
        inner = (segment > 0) & (segment < len(mass) - 1)
        at = segment[inner] - 1
        rise = np.diff(self.heights)[at]
        rise = np.where(np.abs(rise) < 1e-9, 1e-9, rise)
        x[inner] = self.knots[at] + np.diff(self.knots)[at] * np.log1p(share[inner] * np.expm1(rise)) / rise
        low, high = segment == 0, segment == len(mass) - 1
        x[low] = self.knots[0] + np.log(share[low]) / self.slopes[0]
        x[high] = self.knots[-1] + np.log1p(-share[high]) / self.slopes[1]
        return x

    def log_density(self, x: FloatArray) -> FloatArray:
        """Log density; any shape."""
        below, above = np.minimum(x - self.knots[0], 0), np.maximum(x - self.knots[-1], 0)
        return np.asarray(np.interp(x, self.knots, self.heights) + below * self.slopes[0] + above * self.slopes[1])


@dataclass(frozen=True)
class _Node:
    """The others' conditional distribution at one value of the first coordinate."""

    at: float
    mode: FloatArray
    factor: FloatArray
    value: float

    @property
    def marginal(self) -> float:
        """Laplace's approximation to the log marginal, up to a constant."""
        return self.value + float(np.log(np.diag(self.factor)).sum())


class RidgeProposal:
    """The first coordinate from its approximate marginal, the others from a split Student-t about their ridge.

    Parameters
    ----------
    log_density : callable
        Takes points of shape (S, d), gives shape (S,).
    nodes : sequence of _Node
        At least two, in rising order; `traced` finds them.
    """

    @classmethod
    def traced(cls, log_density: LogDensity, mode: FloatArray, covariance: FloatArray) -> RidgeProposal | None:
        """Follow the ridge through a mode; None where the density is finite at the mode's own value alone."""
        nodes = _trace(log_density, mode, covariance)
        return cls(log_density, nodes) if len(nodes) > 1 else None

    def __init__(self, log_density: LogDensity, nodes: Sequence[_Node]) -> None:
        self.size = len(nodes[0].mode)
        self.nodes = np.array([node.at for node in nodes])
        self.marginal = _LogLinear.through(self.nodes, np.array([node.marginal for node in nodes]))
        table = [self._row(log_density, node) for node in nodes]
        self.table = scipy.interpolate.PchipInterpolator(self.nodes, np.array(table), axis=0)
        modes = np.array([node.mode for node in nodes])
        # beyond the ends the ridge goes on straight
        self.ends = [(modes[i + 1] - modes[i]) / (self.nodes[i + 1] - self.nodes[i]) for i in (0, len(nodes) - 2)]

    def _row(self, log_density: LogDensity, node: _Node) -> FloatArray:
        """Mode, factor (log diagonal, rest) and log scales of a node: what is interpolated."""
        padded = np.vstack([np.zeros(self.size), node.factor])
        scales = split_scales(log_density, np.append(node.at, node.mode), padded)
        packed = np.tril(node.factor, -1) + np.diag(np.log(np.diag(node.factor)))
        return np.concatenate([node.mode, packed[np.tril_indices(self.size)], np.log(_WIDEN * scales).ravel()])

    def _conditional(self, first: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Centres (S, k), factors (S, k, k) and scales (2, S, k) of the others."""
        k, inside = self.size, np.clip(first, self.nodes[0], self.nodes[-1])
        row = self.table(inside)
        beyond = (first - inside)[:, None]
        centre = row[:, :k] + beyond * np.where(beyond < 0, self.ends[0], self.ends[1])
        factor = np.zeros((len(first), k, k))
        lower = np.tril_indices(k)
        factor[:, lower[0], lower[1]] = row[:, k : k + len(lower[0])]
        diagonal = np.arange(k)
        factor[:, diagonal, diagonal] = np.exp(factor[:, diagonal, diagonal])
        scales = np.exp(row[:, k + len(lower[0]) :]).reshape(len(row), 2, k)
        return centre, factor, np.moveaxis(scales, 1, 0)

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draws, shape (size, d)."""
        first = self.marginal.draw(rng, size)
        centre, factor, scales = self._conditional(first)
        z = _unit_draws(rng, scales, size)
        return np.column_stack([first, centre + np.einsum("sij,sj->si", factor, z)])

    def log_density(self, u: FloatArray) -> FloatArray:
        """Log density, shape (S,)."""
        centre, factor, scales = self._conditional(u[:, 0])
        z: FloatArray = np.linalg.solve(factor, (u[:, 1:] - centre)[..., None])[..., 0].astype(float)
        volume = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
        return np.asarray(self.marginal.log_density(u[:, 0]) + _unit_density(z, scales) - volume)


def _trace(log_density: LogDensity, mode: FloatArray, covariance: FloatArray) -> list[_Node]:
    """Nodes along the ridge in rising order, until the marginal has fallen or nodes run out."""
    variance, cross = covariance[0, 0], covariance[1:, 0]
    slope = cross / variance
    factor = _cholesky(covariance[1:, 1:] - np.outer(slope, cross))
    first = _settle(log_density, float(mode[0]), mode[1:], factor)
    top, sides = first.marginal, []
    for sign in (-1.0, 1.0):
        step, last, direction, side = sign * min(np.sqrt(variance), 2.0), first, slope, []
        for _ in range(_NODES):
            node = _settle(log_density, last.at + step, last.mode + step * direction, last.factor)
            if not np.isfinite(node.value):
                break
            direction = (node.mode - last.mode) / step
            side.append(node)
            last, step, top = node, step * _GROWTH, max(top, node.marginal)
            if node.marginal < top - _FALL:
                break
        sides.append(side)
    return [*sides[0][::-1], first, *sides[1]]


def _settle(log_density: LogDensity, at: float, start: FloatArray, factor: FloatArray) -> _Node:
    """Conditional mode and factor of the others by damped Newton steps in whitened coordinates."""

    def value(z: FloatArray) -> FloatArray:
        return log_density(np.column_stack([np.full(len(z), at), point + z @ factor.T]))

    point, top = start, -np.inf
    for _ in range(6):
        top, gradient, curvature = _derivatives(value, len(point))
        if not np.all(np.isfinite(curvature)):
            break
        # a flat or rising direction gets a bounded scale, and a factor changes four-fold at most in a step
        values, vectors = np.linalg.eigh(curvature)
        inverse = (vectors / np.clip(np.where(values > 0, values, 0.0), 1 / 16, 16.0)) @ vectors.T
        step = inverse @ gradient
        length = float(np.sqrt(gradient @ step))
        trials = np.outer((1.0, 0.5, 0.25, 0.1, 0.0), step) * min(1.0, _LONGEST / max(length, 1e-12))
        heights = value(trials) if length > 0.1 else np.array([top])
        best = int(np.argmax(np.where(np.isfinite(heights), heights, -np.inf)))
        done = length < 0.1 and np.all(np.abs(np.log(np.abs(values))) < 0.7)
        point, top = point + factor @ trials[best], float(heights[best])
        factor = factor @ _cholesky(inverse)
        if done:
            break
    return _Node(at, point, factor, top)


def _derivatives(value: LogDensity, size: int) -> tuple[float, FloatArray, FloatArray]:
    """Value, gradient and negative Hessian at 0, all points evaluated in one call."""
    unit = np.eye(size)
    pairs = [(i, j) for i in range(size) for j in range(i)]
    both = np.array([unit[i] + unit[j] for i, j in pairs]).reshape(len(pairs), size)
    values = value(_DELTA * np.vstack([np.zeros((1, size)), unit, -unit, both, -both]))
    top, rest = float(values[0]), values[1:]
    up, down = rest[:size], rest[size : 2 * size]
    plus, minus = np.split(rest[2 * size :], 2)
    bend = up + down - 2 * top
    hessian = np.diag(bend)
    for (i, j), a, b in zip(pairs, plus, minus, strict=True):
        hessian[i, j] = hessian[j, i] = (a + b - 2 * top - bend[i] - bend[j]) / 2
    return top, (up - down) / (2 * _DELTA), -hessian / _DELTA**2


def _cholesky(matrix: FloatArray) -> FloatArray:
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2)
    return np.linalg.cholesky((vectors * np.maximum(values, 1e-10)) @ vectors.T)
