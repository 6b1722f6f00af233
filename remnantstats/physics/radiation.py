"""Black bodies and units of flux."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from .arrays import Floats, as_floats
from .constants import K_B, SPEED_OF_LIGHT, H

__all__ = [
    "flux_error_of_magnitude",
    "flux_of_magnitude",
    "photon_over_thermal",
    "planck",
    "planck_ratio",
    "scaled_blackbody",
]

_METRE_PER_MICRON = 1e-6
_MJY_PER_JY = 1000.0


def photon_over_thermal(wavelength: ArrayLike, temperature: ArrayLike) -> Floats:
    """Energy of a photon over the thermal energy, hν/kT.

    Parameters
    ----------
    wavelength : array_like
        µm, positive.
    temperature : array_like, broadcast with it
        K, positive.

    Returns
    -------
    ndarray
        Dimensionless, positive.
    """
    length = as_floats(wavelength) * _METRE_PER_MICRON
    return as_floats(H * SPEED_OF_LIGHT / (length * K_B * as_floats(temperature)))


def _log_expm1(x: Floats) -> Floats:
    """ln(eˣ − 1) for x > 0, without overflow."""
    return as_floats(x + np.log(-np.expm1(-x)))


def planck(wavelength: ArrayLike, temperature: ArrayLike) -> Floats:
    """Planck function B_ν.

    Parameters
    ----------
    wavelength : array_like
        µm, positive.
    temperature : array_like, broadcast with it
        K, positive.

    Returns
    -------
    ndarray
        W m⁻² Hz⁻¹ sr⁻¹; 0 where it is below the smallest float.
    """
    frequency = SPEED_OF_LIGHT / (as_floats(wavelength) * _METRE_PER_MICRON)
    scale = 2.0 * H * frequency**3 / SPEED_OF_LIGHT**2
    return as_floats(scale * np.exp(-_log_expm1(photon_over_thermal(wavelength, temperature))))


def planck_ratio(wavelength: ArrayLike, first: ArrayLike, second: ArrayLike) -> Floats:
    """B_ν of one temperature over that of another, stable far into the Wien tail.

    Parameters
    ----------
    wavelength : array_like
        µm, positive; the arguments broadcast together.
    first, second : array_like
        Temperatures, K, positive.

    Returns
    -------
    ndarray
        B_ν(first)/B_ν(second).
    """
    upper = _log_expm1(photon_over_thermal(wavelength, second))
    lower = _log_expm1(photon_over_thermal(wavelength, first))
    return as_floats(np.exp(upper - lower))


def scaled_blackbody(
    wavelength: ArrayLike, teff: ArrayLike, reference_wavelength: ArrayLike, reference_flux: ArrayLike
) -> Floats:
    """Photosphere predicted from a measured band by a black body: a stand-in for a model atmosphere.

    Parameters
    ----------
    wavelength : array_like
        Band wanted, µm; the arguments broadcast together.
    teff : array_like
        K.
    reference_wavelength : array_like
        Band measured, µm, one where the star alone shines.
    reference_flux : array_like
        Flux there, in any unit of F_ν.

    Returns
    -------
    ndarray
        Flux in `wavelength`, in the unit of `reference_flux`. Lines and edges make a real photosphere differ by several
        per cent: label results that use it.
    """
    temperature = as_floats(teff)
    here, there = planck(wavelength, temperature), planck(reference_wavelength, temperature)
    return as_floats(as_floats(reference_flux) * here / there)


def flux_of_magnitude(magnitude: ArrayLike, zero_point: ArrayLike) -> Floats:
    """Flux of a magnitude.

    Parameters
    ----------
    magnitude : array_like
        mag.
    zero_point : array_like, broadcast with it
        Flux of magnitude 0 in that band and system, Jy (AB: 3631).

    Returns
    -------
    ndarray
        mJy.
    """
    return as_floats(as_floats(zero_point) * _MJY_PER_JY * 10.0 ** (-0.4 * as_floats(magnitude)))


def flux_error_of_magnitude(magnitude: ArrayLike, magnitude_err: ArrayLike, zero_point: ArrayLike) -> Floats:
    """Standard error of the flux of a magnitude, to first order.

    Parameters
    ----------
    magnitude, magnitude_err : array_like
        mag; the arguments broadcast together.
    zero_point : array_like
        Jy.

    Returns
    -------
    ndarray
        0.4 ln 10 · F · error, mJy.
    """
    flux = flux_of_magnitude(magnitude, zero_point)
    return as_floats(0.4 * np.log(10.0) * flux * as_floats(magnitude_err))
