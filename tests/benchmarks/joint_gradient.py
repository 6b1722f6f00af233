"""Cost of one gradient of the two-channel log posterior beside that of the single-channel one, on the same stars.

Run by hand: python tests/benchmarks/joint_gradient.py
"""

import time
from pathlib import Path

import numpy as np

from remnantstats.inference.compiler import build_model
from remnantstats.inference.density import compiled_density
from remnantstats.inference.quick import starting_points
from remnantstats.population import load_model, pose
from remnantstats.study import read_study_sample
from remnantstats.study_file import load_study

STUDY = Path(__file__).parents[2] / "data_synthetic" / "ferrow" / "study.toml"


def seconds(density, point, repeats=2000):
    """Median over 7 batches of the time of one evaluation."""
    for _ in range(50):
        density(point)
    batches = []
    for _ in range(7):
        start = time.perf_counter()
        for _ in range(repeats // 7):
            density(point)
        batches.append((time.perf_counter() - start) / (repeats // 7))
    return float(np.median(batches))


def main():
    study = load_study(STUDY)
    sample = read_study_sample(study)
    joint = pose(load_model("dust-sometimes"), sample, study.channels)
    single = pose(load_model("steady"), sample, {"pollution": study.channels["pollution"]})
    cost = {}
    for name, problem in (("single channel", single), ("two channels", joint)):
        density = compiled_density(build_model(problem))
        cost[name] = seconds(density, starting_points(problem)[0])
        print(f"{name:<15} {1e6 * cost[name]:8.1f} microseconds a gradient, {len(sample)} stars")
    print(f"ratio {cost['two channels'] / cost['single channel']:.2f}")


if __name__ == "__main__":
    main()
