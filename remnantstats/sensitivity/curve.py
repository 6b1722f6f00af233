"""What could have been seen: one detection curve per star and channel."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
import scipy.special

from ..catalog import Sample
from .settings import ChannelSettings

__all__ = ["CHANNELS", "Channel", "DetectionCurve", "detection_curve"]

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
    ceiling : float
        Best efficiency, (0, 1].
    threshold_on : {"measured", "true"}
        The kind of selection.
    spurious_scale : float
        dex, half-normal scale of spurious detections above the limit.
    """

    limit: FloatArray
    width: FloatArray
    false_positive: FloatArray
    ceiling: float
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
        return np.asarray(self.ceiling * scipy.special.ndtr(z))


def detection_curve(sample: Sample, channel: str, settings: ChannelSettings) -> DetectionCurve:
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

    Returns
    -------
    DetectionCurve
    """
    names = CHANNELS[channel]
    table = sample.table
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


def midpoint_shift(settings: ChannelSettings) -> float:
    """Distance, in widths, from the midpoint of the efficiency up to the limit as quoted."""
    if settings.limit_efficiency is None:
        return 0.0
    return float(scipy.special.ndtri(settings.limit_efficiency / settings.ceiling))


def _column(table: object, name: str, default: float) -> FloatArray:
    frame = table
    size = len(frame)  # type: ignore[arg-type]
    if name not in frame:  # type: ignore[operator]
        return np.full(size, default)
    values = np.asarray(frame[name], dtype=float)  # type: ignore[index]
    return np.where(np.isnan(values), default, values)
