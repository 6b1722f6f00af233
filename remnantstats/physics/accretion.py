"""From the abundance of a metal to the rate at which debris falls in, and back."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from ..errors import Fault, InputError, nearest
from .arrays import Floats, as_floats
from .constants import M_SUN, YEAR

__all__ = [
    "ATOMIC_WEIGHTS",
    "BULK_EARTH",
    "abundance_of_rate",
    "log_conversion",
    "log_mass_share",
    "metal_rate",
    "rate_of_abundance",
    "total_rate",
]

#: atomic weights (IUPAC standard values, from memory)
ATOMIC_WEIGHTS: Mapping[str, float] = MappingProxyType(
    {
        "H": 1.008, "He": 4.0026, "Li": 6.94, "Be": 9.0122, "C": 12.011, "N": 14.007, "O": 15.999, "Na": 22.990,
        "Mg": 24.305, "Al": 26.982, "Si": 28.085, "P": 30.974, "S": 32.06, "K": 39.098, "Ca": 40.078, "Sc": 44.956,
        "Ti": 47.867, "V": 50.942, "Cr": 51.996, "Mn": 54.938, "Fe": 55.845, "Co": 58.933, "Ni": 58.693, "Cu": 63.546,
        "Sr": 87.62,
    }
)  # fmt: skip

#: mass shares of the whole Earth: Allègre, Manhès & Lewin 2001, EPSL 185, 49; from memory
BULK_EARTH: Mapping[str, float] = MappingProxyType(
    {
        "O": 0.324, "Fe": 0.282, "Si": 0.172, "Mg": 0.159, "Ca": 0.016, "Ni": 0.016, "Al": 0.015, "S": 0.007,
        "Cr": 0.004, "Mn": 0.0012, "Na": 0.0018, "C": 0.0017, "P": 0.0009, "Ti": 0.0008, "Co": 0.0008, "K": 0.00017,
        "V": 0.00009,
    }
)  # fmt: skip

_LOG_GRAMS_PER_YEAR = float(np.log10(M_SUN * 1000.0 / YEAR))


def _lookup(element: Any, values: Mapping[str, float], what: str) -> Floats:
    """Log10 of a value by element, for one name or an array of names."""
    names = np.asarray(element, dtype=np.str_)
    logs = np.full(names.shape, np.nan)
    for symbol, value in values.items():
        logs[names == symbol] = np.log10(value)
    unknown = sorted({str(name) for name in names[np.isnan(logs)]})
    if unknown:
        raise InputError(
            *(
                Fault(
                    f"no {what} is known for an element", "column 'element'", name, remedy=nearest(name, list(values))
                )
                for name in unknown
            )
        )
    return logs


def log_mass_share(log_abundance: ArrayLike, element: Any, atmosphere: Any) -> Floats:
    """Mass of a trace metal over that of the mixed layer.

    Parameters
    ----------
    log_abundance : array_like
        log10 n(Z)/n(H) in H atmospheres, n(Z)/n(He) in He atmospheres.
    element, atmosphere : str or array of str, broadcast with it
        Chemical symbol; ``"H"`` or ``"He"``.

    Returns
    -------
    ndarray
        log10 X_Z, with X_Z = [n(Z)/n(H or He)] A_Z / A_(H or He); metals themselves neglected in the sum.

    Raises
    ------
    InputError
        Where the element has no atomic weight here.
    """
    weights = _lookup(element, ATOMIC_WEIGHTS, "atomic weight") - _lookup(atmosphere, ATOMIC_WEIGHTS, "atomic weight")
    return as_floats(as_floats(log_abundance) + weights)


def metal_rate(
    log_abundance: ArrayLike,
    element: Any,
    atmosphere: Any,
    log_settling_time: ArrayLike,
    log_cvz_fraction: ArrayLike,
    mass: ArrayLike,
) -> Floats:
    """Rate at which one metal falls in, in the steady state.

    Parameters
    ----------
    log_abundance : array_like
        log10 n(Z)/n(H or He); the arguments broadcast together.
    element, atmosphere : str or array of str
        As in `log_mass_share`.
    log_settling_time : array_like
        log10 of years.
    log_cvz_fraction : array_like
        log10 of the mixed mass over that of the star.
    mass : array_like
        Mass of the star, Msun, positive.

    Returns
    -------
    ndarray
        log10 of M_cvz X_Z / t_Z in g s⁻¹. In He atmospheres a mean over the settling time.

    Raises
    ------
    InputError
        Where the element has no atomic weight here.

    Notes
    -----
    Dupuis et al. 1993, ApJS 84, 73; Koester 2009, A&A 498, 517.
    """
    share = log_mass_share(log_abundance, element, atmosphere)
    turnover = as_floats(log_cvz_fraction) - as_floats(log_settling_time)
    return as_floats(share + turnover + np.log10(as_floats(mass)) + _LOG_GRAMS_PER_YEAR)


def total_rate(log_metal_rate: ArrayLike, element: Any, shares: Mapping[str, float] = BULK_EARTH) -> Floats:
    """Rate of all debris, from that of one of its elements.

    Parameters
    ----------
    log_metal_rate : array_like
        log10 g s⁻¹.
    element : str or array of str, broadcast with it
        Chemical symbol.
    shares : mapping, optional
        Mass share of each element in the debris, within (0, 1]; bulk Earth unless given.

    Returns
    -------
    ndarray
        log10 g s⁻¹.

    Raises
    ------
    InputError
        Where the debris has no share of the element.
    """
    return as_floats(as_floats(log_metal_rate) - _lookup(element, shares, "mass share in the debris"))


def log_conversion(
    element: Any,
    atmosphere: Any,
    log_settling_time: ArrayLike,
    log_cvz_fraction: ArrayLike,
    mass: ArrayLike,
    shares: Mapping[str, float] = BULK_EARTH,
) -> Floats:
    """What to add to a log abundance to get the log rate of all debris.

    Parameters
    ----------
    element, atmosphere, log_settling_time, log_cvz_fraction, mass
        As in `metal_rate`.
    shares : mapping, optional
        As in `total_rate`.

    Returns
    -------
    ndarray
        dex. The same for a value and its limit: no error of it moves one against the other.

    Raises
    ------
    InputError
        As there.
    """
    metal = metal_rate(0.0, element, atmosphere, log_settling_time, log_cvz_fraction, mass)
    return total_rate(metal, element, shares)


def rate_of_abundance(
    log_abundance: ArrayLike,
    element: Any,
    atmosphere: Any,
    log_settling_time: ArrayLike,
    log_cvz_fraction: ArrayLike,
    mass: ArrayLike,
    shares: Mapping[str, float] = BULK_EARTH,
) -> Floats:
    """Rate of all debris from an abundance, in the steady state.

    Parameters
    ----------
    log_abundance : array_like
        log10 n(Z)/n(H or He).
    element, atmosphere, log_settling_time, log_cvz_fraction, mass, shares
        As in `log_conversion`.

    Returns
    -------
    ndarray
        log10 g s⁻¹.

    Raises
    ------
    InputError
        As there.
    """
    shift = log_conversion(element, atmosphere, log_settling_time, log_cvz_fraction, mass, shares)
    return as_floats(as_floats(log_abundance) + shift)


def abundance_of_rate(
    log_rate: ArrayLike,
    element: Any,
    atmosphere: Any,
    log_settling_time: ArrayLike,
    log_cvz_fraction: ArrayLike,
    mass: ArrayLike,
    shares: Mapping[str, float] = BULK_EARTH,
) -> Floats:
    """Abundance that a rate of debris keeps up: the inverse of `rate_of_abundance`.

    Parameters
    ----------
    log_rate : array_like
        log10 g s⁻¹.
    element, atmosphere, log_settling_time, log_cvz_fraction, mass, shares
        As in `log_conversion`.

    Returns
    -------
    ndarray
        log10 n(Z)/n(H or He).

    Raises
    ------
    InputError
        As there.
    """
    shift = log_conversion(element, atmosphere, log_settling_time, log_cvz_fraction, mass, shares)
    return as_floats(as_floats(log_rate) - shift)
