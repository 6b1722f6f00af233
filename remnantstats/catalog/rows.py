"""The row schema: every rule checked on all rows at once, and faults told with their place."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from remnantstats.errors import Fault, nearest

from .cells import as_text
from .columns import find_column
from .row_rules import Rows, Rule, list_rules
from .rules import RowRules

__all__ = ["FINDINGS", "absent_columns", "check_rows", "check_whole", "findings_to_faults"]

#: columns of the table of findings: one row a faulty cell
FINDINGS = ("position", "file", "row", "star", "column", "found", "fault", "allowed", "remedy")


def check_rows(rows: Rows, rules: RowRules) -> pd.DataFrame:
    """Find every faulty cell.

    Parameters
    ----------
    rows : Rows
        The rows of all tables.
    rules : RowRules
        What the study asks.

    Returns
    -------
    pandas.DataFrame
        One row a faulty cell, in the order of the tables, with the columns of `FINDINGS`.
    """
    listed = list_rules(rules, rows)
    broken = _broken(listed, rows)
    parts = [_describe(listed[number], rows, group) for number, group in broken.groupby("rule")["position"]]
    if not parts:
        return pd.DataFrame({name: [] for name in FINDINGS})
    findings = pd.concat(parts, ignore_index=True)
    return findings.sort_values("position", kind="stable", ignore_index=True)


def absent_columns(findings: pd.DataFrame, rows: Rows) -> tuple[pd.DataFrame, list[Fault]]:
    """Tell the faults of a column that a whole file lacks as one fault each.

    Parameters
    ----------
    findings : pandas.DataFrame
        From `check_rows`.
    rows : Rows
        The rows of all tables.

    Returns
    -------
    findings : pandas.DataFrame
        The findings in cells that exist.
    faults : list of Fault
        One for each file, absent column and rule.
    """
    absent = np.array(
        [column not in rows.given[file] for file, column in zip(findings["file"], findings["column"], strict=True)],
        dtype=bool,
    )
    faults = []
    for (file, column, what), group in findings[absent].groupby(["file", "column", "fault"], sort=False):
        first = group.iloc[0]
        faults.append(
            Fault(
                f"{what}, for want of column '{column}'",
                where=f"{file}, column '{column}', first row {first['row']}, star '{first['star']}'",
                found=f"no such column, which {len(group):,} {'row needs' if len(group) == 1 else 'rows need'}",
                allowed=first["allowed"],
                remedy=f"add the column, or name yours in [sample.columns]; {first['remedy']}",
            )
        )
    return findings[~absent], faults


def findings_to_faults(findings: pd.DataFrame) -> list[Fault]:
    """Turn findings into faults.

    Parameters
    ----------
    findings : pandas.DataFrame
        With the columns of `FINDINGS`.

    Returns
    -------
    list of Fault
    """
    return [
        Fault(
            item.fault,
            where=f"{item.file}, row {item.row}, star '{item.star}', column '{item.column}'",
            found=item.found,
            allowed=item.allowed,
            remedy=item.remedy,
        )
        for item in findings.itertuples(index=False)
    ]


def check_whole(rows: Rows, rules: RowRules) -> list[Fault]:
    """Find what is wrong with the sample as a whole.

    Parameters
    ----------
    rows : Rows
        The rows that will be used.
    rules : RowRules
        What the study asks.

    Returns
    -------
    list of Fault
        No rows, stars of an atmosphere that is not admitted, or no star observed in any channel.
    """
    files = ", ".join(rows.given)
    if not len(rows.table):
        return [Fault("no row is left to use", where=files, found="0 rows", allowed="1 or more", remedy="add rows")]
    faults = []
    known = find_column("atmosphere")
    words = known.words if known else ()
    atmosphere = rows.table["atmosphere"]
    other = atmosphere.isin(words) & ~atmosphere.isin(rules.atmospheres)
    for word, count in atmosphere[other].value_counts().items():
        first = int(np.flatnonzero((atmosphere == word).to_numpy())[0])
        place = rows.origin.iloc[first]
        star = rows.table["star"].iloc[first]
        admitted = ", ".join(f'"{name}"' for name in (*rules.atmospheres, word))
        faults.append(
            Fault(
                f"the study does not admit stars with atmosphere {word}",
                where=f"{place['file']}, column 'atmosphere', first row {place['row']}, star '{star}'",
                found=f"{count} {'star' if count == 1 else 'stars'} with atmosphere {word}",
                allowed=", ".join(rules.atmospheres),
                remedy=f"write atmospheres = [{admitted}] in [model], or leave these stars out of the table",
            )
        )
    seen = [rows.table[name].isin(["detected", "limit"]) for name in rules.channels]
    if not any(flags.any() for flags in seen):
        faults.append(
            Fault(
                "no star was observed",
                where=f"{files}, " + ", ".join(f"column '{name}'" for name in rules.channels),
                found="no row that says detected or limit",
                allowed="one observed star or more",
                remedy="check the outcome column",
            )
        )
    return faults


def _broken(listed: list[Rule], rows: Rows) -> pd.DataFrame:
    """Return the rule and the row position of each faulty cell; of several rules on one cell, the first."""
    # pandera is imported inside functions for start-up time alone
    import pandera.pandas as pa

    checks: dict[str, list[Any]] = {}
    for number, rule in enumerate(listed):
        # a closure, since pandera deep-copies whatever else a check holds, and that would be every row
        check = pa.Check(_closure(rule, rows), error=str(number), ignore_na=False)
        checks.setdefault(rule.column, []).append(check)
    schema = pa.DataFrameSchema({name: pa.Column(checks=held, nullable=True) for name, held in checks.items()})
    try:
        schema.validate(rows.table, lazy=True)
    except pa.errors.SchemaErrors as error:
        cases = error.failure_cases
        pairs = pd.DataFrame(
            {
                "rule": cases["check"].astype(int).to_numpy(),
                "position": cases["index"].astype(int).to_numpy(),
                "column": cases["column"].to_numpy(),
            }
        )
        return pairs.sort_values(["rule", "position"]).drop_duplicates(["position", "column"])
    return pd.DataFrame({"rule": [], "position": []})


def _closure(rule: Rule, rows: Rows) -> Callable[[pd.Series], pd.Series]:
    """Return the rule as a check of its column, true where a row holds to it."""

    def holds(column: pd.Series) -> pd.Series:
        return pd.Series(~rule.broken(rows), index=column.index)

    return holds


def _describe(rule: Rule, rows: Rows, positions: pd.Series) -> pd.DataFrame:
    """Return the findings of one rule."""
    at = positions.to_numpy(dtype=np.int64)
    origin = rows.origin.iloc[at]
    cells = _cells(rows, rule.column, at)
    if rule.repeats:
        found = _places(rows, at)
    elif rule.beside:
        others = _cells(rows, rule.beside, at)
        found = [f"{own} ({rule.beside} = {other})" for own, other in zip(cells, others, strict=True)]
    else:
        found = cells
    return pd.DataFrame(
        {
            "position": at,
            "file": origin["file"].to_numpy(),
            "row": origin["row"].to_numpy(),
            "star": rows.table["star"].iloc[at].to_numpy(),
            "column": rule.column,
            "found": found,
            "fault": rule.what,
            "allowed": rule.allowed,
            "remedy": _remedies(rule, cells),
        },
        columns=list(FINDINGS),
    )


def _cells(rows: Rows, name: str, at: npt.NDArray[np.int64]) -> list[str]:
    """Show cells as the table holds them."""
    if name not in rows.cells.columns:
        return ["no such column"] * len(at)
    return [word or "an empty cell" for word in as_text(rows.cells[name].iloc[at])]


def _places(rows: Rows, at: npt.NDArray[np.int64]) -> list[str]:
    """Say for each star in which rows it stands."""
    origin = rows.origin.iloc[at]
    stars = rows.table["star"].iloc[at]
    places = pd.Series([f"row {row} of {file}" for file, row in zip(origin["file"], origin["row"], strict=True)])
    listed = places.groupby(stars.to_numpy()).agg(lambda group: ", ".join(group.head(5)))
    return [str(word) for word in stars.map(listed)]


def _remedies(rule: Rule, cells: list[str]) -> list[str]:
    """Name the nearest word where one is near."""
    if not rule.words:
        return [rule.remedy] * len(cells)
    hints = {cell: nearest(cell, rule.words) for cell in set(cells)}
    return [hints[cell] if hints[cell].startswith("did") else rule.remedy for cell in cells]
