"""Target lists: the main-sequence stars that a mission may visit."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..errors import Fault, InputError, nearest

__all__ = ["read_targets"]

#: most rows of a target list
MOST_ROWS = 10_000
_REQUIRED = ("target", "distance")
_NUMBERS = {
    "distance": ("a number above 0, in pc", np.inf),
    "completeness": ("a number in (0, 1]", 1.0),
    "progenitor_mass": ("a number above 0, in Msun", np.inf),
}


def read_targets(path: Path | str, completeness: float | None = None) -> pd.DataFrame:
    """Read a target list, telling every fault at once.

    Parameters
    ----------
    path : path
        A CSV file with columns `target`, `distance` [pc], `completeness` and, optionally, `progenitor_mass` [Msun].
    completeness : float, optional
        Completeness of every target, in (0, 1], where the list has no such column.

    Returns
    -------
    pandas.DataFrame
        Columns `target`, `distance`, `completeness` and, where given, `progenitor_mass`, in the order of the file.

    Raises
    ------
    InputError
        With every fault of the list, by row and target.
    """
    path = Path(path)
    table = _read(path)
    faults = _column_faults(table, path, completeness)
    if faults:
        raise InputError(*faults)
    table = table.assign(target=table["target"].str.strip())
    faults = _name_faults(table["target"], path)
    result = pd.DataFrame({"target": table["target"]})
    for column, (allowed, highest) in _NUMBERS.items():
        if column in table:
            values = pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=float)
            faults += _number_faults(table, column, values, highest, allowed, path)
            result[column] = values
    if faults:
        raise InputError(*faults)
    if "completeness" not in result:
        result["completeness"] = completeness
    return result


def _read(path: Path) -> pd.DataFrame:
    """The file as text cells."""
    if not path.is_file():
        raise InputError(
            Fault("the target list does not exist", where=str(path), allowed="a CSV file", remedy="check the path")
        )
    try:
        with warnings.catch_warnings():
            # a row longer than the header would lose its last cells with no more than this warning
            warnings.simplefilter("error", pd.errors.ParserWarning)
            table = pd.read_csv(
                path, dtype=str, keep_default_na=False, comment="#", encoding="utf-8-sig", index_col=False
            )
    except (ValueError, OSError, pd.errors.ParserWarning) as error:
        raise InputError(
            Fault(
                "the target list cannot be read",
                where=str(path),
                found=str(error).strip()[:120],
                allowed="a CSV file in UTF-8 with a line of column names",
                remedy="mend the file",
            )
        ) from error
    table.columns = [str(name).strip() for name in table.columns]
    # cells that a short row lacks
    return table.fillna("")


def _column_faults(table: pd.DataFrame, path: Path, completeness: float | None) -> list[Fault]:
    """Columns missing, doubled or unknown, and the number of rows."""
    known = [*_REQUIRED, "completeness", "progenitor_mass"]
    needed = [*_REQUIRED, "completeness"] if completeness is None else list(_REQUIRED)
    others = [name for name in table.columns if name not in known]
    faults = []
    for name in needed:
        if name not in table.columns:
            hint = "; or set 'completeness' in [mission]" if name == "completeness" else ""
            near = [other for other in others if f"'{name}'" in nearest(other, [name])]
            found = f"a column '{near[0]}'" if near else ""
            faults.append(
                Fault(f"column '{name}' is missing", where=str(path), found=found, remedy=f"add the column{hint}")
            )
    if not 1 <= len(table) <= MOST_ROWS:
        faults.append(
            Fault(
                "the target list has no rows" if len(table) == 0 else "the target list is too long",
                where=str(path),
                found=f"{len(table):,} rows",
                allowed=f"1 to {MOST_ROWS:,} rows",
            )
        )
    return faults


def _name_faults(names: pd.Series, path: Path) -> list[Fault]:
    """Targets without a name or named twice."""
    faults = []
    repeated = names.duplicated(keep="first")
    for position, name in enumerate(names):
        if not name:
            faults.append(Fault("a target has no name", where=f"{path}, row {position + 2}, column 'target'"))
        elif repeated.iloc[position]:
            first = int(np.flatnonzero(names == name)[0])
            faults.append(
                Fault(
                    f"target '{name}' is listed twice",
                    where=f"{path}, row {position + 2}, column 'target'",
                    found=f"first in row {first + 2}",
                    remedy="keep one of the rows",
                )
            )
    return faults


def _number_faults(
    table: pd.DataFrame, column: str, values: npt.NDArray[np.float64], highest: float, allowed: str, path: Path
) -> list[Fault]:
    """Cells of one column that are not numbers of its range."""
    bad = ~(np.isfinite(values) & (values > 0) & (values <= highest))
    return [
        Fault(
            f"{column} of target '{table['target'].iloc[position]}' is not valid",
            where=f"{path}, row {position + 2}, target '{table['target'].iloc[position]}', column '{column}'",
            found=repr(table[column].iloc[position])[:60],
            allowed=allowed,
            remedy="correct this cell, or remove the row",
        )
        for position in np.flatnonzero(bad)
    ]
