"""Bivariate and trivariate normal distribution functions against SciPy and independent quadrature."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.special
import scipy.stats

from remnantstats.population.bivariate import log_phi2
from remnantstats.population.ops import NUMPY
from remnantstats.population.trivariate import log_phi3

HALF_LOG_2PI = 0.5 * np.log(2 * np.pi)


def quadrature(h: float, k: float, r: float) -> float:
    """log Φ₂ as ∫ φ(x) Φ((k − r x)/√(1 − r²)) over x < h, summed in logs on a grid narrowed to what matters."""

    def integrand(x: np.ndarray) -> np.ndarray:
        return -0.5 * x * x - HALF_LOG_2PI + scipy.special.log_ndtr((k - r * x) / np.sqrt((1 - r) * (1 + r)))

    low, high = min(-45.0, h - 10), h
    for _ in range(3):
        x = np.linspace(low, high, 2001)
        matters = np.flatnonzero(integrand(x) > integrand(x).max() - 45)
        low, high = x[max(matters[0] - 1, 0)], x[min(matters[-1] + 1, 2000)]
    nodes, weights = np.polynomial.legendre.leggauss(40)
    edges = np.linspace(low, high, 81)
    width = np.diff(edges)[:, None]
    x = edges[:-1, None] + width * (nodes + 1) / 2
    return float(scipy.special.logsumexp(integrand(x) + np.log(width * weights / 2)))


def test_agrees_with_scipy() -> None:
    # scipy.stats.multivariate_normal.cdf: Genz's bivariate code, absolute error below 1e-14
    rng = np.random.default_rng(1)
    h, k, r = rng.uniform(-8, 8, 1500), rng.uniform(-8, 8, 1500), rng.uniform(-0.99, 0.99, 1500)
    expected = [
        scipy.stats.multivariate_normal.cdf([a, b], cov=[[1, c], [c, 1]]) for a, b, c in zip(h, k, r, strict=True)
    ]
    np.testing.assert_allclose(np.exp(log_phi2(NUMPY, h, k, r)), expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize(
    ("h", "k", "r"),
    [
        (-15, -15, 0.5), (-15, -15, -0.5), (-3, -3, -0.9), (-15, 3, 0.9), (3, -15, -0.9), (-8, 8, -0.99),
        (-30, -30, 0.3), (-30, 4, 0.7), (-30, -10, 0.9), (-12, -1, 0.999), (-15.8, 7.8, -0.046), (-17, 1, -0.05),
    ],
)  # fmt: skip
def test_far_tails(h: float, k: float, r: float) -> None:
    value = log_phi2(NUMPY, np.array(h), np.array(k), np.array(r))
    assert value == pytest.approx(quadrature(h, k, r), abs=1e-6)


def test_random_tails() -> None:
    rng = np.random.default_rng(2)
    h, k, r = rng.uniform(-20, 8, 600), rng.uniform(-20, 8, 600), np.tanh(rng.normal(0, 1.2, 600)).clip(-0.99, 0.99)
    # a third of them where the second bound is just met given the first: there the integrand peaks near its end
    k[:200] = r[:200] * h[:200] + rng.normal(0, 2, 200) * np.sqrt(1 - r[:200] ** 2)
    expected = np.array([quadrature(*item) for item in zip(h, k, r, strict=True)])
    near = expected > -300
    assert near.sum() > 350
    np.testing.assert_allclose(log_phi2(NUMPY, h, k, r)[near], expected[near], rtol=0, atol=1e-6)


def test_complement() -> None:
    rng = np.random.default_rng(3)
    h, k, r = rng.normal(0, 2, 500), rng.normal(0, 2, 500), rng.uniform(-0.99, 0.99, 500)
    total = np.exp(log_phi2(NUMPY, h, k, r)) + np.exp(log_phi2(NUMPY, h, -k, -r))
    np.testing.assert_allclose(total, scipy.special.ndtr(h), atol=1e-13)


# three variables -----------------------------------------------------------------------------------------------------


def random_matrices(rng: np.random.Generator, n: int) -> np.ndarray:
    """r12, r13, r23 of positive definite matrices, in every other one r12 near ±1."""
    factors = rng.normal(size=(n, 3, 3))
    signs = rng.choice([-1, 1], n // 2)[:, None]
    factors[::2, 1] = signs * factors[::2, 0] + rng.choice([0.05, 0.2, 1], n // 2)[:, None] * factors[::2, 1]
    covariance = factors @ factors.transpose(0, 2, 1)
    sd = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    r = covariance / sd[:, :, None] / sd[:, None, :]
    return np.stack([r[:, 0, 1], r[:, 0, 2], r[:, 1, 2]])


def matrix(r: np.ndarray) -> np.ndarray:
    return np.array([[1, r[0], r[1]], [r[0], 1, r[2]], [r[1], r[2], 1]])


def test_trivariate_agrees_with_scipy() -> None:
    # scipy.stats.multivariate_normal.cdf: randomised quadrature, asked for 1e-7 and seen to miss by 1e-5
    rng = np.random.default_rng(4)
    bounds, r = rng.uniform(-2, 3, (3, 40)), random_matrices(rng, 40)
    found = np.exp(log_phi3(NUMPY, list(bounds), tuple(r)))
    for i in range(40):
        expected = scipy.stats.multivariate_normal.cdf(
            bounds[:, i], cov=matrix(r[:, i]), abseps=1e-7, releps=1e-7, maxpts=400_000
        )
        assert found[i] == pytest.approx(expected, abs=5e-5)


def test_trivariate_tails() -> None:
    """Against ∫∫ φ₂ Φ over a plain grid of two variables, in logs; the third is the one in closed form."""
    rng = np.random.default_rng(5)
    compared = 0
    for _ in range(40):
        # r12 free (near ±1 included) as the closed form's own, the others moderate
        r13, r23 = rng.uniform(-0.7, 0.7, 2)
        partial = np.tanh(rng.normal(0, 0.8))
        r12 = r13 * r23 + partial * np.sqrt((1 - r13**2) * (1 - r23**2))
        b = rng.uniform(-9, 2, 3)
        expected = grid_of_two(b, r12, r13, r23)
        if expected > -200:
            compared += 1
            assert log_phi3(NUMPY, list(b), (r12, r13, r23)) == pytest.approx(expected, abs=1e-6)
    assert compared > 20


def grid_of_two(b: np.ndarray, r12: float, r13: float, r23: float) -> float:
    nodes, weights = np.polynomial.legendre.leggauss(24)
    precision = np.linalg.inv([[1, r13], [r13, 1]])
    tilt = precision @ [r12, r23]
    spread = np.sqrt(1 - tilt @ [r12, r23])

    def integrand(x: np.ndarray, z: np.ndarray) -> np.ndarray:
        x, z = x[:, None], z[None, :]
        square = precision[0, 0] * (x * x + z * z) + 2 * precision[0, 1] * x * z
        density = -0.5 * square - 2 * HALF_LOG_2PI + 0.5 * np.log(np.linalg.det(precision))
        return density + scipy.special.log_ndtr((b[1] - tilt[0] * x - tilt[1] * z) / spread)

    box = [(-30.0, b[0]), (-30.0, b[2])]
    for _ in range(4):
        axes = [np.linspace(low, high, 121) for low, high in box]
        value = integrand(*axes)
        matters = np.nonzero(value > value.max() - 32)
        box = [
            (axis[max(index.min() - 1, 0)], axis[min(index.max() + 1, 120)])
            for axis, index in zip(axes, matters, strict=True)
        ]
    points, logs = [], []
    for low, high in box:
        edges = np.linspace(low, high, 13)
        width = np.diff(edges)[:, None]
        points.append((edges[:-1, None] + width * (nodes + 1) / 2).ravel())
        logs.append(np.log(width * weights / 2).ravel())
    return float(scipy.special.logsumexp(integrand(*points) + logs[0][:, None] + logs[1]))


# the PyTensor form ---------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def compiled() -> Any:
    """Value and gradient of a function of vectors, evaluated without a C or LLVM compiler."""
    import pytensor
    import pytensor.tensor as pt

    from remnantstats.inference.pytensor_ops import PYTENSOR

    def build(function: Any, count: int) -> Any:
        arguments = [pt.vector(f"x{i}") for i in range(count)]
        value = function(PYTENSOR, arguments)
        return pytensor.function(arguments, [value, *pt.grad(value.sum(), arguments)], mode="FAST_COMPILE")

    return build


def check_gradient(compiled: Any, function: Any, arguments: np.ndarray) -> None:
    value, *slopes = compiled(function, len(arguments))(*arguments)
    np.testing.assert_allclose(value, function(NUMPY, list(arguments)), rtol=1e-12, atol=1e-14)
    assert np.all(np.isfinite(slopes))
    for i, slope in enumerate(slopes):
        h = np.zeros_like(arguments)
        h[i] = 1e-5
        difference = (function(NUMPY, list(arguments + h)) - function(NUMPY, list(arguments - h))) / 2e-5
        np.testing.assert_allclose(slope, difference, rtol=2e-5, atol=2e-6)


def test_bivariate_gradient(compiled: Any) -> None:
    rng = np.random.default_rng(6)
    arguments = np.stack([rng.uniform(-15, 5, 200), rng.uniform(-15, 5, 200), rng.uniform(-0.95, 0.95, 200)])
    check_gradient(compiled, lambda ops, x: log_phi2(ops, *x), arguments)


def test_trivariate_gradient(compiled: Any) -> None:
    rng = np.random.default_rng(7)
    r = random_matrices(rng, 200)
    sane = (np.abs(r).max(axis=0) < 0.97) & ([np.linalg.det(matrix(item)) > 0.02 for item in r.T])
    arguments = np.concatenate([rng.uniform(-6, 3, (3, 200)), r])[:, sane][:, :40]
    assert arguments.shape == (6, 40)
    check_gradient(compiled, lambda ops, x: log_phi3(ops, x[:3], tuple(x[3:])), arguments)


def test_log_ndtr_of_both_backends(compiled: Any) -> None:
    x = np.concatenate([np.linspace(-40, 9, 400), [-1e3, -20.0, -20 + 1e-9, -20 - 1e-9, 0.0]])
    check_gradient(compiled, lambda ops, a: ops.log_ndtr(a[0]), x[None])
