"""From tables as read to the rows of one sample: numbers, units, defaults, stacking."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pandas as pd

from remnantstats.errors import Fault, InputError, nearest

from .cells import as_numbers, as_text
from .columns import CHANNELS, Column, find_column, sample_columns
from .reader import RawTable
from .row_rules import Rows
from .rules import ChannelRules, RowRules
from .units import to_our_unit

__all__ = ["assemble", "rules_from_columns"]

Flags = npt.NDArray[np.bool_]


def rules_from_columns(tables: Sequence[RawTable]) -> RowRules:
    """Return the rules of a sample read without a study: the channels whose outcome column is there.

    Parameters
    ----------
    tables : sequence of RawTable
        Under our column names.

    Returns
    -------
    RowRules
        With the pollution channel where neither is there, so that its absence is told.
    """
    present = {name for table in tables for name in table.cells.columns}
    excess = ChannelRules() if "excess" in present else None
    pollution = ChannelRules() if "pollution" in present or excess is None else None
    return RowRules(pollution=pollution, excess=excess)


def assemble(tables: Sequence[RawTable], rules: RowRules) -> Rows:
    """Stack the tables of a sample as canonical rows.

    Parameters
    ----------
    tables : sequence of RawTable
        Under our column names.
    rules : RowRules
        What the study asks.

    Returns
    -------
    Rows
        Not yet checked row by row.

    Raises
    ------
    InputError
        With the faults of every header and unit: required columns that are absent, tables without rows, units that
        do not convert.
    """
    faults = [fault for table in tables for fault in _header_faults(table, rules)]
    faults += _outcome_faults(tables, rules)
    parts: list[Rows] = []
    for table in tables:
        try:
            parts.append(_canonical(table, rules))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(*faults)
    stacked = _stack(parts)
    return replace(stacked, notes=(*stacked.notes, *_unknown_notes(tables, rules)))


def _header_faults(table: RawTable, rules: RowRules) -> list[Fault]:
    present = list(table.cells.columns)
    required = dict.fromkeys(["star", *rules.covariates, *([rules.groups] if rules.groups else [])])
    faults = [_absent(name, table.name, present) for name in required if name not in present]
    faults += [
        Fault(
            f"covariate '{name}' holds text",
            where=f"{table.name}, column '{name}'",
            found=name,
            allowed="a column of numbers",
            remedy="name a number column as covariate",
        )
        for name in rules.covariates
        if (known := find_column(name)) is not None and known.kind == "text"
    ]
    if not len(table.cells) and not table.torn:
        faults.append(
            Fault(
                "the table has no rows",
                where=table.name,
                found=f"a header of {len(present)} columns and 0 rows",
                allowed="one row a star",
                remedy="check the file",
            )
        )
    return faults


def _outcome_faults(tables: Sequence[RawTable], rules: RowRules) -> list[Fault]:
    """Faults of channels in use whose outcome column is in no table."""
    present = list(dict.fromkeys(name for table in tables for name in table.cells.columns))
    files = ", ".join(table.name for table in tables)
    return [_absent(name, files, present) for name in rules.channels if name not in present]


def _absent(name: str, file: str, present: list[str]) -> Fault:
    unknown = [other for other in present if find_column(other) is None]
    hint = nearest(name, unknown) if unknown else ""
    remedy = f"add the column, or name yours: [sample.columns] {name} = '…'"
    return Fault(
        f"column '{name}' is missing",
        where=f"{file}, column '{name}'",
        found="columns " + ", ".join(present),
        allowed=f"a table with column '{name}'",
        remedy=f"{remedy}; {hint}" if hint.startswith("did") else remedy,
    )


def _canonical(raw: RawTable, rules: RowRules) -> Rows:
    """Read the cells of one table."""
    columns: dict[str, pd.Series] = {}
    unreadable: dict[str, Flags] = {}
    faults: list[Fault] = []
    size = len(raw.cells)
    known = {column.name: column for column in sample_columns()}
    for name in dict.fromkeys([*known, *raw.cells.columns]):
        column = known.get(name) or find_column(name) or _extra(name, raw, rules)
        if name not in raw.cells.columns:
            columns[name] = _default(column, size)
        elif column.kind == "text":
            columns[name] = _words(raw.cells[name], column)
        else:
            values, unreadable[name] = as_numbers(raw.cells[name])
            try:
                values = to_our_unit(values, column, raw.units.get(name, ""), raw.name)
            except InputError as error:
                faults += error.faults
            if isinstance(column.default, float) and not np.isnan(column.default):
                values = np.where(np.isnan(values) & ~unreadable[name], column.default, values)
            columns[name] = pd.Series(values)
    if faults:
        raise InputError(*faults)
    return Rows(
        table=pd.DataFrame(columns),
        cells=raw.cells.reset_index(drop=True),
        origin=pd.DataFrame({"file": pd.Series([raw.name] * size, dtype=object), "row": raw.rows}),
        unreadable=unreadable,
        given={raw.name: frozenset(raw.cells.columns)},
        notes=_assumptions(raw, rules),
    )


def _default(column: Column, size: int) -> pd.Series:
    dtype = object if column.kind == "text" else np.float64
    return pd.Series([column.default] * size, dtype=dtype)


def _words(cells: pd.Series, column: Column) -> pd.Series:
    words = pd.Series(as_text(cells), dtype=object)
    # a blank inclusion has a stated default; a blank atmosphere or outcome is never guessed
    return words.replace("", column.default) if column.name == "inclusion" else words


def _extra(name: str, raw: RawTable, rules: RowRules) -> Column:
    """Decide what a column that is not known holds."""
    used_as_number = name in rules.covariates or name.removesuffix("_err") in rules.covariates
    if used_as_number and name != rules.groups:
        return Column(name, "number", "", name)
    if name == rules.groups:
        return Column(name, "text", None, name, default="")
    _, unreadable = as_numbers(raw.cells[name])
    kind = "text" if unreadable.any() or not len(raw.cells) else "number"
    return Column(name, kind, None, name, default="" if kind == "text" else float("nan"))  # type: ignore[arg-type]


def _assumptions(raw: RawTable, rules: RowRules) -> tuple[str, ...]:
    """Say what was assumed for columns that one table lacks."""
    notes = []
    if "atmosphere" not in raw.cells.columns:
        notes.append(f"{raw.name}: no column 'atmosphere'; all {len(raw.cells)} stars are assumed to have atmosphere H")
    notes += [
        f"{raw.name}: no column '{name}'; all {len(raw.cells)} stars are taken as unobserved in that channel"
        for name in rules.channels
        if name not in raw.cells.columns
    ]
    notes += [
        f"{raw.name}: column '{name}' is not used, since the study has no {name} channel"
        for name in CHANNELS
        if name in raw.cells.columns and name not in rules.channels
    ]
    return tuple(notes)


def _unknown_notes(tables: Sequence[RawTable], rules: RowRules) -> list[str]:
    used = {rules.groups, *rules.covariates, *(f"{name}_err" for name in rules.covariates)}
    notes = []
    for table in tables:
        extra = [name for name in table.cells.columns if find_column(name) is None and name not in used]
        if extra:
            notes.append(f"{table.name}: kept but not used: {', '.join(extra)}")
    return notes


def _stack(parts: Sequence[Rows]) -> Rows:
    if len(parts) == 1:
        return parts[0]
    mixed = {
        name
        for name in dict.fromkeys(name for part in parts for name in part.table.columns)
        if any(part.table[name].dtype == object for part in parts if name in part.table.columns)
    }
    table = pd.concat([_as_text(part, mixed) for part in parts], ignore_index=True)
    for name in mixed:
        table[name] = table[name].where(table[name].notna(), "")
    sizes = [len(part.table) for part in parts]
    names = dict.fromkeys(name for part in parts for name in part.unreadable if name not in mixed)
    return Rows(
        table=table,
        cells=pd.concat([part.cells.astype(object) for part in parts], ignore_index=True),
        origin=pd.concat([part.origin for part in parts], ignore_index=True),
        unreadable={
            name: np.concatenate(
                [part.unreadable.get(name, np.zeros(size, dtype=bool)) for part, size in zip(parts, sizes, strict=True)]
            )
            for name in names
        },
        given=_merge_given(parts),
        notes=tuple(note for part in parts for note in part.notes),
    )


def _merge_given(parts: Sequence[Rows]) -> dict[str, frozenset[str]]:
    """Columns by file; a file that is stacked twice keeps the columns of both readings."""
    given: dict[str, frozenset[str]] = {}
    for part in parts:
        for file, names in part.given.items():
            given[file] = given.get(file, frozenset()) | names
    return given


def _as_text(part: Rows, mixed: set[str]) -> pd.DataFrame:
    """Return a part's table with the columns that hold text in another part as text too."""
    table = part.table.copy()
    for name in mixed & set(table.columns):
        if table[name].dtype != object:
            table[name] = pd.Series(as_text(table[name]), dtype=object)
    return table
