"""Rows, posed problems, simulated surveys and a mode-and-curvature fit, for tests of the population's mathematics."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
import pytest

from remnantstats.catalog import ChannelRules, RowRules, read_sample
from remnantstats.population import PopulationModel, Problem, load_model, pose
from remnantstats.population.distributions import Fixed
from remnantstats.population.parameters import GROUP_RAW, logit_of
from remnantstats.population.rows import ChannelRows, Rows
from remnantstats.population.simulate import simulate
from remnantstats.sensitivity import CHANNELS, ChannelSettings

#: midpoints of the two depths of the designs, and of their selecting observations
DEPTHS = {"pollution": (6.8, 8.3), "excess": (-3.3, -2.3)}
SELECTION = {"pollution": 8.0, "excess": -2.8}


def channel_rows(n: int, outcome: str, settings: ChannelSettings, **arrays: Any) -> ChannelRows:
    """Rows of one channel, all of one outcome, without a catalogue; `arrays` replace the plain values."""
    filled = {
        "value": np.nan, "error": 0.1, "calibration": 0.0, "limit": 0.0, "width": settings.width,
        "false_positive": settings.false_positive, "selection_limit": np.nan, "selection_width": settings.width,
        "same": False,
    } | arrays  # fmt: skip
    columns = {name: np.broadcast_to(np.asarray(cells), n).copy() for name, cells in filled.items()}
    return ChannelRows(
        outcome=np.full(n, outcome),
        **columns,
        ceiling=settings.ceiling,
        spurious_scale=settings.spurious_scale,
        threshold_on=settings.threshold_on,
    )


def plain_rows(channels: Mapping[str, ChannelRows], blind: bool = True) -> Rows:
    """Rows of weight one without covariates."""
    n = len(next(iter(channels.values())).value)
    return Rows(
        star=np.arange(n), weight=np.ones(n), blind=np.full(n, blind), helium=np.zeros(n, dtype=bool),
        group=np.zeros(n, dtype=np.int64), channels=channels,
    )  # fmt: skip


def pose_table(
    table: pd.DataFrame, model: PopulationModel, settings: Mapping[str, ChannelSettings], **options: Any
) -> Problem:
    """Pose a model on a table, with the rules that the settings imply."""
    rules = {
        name: ChannelRules(threshold_on=item.threshold_on, spurious=item.false_positive > 0, width=item.width)
        for name, item in settings.items()
    }
    sample = read_sample(table, rules=RowRules(pollution=rules.get("pollution"), excess=rules.get("excess")))
    return pose(model, sample, settings, **options)


def design_table(
    rng: np.random.Generator, n: int, channels: Mapping[str, Any], known: Mapping[str, int]
) -> pd.DataFrame:
    """Stars of two depths; the first of them known for debris, where `known` says so."""
    inclusion = np.full(n, "blind", dtype=object)
    selection = np.full(n, np.nan)
    at = 0
    for name, count in known.items():
        inclusion[at : at + count], selection[at : at + count] = CHANNELS[name].known, SELECTION[name]
        at += count
    table = pd.DataFrame(
        {
            "star": [f"S{i}" for i in range(n)], "survey": rng.choice(["ash", "birch", "cedar"], n),
            "atmosphere": "H", "cooling_age": 10 ** rng.normal(-0.5, 0.4, n),
            "inclusion": inclusion, "selection_limit": selection,
        }
    )  # fmt: skip
    for name in channels:
        shallow = rng.random(n) < 0.5
        table[name] = "limit"
        table[f"{CHANNELS[name].value}_limit"] = np.where(shallow, *DEPTHS[name]) + 0.1 * rng.normal(size=n)
    return table


def fill_in(
    rng: np.random.Generator,
    table: pd.DataFrame,
    model: PopulationModel,
    settings: Mapping[str, ChannelSettings],
    truth: Mapping[str, Any],
    calibration: float = 0.0,
    **options: Any,
) -> pd.DataFrame:
    """Simulate what a survey of a design would list, and write it into the table."""
    problem = pose_table(table, model, settings, **options)
    n = len(table)
    rows = replace(
        problem.rows,
        channels={
            name: replace(item, error=np.full(n, settings[name].width), calibration=np.full(n, calibration))
            for name, item in problem.rows.channels.items()
        },
    )
    drawn = simulate(rng, problem, rows, complete(problem, truth))
    filled = table.copy()
    for name, seen in drawn.channels.items():
        value, detected = CHANNELS[name].value, seen.outcome == "detected"
        filled[name], filled[value] = seen.outcome, seen.value
        filled[f"{value}_err"] = np.where(detected, settings[name].width, np.nan)
        filled[f"{value}_calibration_err"] = np.where(detected, calibration, 0.0)
    return filled


def complete(problem: Problem, truth: Mapping[str, Any]) -> dict[str, Any]:
    """Parameters for the simulator: the truth where given, else the middle of the unconstrained scale."""
    middle = problem.theta(np.zeros((1, problem.dimension)))
    theta = {name: value[0] if np.ndim(value) else value for name, value in middle.items()}
    theta.update(truth)
    for name in ("debris_fraction", "dust_share"):
        if name in theta and theta[name] < 1:
            theta[logit_of(name)] = np.log(theta[name]) - np.log1p(-theta[name])
    return theta


def vector(problem: Problem, truth: Mapping[str, Any]) -> np.ndarray:
    """Unconstrained vector of a truth."""
    parts = [
        np.broadcast_to(parameter.unconstrain(truth[parameter.name]), parameter.size) for parameter in problem.free
    ]
    return np.concatenate(parts)


@dataclass(frozen=True)
class Fit:
    """Mode and curvature of a posterior on the unconstrained scale."""

    problem: Problem
    mode: np.ndarray
    covariance: np.ndarray

    def scores(self, truth: Mapping[str, Any]) -> dict[str, float]:
        """(mode − truth) / posterior sd, by parameter."""
        away = (self.mode - vector(self.problem, truth)) / np.sqrt(np.diag(self.covariance))
        labels = [
            parameter.name if parameter.size == 1 else f"{parameter.name}[{i}]"
            for parameter in self.problem.free
            for i in range(parameter.size)
        ]
        return dict(zip(labels, away, strict=True))


def fit(problem: Problem, start: np.ndarray) -> Fit:
    """Newton steps on central differences, halved until they climb; independent of the package's own engines."""
    u, d = np.array(start, dtype=float), problem.dimension
    for _ in range(60):
        value, slope, curvature = _derivatives(problem.log_posterior, u)
        low, axes = np.linalg.eigh(-curvature)
        step = axes @ ((axes.T @ slope) / np.maximum(np.abs(low), 1.0))
        step *= min(1.0, 2.0 / np.max(np.abs(step)))
        trial = u + step * 0.5 ** np.arange(12)[:, None]
        climbed = problem.log_posterior(trial)
        best = int(np.argmax(climbed))
        if not climbed[best] > value or np.max(np.abs(step)) < 1e-5:
            break
        u = trial[best]
    assert np.all(np.isfinite(u)) and u.shape == (d,)
    assert np.all(low > 0), "no mode was found"
    return Fit(problem, u, np.linalg.inv(-curvature))


def _derivatives(density: Callable[[np.ndarray], np.ndarray], u: np.ndarray, h: float = 1e-3) -> tuple[Any, ...]:
    d, step = len(u), h * np.eye(len(u))
    pairs = [(i, j) for i in range(d) for j in range(i)]
    points = [u, *(u + step), *(u - step), *(u + step[i] + step[j] for i, j in pairs)]
    points += [u - step[i] - step[j] for i, j in pairs]
    value = density(np.array(points))
    centre, up, down = value[0], value[1 : d + 1], value[d + 1 : 2 * d + 1]
    cross = value[2 * d + 1 :].reshape(2, -1)
    curvature = np.diag((up + down - 2 * centre) / h**2)
    for (i, j), both, neither in zip(pairs, *cross, strict=True):
        mixed = (both + neither + 2 * centre - up[i] - down[i] - up[j] - down[j]) / (2 * h**2)
        curvature[i, j] = curvature[j, i] = mixed
    return centre, (up - down) / (2 * h), curvature


def pinned(model: PopulationModel, **values: float) -> PopulationModel:
    """A model with some parameters held fixed."""
    return model.with_priors({name: Fixed(value=value) for name, value in values.items()}, "test")


class Kit:
    """The helpers above under one name."""

    channel_rows = staticmethod(channel_rows)
    plain_rows = staticmethod(plain_rows)
    pose_table = staticmethod(pose_table)
    design_table = staticmethod(design_table)
    fill_in = staticmethod(fill_in)
    complete = staticmethod(complete)
    vector = staticmethod(vector)
    fit = staticmethod(fit)
    pinned = staticmethod(pinned)
    load_model = staticmethod(load_model)
    group_raw = GROUP_RAW


@pytest.fixture(scope="session")
def kit() -> type[Kit]:
    return Kit
