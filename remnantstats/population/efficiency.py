"""Efficiency of the true value, inferred from injection and recovery together with the population."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import scipy.special

from ..sensitivity import RecoveryTable
from .distributions import Beta, LogNormal, Normal
from .likelihood import Efficiency
from .ops import Array, ArrayOps
from .parameters import Parameter, logit_of
from .rows import ChannelRows

__all__ = ["efficiency_of", "efficiency_parameters", "log_recovered"]


def _names(channel: str, label: str) -> tuple[str, str, str]:
    where = f"{channel}:{label or 'all'}"
    return f"efficiency_midpoint[{where}]", f"efficiency_width[{where}]", f"efficiency_ceiling[{where}]"


def efficiency_parameters(channel: str, table: RecoveryTable) -> list[Parameter]:
    """Midpoint, width and ceiling of each class, with weak priors scaled to the table.

    Parameters
    ----------
    channel : str
    table : RecoveryTable
        By class or for all stars.

    Returns
    -------
    list of Parameter
    """
    found = []
    for position, label in enumerate(table.labels):
        value, _, _ = table.of(position)
        midpoint, width, ceiling = _names(channel, label)
        spread = max(float(np.ptp(value)), 0.5)
        basis = "weak, scaled to the injections"
        found.append(Parameter(midpoint, Normal(mean=float(np.median(value)), sd=spread, basis=basis), "real"))
        found.append(Parameter(width, LogNormal(mean_log=float(np.log(0.2)), sd_log=1.0, basis="weak"), "positive"))
        found.append(Parameter(ceiling, Beta(alpha=1, beta=1, basis="uniform"), "unit"))
    return found


def efficiency_of(
    ops: ArrayOps, channel: str, table: RecoveryTable, rows: ChannelRows, theta: Mapping[str, Array], latent: bool
) -> Efficiency:
    """The efficiency as the rows of one block see it.

    Parameters
    ----------
    ops : ArrayOps
    channel : str
    table : RecoveryTable
    rows : ChannelRows
    theta : mapping
        As for the likelihood.
    latent : bool
        Whether the rows carry an axis of latent nodes.

    Returns
    -------
    Efficiency
    """
    limit: Array = 0.0
    width: Array = 0.0
    log_ceiling: Array = 0.0
    log_missed: Array = 0.0
    index = np.full(len(rows.value), -1) if rows.recovery is None else rows.recovery
    for position, label in enumerate(table.labels):
        mine = (index == position).astype(float)
        mine = mine[:, None] if latent else mine
        midpoint_name, width_name, ceiling_name = _names(channel, label)
        logit = theta[logit_of(ceiling_name)]
        limit = limit + theta[midpoint_name] * mine
        width = width + theta[width_name] * mine
        log_ceiling = log_ceiling + ops.log_expit(logit) * mine
        log_missed = log_missed + ops.log_expit(-logit) * mine
    # rows not observed in the channel never use theirs; a width keeps them finite
    idle = (index < 0).astype(float)
    return Efficiency(limit, width + (idle[:, None] if latent else idle), log_ceiling, log_missed)


def log_recovered(ops: ArrayOps, channel: str, table: RecoveryTable, theta: Mapping[str, Array]) -> list[Array]:
    """Binomial log-likelihood of each row of the recovery table, label by label.

    Parameters
    ----------
    ops : ArrayOps
    channel : str
    table : RecoveryTable
    theta : mapping
        Scalars, or draws of shape (S, 1).

    Returns
    -------
    list of array
        Shape (rows of the label,) or (S, rows of the label).
    """
    parts = []
    for position, label in enumerate(table.labels):
        value, injected, recovered = table.of(position)
        midpoint_name, width_name, ceiling_name = _names(channel, label)
        logit = theta[logit_of(ceiling_name)]
        z = (value - theta[midpoint_name]) / theta[width_name]
        log_found = ops.log_expit(logit) + ops.log_ndtr(z)
        log_lost = ops.logaddexp(ops.log_expit(-logit) + 0.0 * z, ops.log_expit(logit) + ops.log_ndtr(-z))
        ways = scipy.special.gammaln(injected + 1) - scipy.special.gammaln(recovered + 1)
        ways = ways - scipy.special.gammaln(injected - recovered + 1)
        parts.append(ways + recovered * log_found + (injected - recovered) * log_lost)
    return parts
