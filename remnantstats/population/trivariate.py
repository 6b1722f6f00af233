"""Log of the trivariate normal distribution function, stable in the far tails, in either array backend.

Needed where a star was selected by an observation of its own and then has an undecided outcome in both channels.

One variable is integrated over numerically, the other two in closed form:

    Φ₃ = ∫_{x < b_i} φ(x) Φ₂((b_j − r_ij x)/s_ij, (b_k − r_ik x)/s_ik; r_jk·i) dx,   s_ij² = 1 − r_ij².

The variable is, row by row, the one least correlated with the others, so that the integrand is as smooth as it can be.
The integrand is log-concave: two passes over a grid find the stretch that matters, at any depth of the tail.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from .bivariate import log_phi2_value
from .ops import LOG_SQRT_2PI, Array, ArrayOps

__all__ = ["log_phi3"]

#: Gauss–Legendre rules on both halves of (0, 1)
_HALF, _HALF_WEIGHTS = np.polynomial.legendre.leggauss(32)
_NODES = 0.25 * np.concatenate([1 + _HALF, 3 + _HALF])
_LOG_WEIGHTS = np.log(0.25 * np.concatenate([_HALF_WEIGHTS, _HALF_WEIGHTS]))
_GRID = np.linspace(0, 1, 24)
#: the integrand is followed until it has fallen by this many e-foldings
_DEPTH = 26.0
#: no part of the integral that matters lies further out, in standard deviations (log Φ₃ above −700)
_OUTER = 45.0
#: correlations are kept this far inside (−1, 1)
_EDGE = 1e-9


def log_phi3(ops: ArrayOps, bounds: Sequence[Array], correlations: tuple[Array, Array, Array]) -> Array:
    """Log probability that three correlated standard normals all lie below given bounds.

    Parameters
    ----------
    ops : ArrayOps
        Array backend.
    bounds : sequence of array
        Three bounds, of any shapes that broadcast.
    correlations : tuple of array
        r12, r13 and r23, open interval (−1, 1), of a positive definite matrix.

    Returns
    -------
    array
        log P(X1 < b1, X2 < b2, X3 < b3); its error is below 1e-6 where it lies above −200 and one of the variables has
        correlations within ±0.99 with the other two.

    References
    ----------
    Plackett 1954, Biometrika 41, 351 (derivatives); Genz 2004, Stat. Comput. 14, 251.
    """
    r12, r13, r23 = (ops.minimum(ops.maximum(r, -1 + _EDGE), 1 - _EDGE) for r in correlations)
    flat = 0 * sum([*bounds, r12, r13, r23])
    b1, b2, b3 = (b + flat for b in bounds)
    r12, r13, r23 = r12 + flat, r13 + flat, r23 + flat
    value = _log_integral(ops, *_arranged(ops, b1, b2, b3, r12, r13, r23))
    along = (
        _along_bound(ops, b1, b2, b3, r12, r13, r23),
        _along_bound(ops, b2, b1, b3, r12, r23, r13),
        _along_bound(ops, b3, b1, b2, r13, r23, r12),
        _along_correlation(ops, b1, b2, b3, r12, r13, r23),
        _along_correlation(ops, b1, b3, b2, r13, r12, r23),
        _along_correlation(ops, b2, b3, b1, r23, r12, r13),
    )
    slopes = [ops.exp(ops.minimum(log_slope - value, 500.0)) for log_slope in along]
    return ops.with_gradient(value, (b1, b2, b3, r12, r13, r23), slopes)


def _arranged(ops: ArrayOps, b1: Array, b2: Array, b3: Array, r12: Array, r13: Array, r23: Array) -> tuple[Array, ...]:
    """Bounds and correlations in an order whose first variable is the least correlated with the others."""
    a12, a13, a23 = ops.abs(r12), ops.abs(r13), ops.abs(r23)
    most = [ops.maximum(a12, a13), ops.maximum(a12, a23), ops.maximum(a13, a23)]
    first = (most[0] <= most[1]) & (most[0] <= most[2])
    second = most[1] <= most[2]

    def pick(one: Array, two: Array, three: Array) -> Array:
        return ops.where(first, one, ops.where(second, two, three))

    return (
        pick(b1, b2, b3),
        pick(b2, b1, b1),
        pick(b3, b3, b2),
        pick(r12, r12, r13),
        pick(r13, r23, r23),
        pick(r23, r13, r12),
    )


def _log_integral(ops: ArrayOps, b1: Array, b2: Array, b3: Array, r12: Array, r13: Array, r23: Array) -> Array:
    """Log of the integral over the first variable."""
    root2, root3, partial = _conditional(ops, r12, r13, r23)
    column = ops.trailing

    def integrand(x: Array) -> Array:
        h, k = (column(b2) - column(r12) * x) / column(root2), (column(b3) - column(r13) * x) / column(root3)
        return -0.5 * x * x - LOG_SQRT_2PI + log_phi2_value(ops, h, k, column(partial))

    high = ops.minimum(b1, _OUTER)
    low = ops.minimum(high - 20, -_OUTER)
    for _ in range(2):
        low, high = _narrowed(ops, integrand, low, high)
    value = integrand(column(low) + column(high - low) * _NODES)
    return ops.logsumexp(value + _LOG_WEIGHTS) + ops.log(high - low)


def _narrowed(ops: ArrayOps, integrand: Callable[[Array], Array], low: Array, high: Array) -> tuple[Array, Array]:
    """Ends of the stretch on which a log-concave integrand lies within reach of its highest value on a grid."""
    step = (high - low) / (len(_GRID) - 1)
    x = ops.trailing(low) + ops.trailing(high - low) * _GRID
    value = integrand(x)
    matters = value > ops.trailing(-ops.least(-value)) - _DEPTH
    first = ops.least(ops.where(matters, x, np.inf)) - step
    last = -ops.least(ops.where(matters, -x, np.inf)) + step
    return ops.maximum(first, low), ops.minimum(last, high)


def _conditional(ops: ArrayOps, r12: Array, r13: Array, r23: Array) -> tuple[Array, Array, Array]:
    """Spreads of the second and third variable given the first, and their correlation then."""
    root2, root3 = ops.sqrt((1 - r12) * (1 + r12)), ops.sqrt((1 - r13) * (1 + r13))
    return root2, root3, (r23 - r12 * r13) / (root2 * root3)


def _along_bound(ops: ArrayOps, b1: Array, b2: Array, b3: Array, r12: Array, r13: Array, r23: Array) -> Array:
    """Log derivative of Φ₃ along its first bound."""
    root2, root3, partial = _conditional(ops, r12, r13, r23)
    rest = log_phi2_value(ops, (b2 - r12 * b1) / root2, (b3 - r13 * b1) / root3, partial)
    return -0.5 * b1 * b1 - LOG_SQRT_2PI + rest


def _along_correlation(ops: ArrayOps, b1: Array, b2: Array, b3: Array, r12: Array, r13: Array, r23: Array) -> Array:
    """Log derivative of Φ₃ along its first correlation: the bivariate density times the third's chance given both."""
    rest = (1 - r12) * (1 + r12)
    density = -2 * LOG_SQRT_2PI - 0.5 * ops.log(rest) - 0.5 * (b1 * b1 + b2 * b2 - 2 * r12 * b1 * b2) / rest
    mean = ((r13 - r12 * r23) * b1 + (r23 - r12 * r13) * b2) / rest
    spread = (1 - r12 * r12 - r13 * r13 - r23 * r23 + 2 * r12 * r13 * r23) / rest
    return density + ops.log_ndtr((b3 - mean) / ops.sqrt(ops.maximum(spread, 1e-18)))
