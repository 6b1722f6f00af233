"""A power law in the rate between two fixed ends: the density of the log rate x goes as 10^(−βx).

A value without a decision has a closed form, an exponential times a normal. All else is summed over nodes laid, row by
row, on the value's error, on the decisions' widths and on the support; these do not depend on β.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from ..gaussian import Decision, HostState, Value
from ..ops import NUMPY, Array, ArrayOps
from .base import register

__all__ = ["PowerLawFamily"]

FloatArray = npt.NDArray[np.float64]

_LN10 = float(np.log(10))
_NODES, _WEIGHTS = (0.5 * (1 + np.polynomial.legendre.leggauss(12)[0]), 0.5 * np.polynomial.legendre.leggauss(12)[1])
#: a value is followed this many of its errors out: nine, and room for the tilt of the power law
_REACH = 12.0
_VALUE_PANELS = 10
#: panels of the support where no value confines the integral
_SUPPORT_PANELS = 12
#: where panels part about a decision, in its widths
_PARTS = np.array([-9.0, -5.0, -2.0, 0.0, 2.0, 5.0, 9.0])


class PowerLawFamily:
    """Truncated power law; `tail_index` is β, `log_rate_low` and `log_rate_high` its ends."""

    two_channels = False
    location_scale = False
    shape_parameters: tuple[str, ...] = ("tail_index",)
    constants: tuple[str, ...] = ("log_rate_low", "log_rate_high")

    def breadth(self, decisions: int) -> int:
        """Numbers a row."""
        return 1 if decisions == 0 else len(_NODES) * (_SUPPORT_PANELS + len(_PARTS) * decisions)

    def log_integral(
        self, ops: ArrayOps, state: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]
    ) -> Array:
        """Log of ∫ p(x) Π N(value) Π Φ(decision)."""
        if not values and not decisions:
            return 0.0
        slope, ends = _LN10 * state.shape["tail_index"], _ends(state)
        value = next(iter(values.values()), None)
        if value is not None and not decisions:
            log_integral = by_closed_form(ops, slope, ends, value)
        else:
            log_integral = by_quadrature(ops, slope, ends, value, decisions)
        return log_integral - log_mass(ops, slope, ends)

    def simulate(self, rng: np.random.Generator, state: HostState, size: int) -> Mapping[str, npt.NDArray[np.float64]]:
        """Draw true values, by the inverse of the distribution function."""
        (channel,) = state.mean
        low, high = _ends(state)
        slope, share = _LN10 * np.asarray(state.shape["tail_index"], dtype=float), rng.random(size)
        flat = np.abs(slope) * (high - low) < 1e-9
        steep = np.where(flat, 1.0, slope)
        drawn = low - np.log1p(share * np.expm1(-steep * (high - low))) / steep
        return {channel: np.where(flat, low + (high - low) * share, drawn)}


def _ends(state: HostState) -> tuple[float, float]:
    return float(state.shape["log_rate_low"]), float(state.shape["log_rate_high"])


def log_mass(ops: ArrayOps, slope: Array, ends: tuple[float, float]) -> Array:
    """Log of ∫ exp(−slope · x) over the support, exact through slope 0."""
    low, high = ends
    a = slope * (high - low)
    size = ops.maximum(ops.abs(a), 1e-3)
    # log of sinh(a/2)/(a/2), an even function
    far = 0.5 * size + ops.log1mexp(-size) - ops.log(size)
    near = a * a / 24
    return np.log(high - low) - 0.5 * slope * (low + high) + ops.where(ops.abs(a) > 1e-3, far, near)


def by_closed_form(ops: ArrayOps, slope: Array, ends: tuple[float, float], value: Value) -> Array:
    """Log of ∫ exp(−slope · x) N(value; x, variance) over the support."""
    sd = ops.sqrt(value.variance)
    centre = value.value - slope * value.variance
    below, above = (ends[0] - centre) / sd, (ends[1] - centre) / sd
    # the difference of two distribution functions, taken on the side where both are small
    flip = below + above > 0
    upper = ops.log_ndtr(ops.where(flip, -below, above))
    lower = ops.log_ndtr(ops.where(flip, -above, below))
    tilt = -slope * value.value + 0.5 * slope**2 * value.variance
    return tilt + upper + ops.log1mexp(lower - upper)


def by_quadrature(
    ops: ArrayOps, slope: Array, ends: tuple[float, float], value: Value | None, decisions: Sequence[Decision]
) -> Array:
    """Log of the same integral with decisions, in log-sum-exp form over each row's own nodes."""
    # limits that are themselves inferred (from recovery tables) may be symbols: then the support is parted more finely
    known = [item for item in decisions if all(map(_is_data, (item.slope, item.offset, item.variance)))]
    edges = _edges(ends, value, known, 1 if len(known) == len(decisions) else 4)
    width = np.diff(edges, axis=-1)[..., None]
    x = (edges[..., :-1, None] + width * _NODES).reshape(*edges.shape[:-1], -1)
    with np.errstate(divide="ignore"):
        factor = np.maximum(np.log(width * _WEIGHTS).reshape(x.shape), -1e4)
    if value is not None:
        at, variance = _last(value.value), _last(value.variance)
        factor = factor - 0.5 * (at - x) ** 2 / variance - 0.5 * np.log(2 * np.pi * variance)
    for item in known:
        argument = item.sign * (_last(item.slope) * x + _last(item.offset)) / np.sqrt(_last(item.variance))
        factor = factor + NUMPY.log_ndtr(argument)
    for item in decisions:
        if not any(item is other for other in known):
            offset = ops.trailing(item.slope) * x + ops.trailing(item.offset)
            factor = factor + ops.log_ndtr(item.sign * offset / ops.sqrt(ops.trailing(item.variance)))
    return ops.logsumexp(factor - ops.trailing(slope) * x)


def _is_data(x: Array) -> bool:
    return isinstance(x, (int, float, np.ndarray, np.generic))


def _edges(ends: tuple[float, float], value: Value | None, decisions: Sequence[Decision], finer: int) -> FloatArray:
    """Sorted ends of each row's panels, on a last axis."""
    low, high = ends
    first, last = np.asarray(low), np.asarray(high)
    if value is None:
        parts = [np.linspace(low, high, finer * _SUPPORT_PANELS + 1)]
    else:
        at, sd = _last(value.value), np.sqrt(_last(value.variance))
        nearest = np.clip(at, low, high)
        away = np.abs(at - nearest) / sd
        # beyond an end of the support the density falls faster than its own width
        reach = sd * (np.sqrt(away**2 + _REACH**2) - away)
        first, last = np.maximum(nearest - reach, low), np.minimum(nearest + reach, high)
        parts = [first + (last - first) * np.linspace(0, 1, finer * _VALUE_PANELS + 1)]
    for item in decisions:
        turn, spread = -_last(item.offset) / _last(item.slope), np.sqrt(_last(item.variance)) / _last(item.slope)
        parts.append(np.clip(turn + spread * _PARTS, first, last))
    shape = np.broadcast_shapes(*[part.shape[:-1] for part in parts])
    return np.sort(np.concatenate([np.broadcast_to(part, (*shape, part.shape[-1])) for part in parts], axis=-1))


def _last(x: Array) -> FloatArray:
    return np.asarray(x, dtype=float)[..., None]


POWER_LAW = register("power_law", PowerLawFamily())
