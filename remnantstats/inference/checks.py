"""Checks of a fit, each with a plain verdict."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
import pandas as pd

__all__ = [
    "LIMITS",
    "Check",
    "convergence_checks",
    "engine_check",
    "extrapolation_check",
    "influence_check",
    "predictive_verdict",
    "quick_check",
    "verdict",
]

FloatArray = npt.NDArray[np.float64]
Verdict = Literal["pass", "warn", "fail"]


@dataclass(frozen=True)
class Limits:
    """Thresholds of the checks."""

    r_hat: float = 1.01
    ess: float = 400.0
    divergences: float = 0.001
    e_bfmi: float = 0.3
    engine_mean: float = 0.25
    engine_sd: float = 0.20
    predictive: float = 0.001
    pareto_k: float = 0.7
    extrapolated: float = 0.30
    #: share of extrapolation too small to compare: its spread is that of a far tail
    negligible: float = 0.01


LIMITS = Limits()


@dataclass(frozen=True)
class Check:
    """One check.

    Attributes
    ----------
    name : str
    verdict : {"pass", "warn", "fail"}
    value : float
        What was measured.
    allowed : str
        What would pass.
    message : str
        One plain sentence.
    """

    name: str
    verdict: Verdict
    value: float
    allowed: str
    message: str


def verdict(checks: Sequence[Check]) -> Verdict:
    """The worst verdict among checks."""
    found = {check.verdict for check in checks}
    return "fail" if "fail" in found else "warn" if "warn" in found else "pass"


def _judge(good: bool, otherwise: Verdict) -> Verdict:
    return "pass" if good else otherwise


def convergence_checks(summary: pd.DataFrame, divergent: float, e_bfmi: float, draws: int) -> list[Check]:
    """Checks of the sampler.

    Parameters
    ----------
    summary : pandas.DataFrame
        With columns `quantity, r_hat, ess_bulk, ess_tail`.
    divergent : float
        Share of divergent transitions.
    e_bfmi : float
        Lowest energy fraction of missing information over chains.
    draws : int
        Draws per chain at which sampling stopped.

    Returns
    -------
    list of Check
    """
    moving = summary[summary["sd"] > 0]
    r_hat = moving["r_hat"].max()
    worst = moving.loc[moving["r_hat"].idxmax(), "quantity"] if len(moving) else "-"
    ess = moving[["ess_bulk", "ess_tail"]].min().min()
    weakest = moving.loc[moving[["ess_bulk", "ess_tail"]].min(axis=1).idxmin(), "quantity"] if len(moving) else "-"
    return [
        Check(
            "chains agree",
            _judge(bool(r_hat < LIMITS.r_hat), "fail"),
            float(r_hat),
            f"r-hat below {LIMITS.r_hat}",
            f"largest r-hat {r_hat:.4f} ({worst}) after {draws} draws in each of the chains",
        ),
        Check(
            "enough independent draws",
            _judge(bool(ess > LIMITS.ess), "fail"),
            float(ess),
            f"effective sample size above {LIMITS.ess:.0f}, bulk and tail",
            f"smallest effective sample size {ess:.0f} ({weakest})",
        ),
        Check(
            "no divergences",
            _judge(divergent <= LIMITS.divergences, "fail"),
            float(divergent),
            f"at most {100 * LIMITS.divergences:g} % of transitions",
            f"{100 * divergent:.2f} % of the sampler's transitions diverged",
        ),
        Check(
            "energy explored",
            _judge(e_bfmi >= LIMITS.e_bfmi, "fail"),
            float(e_bfmi),
            f"E-BFMI at least {LIMITS.e_bfmi}",
            f"lowest E-BFMI over chains {e_bfmi:.2f}",
        ),
    ]


def engine_check(full: pd.DataFrame, quick: Mapping[str, tuple[float, float]] | None, k_hat: float) -> Check:
    """Compare the two engines, quantity by quantity.

    Parameters
    ----------
    full : pandas.DataFrame
        Summary of the engine of record.
    quick : mapping or None
        Mean and sd by quantity from the quick engine; None where it does not serve.
    k_hat : float
        Pareto k̂ of the quick engine.
    """
    allowed = f"means within {LIMITS.engine_mean} sd, sds within {100 * LIMITS.engine_sd:.0f} %"
    if quick is None or not k_hat <= LIMITS.pareto_k:
        return Check(
            "two engines, one answer", "pass", float("nan"), allowed,
            f"not compared: the quick engine does not serve this model here (Pareto k {k_hat:.2f})",
        )
    worst_mean, worst_sd, name = 0.0, 0.0, "-"
    for row in full.itertuples():
        if row.quantity not in quick or not row.sd > 0:
            continue
        mean, sd = quick[row.quantity]
        if row.quantity == "extrapolated_share" and max(mean, row.mean) < LIMITS.negligible:
            continue
        shift, ratio = abs(mean - row.mean) / row.sd, abs(sd / row.sd - 1)
        if max(shift / LIMITS.engine_mean, ratio / LIMITS.engine_sd) > max(
            worst_mean / LIMITS.engine_mean, worst_sd / LIMITS.engine_sd
        ):
            worst_mean, worst_sd, name = shift, ratio, row.quantity
    good = worst_mean <= LIMITS.engine_mean and worst_sd <= LIMITS.engine_sd
    return Check(
        "two engines, one answer", _judge(good, "fail"), worst_mean, allowed,
        f"largest difference: {name}, mean {worst_mean:.2f} sd apart, sd {100 * worst_sd:.0f} % apart",
    )


def quick_check(k_hat: float, effective: float) -> list[Check]:
    """Checks of the quick engine."""
    return [
        Check(
            "importance weights", _judge(k_hat <= LIMITS.pareto_k, "fail"), k_hat,
            f"Pareto k at most {LIMITS.pareto_k}", f"Pareto k of the quick engine's weights {k_hat:.2f}",
        ),
        Check(
            "enough independent draws", _judge(effective > LIMITS.ess, "fail"), effective,
            f"effective sample size above {LIMITS.ess:.0f}", f"effective sample size {effective:.0f}",
        ),
    ]


def predictive_verdict(p_value: float, replicates: int) -> Check:
    """Check of the posterior predictive p value."""
    allowed = f"posterior predictive p at least {LIMITS.predictive}"
    if not replicates:
        nothing = "not checked: no blind stars, whose detections could be predicted"
        return Check("data like the model's own", "pass", float("nan"), allowed, nothing)
    text = f"{p_value:.3f}" if p_value > 0 else f"below {1 / replicates:.1g}"
    return Check(
        "data like the model's own",
        _judge(p_value >= LIMITS.predictive, "fail"),
        p_value,
        allowed,
        f"counts by depth and by value lie as far from expectation, or farther, in a share of {text} of "
        f"{replicates} replicated surveys",
    )


def influence_check(pareto_k: FloatArray, stars: Sequence[str]) -> Check:
    """Check of single stars' influence, by leave-one-out Pareto k̂."""
    high = np.flatnonzero(pareto_k > LIMITS.pareto_k)
    named = ", ".join(stars[i] for i in high[np.argsort(-pareto_k[high])][:5])
    text = f"stars that move the posterior much: {high.size} ({named})"
    if not high.size:
        text = "no single star moves the posterior much"
    worst = float(np.max(pareto_k)) if pareto_k.size else 0.0
    return Check(
        "no star decides alone", _judge(not high.size, "warn"), worst,
        f"leave-one-out Pareto k at most {LIMITS.pareto_k} for every star", text,
    )


def extrapolation_check(share: float, limit: float) -> Check:
    """Check of how much of the population lies below what half the stars could have shown."""
    return Check(
        "little extrapolation",
        _judge(not share > LIMITS.extrapolated, "warn"),
        share,
        f"extrapolated share at most {100 * LIMITS.extrapolated:.0f} %",
        f"{100 * share:.0f} % of the debris population lies below {limit:.2f}, the depth that half the blind stars "
        "reached: there the fraction rests on the assumed shape of the distribution",
    )
