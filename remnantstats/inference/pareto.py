"""Pareto smoothing of importance weights, from ArviZ's statistics."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import scipy.special
from arviz_stats.base import array_stats

__all__ = ["smooth_weights"]

FloatArray = npt.NDArray[np.float64]


def smooth_weights(log_weight: FloatArray) -> tuple[FloatArray, float]:
    """Smooth and normalise importance weights.

    Parameters
    ----------
    log_weight : ndarray, shape (S,)
        Raw log weights; −inf allowed.

    Returns
    -------
    log_weight : ndarray, shape (S,)
        Smoothed; their exponentials sum to 1.
    k_hat : float
        Pareto k̂; infinite where too few weights are positive.

    References
    ----------
    Vehtari et al. 2024, JMLR 25, 72.
    """
    good = np.isfinite(log_weight)
    result = np.full(log_weight.shape, -np.inf)
    kept = log_weight[good]
    if np.ptp(kept) < 1e-9:
        result[good] = -np.log(good.sum())
        return result, 0.0
    if good.sum() < 100:
        result[good] = kept - scipy.special.logsumexp(kept)
        return result, float("inf")
    # the function is written for leave-one-out and takes the negative of the log weights
    smoothed, k_hat = array_stats.psislw(kept.max() - kept)
    result[good] = smoothed - scipy.special.logsumexp(smoothed)
    return result, float(k_hat)
