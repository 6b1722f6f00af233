"""How fast each element sinks, and how much of the star is mixed: interpolation in a grid, never outside it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from importlib.resources import files
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..errors import Fault, InputError, nearest
from .arrays import Bools, Floats, as_floats, refuse_rows
from .settling_table import SettlingTable, build_tables

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["COLUMNS", "SettlingGrid", "koester2009_grid"]

#: columns of a settling grid, as users write them
COLUMNS = ("atmosphere", "teff", "logg", "element", "log_settling_time", "log_cvz_fraction")

#: dex by which a star's log g may differ from that of a grid with one log g only
SINGLE_LOGG_REACH = 0.1

Names = NDArray[np.str_]


@dataclass(frozen=True)
class SettlingGrid:
    """Settling times and convection-zone masses on a grid, one row a (star type, element).

    Interpolation is linear in the logarithms, in (teff, log g), for each atmosphere and element by itself. Every
    (atmosphere, element) must fill a rectangle of teff and log g. Where it has one log g only, stars within
    `single_logg_reach` of it are served by that one.

    Parameters
    ----------
    atmosphere : ndarray of str, shape (n,)
        ``"H"`` or ``"He"``.
    teff : ndarray, shape (n,)
        K.
    logg : ndarray, shape (n,)
        dex(cm s⁻²).
    element : ndarray of str, shape (n,)
        Chemical symbols.
    log_settling_time : ndarray, shape (n,)
        log10 of years.
    log_cvz_fraction : ndarray, shape (n,)
        log10 of the mass of the convection zone (or of the mixed outer layer) over that of the star; NaN where the grid
        has none.
    source : str, optional
        File or publication, for messages.
    single_logg_reach : float, optional
        dex.

    Raises
    ------
    InputError
        Where the grid is not complete.
    """

    atmosphere: Names
    teff: Floats
    logg: Floats
    element: Names
    log_settling_time: Floats
    log_cvz_fraction: Floats
    source: str = "settling grid"
    single_logg_reach: float = SINGLE_LOGG_REACH
    _tables: dict[tuple[str, str], SettlingTable] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "_tables", build_tables(self))

    @classmethod
    def from_table(
        cls, table: pd.DataFrame, source: str = "settling grid", single_logg_reach: float = SINGLE_LOGG_REACH
    ) -> SettlingGrid:
        """Build a grid from a table with the columns of `COLUMNS`, in any order.

        Parameters
        ----------
        table : pandas.DataFrame
            One row a node and element. ``log_cvz_fraction`` may be absent or blank.
        source : str, optional
            File, for messages.
        single_logg_reach : float, optional
            dex.

        Returns
        -------
        SettlingGrid

        Raises
        ------
        InputError
            Where a column is missing or the grid is not complete.
        """
        names = [str(name) for name in table.columns]
        missing = [name for name in COLUMNS[:-1] if name not in names]
        if missing:
            raise InputError(
                *(
                    Fault(
                        f"the settling grid has no column '{name}'",
                        where=source,
                        found=", ".join(names),
                        allowed=", ".join(COLUMNS),
                        remedy=nearest(name, names),
                    )
                    for name in missing
                )
            )
        rows = len(table)
        cvz = table["log_cvz_fraction"] if "log_cvz_fraction" in names else np.full(rows, np.nan)
        return cls(
            np.asarray(table["atmosphere"], dtype=np.str_),
            as_floats(table["teff"]),
            as_floats(table["logg"]),
            np.asarray(table["element"], dtype=np.str_),
            as_floats(table["log_settling_time"]),
            as_floats(cvz),
            source,
            single_logg_reach,
        )

    def elements(self, atmosphere: str) -> tuple[str, ...]:
        """Elements that the grid holds for an atmosphere, sorted.

        Parameters
        ----------
        atmosphere : str
            ``"H"`` or ``"He"``.

        Returns
        -------
        tuple of str
        """
        return tuple(sorted(element for kind, element in self._tables if kind == atmosphere))

    def outside(self, atmosphere: Any, element: Any, teff: ArrayLike, logg: ArrayLike) -> Bools:
        """Mark stars that the grid does not cover.

        Parameters
        ----------
        atmosphere, element : str or array of str, shape (n,)
            As in the grid.
        teff, logg : array_like, shape (n,)
            K, dex(cm s⁻²); the four broadcast together.

        Returns
        -------
        ndarray of bool, shape (n,)
            True where the element is unknown in that atmosphere, or (teff, logg) is outside its nodes or missing.
        """
        return self._outside(*broadcast(atmosphere, element, teff, logg))

    def log_settling_time_at(
        self, atmosphere: Any, element: Any, teff: ArrayLike, logg: ArrayLike, labels: Sequence[str] | None = None
    ) -> Floats:
        """Settling time, interpolated.

        Parameters
        ----------
        atmosphere, element : str or array of str, shape (n,)
            As in the grid.
        teff, logg : array_like, shape (n,)
            K, dex(cm s⁻²); the four broadcast together.
        labels : sequence of str, optional
            Names of the stars, for the message.

        Returns
        -------
        ndarray, shape (n,)
            log10 of years.

        Raises
        ------
        InputError
            Where a star is outside the grid: its element, teff and logg are named.
        """
        return self._interpolate("time", atmosphere, element, teff, logg, labels)

    def log_cvz_fraction_at(
        self, atmosphere: Any, element: Any, teff: ArrayLike, logg: ArrayLike, labels: Sequence[str] | None = None
    ) -> Floats:
        """Mass of the convection zone over that of the star, interpolated.

        Parameters
        ----------
        atmosphere, element, teff, logg, labels
            As in `log_settling_time_at`.

        Returns
        -------
        ndarray, shape (n,)
            log10.

        Raises
        ------
        InputError
            As there, and where the grid gives no convection-zone mass for the element.
        """
        return self._interpolate("cvz", atmosphere, element, teff, logg, labels)

    def by_table(self, atmosphere: Names, element: Names) -> Iterator[tuple[SettlingTable, NDArray[np.intp]]]:
        """Group rows by the table that serves them.

        Parameters
        ----------
        atmosphere, element : ndarray of str, shape (n,)
            As in the grid.

        Yields
        ------
        SettlingTable, ndarray of int
            Each table that is used, with its rows; rows that no table serves are left out.
        """
        for (kind, symbol), table in self._tables.items():
            rows = np.flatnonzero((atmosphere == kind) & (element == symbol))
            if rows.size:
                yield table, rows

    def refuse_outside(
        self, atmosphere: Names, element: Names, teff: Floats, logg: Floats, labels: Sequence[str] | None = None
    ) -> None:
        """Raise where a star is outside the grid.

        Parameters
        ----------
        atmosphere, element, teff, logg : ndarray, shape (n,)
            As in `outside`, already of one shape.
        labels : sequence of str, optional
            Names of the stars.

        Raises
        ------
        InputError
            With a fault a star: element, teff and logg.
        """
        refuse_rows(
            self._outside(atmosphere, element, teff, logg),
            f"a star lies outside {self.source}",
            lambda row: (
                f"element {element[row]}, atmosphere {atmosphere[row]}, "
                f"teff = {teff[row]:.6g} K, logg = {logg[row]:.4g}"
            ),
            self._extent(),
            "supply a settling grid that covers the star, or remove it; nothing is extrapolated",
            labels,
        )

    def _outside(self, atmosphere: Names, element: Names, teff: Floats, logg: Floats) -> Bools:
        outside = np.ones(teff.shape, dtype=np.bool_)
        for table, rows in self.by_table(atmosphere, element):
            outside[rows] = ~table.covers(teff[rows], logg[rows])
        return outside

    def _interpolate(
        self,
        quantity: str,
        atmosphere: Any,
        element: Any,
        teff: ArrayLike,
        logg: ArrayLike,
        labels: Sequence[str] | None,
    ) -> Floats:
        kinds, symbols, temperatures, gravities = broadcast(atmosphere, element, teff, logg)
        self.refuse_outside(kinds, symbols, temperatures, gravities, labels)
        values = np.empty(temperatures.shape)
        for table, rows in self.by_table(kinds, symbols):
            values[rows] = table.at(quantity, temperatures[rows], gravities[rows])
        return values

    def _extent(self) -> str:
        """What the grid covers, in words."""
        parts = [f"{element} in {kind}: {table.extent()}" for (kind, element), table in sorted(self._tables.items())]
        shown = parts if len(parts) <= 8 else [*parts[:8], f"and {len(parts) - 8} more"]
        return "; ".join(shown)


def broadcast(atmosphere: Any, element: Any, teff: ArrayLike, logg: ArrayLike) -> tuple[Names, Names, Floats, Floats]:
    """Bring names and numbers to one shape (n,).

    Parameters
    ----------
    atmosphere, element : str or array of str
        Names.
    teff, logg : array_like
        Numbers.

    Returns
    -------
    tuple of ndarray, each of shape (n,)
    """
    arrays = np.broadcast_arrays(
        np.atleast_1d(np.asarray(atmosphere, dtype=np.str_)),
        np.asarray(element, dtype=np.str_),
        as_floats(teff),
        as_floats(logg),
    )
    return arrays[0], arrays[1], arrays[2], arrays[3]


def koester2009_grid() -> SettlingGrid:
    """The published settling times of H atmospheres at log g = 8, as a partial grid.

    Returns
    -------
    SettlingGrid
        C, Na, Mg, Si, Ca and Fe from 6,000 to 20,000 K; no convection-zone masses: it gives times, not rates.

    Notes
    -----
    Koester 2009, A&A 498, 517, Table 4.
    """
    import pandas as pd  # here and not above for start-up time alone

    with (files("remnantstats.physics") / "data" / "settling_koester2009_h.csv").open("rb") as stream:
        return SettlingGrid.from_table(
            pd.read_csv(stream, comment="#"), "the settling times of Koester 2009 (H, log g = 8)"
        )
