"""The tables of the report, as rows of text."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from ..inference import Fit
from ..inference.checks import LIMITS
from ..inference.compare import Comparison
from ..mission import MissionSize
from ..sensitivity import CHANNELS
from . import captions
from .contents import ReportContents
from .facts import median_depth
from .glossary import channel_noun, define
from .numbers import chance, number, row_measure, span, typeset

__all__ = [
    "Cell",
    "Table",
    "checks_table",
    "followup_table",
    "mission_table",
    "models_table",
    "order_table",
    "results_table",
]

#: stars of the follow-up list, targets of the order of observation, that are shown
FOLLOWED = 20
_SIGNS = {"pass": "✓ passed", "warn": "! take note", "fail": "✗ failed"}


@dataclass(frozen=True)
class Cell:
    """One cell: its text, what it sorts by, and how it is set.

    Attributes
    ----------
    text : str
    key : str
        What sorting compares; empty for the text itself.
    kind : str
        A style: "number", "code", "pass", "warn", "fail", or nothing.
    """

    text: str
    key: str = ""
    kind: str = ""


@dataclass(frozen=True)
class Table:
    """A table of text.

    Attributes
    ----------
    name : str
        Short, for identifiers.
    caption : str
    head : tuple of str
    rows : sequence of tuple of Cell
        The first cell heads its row.
    """

    name: str
    caption: str
    head: tuple[str, ...]
    rows: Sequence[tuple[Cell, ...]]


def _value(text: str, key: float) -> Cell:
    return Cell(text, f"{key:.8g}" if np.isfinite(key) else "", "number")


def results_table(contents: ReportContents) -> Table:
    """Every reported quantity, the occurrence rates after those of the fit."""
    fit = contents.fit
    frames = [fit.table]
    if contents.prior is not None:
        frames.append(contents.prior.summary())
    rows = []
    for row in pd.concat(frames).itertuples():
        term = define(fit, str(row.quantity))
        label = term.label + (" ‡" if _beyond(fit, str(row.quantity)) else "")
        rows.append(
            (
                Cell(label),
                _value(row_measure(row), float(row.q50)),
                Cell(span(row), "", "number"),
                Cell(term.unit, "", "word"),
                Cell(f"{term.meaning}."),
                Cell(str(row.quantity), "", "code"),
            )
        )
    caption = (
        "Medians with the distances to their 16 and 84 % points, and 90 % intervals. ‡ marks a fraction that reaches "
        "below "
        "the depth of half the blind stars: extrapolated."
    )
    return Table("results", caption, ("Quantity", "Result", "90 %", "Unit", "Meaning", "Name in the files"), rows)


def _beyond(fit: Fit, quantity: str) -> bool:
    stem, _, label = quantity.partition("[")
    if not stem.endswith("_above"):
        return quantity == fit.fraction
    channel = "pollution" if stem.startswith("debris") else "excess"
    return float(label.removesuffix("]")) < median_depth(fit, channel)


def checks_table(fit: Fit) -> Table:
    """Every check with its verdict."""
    rows = [
        (
            Cell(check.name[0].upper() + check.name[1:]),
            Cell(_SIGNS[check.verdict], check.verdict, check.verdict),
            Cell(typeset(check.message)),
            Cell(typeset(check.allowed)),
        )
        for check in fit.checks
    ]
    return Table("checks", "Checks of the inference.", ("Check", "Verdict", "Found", "Passes with"), rows)


def followup_table(fit: Fit) -> Table:
    """Blind stars with limits alone that most probably host debris."""
    stars, channels = fit.stars, fit.problem.channels
    outcomes = stars[list(channels)]
    quiet = (outcomes != "detected").all(axis=1) & (outcomes == "limit").any(axis=1)
    quiet &= stars["inclusion"] == "blind"
    first = channels[0]
    keys = ["debris_probability", f"{first}_sensitivity", "star"]
    chosen = stars[quiet].sort_values(keys, ascending=[False, True, True], kind="stable").head(FOLLOWED)
    rows = []
    for _, row in chosen.iterrows():
        probability = row["debris_probability"]
        cells = [Cell(str(row["star"])), Cell(str(row["survey"])), _value(number(probability), probability)]
        for channel in channels:
            name = CHANNELS[channel].value
            limit, seen, expected = row[f"{name}_limit_50"], row[f"{channel}_sensitivity"], row[f"expected_{name}"]
            cells += [_value(number(limit), limit), _value(number(seen), seen), _value(number(expected), expected)]
        rows.append(tuple(cells))
    head = ["Star", "Survey", "Chance of debris"]
    for channel in channels:
        noun = f", {channel_noun(channel)}" if len(channels) > 1 else ""
        head += [f"Limit (log){noun}", f"Sensitivity{noun}", f"Expected if host (log){noun}"]
    caption = (
        f"The {len(rows)} blind stars without a detection that most probably host debris, of {int(quiet.sum())}: by "
        "falling chance "
        "of debris, then by rising sensitivity (the chance that a host of the fitted population would have been seen "
        "there), then by name. All stars are in stars.csv."
    )
    return Table("followup", caption, tuple(head), rows)


def mission_table(plan: MissionSize) -> Table:
    """What each success level takes."""
    rows = []
    for row in plan.needs.itertuples():
        needed = f"{int(row.n_targets):,}" if row.reached else f"not reached ({chance(row.p_at_limit)} at the last)"
        naive = "not reached" if pd.isna(row.n_targets_naive) else f"{int(row.n_targets_naive):,}"
        key = float(row.n_targets) if row.reached else float("nan")
        rows.append((_value(f"{100 * row.success:g} %", row.success), _value(needed, key), Cell(naive, "", "number")))
    caption = (
        f"Targets needed for at least one planet; {captions.found_text(plan)}. The last column takes the mean rate as "
        "certain and promises too much."
    )
    return Table("mission", caption, ("Chance of success", "Targets needed", "Naive answer"), rows)


def order_table(plan: MissionSize) -> Table | None:
    """The first targets of a target list, in the order of observation."""
    if plan.order is None:
        return None
    rows = [
        (
            _value(str(int(row.rank)), float(row.rank)),
            Cell(str(row.target)),
            _value(number(row.distance, 1), row.distance),
            _value(number(row.completeness), row.completeness),
            _value(chance(row.p_at_least_one), row.p_at_least_one),
        )
        for row in plan.order.head(FOLLOWED).itertuples()
    ]
    caption = f"The first {len(rows)} of {len(plan.order)} targets, by falling completeness, then by rising distance."
    head = ("Order", "Target", "Distance (pc)", "Completeness", "Chance of at least one so far")
    return Table("order", caption, head, rows)


def models_table(fit: Fit, comparison: Comparison) -> Table:
    """Models side by side, and their stacked mixture."""
    rows = []
    for row in comparison.table.itertuples():
        result = _value(row_measure(row), float(row.q50))
        if row.model == "stacked":
            blank = [Cell("–", "", "number")] * 5
            rows.append((Cell("stacked (models averaged by weight)"), *blank, result))
            continue
        gap = float(row.elpd_difference)
        behind = "leads" if gap == 0 else f"{number(gap, 1)} ± {number(row.difference_se, 1)}"
        rows.append(
            (
                Cell(str(row.model)),
                _value(f"{number(row.elpd, 1)} ± {number(row.elpd_se, 1)}", float(row.elpd)),
                _value(behind, gap),
                _value(number(row.weight), float(row.weight)),
                _value(number(row.worst_k), float(row.worst_k)),
                _value(str(int(row.stars_above_k)), float(row.stars_above_k)),
                result,
            )
        )
    label = define(fit, fit.fraction).label
    head = (
        "Model", "Predictive score (elpd)", "Difference from the best", "Weight", "Worst Pareto k",
        f"Stars above {LIMITS.pareto_k}", label,
    )
    caption = (
        "Leave-one-out comparison, best model first. Score: expected log density of a star left out, summed over the "
        "stars, ± standard error; differences are taken star by star. Weight: share in the mixture that predicts best. "
        f"Pareto k above {LIMITS.pareto_k} marks a star so influential that its term is unsure. Same numbers in "
        "comparison.csv."
    )
    return Table("models", caption, head, rows)
