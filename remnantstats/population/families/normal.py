"""Normal in the log of the rate (log-normal rates); bivariate normal with dust."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from ..gaussian import Decision, HostState, Value, gaussian_breadth, log_gaussian_integral
from ..ops import Array, ArrayOps
from .base import register

__all__ = ["NormalFamily"]


class NormalFamily:
    """Closed forms throughout."""

    two_channels = True
    location_scale = True
    shape_parameters: tuple[str, ...] = ()
    constants: tuple[str, ...] = ()

    def breadth(self, decisions: int) -> int:
        """Numbers a row."""
        return gaussian_breadth(decisions)

    def log_integral(
        self, ops: ArrayOps, state: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]
    ) -> Array:
        """Log of ∫ p(x, y) Π N(value) Π Φ(decision)."""
        return log_gaussian_integral(ops, state, values, decisions)

    def simulate(self, rng: np.random.Generator, state: HostState, size: int) -> Mapping[str, npt.NDArray[np.float64]]:
        """Draw true values."""
        channels = list(state.mean)
        first = rng.standard_normal(size)
        drawn = {channels[0]: state.mean[channels[0]] + state.sd[channels[0]] * first}
        if len(channels) == 2:
            rho = 0.0 if state.correlation is None else state.correlation
            second = rho * first + np.sqrt(1 - rho**2) * rng.standard_normal(size)
            drawn[channels[1]] = state.mean[channels[1]] + state.sd[channels[1]] * second
        return drawn


NORMAL = register("normal", NormalFamily())
