"""The sample: the stars that a study uses, checked, in our units."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from html import escape
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from remnantstats.errors import Fault, InputError, nearest

from .columns import CHANNELS, find_column
from .rules import RowRules

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["Sample", "Source"]


@dataclass(frozen=True)
class Source:
    """One table of a sample.

    Parameters
    ----------
    path : str
        As the user wrote it.
    sha256 : str
        Hash of the file's bytes; of the cells for a table in memory.
    n_rows : int
        Rows of the table, rejected ones included.
    """

    path: str
    sha256: str
    n_rows: int


@dataclass(frozen=True, eq=False, repr=False)
class Sample:
    """The stars that a study uses.

    Parameters
    ----------
    table : pandas.DataFrame
        A row a star, numbered from 0: every column of the sample table (float64 in our units, NaN where missing; text
        as str), then the table's further columns.
    sources : tuple of Source
        The tables it was read from.
    rejected : pandas.DataFrame
        A row a faulty cell of the rejected rows: ``file``, ``row``, ``star``, ``column``, ``found``, ``fault``,
        and the row's cells as they stood, each under ``original_`` and its name.
    notes : tuple of str
        What was assumed or left unused.
    rules : RowRules
        What each row was checked against.
    origin : pandas.DataFrame
        ``file`` and ``row`` of each star, aligned with `table`.
    """

    table: pd.DataFrame
    sources: tuple[Source, ...]
    rejected: pd.DataFrame
    notes: tuple[str, ...]
    rules: RowRules
    origin: pd.DataFrame = field(default_factory=pd.DataFrame)

    def __len__(self) -> int:
        return len(self.table)

    @cached_property
    def dataset(self) -> xr.Dataset:
        """The table as a dataset over dimension ``star``, with ``units`` and ``long_name`` of each variable."""
        # xarray is imported inside functions for start-up time alone
        import xarray as xr

        variables = {}
        for name in self.table.columns:
            known = find_column(name)
            attributes = {"long_name": known.meaning if known else name}
            if known is not None and known.unit is not None:
                attributes["units"] = known.unit
            variables[name] = xr.Variable("star", self.table[name].to_numpy(), attributes)
        star = variables.pop("star")
        return xr.Dataset(variables, coords={"star": star}, attrs={"sources": [item.path for item in self.sources]})

    def observed(self, channel: str) -> npt.NDArray[np.bool_]:
        """Tell which stars were observed in a channel.

        Parameters
        ----------
        channel : {"pollution", "excess"}
            The channel.

        Returns
        -------
        ndarray of bool, shape (n,)
            False throughout for a channel that the study does not use.

        Raises
        ------
        InputError
            Where there is no such channel.
        """
        require_channel(channel)
        if channel not in self.rules.channels:
            return np.zeros(len(self), dtype=bool)
        return np.asarray(self.table[channel].isin(["detected", "limit"]), dtype=bool)

    def place(self, index: int) -> str:
        """Say where a star stands in the user's tables.

        Parameters
        ----------
        index : int
            Row of `table`, from 0.

        Returns
        -------
        str
            File, row and star, for messages.
        """
        star = self.table["star"].iloc[index]
        if self.origin.empty:
            return f"star '{star}'"
        where = self.origin.iloc[index]
        return f"{where['file']}, row {where['row']}, star '{star}'"

    def _counts(self) -> list[tuple[str, str]]:
        """Short facts of the sample, for display."""
        facts = [("stars", str(len(self)))]
        for channel in self.rules.channels:
            words = self.table[channel].value_counts()
            counts = ", ".join(f"{words.get(word, 0)} {word}" for word in ("detected", "limit", "unobserved"))
            facts.append((channel, counts))
        facts.append(("tables", ", ".join(item.path for item in self.sources)))
        if len(self.rejected):
            rows = self.rejected[["file", "row"]].drop_duplicates()
            facts.append(("rejected rows", str(len(rows))))
        return facts

    def __repr__(self) -> str:
        return "\n".join(["Sample", *(f"  {name + ':':<15}{text}" for name, text in self._counts())])

    def _repr_html_(self) -> str:
        facts = "".join(f"<tr><th>{escape(name)}</th><td>{escape(text)}</td></tr>" for name, text in self._counts())
        notes = "".join(f"<li>{escape(note)}</li>" for note in self.notes)
        stars = self.table.dropna(axis="columns", how="all").to_html(max_rows=8, escape=True, index=False)
        return f"<p><b>Sample</b></p><table>{facts}</table>{f'<ul>{notes}</ul>' if notes else ''}{stars}"


def require_channel(channel: str) -> None:
    """Refuse a channel that does not exist.

    Parameters
    ----------
    channel : str
        Name of a channel.

    Raises
    ------
    InputError
        Where it is neither of the two.
    """
    if channel not in CHANNELS:
        raise InputError(
            Fault(
                f"unknown channel '{channel}'",
                where="argument 'channel'",
                found=channel,
                allowed=", ".join(CHANNELS),
                remedy=nearest(channel, list(CHANNELS)),
            )
        )
