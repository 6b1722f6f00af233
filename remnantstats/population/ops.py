"""The array operations the likelihood is written in, and their NumPy form.

The likelihood's lines call nothing but these, so that the same lines run on NumPy arrays and build PyTensor graphs
(`remnantstats.inference.pytensor_ops`).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol

import numpy as np
import scipy.special

__all__ = ["NUMPY", "ArrayOps", "NumpyOps", "log_normal_density"]

#: an array of either backend; NumPy and PyTensor share no static type
Array = Any

LOG_SQRT_2PI = 0.5 * float(np.log(2 * np.pi))


class ArrayOps(Protocol):
    """What both backends supply."""

    def exp(self, x: Array) -> Array: ...  # noqa: D102
    def log(self, x: Array) -> Array: ...  # noqa: D102
    def log1p(self, x: Array) -> Array: ...  # noqa: D102
    def sqrt(self, x: Array) -> Array: ...  # noqa: D102
    def sin(self, x: Array) -> Array: ...  # noqa: D102
    def cos(self, x: Array) -> Array: ...  # noqa: D102
    def arcsin(self, x: Array) -> Array: ...  # noqa: D102
    def abs(self, x: Array) -> Array: ...  # noqa: D102
    def minimum(self, x: Array, y: Array) -> Array: ...  # noqa: D102
    def maximum(self, x: Array, y: Array) -> Array: ...  # noqa: D102
    def where(self, condition: Array, x: Array, y: Array) -> Array: ...  # noqa: D102
    def log_ndtr(self, x: Array) -> Array: ...  # noqa: D102
    def logaddexp(self, x: Array, y: Array) -> Array: ...  # noqa: D102
    def log1mexp(self, x: Array) -> Array: ...  # noqa: D102
    def log_expit(self, x: Array) -> Array: ...  # noqa: D102
    def gammaln(self, x: Array) -> Array: ...  # noqa: D102
    def logsumexp(self, x: Array) -> Array: ...  # noqa: D102
    def sum_last(self, x: Array) -> Array: ...  # noqa: D102
    def least(self, x: Array) -> Array: ...  # noqa: D102
    def trailing(self, x: Array) -> Array: ...  # noqa: D102
    def take(self, x: Array, index: Array) -> Array: ...  # noqa: D102
    def with_gradient(self, value: Array, arguments: Sequence[Array], slopes: Sequence[Array]) -> Array: ...  # noqa: D102


class NumpyOps:
    """The operations on NumPy arrays.

    `logsumexp` and `least` act on the last axis and remove it; `trailing` appends an axis of length one; `take` picks
    along the last axis; `log1mexp(x)` is log(1 − exp(x)) for x ≤ 0; `with_gradient` returns its value, since NumPy
    carries no gradient.
    """

    exp = staticmethod(np.exp)
    log = staticmethod(np.log)
    log1p = staticmethod(np.log1p)
    sqrt = staticmethod(np.sqrt)
    sin = staticmethod(np.sin)
    cos = staticmethod(np.cos)
    arcsin = staticmethod(np.arcsin)
    abs = staticmethod(np.abs)
    minimum = staticmethod(np.minimum)
    maximum = staticmethod(np.maximum)
    where = staticmethod(np.where)
    log_ndtr = staticmethod(scipy.special.log_ndtr)
    logaddexp = staticmethod(np.logaddexp)
    log_expit = staticmethod(scipy.special.log_expit)
    gammaln = staticmethod(scipy.special.gammaln)

    @staticmethod
    def log1mexp(x: Array) -> Array:
        """Return log(1 − exp(x)), for x ≤ 0."""
        x = np.minimum(x, 0.0)
        with np.errstate(divide="ignore"):
            return np.where(x > -0.6931471805599453, np.log(-np.expm1(x)), np.log1p(-np.exp(x)))

    @staticmethod
    def logsumexp(x: Array) -> Array:
        """Log of the sum of exponentials over the last axis."""
        top = np.max(x, axis=-1, keepdims=True)
        top = np.where(np.isfinite(top), top, 0.0)
        with np.errstate(divide="ignore"):
            return np.log(np.sum(np.exp(x - top), axis=-1)) + top[..., 0]

    @staticmethod
    def least(x: Array) -> Array:
        """Smallest element along the last axis."""
        return np.min(x, axis=-1)

    @staticmethod
    def sum_last(x: Array) -> Array:
        """Sum over the last axis."""
        return np.sum(x, axis=-1)

    @staticmethod
    def trailing(x: Array) -> Array:
        """Append an axis of length one, where `x` is an array."""
        return np.asarray(x)[..., None]

    @staticmethod
    def take(x: Array, index: Array) -> Array:
        """Pick along the last axis."""
        return np.take(x, index, axis=-1)

    @staticmethod
    def with_gradient(value: Array, arguments: Sequence[Array], slopes: Sequence[Array]) -> Array:
        """Return the value."""
        return value


NUMPY = NumpyOps()


def log_normal_density(ops: ArrayOps, x: Array, mean: Array, variance: Array) -> Array:
    """Natural log of the normal density, from the variance."""
    return -0.5 * (x - mean) ** 2 / variance - 0.5 * ops.log(variance) - LOG_SQRT_2PI
