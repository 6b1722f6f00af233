"""From the noise of a spectrum to the weakest line it shows, and from that line to an abundance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from ..errors import Fault, InputError, nearest
from .arrays import Bools, Floats, as_floats, refuse_rows

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["LINE_COLUMNS", "LineGrid", "equivalent_width_limit", "line_width"]

#: columns of a line-strength grid, as users write them
LINE_COLUMNS = ("teff", "log_abundance", "equivalent_width")

_MILLI = 1000.0

#: rows × abundances handled at once
_CHUNK_POINTS = 4_000_000


def line_width(wavelength: ArrayLike, resolution: ArrayLike, stellar_width: ArrayLike = 0.0) -> Floats:
    """Full width at half maximum of a weak line as recorded.

    Parameters
    ----------
    wavelength : array_like
        Å; the arguments broadcast together.
    resolution : array_like
        λ/Δλ of the spectrograph, positive.
    stellar_width : array_like, optional
        Width of the line as the star emits it, Å.

    Returns
    -------
    ndarray
        The larger of λ/R and the stellar width, Å.
    """
    return as_floats(np.maximum(as_floats(wavelength) / as_floats(resolution), as_floats(stellar_width)))


def equivalent_width_limit(
    snr: ArrayLike,
    wavelength: ArrayLike,
    resolution: ArrayLike,
    pixel: ArrayLike,
    stellar_width: ArrayLike = 0.0,
    k: float = 3.0,
) -> Floats:
    """Equivalent width that a line must reach to be seen at k sigma.

    Parameters
    ----------
    snr : array_like
        Signal over noise a pixel, positive; the arguments broadcast together.
    wavelength : array_like
        Å.
    resolution : array_like
        λ/Δλ.
    pixel : array_like
        Width of a pixel δλ, Å.
    stellar_width : array_like, optional
        As in `line_width`, Å.
    k : float, optional
        Threshold in standard errors.

    Returns
    -------
    ndarray
        k · 1.5 √(FWHM δλ) / SNR, mÅ.

    Notes
    -----
    Cayrel 1988, IAU Symposium 132, 345, in the form of Cayrel et al. 2004, A&A 416, 1117 (factor 1.5 from memory).
    Error of the continuum's level is not included.
    """
    width = line_width(wavelength, resolution, stellar_width)
    return as_floats(k * 1.5 * np.sqrt(width * as_floats(pixel)) / as_floats(snr) * _MILLI)


@dataclass(frozen=True)
class LineGrid:
    """Strength of one line on a rectangle of temperature and abundance.

    Interpolation is linear in log equivalent width against (teff, log abundance): along the curve of growth.

    Parameters
    ----------
    teff : ndarray, shape (t,)
        Increasing, K; t at least 2.
    log_abundance : ndarray, shape (a,)
        Increasing, log10 n(Z)/n(H or He); a at least 2.
    log_width : ndarray, shape (t, a)
        log10 of the equivalent width in mÅ; increasing with abundance at each temperature.
    source : str, optional
        File, for messages.
    """

    teff: Floats
    log_abundance: Floats
    log_width: Floats
    source: str = "line-strength grid"

    def __post_init__(self) -> None:
        rising = np.isfinite(self.log_width).all() and (np.diff(self.log_width, axis=1) > 0.0).all()
        if not rising:
            raise _grid_error(
                "a line-strength grid does not rise with abundance",
                self.source,
                "an equivalent width that is missing, not positive, or falls or stays as log_abundance rises",
                "at each teff, positive equivalent widths (mÅ) that rise with log_abundance",
                "cut the grid where the line saturates",
            )

    @classmethod
    def from_table(cls, table: pd.DataFrame, source: str = "line-strength grid") -> LineGrid:
        """Build a grid from a table with the columns of `LINE_COLUMNS`, rows in any order.

        Parameters
        ----------
        table : pandas.DataFrame
            One row a node: K, log10 n(Z)/n(H or He), mÅ.
        source : str, optional
            File, for messages.

        Returns
        -------
        LineGrid

        Raises
        ------
        InputError
            Where a column or node is missing, or the width does not rise with abundance.
        """
        names = [str(name) for name in table.columns]
        for name in LINE_COLUMNS:
            if name not in names:
                found = ", ".join(names)
                what = f"the line-strength grid has no column '{name}'"
                raise _grid_error(what, source, found, ", ".join(LINE_COLUMNS), nearest(name, names))
        temperatures, abundances, widths = (as_floats(table[name]) for name in LINE_COLUMNS)
        teff, log_abundance = np.unique(temperatures), np.unique(abundances)
        nodes = set(zip(temperatures.tolist(), abundances.tolist(), strict=True))
        complete = len(nodes) == widths.size == teff.size * log_abundance.size
        if not complete or teff.size < 2 or log_abundance.size < 2:
            raise _grid_error(
                "a line-strength grid is not a full rectangle of teff and log_abundance",
                source,
                f"{widths.size} rows for {teff.size} temperatures and {log_abundance.size} abundances",
                "every combination once; two or more of each",
                "add the missing nodes",
            )
        with np.errstate(divide="ignore", invalid="ignore"):
            log_width = np.log10(widths[np.lexsort((abundances, temperatures))])
        return cls(teff, log_abundance, as_floats(log_width.reshape(teff.size, log_abundance.size)), source)

    def equivalent_width(
        self, teff: ArrayLike, log_abundance: ArrayLike, labels: Sequence[str] | None = None
    ) -> Floats:
        """Strength of the line.

        Parameters
        ----------
        teff, log_abundance : array_like, shape (n,)
            K, log10 n(Z)/n(H or He); broadcast together.
        labels : sequence of str, optional
            Names of the stars, for messages.

        Returns
        -------
        ndarray, shape (n,)
            mÅ; rises with abundance.

        Raises
        ------
        InputError
            Where a star is outside the grid.
        """
        temperatures, wanted = _pair(teff, log_abundance)
        low, high = self.log_abundance[[0, -1]]
        bad = self._off(temperatures) | ~((wanted >= low) & (wanted <= high))
        self._refuse(bad, temperatures, "log_abundance", wanted, f"{low:g} to {high:g}", labels)
        known = np.broadcast_to(self.log_abundance, (temperatures.size, self.log_abundance.size))
        return as_floats(10.0 ** _interpolate(wanted, known, self._curves(temperatures)))

    def abundance(self, teff: ArrayLike, width: ArrayLike, labels: Sequence[str] | None = None) -> Floats:
        """Abundance at which the line has the given strength: the inverse of `equivalent_width`.

        Parameters
        ----------
        teff, width : array_like, shape (n,)
            K, mÅ; broadcast together.
        labels : sequence of str, optional
            Names of the stars, for messages.

        Returns
        -------
        ndarray, shape (n,)
            log10 n(Z)/n(H or He).

        Raises
        ------
        InputError
            Where a star's temperature, or its line at that temperature, is outside the grid.
        """
        temperatures, widths = _pair(teff, width)
        result = np.empty(temperatures.shape)
        bad = self._off(temperatures)
        with np.errstate(divide="ignore", invalid="ignore"):
            wanted = np.log10(widths)
        size = max(1, _CHUNK_POINTS // self.log_abundance.size)
        for start in range(0, temperatures.size, size):
            part = slice(start, start + size)
            curves = self._curves(temperatures[part])
            bad[part] |= ~((wanted[part] >= curves[:, 0]) & (wanted[part] <= curves[:, -1]))
            known = np.broadcast_to(self.log_abundance, curves.shape)
            result[part] = _interpolate(np.clip(wanted[part], curves[:, 0], curves[:, -1]), curves, known)
        ends = 10.0 ** self.log_width[:, [0, -1]]
        span = f"{ends[:, 0].min():.3g} to {ends[:, 1].max():.3g} mÅ over all temperatures, less at each"
        self._refuse(bad, temperatures, "equivalent width", widths, span, labels)
        return result

    def _off(self, teff: Floats) -> Bools:
        return np.asarray(~((teff >= self.teff[0]) & (teff <= self.teff[-1])), dtype=np.bool_)

    def _curves(self, teff: Floats) -> Floats:
        """Curve of growth of each star, log10 mÅ, shape (n, a)."""
        clipped = np.clip(np.where(np.isnan(teff), self.teff[0], teff), self.teff[0], self.teff[-1])
        left = np.clip(np.searchsorted(self.teff, clipped, side="right") - 1, 0, self.teff.size - 2)
        share = ((clipped - self.teff[left]) / (self.teff[left + 1] - self.teff[left]))[:, None]
        return as_floats((1.0 - share) * self.log_width[left] + share * self.log_width[left + 1])

    def _refuse(
        self, bad: Bools, teff: Floats, name: str, values: Floats, span: str, labels: Sequence[str] | None
    ) -> None:
        refuse_rows(
            bad,
            f"a star lies outside {self.source}",
            lambda row: f"teff = {teff[row]:.6g} K, {name} = {values[row]:.4g}",
            f"teff {self.teff[0]:g} to {self.teff[-1]:g} K; {name} {span}",
            "supply a grid that covers the star, or remove it; nothing is extrapolated",
            labels,
        )


def _grid_error(what: str, source: str, found: str, allowed: str, remedy: str) -> InputError:
    return InputError(Fault(what, where=source, found=found, allowed=allowed, remedy=remedy))


def _pair(first: ArrayLike, second: ArrayLike) -> tuple[Floats, Floats]:
    arrays = np.broadcast_arrays(np.atleast_1d(as_floats(first)), as_floats(second))
    return as_floats(arrays[0]), as_floats(arrays[1])


def _interpolate(x: Floats, known_x: Floats, known_y: Floats) -> Floats:
    """Linear interpolation of each row in its own table; x (n,), tables (n, a), increasing along a."""
    left = np.clip(np.sum(known_x <= x[:, None], axis=1) - 1, 0, known_x.shape[1] - 2)
    rows = np.arange(x.size)
    x0, x1 = known_x[rows, left], known_x[rows, left + 1]
    y0, y1 = known_y[rows, left], known_y[rows, left + 1]
    share = (x - x0) / (x1 - x0)
    return as_floats((1.0 - share) * y0 + share * y1)
