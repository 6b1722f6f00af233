"""What looks like debris and is not, as probabilities and flags."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from .arrays import Bools, Floats, as_floats

__all__ = ["HOT_LIMIT", "any_of", "chance_alignment", "hot_stars"]

#: K. Common practice, no source: in hotter H atmospheres radiation can hold metals up, so that they need not be debris
HOT_LIMIT = 25_000.0


def chance_alignment(radius: ArrayLike, density: ArrayLike) -> Floats:
    """Probability that at least one unrelated source falls within the matching radius.

    Parameters
    ----------
    radius : array_like
        Matching radius, arcsec, non-negative.
    density : array_like, broadcast with it
        Background sources a square arcsec, non-negative.

    Returns
    -------
    ndarray
        1 − exp(−π r² n), within [0, 1).

    Notes
    -----
    Sources strewn at random: the Poisson probability of at least one in the area π r². METHODS §11.
    """
    return as_floats(-np.expm1(-np.pi * as_floats(radius) ** 2 * as_floats(density)))


def any_of(*probabilities: ArrayLike) -> Floats:
    """Probability that at least one of several independent contaminants is present.

    Parameters
    ----------
    *probabilities : array_like, broadcast together
        Each within [0, 1].

    Returns
    -------
    ndarray
        1 − Π(1 − p), within [0, 1]; 0 where no probability is given.
    """
    log_none = as_floats(0.0)
    with np.errstate(divide="ignore"):
        for probability in probabilities:
            log_none = as_floats(log_none + np.log1p(-as_floats(probability)))
    return as_floats(-np.expm1(log_none))


def hot_stars(teff: ArrayLike, limit: float = HOT_LIMIT) -> Bools:
    """Mark stars so hot that radiation may hold metals in their atmospheres.

    Parameters
    ----------
    teff : array_like, any shape
        Effective temperature, K.
    limit : float, optional
        K.

    Returns
    -------
    ndarray of bool
        True where ``teff > limit``; a missing temperature is not marked.
    """
    return np.asarray(as_floats(teff) > limit, dtype=np.bool_)
