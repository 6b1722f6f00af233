"""Writing of a canonical table as ECSV, with units."""

from __future__ import annotations

import io
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from .columns import find_column

__all__ = ["to_ecsv"]


def to_ecsv(table: pd.DataFrame, path: Path, meta: Mapping[str, Any] | None = None) -> None:
    """Write a table with units as ECSV, whole or not at all.

    Parameters
    ----------
    table : pandas.DataFrame
        Known columns in our units; NaN and empty text become empty cells.
    path : pathlib.Path
        The file; replaced where it exists.
    meta : mapping, optional
        Plain values kept in the header.

    Raises
    ------
    OSError
        Where the file cannot be written.
    """
    text = _header(table, meta or {}) + table.to_csv(index=False, header=False, lineterminator="\n")
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
    os.close(handle)
    try:
        Path(temporary).write_text(text, encoding="utf-8")
        # mkstemp makes the file private; a result is readable as any other file
        Path(temporary).chmod(0o666 & ~_umask())
        Path(temporary).replace(path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def _header(table: pd.DataFrame, meta: Mapping[str, Any]) -> str:
    """Return the header that astropy writes; the rows go another way, since pandas writes them fifty times faster."""
    # astropy is imported inside functions for start-up time alone
    from astropy.table import Column, Table

    empty = Table(meta=dict(meta))
    for name in table.columns:
        known = find_column(name)
        number = isinstance(table[name].dtype, np.dtype) and table[name].dtype.kind in "iufb"
        empty[name] = Column(
            np.empty(0, dtype=table[name].dtype if number else "U1"),
            description=known.meaning if known else None,
            unit=known.unit if known and known.unit else None,
        )
    header = io.StringIO()
    empty.write(header, format="ascii.ecsv", delimiter=",")
    return header.getvalue()


def _umask() -> int:
    """Return the process's file mode mask, which can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
