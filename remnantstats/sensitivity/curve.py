"""What could have been seen: one detection curve per star and channel."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.special

from ..catalog import Sample
from ..errors import Fault, InputError
from .recovery import RecoveryTable, fit_efficiency
from .settings import ChannelSettings

__all__ = ["CHANNELS", "Channel", "DetectionCurve", "detection_curve", "midpoint_shift", "recovery_index"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Channel:
    """Names of one channel's columns and quantities."""

    name: Literal["pollution", "excess"]
    value: str
    label: str
    unit: str
    known: str

    @property
    def error(self) -> str:
        """Column of the error that took part in the decision."""
        return f"{self.value}_err"

    @property
    def calibration(self) -> str:
        """Column of the error that did not."""
        return f"{self.value}_calibration_err"

    @property
    def limit(self) -> str:
        """Column of the limit."""
        return f"{self.value}_limit"

    @property
    def width(self) -> str:
        """Column of the star's own width."""
        return f"{self.value}_width"

    @property
    def false_positive(self) -> str:
        """Column of the star's own false-positive probability."""
        return f"{self.name}_false_positive"


CHANNELS = {
    "pollution": Channel("pollution", "log_accretion", "accretion rate", "g/s", "known-polluted"),
    "excess": Channel("excess", "log_dust", "dust luminosity", "stellar", "known-dusty"),
}


@dataclass(frozen=True)
class DetectionCurve:
    """Detection curves of one channel, one entry a star.

    Attributes
    ----------
    limit : ndarray, shape (n,)
        Midpoint of the efficiency, where it is half the ceiling (log10 of the channel's quantity); NaN where not known.
    width : ndarray, shape (n,)
        dex, > 0.
    false_positive : ndarray, shape (n,)
        Probability in [0, 1) that a star not genuinely detected is listed as detected.
    ceiling : float, or ndarray of shape (n,)
        Best efficiency, (0, 1]; by star where it comes from an injection–recovery table.
    threshold_on : {"measured", "true"}
        The kind of selection.
    spurious_scale : float
        dex, half-normal scale of spurious detections above the limit.
    """

    limit: FloatArray
    width: FloatArray
    false_positive: FloatArray
    ceiling: float | FloatArray
    threshold_on: Literal["measured", "true"]
    spurious_scale: float

    def efficiency(self, value: npt.ArrayLike) -> FloatArray:
        """Probability of a genuine detection at a true value.

        Parameters
        ----------
        value : array_like, shape (m,)
            True log10 value.

        Returns
        -------
        ndarray, shape (n, m)
            In [0, ceiling].
        """
        grid = np.atleast_1d(np.asarray(value, dtype=float))
        z = (grid[None, :] - self.limit[:, None]) / self.width[:, None]
        return np.asarray(np.reshape(self.ceiling, (-1, 1)) * scipy.special.ndtr(z))


def detection_curve(
    sample: Sample, channel: str, settings: ChannelSettings, recovery: RecoveryTable | None = None
) -> DetectionCurve:
    """Bring a channel's limits to one form.

    A limit quoted at efficiency e moves to the midpoint: L_50 = L − w Φ⁻¹(e / c).

    Parameters
    ----------
    sample : Sample
        The stars.
    channel : {"pollution", "excess"}
        Which channel.
    settings : ChannelSettings
        The study's table for it.
    recovery : RecoveryTable, optional
        Injection–recovery counts; the curve is then their best fit. A star's own counts leave its midpoint uncertain:
        that error, normal, widens the curve.

    Returns
    -------
    DetectionCurve

    Raises
    ------
    InputError
        Where an observed star has no counts.
    """
    names = CHANNELS[channel]
    table = sample.table
    if recovery is not None:
        limit, width, ceiling = _from_recovery(sample, channel, recovery)
        false_positive = _column(table, names.false_positive, settings.false_positive)
        return DetectionCurve(limit, width, false_positive, ceiling, "true", settings.spurious_scale)
    width = _column(table, names.width, settings.width)
    limit = _column(table, names.limit, np.nan)
    return DetectionCurve(
        limit=limit - width * midpoint_shift(settings),
        width=width,
        false_positive=_column(table, names.false_positive, settings.false_positive),
        ceiling=settings.ceiling,
        threshold_on=settings.threshold_on,
        spurious_scale=settings.spurious_scale,
    )


def recovery_index(sample: Sample, channel: str, recovery: RecoveryTable) -> npt.NDArray[np.int64]:
    """Position of each star's label in the recovery table; −1 for stars not observed in the channel.

    Raises
    ------
    InputError
        Where an observed star has no counts.
    """
    observed = sample.observed(channel)
    if recovery.by == "all":
        return np.where(observed, 0, -1)
    column = "star" if recovery.by == "star" else "survey"
    place = {label: position for position, label in enumerate(recovery.labels)}
    index = np.array([place.get(str(label), -1) for label in sample.table[column]], dtype=np.int64)
    lacking = np.flatnonzero(observed & (index < 0))
    if lacking.size:
        raise InputError(
            Fault(
                f"{lacking.size} observed stars have no counts in the efficiency table",
                where=f"{recovery.source}; first {sample.place(int(lacking[0]))}",
                found=f"{column} '{sample.table[column].iloc[lacking[0]]}'",
                allowed=f"a {recovery.by} of the table: " + ", ".join(recovery.labels[:8]),
                remedy="add its counts, or set the star to unobserved",
            )
        )
    return np.where(observed, index, -1)


def _from_recovery(
    sample: Sample, channel: str, recovery: RecoveryTable
) -> tuple[FloatArray, FloatArray, FloatArray]:
    index = recovery_index(sample, channel, recovery)
    fits = [fit_efficiency(*recovery.of(position)) for position in range(len(recovery.labels))]
    own = recovery.by == "star"
    limit = np.array([fit.limit for fit in fits] + [np.nan])[index]
    width = np.array([np.hypot(fit.width, fit.limit_error if own else 0.0) for fit in fits] + [np.nan])[index]
    ceiling = np.array([fit.ceiling for fit in fits] + [1.0])[index]
    return limit, width, ceiling


def midpoint_shift(settings: ChannelSettings) -> float:
    """Distance, in widths, from the midpoint of the efficiency up to the limit as quoted."""
    if settings.limit_efficiency is None:
        return 0.0
    return float(scipy.special.ndtri(settings.limit_efficiency / settings.ceiling))


def _column(table: pd.DataFrame, name: str, default: float) -> FloatArray:
    if name not in table:
        return np.full(len(table), default)
    values = table[name].to_numpy(dtype=np.float64)
    return np.where(np.isnan(values), default, values)
