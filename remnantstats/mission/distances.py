"""Distances to the nearest stars with the planet sought, and the aperture that they ask for."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.optimize
import scipy.special

from .settings import MissionSettings

__all__ = ["aperture", "nearest_hosts", "neighbour_quantile"]

FloatArray = npt.NDArray[np.float64]

#: arcseconds in a radian: a separation of a au at d pc subtends a/d arcsec
ARCSECONDS = 206265.0
NEIGHBOURS = 5
_POINTS = {"q05": 0.05, "q50": 0.5, "q95": 0.95}


def neighbour_quantile(k: int, probability: float, host_density: FloatArray) -> float:
    """Quantile of the distance to the k-th nearest host, mixed over the density of hosts.

    Hosts scattered at random with density n have (4π/3) n d³ ~ Gamma(k, 1) (Hertz 1909, Math. Ann. 67, 387;
    Chandrasekhar 1943, Rev. Mod. Phys. 15, 1).

    Parameters
    ----------
    k : int
        1 for the nearest.
    probability : float
        In (0, 1).
    host_density : ndarray, shape (draws,)
        Hosts per cubic parsec, not negative; zero means that there is no host at any distance.

    Returns
    -------
    float
        In pc; infinite where so many draws have no hosts that the quantile is never reached.
    """
    present = host_density[host_density > 0]
    share = present.size / host_density.size
    if share <= probability:
        return float("inf")

    def excess(log_distance: float) -> float:
        volume = 4 * np.pi / 3 * present * np.exp(3 * log_distance)
        return float(share * np.mean(scipy.special.gammainc(k, volume)) - probability)

    # a mixture's quantile lies between those of its members
    single = scipy.special.gammaincinv(k, probability / share)
    extremes = np.log(single * 3 / (4 * np.pi) / np.array([present.max(), present.min()])) / 3
    low, high = float(extremes[0]) - 1e-6, float(extremes[1]) + 1e-6
    return float(np.exp(scipy.optimize.brentq(excess, low, high, xtol=1e-12)))


def aperture(distance: npt.ArrayLike, separation: float, wavelength: float, inner_working_angle: float) -> FloatArray:
    """Return the smallest aperture that separates planet and star at greatest elongation.

    Parameters
    ----------
    distance : array_like
        In pc.
    separation : float
        Of planet and star, in au.
    wavelength : float
        In µm.
    inner_working_angle : float
        In λ/D.

    Returns
    -------
    ndarray, shape of `distance`
        In m: κ λ / (a/d).
    """
    return np.asarray(
        inner_working_angle * wavelength * 1e-6 * ARCSECONDS * np.asarray(distance, dtype=float) / separation
    )


def nearest_hosts(occurrence: FloatArray, mission: MissionSettings) -> pd.DataFrame:
    """Tabulate distances to the nearest five hosts, and apertures where the mission gives what they need.

    Parameters
    ----------
    occurrence : ndarray, shape (draws,)
        Share of stars with the planet sought.
    mission : MissionSettings
        Its `density` gives the candidate stars per cubic parsec; without it the table is empty.

    Returns
    -------
    pandas.DataFrame
        `k`, `q05`, `q50`, `q95` in pc, `aperture_q05`, `aperture_q50`, `aperture_q95` in m. Quantiles only: the mean
        does not exist where the occurrence may be very near zero.
    """
    rows = []
    if mission.density is not None:
        for k in range(1, NEIGHBOURS + 1):
            row: dict[str, float] = {"k": k}
            for name, probability in _POINTS.items():
                row[name] = neighbour_quantile(k, probability, mission.density * occurrence)
            rows.append(row)
    table = pd.DataFrame(rows, columns=["k", *_POINTS])
    for name in _POINTS:
        table[f"aperture_{name}"] = _apertures(table[name].to_numpy(dtype=float), mission)
    return table


def _apertures(distance: FloatArray, mission: MissionSettings) -> FloatArray:
    separation, wavelength, angle = mission.planet_separation, mission.wavelength, mission.inner_working_angle
    if separation is None or wavelength is None or angle is None:
        return np.full(distance.shape, np.nan)
    return aperture(distance, separation, wavelength, angle)
