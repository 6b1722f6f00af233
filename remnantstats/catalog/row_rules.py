"""The rules each row must meet, as a list: which column, what is wrong, what is allowed, what to do."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from .columns import CHANNELS, ChannelColumns, Column, find_column
from .rules import ChannelRules, RowRules

__all__ = ["Rows", "Rule", "list_rules"]

Flags = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Rows:
    """The rows of all tables, stacked.

    Parameters
    ----------
    table : pandas.DataFrame
        Canonical columns: float64 in our units, NaN where missing; text as str, empty where missing.
    cells : pandas.DataFrame
        The same rows as the tables hold them.
    origin : pandas.DataFrame
        Columns ``file`` and ``row``.
    unreadable : mapping of str to ndarray of bool
        Where a number column holds something else.
    given : mapping of str to frozenset of str
        The columns of each file.
    notes : tuple of str
        What was assumed.
    """

    table: pd.DataFrame
    cells: pd.DataFrame
    origin: pd.DataFrame
    unreadable: Mapping[str, Flags] = field(default_factory=dict)
    given: Mapping[str, frozenset[str]] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def keep(self, kept: Flags) -> Rows:
        """Return the rows where `kept` is true.

        Parameters
        ----------
        kept : ndarray of bool, shape (n,)
            Which rows to keep.

        Returns
        -------
        Rows
        """
        return Rows(
            self.table.loc[kept].reset_index(drop=True),
            self.cells.loc[kept].reset_index(drop=True),
            self.origin.loc[kept].reset_index(drop=True),
            {name: flags[kept] for name, flags in self.unreadable.items()},
            self.given,
            self.notes,
        )


@dataclass(frozen=True)
class Rule:
    """One rule.

    Parameters
    ----------
    column : str
        Where its fault is shown.
    what, allowed, remedy : str
        Wording of the fault.
    broken : callable
        From `Rows` to the rows that break it, bool, shape (n,).
    beside : str
        Another column whose cell the message shows.
    words : tuple of str
        The words that are allowed, where they are few.
    repeats : bool
        Whether the message shows all rows of the star.
    """

    column: str
    what: str
    allowed: str
    remedy: str
    broken: Callable[[Rows], Flags]
    beside: str = ""
    words: tuple[str, ...] = ()
    repeats: bool = False


def list_rules(rules: RowRules, rows: Rows) -> list[Rule]:
    """List every rule of a study, the plainest first: one cell shows one fault.

    Parameters
    ----------
    rules : RowRules
        What the study asks.
    rows : Rows
        The rows, for the columns they have.

    Returns
    -------
    list of Rule
    """
    listed = list(_star_rules())
    for name in rows.unreadable:
        column = find_column(name) or _covariate(name, rules)
        if column is not None:
            listed += _number_rules(name, column)
    listed += _word_rules(rules)
    for name, channel in rules.channels.items():
        listed += _channel_rules(CHANNELS[name], channel)
    listed += _selection_rules()
    listed += [_filled(name, "a covariate is missing") for name in rules.covariates]
    if rules.groups is not None:
        listed.append(_labelled(rules.groups))
    return listed


def _star_rules() -> Iterator[Rule]:
    yield Rule(
        "star",
        "a row names no star",
        "a unique identifier",
        "write the star's identifier",
        lambda rows: _equals(rows, "star", ""),
    )
    yield Rule(
        "star",
        "a star appears more than once",
        "each star in one row",
        "keep one of its rows, or give different stars different identifiers",
        lambda rows: rows.table["star"].duplicated(keep=False).to_numpy(dtype=bool) & ~_equals(rows, "star", ""),
        repeats=True,
    )


def _covariate(name: str, rules: RowRules) -> Column | None:
    """Describe a covariate, or its error, that is no known column; None for columns that nothing uses."""
    error = name.endswith("_err") and name.removesuffix("_err") in rules.covariates
    if not error and name not in rules.covariates:
        return None
    return Column(name, "number", "", name, bound="positive" if error else "finite")


_BOUNDS: dict[str, tuple[str, str, str, Callable[[pd.Series], pd.Series]]] = {
    "positive": ("{noun} is not positive", "a number above 0", "correct the cell", lambda values: values <= 0),
    "non-negative": ("{noun} is negative", "0 or above", "correct the cell", lambda values: values < 0),
    "probability": (
        "a probability is out of range",
        "0 or above, and below 1",
        "correct the cell",
        lambda values: (values < 0) | (values >= 1),
    ),
}


def _number_rules(name: str, column: Column) -> Iterator[Rule]:
    """Rules on single cells of a number column."""
    empty = "or leave the cell empty where the value is not known"
    yield Rule(
        name,
        "a number column holds something else",
        "a number without unit, with a decimal point; or an empty cell",
        f"write a plain number, {empty}",
        lambda rows: rows.unreadable[name],
    )
    yield Rule(
        name,
        "a number is infinite",
        "a finite number, or an empty cell",
        f"write a finite number, {empty}",
        lambda rows: np.isinf(rows.table[name].to_numpy()),
    )
    if column.bound in _BOUNDS:
        what, allowed, remedy, outside = _BOUNDS[column.bound]
        noun = "an error" if name.endswith("_err") else f"'{name}'"
        yield Rule(
            name,
            what.format(noun=noun),
            allowed,
            remedy,
            lambda rows: outside(rows.table[name]).to_numpy(dtype=bool),
        )


def _word_rules(rules: RowRules) -> Iterator[Rule]:
    """Rules on cells that hold one of a few words."""
    for name in ("inclusion", "atmosphere", *rules.channels):
        column = find_column(name)
        words = column.words if column else ()
        yield Rule(
            name,
            f"unknown {'outcome' if name in CHANNELS else name}",
            ", ".join(words),
            f"write one of {', '.join(words)}",
            lambda rows, name=name, words=words: ~rows.table[name].isin(words).to_numpy(dtype=bool),  # type: ignore[misc]
            words=words,
        )


def _channel_rules(names: ChannelColumns, rules: ChannelRules) -> Iterator[Rule]:
    """Rules between the columns of one channel."""
    detected = f"{names.outcome} = detected"
    for column, noun in ((names.value, "value"), (names.error, "error")):
        yield Rule(
            column,
            f"a detected star has no {noun}",
            f"a number where {detected}",
            f"write the {noun}, or set {names.outcome} to limit or unobserved",
            lambda rows, column=column: _equals(rows, names.outcome, "detected") & _missing(rows, column),  # type: ignore[misc]
        )
    yield Rule(
        names.value,
        "a star that was not detected has a value",
        f"an empty cell, or {detected}",
        f"write a limit in {names.limit} and leave this cell empty, or set {names.outcome} to detected",
        lambda rows: ~_equals(rows, names.outcome, "detected") & ~_missing(rows, names.value),
        names.outcome,
    )
    yield Rule(
        names.limit,
        "an observed star has no limit",
        f"a number, since {_why_limit(names, rules)}",
        f"write the threshold the star would have had to cross, or set {names.outcome} to unobserved",
        lambda rows: _needs_limit(rows, names, rules) & _missing(rows, names.limit),
        names.outcome,
    )
    if rules.threshold_on == "measured":
        yield Rule(
            names.value,
            "a detected value lies at or below its limit",
            f'a value above {names.limit}: with threshold_on = "measured" the decision was made on it',
            f"correct the value or the limit, or give {names.calibration}, the error that took no part in the decision",
            lambda rows: _below_limit(rows, names, rules),
            names.limit,
        )


def _why_limit(names: ChannelColumns, rules: ChannelRules) -> str:
    if rules.threshold_on == "true":
        return 'threshold_on = "true" needs the limit of every observed star'
    if rules.spurious:
        return "with spurious detections allowed every observed star needs it"
    return f"every star needs it but a detected one with neither {names.calibration} nor {names.false_positive} above 0"


def _needs_limit(rows: Rows, names: ChannelColumns, rules: ChannelRules) -> Flags:
    """Tell which rows must have a limit."""
    observed = _equals(rows, names.outcome, "detected") | _equals(rows, names.outcome, "limit")
    if rules.counted:
        return np.zeros(len(rows.table), dtype=bool)
    if rules.threshold_on == "true" or rules.spurious:
        return observed
    further: Flags = np.asarray(
        (rows.table[names.calibration] > 0) | (rows.table[names.false_positive] > 0), dtype=bool
    )
    return _equals(rows, names.outcome, "limit") | (observed & further)


def _below_limit(rows: Rows, names: ChannelColumns, rules: ChannelRules) -> Flags:
    """Tell which detected values contradict their limit."""
    table = rows.table
    width = table[names.width].fillna(rules.width) if names.width in table else rules.width
    threshold = table[names.limit] - width * rules.midpoint_shift
    below: Flags = np.asarray((table[names.value] <= threshold) & (table[names.calibration] == 0), dtype=bool)
    return _equals(rows, names.outcome, "detected") & below


def _selection_rules() -> Iterator[Rule]:
    for names in CHANNELS.values():
        yield Rule(
            "selection_limit",
            f"a {names.selected_as} star has no limit of its selection",
            f"a number where inclusion = {names.selected_as}",
            "write the limit of the observation that put the star in the sample, or set inclusion to blind",
            lambda rows, word=names.selected_as: _equals(rows, "inclusion", word) & _missing(rows, "selection_limit"),  # type: ignore[misc]
            "inclusion",
        )


def _filled(name: str, what: str) -> Rule:
    return Rule(
        name,
        what,
        "a number in every row, since the model uses it",
        "fill the cell, leave the star out, or use a model without it",
        lambda rows: _missing(rows, name),
    )


def _labelled(name: str) -> Rule:
    return Rule(
        name,
        "a group label is missing",
        "a label in every row, since the model pools over it",
        "fill the cell, leave the star out, or use a model without groups",
        lambda rows: _missing(rows, name) if name in rows.unreadable else _equals(rows, name, ""),
    )


def _equals(rows: Rows, name: str, word: str) -> Flags:
    return np.asarray(rows.table[name] == word, dtype=bool)


def _missing(rows: Rows, name: str) -> Flags:
    return np.asarray(rows.table[name].isna(), dtype=bool)
