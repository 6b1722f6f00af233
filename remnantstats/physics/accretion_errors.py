"""Rates from abundances with their errors: what took part in the detection, and what did not."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from .accretion import BULK_EARTH, log_conversion
from .arrays import Floats, as_floats
from .settling import SettlingGrid, broadcast
from .settling_table import SettlingTable

__all__ = ["AccretionRates", "StarParameters", "rate_with_errors"]

#: rows × draws handled at once: some tens of megabytes
_CHUNK_POINTS = 1_000_000


@dataclass(frozen=True)
class StarParameters:
    """What the conversion needs to know of each star; the arrays broadcast together to shape (n,).

    Parameters
    ----------
    atmosphere : str or array of str
        ``"H"`` or ``"He"``.
    teff, teff_err : array_like
        Effective temperature and its standard error, K.
    logg, logg_err : array_like
        Surface gravity and its standard error, dex(cm s⁻²).
    mass : array_like
        Msun. Its own error moves the rate by well under 0.1 dex and is not carried.
    """

    atmosphere: Any
    teff: ArrayLike
    teff_err: ArrayLike
    logg: ArrayLike
    logg_err: ArrayLike
    mass: ArrayLike


@dataclass(frozen=True)
class AccretionRates:
    """Rates, limits and errors; all arrays of shape (n,).

    Parameters
    ----------
    log_rate, log_limit : ndarray
        log10 g s⁻¹ at the star's best parameters; NaN where no abundance, or no limit, was given.
    decision_err : ndarray
        dex, from the noise of the spectrum alone: this error took part in the decision "detected". NaN without a value.
    calibration_err : ndarray
        dex, from teff, logg and the model: this one did not. It is common to `log_rate` and `log_limit` (correlation
        1): their difference is that of the abundances, whatever the star's parameters.
    calibration_bias : ndarray
        dex: mean over the draws less the value at the best parameters. Far from 0 where the grid bends within the
        errors; not applied.
    clamped_share : ndarray
        Share of draws that fell outside the grid and were moved to its edge: where it is large, `calibration_err` is
        too small.
    """

    log_rate: Floats
    log_limit: Floats
    decision_err: Floats
    calibration_err: Floats
    calibration_bias: Floats
    clamped_share: Floats


def rate_with_errors(
    grid: SettlingGrid,
    stars: StarParameters,
    element: Any,
    log_abundance: ArrayLike,
    log_abundance_err: ArrayLike,
    log_abundance_limit: ArrayLike = np.nan,
    *,
    rng: np.random.Generator,
    draws: int = 64,
    model_err: ArrayLike = 0.0,
    abundance_slopes: tuple[float, float] = (0.0, 0.0),
    shares: Mapping[str, float] = BULK_EARTH,
    labels: Sequence[str] | None = None,
) -> AccretionRates:
    """Rates of all debris and their errors, by Monte Carlo over the star's parameters.

    Parameters
    ----------
    grid : SettlingGrid
        With convection-zone masses.
    stars : StarParameters
        Shape (n,). A missing `teff_err` or `logg_err` leaves `calibration_err` NaN.
    element : str or array of str, shape (n,)
        The metal measured.
    log_abundance, log_abundance_err, log_abundance_limit : array_like, shape (n,)
        log10 n(Z)/n(H or He), the error from the spectrum's noise (dex), and the limit; NaN where absent.
    rng : numpy.random.Generator
        The only source of randomness. Draws are taken star by star: the result does not depend on chunks.
    draws : int, optional
        Draws of (teff, logg) a star, at least 2; 64 give `calibration_err` to 9 %.
    model_err : array_like, shape (n,), optional
        Further error of the grid and of the atmosphere model, dex; added in quadrature.
    abundance_slopes : tuple of float, optional
        How the abundance read off a given spectrum changes with the parameters assumed: dex per K, dex per dex.
    shares : mapping, optional
        Mass share of each element in the debris; bulk Earth unless given.
    labels : sequence of str, optional
        Names of the stars, for messages.

    Returns
    -------
    AccretionRates

    Raises
    ------
    InputError
        Where a star's best parameters are outside the grid, or the grid has no convection-zone mass.

    Notes
    -----
    A decision error of the log abundance is one of the log rate. Time: 10⁶ stars with 64 draws in about 10 s.
    """
    kinds, symbols, teff, logg = broadcast(stars.atmosphere, element, stars.teff, stars.logg)
    value, value_err, limit, mass, extra, teff_err, logg_err = (
        np.broadcast_to(as_floats(item), teff.shape)
        for item in (
            log_abundance,
            log_abundance_err,
            log_abundance_limit,
            stars.mass,
            model_err,
            stars.teff_err,
            stars.logg_err,
        )
    )
    grid.refuse_outside(kinds, symbols, teff, logg, labels)
    best, errors = np.stack((teff, logg), axis=-1), np.stack((teff_err, logg_err), axis=-1)
    spread = np.empty((teff.size, 4))
    for part in _chunks(teff.size, draws):
        deviates = rng.standard_normal((part.stop - part.start, draws, 2))
        for table, rows in grid.by_table(kinds[part], symbols[part]):
            chosen = rows + part.start
            spread[chosen] = _spread(table, best[chosen], errors[chosen], deviates[rows], abundance_slopes)
    # the settling time and the mixed mass enter through their ratio alone, which is the first column of `spread`
    shift = log_conversion(symbols, kinds, 0.0, 0.0, mass, shares) + spread[:, 0]
    return AccretionRates(
        log_rate=as_floats(value + shift),
        log_limit=as_floats(limit + shift),
        decision_err=as_floats(np.where(np.isnan(value), np.nan, value_err)),
        calibration_err=as_floats(np.hypot(spread[:, 1], extra)),
        calibration_bias=spread[:, 2],
        clamped_share=spread[:, 3],
    )


def _chunks(n: int, draws: int) -> Iterator[slice]:
    size = max(1, _CHUNK_POINTS // draws)
    for start in range(0, n, size):
        yield slice(start, min(start + size, n))


def _spread(
    table: SettlingTable, best: Floats, errors: Floats, deviates: Floats, slopes: tuple[float, float]
) -> Floats:
    """Turnover at the best parameters; sd, bias and share clamped of its draws; shape (m, 4).

    `best` and `errors` have shape (m, 2), `deviates` (m, draws, 2): teff and log g last.
    """
    turnover = table.at("turnover", best[:, 0], best[:, 1])
    offsets = deviates * errors[:, None, :]
    points = offsets + best[:, None, :]
    teff, logg, moved = table.clamp(points[..., 0], points[..., 1])
    moves = table.at("turnover", teff, logg) - turnover[:, None] + offsets @ np.asarray(slopes)
    return np.stack((turnover, moves.std(axis=1, ddof=1), moves.mean(axis=1), moved.mean(axis=1)), axis=-1)
