"""The ``[sample]`` table of the study file."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator

from remnantstats.errors import nearest
from remnantstats.fields import Settings

from .columns import COLUMNS, find_column

__all__ = ["SampleSettings"]

Name = Annotated[str, Field(min_length=1)]


class SampleSettings(Settings):
    """Where the sample is and how to read it.

    Parameters
    ----------
    table : str or list of str
        Path of a table, or of several that are stacked.
    on_bad_rows : {"stop", "reject"}
        Refuse a table with bad rows, or leave those rows out and record them.
    columns : dict
        Our column = theirs.
    units : dict
        Our column = unit string, for formats that carry none.
    """

    table: Name | Annotated[list[Name], Field(min_length=1)]
    on_bad_rows: Literal["stop", "reject"] = "stop"
    columns: dict[str, Name] = Field(default_factory=dict)
    units: dict[str, Name] = Field(default_factory=dict)

    @field_validator("columns", "units")
    @classmethod
    def _known(cls, value: dict[str, str]) -> dict[str, str]:
        for name in value:
            if find_column(name) is None:
                raise ValueError(f"'{name}' is not a column of the sample table: {nearest(name, list(COLUMNS))}")
        return value

    @field_validator("columns")
    @classmethod
    def _one_use(cls, value: dict[str, str]) -> dict[str, str]:
        repeated = {theirs for theirs in value.values() if list(value.values()).count(theirs) > 1}
        if repeated:
            raise ValueError(f"each of their columns once; '{min(repeated)}' is named twice")
        return value

    @field_validator("units")
    @classmethod
    def _numbers(cls, value: dict[str, str]) -> dict[str, str]:
        for name in value:
            column = find_column(name)
            if column is not None and column.kind == "text":
                raise ValueError(f"'{name}' holds text and has no unit")
        return value

    @property
    def paths(self) -> tuple[str, ...]:
        """The tables, as the user wrote them."""
        return (self.table,) if isinstance(self.table, str) else tuple(self.table)
