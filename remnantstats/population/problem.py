"""A model posed on a sample: parameters, rows and the log-likelihood that both engines read."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..catalog import Sample
from ..sensitivity import CHANNELS, DetectionCurve, RecoveryTable
from . import parameters as names
from .efficiency import efficiency_of, log_recovered
from .families import FAMILIES, Family
from .gaussian import HostState
from .likelihood import SelectedTerms, StarState, log_likelihood_terms
from .ops import NUMPY, Array, ArrayOps, log_normal_density
from .parameters import Parameter
from .rows import Block, LatentCovariate, Rows
from .spec import PopulationModel

__all__ = ["Problem", "latent_nodes"]

FloatArray = npt.NDArray[np.float64]

#: Gauss–Hermite rule for a covariate known with error
_T, _W = np.polynomial.hermite_e.hermegauss(11)
_LOG_W = np.log(_W / _W.sum())


@dataclass(frozen=True)
class Problem:
    """A population model posed on a sample.

    Attributes
    ----------
    model : PopulationModel
    sample : Sample
    channels : tuple of str
        In use: "pollution", "excess" or both.
    curves : mapping of str to DetectionCurve
    rows : Rows
        One row a star, or weighted rows.
    blocks : tuple of Block
        The same rows by formula.
    parameters : tuple of Parameter
        Free and fixed.
    reference : mapping of str to float
        Covariate values at which `debris_fraction` and the mean rate hold.
    groups : tuple of str
        Names of the groups; empty where the model does not pool.
    recoveries : mapping of str to RecoveryTable
        Channels whose efficiency is inferred from injection and recovery.
    """

    model: PopulationModel
    sample: Sample
    channels: tuple[str, ...]
    curves: Mapping[str, DetectionCurve]
    rows: Rows
    blocks: tuple[Block, ...]
    parameters: tuple[Parameter, ...]
    reference: Mapping[str, float]
    groups: tuple[str, ...] = ()
    recoveries: Mapping[str, RecoveryTable] = field(default_factory=dict)

    @property
    def family(self) -> Family:
        """Family of true values."""
        return FAMILIES[self.model.file.family]

    @property
    def free(self) -> tuple[Parameter, ...]:
        """Parameters that are sampled."""
        return tuple(parameter for parameter in self.parameters if parameter.free)

    @property
    def dimension(self) -> int:
        """Length of the unconstrained vector."""
        return sum(parameter.size for parameter in self.free)

    def parameter(self, name: str) -> Parameter:
        """The parameter of that name."""
        return next(item for item in self.parameters if item.name == name)

    def has(self, name: str) -> bool:
        """Whether the posed model has a parameter."""
        return any(item.name == name for item in self.parameters)

    def log_likelihood(self, ops: ArrayOps, theta: Mapping[str, Array]) -> list[Array]:
        """Log-likelihood of each row, block by block.

        Parameters
        ----------
        ops : ArrayOps
            Array backend.
        theta : mapping of str to array
            Parameters by name, scalars or (in NumPy) shape (S, 1), and (S, 1, 1) for a model with a latent covariate;
            probabilities with their log-odds.

        Returns
        -------
        list of array
            One entry a block, shape (rows of the block,) or (S, rows of the block).
        """
        return [self._block(ops, block, theta) for block in self.blocks]

    def total(self, ops: ArrayOps, theta: Mapping[str, Array], axis_sum: Any) -> Array:
        """Weighted sum over all rows, the density of latent covariates included."""
        total: Array = 0.0
        for block, terms in zip(self.blocks, self.log_likelihood(ops, theta), strict=True):
            total = total + axis_sum(terms * block.rows.weight)
        if self.rows.latent is not None and self.rows.latent.nodes is None:
            total = total + axis_sum(self._covariate_density(ops, theta))
        for channel, table in self.recoveries.items():
            flat = {name: _flat(value) for name, value in theta.items()}
            for part in log_recovered(ops, channel, table, flat):
                total = total + axis_sum(part)
        return total

    def _block(self, ops: ArrayOps, block: Block, theta: Mapping[str, Array]) -> Array:
        latent = block.rows.latent
        nodes, log_weights = (None, None) if latent is None else latent_nodes(ops, latent, theta)
        state = self.state(ops, block.rows, theta, nodes)
        terms = log_likelihood_terms(ops, self.family, block, state)
        if latent is None:
            return terms
        if isinstance(terms, SelectedTerms):
            return ops.logsumexp(terms.above + log_weights) - ops.logsumexp(terms.below + log_weights)
        return ops.logsumexp(terms + log_weights)

    def _covariate_density(self, ops: ArrayOps, theta: Mapping[str, Array]) -> Array:
        """Log density of the blind stars' estimates of a latent covariate; selected stars are no fair sample of it."""
        latent = self.rows.latent
        if latent is None:
            raise ValueError("the model has no latent covariate")
        mean, sd = (_flat(theta[key]) for key in _latent_names(latent))
        density = log_normal_density(ops, latent.estimate, mean, sd**2 + latent.error**2)
        return density * np.where(self.rows.blind, self.rows.weight, 0.0)

    def state(self, ops: ArrayOps, rows: Rows, theta: Mapping[str, Array], nodes: Array | None = None) -> StarState:
        """The population as the given rows see it.

        Parameters
        ----------
        ops : ArrayOps
            Array backend.
        rows : Rows
            Rows.
        theta : mapping
            As for `log_likelihood`.
        nodes : array, optional
            Values of the latent covariate, shape (rows, K).

        Returns
        -------
        StarState
        """
        odds: Array = 0.0
        shift: Array = 0.0
        for covariate in self.model.covariates:
            z = nodes if nodes is not None and covariate.name == _latent_name(rows) else None
            if z is None:
                z = _column(rows.covariates[covariate.name], nodes)
            if "fraction" in covariate.acts_on:
                odds = odds + theta[names.fraction_slope(covariate.name)] * z
            if "rate" in covariate.acts_on:
                shift = shift + theta[names.rate_slope(covariate.name)] * z
        if self.has(names.fraction_offset()):
            helium = _column(rows.helium.astype(float), nodes)
            odds = odds + theta[names.fraction_offset()] * helium
            if self.has(names.rate_offset()):
                shift = shift + theta[names.rate_offset()] * helium
        if self.groups:
            # simulation hands over one deviation a row
            by_row = names.ROW_DEVIATION in theta
            effect = theta[names.ROW_DEVIATION] if by_row else ops.take(theta[names.GROUP_RAW], rows.group)
            odds = odds + theta[names.GROUP_SD] * (effect if nodes is None else ops.trailing(effect))
        state = self.star_state(ops, theta, odds, shift)
        if not self.recoveries:
            return state
        efficiency = {
            channel: efficiency_of(ops, channel, table, rows.channels[channel], theta, nodes is not None)
            for channel, table in self.recoveries.items()
        }
        return replace(state, efficiency=efficiency)

    def star_state(self, ops: ArrayOps, theta: Mapping[str, Array], odds: Array, shift: Array) -> StarState:
        """The population at given shifts of the log-odds and of the mean log rate."""
        fraction = self.parameter(names.DEBRIS_FRACTION)
        log_f: Array = 0.0
        log_no: Array | None = None
        if fraction.free or fraction.prior.value < 1:
            odds = theta[names.logit_of(names.DEBRIS_FRACTION)] + odds
            log_f, log_no = ops.log_expit(odds), ops.log_expit(-odds)
        mean, sd = {}, {}
        for position, channel in enumerate(self.channels):
            value = CHANNELS[channel].value
            if not self.family.location_scale:
                mean[channel], sd[channel] = 0.0, 0.0
                continue
            mean[channel] = theta[f"mean_{value}"] + (shift if position == 0 else 0.0)
            sd[channel] = theta[f"sd_{value}"]
        log_d = log_no_dust = None
        if self.has(names.DUST_SHARE):
            share = self.parameter(names.DUST_SHARE)
            if share.free or share.prior.value < 1:
                logit = theta[names.logit_of(names.DUST_SHARE)]
                log_d, log_no_dust = ops.log_expit(logit), ops.log_expit(-logit)
        correlation = theta[names.CORRELATION] if self.has(names.CORRELATION) else None
        shape = {key: theta[key] for key in self.family.shape_parameters} | dict(self.model.file.constants)
        return StarState(log_f, log_no, HostState(mean, sd, correlation, shape), log_d, log_no_dust)

    # the unconstrained scale -----------------------------------------------------------------------------------------

    def theta(self, u: FloatArray) -> dict[str, FloatArray]:
        """Parameters from unconstrained vectors.

        Parameters
        ----------
        u : ndarray, shape (S, dimension)

        Returns
        -------
        dict
            Each of shape (S,), or (S, size) for the groups' deviations; fixed ones are scalars.
        """
        theta: dict[str, Any] = {}
        at = 0
        for parameter in self.parameters:
            if not parameter.free:
                value = parameter.fixed_value
                theta[parameter.name] = np.float64(value)
                if parameter.support == "unit" and value < 1:
                    theta[names.logit_of(parameter.name)] = np.float64(np.log(value) - np.log1p(-value))
                continue
            part = u[:, at : at + parameter.size]
            at += parameter.size
            theta.update(parameter.constrain(part[:, 0] if parameter.name != names.GROUP_RAW else part))
        return theta

    def log_posterior(self, u: FloatArray) -> FloatArray:
        """Log posterior density on the unconstrained scale, up to a constant.

        Parameters
        ----------
        u : ndarray, shape (S, dimension)

        Returns
        -------
        ndarray, shape (S,)
        """
        return self.log_prior(u) + self.log_likelihood_of(u)

    def log_prior(self, u: FloatArray) -> FloatArray:
        """Log prior density on the unconstrained scale; shape (S,)."""
        total, at = np.zeros(len(u)), 0
        for parameter in self.free:
            total = total + parameter.log_prior(u[:, at : at + parameter.size]).sum(axis=1)
            at += parameter.size
        return total

    def log_likelihood_of(self, u: FloatArray) -> FloatArray:
        """Log-likelihood of unconstrained vectors; shape (S,)."""
        chunk = self.chunk
        parts = [
            np.broadcast_to(
                self.total(NUMPY, self.lift(self.theta(u[start : start + chunk])), lambda x: np.sum(x, axis=-1)),
                (len(u[start : start + chunk]),),
            )
            for start in range(0, len(u), chunk)
        ]
        return np.concatenate(parts) if parts else np.empty(0)

    def pointwise(self, theta: Mapping[str, FloatArray]) -> FloatArray:
        """Log-likelihood per row.

        Parameters
        ----------
        theta : mapping
            As `theta` gives; S draws.

        Returns
        -------
        ndarray, shape (S, rows)
            Zero for rows unobserved in every channel.
        """
        size = max((np.shape(value)[0] for value in theta.values() if np.ndim(value)), default=1)
        result = np.zeros((size, len(self.rows)))
        order = {int(row): position for position, row in enumerate(self.rows.star)}
        for start in range(0, size, self.chunk):
            part = {key: value[start : start + self.chunk] if np.ndim(value) else value for key, value in theta.items()}
            for block, terms in zip(self.blocks, self.log_likelihood(NUMPY, self.lift(part)), strict=True):
                where = [order[int(row)] for row in block.rows.star]
                result[start : start + self.chunk, where] = terms
        return result

    @property
    def chunk(self) -> int:
        """How many draws are evaluated at once, so that memory stays bounded."""
        latent = 1 if self.rows.latent is None else len(_T)
        widest = max((len(block.rows) * self.family.breadth(block.decisions) for block in self.blocks), default=1)
        return int(np.clip(4_000_000 // max(widest * latent, 1), 1, 4096))

    def lift(self, theta: Mapping[str, FloatArray]) -> dict[str, Array]:
        """Give draws the trailing axes on which rows (and latent nodes) stand."""
        axes = 1 if self.rows.latent is None else 2
        return {
            key: value if np.ndim(value) == 0 or key == names.GROUP_RAW else value.reshape(value.shape + (1,) * axes)
            for key, value in theta.items()
        }


def latent_nodes(ops: ArrayOps, latent: LatentCovariate, theta: Mapping[str, Array]) -> tuple[Array, Array]:
    """Values and log weights that stand for a star's own posterior of a covariate known with error.

    That posterior is N(ẑ; z, s²) p(z), p(z) normal with free mean and spread: the sample's own distribution. A star's
    error distribution alone would leave the slope attenuated.
    """
    if latent.nodes is not None:
        return latent.nodes, latent.log_weights
    mean, sd = (theta[key] for key in _latent_names(latent))
    estimate, error = latent.estimate[:, None], latent.error[:, None]
    total = sd**2 + error**2
    centre = (mean * error**2 + estimate * sd**2) / total
    return centre + sd * error / ops.sqrt(total) * _T, _LOG_W


def _latent_names(latent: LatentCovariate) -> tuple[str, str]:
    return names.covariate_mean(latent.name), names.covariate_sd(latent.name)


def _latent_name(rows: Rows) -> str:
    return "" if rows.latent is None else rows.latent.name


def _column(x: FloatArray, nodes: Array | None) -> FloatArray:
    return x if nodes is None else x[:, None]


def _flat(x: Array) -> Array:
    """Undo the latent axis of a parameter's draws."""
    return x[..., 0] if isinstance(x, np.ndarray) and x.ndim == 3 else x
