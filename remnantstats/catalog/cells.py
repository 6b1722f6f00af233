"""Table cells as numbers and as text, without guessing."""

from __future__ import annotations

import re
from contextlib import suppress
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

__all__ = ["as_numbers", "as_text", "is_blank"]

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?|[+-]?(inf|infinity)", re.IGNORECASE | re.ASCII)
#: characters of which Python makes nothing but a number or an error; "1_0" and other alphabets need a closer look
_PLAIN = frozenset("0123456789+-.eE")


def as_numbers(cells: pd.Series) -> tuple[Floats, Flags]:
    """Read the cells of a column as numbers.

    Parameters
    ----------
    cells : pandas.Series
        Numbers, or text as the file holds it.

    Returns
    -------
    values : ndarray of float, shape (n,)
        NaN where a cell is empty, says "nan" or holds no number.
    unreadable : ndarray of bool, shape (n,)
        Where a cell holds something that is not a number.
    """
    kind = cells.dtype.kind if isinstance(cells.dtype, np.dtype) else "O"
    if kind in "iuf":
        return cells.to_numpy(dtype=np.float64), np.zeros(len(cells), dtype=bool)
    words = as_text(cells)
    if set("".join(words)) <= _PLAIN:
        with suppress(ValueError):
            plain = np.array([float(word) if word else np.nan for word in words], dtype=np.float64)
            return plain, np.zeros(len(words), dtype=bool)
    numbers = [bool(_NUMBER.fullmatch(word)) for word in words]
    values = [float(word) if number else np.nan for word, number in zip(words, numbers, strict=True)]
    unreadable = [
        not number and bool(word) and word.lower() != "nan" for word, number in zip(words, numbers, strict=True)
    ]
    return np.array(values, dtype=np.float64), np.array(unreadable, dtype=bool)


def as_text(cells: pd.Series) -> list[str]:
    """Read the cells of a column as text.

    Parameters
    ----------
    cells : pandas.Series
        Cells of any kind.

    Returns
    -------
    list of str
        Without surrounding blanks; empty where a cell is missing.
    """
    return [cell.strip() if isinstance(cell, str) else word_of(cell) for cell in cells.tolist()]


def word_of(cell: Any) -> str:
    """Return one cell as text."""
    if isinstance(cell, str):
        return cell.strip()
    if isinstance(cell, bytes):
        return cell.decode("utf-8", errors="replace").strip()
    if is_blank(cell):
        return ""
    # formats without nullable integers turn identifiers into floats
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return str(cell).strip()


def is_blank(cell: Any) -> bool:
    """Tell whether a cell is missing.

    Parameters
    ----------
    cell : object
        None, NaN, a masked value, a blank string, or anything else.

    Returns
    -------
    bool
    """
    if isinstance(cell, str):
        return not cell.strip()
    if cell is None or cell is pd.NA or cell is np.ma.masked:
        return True
    return isinstance(cell, float | np.floating) and bool(np.isnan(cell))
