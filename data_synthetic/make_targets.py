"""Draw the invented mission targets of the demonstration: python data_synthetic/make_targets.py"""

from pathlib import Path

import numpy as np
import pandas as pd

rng = np.random.default_rng(60)
distance = np.sort(np.round(25 * rng.random(60) ** (1 / 3), 2))
completeness = np.round(np.clip(0.95 - 0.022 * distance + rng.normal(0, 0.04, 60), 0.1, 0.97), 3)
table = pd.DataFrame(
    {"target": [f"Ondar-{n:02d}" for n in range(1, 61)], "distance": distance, "completeness": completeness}
)
table.to_csv(Path(__file__).parent / "quillon" / "targets.csv", index=False)
