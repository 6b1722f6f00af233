"""The likelihood's array operations as PyTensor graphs."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pytensor.tensor as pt
from pytensor.gradient import disconnected_grad

__all__ = ["PYTENSOR", "PytensorOps"]

Array = Any

_SQRT_HALF = float(np.sqrt(0.5))
_HALF_LOG_2PI = 0.5 * float(np.log(2 * np.pi))
#: below this many standard deviations the asymptotic series is used; erfc is still far from underflow there
_FAR = -20.0


class PytensorOps:
    """Counterpart of `remnantstats.population.ops.NumpyOps`; see there for each operation."""

    exp = staticmethod(pt.exp)
    log = staticmethod(pt.log)
    log1p = staticmethod(pt.log1p)
    sqrt = staticmethod(pt.sqrt)
    sin = staticmethod(pt.sin)
    cos = staticmethod(pt.cos)
    arcsin = staticmethod(pt.arcsin)
    abs = staticmethod(pt.abs)
    minimum = staticmethod(pt.minimum)
    maximum = staticmethod(pt.maximum)
    where = staticmethod(pt.switch)
    gammaln = staticmethod(pt.gammaln)

    @staticmethod
    def log_ndtr(x: Array) -> Array:
        """Log of the normal distribution function, by erfc: a third of the cost of the library's log-CDF."""
        near = 0.5 * pt.erfc(-_SQRT_HALF * pt.maximum(x, _FAR))
        far = pt.minimum(x, _FAR)
        square = 1 / (far * far)
        series = 1 - square * (1 - square * (3 - square * (15 - 105 * square)))
        # one logarithm for both branches, since both are always worked out
        inside = x > _FAR
        return pt.log(pt.switch(inside, near, -series / far)) - pt.switch(inside, 0.0, 0.5 * far * far + _HALF_LOG_2PI)

    @staticmethod
    def logaddexp(x: Array, y: Array) -> Array:
        """Log of the sum of two exponentials, both finite."""
        return x + pt.softplus(y - x)

    @staticmethod
    def log1mexp(x: Array) -> Array:
        """log(1 − exp(x)), for x < 0."""
        x = pt.minimum(x, -1e-300)
        return pt.log(-pt.expm1(x))

    @staticmethod
    def log_expit(x: Array) -> Array:
        """Log of the logistic function."""
        return -pt.softplus(-x)

    @staticmethod
    def logsumexp(x: Array) -> Array:
        """Log of the sum of exponentials over the last axis."""
        top = disconnected_grad(pt.max(x, axis=-1, keepdims=True))
        return pt.log(pt.sum(pt.exp(x - top), axis=-1)) + top[..., 0]

    @staticmethod
    def least(x: Array) -> Array:
        """Smallest element along the last axis."""
        return pt.min(x, axis=-1)

    @staticmethod
    def sum_last(x: Array) -> Array:
        """Sum over the last axis."""
        return pt.sum(x, axis=-1)

    @staticmethod
    def trailing(x: Array) -> Array:
        """Append an axis of length one."""
        return pt.shape_padright(pt.as_tensor_variable(x))

    @staticmethod
    def take(x: Array, index: Array) -> Array:
        """Pick along the last axis."""
        return x[index]

    @staticmethod
    def with_gradient(value: Array, arguments: Sequence[Array], slopes: Sequence[Array]) -> Array:
        """Return `value` with a gradient given in closed form."""
        result = disconnected_grad(value)
        for argument, slope in zip(arguments, slopes, strict=True):
            result = result + (argument - disconnected_grad(argument)) * disconnected_grad(slope)
        return result


PYTENSOR = PytensorOps()
