"""Influence of single stars: the tail of the weights that leave a star out."""

from __future__ import annotations

import warnings

import arviz_base
import arviz_stats
import numpy as np
import pytest

from remnantstats.inference.influence import star_influence


def log_likelihood(sd, offset=0.5, size=2000, seed=1):
    """Stars measured with unit error about a mean of which the posterior is normal with the given sds, star by star."""
    mean = np.random.default_rng(seed).standard_normal((size, 1)) * np.asarray(sd)
    return -0.5 * (offset - mean) ** 2


def test_tail_of_weights_of_known_index():
    """The weight of leaving a star out is exp((y − m)²/2); with m of variance s² its tail has index s²."""
    # P(w > t) falls as t^(−1/s²) since P(|m| > x) falls as exp(−x²/2s²)
    k = star_influence(log_likelihood([0.2, 0.7, 1.0, 1.3]))
    assert k[0] < 0.2 and (np.diff(k) > 0).all()
    assert k[1] == pytest.approx(0.49, abs=0.2)
    assert k[2] == pytest.approx(1.0, abs=0.25)
    assert k[3] == pytest.approx(1.69, abs=0.3)


def test_agrees_with_the_librarys_leave_one_out():
    values = log_likelihood(np.linspace(0.1, 1.2, 12))
    draws = {"mean": values[None, :, 0]}
    tree = arviz_base.from_dict({"posterior": draws, "log_likelihood": {"stars": values[None]}})
    with warnings.catch_warnings():
        # the library warns of the heavy tails that are meant here
        warnings.simplefilter("ignore", UserWarning)
        found = arviz_stats.loo(tree, pointwise=True, reff=1.0)
    np.testing.assert_allclose(star_influence(values), np.asarray(found.pareto_k).ravel(), atol=0.02)


def test_a_star_that_tells_nothing_has_no_influence():
    values = log_likelihood([0.0, 1.0])
    assert star_influence(values)[0] == 0.0 and star_influence(values)[1] > 0.5
