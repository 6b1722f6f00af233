"""Time and peak memory of turning a million abundances into rates, with 64 draws each.

Run as ``python tests/benchmarks/abundances.py [rows] [draws]``. The grid is invented; only its size matters.
"""

import resource
import sys
import time

import numpy as np

from remnantstats.physics.accretion_errors import StarParameters, rate_with_errors
from remnantstats.physics.settling import SettlingGrid


def invented_grid() -> SettlingGrid:
    teff, logg = np.meshgrid(np.linspace(5000.0, 30000.0, 26), np.linspace(7.0, 9.0, 9), indexing="ij")
    columns = {name: [] for name in ("atmosphere", "teff", "logg", "element", "time", "cvz")}
    for atmosphere, slow in (("H", 0.0), ("He", 4.0)):
        for element in ("Ca", "Mg", "Si", "Fe"):
            log_time = slow + 3.0 - 6.0 * (teff - 5000.0) / 25000.0 - (logg - 8.0)
            columns["atmosphere"].append(np.full(teff.size, atmosphere))
            columns["element"].append(np.full(teff.size, element))
            columns["teff"].append(teff.ravel())
            columns["logg"].append(logg.ravel())
            columns["time"].append(log_time.ravel())
            columns["cvz"].append((0.7 * log_time - 12.0 + 0.2 * np.sin(teff / 2000.0)).ravel())
    return SettlingGrid(*(np.concatenate(column) for column in columns.values()), source="an invented grid")


def main(rows: int = 1_000_000, draws: int = 64) -> None:
    rng = np.random.default_rng(1)
    stars = StarParameters(
        atmosphere=np.where(rng.random(rows) < 0.8, "H", "He"),
        teff=rng.uniform(6000.0, 28000.0, rows),
        teff_err=np.full(rows, 300.0),
        logg=rng.normal(8.0, 0.15, rows).clip(7.1, 8.9),
        logg_err=np.full(rows, 0.05),
        mass=np.full(rows, 0.6),
    )
    element = rng.choice(["Ca", "Mg", "Si", "Fe"], rows)
    abundance = rng.normal(-7.0, 1.0, rows)
    start = time.perf_counter()
    rates = rate_with_errors(
        invented_grid(), stars, element, abundance, np.full(rows, 0.1), abundance - 1.0, rng=rng, draws=draws
    )
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0**2
    print(f"{rows:,} rows, {draws} draws: {seconds:.1f} s, peak {peak:.2f} GB")
    print(f"median calibration error {np.median(rates.calibration_err):.3f} dex")


if __name__ == "__main__":
    main(*(int(argument) for argument in sys.argv[1:]))
