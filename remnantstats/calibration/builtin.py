"""The built-in two-depth design: invented stars, a few observed deeply, most of them shallowly."""

from __future__ import annotations

import numpy as np
import pandas as pd

__all__ = ["builtin_table"]

#: share of stars in the deep survey
_DEEP = 0.35


def builtin_table(rng: np.random.Generator, stars: int, infrared: bool) -> pd.DataFrame:
    """Draw a design: limits, widths and covariates of stars before any outcome.

    Parameters
    ----------
    rng : numpy.random.Generator
    stars : int
        At least 1.
    infrared : bool
        Whether the stars have an infrared channel too.

    Returns
    -------
    pandas.DataFrame
        In the sample table's format, every star observed with outcome "limit".

    Notes
    -----
    Cooling ages are log-normal about 0.5 Gyr; temperatures follow a power law of age, which is a stand-in for cooling
    models; limits rise with temperature, since metal lines of hot stars are weak, and scatter by 0.2 dex.
    """
    deep = rng.random(stars) < _DEEP
    age = np.clip(10 ** rng.normal(-0.3, 0.4, stars), 0.03, 9.0)
    teff = np.clip(12_000 * (age / 0.4) ** -0.38 * 10 ** rng.normal(0, 0.03, stars), 4500, 40_000)
    limit = np.where(deep, 6.6, 8.1) + 1.5 * (np.log10(teff) - 4.05) + rng.normal(0, 0.2, stars)
    mass = np.clip(rng.normal(0.62, 0.1, stars), 0.45, 1.1)
    progenitor = np.clip(rng.lognormal(0.6, 0.35, stars), 0.9, 6.5)
    table = pd.DataFrame(
        {
            "star": [f"design-{number}" for number in range(stars)],
            "survey": np.where(deep, "deep", "wide"),
            "inclusion": "blind",
            "atmosphere": "H",
            "teff": np.round(teff, 0),
            "mass": np.round(mass, 3),
            "cooling_age": np.round(age, 4),
            "progenitor_mass": np.round(progenitor, 3),
            "distance": np.round(np.clip(rng.gamma(3.0, 25.0, stars), 4, 400), 1),
            "pollution": "limit",
            "log_accretion_limit": np.round(limit, 3),
        }
    )
    if infrared:
        table["excess"] = "limit"
        table["log_dust_limit"] = np.round(np.where(deep, -3.2, -2.7) + rng.normal(0, 0.2, stars), 3)
    return table
