"""Gravity: where bodies break up, how fast they move, how strongly a star pulls; and distances between neighbours."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import gamma

from .arrays import Floats, as_floats
from .constants import M_SUN, R_SUN, G

__all__ = [
    "NEAREST_NEIGHBOUR",
    "log_surface_gravity",
    "nearest_neighbour_distance",
    "orbital_speed",
    "radius_from_gravity",
    "roche_distance",
]

#: mean distance to the nearest neighbour, in units of n^(−1/3): Γ(4/3) (4π/3)^(−1/3) = 0.55396
NEAREST_NEIGHBOUR = float(gamma(4.0 / 3.0) * (4.0 * np.pi / 3.0) ** (-1.0 / 3.0))

_CM_PER_M = 100.0
_G_CM3_TO_SI = 1000.0


def roche_distance(stellar_mass: ArrayLike, body_density: ArrayLike = 3.0, coefficient: float = 2.44) -> Floats:
    """Distance from a star inside which its tides pull a body of no strength apart.

    Parameters
    ----------
    stellar_mass : array_like
        Msun, positive.
    body_density : array_like, broadcast with it, optional
        Density of the body, g cm⁻³, positive.
    coefficient : float, optional
        2.44 for a fluid body (Roche 1849), 1.26 for a rigid sphere without strength, in d = C R_star (ρ_star/ρ)^{1/3}.

    Returns
    -------
    ndarray
        Rsun.
    """
    volume = 3.0 * as_floats(stellar_mass) * M_SUN / (4.0 * np.pi * as_floats(body_density) * _G_CM3_TO_SI)
    return as_floats(coefficient * np.cbrt(volume) / R_SUN)


def orbital_speed(stellar_mass: ArrayLike, radius: ArrayLike) -> Floats:
    """Speed on a circular orbit.

    Parameters
    ----------
    stellar_mass : array_like
        Msun, positive.
    radius : array_like, broadcast with it
        Radius of the orbit, Rsun, positive.

    Returns
    -------
    ndarray
        √(GM/R), km s⁻¹.
    """
    return as_floats(np.sqrt(G * as_floats(stellar_mass) * M_SUN / (as_floats(radius) * R_SUN)) / 1000.0)


def log_surface_gravity(stellar_mass: ArrayLike, radius: ArrayLike) -> Floats:
    """Surface gravity of a star.

    Parameters
    ----------
    stellar_mass : array_like
        Msun, positive.
    radius : array_like, broadcast with it
        Radius of the star, Rsun, positive.

    Returns
    -------
    ndarray
        log10 of GM/R² in cm s⁻² (the Sun: 4.438).
    """
    gravity = G * as_floats(stellar_mass) * M_SUN / (as_floats(radius) * R_SUN) ** 2
    return as_floats(np.log10(gravity * _CM_PER_M))


def radius_from_gravity(stellar_mass: ArrayLike, logg: ArrayLike) -> Floats:
    """Radius of a star of known mass and surface gravity: the inverse of `log_surface_gravity`.

    Parameters
    ----------
    stellar_mass : array_like
        Msun, positive.
    logg : array_like, broadcast with it
        dex(cm s⁻²).

    Returns
    -------
    ndarray
        Rsun.
    """
    gravity = 10.0 ** as_floats(logg) / _CM_PER_M
    return as_floats(np.sqrt(G * as_floats(stellar_mass) * M_SUN / gravity) / R_SUN)


def nearest_neighbour_distance(density: ArrayLike) -> Floats:
    """Mean distance to the nearest of objects strewn at random in space.

    Parameters
    ----------
    density : array_like, any shape
        Number a unit volume (pc⁻³), positive.

    Returns
    -------
    ndarray
        0.55396 n^(−1/3), in the unit of length of the density (pc).

    Notes
    -----
    Hertz 1909; Chandrasekhar 1943, Rev. Mod. Phys. 15, 1. At a fixed density: where the density is itself uncertain
    average over it, or quote quantiles.
    """
    return as_floats(NEAREST_NEIGHBOUR * as_floats(density) ** (-1.0 / 3.0))
