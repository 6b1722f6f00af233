"""Captions of the figures, and the texts that stand in for them, written from the numbers."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..inference import Fit
from ..inference.compare import Comparison
from ..mission import MissionSize
from ..occurrence import OccurrencePrior
from ..population import parameters as names
from ..population.distributions import describe
from ..population.quantities import Thresholds
from ..sensitivity import CHANNELS
from .facts import (
    blind_fraction,
    channel_fraction,
    companion,
    depth_bins,
    efficiency_at,
    median_depth,
    reference_noun,
    sample_fraction,
    smallest_seen,
)
from .figures_models import above_rows
from .figures_sample import across
from .glossary import channel_noun, define, threshold_text
from .numbers import chance, count, measure, number, row_measure

__all__ = ["Words"]


class Words(NamedTuple):
    """What is said of a figure.

    Parameters
    ----------
    title : str
    caption : str
    alternative : str
        Stands in for the figure where it cannot be seen.
    """

    title: str
    caption: str
    alternative: str


def row_of(fit: Fit, quantity: str) -> Any:
    """The summary's row of a quantity."""
    return next(fit.table[fit.table["quantity"] == quantity].itertuples())


def sample(fit: Fit, channel: str) -> Words:
    """Words for the sample."""
    counts = fit.stars[channel].value_counts()
    known = int((fit.stars["inclusion"] != "blind").sum())
    found, limits = int(counts.get("detected", 0)), int(counts.get("limit", 0))
    label = across(fit)[1].split(" (")[0].lower()
    noun = channel_noun(channel)
    depth = median_depth(fit, channel)
    caption = (
        f"Every observed star, by {label}. Filled circles: detections, with their errors. Open triangles: nothing "
        "seen, "
        f"drawn at the {noun} where detection is half as likely as it ever gets."
    )
    if known:
        caption += " Squares: stars observed because their debris was known; they inform the values, not the fraction."
    text = f"Scatter of {noun} against {label}: {count(found, 'detection')} and {count(limits, 'limit')}"
    text += f"; half the blind stars reached log {number(depth)} or deeper." if np.isfinite(depth) else "."
    return Words(f"The sample: {noun}", caption, text)


def correction(fit: Fit, channel: str) -> Words:
    """Words for raw against corrected."""
    bins = depth_bins(fit, channel)
    draws = channel_fraction(fit, channel)
    corrected = measure(*np.quantile(draws, [0.5, 0.1587, 0.8413]))
    caption = (
        f"Dots: share detected among {reference_noun(fit)}s of like depth, with 68 % Wilson intervals; the deepest "
        "stars stand "
        "at the "
        "left. Diamonds: what the fitted model expects to be detected there, with 90 % of replicated surveys. Band: "
        "the "
        f"corrected fraction, {corrected}. The distance from dots to band is what the limits hide."
    )
    if fit.problem.reference:
        caption += " The band holds at the reference covariates; the diamonds at each star's own."
    each = "; ".join(
        f"limits {number(row.low)} to {number(row.high)}: {row.found} of {row.stars} detected, "
        f"{number(row.expected * row.stars, 1)} expected"
        for row in bins.itertuples()
    )
    title = "Why the count must be corrected" + (": dust" if channel == "excess" else "")
    return Words(title, caption, f"Share detected by depth of the observation. {each}. Corrected fraction {corrected}.")


def completeness(fit: Fit, channel: str) -> Words:
    """Words for the completeness."""
    half = smallest_seen(fit, channel)
    noun = channel_noun(channel)
    caption = f"Chance that the sample's blind stars would have shown a true {noun}: mean, and 10 to 90 % of the stars."
    if np.isfinite(half):
        caption += f" The mean reaches one half at log {number(half, 1)}."
    at = (7.0, 8.0) if channel == "pollution" else (-3.0, -2.0)
    shares = ", ".join(
        f"{number(efficiency_at(fit, channel, value))} at {threshold_text(channel, value)}" for value in at
    )
    return Words("What could have been seen", caption, f"Rising curve of mean chance of detection: {shares}.")


def fraction(fit: Fit) -> Words:
    """Words for the fraction's posterior."""
    raw = sample_fraction(fit, fit.problem.channels[0])
    label = define(fit, fit.fraction).label
    result = row_measure(row_of(fit, fit.fraction))
    prior = describe(fit.problem.parameter(names.DEBRIS_FRACTION).prior)
    caption = (
        f"Posterior of the {label.lower()}, its central 68 % darker and its median as a line; before the data: {prior}."
    )
    if raw.observed:
        caption += f" Dotted: the raw fraction, {raw.found} of {raw.observed}, with its 68 % Wilson interval."
    counted = f" Raw fraction {measure(raw.value, raw.low, raw.high)}." if raw.observed else ""
    return Words(label, caption, f"Density of the {label.lower()}: {result}.{counted}")


def above(fit: Fit, channel: str, thresholds: Thresholds) -> Words:
    """Words for the fraction above a threshold."""
    noun, depth = channel_noun(channel), median_depth(fit, channel)
    caption = f"Share of all white dwarfs whose {noun} exceeds T."
    if np.isfinite(depth):
        caption += (
            f" Hatched: below log {number(depth)}, the depth that half the blind stars reached; there the curve "
            "rests on "
            "the assumed shape."
        )
    steps = companion(fit, channel)
    if len(steps):
        caption += (
            f" Thin steps: Kaplan–Meier over the {reference_noun(fit)}s, limits as left-censored, from the deepest "
            "limit upwards; a visual check without an assumed shape, which knows neither errors nor ceilings nor "
            "spurious detections."
        )
    stem = "debris_fraction_above" if channel == "pollution" else "dusty_fraction_above"
    known = set(fit.table["quantity"])
    rows = [(value, f"{stem}[{value:g}]") for value in thresholds.of(channel) if f"{stem}[{value:g}]" in known]
    said = "; ".join(
        f"above {threshold_text(channel, value)}: {row_measure(row_of(fit, name))}" for value, name in rows
    )
    counted = f" Kaplan–Meier steps fall from {number(steps['fraction'].iloc[0])}." if len(steps) else ""
    text = f"Falling curve of the fraction above T. {said}.{counted}"
    return Words(f"Fraction above a given {noun}", caption, text)


def group_rows(fit: Fit) -> pd.DataFrame:
    """The summary's rows of group fractions."""
    return fit.table[fit.table["quantity"].str.startswith("group_fraction[")]


def groups(fit: Fit) -> Words:
    """Words for the groups."""
    said = "; ".join(f"{define(fit, row.quantity).label}: {row_measure(row)}" for row in group_rows(fit).itertuples())
    caption = (
        "Corrected fraction of each group beside the share counted among its blind stars, with 68 % Wilson interval. "
        "Groups lend each other strength: those with few stars lie nearer to the common value."
    )
    return Words("Fraction by group", caption, said + ".")


def parameters(fit: Fit) -> Words:
    """Words for all parameters."""
    free = [item for item in fit.problem.free if item.size == 1]
    said = []
    for item in free:
        quantity = fit.fraction if item.name == names.DEBRIS_FRACTION else item.name
        draws = fit.draws(quantity)
        said.append(f"{define(fit, quantity).label} {measure(*np.quantile(draws, [0.5, 0.1587, 0.8413]))}")
    caption = (
        "Every free parameter: posterior (solid, filled) and prior (dashed). Where the two have the same shape, the "
        "data "
        "say nothing and the prior stands."
    )
    return Words("Every parameter beside its prior", caption, "Densities. " + "; ".join(said) + ".")


def occurrence(prior: OccurrencePrior, before: Any = None) -> Words:
    """Words for the occurrence prior."""
    result = measure(*prior.quantile([0.5, 0.1587, 0.8413]))
    fitted = f"Beta({prior.beta.alpha:.3g}, {prior.beta.beta:.3g})"
    caption = (
        f"Share of progenitors with a rocky system, given the remnants: {result}. Dotted: the fitted {fitted}, "
        f"{prior.beta.divergence:.2g} nats from the draws."
    )
    if before is not None:
        caption += f" Dashed: before these data, {describe(before)}."
    return Words("Rocky-system fraction", caption, f"Density of the rocky-system fraction: {result}, near {fitted}.")


def chance_of_one(plan: MissionSize) -> Words:
    """Words for the chance of at least one."""
    caption = (
        "Chance of finding at least one planet sought. Solid: averaged over the occurrence prior. Dashed: as if the "
        "mean "
        "rate were certain, which promises too much."
    )
    return Words("How many targets", caption, "Rising curve. " + "; ".join(needs(plan)) + ".")


def needs(plan: MissionSize) -> list[str]:
    """Say what each success level takes."""
    said = []
    for row in plan.needs.itertuples():
        level = f"{100 * row.success:g} %"
        if row.reached:
            said.append(f"{count(int(row.n_targets), 'target')} for {level}")
        else:
            last = int(plan.table["n_targets"].iloc[-1])
            said.append(f"{level} not reached: {count(last, 'target')} give {chance(row.p_at_limit)}")
    return said


def planets_found(plan: MissionSize) -> Words:
    """Words for the yield."""
    said = found_text(plan)
    return Words("How many planets", f"Planets found against targets observed: {said}.", f"Rising lines: {said}.")


def found_text(plan: MissionSize) -> str:
    """Say how many planets the last target gives."""
    last = plan.table.iloc[-1]
    targets = count(int(last["n_targets"]), "target")
    return (
        f"{targets} find {number(last['expected'], 1)} planets on average, "
        f"{int(last['q05'])} to {int(last['q95'])} in 90 % of cases"
    )


def distances(plan: MissionSize) -> Words:
    """Words for the nearest hosts."""
    rows = list(plan.distances.itertuples())
    said = "; ".join(
        f"host {int(row.k)}: {number(row.q50, 1)} pc ({number(row.q05, 1)} to {number(row.q95, 1)})" for row in rows
    )
    caption = "Distance to the nearest stars with the planet sought: median, 5 to 95 %."
    if np.isfinite(rows[0].aperture_q50):
        caption += (
            " Right axis: the aperture that separates planet and star there, "
            f"{number(rows[0].aperture_q50, 1)} m for the nearest (median)."
        )
    return Words("How far the nearest are", caption, said + ".")


def predictive(fit: Fit) -> Words:
    """Words for the predictive check."""
    counts = fit.predictive.counts
    inside = int(((counts["observed"] >= counts["q05"]) & (counts["observed"] <= counts["q95"])).sum())
    p_value = fit.predictive.p_value
    text = number(p_value, 3) if p_value > 0 else f"below {1 / fit.predictive.replicates:.1g}"
    caption = (
        "Counts of this survey (diamonds) beside those of surveys drawn from the fitted model (bars: 90 %). "
        f"{inside} of {count(len(counts), 'count')} lie inside; predictive p = {text}."
    )
    channels = ", ".join(CHANNELS[name].label for name in fit.problem.channels)
    alternative = f"Observed and replicated counts, {channels}. {caption}"
    return Words("Would the model give such a survey?", caption, alternative)


def prior_predictive(fit: Fit, channel: str, shares: npt.NDArray[np.float64]) -> Words:
    """Words for what the prior expects to be detected."""
    raw = blind_fraction(fit, channel)
    low, middle, high = np.quantile(shares, [0.05, 0.5, 0.95])
    below, within = float((shares < raw.value).mean()), float((shares <= raw.value).mean())
    caption = (
        f"Share of the blind stars that {len(shares)} surveys of this design would detect, each with parameters from "
        f"the prior, before any star is looked at: median {number(middle)}, 90 % of them {number(low)} to "
        f"{number(high)}. Dotted: this survey, {number(raw.value)}, "
    )
    if within == 0 or below == 1:
        caption += "outside all of them: the prior did not expect it."
    else:
        caption += f"with {100 * below:.0f} % of them below it. A wide histogram says that the prior leaves it open."
    text = f"Histogram of the detected share: 5, 50 and 95 % points {number(low)}, {number(middle)}, {number(high)}; "
    text += f"this survey {number(raw.value)}."
    title = "What the prior expects" + (f": {channel_noun(channel)}" if len(fit.problem.channels) > 1 else "")
    return Words(title, caption, text)


def models(fits: Sequence[Fit], comparison: Comparison, channel: str) -> Words:
    """Words for the fraction above a threshold under each model."""
    noun = channel_noun(channel)
    said = []
    for name in [*(fit.model.name for fit in fits), "stacked"]:
        rows = above_rows(comparison, channel, name)
        each = [f"{row_measure(row)} above {threshold_text(channel, row.threshold)}" for row in rows.itertuples()]
        said += [f"{name}: {', '.join(each)}"] if each else []
    caption = (
        f"Share of all white dwarfs whose {noun} exceeds T under each model: medians and 68 % bands, told apart by "
        "line style. Diamonds, at the stated thresholds: stacked, the models averaged by their weights, with 68 % "
        "intervals. Where the curves part, the result hangs on the model."
    )
    title = f"Fraction above a given {noun}, by model"
    return Words(title, caption, f"Falling curves, one a model. {'; '.join(said)}.")
