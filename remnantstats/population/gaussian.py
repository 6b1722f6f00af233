"""Integrals of a normal population against what was measured and what was decided.

Every outcome of a star is a sum of terms of one shape,

    ∫ p(x, y) · Π N(value; x or y, variance) · Π Φ(sign · (a · x or y + k) / √V) dx dy,

with p normal in one or two channels. Values are absorbed one by one, which leaves a normal; the decisions then are a
normal orthant probability of one to three dimensions.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

from .bivariate import log_phi2
from .ops import Array, ArrayOps, log_normal_density
from .trivariate import log_phi3

__all__ = ["Decision", "HostState", "Value", "gaussian_breadth", "log_gaussian_integral"]


class Value(NamedTuple):
    """A measured value and its variance."""

    value: Array
    variance: Array


class Decision(NamedTuple):
    """A soft threshold on a channel's true value: Φ(sign · (slope · x + offset) / √variance)."""

    channel: str
    sign: int
    slope: Array
    offset: Array
    variance: Array


@dataclass(frozen=True)
class HostState:
    """The population of true values among debris hosts, as one star sees it.

    Attributes
    ----------
    mean : mapping
        Mean of each channel; arrays that broadcast with the rows.
    sd : mapping
        Standard deviation (or the family's scale) of each channel.
    correlation : array or None
        Between the channels; None with one channel.
    shape : mapping
        Further parameters of the family.
    """

    mean: Mapping[str, Array]
    sd: Mapping[str, Array]
    correlation: Array | None = None
    shape: Mapping[str, Array] = field(default_factory=dict)


def gaussian_breadth(decisions: int) -> int:
    """How many numbers one row takes while an integral with so many decisions is worked out."""
    return (1, 1, 40, 2560)[decisions]


def log_gaussian_integral(
    ops: ArrayOps, state: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]
) -> Array:
    """Log of the integral above.

    Parameters
    ----------
    ops : ArrayOps
        Array backend.
    state : HostState
        Population.
    values : mapping
        Measured values by channel.
    decisions : sequence of Decision
        At most three; the first two of three on the same channel.

    Returns
    -------
    array
        Natural log, finite far in the tails.
    """
    log_density, mean, variance, covariance = _absorb(ops, state, values)
    if not decisions:
        return log_density
    bounds, scales = [], []
    for decision in decisions:
        scale = ops.sqrt(decision.variance + decision.slope**2 * variance[decision.channel])
        bounds.append(decision.sign * (decision.slope * mean[decision.channel] + decision.offset) / scale)
        scales.append(scale)

    def correlation(i: int, j: int) -> Array:
        first, second = decisions[i], decisions[j]
        shared = variance[first.channel] if first.channel == second.channel else covariance
        sign = first.sign * second.sign
        return sign * first.slope * second.slope * shared / (scales[i] * scales[j])

    if len(decisions) == 1:
        return log_density + ops.log_ndtr(bounds[0])
    if len(decisions) == 2:
        return log_density + log_phi2(ops, bounds[0], bounds[1], correlation(0, 1))
    return log_density + log_phi3(ops, bounds, (correlation(0, 1), correlation(0, 2), correlation(1, 2)))


def _absorb(
    ops: ArrayOps, state: HostState, values: Mapping[str, Value]
) -> tuple[Array, dict[str, Array], dict[str, Array], Array]:
    """Log density of the measured values, and the normal that is left given them."""
    mean = dict(state.mean)
    variance = {channel: sd**2 for channel, sd in state.sd.items()}
    covariance: Array = 0.0
    if state.correlation is not None:
        first, second = state.sd.values()
        covariance = state.correlation * first * second
    log_density: Array = 0.0
    for channel, (value, noise) in values.items():
        total = variance[channel] + noise
        log_density = log_density + log_normal_density(ops, value, mean[channel], total)
        surprise = (value - mean[channel]) / total
        for other in mean:
            shared = variance[channel] if other == channel else covariance
            mean[other] = mean[other] + shared * surprise
        before = variance[channel]
        for other in variance:
            if other != channel:
                variance[other] = variance[other] - covariance**2 / total
        # written without a difference: at narrow errors v − v²/(v + s²) loses digits
        variance[channel] = before * noise / total
        covariance = covariance * noise / total
    return log_density, mean, variance, covariance
