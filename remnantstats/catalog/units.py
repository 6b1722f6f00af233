"""Conversion of a column from the unit of its header to ours."""

from __future__ import annotations

import re
from typing import Any

import numpy as np
import numpy.typing as npt

from remnantstats.errors import Fault, InputError

from .columns import Column

__all__ = ["same_unit", "to_our_unit"]

Floats = npt.NDArray[np.float64]

#: other spellings of our units, known without loading the units library
_SPELLINGS = {"solMass": "Msun", "M_sun": "Msun"}
_BARE = {"", "-", "--", "---", "1", "none", "dimensionless"}
_LOGARITHM = re.compile(r"(?:dex|log10|log|lg)?\s*(?:\[(?P<square>.*)\]|\((?P<round>.*)\))", re.IGNORECASE)


def to_our_unit(values: Floats, column: Column, written: str, file: str) -> Floats:
    """Convert a column to our unit.

    Parameters
    ----------
    values : ndarray of float, shape (n,)
        Numbers in the unit `written`.
    column : Column
        The column; text columns pass unchanged.
    written : str
        Unit of the header or the study file; empty where there is none, which means ours.
    file : str
        The table, for messages.

    Returns
    -------
    ndarray of float, shape (n,)
        Numbers in ``column.unit``.

    Raises
    ------
    InputError
        Where the unit is unknown or measures something else.
    """
    text = written.strip()
    if column.unit is None or _SPELLINGS.get(text, text) == column.unit or text.lower() in _BARE:
        return values
    try:
        if column.unit.startswith("dex"):
            return values + _shift_of_logarithm(text, column)
        return values * _factor(text, column.unit)
    except (ValueError, TypeError, AttributeError) as error:
        raise InputError(_fault(column, text, file)) from error


def same_unit(first: str, second: str) -> bool:
    """Tell whether two unit strings mean the same unit."""
    if first.strip() == second.strip():
        return True
    try:
        return bool(_parse(first) == _parse(second))
    except ValueError:
        return False


def _shift_of_logarithm(text: str, column: Column) -> float:
    """Return what is added to decimal logarithms, dex."""
    if text == "dex":
        return 0.0
    match = _LOGARITHM.fullmatch(text)
    if match is None:
        raise ValueError(text)
    inner = match["square"] if match["square"] is not None else match["round"]
    if not column.logarithm or inner.strip() in _BARE:
        # an error in dex has the same size in every unit
        return 0.0
    ours = _LOGARITHM.fullmatch(str(column.unit))
    return float(np.log10(_factor(inner, ours["round"] if ours else "")))


def _factor(text: str, ours: str) -> float:
    """Return the factor between two linear units."""
    return float(_parse(text).to(_parse(ours)))


def _parse(text: str) -> Any:
    """Read a unit string in any of the notations that tables use."""
    # astropy is imported inside functions for start-up time alone
    from astropy import units

    for notation in (None, "cds", "fits", "vounit"):
        try:
            unit = units.Unit(text, format=notation)
        except (ValueError, TypeError):
            continue
        if isinstance(unit, units.UnitBase):
            return unit
    raise ValueError(text)


def _fault(column: Column, text: str, file: str) -> Fault:
    expected = column.unit or "a pure number"
    example = f'"{column.unit}"' if column.unit else "no unit"
    linear = column.logarithm and _LOGARITHM.fullmatch(text) is None
    hint = f"; if the column holds logarithms, write dex({text}) as its unit" if linear else ""
    return Fault(
        f"the unit of column '{column.name}' cannot be converted",
        where=f"{file}, column '{column.name}'",
        found=f'unit "{text}"',
        allowed=f"{expected}, or a unit that converts to it",
        remedy=f"give the column in {example} or another unit of the same quantity{hint}",
    )
