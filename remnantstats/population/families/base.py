"""What a family of true values must supply."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Protocol

import numpy as np
import numpy.typing as npt

from ..gaussian import Decision, HostState, Value
from ..ops import Array, ArrayOps

__all__ = ["FAMILIES", "Family", "register"]


class Family(Protocol):
    """A distribution of true log values among debris hosts.

    A new family is one class with these members, registered under a name.
    """

    #: whether it is defined for two channels at once
    two_channels: bool

    #: whether each channel has a mean and a spread
    location_scale: bool

    #: further parameters of the family
    shape_parameters: tuple[str, ...]

    #: constants that its model files must give
    constants: tuple[str, ...]

    def breadth(self, decisions: int) -> int:
        """How many numbers one row takes while an integral with so many decisions is worked out."""
        ...

    def log_integral(
        self, ops: ArrayOps, state: HostState, values: Mapping[str, Value], decisions: Sequence[Decision]
    ) -> Array:
        """Log of ∫ p(x) Π N(value; x) Π Φ(decision) dx."""
        ...

    def simulate(self, rng: np.random.Generator, state: HostState, size: int) -> Mapping[str, npt.NDArray[np.float64]]:
        """Draw true values, one per star, for each channel of the state."""
        ...


FAMILIES: dict[str, Family] = {}


def register(name: str, family: Family) -> Family:
    """Make a family known to model files under `name`."""
    FAMILIES[name] = family
    return family
