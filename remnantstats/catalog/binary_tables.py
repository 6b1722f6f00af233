"""Reading of FITS, VOTable and Parquet by the libraries of their own."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from remnantstats.errors import Fault, InputError

__all__ = ["from_astropy", "from_frame", "read_astropy", "read_parquet"]

#: cells and the units of the header
Cells = tuple[pd.DataFrame, dict[str, str]]


def read_astropy(path: Path, file: str, notation: str) -> Cells:
    """Read a FITS or VOTable file.

    Parameters
    ----------
    path : pathlib.Path
        The file; of several tables in it the first is read.
    file : str
        Its name in messages.
    notation : {"fits", "votable"}
        Format.

    Returns
    -------
    cells : pandas.DataFrame
        One column a field, missing cells None.
    units : dict
        Unit strings of the header.

    Raises
    ------
    InputError
        Where astropy cannot read the file.
    """

    def read() -> Any:
        # astropy is imported inside functions for start-up time alone
        from astropy.table import Table

        extra = {"table_id": 0} if notation == "votable" else {}
        return Table.read(path, format=notation, **extra)

    with warnings.catch_warnings():
        # units that astropy does not know come back as text, and are judged by this package
        warnings.simplefilter("ignore")
        return from_astropy(_guarded(read, file, "astropy"), file)


def read_parquet(path: Path, file: str) -> Cells:
    """Read a Parquet file.

    Parameters
    ----------
    path : pathlib.Path
        The file; a field's metadata may give its ``unit``.
    file : str
        Its name in messages.

    Returns
    -------
    cells : pandas.DataFrame
        One column a field.
    units : dict
        Unit strings found.

    Raises
    ------
    InputError
        Where pyarrow cannot read the file.
    """

    def read() -> Cells:
        # pyarrow is imported inside functions for start-up time alone
        from pyarrow import parquet

        table = parquet.ParquetFile(path).read()
        units = {
            item.name: item.metadata[b"unit"].decode()
            for item in table.schema
            if item.metadata and b"unit" in item.metadata
        }
        return from_frame(table.to_pandas(ignore_metadata=True), file, units)

    cells: Cells = _guarded(read, file, "pyarrow")
    return cells


def from_astropy(table: Any, file: str) -> Cells:
    """Take the cells and units out of an astropy table.

    Parameters
    ----------
    table : astropy.table.Table
        The table; columns of several numbers a cell are left as arrays.
    file : str
        Its name in messages.

    Returns
    -------
    cells : pandas.DataFrame
        One column a field, missing cells None.
    units : dict
        Unit strings of its columns.
    """
    columns: dict[str, pd.Series] = {}
    units = {}
    for name in table.colnames:
        column = table[name]
        unit = getattr(column, "unit", None)
        if unit is not None and str(unit):
            units[str(name)] = str(unit)
        columns[str(name)] = _series(column)
    return from_frame(pd.DataFrame(columns), file, units)


def from_frame(frame: pd.DataFrame, file: str, units: dict[str, str] | None = None) -> Cells:
    """Take the cells out of a data frame.

    Parameters
    ----------
    frame : pandas.DataFrame
        The table; its index is left out.
    file : str
        Its name in messages.
    units : dict, optional
        Unit strings of its columns.

    Returns
    -------
    cells : pandas.DataFrame
        The same cells, numbered from 0.
    units : dict
        Unit strings of its columns.

    Raises
    ------
    InputError
        Where two columns have one name.
    """
    cells = frame.reset_index(drop=True)
    cells.columns = pd.Index([str(name).strip() for name in frame.columns], dtype=object)
    repeated = sorted(set(cells.columns[cells.columns.duplicated()]))
    if repeated:
        raise InputError(
            *(
                Fault(
                    f"column '{name}' appears more than once",
                    where=file,
                    found=name,
                    allowed="each name once",
                    remedy="rename or remove one of them",
                )
                for name in repeated
            )
        )
    return cells, units or {}


def _series(column: Any) -> pd.Series:
    """Return a column of an astropy table with native byte order and None where it is masked."""
    plain = getattr(column, "value", column)
    values = np.ma.getdata(plain)
    mask = np.broadcast_to(np.ma.getmaskarray(plain), values.shape)
    if values.ndim > 1:
        return pd.Series(list(values), dtype=object)
    if values.dtype.kind in "iuf" and not mask.any():
        return pd.Series(values.astype(values.dtype.newbyteorder("=")))
    if values.dtype.kind == "f":
        return pd.Series(np.where(mask, np.nan, values).astype(np.float64))
    cells = values.astype(object)
    cells[mask] = None
    return pd.Series(cells, dtype=object)


def _guarded(read: Callable[[], Any], file: str, library: str) -> Any:
    """Read a file and tell a library's refusal in the user's terms."""
    try:
        return read()
    except InputError:
        raise
    except Exception as error:  # each reader has its own errors, and none of them is ours
        reason = " ".join(str(error).split())
        raise InputError(
            Fault(
                "the table cannot be read",
                where=file,
                found=f"{library} says: {reason[:160] or type(error).__name__}",
                allowed="a file of the kind that its name says",
                remedy="check that the file is whole and that its ending is right",
            )
        ) from error
