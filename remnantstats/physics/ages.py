"""Cooling ages where the user has none: a fallback, to be marked as such wherever it is used."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from .arrays import Floats, as_floats
from .constants import L_SUN, R_SUN, SIGMA_SB

__all__ = ["luminosity", "mestel_cooling_age"]


#: Gyr. Mestel 1952, MNRAS 112, 583, with the coefficient of Iben & Tutukov 1984, ApJ 282, 615; from memory
MESTEL_COEFFICIENT = 8.8e-3


def luminosity(teff: ArrayLike, radius: ArrayLike) -> Floats:
    """Luminosity of a star.

    Parameters
    ----------
    teff : array_like
        Effective temperature, K.
    radius : array_like, broadcast with it
        Rsun.

    Returns
    -------
    ndarray
        4π R² σ T⁴, Lsun.
    """
    area = 4.0 * np.pi * (as_floats(radius) * R_SUN) ** 2
    return as_floats(area * SIGMA_SB * as_floats(teff) ** 4 / L_SUN)


def mestel_cooling_age(
    mass: ArrayLike, stellar_luminosity: ArrayLike, mass_number: float = 14.0, molecular_weight: float = 2.0
) -> Floats:
    """Cooling age by Mestel's law: a fallback, not an age scale.

    Parameters
    ----------
    mass : array_like
        Mass of the white dwarf, Msun, positive.
    stellar_luminosity : array_like, broadcast with it
        Lsun, positive.
    mass_number : float, optional
        Mean mass number A of the core: 12 for carbon, 16 for oxygen, 14 for half and half.
    molecular_weight : float, optional
        Mean molecular weight a free electron, μ_e: 2 for helium and heavier.

    Returns
    -------
    ndarray
        8.8e-3 (A/12)⁻¹ M^{5/7} (μ/2)^{−2/7} L^{−5/7}, Gyr.

    Notes
    -----
    Mestel 1952, MNRAS 112, 583; coefficient of Iben & Tutukov 1984, ApJ 282, 615, from memory. No neutrinos,
    crystallisation or convective coupling: tens of per cent between about 10⁻³·⁵ and 10⁻¹·⁵ Lsun, worse elsewhere.
    """
    scale = MESTEL_COEFFICIENT * (12.0 / mass_number) * (molecular_weight / 2.0) ** (-2.0 / 7.0)
    return as_floats(scale * as_floats(mass) ** (5.0 / 7.0) * as_floats(stellar_luminosity) ** (-5.0 / 7.0))
