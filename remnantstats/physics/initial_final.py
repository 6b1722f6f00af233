"""From the mass of a remnant to that of its progenitor, and what follows from it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import logsumexp

from .arrays import Bools, Floats, as_floats, gauss_legendre, refuse_rows

__all__ = [
    "BREAKS",
    "SCATTER",
    "ProgenitorMoments",
    "log_density_of_progenitor",
    "main_sequence_lifetime",
    "mass_lost_fraction",
    "orbit_expansion",
    "outside_relation",
    "progenitor_mass",
    "progenitor_moments",
    "progenitor_nodes",
    "remnant_mass",
    "total_age",
]

#: progenitor masses, Msun, at which the relation begins, changes slope and ends
BREAKS = (0.83, 2.85, 3.60, 7.20)

#: slope and intercept (Msun) of each piece: Cummings et al. 2018, ApJ 866, 21 (MIST), from memory; checked against
#: the abstract (change of slope at 2.85 and 3.6 Msun, mass lost 33 to 83 %)
LINES = ((0.080, 0.489), (0.187, 0.184), (0.107, 0.471))

#: scatter of remnant masses about the relation, Msun (Cummings et al. 2018)
SCATTER = 0.06

#: slope of the initial mass function above 0.5 Msun (Salpeter 1955: −2.35; Kroupa 2001: −2.3)
MASS_FUNCTION_SLOPE = -2.3

#: rows handled at once where a (rows × nodes) table is needed
_CHUNK = 20_000


def _knots() -> tuple[Floats, Floats]:
    """Corners of the relation, made non-decreasing.

    The printed lines miss one another by 0.00005 and 0.001 Msun at the breaks, each stepping down. A level stretch of
    at most 0.01 Msun after a break joins them, so that more massive stars never leave lighter remnants.
    """
    initial, final = [BREAKS[0]], [LINES[0][0] * BREAKS[0] + LINES[0][1]]
    for number, (slope, intercept) in enumerate(LINES):
        level = final[-1]
        initial.append((level - intercept) / slope)
        final.append(level)
        initial.append(BREAKS[number + 1])
        final.append(slope * BREAKS[number + 1] + intercept)
    return as_floats(initial), as_floats(final)


_INITIAL, _FINAL = _knots()


def remnant_mass(progenitor: ArrayLike, labels: Sequence[str] | None = None) -> Floats:
    """Mass of the white dwarf that a star of given initial mass leaves.

    Parameters
    ----------
    progenitor : array_like, any shape
        Initial mass, Msun, within [0.83, 7.2].
    labels : sequence of str, optional
        Names of the rows, for the message.

    Returns
    -------
    ndarray
        Remnant mass, Msun, within [0.5554, 1.2414]; non-decreasing.

    Raises
    ------
    InputError
        Where a mass is outside the relation.

    Notes
    -----
    Cummings et al. 2018, ApJ 866, 21; coefficients from memory.
    """
    masses = as_floats(progenitor)
    _refuse_outside(masses, BREAKS[0], BREAKS[-1], "progenitor mass", labels)
    return as_floats(np.interp(masses, _INITIAL, _FINAL))


def progenitor_mass(remnant: ArrayLike, *, refuse: bool = True, labels: Sequence[str] | None = None) -> Floats:
    """Initial mass whose remnant has the given mass: the relation read backwards, scatter ignored.

    Parameters
    ----------
    remnant : array_like, any shape
        Mass of the white dwarf, Msun, within [0.5554, 1.2414].
    refuse : bool, optional
        Whether a mass outside the relation is an error; else its result is NaN.
    labels : sequence of str, optional
        Names of the rows, for the message.

    Returns
    -------
    ndarray
        Initial mass, Msun. A point estimate only: for inference use `log_density_of_progenitor`.

    Raises
    ------
    InputError
        Where a mass is outside the relation and `refuse` is set.
    """
    masses = as_floats(remnant)
    if refuse:
        _refuse_outside(masses, _FINAL[0], _FINAL[-1], "remnant mass", labels)
    return as_floats(np.interp(masses, _FINAL, _INITIAL, left=np.nan, right=np.nan))


def _refuse_outside(masses: Floats, low: float, high: float, name: str, labels: Sequence[str] | None) -> None:
    flat = masses.ravel()
    refuse_rows(
        ~((flat >= low) & (flat <= high)),
        f"a {name} lies outside the initial–final mass relation",
        lambda row: f"{name} = {flat[row]:.4g} Msun",
        f"{low:.4g} to {high:.4g} Msun",
        "remove the star, or give progenitor_mass with its error",
        labels,
    )


def mass_lost_fraction(progenitor: ArrayLike) -> Floats:
    """Share of its initial mass that a star loses before it is a white dwarf.

    Parameters
    ----------
    progenitor : array_like, any shape
        Initial mass, Msun, within [0.83, 7.2].

    Returns
    -------
    ndarray
        Share, within (0, 1).

    Raises
    ------
    InputError
        Where a mass is outside the relation.
    """
    masses = as_floats(progenitor)
    return as_floats(1.0 - remnant_mass(masses) / masses)


def orbit_expansion(progenitor: ArrayLike, remnant: ArrayLike) -> Floats:
    """Factor by which orbits widen when the star loses its envelope slowly.

    Parameters
    ----------
    progenitor, remnant : array_like, broadcast together
        Masses before and after, Msun, positive.

    Returns
    -------
    ndarray
        M_i / M_f.

    Notes
    -----
    Slow, isotropic loss keeps M·a (Jeans 1924, MNRAS 85, 2).
    """
    return as_floats(as_floats(progenitor) / as_floats(remnant))


def main_sequence_lifetime(progenitor: ArrayLike) -> Floats:
    """Main-sequence lifetime, to its order of magnitude.

    Parameters
    ----------
    progenitor : array_like, any shape
        Initial mass, Msun, positive.

    Returns
    -------
    ndarray
        10 M^−2.5, Gyr.

    Notes
    -----
    The textbook scaling with L ∝ M^3.5. A fallback good to a factor of two or so at solar metallicity; where ages
    matter take them from isochrones.
    """
    return as_floats(10.0 * as_floats(progenitor) ** -2.5)


def total_age(cooling_age: ArrayLike, progenitor: ArrayLike) -> Floats:
    """Age of a star since its birth: cooling age and main-sequence lifetime, later phases neglected.

    Parameters
    ----------
    cooling_age : array_like
        Gyr, non-negative.
    progenitor : array_like, broadcast with it
        Initial mass, Msun, positive.

    Returns
    -------
    ndarray
        Gyr. As rough as `main_sequence_lifetime`.
    """
    return as_floats(as_floats(cooling_age) + main_sequence_lifetime(progenitor))


def outside_relation(remnant: ArrayLike, err: ArrayLike, scatter: float = SCATTER) -> Bools:
    """Mark remnants that no mass on the relation explains within 3σ.

    Parameters
    ----------
    remnant, err : array_like, broadcast together
        Mass of the white dwarf and its standard error, Msun.
    scatter : float, optional
        Scatter of the relation, Msun.

    Returns
    -------
    ndarray of bool
        True where the mass is more than 3 √(err² + scatter²) from [0.5554, 1.2414] Msun, or is not a number.
    """
    masses = as_floats(remnant)
    reach = 3.0 * np.hypot(as_floats(err), scatter)
    return np.asarray(~((masses >= _FINAL[0] - reach) & (masses <= _FINAL[-1] + reach)), dtype=np.bool_)


def progenitor_nodes(n: int = 48) -> tuple[Floats, Floats]:
    """Quadrature over progenitor mass, by pieces so that no kink of the relation falls inside one.

    Parameters
    ----------
    n : int, optional
        Nodes a piece; three pieces.

    Returns
    -------
    nodes, weights : ndarray, shape (3n,)
        Masses within (0.83, 7.2) Msun, increasing; the weights, Msun, add up to 6.37.
    """
    pieces = [gauss_legendre(low, high, n) for low, high in pairwise(BREAKS)]
    return np.concatenate([nodes for nodes, _ in pieces]), np.concatenate([weights for _, weights in pieces])


def _log_kernel(nodes: Floats, remnant: Floats, sd: Floats, slope: float) -> Floats:
    """Unnormalised log density, shape (n, nodes)."""
    z = (remnant[:, None] - np.interp(nodes, _INITIAL, _FINAL)[None, :]) / sd[:, None]
    return as_floats(slope * np.log(nodes)[None, :] - 0.5 * z * z)


def _nodes_for(sd: Floats) -> tuple[Floats, Floats]:
    """Nodes close enough for the narrowest star: spacing well below sd over the steepest slope."""
    narrowest = float(np.min(sd, initial=SCATTER))
    return progenitor_nodes(int(np.clip(np.ceil(2.0 / narrowest), 48, 2000)))


def _star_arrays(remnant: ArrayLike, err: ArrayLike, scatter: float) -> tuple[Floats, Floats]:
    masses, errors = np.broadcast_arrays(np.atleast_1d(as_floats(remnant)), as_floats(err))
    sd = as_floats(np.hypot(errors, scatter))
    refuse_rows(
        ~(sd >= 1e-3),
        "the error of a remnant mass and the scatter of the relation are too small together",
        lambda row: f"err = {errors[row]:.3g} Msun, scatter = {scatter:.3g} Msun",
        "√(err² + scatter²) of at least 0.001 Msun",
        f"keep the relation's scatter ({SCATTER} Msun)",
    )
    return as_floats(masses), sd


def log_density_of_progenitor(
    mass_grid: ArrayLike,
    remnant: ArrayLike,
    err: ArrayLike,
    scatter: float = SCATTER,
    slope: float = MASS_FUNCTION_SLOPE,
) -> Floats:
    """Log density of each star's initial mass, given its remnant's.

    Parameters
    ----------
    mass_grid : array_like, shape (g,)
        Initial masses at which to evaluate, Msun.
    remnant, err : array_like, shape (n,)
        Mass of the white dwarf and its standard error, Msun.
    scatter : float, optional
        Scatter of the relation, Msun.
    slope : float, optional
        Prior p(M_i) ∝ M_i^slope.

    Returns
    -------
    ndarray, shape (n, g)
        ln p(M_i | M_f), per Msun, normalised on [0.83, 7.2]; −inf outside. Finite however far the star lies from the
        relation: `outside_relation` says which stars to refuse.

    Raises
    ------
    InputError
        Where √(err² + scatter²) is below 0.001 Msun.

    Notes
    -----
    p(M_i | M_f) ∝ M_i^slope N(M_f; relation(M_i), err² + scatter²): METHODS §1. The prior matters: at a slope of 0.08
    a scatter of 0.06 Msun in the remnant is 0.75 Msun in the progenitor.
    """
    masses, sd = _star_arrays(remnant, err, scatter)
    grid = np.atleast_1d(as_floats(mass_grid))
    nodes, weights = _nodes_for(sd)
    within = (grid >= BREAKS[0]) & (grid <= BREAKS[-1])
    log_density = np.full((masses.size, grid.size), -np.inf)
    for start in range(0, masses.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        log_norm = logsumexp(_log_kernel(nodes, masses[part], sd[part], slope) + np.log(weights), axis=1)
        log_density[part, within] = _log_kernel(grid[within], masses[part], sd[part], slope) - log_norm[:, None]
    return log_density


@dataclass(frozen=True)
class ProgenitorMoments:
    """Mean and spread of each star's initial mass, prior included.

    Parameters
    ----------
    mean, sd : ndarray, shape (n,)
        Msun; NaN where `outside`.
    outside : ndarray of bool, shape (n,)
        Stars more than 3σ from the relation, to be refused by name.
    """

    mean: Floats
    sd: Floats
    outside: Bools


def progenitor_moments(
    remnant: ArrayLike, err: ArrayLike, scatter: float = SCATTER, slope: float = MASS_FUNCTION_SLOPE
) -> ProgenitorMoments:
    """Mean and standard deviation of the density of `log_density_of_progenitor`.

    Parameters
    ----------
    remnant, err : array_like, shape (n,)
        Mass of the white dwarf and its standard error, Msun.
    scatter, slope : float, optional
        As there.

    Returns
    -------
    ProgenitorMoments

    Raises
    ------
    InputError
        Where √(err² + scatter²) is below 0.001 Msun.
    """
    masses, sd = _star_arrays(remnant, err, scatter)
    nodes, weights = _nodes_for(sd)
    mean, variance = np.full(masses.size, np.nan), np.full(masses.size, np.nan)
    for start in range(0, masses.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        log_mass = _log_kernel(nodes, masses[part], sd[part], slope) + np.log(weights)
        share = np.exp(log_mass - logsumexp(log_mass, axis=1, keepdims=True))
        mean[part] = share @ nodes
        variance[part] = np.sum(share * (nodes - mean[part, None]) ** 2, axis=1)
    outside = outside_relation(masses, as_floats(err), scatter)
    return ProgenitorMoments(
        mean=np.where(outside, np.nan, mean), sd=np.where(outside, np.nan, np.sqrt(variance)), outside=outside
    )
