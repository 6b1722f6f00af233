"""What the data say of each star: the follow-up list."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..population import Problem

from ..population.ops import NUMPY
from ..population.problem import latent_nodes
from ..population.rows import DETECTED, DOUBTFUL, LIMIT, UNOBSERVED, ChannelRows
from ..sensitivity import CHANNELS
from .design import SurveyDesign

__all__ = ["completeness_table", "debris_probability", "star_table"]

FloatArray = npt.NDArray[np.float64]
#: posterior draws over which a star's expectations are averaged
_DRAWS = 200
_NODES = 121


def debris_probability(problem: Problem, theta: Mapping[str, FloatArray]) -> FloatArray:
    """Probability that each star hosts debris, given its own data and the sample.

    Parameters
    ----------
    problem : Problem
    theta : mapping
        S posterior draws.

    Returns
    -------
    ndarray, shape (n,)
        Averaged over draws. One for sure detections and for stars selected for known debris; the debris fraction, at
        the star's covariates, for stars unobserved in every channel.
    """
    size = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    log_likelihood = problem.pointwise(theta)
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


def star_table(problem: Problem, design: SurveyDesign, theta: Mapping[str, FloatArray], seed: int) -> pd.DataFrame:
    """Table of stars, most informative columns first.

    Parameters
    ----------
    problem : Problem
    design : SurveyDesign
    theta : mapping
        Posterior draws.
    seed : int

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
    result["debris_probability"] = debris_probability(problem, some)
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
    return replace(problem, rows=rows)


def _sensitivity(
    problem: Problem, design: SurveyDesign, theta: Mapping[str, FloatArray], name: str
) -> FloatArray:
    plain = _without_latent(problem)
    lifted = plain.lift(theta)
    host = plain.state(NUMPY, plain.rows, lifted).host
    channel = design.rows.channels[name]
    grid, density = _grid(problem, host, name)
    z = (grid - channel.limit[None, :, None]) / channel.width[None, :, None]
    seen = channel.ceiling * np.exp(NUMPY.log_ndtr(z))
    share = (density * seen).sum(axis=-1) / density.sum(axis=-1)
    return np.asarray(np.where(channel.outcome == UNOBSERVED, 0.0, share.mean(axis=0)))


def _grid(problem: Problem, host: object, name: str) -> tuple[FloatArray, FloatArray]:
    """Values of one channel that cover the population, and its density there; shapes (S or 1, n or 1, K)."""
    state = host
    mean, sd = np.asarray(state.mean[name]), np.asarray(state.sd[name])  # type: ignore[attr-defined]
    centre, width = np.atleast_2d(mean), np.atleast_2d(sd)
    steps = np.linspace(-7, 7, _NODES)
    grid = centre[..., None] + width[..., None] * steps
    return grid, np.broadcast_to(np.exp(-0.5 * steps**2), grid.shape)


def _expected(problem: Problem, theta: Mapping[str, FloatArray], name: str) -> FloatArray:
    """Expected true log value of each star, given that it hosts debris (with dust, for that channel) and its data."""
    plain = _without_latent(problem)
    host = plain.state(NUMPY, plain.rows, plain.lift(theta)).host
    channel = plain.rows.channels[name]
    mean = np.broadcast_to(np.atleast_2d(host.mean[name]), (_size(theta), len(plain.rows)))
    sd = np.broadcast_to(np.atleast_2d(host.sd[name]), mean.shape)
    result = mean.mean(axis=0).copy()
    detected = np.flatnonzero(np.isin(channel.outcome, (DETECTED, DOUBTFUL)))
    limited = np.flatnonzero(channel.outcome == LIMIT)
    if detected.size:
        result[detected] = _expected_detected(channel.take(detected), mean[:, detected], sd[:, detected])
    if limited.size:
        result[limited] = _expected_limited(channel.take(limited), mean[:, limited], sd[:, limited])
    return result


def _size(theta: Mapping[str, FloatArray]) -> int:
    return max(np.shape(value)[0] for value in theta.values() if np.ndim(value))


def _expected_detected(channel: ChannelRows, mean: FloatArray, sd: FloatArray) -> FloatArray:
    noise = (channel.error**2 + channel.calibration**2)[None, :]
    variance = sd**2 * noise / (sd**2 + noise)
    centre = (mean * noise + channel.value * sd**2) / (sd**2 + noise)
    slope, offset, spread = (part[None, :] for part in channel.decision)
    decided = channel.decided[None, :]
    total = np.sqrt(np.where(decided, spread + slope**2 * variance, 1.0))
    z = np.where(decided, (slope * centre + offset) / total, 0.0)
    # mean of a normal weighted by Φ: shift by the inverse Mills ratio
    mills = np.exp(-0.5 * z**2 - 0.5 * np.log(2 * np.pi) - NUMPY.log_ndtr(z))
    return np.asarray((centre + np.where(decided, slope * variance / total * mills, 0.0)).mean(axis=0))


def _expected_limited(channel: ChannelRows, mean: FloatArray, sd: FloatArray) -> FloatArray:
    total = np.sqrt(sd**2 + channel.width[None, :] ** 2)
    z = (channel.limit[None, :] - mean) / total
    missed = channel.ceiling * np.exp(NUMPY.log_ndtr(z))
    density = np.exp(-0.5 * z**2 - 0.5 * np.log(2 * np.pi))
    # the share missed by the ceiling keeps the population's mean
    shift = -(sd**2) / total * channel.ceiling * density / (missed + 1 - channel.ceiling)
    return np.asarray((mean + shift).mean(axis=0))


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
        efficiency = channel.ceiling * np.exp(NUMPY.log_ndtr(z))
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


