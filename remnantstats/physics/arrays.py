"""What the modules of this room share: the array type, and refusals that name row and value."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..errors import Fault, InputError

__all__ = ["Bools", "Floats", "as_floats", "gauss_legendre", "refuse_rows"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


def as_floats(values: ArrayLike) -> Floats:
    """Return `values` as an array of 64-bit floats, without a copy where it is one already.

    Parameters
    ----------
    values : array_like
        Numbers, any shape.

    Returns
    -------
    ndarray of float64
        The same shape.
    """
    return np.asarray(values, dtype=np.float64)


def gauss_legendre(low: float, high: float, n: int) -> tuple[Floats, Floats]:
    """Nodes and weights of Gauss–Legendre quadrature on one interval.

    Parameters
    ----------
    low, high : float
        Ends of the interval; neither is a node.
    n : int
        Number of nodes, at least 1.

    Returns
    -------
    nodes, weights : ndarray, shape (n,)
        Increasing nodes; the weights add up to ``high - low``.
    """
    points, weights = np.polynomial.legendre.leggauss(n)
    half = 0.5 * (high - low)
    return as_floats(low + half * (points + 1.0)), as_floats(half * weights)


def refuse_rows(
    bad: Bools,
    what: str,
    found: Callable[[int], str],
    allowed: str,
    remedy: str,
    labels: Sequence[str] | None = None,
) -> None:
    """Raise one error for all rows that are marked bad; do nothing where none is.

    Parameters
    ----------
    bad : ndarray of bool, shape (n,)
        The rows to refuse.
    what : str
        What is wrong, in one sentence.
    found : callable
        Gives the text of the value found, from a row's number.
    allowed, remedy : str
        As in `remnantstats.errors.Fault`.
    labels : sequence of str, shape (n,), optional
        Names of the rows (stars); without them rows are counted from 0.

    Raises
    ------
    InputError
        With one fault a bad row.
    """
    rows = np.flatnonzero(bad)
    if rows.size == 0:
        return
    names = [f"row {row}" if labels is None else f"star {labels[row]}" for row in rows.tolist()]
    raise InputError(
        *(
            Fault(what, where=name, found=found(row), allowed=allowed, remedy=remedy)
            for name, row in zip(names, rows.tolist(), strict=True)
        )
    )
