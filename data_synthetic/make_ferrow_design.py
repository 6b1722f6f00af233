"""Draw the design of the second demonstration, before any outcome: python data_synthetic/make_ferrow_design.py

Invented stars: a blind optical survey, an infrared survey of a third of it, and an infrared follow-up of stars that an older
list had as polluted.
"""

from pathlib import Path

import numpy as np
import pandas as pd

from remnantstats.catalog import to_ecsv

rng = np.random.default_rng(500)
blind, followed = 400, 100
size = blind + followed
known = np.arange(size) >= blind
age = np.clip(10 ** rng.normal(-0.3, 0.35, size), 0.05, 6)
teff = np.round(np.clip(12_000 * (age / 0.4) ** -0.38, 5000, 25_000))
infrared = known | (rng.random(size) < 0.35)
table = pd.DataFrame(
    {
        "star": [f"design-{n}" for n in range(size)],
        "survey": np.where(known, "Ferrow follow-up", "Ferrow wide"),
        "inclusion": np.where(known, "known-polluted", "blind"),
        "atmosphere": "H",
        "teff": teff,
        "cooling_age": np.round(age, 4),
        "pollution": "limit",
        "log_accretion_limit": np.round(np.where(known, 6.8, 7.6) + rng.normal(0, 0.35, size), 3),
        "selection_limit": np.where(known, 7.9, np.nan),
        "selection_width": np.where(known, 0.2, np.nan),
        "excess": np.where(infrared, "limit", "unobserved"),
        "log_dust_limit": np.where(infrared, np.round(np.where(known, -3.3, -2.8) + rng.normal(0, 0.2, size), 3), np.nan),
    }
)
to_ecsv(table, Path(__file__).parent / "ferrow" / "design.ecsv", {"comments": ["invented design; no star of it exists"]})
