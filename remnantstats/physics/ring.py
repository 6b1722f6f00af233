"""A flat opaque ring of dust: its flux, the luminosity it seems to have, and what tilt does to both."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ..errors import Fault, InputError
from .arrays import Floats, as_floats
from .constants import PARSEC, R_SUN
from .dust import dust_per_excess
from .radiation import planck

__all__ = [
    "INCLINATION_MEAN",
    "INCLINATION_SD",
    "RingSimulation",
    "ring_band_dust",
    "ring_dust",
    "ring_flux",
    "ring_temperature",
    "simulate_rings",
    "star_flux",
]

#: mean and standard deviation of log10 cos i for isotropic tilts, dex: −ln cos i is exponential with mean 1
INCLINATION_MEAN = -1.0 / float(np.log(10.0))
INCLINATION_SD = 1.0 / float(np.log(10.0))

#: nodes of the quadrature in log radius: relative error below 1e-8 for outer/inner up to 100
_NODES = 64

_SI_TO_MJY = 1e29


def ring_temperature(radius: ArrayLike, teff: ArrayLike) -> Floats:
    """Temperature of a flat opaque ring that the star heats at a grazing angle.

    Parameters
    ----------
    radius : array_like
        Distance from the star in stellar radii, well above 1.
    teff : array_like, broadcast with it
        K.

    Returns
    -------
    ndarray
        (2/3π)^{1/4} (R_star/R)^{3/4} T_star, K.

    Notes
    -----
    Jura 2003, ApJ 584, L91; Chiang & Goldreich 1997, ApJ 490, 368.
    """
    return as_floats((2.0 / (3.0 * np.pi)) ** 0.25 * as_floats(radius) ** -0.75 * as_floats(teff))


def star_flux(wavelength: ArrayLike, teff: ArrayLike, stellar_radius: ArrayLike, distance: ArrayLike) -> Floats:
    """Flux of the star as a black body.

    Parameters
    ----------
    wavelength, teff, stellar_radius, distance : array_like, broadcast together
        µm, K, Rsun, pc.

    Returns
    -------
    ndarray
        π B_ν(T_star) R_star²/D², mJy.
    """
    angle = as_floats(stellar_radius) * R_SUN / (as_floats(distance) * PARSEC)
    return as_floats(np.pi * planck(wavelength, teff) * angle**2 * _SI_TO_MJY)


def ring_flux(
    wavelength: ArrayLike,
    teff: ArrayLike,
    stellar_radius: ArrayLike,
    inner: ArrayLike,
    outer: ArrayLike,
    cos_inclination: ArrayLike,
    distance: ArrayLike,
) -> Floats:
    """Flux of the ring, by Gauss–Legendre quadrature in log radius.

    Parameters
    ----------
    wavelength : array_like
        µm; all arguments broadcast together.
    teff : array_like
        K.
    stellar_radius : array_like
        Rsun.
    inner, outer : array_like
        Edges of the ring in stellar radii, 1 < inner < outer.
    cos_inclination : array_like
        Within [0, 1]; 1 is face on.
    distance : array_like
        pc.

    Returns
    -------
    ndarray
        (2π cos i/D²) ∫ B_ν(T(R)) R dR, mJy.

    Raises
    ------
    InputError
        Where the edges are not in order.

    Notes
    -----
    Jura 2003, ApJ 584, L91.
    """
    first, last = _edges(inner, outer)
    points, weights = np.polynomial.legendre.leggauss(_NODES)
    middle, half = 0.5 * np.log(first * last), 0.5 * np.log(last / first)
    radius = np.exp(middle[..., None] + half[..., None] * points)
    temperature = ring_temperature(radius, as_floats(teff)[..., None])
    brightness = planck(as_floats(wavelength)[..., None], temperature)
    integral = np.sum(weights * brightness * radius**2, axis=-1) * half
    angle = as_floats(stellar_radius) * R_SUN / (as_floats(distance) * PARSEC)
    return as_floats(2.0 * np.pi * as_floats(cos_inclination) * angle**2 * integral * _SI_TO_MJY)


def ring_dust(inner: ArrayLike, outer: ArrayLike, cos_inclination: ArrayLike) -> Floats:
    """Apparent L_dust/L_star of the ring over all wavelengths, as if it shone alike to all sides.

    Parameters
    ----------
    inner, outer : array_like
        Edges in stellar radii, 1 < inner < outer; the arguments broadcast together.
    cos_inclination : array_like
        Within [0, 1].

    Returns
    -------
    ndarray
        (4/3π) cos i (1/inner − 1/outer). Its mean over isotropic tilts, (2/3π)(1/inner − 1/outer), is the share of the
        star's light that the two faces take up.

    Raises
    ------
    InputError
        Where the edges are not in order.

    Notes
    -----
    The integral of Jura's (2003) flux over frequency: 4πD² ∫F_ν dν over 4πR_star² σT_star⁴.
    """
    first, last = _edges(inner, outer)
    return as_floats(4.0 / (3.0 * np.pi) * as_floats(cos_inclination) * (1.0 / first - 1.0 / last))


def ring_band_dust(
    wavelength: ArrayLike,
    teff: ArrayLike,
    inner: ArrayLike,
    outer: ArrayLike,
    cos_inclination: ArrayLike,
    dust_temperature: ArrayLike,
) -> Floats:
    """L_dust/L_star that a survey in one band would report for the ring, at the dust temperature it assumes.

    Parameters
    ----------
    wavelength, teff, inner, outer, cos_inclination
        As in `ring_flux`.
    dust_temperature : array_like
        K, that of `remnantstats.physics.dust.dust_per_excess`.

    Returns
    -------
    ndarray
        Independent of the star's radius and distance; proportional to cos i.

    Raises
    ------
    InputError
        Where the edges are not in order.
    """
    ring = ring_flux(wavelength, teff, 1.0, inner, outer, cos_inclination, 1.0)
    photosphere = star_flux(wavelength, teff, 1.0, 1.0)
    return as_floats(ring / photosphere * dust_per_excess(wavelength, teff, dust_temperature))


@dataclass(frozen=True)
class RingSimulation:
    """Rings at isotropic tilts.

    Parameters
    ----------
    cos_inclination : ndarray, shape (n,)
        Uniform on (0, 1].
    flux, photosphere : ndarray, shape (n, b)
        Of the ring and of the star alone, mJy, without noise.
    log_dust : ndarray, shape (n,)
        log10 of the apparent L_dust/L_star (`ring_dust`).
    """

    cos_inclination: Floats
    flux: Floats
    photosphere: Floats
    log_dust: Floats


def simulate_rings(
    wavelength: ArrayLike,
    teff: ArrayLike,
    stellar_radius: ArrayLike,
    inner: ArrayLike,
    outer: ArrayLike,
    distance: ArrayLike,
    *,
    rng: np.random.Generator,
) -> RingSimulation:
    """Draw a tilt for each ring and give its fluxes: put a survey's noise and threshold on them to see what it misses.

    Parameters
    ----------
    wavelength : array_like, shape (b,)
        µm.
    teff, stellar_radius, inner, outer, distance : array_like, broadcast to shape (n,)
        As in `ring_flux`.
    rng : numpy.random.Generator
        The only source of randomness.

    Returns
    -------
    RingSimulation

    Raises
    ------
    InputError
        Where the edges are not in order.
    """
    bands = np.atleast_1d(as_floats(wavelength))
    items = (np.atleast_1d(as_floats(item)) for item in (teff, stellar_radius, inner, outer, distance))
    star, radius, first, last, far = (as_floats(item)[:, None] for item in np.broadcast_arrays(*items))
    # 1 − u lies in (0, 1]: its logarithm is finite
    tilt = as_floats(1.0 - rng.random(star.shape[0]))
    return RingSimulation(
        cos_inclination=tilt,
        flux=ring_flux(bands, star, radius, first, last, tilt[:, None], far),
        photosphere=star_flux(bands, star, radius, far),
        log_dust=as_floats(np.log10(ring_dust(first[:, 0], last[:, 0], tilt))),
    )


def _edges(inner: ArrayLike, outer: ArrayLike) -> tuple[Floats, Floats]:
    first, last = (as_floats(item) for item in np.broadcast_arrays(as_floats(inner), as_floats(outer)))
    bad = ~((first > 1.0) & (last > first))
    if np.any(bad):
        row = int(np.argmax(bad))
        raise InputError(
            Fault(
                "the edges of a ring are not in order",
                where=f"ring {row}",
                found=f"inner = {first.flat[row]:.4g}, outer = {last.flat[row]:.4g} stellar radii",
                allowed="1 < inner < outer",
                remedy="change the edges",
            )
        )
    return first, last
