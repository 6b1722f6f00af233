"""Limits of detected stars that the table does not give.

The likelihood of a "measured" detection does not need its limit. Completeness, depth bins and predictive checks do;
they take it from blind stars of the same survey and atmosphere, and say how many.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..catalog import Sample
from .curve import DetectionCurve

__all__ = ["FilledLimits", "filled_limits"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class FilledLimits:
    """Limits of every observed star.

    Attributes
    ----------
    limit : ndarray, shape (n,)
        Midpoint of the efficiency; NaN for unobserved stars.
    imputed : ndarray of bool, shape (n,)
        Where the limit was taken from other stars.
    borrowed : int
        How many of those had no blind star of their own survey and atmosphere and took from all blind stars.
    """

    limit: FloatArray
    imputed: npt.NDArray[np.bool_]
    borrowed: int


def filled_limits(sample: Sample, channel: str, curve: DetectionCurve, seed: int = 0) -> FilledLimits:
    """Fill missing limits by drawing from blind stars of the same survey and atmosphere.

    Parameters
    ----------
    sample : Sample
    channel : {"pollution", "excess"}
    curve : DetectionCurve
    seed : int
        Same seed, same draws.

    Returns
    -------
    FilledLimits
    """
    rng = np.random.default_rng(seed)
    table = sample.table
    observed = sample.observed(channel)
    limit = np.where(observed, curve.limit, np.nan)
    missing = observed & ~np.isfinite(limit)
    donors = observed & np.isfinite(limit) & (table["inclusion"].to_numpy(dtype=str) == "blind")
    if not donors.any():
        donors = observed & np.isfinite(limit)
    label = table["survey"].to_numpy(dtype=str) + "\0" + table["atmosphere"].to_numpy(dtype=str)
    borrowed = 0
    for kind in sorted(set(label[missing])):
        takers = np.flatnonzero(missing & (label == kind))
        givers = np.flatnonzero(donors & (label == kind))
        if not givers.size:
            givers, borrowed = np.flatnonzero(donors), borrowed + takers.size
        if givers.size:
            limit[takers] = curve.limit[rng.choice(givers, takers.size)]
    return FilledLimits(limit, missing & np.isfinite(limit), borrowed)
