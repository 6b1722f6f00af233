"""From infrared excess to the dust's share of the star's light, and the share that would have been seen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .arrays import Bools, Floats, as_floats, gauss_legendre
from .radiation import photon_over_thermal, planck_ratio

__all__ = [
    "DustEstimate",
    "DustTemperature",
    "combine_bands",
    "dust_from_bands",
    "dust_per_excess",
    "dust_per_excess_rayleigh_jeans",
    "excess_error",
    "excess_significance",
    "lognormal_temperature",
    "uniform_temperature",
]


def excess_error(flux_err: ArrayLike, photosphere_err: ArrayLike) -> Floats:
    """Standard error of an excess: that of the flux and that of the predicted photosphere together.

    Parameters
    ----------
    flux_err, photosphere_err : array_like, broadcast together
        One unit of flux (mJy); `photosphere_err` carries the calibration, a few per cent of the photosphere.

    Returns
    -------
    ndarray
        √(σ_F² + σ_phot²), the same unit.
    """
    return as_floats(np.hypot(as_floats(flux_err), as_floats(photosphere_err)))


def excess_significance(
    flux: ArrayLike, flux_err: ArrayLike, photosphere: ArrayLike, photosphere_err: ArrayLike
) -> Floats:
    """Excess over the photosphere in standard errors.

    Parameters
    ----------
    flux, flux_err, photosphere, photosphere_err : array_like, broadcast together
        One unit of flux (mJy).

    Returns
    -------
    ndarray
        χ = (F − F_phot)/√(σ_F² + σ_phot²).
    """
    return as_floats((as_floats(flux) - as_floats(photosphere)) / excess_error(flux_err, photosphere_err))


def dust_per_excess(wavelength: ArrayLike, teff: ArrayLike, dust_temperature: ArrayLike) -> Floats:
    """L_dust/L_star a unit of excess over photosphere in one band; star and dust as black bodies.

    Parameters
    ----------
    wavelength : array_like
        µm; the arguments broadcast together.
    teff, dust_temperature : array_like
        K, positive.

    Returns
    -------
    ndarray
        (T_d/T_star)⁴ B_ν(T_star)/B_ν(T_d), positive: multiply by (F − F_phot)/F_phot.

    Notes
    -----
    A black body of luminosity L has F_ν ∝ L B_ν(T)/(σT⁴): the ratio of two gives τ. METHODS §11; Bryden et al. 2006,
    ApJ 636, 1098 without their Rayleigh–Jeans limit.
    """
    star, dust = as_floats(teff), as_floats(dust_temperature)
    return as_floats((dust / star) ** 4 * planck_ratio(wavelength, star, dust))


def dust_per_excess_rayleigh_jeans(wavelength: ArrayLike, teff: ArrayLike, dust_temperature: ArrayLike) -> Floats:
    """`dust_per_excess` with the star in its Rayleigh–Jeans limit.

    Parameters
    ----------
    wavelength, teff, dust_temperature : array_like
        As there.

    Returns
    -------
    ndarray
        k T_d⁴ (e^{hν/kT_d} − 1)/(hν T_star³).

    Notes
    -----
    Bryden et al. 2006, ApJ 636, 1098. Larger than `dust_per_excess`, by half of hν/kT_star and more.
    """
    star, dust = as_floats(teff), as_floats(dust_temperature)
    x = photon_over_thermal(wavelength, dust)
    return as_floats((dust / star) ** 3 * np.expm1(x) / x)


def combine_bands(dust: ArrayLike, dust_err: ArrayLike) -> tuple[Floats, Floats]:
    """Inverse-variance mean of L_dust/L_star over bands, at one dust temperature.

    Parameters
    ----------
    dust, dust_err : array_like, shape (..., b)
        Estimate and standard error of each band; a band with a NaN is left out. Errors independent.

    Returns
    -------
    mean, error : ndarray, shape (...)
        NaN where no band is left.
    """
    values, errors = as_floats(dust), as_floats(dust_err)
    usable = np.isfinite(values) & np.isfinite(errors)
    weights = np.where(usable, np.where(usable, errors, 1.0) ** -2.0, 0.0)
    total = weights.sum(axis=-1)
    safe = np.where(total > 0.0, total, np.nan)
    return as_floats((weights * np.where(usable, values, 0.0)).sum(axis=-1) / safe), as_floats(safe**-0.5)


@dataclass(frozen=True)
class DustTemperature:
    """Prior on the dust's temperature, as nodes.

    Parameters
    ----------
    nodes : ndarray, shape (t,)
        K, positive.
    weights : ndarray, shape (t,)
        Non-negative, adding up to 1.
    """

    nodes: Floats
    weights: Floats

    @property
    def reference(self) -> float:
        """Geometric mean, K: the temperature at which bands are weighted and detection is decided."""
        return float(np.exp(self.weights @ np.log(self.nodes)))


def lognormal_temperature(median: float, sd: float, n: int = 9) -> DustTemperature:
    """Log-normal prior, by Gauss–Hermite nodes.

    Parameters
    ----------
    median : float
        K.
    sd : float
        Standard deviation of log10 T, dex; 0 gives one node's worth.
    n : int, optional
        Number of nodes.

    Returns
    -------
    DustTemperature
    """
    points, weights = np.polynomial.hermite_e.hermegauss(n)
    return DustTemperature(as_floats(median * 10.0 ** (sd * points)), as_floats(weights / weights.sum()))


def uniform_temperature(low: float, high: float, n: int = 9) -> DustTemperature:
    """Uniform prior, by Gauss–Legendre nodes.

    Parameters
    ----------
    low, high : float
        K, low < high.
    n : int, optional
        Number of nodes.

    Returns
    -------
    DustTemperature
    """
    nodes, weights = gauss_legendre(low, high, n)
    return DustTemperature(nodes, as_floats(weights / (high - low)))


@dataclass(frozen=True)
class DustEstimate:
    """Dust of each star from all its bands; all arrays of shape (n,), NaN for a star without a usable band.

    Parameters
    ----------
    log_dust : ndarray
        log10 L_dust/L_star, averaged over the dust's temperature; NaN where not detected.
    decision_err : ndarray
        dex, from the photometry alone: 1/(χ ln 10). It took part in the decision.
    log_limit : ndarray
        log10 of the L_dust/L_star at which the combined excess would have reached k sigma.
    calibration_err : ndarray
        dex, from the dust's temperature; common to `log_dust` and `log_limit` (correlation 1).
    significance : ndarray
        Combined excess in standard errors.
    detected : ndarray of bool
        ``significance >= k``.
    dust_temperature : ndarray
        Mean, K: of the prior where there is no detection, else given the bands' colours.
    """

    log_dust: Floats
    decision_err: Floats
    log_limit: Floats
    calibration_err: Floats
    significance: Floats
    detected: Bools
    dust_temperature: Floats


def dust_from_bands(
    flux: ArrayLike,
    flux_err: ArrayLike,
    photosphere: ArrayLike,
    photosphere_err: ArrayLike,
    wavelength: ArrayLike,
    teff: ArrayLike,
    temperature: DustTemperature,
    *,
    k: float = 3.0,
    common_err: float = 0.0,
) -> DustEstimate:
    """Dust of each star and its limit from several bands, marginalised over the dust's temperature.

    Parameters
    ----------
    flux, flux_err, photosphere, photosphere_err : array_like, shape (n, b)
        One unit of flux (mJy), errors independent between bands; a band with a NaN is left out.
    wavelength : array_like, shape (b,)
        µm.
    teff : array_like, shape (n,)
        K.
    temperature : DustTemperature
        Prior of the dust's temperature; one node of weight 1 fixes it.
    k : float, optional
        Threshold in standard errors.
    common_err : float, optional
        Relative error of the photosphere that all bands of a star share, as when it is scaled to one reference band.

    Returns
    -------
    DustEstimate
        The value exceeds the limit just where the star is detected.

    Notes
    -----
    Bands are weighted by inverse variance in τ at the prior's geometric mean temperature, and the sum is the decision
    statistic; with those weights kept, value and limit are read at each temperature of the prior and averaged in the
    log. Where the star is detected the nodes are reweighted by the likelihood of the bands' colours.
    """
    ratio, sd, usable = _relative_excess(flux, flux_err, photosphere, photosphere_err)
    star = np.atleast_1d(as_floats(teff))[:, None]
    bands = np.atleast_1d(as_floats(wavelength))[None, :]
    weights = np.where(usable, 1.0 / (dust_per_excess(bands, star, temperature.reference) * sd**2), 0.0)
    noise = np.sqrt(np.sum((weights * sd) ** 2, axis=1) + (common_err * weights.sum(axis=1)) ** 2)
    noise[~usable.any(axis=1)] = np.nan
    signal = np.sum(weights * ratio, axis=1)
    significance = signal / noise
    detected = np.asarray(significance >= k, dtype=np.bool_)
    templates = 1.0 / dust_per_excess(bands[..., None], star[..., None], temperature.nodes)
    response = np.einsum("nb,nbt->nt", weights, templates)
    response[np.isnan(noise)] = np.nan
    residual = np.where(usable[..., None], ratio[..., None] - (signal[:, None] / response)[:, None, :] * templates, 0.0)
    shares = _temperature_shares(temperature.weights, _misfit(residual, sd, usable, common_err), detected)
    log_response = np.sum(shares * np.log10(response), axis=1)
    spread = np.sqrt(np.sum(shares * (np.log10(response) - log_response[:, None]) ** 2, axis=1))
    strength = np.where(detected, significance, np.nan)
    return DustEstimate(
        log_dust=as_floats(np.log10(strength * noise) - log_response),
        decision_err=as_floats(1.0 / (strength * np.log(10.0))),
        log_limit=as_floats(np.log10(k * noise) - log_response),
        calibration_err=as_floats(spread),
        significance=as_floats(significance),
        detected=detected,
        dust_temperature=as_floats(np.where(np.isnan(noise), np.nan, shares @ temperature.nodes)),
    )


def _relative_excess(
    flux: ArrayLike, flux_err: ArrayLike, photosphere: ArrayLike, photosphere_err: ArrayLike
) -> tuple[Floats, Floats, Bools]:
    """Excess over photosphere, its standard error, and which bands are usable; unusable ones hold 0 and 1."""
    star = as_floats(photosphere)
    ratio = (as_floats(flux) - star) / star
    sd = excess_error(flux_err, photosphere_err) / star
    usable = np.asarray(np.isfinite(ratio) & np.isfinite(sd) & (sd > 0.0), dtype=np.bool_)
    return np.where(usable, ratio, 0.0), np.where(usable, sd, 1.0), usable


def _misfit(residual: Floats, sd: Floats, usable: Bools, common_err: float) -> Floats:
    """χ² of residuals (n, b, t), with the error that the bands share (Sherman–Morrison); shape (n, t)."""
    weights = np.where(usable, sd**-2.0, 0.0)
    independent = np.einsum("nb,nbt->nt", weights, residual**2)
    together = np.einsum("nb,nbt->nt", weights, residual) ** 2
    return as_floats(independent - together * common_err**2 / (1.0 + common_err**2 * weights.sum(axis=1))[:, None])


def _temperature_shares(prior: Floats, misfit: Floats, detected: Bools) -> Floats:
    """Weight of each temperature for each star, shape (n, t): an undetected star says nothing about it."""
    likelihood = np.ones_like(misfit)
    likelihood[detected] = np.exp(-0.5 * (misfit[detected] - misfit[detected].min(axis=1, keepdims=True)))
    shares = prior * likelihood
    return as_floats(shares / shares.sum(axis=1, keepdims=True))
