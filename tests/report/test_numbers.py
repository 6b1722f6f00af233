"""How numbers are written."""

import math
from types import SimpleNamespace

import pytest

from remnantstats.report.numbers import chance, count, decimals_for, measure, number, span


@pytest.mark.parametrize(
    ("points", "text"),
    [
        ((0.36, 0.29, 0.50), "0.36 (+0.14 −0.07)"),
        ((7.64, 7.32, 7.84), "7.64 (+0.20 −0.32)"),
        ((0.003, 0.001, 0.143), "0.003 (+0.140 −0.002)"),
        ((-0.03, -0.45, 0.38), "−0.03 (+0.41 −0.42)"),
        ((123.4, 111.2, 140.9), "123 (+18 −12)"),
        ((0.5, 0.4005, 0.5996), "0.50 (+0.10 −0.10)"),
        ((0.0, 0.0, 0.0031), "0.0000 (+0.0031 −0.0000)"),
        ((1.0, 1.0, 1.0), "1 (fixed)"),
        ((math.nan, math.nan, math.nan), "–"),
    ],
)
def test_a_value_with_its_distances(points, text):
    assert measure(*points) == text


def test_interval_has_the_decimals_of_its_value():
    row = SimpleNamespace(q05=0.211, q16=0.29, q50=0.36, q84=0.50, q95=0.683)
    assert span(row) == "0.21 to 0.68"
    assert span(SimpleNamespace(q05=1.0, q16=1.0, q50=1.0, q84=1.0, q95=1.0)) == "–"


@pytest.mark.parametrize(("error", "decimals"), [(0.14, 2), (0.0996, 2), (9.96, 0), (12, 0), (1e-9, 6), (0, 2)])
def test_two_significant_digits_of_the_error(error, decimals):
    assert decimals_for(error) == decimals


def test_signs_and_edges():
    assert number(-0.001) == "0.00"
    assert number(-1.5, 1) == "−1.5"
    assert number(math.inf) == "∞"
    assert chance(0.98765) == "0.988"
    assert chance(0.99999) == "above 0.999"
    assert chance(0.00042) == "0.0004"
    assert chance(1.0) == "1.000"
    assert count(1, "star") == "1 star"
    assert count(1204, "star") == "1,204 stars"
