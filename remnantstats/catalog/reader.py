"""Reading of the tables a sample is made of."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from remnantstats.errors import Fault, InputError, nearest

from . import binary_tables
from .columns import COLUMNS, find_column
from .settings import SampleSettings
from .text_tables import TextTable, TornRow, read_csv, read_ecsv
from .units import same_unit

__all__ = ["RawTable", "memory_table", "read_tables", "rename_columns"]

SUFFIXES = {
    ".csv": "csv",
    ".ecsv": "ecsv",
    ".fits": "fits",
    ".fit": "fits",
    ".vot": "votable",
    ".xml": "votable",
    ".votable": "votable",
    ".parquet": "parquet",
    ".pq": "parquet",
}

#: how like a known name an unknown one must be to count as a slip of the pen
_SLIP = 0.85


@dataclass(frozen=True)
class RawTable:
    """One table as it was read, before its cells are judged.

    Parameters
    ----------
    name : str
        The path as the user wrote it.
    sha256 : str
        Hash of the file's bytes; of the cells for a table in memory.
    cells : pandas.DataFrame
        The cells, under our names once renamed.
    rows : ndarray of int, shape (n,)
        Data row of each record, counted from 1.
    units : dict
        Unit strings of the header and of the study file.
    torn : tuple of TornRow
        Rows of another width than the header's.
    """

    name: str
    sha256: str
    cells: pd.DataFrame
    rows: npt.NDArray[np.int64]
    units: Mapping[str, str]
    torn: tuple[TornRow, ...] = ()


def read_tables(settings: SampleSettings, folder: Path) -> tuple[RawTable, ...]:
    """Read every table of a sample.

    Parameters
    ----------
    settings : SampleSettings
        Paths, column names and units.
    folder : pathlib.Path
        Where relative paths start.

    Returns
    -------
    tuple of RawTable
        Under our column names.

    Raises
    ------
    InputError
        With the faults of every table that cannot be read.
    """
    tables: list[RawTable] = []
    faults: list[Fault] = []
    for name in settings.paths:
        try:
            tables.append(_read(folder / Path(name).expanduser(), name))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(*faults)
    return rename_columns(tables, settings.columns, settings.units)


def memory_table(table: Any) -> RawTable:
    """Take a table that is already in memory.

    Parameters
    ----------
    table : pandas.DataFrame or astropy.table.Table
        The table.

    Returns
    -------
    RawTable
        Under its own column names.

    Raises
    ------
    InputError
        Where the object is not a table, or names a column twice.
    """
    name = "table in memory"
    if isinstance(table, pd.DataFrame):
        cells, units = binary_tables.from_frame(table, name)
    elif hasattr(table, "colnames"):
        cells, units = binary_tables.from_astropy(table, name)
    else:
        raise InputError(
            Fault(
                "this is not a table",
                where="read_sample",
                found=type(table).__name__,
                allowed="a path, a list of paths, a pandas DataFrame or an astropy Table",
                remedy="pass one of these",
            )
        )
    digest = hashlib.sha256("\0".join(cells.columns).encode())
    digest.update(pd.util.hash_pandas_object(cells.astype(str), index=False).to_numpy().tobytes())
    return RawTable(name, digest.hexdigest(), cells, np.arange(1, len(cells) + 1), units)


def rename_columns(
    tables: Sequence[RawTable], columns: Mapping[str, str], units: Mapping[str, str]
) -> tuple[RawTable, ...]:
    """Give every table our column names and the units of the study file.

    Parameters
    ----------
    tables : sequence of RawTable
        Under their own names.
    columns, units : mapping
        Our column = theirs; our column = unit string.

    Returns
    -------
    tuple of RawTable

    Raises
    ------
    InputError
        Where a named column is in no table, two columns end with one name, a known column is misspelt, or two
        units are given.
    """
    files = ", ".join(table.name for table in tables)
    present = sorted({name for table in tables for name in table.cells.columns})
    faults = [
        Fault(
            f"column '{theirs}', named for '{ours}', is in no table",
            where=f"{files}, key 'sample.columns.{ours}'",
            found=theirs,
            allowed=", ".join(present),
            remedy=nearest(theirs, present),
        )
        for ours, theirs in columns.items()
        if theirs not in present
    ]
    renamed = [_rename(table, columns, faults) for table in tables]
    ours_present = {name for table in renamed for name in table.cells.columns}
    faults += [
        Fault(
            f"a unit is given for column '{name}', which is in no table",
            where=f"{files}, key 'sample.units.{name}'",
            found=name,
            allowed=", ".join(sorted(ours_present)),
            remedy="remove the unit, or name the column in [sample.columns]",
        )
        for name in units
        if name not in ours_present
    ]
    finished = [_give_units(table, units, faults) for table in renamed]
    for table in finished:
        faults += _slips(table)
    if faults:
        raise InputError(*faults)
    return tuple(finished)


def _read(path: Path, name: str) -> RawTable:
    """Read one file by its ending."""
    notation = SUFFIXES.get(path.suffix.lower())
    if notation is None:
        raise InputError(
            Fault(
                "the kind of the table is not known",
                where=name,
                found=path.suffix or "no ending",
                allowed=", ".join(SUFFIXES),
                remedy="save the table as one of these",
            )
        )
    if not path.is_file():
        what = "the table is not a file" if path.exists() else "the table does not exist"
        raise InputError(Fault(what, where=name, found=str(path), allowed="a file", remedy="check the path"))
    try:
        content = path.read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(Fault("the table cannot be opened", where=name, found=reason, remedy="check it")) from error
    digest = hashlib.sha256(content).hexdigest()
    if notation in ("csv", "ecsv"):
        return _text_table(read_csv(content, name) if notation == "csv" else read_ecsv(content, name), name, digest)
    if not content.strip():
        found, allowed = f"{len(content)} bytes", "a table with at least one row"
        raise InputError(Fault("the table is empty", where=name, found=found, allowed=allowed, remedy="check it"))
    if notation == "parquet":
        cells, units = binary_tables.read_parquet(path, name)
    else:
        cells, units = binary_tables.read_astropy(path, name, notation)
    return RawTable(name, digest, cells, np.arange(1, len(cells) + 1), units)


def _text_table(text: TextTable, name: str, digest: str) -> RawTable:
    block = np.array(text.records, dtype=object).reshape(-1, len(text.header))
    cells = pd.DataFrame(block, columns=pd.Index(text.header, dtype=object))
    return RawTable(name, digest, cells, np.asarray(text.numbers, dtype=np.int64), text.units, tuple(text.torn))


def _rename(table: RawTable, columns: Mapping[str, str], faults: list[Fault]) -> RawTable:
    ours_of = {theirs: ours for ours, theirs in columns.items() if theirs in table.cells.columns}
    names = [ours_of.get(name, name) for name in table.cells.columns]
    for ours in sorted({name for name in names if names.count(name) > 1}):
        faults.append(
            Fault(
                f"two columns of the table would be '{ours}'",
                where=f"{table.name}, key 'sample.columns.{ours}'",
                found=f"'{ours}' and '{columns[ours]}'",
                allowed="one column of each name",
                remedy=f"remove column '{ours}' of the table, or the key",
            )
        )
    cells = table.cells.set_axis(names, axis="columns")
    units = {ours_of.get(name, name): unit for name, unit in table.units.items()}
    return replace(table, cells=cells.loc[:, ~cells.columns.duplicated()], units=units)


def _give_units(table: RawTable, units: Mapping[str, str], faults: list[Fault]) -> RawTable:
    """Add the units of the study file to those of the header."""
    given = {name: unit for name, unit in units.items() if name in table.cells.columns}
    for name, unit in given.items():
        header = table.units.get(name)
        if header and not same_unit(header, unit):
            faults.append(
                Fault(
                    f"two units are given for column '{name}'",
                    where=f"{table.name}, column '{name}', key 'sample.units.{name}'",
                    found=f'"{header}" in the header, "{unit}" in the key',
                    allowed="one unit",
                    remedy="remove the key, or correct the header",
                )
            )
    return replace(table, units={**table.units, **given})


def _slips(table: RawTable) -> list[Fault]:
    """Faults of columns whose name is almost that of a known column the table lacks."""
    absent = [name for name in COLUMNS if name not in table.cells.columns]
    faults = []
    for name in table.cells.columns:
        if find_column(name) is not None:
            continue
        near = get_close_matches(name.lower(), absent, n=1, cutoff=_SLIP)
        if near:
            faults.append(
                Fault(
                    f"unknown column '{name}'",
                    where=f"{table.name}, column '{name}'",
                    found=name,
                    allowed=f"'{near[0]}', or a name unlike any known column",
                    remedy=f"did you mean '{near[0]}'? Otherwise rename it",
                )
            )
    return faults
