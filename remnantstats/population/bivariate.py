"""Log of the bivariate normal distribution function, stable in the far tails, in either array backend.

The derivative of Φ₂ with respect to the correlation is the bivariate density (Plackett 1954), so Φ₂ is an integral of
positive terms over the angle t = arcsin r, here over v = tan(t/2) (Drezner & Wesolowsky 1990; Genz 2004):

- from t = 0, where Φ₂ = Φ(h)Φ(k), as published;
- from t = −π/2, where Φ₂ = 0 for h + k ≤ 0. For negative correlation deep in the tail the first form is a difference
  of near-equal numbers; this one is not;
- from t = π/2, where Φ₂ = Φ(min(h, k)), when the integrand peaks between 0 and arcsin r.

In each form the integrand is largest at t = arcsin r; the nodes cover the stretch next to it that matters.
"""

from __future__ import annotations

import numpy as np

from .ops import Array, ArrayOps

__all__ = ["log_phi2", "log_phi2_value"]

#: Gauss–Legendre nodes and weights on (0, 1)
_NODES, _WEIGHTS = (0.5 * (1 + np.polynomial.legendre.leggauss(24)[0]), 0.5 * np.polynomial.legendre.leggauss(24)[1])
_LOG_2PI = float(np.log(2 * np.pi))
#: the stretch of angle that matters, in e-folding lengths of the integrand at its end
_REACH = 38.0
#: the other two forms serve where h + k (or h − k) is this many of its own standard deviations from zero: nearer, their
#: integrands have an essential singularity at the far end, and the first form loses nothing
_FAR = 2.0
#: correlations are kept this far inside (−1, 1)
_EDGE = 1e-9


def log_phi2(ops: ArrayOps, h: Array, k: Array, r: Array) -> Array:
    """Log probability that two correlated standard normals both lie below given bounds.

    Parameters
    ----------
    ops : ArrayOps
        Array backend.
    h, k : array
        Bounds; any shapes that broadcast.
    r : array
        Correlation, open interval (−1, 1); |r| above 1 − 1e-9 is taken as that.

    Returns
    -------
    array
        log P(X < h, Y < k). Absolute error of the probability below 1e-10 for |r| ≤ 0.99 and bounds within ±8.

    References
    ----------
    Plackett 1954, Biometrika 41, 351; Drezner & Wesolowsky 1990, J. Stat. Comput. Simul. 35, 101;
    Genz 2004, Stat. Comput. 14, 251.
    """
    h, k, r = _inside(ops, h, k, r)
    value = log_phi2_value(ops, h, k, r)
    rest = 1 - r * r
    root = ops.sqrt(rest)
    log_phi = -0.5 * _LOG_2PI
    along_h = ops.exp(log_phi - 0.5 * h * h + ops.log_ndtr((k - r * h) / root) - value)
    along_k = ops.exp(log_phi - 0.5 * k * k + ops.log_ndtr((h - r * k) / root) - value)
    along_r = ops.exp(-_LOG_2PI - 0.5 * ops.log(rest) - 0.5 * (h * h + k * k - 2 * r * h * k) / rest - value)
    return ops.with_gradient(value, (h, k, r), (along_h, along_k, along_r))


def log_phi2_value(ops: ArrayOps, h: Array, k: Array, r: Array) -> Array:
    """The same, for use inside another integral: it carries no gradient of its own.

    Parameters
    ----------
    ops, h, k, r
        As for `log_phi2`.

    Returns
    -------
    array
    """
    h, k, r = _inside(ops, h, k, r)
    rest = 1 - r * r
    root = ops.sqrt(rest)
    # half-angle v = tan(t/2): sine and cosine, the nodes' main cost, become rational
    end = r / (1 + root)
    # d log(integrand) / dv at the end
    slope = 2 / (1 + end * end) * (h - r * k) * (k - r * h) / (rest * root)
    # with a falling slope the peak would lie inside, and there the first form loses nothing
    tail = (r < 0) & (slope > 0) & (h + k < -_FAR * ops.sqrt(2 * (1 + r)))
    past = (r > 0) & (slope < 0) & (ops.abs(h - k) > _FAR * ops.sqrt(2 * (1 - r)))
    room = ops.where(tail, 1 + end, ops.where(past, 1 - end, ops.abs(end)))
    # in the first form the peak may lie inside: then the whole stretch is covered
    outward = ops.where(r < 0, -slope, slope)
    steep = ops.where(tail | past, ops.abs(slope), ops.maximum(outward, 0.0))
    length = ops.minimum(room, _REACH / ops.maximum(steep, 1e-3))
    # the exponent is −(h² + z²)/2 with z = (k − r h)/√(1 − r²), and z moves at the rate (h − r k)/(1 − r²) per radian
    per_radian = ops.where(tail | past, 1.0, 0.5 * (1 + end * end))
    fall = per_radian * ops.minimum(_fall(ops, h, k, r, rest, root), _fall(ops, k, h, r, rest, root))
    length = ops.where(steep > 1e-3, ops.minimum(length, fall), length)
    direction = ops.where(tail, -1.0, ops.where(past, 1.0, ops.where(r < 0, 1.0, -1.0)))
    at_end = -0.5 * (h * h + k * k - 2 * r * h * k) / rest
    # the integrand peaks at the end, or, in the first form, near it or near v = 0
    top = ops.where(tail | past, at_end, ops.maximum(at_end, -0.5 * (h * h + k * k)))
    log_integral = _log_integral(ops, h, k, end, direction * length, top) + ops.log(ops.maximum(length, 1e-300))

    below_h, below_k = ops.log_ndtr(h), ops.log_ndtr(k)
    both, lower = below_h + below_k, ops.minimum(below_h, below_k)
    # a difference only where the two are of different size: elsewhere the other forms are chosen
    start = ops.where(past, lower, both)
    minus = start + ops.log1mexp(ops.minimum(log_integral - start, -1e-300))
    return ops.where(tail, log_integral, ops.where(past | (r < 0), minus, ops.logaddexp(both, log_integral)))


def _fall(ops: ArrayOps, h: Array, k: Array, r: Array, rest: Array, root: Array) -> Array:
    """Angle over which the integrand falls by the reach, from the quadratic growth of its exponent."""
    z = ops.abs(k - r * h) / root
    return (ops.sqrt(z * z + 2 * _REACH) - z) * rest / ops.maximum(ops.abs(h - r * k), 1e-12)


def _inside(ops: ArrayOps, h: Array, k: Array, r: Array) -> tuple[Array, Array, Array]:
    """Arguments of one shape, the correlation inside (−1, 1)."""
    r = ops.minimum(ops.maximum(r, -1 + _EDGE), 1 - _EDGE)
    return h + 0 * k + 0 * r, k + 0 * h + 0 * r, r + 0 * h + 0 * k


def _log_integral(ops: ArrayOps, h: Array, k: Array, end: Array, reach: Array, top: Array) -> Array:
    """Log mean of the integrand over half-angles from `end` to `end + reach`; `top` is about its largest exponent."""
    v = ops.trailing(end) + ops.trailing(reach) * _NODES
    square = 1 + v * v
    # a node never lies on v = ±1 but may round to it
    down, up = (1 - v) * (1 - v), (1 + v) * (1 + v)
    both = ops.maximum(up * down, 1e-60)
    inverse = 1 / (both * square)
    # (h² + k² − 2hk sin t) / cos² t; one division a node serves this and the weight 2 / (1 + v²)
    spread = square * square * inverse * (ops.trailing((h - k) * (h - k)) * square + ops.trailing(2 * h * k) * down)
    exponent = ops.minimum(-0.5 * spread - ops.trailing(top), 600.0)
    terms = ops.exp(exponent) * (both * inverse * (2 * _WEIGHTS))
    return ops.log(ops.sum_last(terms)) + top - _LOG_2PI
