"""From a posed model to a checked fit."""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..errors import Fault, InferenceError
from ..population import Problem
from ..population.quantities import Quantity, Thresholds, median_limit, reported
from . import checks as judge
from .checks import Check
from .design import SurveyDesign, survey_design
from .fit import Fit
from .influence import prior_conflict_check, star_influence
from .predictive import predictive_check, replicate
from .quick import QuickDraws, importance_draws
from .stars import completeness_table, star_table
from .store import build_tree

__all__ = ["Memory", "fit_problem"]

FloatArray = npt.NDArray[np.float64]
Progress = Callable[[str], None]

_FIRST, _CAP = 1000, 8000
_QUICK_DRAWS = 4000
_PRIOR_DRAWS = 2000
_PREDICTIVE_DRAWS = 200


class Memory(Protocol):
    """Where the draws of a finished sampling are kept."""

    def load(self) -> dict[str, npt.NDArray[Any]] | None:
        """Return the arrays of an earlier run, or None."""
        ...

    def save(self, arrays: dict[str, npt.NDArray[Any]]) -> None:
        """Keep the arrays of this run."""
        ...


@dataclass
class _Clock:
    """Seconds by stage, and a word to the user as each begins."""

    say: Progress
    seconds: dict[str, float] = field(default_factory=dict)
    _last: tuple[str, float] | None = None

    def stage(self, name: str) -> None:
        self.stop()
        self.say(name)
        self._last = (name, time.perf_counter())

    def stop(self) -> None:
        if self._last is not None:
            name, start = self._last
            self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - start
            self._last = None


@dataclass(frozen=True)
class _Draws:
    """Draws of either engine in one form: unconstrained, shape (chains, draws, d)."""

    u: FloatArray
    stats: Mapping[str, npt.NDArray[Any]]
    checks: list[Check]
    table: pd.DataFrame
    quantities: list[Quantity]
    sampler: str


def fit_problem(
    problem: Problem,
    seed: int,
    *,
    quick: bool = False,
    thresholds: Thresholds | None = None,
    progress: Progress | None = None,
    memory: Memory | None = None,
) -> Fit:
    """Infer, check and lay out.

    Parameters
    ----------
    problem : Problem
        A model posed on a sample.
    seed : int
        Same seed, same result.
    quick : bool
        Use the quick engine alone; loads no compiler.
    thresholds : Thresholds, optional
        Values above which the fraction is reported.
    progress : callable, optional
        Called with the name of each stage as it begins.
    memory : Memory, optional
        Where finished draws are kept and looked for.

    Returns
    -------
    Fit

    Raises
    ------
    InferenceError
        Where no posterior could be drawn.
    """
    clock = _Clock(progress or (lambda _: None))
    thresholds = thresholds or Thresholds()
    clock.stage("quick engine")
    fast = _quick_or_none(problem, seed)
    if quick:
        draws = _quick_draws(problem, fast, seed, thresholds)
    else:
        draws = _full_draws(problem, fast, seed, thresholds, clock, memory)
    clock.stage("checks")
    theta = problem.theta(draws.u.reshape(-1, problem.dimension))
    design = survey_design(problem, seed)
    predictive = predictive_check(problem, design, theta, seed)
    log_likelihood = problem.pointwise(theta)
    found = [*draws.checks, judge.predictive_verdict(predictive.p_value, predictive.replicates)]
    found += _data_checks(problem, draws, log_likelihood)
    tree = _tree(problem, draws, theta, design, log_likelihood, seed, thresholds, quick)
    if not quick:
        # a first look leaves this out: it loads as much again as all the rest
        found.append(prior_conflict_check(tree, [item.name for item in draws.quantities if not item.dim][:8]))
    clock.stage("stars")
    stars = star_table(problem, design, theta, seed, log_likelihood)
    completeness = completeness_table(problem, design)
    clock.stop()
    return Fit(
        posterior=tree,
        problem=problem,
        table=draws.table,
        checks=tuple(found),
        stars=stars,
        completeness=completeness,
        predictive=predictive,
        engine="quick" if quick else "full",
        seed=seed,
        notes=_notes(problem, design),
        timings=clock.seconds,
    )


def _quick_or_none(problem: Problem, seed: int) -> QuickDraws | None:
    try:
        return importance_draws(problem, np.random.default_rng([seed, 1]))
    except (InferenceError, np.linalg.LinAlgError):
        return None


def _quick_draws(problem: Problem, fast: QuickDraws | None, seed: int, thresholds: Thresholds) -> _Draws:
    if fast is None or not fast.usable:
        k_hat = float("inf") if fast is None else fast.k_hat
        raise InferenceError(
            str(
                Fault(
                    "the quick engine does not serve this model on this sample",
                    where=f"model '{problem.model.name}', {problem.dimension} parameters",
                    found=f"Pareto k {k_hat:.2f}",
                    allowed=f"at most {judge.LIMITS.pareto_k}",
                    remedy="run without --quick",
                )
            )
        )
    u = fast.resampled(np.random.default_rng([seed, 2]), _QUICK_DRAWS)[None]
    quantities = reported(problem, problem.theta(u[0]), thresholds)
    table = _summary(quantities, (1, _QUICK_DRAWS))
    for column in ("ess_bulk", "ess_tail"):
        table[column] = np.where(table["sd"] > 0, fast.effective, np.nan)
    table["r_hat"] = np.nan
    stats = {"weight_k_hat": np.full((1, _QUICK_DRAWS), fast.k_hat)}
    return _Draws(u, stats, judge.quick_check(fast.k_hat, fast.effective), table, quantities, "importance")


def _full_draws(
    problem: Problem,
    fast: QuickDraws | None,
    seed: int,
    thresholds: Thresholds,
    clock: _Clock,
    memory: Memory | None,
) -> _Draws:
    kept = None if memory is None else memory.load()
    if kept is not None:
        clock.stage("draws of an earlier run")
        stats = {name.removeprefix("stat "): value for name, value in kept.items() if name.startswith("stat ")}
        drawn = _assess(problem, kept["u"], stats, str(kept["sampler"]), thresholds)
    else:
        drawn = _sampled(problem, fast, seed, thresholds, clock)
        if memory is not None:
            stored = {f"stat {name}": value for name, value in drawn.stats.items()}
            memory.save({"u": drawn.u, "sampler": np.array(drawn.sampler), **stored})
    drawn.checks.append(_compare(problem, fast, drawn.table, seed, thresholds))
    return drawn


def _sampled(
    problem: Problem, fast: QuickDraws | None, seed: int, thresholds: Thresholds, clock: _Clock
) -> _Draws:
    # imported here for start-up time alone: this loads PyMC and the compiler
    clock.stage("compilation")
    with warnings.catch_warnings():
        # the compiler's C side misses a linear-algebra library that the numba side, used here, does not need
        warnings.filterwarnings("ignore", message=".*could not link to a BLAS", category=UserWarning)
        from .nuts import CHAINS, NutsSampler

    sampler = NutsSampler(problem, seed, fast)
    size = _FIRST
    while True:
        clock.stage(f"sampling {CHAINS} × {size}")
        raw = sampler.draw(size)
        drawn = _assess(problem, raw.u, raw.stats, raw.sampler, thresholds)
        if size >= _CAP or all(check.verdict == "pass" for check in drawn.checks[:2]):
            return drawn
        size *= 2


def _assess(
    problem: Problem, u: FloatArray, stats: Mapping[str, npt.NDArray[Any]], sampler: str, thresholds: Thresholds
) -> _Draws:
    """Quantities, summary and convergence checks of drawn chains."""
    quantities = reported(problem, problem.theta(u.reshape(-1, problem.dimension)), thresholds)
    table = _summary(quantities, (u.shape[0], u.shape[1]))
    divergent, bfmi = float(np.mean(stats["diverging"])), _lowest_bfmi(stats["energy"])
    checks = judge.convergence_checks(table, divergent, bfmi, u.shape[1])
    return _Draws(u, stats, checks, table, quantities, sampler)


def _lowest_bfmi(energy: npt.NDArray[Any]) -> float:
    variance = energy.var(axis=1)
    steps = np.mean(np.diff(energy, axis=1) ** 2, axis=1)
    return float(np.min(steps / np.where(variance > 0, variance, np.inf)))


def _compare(
    problem: Problem, fast: QuickDraws | None, table: pd.DataFrame, seed: int, thresholds: Thresholds
) -> Check:
    if fast is None:
        return judge.engine_check(table, None, float("inf"))
    draws = fast.resampled(np.random.default_rng([seed, 2]), _QUICK_DRAWS)
    moments = {
        name: (float(np.mean(values)), float(np.std(values)))
        for item in reported(problem, problem.theta(draws), thresholds)
        for name, values in item.entries
    }
    return judge.engine_check(table, moments, fast.k_hat)


def _summary(quantities: Sequence[Quantity], shape: tuple[int, int]) -> pd.DataFrame:
    # imported here for start-up time alone
    from arviz_stats.base import array_stats

    rows = []
    for item in quantities:
        for name, values in item.entries:
            points = np.quantile(values, [0.05, 0.1587, 0.5, 0.8413, 0.95])
            chains = values.reshape(shape)
            moves = bool(np.ptp(values) > 0) and shape[0] > 1
            rows.append(
                {
                    "quantity": name,
                    "mean": float(np.mean(values)),
                    "sd": float(np.std(values)) if np.ptp(values) > 0 else 0.0,
                    **dict(zip(("q05", "q16", "q50", "q84", "q95"), map(float, points), strict=True)),
                    "ess_bulk": float(array_stats.ess(chains, chain_axis=0, draw_axis=1)) if moves else np.nan,
                    "ess_tail": float(
                        array_stats.ess(chains, chain_axis=0, draw_axis=1, method="tail", prob=(0.05, 0.95))
                    )
                    if moves
                    else np.nan,
                    "r_hat": float(array_stats.rhat(chains, chain_axis=0, draw_axis=1)) if moves else np.nan,
                }
            )
    return pd.DataFrame(rows)


def _data_checks(problem: Problem, draws: _Draws, log_likelihood: FloatArray) -> list[Check]:
    extrapolated = next(item for item in draws.quantities if item.name == "extrapolated_share")
    share = float(np.mean(extrapolated.entries[0][1]))
    stars = problem.sample.table["star"].to_numpy(dtype=str)
    found = [judge.influence_check(star_influence(log_likelihood), list(stars))]
    if np.isfinite(share):
        found.append(judge.extrapolation_check(share, median_limit(problem)))
    found.append(_limits_check(problem))
    return found


def _limits_check(problem: Problem) -> Check:
    lacking = 0
    for channel in problem.rows.channels.values():
        lacking += int((np.isfinite(channel.value) & ~np.isfinite(channel.limit)).sum())
    return Check(
        "limits given",
        "warn" if lacking else "pass",
        float(lacking),
        "a limit for every observed star",
        f"{lacking} detected stars have no limit; completeness, depth bins and predictive checks take theirs from "
        "blind stars of the same survey and atmosphere"
        if lacking
        else "every observed star has its limit",
    )


def _notes(problem: Problem, design: SurveyDesign) -> tuple[str, ...]:
    notes = list(problem.sample.notes)
    for name, item in design.limits.items():
        if item.imputed.any():
            notes.append(
                f"{int(item.imputed.sum())} limits of the {name} channel were taken from blind stars of the same "
                f"survey and atmosphere"
                + (f" ({item.borrowed} of them from other surveys, for want of any)" if item.borrowed else "")
            )
    return tuple(notes)


def _tree(
    problem: Problem,
    draws: _Draws,
    theta: Mapping[str, FloatArray],
    design: SurveyDesign,
    log_likelihood: FloatArray,
    seed: int,
    thresholds: Thresholds,
    quick: bool,
) -> Any:
    rng = np.random.default_rng([seed, 3])
    shape = draws.u.shape[:2]
    flat = draws.u.reshape(-1, problem.dimension)
    index = rng.permutation(len(flat))[: min(_PREDICTIVE_DRAWS, max(1, 4_000_000 // max(len(problem.rows), 1)))]
    part = {key: value[index] if np.ndim(value) else value for key, value in theta.items()}
    prior_u = np.concatenate(
        [
            item.unconstrain(item.sample_prior(rng, _PRIOR_DRAWS * item.size)).reshape(_PRIOR_DRAWS, item.size)
            for item in problem.free
        ],
        axis=1,
    )
    return build_tree(
        problem,
        draws.quantities,
        reported(problem, problem.theta(prior_u), thresholds),
        (shape[0], shape[1]),
        {
            "log_likelihood": log_likelihood,
            "log_prior": _log_priors(problem, theta),
            "sample_stats": dict(draws.stats),
            "predictive": replicate(rng, problem, design, part),
        },
        {"model": problem.model.name, "engine": "quick" if quick else "full", "sampler": draws.sampler, "seed": seed},
    )


def _log_priors(problem: Problem, theta: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    """Log prior density of each free parameter, on its own scale."""
    found = {}
    for item in problem.free:
        values = theta[item.name]
        density = np.asarray(item.prior.logpdf(1 / values if item.inverse else values))
        found[item.name.replace("[", "_").rstrip("]")] = density if density.ndim == 1 else density.sum(axis=1)
    return found


