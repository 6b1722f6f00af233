"""The quantities that are reported, from parameters."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import scipy.special

from ..sensitivity import CHANNELS
from . import parameters as names
from .gaussian import Decision, HostState
from .ops import NUMPY
from .problem import Problem

__all__ = ["Quantity", "Thresholds", "fraction_name", "median_limit", "reported"]

FloatArray = npt.NDArray[np.float64]

NEW_GROUP = "new group"
#: variance, dex², of a threshold that is sharp; not zero, for families that integrate numerically
_SHARP = 1e-12


@dataclass(frozen=True)
class Thresholds:
    """Values above which the fraction of systems is reported.

    Attributes
    ----------
    pollution : tuple of float
        log10 g/s.
    excess : tuple of float
        log10 of the dust luminosity in units of the star's.
    """

    pollution: tuple[float, ...] = (6.0, 7.0, 8.0)
    excess: tuple[float, ...] = (-3.0,)

    def of(self, channel: str) -> tuple[float, ...]:
        """Thresholds of a channel."""
        return self.pollution if channel == "pollution" else self.excess


@dataclass(frozen=True)
class Quantity:
    """A reported quantity.

    Attributes
    ----------
    name : str
    values : ndarray, shape (S,) or (S, k)
    dim : str
        Name of the second axis; empty for a scalar.
    labels : tuple
        Coordinates of the second axis.
    """

    name: str
    values: FloatArray
    dim: str = ""
    labels: tuple[str | float, ...] = field(default=())

    @property
    def entries(self) -> list[tuple[str, FloatArray]]:
        """Names as in `summary.csv`, each with its draws."""
        if not self.dim:
            return [(self.name, self.values)]
        return [(f"{self.name}[{_label(label)}]", self.values[:, j]) for j, label in enumerate(self.labels)]


def _label(label: str | float) -> str:
    return label if isinstance(label, str) else f"{label:g}"


def fraction_name(problem: Problem) -> str:
    """Name of the fraction: an infrared-only study identifies that of dusty systems alone."""
    return "dusty_fraction" if problem.channels == ("excess",) else names.DEBRIS_FRACTION


def reported(problem: Problem, theta: Mapping[str, FloatArray], thresholds: Thresholds) -> list[Quantity]:
    """Every reported quantity, in the order of the output tables.

    Parameters
    ----------
    problem : Problem
    theta : mapping
        S draws, as `Problem.theta` gives.
    thresholds : Thresholds

    Returns
    -------
    list of Quantity
        Covariates at their reference, H atmosphere, and the mean of the groups where groups pool.
    """
    size = max(np.shape(value)[0] for value in theta.values() if np.ndim(value))
    full = {key: np.broadcast_to(value, (size,)) if np.ndim(value) == 0 else value for key, value in theta.items()}
    result = [Quantity(fraction_name(problem), np.array(full[names.DEBRIS_FRACTION]))]
    result += _plain(problem, full)
    result += _slopes(problem, full)
    result += _groups(problem, full)
    result += _above(problem, full, thresholds)
    result.append(Quantity("extrapolated_share", _extrapolated(problem, full)))
    return result


def _plain(problem: Problem, theta: Mapping[str, FloatArray]) -> list[Quantity]:
    skip = {names.DEBRIS_FRACTION, names.GROUP_RAW}
    return [
        Quantity(parameter.name, np.array(theta[parameter.name]))
        for parameter in problem.parameters
        if parameter.name not in skip and "[" not in parameter.name
    ]


def _slopes(problem: Problem, theta: Mapping[str, FloatArray]) -> list[Quantity]:
    found: dict[str, list[tuple[str, FloatArray]]] = {}
    for parameter in problem.parameters:
        if "[" in parameter.name:
            stem, label = parameter.name[:-1].split("[", 1)
            found.setdefault(stem, []).append((label, theta[parameter.name]))
    return [
        Quantity(
            stem,
            np.stack([values for _, values in entries], axis=1),
            _dim_of(stem),
            tuple(label for label, _ in entries),
        )
        for stem, entries in found.items()
    ]


def _dim_of(stem: str) -> str:
    if stem.startswith("efficiency"):
        return "efficiency_class"
    return "atmosphere" if stem.endswith("offset") else "covariate"


def _groups(problem: Problem, theta: Mapping[str, FloatArray]) -> list[Quantity]:
    if not problem.groups and not problem.has(names.fraction_offset()):
        return []
    odds = theta[names.logit_of(names.DEBRIS_FRACTION)]
    labels: list[str | float] = []
    columns = []
    if problem.groups:
        effect = theta[names.GROUP_SD][:, None] * theta[names.GROUP_RAW]
        columns += list(scipy.special.expit(odds[:, None] + effect).T)
        labels += list(problem.groups)
        # a group not yet seen: one fresh deviation a draw, the same in every run
        fresh = np.random.default_rng(len(odds)).standard_normal(len(odds))
        columns.append(scipy.special.expit(odds + theta[names.GROUP_SD] * fresh))
        labels.append(NEW_GROUP)
    if problem.has(names.fraction_offset()):
        columns.append(scipy.special.expit(odds + theta[names.fraction_offset()]))
        labels.append("He")
    return [Quantity("group_fraction", np.stack(columns, axis=1), "group", tuple(labels))]


def host_state(problem: Problem, theta: Mapping[str, FloatArray]) -> HostState:
    """The population of hosts at the reference covariates; arrays of shape (S,)."""
    no_shift = np.zeros(1)
    return problem.star_state(NUMPY, theta, no_shift, no_shift).host


def log_share_above(problem: Problem, theta: Mapping[str, FloatArray], channel: str, value: float) -> FloatArray:
    """Log of the share of hosts (with warm dust, for that channel) whose true value lies above `value`; shape (S,)."""
    state = host_state(problem, theta)
    if len(state.mean) == 2:
        state = HostState({channel: state.mean[channel]}, {channel: state.sd[channel]}, None, state.shape)
    decision = Decision(channel, 1, 1.0, -value, _SHARP)
    return np.asarray(problem.family.log_integral(NUMPY, state, {}, [decision]))


def _above(problem: Problem, theta: Mapping[str, FloatArray], thresholds: Thresholds) -> list[Quantity]:
    result = []
    for channel in problem.channels:
        values = thresholds.of(channel)
        if not values:
            continue
        share = np.stack([np.exp(log_share_above(problem, theta, channel, value)) for value in values], axis=1)
        fraction = np.array(theta[names.DEBRIS_FRACTION])
        if channel == "excess" and problem.has(names.DUST_SHARE):
            fraction = fraction * theta[names.DUST_SHARE]
        stem = "debris_fraction" if channel == "pollution" else "dusty_fraction"
        dim = f"{CHANNELS[channel].value}_threshold"
        result.append(Quantity(f"{stem}_above", fraction[:, None] * share, dim, tuple(values)))
    return result


def median_limit(problem: Problem) -> float:
    """Limit that half the blind observed stars could have shown, in the first channel (log10)."""
    channel = problem.rows.channels[problem.channels[0]]
    use = problem.rows.blind & (channel.outcome != "unobserved") & np.isfinite(channel.limit)
    if not use.any():
        use = (channel.outcome != "unobserved") & np.isfinite(channel.limit)
    if not use.any():
        return float("nan")
    order = np.argsort(channel.limit[use])
    weight = np.cumsum(problem.rows.weight[use][order])
    return float(channel.limit[use][order][np.searchsorted(weight, 0.5 * weight[-1])])


def _extrapolated(problem: Problem, theta: Mapping[str, FloatArray]) -> FloatArray:
    size = len(theta[names.DEBRIS_FRACTION])
    middle = median_limit(problem)
    if not np.isfinite(middle):
        return np.full(size, np.nan)
    below = Decision(problem.channels[0], -1, 1.0, -middle, _SHARP)
    state = host_state(problem, theta)
    if len(state.mean) == 2:
        first = problem.channels[0]
        state = HostState({first: state.mean[first]}, {first: state.sd[first]}, None, state.shape)
    return np.asarray(np.exp(np.broadcast_to(problem.family.log_integral(NUMPY, state, {}, [below]), (size,))))
