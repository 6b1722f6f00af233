"""What the data say of each star: the follow-up list."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..population import Problem
from ..population.gaussian import Decision, Value
from ..population.likelihood import Probe, log_host_terms
from ..population.ops import NUMPY
from ..population.problem import latent_nodes
from ..population.rows import DETECTED, DOUBTFUL, LIMIT, UNOBSERVED, blocks
from ..sensitivity import CHANNELS
from .design import SurveyDesign

__all__ = ["completeness_table", "debris_probability", "star_table"]

FloatArray = npt.NDArray[np.float64]
#: posterior draws over which a star's expectations are averaged
_DRAWS = 200
#: variance, dex², of a measurement that tells nothing
_PROBE = 1e4


def debris_probability(
    problem: Problem, theta: Mapping[str, FloatArray], log_likelihood: FloatArray | None = None
) -> FloatArray:
    """Probability that each star hosts debris, given its own data and the sample.

    Parameters
    ----------
    problem : Problem
    theta : mapping
        S posterior draws.
    log_likelihood : ndarray, shape (S, n), optional
        Of the same draws, where it is at hand.

    Returns
    -------
    ndarray, shape (n,)
        Averaged over draws. One for sure detections and for stars selected for known debris; the debris fraction, at
        the star's covariates, for stars unobserved in every channel.
    """
    size = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    log_likelihood = problem.pointwise(theta) if log_likelihood is None else log_likelihood
    log_no = _log_without_debris(problem, theta, size)
    channels = problem.rows.channels.values()
    listing = np.zeros(len(problem.rows))
    for channel in channels:
        doubtful = channel.outcome == DOUBTFUL
        listing[doubtful] += channel.log_spurious[doubtful]
        limit = channel.outcome == LIMIT
        listing[limit] += np.log1p(-channel.false_positive[limit])
    sure = np.any([channel.outcome == DETECTED for channel in channels], axis=0) | ~problem.rows.blind
    without = np.exp(np.minimum(log_no + listing - log_likelihood, 0.0)).mean(axis=0)
    return np.where(sure, 1.0, 1.0 - without)


def _log_without_debris(problem: Problem, theta: Mapping[str, FloatArray], size: int) -> FloatArray:
    """Log of one minus each star's debris fraction; shape (S, n)."""
    result = np.full((size, len(problem.rows)), -np.inf)
    for start in range(0, size, problem.chunk):
        part = {key: value[start : start + problem.chunk] if np.ndim(value) else value for key, value in theta.items()}
        lifted = problem.lift(part)
        latent = problem.rows.latent
        nodes, log_weights = (None, None) if latent is None else latent_nodes(NUMPY, latent, lifted)
        log_no = problem.state(NUMPY, problem.rows, lifted, nodes).log_no
        if log_no is None:
            continue
        if latent is not None:
            log_no = NUMPY.logsumexp(log_no + log_weights)
        result[start : start + problem.chunk] = log_no
    return result


def star_table(
    problem: Problem,
    design: SurveyDesign,
    theta: Mapping[str, FloatArray],
    seed: int,
    log_likelihood: FloatArray | None = None,
) -> pd.DataFrame:
    """Table of stars, most informative columns first.

    Parameters
    ----------
    problem : Problem
    design : SurveyDesign
    theta : mapping
        Posterior draws.
    seed : int
    log_likelihood : ndarray, shape (S, n), optional
        Of the same draws, where it is at hand.

    Returns
    -------
    pandas.DataFrame
        A row a star: `star, survey, inclusion, atmosphere`, for each channel its outcome, value, limit, whether the
        limit was taken from other stars, and the sensitivity (the probability that a host of the fitted population
        would have been genuinely detected there); `debris_probability`; expected log value given debris and the data.
    """
    available = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    index = np.random.default_rng([seed, 12]).permutation(available)[:_DRAWS]
    some = {key: value[index] if np.ndim(value) else value for key, value in theta.items()}
    table = problem.sample.table
    result = table[["star", "survey", "inclusion", "atmosphere"]].copy()
    result["debris_probability"] = debris_probability(problem, theta, log_likelihood)
    for name in problem.channels:
        names, limits = CHANNELS[name], design.limits[name]
        result[f"{name}"] = table[name]
        result[names.value] = table[names.value]
        result[f"{names.value}_limit_50"] = limits.limit
        result[f"{names.value}_limit_imputed"] = limits.imputed
        result[f"{name}_sensitivity"] = _sensitivity(problem, design, some, name)
        result[f"expected_{names.value}"] = _expected(problem, some, name)
    return result


def _without_latent(problem: Problem) -> Problem:
    """The problem with covariates at their estimates: enough for a star's expectations."""
    rows = replace(problem.rows, latent=None)
    return replace(problem, rows=rows, blocks=tuple(blocks(rows)))


def _sensitivity(
    problem: Problem, design: SurveyDesign, theta: Mapping[str, FloatArray], name: str
) -> FloatArray:
    """Probability that a host of the fitted population would have been genuinely detected in each star."""
    plain = _without_latent(problem)
    host = plain.state(NUMPY, plain.rows, plain.lift(theta)).host
    channel = design.rows.channels[name]
    alone = replace(host, mean={name: host.mean[name]}, sd={name: host.sd[name]}, correlation=None)
    known = np.isfinite(channel.limit)
    limit = np.where(known, channel.limit, 0.0)
    crossed = Decision(name, 1, 1.0, -limit, channel.width**2)
    chance = channel.ceiling * np.exp(problem.family.log_integral(NUMPY, alone, {}, [crossed]))
    mean = np.broadcast_to(chance, (_size(theta), len(limit))).mean(axis=0)
    return np.where(channel.outcome == UNOBSERVED, 0.0, np.where(known, mean, np.nan))


def _size(theta: Mapping[str, FloatArray]) -> int:
    return max(int(np.shape(value)[0]) for value in theta.values() if np.ndim(value))


def _expected(problem: Problem, theta: Mapping[str, FloatArray], name: str) -> FloatArray:
    """Expected true log value of each star, given that it hosts debris (with dust, for that channel) and its data.

    By Tweedie's identity: with a further measurement v of variance V, E[x | data, v] = v + V ∂ log p(data, v)/∂v. V is
    so large that the measurement tells nothing. It holds for every family and every outcome.
    """
    plain = _without_latent(problem)
    lifted = plain.lift(theta)
    centre = 8.0 if name == "pollution" else -3.0
    result = np.full(len(plain.rows), np.nan)
    order = {int(row): position for position, row in enumerate(plain.rows.star)}
    for block in plain.blocks:
        state = plain.state(NUMPY, block.rows, lifted)
        up, down = (
            log_host_terms(NUMPY, plain.family, block, state, Probe(name, Value(centre + step, _PROBE)))
            for step in (1.0, -1.0)
        )
        expected = centre + _PROBE * (up - down) / 2
        where = [order[int(row)] for row in block.rows.star]
        result[where] = np.broadcast_to(expected, (_size(theta), len(where))).mean(axis=0)
    return result


def completeness_table(problem: Problem, design: SurveyDesign) -> pd.DataFrame:
    """Sample-mean detection efficiency over the true value, over blind observed stars.

    Parameters
    ----------
    problem : Problem
    design : SurveyDesign

    Returns
    -------
    pandas.DataFrame
        Columns `quantity`, `value`, `efficiency`, `lowest`, `highest` (10 and 90 % of the stars).
    """
    parts = []
    for name in problem.channels:
        channel = design.rows.channels[name]
        use = problem.rows.blind & (channel.outcome != UNOBSERVED) & np.isfinite(channel.limit)
        if not use.any():
            use = (channel.outcome != UNOBSERVED) & np.isfinite(channel.limit)
        low, high = (4.0, 12.0) if name == "pollution" else (-6.0, 0.0)
        grid = np.round(np.arange(low, high + 0.01, 0.1), 2)
        z = (grid[None, :] - channel.limit[use][:, None]) / channel.width[use][:, None]
        ceiling = np.broadcast_to(channel.ceiling, channel.limit.shape)[use]
        efficiency = ceiling[:, None] * np.exp(NUMPY.log_ndtr(z))
        if not use.any():
            efficiency = np.full((1, len(grid)), np.nan)
        parts.append(
            pd.DataFrame(
                {
                    "quantity": CHANNELS[name].value,
                    "value": grid,
                    "efficiency": efficiency.mean(axis=0),
                    "lowest": np.quantile(efficiency, 0.1, axis=0),
                    "highest": np.quantile(efficiency, 0.9, axis=0),
                }
            )
        )
    return pd.concat(parts, ignore_index=True)


