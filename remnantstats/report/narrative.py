"""The sentences of the report, written from the results."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ..mission import MissionSize
from . import captions
from .contents import ReportContents
from .facts import RawFraction, channel_fraction, efficiency_at, median_depth, reference_noun, sample_fraction
from .glossary import channel_noun, define, threshold_text
from .numbers import chance, count, measure, number, row_measure, typeset

__all__ = ["Step", "answer", "chain", "extrapolations", "models_compared", "notes", "validity"]

_SHOWN = {"pollution": 7.0, "excess": -3.0}
#: a difference in predictive score below this is small whatever its standard error says
_SMALL = 4.0
_WORD = {"pollution": "show debris", "excess": "show warm dust"}


class Step(NamedTuple):
    """One step of the reasoning.

    Parameters
    ----------
    head : str
        What is asked.
    result : str
        The number that answers it.
    text : str
        How it follows.
    """

    head: str
    result: str
    text: str


def answer(contents: ReportContents) -> list[str]:
    """Say the result in three sentences: fraction, planets, mission."""
    return [_fraction_sentence(contents), _planet_sentence(contents), _mission_sentence(contents)]


def raw_text(raw: RawFraction) -> str:
    """Write a raw fraction as the report does everywhere."""
    return measure(raw.value, raw.low, raw.high)


def _fraction_sentence(contents: ReportContents) -> str:
    fit = contents.fit
    channel = fit.problem.channels[0]
    raw = sample_fraction(fit, channel)
    result = row_measure(captions.row_of(fit, fit.fraction))
    label = define(fit, fit.fraction).label.lower()
    where = " at the mean of the sample's covariates" if fit.problem.reference else ""
    if not raw.observed:
        return f"No star was observed without knowing of its debris; the {label} is {result}{where}."
    return (
        f"Of {count(raw.observed, reference_noun(fit))} observed, {raw.found} {_WORD[channel]}, a raw fraction of "
        f"{raw_text(raw)}; "
        f"corrected for what each observation could not have shown, the {label} is {result}{where}."
    )


def _planet_sentence(contents: ReportContents) -> str:
    prior = contents.prior
    if prior is None:
        return "The study names no transfer to planets, so this is where the inference ends."
    rocky = measure(*prior.quantile([0.5, 0.1587, 0.8413]))
    way = "Carried back through the stated retention and delivery"
    text = f"{way}, the share of progenitors with a rocky system is {rocky}"
    if np.all(prior.values("earthlike") == 1):
        return f"{text}, and every such system is taken to hold the planet sought."
    planet = measure(*prior.quantile([0.5, 0.1587, 0.8413], "earthlike_fraction"))
    return f"{text}, and the share of stars with the planet sought is {planet}."


def _mission_sentence(contents: ReportContents) -> str:
    plan = contents.plan
    if plan is None:
        return "No mission is sized."
    reached = [row for row in plan.needs.itertuples() if row.reached]
    missed = [row for row in plan.needs.itertuples() if not row.reached]
    parts = [
        f"{count(int(row.n_targets), 'target') if at == 0 else int(row.n_targets)} for a chance of "
        f"{100 * row.success:g} %"
        for at, row in enumerate(reached)
    ]
    text = f"To find at least one, a mission must observe {_listed(parts)}" if parts else ""
    if missed:
        levels = _listed([f"{100 * row.success:g} %" for row in missed])
        last = int(plan.table["n_targets"].iloc[-1])
        lacking = f"{levels} is not reached by {count(last, 'target')}, where it is {chance(missed[0].p_at_limit)}"
        text = f"{text}; {lacking}" if text else f"A chance of {lacking}"
    return text + "."


def _listed(parts: list[str]) -> str:
    return parts[0] if len(parts) == 1 else ", ".join(parts[:-1]) + " and " + parts[-1]


def chain(contents: ReportContents) -> list[Step]:
    """Give the chain of reasoning, from stars to targets."""
    fit = contents.fit
    steps = []
    for channel in fit.problem.channels:
        steps += [_counted(contents, channel), _depth(contents, channel)]
    steps.append(_corrected(contents))
    share = captions.row_of(fit, "extrapolated_share")
    if np.isfinite(share.q50):
        depth = f"log {number(median_depth(fit, fit.problem.channels[0]))}"
        steps.append(
            Step(
                "How much of it was out of sight?", row_measure(share),
                f"Share of the hosts below {depth}, the depth that half the blind stars reached; that part rests on "
                "the "
                "assumed shape of the distribution.",
            )
        )
    if contents.prior is not None:
        steps += _planets(contents)
    if contents.plan is not None:
        steps.append(_targets(contents.plan))
    return steps


def _counted(contents: ReportContents, channel: str) -> Step:
    fit = contents.fit
    raw = sample_fraction(fit, channel)
    stars = fit.stars
    known = int((stars["inclusion"] != "blind").sum())
    unobserved = int((stars[channel] == "unobserved").sum())
    text = f"{raw.found} of {count(raw.observed, reference_noun(fit))} detected"
    text += f", of {count(len(stars), 'star')} in the sample"
    text += f"; {known} chosen for known debris are left out of the count" if known else ""
    text += f"; {unobserved} were not observed in this channel" if unobserved else ""
    result = raw_text(raw) if raw.observed else "–"
    text += ". A lower bound: the faintest are missed."
    return Step(f"What was counted? ({channel_noun(channel)})", result, text)


def _depth(contents: ReportContents, channel: str) -> Step:
    fit, at = contents.fit, _SHOWN[channel]
    share = efficiency_at(fit, channel, at)
    depth = median_depth(fit, channel)
    said = f"Half the blind stars reached log {number(depth)} or deeper. " if np.isfinite(depth) else ""
    return Step(
        "What could have been seen?", number(share),
        f"{said}This is the mean chance that a host at {threshold_text(channel, at)} would have been detected.",
    )


def _corrected(contents: ReportContents) -> Step:
    fit = contents.fit
    channel = fit.problem.channels[0]
    value = "log_accretion" if channel == "pollution" else "log_dust"
    mean, spread = (row_measure(captions.row_of(fit, f"{kind}_{value}")) for kind in ("mean", "sd"))
    noun = channel_noun(channel)
    parts = f"Inferred with the distribution of the hosts: mean log {noun} {mean}, spread {spread} dex."
    if len(fit.problem.channels) > 1:
        dusty = measure(*np.quantile(channel_fraction(fit, "excess"), [0.5, 0.1587, 0.8413]))
        parts += f" The share of all white dwarfs with warm dust is {dusty}."
    term = define(fit, fit.fraction)
    return Step("What is out there?", row_measure(captions.row_of(fit, fit.fraction)), f"{term.meaning}. {parts}")


def _planets(contents: ReportContents) -> list[Step]:
    prior = contents.prior
    if prior is None:
        return []
    points = [0.5, 0.1587, 0.8413]
    kept, fed = (measure(*prior.quantile(points, name)) for name in ("retention", "delivery"))
    steps = [
        Step(
            "What does it say of planets?", measure(*prior.quantile(points)),
            f"Rocky-system fraction η, from f = η · R · D with retention R = {kept} and delivery D = {fed} given the "
            "data. "
            f"It refers to: {reference(contents)}.",
        )
    ]
    if np.any(prior.values("earthlike") != 1):
        steps.append(
            Step(
                "And of the planet sought?", measure(*prior.quantile(points, "earthlike_fraction")),
                "Share of stars with the planet sought: the rocky-system fraction times the share of such systems that "
                f"hold one, {measure(*prior.quantile(points, 'earthlike'))}.",
            )
        )
    return steps


def reference(contents: ReportContents) -> str:
    """Say to which stars the fraction refers that is carried to planets."""
    said = contents.prior.reference if contents.prior is not None else ""
    return typeset(said) or "the debris fraction at its reference"


def _targets(plan: MissionSize) -> Step:
    first = next((row for row in plan.needs.itertuples() if row.reached), None)
    result = "not reached" if first is None else count(int(first.n_targets), "target")
    text = "; ".join(captions.needs(plan)) + "."
    if first is not None and first.n_targets_naive is not None and first.n_targets > first.n_targets_naive:
        more = int(first.n_targets) - int(first.n_targets_naive)
        text += (
            f" Taking the mean rate as certain would ask for {more} fewer at {100 * first.success:g} %, and promise "
            "too much."
        )
    return Step("How many targets?", result, text[0].upper() + text[1:])


def extrapolations(contents: ReportContents) -> list[str]:
    """List where the results reach beyond the data."""
    fit, found = contents.fit, []
    for channel in fit.problem.channels:
        depth = median_depth(fit, channel)
        low = [value for value in contents.thresholds.of(channel) if value < depth]
        if low:
            said = _listed([threshold_text(channel, value) for value in low])
            found.append(
                f"The fraction above {said} reaches below log {number(depth)}, which half the blind stars did not see."
            )
    share = captions.row_of(fit, "extrapolated_share")
    if np.isfinite(share.q50):
        found.append(
            f"{row_measure(share)} of the hosts lie below the depth that half the blind stars reached: the headline "
            "fraction "
            "counts them by the assumed shape. The fractions above stated thresholds lean on it less."
        )
    return found


def notes(contents: ReportContents) -> list[str]:
    """List what was noted on the way, from sample to mission."""
    found = [*contents.fit.notes]
    found += contents.prior.notes if contents.prior is not None else ()
    found += contents.plan.notes if contents.plan is not None else ()
    sentences = [typeset(note[0].upper() + note[1:]) for note in found if note]
    return [text if text.endswith(".") else text + "." for text in dict.fromkeys(sentences)]


def models_compared(contents: ReportContents) -> list[str]:
    """Say which model leads, how surely, and which of them is carried on; nothing where one model alone was fitted."""
    comparison = contents.comparison
    if comparison is None:
        return []
    rows = list(comparison.table[comparison.table["model"] != "stacked"].itertuples())
    best, rest = rows[0], rows[1:]
    found = [f"'{best.model}' predicts the sample best."]
    for row in rest:
        gap, error = -float(row.elpd_difference), float(row.difference_se)
        text = f"'{row.model}' is behind by {number(gap, 1)} ± {number(error, 1)}: "
        if gap <= _SMALL:
            text += f"a difference below {_SMALL:g} is too small to tell the two apart."
        elif gap <= 2 * error:
            text += "less than two standard errors; these data do not tell the two apart."
        else:
            text += "more than two standard errors; these data prefer the first."
        found.append(text)
    weights = _listed([f"'{name}' {number(weight)}" for name, weight in comparison.weights.items()])
    result = row_measure(comparison.stacked)
    label = define(contents.fit, contents.fit.fraction).label.lower()
    found.append(f"Stacking weights: {weights}. Averaged by them, the {label} is {result}.")
    found.append(_carried_model(contents))
    unsure = [f"'{row.model}': {count(int(row.stars_above_k), 'star')}" for row in rows if row.stars_above_k > 0]
    if unsure:
        found.append(
            f"Stars of too much influence for a sure score ({'; '.join(unsure)}) make the order of the models "
            "provisional."
        )
    return found


def _carried_model(contents: ReportContents) -> str:
    first = f"'{contents.fit.model.name}', the model that the study names first"
    if contents.prior is None:
        return f"All other sections show {first}."
    if contents.stacked:
        return (
            "The occurrence prior and all that follows from it come from the stacked fraction, as the study asks; all "
            f"other sections show {first}."
        )
    best = "" if contents.comparison is None else contents.comparison.table["model"].iloc[0]
    leads = "" if best == contents.fit.model.name else ", though it does not lead here"
    return (
        f"All other sections, the occurrence prior among them, come from {first}{leads}. The stacked fraction is "
        "carried on only where the study sets stacking = true."
    )


def validity(contents: ReportContents) -> list[str]:
    """List what the results hold for, and what would break them."""
    fit, prior = contents.fit, contents.prior
    found = [
        "The fraction is that of stars like those of the sample: how the stars were chosen for observation is taken "
        "to be "
        "blind to debris, but for stars marked as known.",
        "A limit is the threshold that the star would have had to cross. Limits quoted otherwise bias the fraction.",
        f"The hosts' values follow the shape that the model '{fit.model.name}' assumes; below the limits nothing "
        "tests it.",
    ]
    if (fit.stars["atmosphere"] == "He").any():
        found.append("Results refer to hydrogen atmospheres; helium stars enter with offsets of their own.")
    else:
        found.append("Results refer to hydrogen atmospheres; the sample holds no others.")
    if "excess" in fit.problem.channels:
        found.append(
            "Dust luminosities are apparent: the inclination of the discs is part of their spread, and their "
            "fraction is "
            "that of warm dust alone."
        )
    if prior is not None:
        found.append(
            f"Delivery must refer to the same stars as the fraction ({reference(contents)}); retention and "
            "delivery are inputs, not results, and nothing in the sample tests them."
        )
    if contents.plan is not None:
        found.append(
            "The mission's targets are taken to have the same occurrence as the progenitors of the white dwarfs; "
            "completeness is an input."
        )
    return found
