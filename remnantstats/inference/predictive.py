"""Posterior predictive checks: would the fitted model give surveys like this one?"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..population import Problem
from ..population.parameters import GROUP_RAW, ROW_DEVIATION
from ..population.rows import DETECTED, DOUBTFUL, UNOBSERVED
from ..population.simulate import ChannelOutcome, simulate
from ..sensitivity import CHANNELS
from .design import SurveyDesign

__all__ = ["Predictive", "predictive_check", "replicate"]

FloatArray = npt.NDArray[np.float64]
#: rows simulated at once, and in all
_BATCH = 400_000
_ALL = 3_000_000
_COLUMNS = ["channel", "kind", "low", "high", "observed", "expected", "q05", "q95"]

@dataclass(frozen=True)
class Predictive:
    """Result of the predictive checks.

    Attributes
    ----------
    counts : pandas.DataFrame
        A row a bin: `channel, kind, low, high, observed, expected, q05, q95`; kinds "depth" (detections by limit),
        "value" (detections by value) and "joint" (stars by outcome in both channels).
    p_value : float
        Share of replicated surveys that lie at least as far from expectation as the observed one.
    replicates : int
    """

    counts: pd.DataFrame
    p_value: float
    replicates: int

def replicate(
    rng: np.random.Generator, problem: Problem, design: SurveyDesign, theta: Mapping[str, FloatArray]
) -> dict[str, ChannelOutcome]:
    """Simulate the survey once for each of D draws.

    Parameters
    ----------
    rng : numpy.random.Generator
    problem : Problem
    design : SurveyDesign
    theta : mapping
        D draws.

    Returns
    -------
    dict of str to ChannelOutcome
        Arrays of shape (D, n); stars selected for known debris stand as unobserved: under some draws such stars are so
        rare that they could not be drawn.
    """
    blind = np.flatnonzero(design.rows.blind)
    size = len(blind)
    draws = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    rows = design.rows.take(np.tile(blind, draws))
    spread = {
        key: value if np.ndim(value) == 0 else np.repeat(value, size, axis=0)
        for key, value in theta.items()
    }
    if GROUP_RAW in spread:
        spread[ROW_DEVIATION] = spread.pop(GROUP_RAW)[np.arange(len(rows)), rows.group]
    drawn = simulate(rng, problem, rows, spread)
    found = {}
    for name, item in drawn.channels.items():
        outcome = np.full((draws, len(design.rows)), UNOBSERVED, dtype=object)
        value, truth = np.full(outcome.shape, np.nan), np.full(outcome.shape, np.nan)
        genuine = np.zeros(outcome.shape, dtype=bool)
        outcome[:, blind] = item.outcome.reshape(draws, size)
        value[:, blind] = item.value.reshape(draws, size)
        truth[:, blind] = item.truth.reshape(draws, size)
        genuine[:, blind] = item.genuine.reshape(draws, size)
        found[name] = ChannelOutcome(outcome.astype(str), value, genuine, truth)
    return found

def predictive_check(
    problem: Problem, design: SurveyDesign, theta: Mapping[str, FloatArray], seed: int
) -> Predictive:
    """Compare the survey with replicated ones.

    Parameters
    ----------
    problem : Problem
    design : SurveyDesign
    theta : mapping
        Posterior draws; as many as the survey's size allows are used.
    seed : int

    Returns
    -------
    Predictive
    """
    if not design.rows.blind.any():
        return Predictive(pd.DataFrame(columns=_COLUMNS), float("nan"), 0)
    rng = np.random.default_rng([seed, 11])
    available = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    replicates = int(np.clip(_ALL // max(len(design.rows), 1), 50, min(available, 4000)))
    chosen = rng.permutation(available)[:replicates]
    step = max(1, _BATCH // max(len(design.rows), 1))
    bins = _bins(problem, design)
    parts = []
    for start in range(0, replicates, step):
        index = chosen[start : start + step]
        part = {key: value[index] if np.ndim(value) else value for key, value in theta.items()}
        parts.append(_count(bins, replicate(rng, problem, design, part)))
    simulated = np.concatenate(parts)
    observed = _count(bins, _observed(problem))[0]
    mean, variance = simulated.mean(axis=0), simulated.var(axis=0) + 1e-9
    used = simulated.var(axis=0) > 0
    # a bin never filled in any replicate and filled in the data must not be lost: it gets the variance of one count
    variance = np.where(used, variance, 1.0)
    distance = ((simulated - mean) ** 2 / variance).sum(axis=1)
    own = float(((observed - mean) ** 2 / variance).sum())
    table = pd.DataFrame([{key: item[key] for key in ("channel", "kind", "low", "high")} for item in bins])
    table["observed"] = observed.astype(int)
    table["expected"] = mean
    table["q05"], table["q95"] = np.quantile(simulated, [0.05, 0.95], axis=0)
    return Predictive(table, float((distance >= own).mean()), replicates)

def _observed(problem: Problem) -> dict[str, ChannelOutcome]:
    found = {}
    for name, channel in problem.rows.channels.items():
        listed = np.where(np.isin(channel.outcome, (DETECTED, DOUBTFUL)), DETECTED, channel.outcome)
        listed = np.where(problem.rows.blind, listed, UNOBSERVED)
        value = np.where(listed == DETECTED, channel.value, np.nan)
        nothing = np.full(listed.shape, np.nan)
        found[name] = ChannelOutcome(listed[None], value[None], (listed == DETECTED)[None], nothing[None])
    return found

def _bins(problem: Problem, design: SurveyDesign) -> list[dict[str, object]]:
    bins: list[dict[str, object]] = []
    for name in problem.channels:
        limit = np.where(design.rows.blind, design.rows.channels[name].limit, np.nan)
        finite = limit[np.isfinite(limit)]
        if not finite.size:
            continue
        edges = np.unique(np.quantile(finite, [0, 0.25, 0.5, 0.75, 1]))
        edges = np.array([edges[0] - 0.01, edges[0] + 0.01]) if len(edges) == 1 else edges
        for low, high in itertools.pairwise(edges):
            last = high == edges[-1]
            inside = (limit >= low) & ((limit <= high) if last else (limit < high))
            bins.append({"channel": name, "kind": "depth", "low": low, "high": high, "mask": inside})
        bins += _value_bins(problem, name)
    if len(problem.channels) == 2:
        for both in (("detected", "detected"), ("detected", "limit"), ("limit", "detected"), ("limit", "limit")):
            bins.append({"channel": "both", "kind": "joint", "low": both[0], "high": both[1]})
    return bins

def _value_bins(problem: Problem, name: str) -> list[dict[str, object]]:
    channel = problem.rows.channels[name]
    values = channel.value[np.isfinite(channel.value) & problem.rows.blind]
    if values.size < 8:
        return []
    inner = np.quantile(values, [0.2, 0.4, 0.6, 0.8])
    edges = np.array([-np.inf, *inner, np.inf])
    return [
        {"channel": name, "kind": "value", "low": low, "high": high}
        for low, high in itertools.pairwise(edges)
    ]

def _count(bins: list[dict[str, object]], outcomes: Mapping[str, ChannelOutcome]) -> FloatArray:
    """Counts in each bin for each replicate, shape (D, bins)."""
    columns = []
    for item in bins:
        if item["kind"] == "joint":
            first, second = (outcomes[name].outcome for name in CHANNELS)
            columns.append(((first == item["low"]) & (second == item["high"])).sum(axis=1))
            continue
        channel = outcomes[str(item["channel"])]
        if item["kind"] == "depth":
            columns.append(((channel.outcome == DETECTED) & item["mask"]).sum(axis=1))
        else:
            with np.errstate(invalid="ignore"):
                low, high = float(str(item["low"])), float(str(item["high"]))
                columns.append(((channel.value >= low) & (channel.value < high)).sum(axis=1))
    return np.stack(columns, axis=1).astype(float) if columns else np.zeros((1, 0))
