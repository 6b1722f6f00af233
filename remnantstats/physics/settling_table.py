"""One atmosphere and element of a settling grid: a rectangle of nodes and the interpolation in it."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from ..errors import Fault, InputError
from .arrays import Bools, Floats, as_floats

if TYPE_CHECKING:
    from .settling import SettlingGrid

__all__ = ["SettlingTable", "build_tables"]

ATMOSPHERES = ("H", "He")


@dataclass(frozen=True)
class SettlingTable:
    """The nodes of one (atmosphere, element).

    Parameters
    ----------
    atmosphere, element : str
        Names.
    teff : ndarray, shape (t,)
        Increasing, K; t at least 2.
    logg : ndarray, shape (g,)
        Increasing, dex(cm s⁻²); g at least 1.
    log_time, log_cvz : ndarray, shape (t, g)
        log10 years; log10 of the mixed share of the star's mass, or all NaN.
    reach : float
        dex of log g within which a table of one log g serves.
    source : str
        For messages.
    """

    atmosphere: str
    element: str
    teff: Floats
    logg: Floats
    log_time: Floats
    log_cvz: Floats
    reach: float
    source: str
    _interpolators: dict[str, Any] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        # the rate needs only the ratio of mass and time, whose interpolation is that of the difference of the logs
        values = {"time": self.log_time, "cvz": self.log_cvz, "turnover": self.log_cvz - self.log_time}
        object.__setattr__(self, "_interpolators", {name: self._interpolator(v) for name, v in values.items()})

    def _interpolator(self, values: Floats) -> Any:
        if self.logg.size == 1:
            return RegularGridInterpolator((self.teff,), values[:, 0], bounds_error=False)
        return RegularGridInterpolator((self.teff, self.logg), np.ascontiguousarray(values), bounds_error=False)

    @property
    def logg_range(self) -> tuple[float, float]:
        """Lowest and highest log g that are served."""
        slack = self.reach if self.logg.size == 1 else 0.0
        return float(self.logg[0]) - slack, float(self.logg[-1]) + slack

    def covers(self, teff: Floats, logg: Floats) -> Bools:
        """Mark stars within the nodes.

        Parameters
        ----------
        teff, logg : ndarray, any one shape
            K, dex(cm s⁻²).

        Returns
        -------
        ndarray of bool
            False also where a number is missing.
        """
        low, high = self.logg_range
        # the slack is a decimal number: 8.1 must count as within 0.1 of 8.0
        inside = (logg >= low - 1e-9) & (logg <= high + 1e-9)
        return np.asarray(inside & (teff >= self.teff[0]) & (teff <= self.teff[-1]), dtype=np.bool_)

    def at(self, quantity: str, teff: Floats, logg: Floats) -> Floats:
        """Interpolate at stars that the table covers.

        Parameters
        ----------
        quantity : {"time", "cvz", "turnover"}
            log10 settling time in years, log10 mixed share, or log10 of their ratio, mixed share over time in yr⁻¹.
        teff, logg : ndarray, any one shape
            K, dex(cm s⁻²), within the nodes.

        Returns
        -------
        ndarray
            The same shape; NaN where a number is missing or outside.

        Raises
        ------
        InputError
            Where the grid gives no convection-zone mass and one is asked for.
        """
        if quantity != "time" and np.isnan(self.log_cvz).any():
            raise InputError(
                Fault(
                    f"{self.source} gives no convection-zone mass for {self.element} in {self.atmosphere} atmospheres",
                    where="column 'log_cvz_fraction'",
                    found="blank",
                    allowed="log10 of the mixed mass over that of the star, at every node",
                    remedy="supply a settling grid with log_cvz_fraction; times alone give no rate",
                )
            )
        points = teff[..., None] if self.logg.size == 1 else np.stack((teff, logg), axis=-1)
        return as_floats(self._interpolators[quantity](points))

    def clamp(self, teff: Floats, logg: Floats) -> tuple[Floats, Floats, Bools]:
        """Move points outside the nodes to the nearest edge.

        Parameters
        ----------
        teff, logg : ndarray, any one shape
            K, dex(cm s⁻²).

        Returns
        -------
        teff, logg : ndarray
            Within the nodes.
        moved : ndarray of bool
            Points that were outside.
        """
        low, high = self.logg_range
        moved = ~self.covers(teff, logg) if self.logg.size > 1 else (teff < self.teff[0]) | (teff > self.teff[-1])
        return np.clip(teff, self.teff[0], self.teff[-1]), np.clip(logg, low, high), moved

    def extent(self) -> str:
        """Ranges of teff and log g, in words."""
        low, high = self.logg_range
        return f"teff {self.teff[0]:g} to {self.teff[-1]:g} K, logg {low:g} to {high:g}"


def build_tables(grid: SettlingGrid) -> dict[tuple[str, str], SettlingTable]:
    """Split a grid by atmosphere and element, and check that each part is a full rectangle.

    Parameters
    ----------
    grid : SettlingGrid
        Its columns.

    Returns
    -------
    dict
        Table by (atmosphere, element).

    Raises
    ------
    InputError
        With every fault found.
    """
    faults = _column_faults(grid)
    if faults:
        raise InputError(*faults)
    tables: dict[tuple[str, str], SettlingTable] = {}
    for kind, symbol in sorted({(str(a), str(e)) for a, e in zip(grid.atmosphere, grid.element, strict=True)}):
        rows = np.flatnonzero((grid.atmosphere == kind) & (grid.element == symbol))
        fault = _rectangle_fault(grid, kind, symbol, rows)
        if fault is not None:
            faults.append(fault)
            continue
        tables[kind, symbol] = _table(grid, kind, symbol, rows)
    if faults:
        raise InputError(*faults)
    return tables


def _column_faults(grid: SettlingGrid) -> list[Fault]:
    if grid.teff.size == 0:
        return [Fault("the settling grid is empty", where=grid.source, remedy="add its rows")]
    faults = [
        Fault(
            "a settling grid's atmosphere is unknown",
            where=f"{grid.source}, row {row}",
            found=str(grid.atmosphere[row]),
            allowed=" or ".join(ATMOSPHERES),
            remedy="change this value",
        )
        for row in np.flatnonzero(~np.isin(grid.atmosphere, ATMOSPHERES))
    ]
    for name in ("teff", "logg", "log_settling_time"):
        values = getattr(grid, name)
        faults += [
            Fault(
                f"a settling grid's {name} is not a number",
                where=f"{grid.source}, row {row}, column '{name}'",
                found=f"{values[row]}",
                allowed="a finite number",
                remedy="fill the cell, or remove the row",
            )
            for row in np.flatnonzero(~np.isfinite(values))
        ]
    return faults


def _rectangle_fault(grid: SettlingGrid, kind: str, symbol: str, rows: NDArray[np.intp]) -> Fault | None:
    """Fault where the nodes of one element are not each of a rectangle, once."""
    teff, logg = np.unique(grid.teff[rows]), np.unique(grid.logg[rows])
    nodes = {(float(t), float(g)) for t, g in zip(grid.teff[rows], grid.logg[rows], strict=True)}
    place = f"{grid.source}, {symbol} in {kind} atmospheres"
    if len(nodes) < rows.size:
        return Fault("a settling grid has a node twice", where=place, remedy="keep one row a node and element")
    if teff.size < 2:
        return Fault(
            "a settling grid has one temperature only",
            where=place,
            found=f"teff = {teff[0]:g} K",
            allowed="two or more",
            remedy="add rows",
        )
    absent = [(t, g) for t in teff for g in logg if (float(t), float(g)) not in nodes]
    if not absent:
        return None
    return Fault(
        "a settling grid is not a full rectangle of teff and logg",
        where=place,
        found=f"{len(absent)} of {teff.size * logg.size} nodes missing, the first at "
        f"teff = {absent[0][0]:g} K, logg = {absent[0][1]:g}",
        allowed="every combination of its teff and logg",
        remedy="add the missing nodes, or remove the rows of that teff or logg",
    )


def _table(grid: SettlingGrid, kind: str, symbol: str, rows: NDArray[np.intp]) -> SettlingTable:
    teff, logg = np.unique(grid.teff[rows]), np.unique(grid.logg[rows])
    order = rows[np.lexsort((grid.logg[rows], grid.teff[rows]))]
    shape = (teff.size, logg.size)
    return SettlingTable(
        kind,
        symbol,
        teff,
        logg,
        grid.log_settling_time[order].reshape(shape),
        grid.log_cvz_fraction[order].reshape(shape),
        grid.single_logg_reach,
        grid.source,
    )
