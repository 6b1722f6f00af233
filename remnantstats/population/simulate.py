"""Simulation from the same model definition that the likelihood reads."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import Fault, ModelError
from .gaussian import HostState
from .likelihood import StarState
from .ops import NUMPY
from .parameters import GROUP_RAW
from .problem import Problem, latent_nodes
from .rows import DETECTED, LIMIT, UNOBSERVED, ChannelRows, Rows

__all__ = ["ChannelOutcome", "Simulated", "simulate"]

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

#: rounds of rejection before a selection is called too rare
_ROUNDS = 5000


@dataclass(frozen=True)
class ChannelOutcome:
    """What a survey lists for one channel; every array has shape (n,).

    Attributes
    ----------
    outcome : ndarray of str
        "detected", "limit" or "unobserved".
    value : ndarray
        Tabulated value, NaN where not detected.
    genuine : ndarray of bool
        The star was genuinely detected.
    truth : ndarray
        True value, NaN where there is none.
    """

    outcome: npt.NDArray[np.str_]
    value: FloatArray
    genuine: BoolArray
    truth: FloatArray


@dataclass(frozen=True)
class Simulated:
    """A simulated survey.

    Attributes
    ----------
    channels : mapping of str to ChannelOutcome
    has_debris, has_dust : ndarray of bool, shape (n,)
    """

    channels: Mapping[str, ChannelOutcome]
    has_debris: BoolArray
    has_dust: BoolArray


def simulate(rng: np.random.Generator, problem: Problem, rows: Rows, theta: Mapping[str, Any]) -> Simulated:
    """Draw what a survey of these rows would list.

    Parameters
    ----------
    rng : numpy.random.Generator
    problem : Problem
        Model and channels.
    rows : Rows
        The design, complete: limits, widths and errors for every observed row.
    theta : mapping
        One set of parameters, or arrays of shape (n,) with one set a row.

    Returns
    -------
    Simulated

    Raises
    ------
    ModelError
        Where stars chosen for known pollution are so rare under these parameters that none could be drawn.
    """
    hosts = _Hosts.draw(rng, problem, rows, theta)
    noise = {name: rng.standard_normal(len(rows)) for name in rows.channels}
    pending = np.flatnonzero(~rows.blind & ~hosts.accepted(rng, rows, noise))
    for _ in range(_ROUNDS):
        if not pending.size:
            break
        part = rows.take(pending)
        again = _Hosts.draw(rng, problem, part, _theta_of(theta, pending, len(rows)))
        fresh = {name: rng.standard_normal(pending.size) for name in rows.channels}
        passed = again.accepted(rng, part, fresh)
        hosts = hosts.replaced(pending[passed], again, passed)
        for name in noise:
            noise[name][pending[passed]] = fresh[name][passed]
        pending = pending[~passed]
    if pending.size:
        raise ModelError(
            Fault(
                f"{pending.size} stars selected for known debris could not be drawn: under these parameters such stars "
                "are too rare",
                where="selection_limit of the design",
                remedy="lower the selection limits, or raise the rates of the truth",
            )
        )
    listed = {
        name: _listed(rng, channel, hosts.truth[name], hosts.present(name), noise[name])
        for name, channel in rows.channels.items()
    }
    return Simulated(listed, hosts.has_debris, hosts.has_dust)


def _theta_of(theta: Mapping[str, Any], index: npt.NDArray[np.int64], size: int) -> dict[str, Any]:
    """Parameters for some of the rows, where they differ from row to row."""
    return {
        key: value[index] if np.ndim(value) == 1 and len(value) == size and key != GROUP_RAW else value
        for key, value in theta.items()
    }


@dataclass
class _Hosts:
    """True states of the stars."""

    has_debris: BoolArray
    has_dust: BoolArray
    truth: dict[str, FloatArray]

    @classmethod
    def draw(cls, rng: np.random.Generator, problem: Problem, rows: Rows, theta: Mapping[str, Any]) -> _Hosts:
        size = len(rows)
        if rows.latent is not None:
            rows = _with_true_covariate(rng, rows, theta)
        state = problem.state(NUMPY, rows, theta)
        has_debris = rng.random(size) < np.exp(np.broadcast_to(state.log_f, size))
        share = 1.0 if state.log_d is None else np.exp(state.log_d)
        has_dust = has_debris & (rng.random(size) < share)
        truth = problem.family.simulate(rng, _spread(state, size), size)
        return cls(has_debris, has_dust, dict(truth))

    def present(self, channel: str) -> BoolArray:
        """Whether the star has a true value in a channel."""
        return self.has_dust if channel == "excess" and len(self.truth) == 2 else self.has_debris

    def accepted(self, rng: np.random.Generator, rows: Rows, noise: Mapping[str, FloatArray]) -> BoolArray:
        """Whether a star passes the observation that puts it in the sample; blind stars pass."""
        passed = np.array(rows.blind)
        for name, channel in rows.channels.items():
            chosen = ~rows.blind & np.isfinite(channel.selection_limit)
            own = np.where(channel.same, noise[name], rng.standard_normal(len(rows)))
            crossed = self.truth[name] + channel.selection_width * own > channel.selection_limit
            passed |= chosen & self.present(name) & crossed
        return passed

    def replaced(self, index: npt.NDArray[np.int64], other: _Hosts, passed: BoolArray) -> _Hosts:
        self.has_debris[index] = other.has_debris[passed]
        self.has_dust[index] = other.has_dust[passed]
        for name in self.truth:
            self.truth[name][index] = other.truth[name][passed]
        return self


def _with_true_covariate(rng: np.random.Generator, rows: Rows, theta: Mapping[str, Any]) -> Rows:
    """Draw the true covariate of each star from its own posterior."""
    latent = rows.latent
    if latent is None:
        return rows
    if latent.nodes is None or latent.log_weights is None:
        upright = {key: value[:, None] if np.ndim(value) == 1 else value for key, value in theta.items()}
        nodes, _ = latent_nodes(NUMPY, latent, upright)
        centre, reach = nodes.mean(axis=1), (nodes[:, -1] - nodes[:, 0]) / 2
        unit = float(np.polynomial.hermite_e.hermegauss(nodes.shape[1])[0][-1])
        z = centre + reach / unit * rng.standard_normal(len(rows))
    else:
        chance = np.exp(latent.log_weights).cumsum(axis=1)
        pick = (rng.random((len(rows), 1)) * chance[:, -1:] > chance).sum(axis=1)
        z = latent.nodes[np.arange(len(rows)), pick]
    return replace(rows, covariates={**rows.covariates, latent.name: z}, latent=None)


def _spread(state: StarState, size: int) -> HostState:
    """The host state with means of full length."""
    return replace(state.host, mean={name: np.broadcast_to(mean, size) for name, mean in state.host.mean.items()})


def _listed(
    rng: np.random.Generator,
    channel: ChannelRows,
    truth: FloatArray,
    present: BoolArray,
    noise: FloatArray,
) -> ChannelOutcome:
    """Apply a channel's selection, its noise and its spurious detections."""
    size = len(truth)
    decided = truth + channel.width * noise
    seen = rng.random(size) < channel.ceiling
    # a star selected by this very observation was not missed by it
    seen |= channel.same
    genuine = present & seen & (decided > channel.limit) & (channel.outcome != UNOBSERVED)
    if channel.threshold_on == "measured":
        value = decided + channel.calibration * rng.standard_normal(size)
    else:
        total = np.sqrt(channel.error**2 + channel.calibration**2)
        value = truth + total * rng.standard_normal(size)
    spurious = ~genuine & (channel.outcome != UNOBSERVED) & (rng.random(size) < channel.false_positive)
    excess = np.abs(rng.standard_normal(size)) * channel.spurious_scale
    value = np.where(spurious, channel.limit + excess, np.where(genuine, value, np.nan))
    outcome = np.where(channel.outcome == UNOBSERVED, UNOBSERVED, np.where(genuine | spurious, DETECTED, LIMIT))
    return ChannelOutcome(outcome, value, genuine, np.where(present, truth, np.nan))
