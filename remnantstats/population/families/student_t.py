"""Student-t in the log of the rate: a normal whose variance differs from star to star.

x | λ ~ N(μ, σ²/λ) with λ ~ Gamma(ν/2, ν/2). At each node in log λ the closed forms of the normal hold.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from ..gaussian import Decision, HostState, Value, gaussian_breadth, log_gaussian_integral
from ..ops import Array, ArrayOps
from .base import register

__all__ = ["StudentTFamily"]

_NODES = np.linspace(0, 1, 80)


class StudentTFamily:
    """Quadrature over the precision, evenly spaced in its log; `tail_weight` is ν."""

    two_channels = False
    location_scale = True
    shape_parameters: tuple[str, ...] = ("tail_weight",)
    constants: tuple[str, ...] = ()

    def breadth(self, decisions: int) -> int:
        """Numbers a row."""
        return len(_NODES) * gaussian_breadth(decisions)

    def log_integral(
        self, ops: ArrayOps, state: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]
    ) -> Array:
        """Log of ∫ p(x) Π N(value) Π Φ(decision)."""
        if not values and not decisions:
            return 0.0
        log_precision, log_weight = precisions(ops, state.shape["tail_weight"])
        last = ops.trailing
        ((channel, sd),) = state.sd.items()
        at_nodes = HostState({channel: last(state.mean[channel])}, {channel: last(sd) * ops.exp(-0.5 * log_precision)})
        given = {name: Value(last(item.value), last(item.variance)) for name, item in values.items()}
        taken = [
            item._replace(slope=last(item.slope), offset=last(item.offset), variance=last(item.variance))
            for item in decisions
        ]
        return ops.logsumexp(log_gaussian_integral(ops, at_nodes, given, taken) + log_weight)

    def simulate(self, rng: np.random.Generator, state: HostState, size: int) -> Mapping[str, npt.NDArray[np.float64]]:
        """Draw true values."""
        ((channel, mean),) = state.mean.items()
        return {channel: mean + state.sd[channel] * rng.standard_t(state.shape["tail_weight"], size)}


def precisions(ops: ArrayOps, freedom: Array) -> tuple[Array, Array]:
    """Nodes in log λ on a last axis, and their log weights.

    The nodes reach as far down as λ matters: to where its distribution has lost all but 1e-9, and to what a value tens
    of scales from the mean asks for. The trapezoid rule converges exponentially here; it serves from ν = 1 to 500.
    """
    nu = ops.trailing(freedom)
    low = -4.5 - 43.0 / nu
    high = 4.6 * ops.exp(-0.3 * ops.log(nu))
    node = low + (high - low) * _NODES
    half = 0.5 * nu
    log_density = half * ops.log(half) - ops.gammaln(half) + half * (node - ops.exp(node))
    return node, log_density + ops.log((high - low) / (len(_NODES) - 1))


STUDENT_T = register("student_t", StudentTFamily())
