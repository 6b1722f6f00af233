"""From a path, or a table in memory, to a checked `Sample`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pandas as pd

from remnantstats.errors import Fault, InputError
from remnantstats.fields import parse_settings

from .assemble import assemble, rules_from_columns
from .columns import CHANNELS
from .reader import RawTable, memory_table, read_tables, rename_columns
from .row_rules import Rows
from .rows import absent_columns, check_rows, check_whole, findings_to_faults
from .rules import RowRules
from .sample import Sample, Source
from .settings import SampleSettings

__all__ = ["read_sample"]

REJECTED = ("file", "row", "star", "column", "found", "fault")


def read_sample(
    table: Any,
    *,
    rules: RowRules | None = None,
    columns: Mapping[str, str] | None = None,
    units: Mapping[str, str] | None = None,
    on_bad_rows: Literal["stop", "reject"] = "stop",
    folder: Path | None = None,
) -> Sample:
    """Read, convert and check a sample.

    Parameters
    ----------
    table : str, pathlib.Path, list of these, pandas.DataFrame, astropy.table.Table or SampleSettings
        The table or tables. Settings bring their own `columns`, `units` and `on_bad_rows`.
    rules : RowRules, optional
        What each row must meet; by default what the outcome columns of the table ask for.
    columns : mapping, optional
        Our column = theirs.
    units : mapping, optional
        Our column = unit string, where the table gives none.
    on_bad_rows : {"stop", "reject"}, optional
        Raise on bad rows, or leave them out and record them in `Sample.rejected`.
    folder : pathlib.Path, optional
        Where relative paths start; the working directory by default.

    Returns
    -------
    Sample

    Raises
    ------
    InputError
        With every fault that was found.

    Examples
    --------
    >>> sample = read_sample("targets.ecsv")  # doctest: +SKIP
    """
    in_memory = not isinstance(table, SampleSettings | str | Path | list | tuple)
    settings = table if isinstance(table, SampleSettings) else _settings(table, columns, units, on_bad_rows)
    if in_memory:
        tables = rename_columns([memory_table(table)], settings.columns, settings.units)
    else:
        tables = read_tables(settings, folder or Path())
    rules = rules or rules_from_columns(tables)
    rows = assemble(tables, rules)
    return _checked(rows, tables, rules, settings.on_bad_rows)


def _settings(
    table: Any, columns: Mapping[str, str] | None, units: Mapping[str, str] | None, on_bad_rows: str
) -> SampleSettings:
    if isinstance(table, list | tuple):
        for item in table:
            if not isinstance(item, str | Path):
                raise InputError(
                    Fault(
                        "a list of tables holds something that is not a path",
                        where="read_sample",
                        found=type(item).__name__,
                        allowed="paths",
                        remedy="stack tables in memory before reading them, or give their paths",
                    )
                )
        named: Any = [str(path) if isinstance(path, Path) else path for path in table]
    else:
        named = str(table) if isinstance(table, str | Path) else "table in memory"
    given = {"table": named, "columns": dict(columns or {}), "units": dict(units or {}), "on_bad_rows": on_bad_rows}
    return parse_settings(SampleSettings, given, "read_sample")


def _checked(rows: Rows, tables: Sequence[RawTable], rules: RowRules, on_bad_rows: str) -> Sample:
    """Check the rows, and refuse or leave out the bad ones."""
    findings, faults = absent_columns(check_rows(rows, rules), rows)
    torn = [row.fault(raw.name) for raw in tables for row in raw.torn]
    bad = np.zeros(len(rows.table), dtype=bool)
    bad[findings["position"].to_numpy(dtype=np.int64)] = True
    if on_bad_rows == "stop":
        # where every row is bad, the rows' own faults say so
        whole = [] if bad.all() and len(bad) else check_whole(rows, rules)
        faults = [*torn, *faults, *whole, *findings_to_faults(findings)]
        kept = rows
    else:
        kept = rows.keep(~bad)
        faults += check_whole(kept, rules)
    if faults:
        raise InputError(*faults)
    rejected = pd.concat([_torn_rows(tables), _rejected_rows(findings, rows)], ignore_index=True)
    sources = tuple(Source(raw.name, raw.sha256, len(raw.cells) + len(raw.torn)) for raw in tables)
    notes = (*kept.notes, *_notes(kept.table, rules))
    if bad.any() or torn:
        count = int(bad.sum()) + len(torn)
        notes = (*notes, f"{count} {'row was' if count == 1 else 'rows were'} rejected")
    return Sample(kept.table, sources, rejected, notes, rules, kept.origin)


def _rejected_rows(findings: pd.DataFrame, rows: Rows) -> pd.DataFrame:
    positions = findings["position"].to_numpy(dtype=np.int64)
    cells = rows.cells.iloc[positions].add_prefix("original_").reset_index(drop=True)
    return pd.concat([findings[list(REJECTED)].reset_index(drop=True), cells], axis="columns")


def _torn_rows(tables: Sequence[RawTable]) -> pd.DataFrame:
    records = []
    for raw in tables:
        for row in raw.torn:
            fault = row.fault(raw.name)
            cells = zip(raw.cells.columns, row.fields, strict=False)
            records.append(
                dict(zip(REJECTED, (raw.name, row.row, "", "", fault.found, fault.what), strict=True))
                | {f"original_{name}": cell for name, cell in cells}
            )
    return pd.DataFrame(records, columns=list(records[0]) if records else list(REJECTED), dtype=object)


def _notes(table: pd.DataFrame, rules: RowRules) -> list[str]:
    """Say what is odd, but no fault, in the rows that are used."""
    notes = []
    outcomes = table[list(rules.channels)]
    unseen = int((outcomes == "unobserved").all(axis="columns").sum())
    if unseen:
        notes.append(f"{_stars(unseen)} unobserved in every channel of the study")
    for name in rules.channels:
        idle = int(((table[name] == "unobserved") & table[CHANNELS[name].limit].notna()).sum())
        if idle:
            notes.append(f"{_stars(idle)} unobserved in the {name} channel but with a limit, which is not used")
    for name, names in CHANNELS.items():
        selected = int((table["inclusion"] == names.selected_as).sum())
        if selected and name not in rules.channels:
            notes.append(f"{_stars(selected)} {names.selected_as}, but the study has no {name} channel")
    return notes


def _stars(number: int) -> str:
    return f"{number} {'star is' if number == 1 else 'stars are'}"
