"""The engine of record: NUTS on the compiled posterior density.

The compiled sampler is handed the PyTensor function itself: one way of compiling, whatever the cache holds, so that the
same seed gives the same draws.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from importlib.util import find_spec
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InferenceError
from ..population import Problem
from .compiler import build_model
from .density import compiled_density
from .quick import QuickDraws

__all__ = ["CHAINS", "NutsDraws", "NutsSampler"]

FloatArray = npt.NDArray[np.float64]
CHAINS = 4
_TUNE = 600
_CORES = 2


@dataclass(frozen=True)
class NutsDraws:
    """Draws on the unconstrained scale.

    Attributes
    ----------
    u : ndarray, shape (chains, draws, dimension)
    stats : dict of str to ndarray, shape (chains, draws)
        diverging, energy, n_steps, and what else the sampler tells.
    sampler : str
        Which sampler drew them.
    """

    u: FloatArray
    stats: dict[str, npt.NDArray[Any]]
    sampler: str


class NutsSampler:
    """A posed problem, compiled once and sampled as often as needed.

    Parameters
    ----------
    problem : Problem
    seed : int
    start : QuickDraws or None
        Mode and covariance about which the chains start; the same for the same problem.
    """

    def __init__(self, problem: Problem, seed: int, start: QuickDraws | None) -> None:
        self.problem = problem
        self.seed = seed
        self.start = start
        self.model = build_model(problem)
        self.density = compiled_density(self.model)
        if not np.isfinite(self.density(self._initial(seed))[0]):
            raise InferenceError("the posterior density is not finite where sampling starts")

    def draw(self, draws: int) -> NutsDraws:
        """Draw `draws` per chain, after the same tuning whatever `draws` is."""
        if find_spec("nutpie") is None:
            return self._plain(draws)
        return self._compiled(draws)

    def _initial(self, seed: int) -> FloatArray:
        """A starting point, spread wider than the posterior."""
        rng = np.random.default_rng(seed)
        if self.start is None:
            return rng.normal(scale=0.5, size=self.problem.dimension)
        for widening in (2.0, 1.0, 0.3, 0.0):
            factor = np.linalg.cholesky(self.start.covariance + 1e-12 * np.eye(self.problem.dimension))
            point = self.start.mode + widening * factor @ np.clip(rng.standard_normal(self.problem.dimension), -2, 2)
            if np.isfinite(self.density(point)[0]):
                break
        return np.asarray(point)

    def _compiled(self, draws: int) -> NutsDraws:
        with warnings.catch_warnings():
            # importing the sampler imports a plotting library that announces its own future
            warnings.simplefilter("ignore", FutureWarning)
            import nutpie
            from nutpie.compiled_pyfunc import from_pyfunc
        model = from_pyfunc(
            self.problem.dimension,
            lambda: self.density,
            _identity,
            [np.dtype("float64")],
            [(self.problem.dimension,)],
            ["u"],
            make_initial_point_fn=self._initial,
        )
        trace = nutpie.sample(
            model, draws=draws, tune=_TUNE, chains=CHAINS, cores=_CORES, seed=self.seed, progress_bar=False,
            save_warmup=False,
        )
        stats = trace.sample_stats
        kept = {name: np.asarray(stats[name]) for name in ("diverging", "energy", "n_steps", "depth", "step_size")
                if name in stats}
        return NutsDraws(np.asarray(trace.posterior["u"], dtype=float), kept, "nutpie")

    def _plain(self, draws: int) -> NutsDraws:
        import pymc as pm

        with self.model:
            trace = pm.sample(
                draws=draws, tune=2 * _TUNE, chains=CHAINS, cores=1, random_seed=self.seed, progressbar=False,
                nuts_sampler="pymc", compute_convergence_checks=False, target_accept=0.9,
            )
        parts = []
        for parameter in self.problem.free:
            value = parameter.unconstrain(np.asarray(trace.posterior[parameter.name]))
            parts.append(value.reshape(*value.shape[:2], parameter.size))
        stats = {
            name: np.asarray(trace.sample_stats[name])
            for name in ("diverging", "energy", "n_steps", "tree_depth", "step_size")
            if name in trace.sample_stats
        }
        return NutsDraws(np.concatenate(parts, axis=2), stats, "PyMC")


def _identity(_seed1: int, _seed2: int, _chain: int) -> Callable[[FloatArray], dict[str, FloatArray]]:
    return lambda x: {"u": x}
