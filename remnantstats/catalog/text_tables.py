"""Strict reading of CSV and ECSV: every cell stays text, and every row has the header's width."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import yaml

from remnantstats.errors import Fault, InputError

__all__ = ["TextTable", "TornRow", "read_csv", "read_ecsv"]

#: words of a row that are shown in a message
_SHOWN = 60


@dataclass(frozen=True)
class TornRow:
    """A row whose number of fields is not the header's.

    Parameters
    ----------
    row, line : int
        Data row and line of the file, both counted from 1.
    fields : tuple of str
        What the row holds.
    expected : int
        Number of fields of the header.
    """

    row: int
    line: int
    fields: tuple[str, ...]
    expected: int

    def fault(self, file: str) -> Fault:
        """Describe the row.

        Parameters
        ----------
        file : str
            The table.

        Returns
        -------
        Fault
        """
        text = ",".join(self.fields)
        return Fault(
            "a row has the wrong number of fields",
            where=f"{file}, row {self.row} (line {self.line})",
            found=f"{len(self.fields)} fields: {text if len(text) <= _SHOWN else text[:_SHOWN] + '…'}",
            allowed=f"{self.expected} fields, as in the header",
            remedy="look for a missing or doubled separator, or a decimal comma",
        )


@dataclass(frozen=True)
class TextTable:
    """A table of text cells.

    Parameters
    ----------
    header : list of str
        Names of the columns.
    records : list of list of str
        The whole rows, each as wide as the header.
    numbers : list of int
        Data row of each record, counted from 1.
    torn : list of TornRow
        Rows of another width.
    units : dict
        Unit strings of the header.
    """

    header: list[str]
    records: list[list[str]]
    numbers: list[int]
    torn: list[TornRow]
    units: dict[str, str] = field(default_factory=dict)


def read_csv(content: bytes, file: str) -> TextTable:
    """Read a CSV file.

    Parameters
    ----------
    content : bytes
        UTF-8, with or without a byte-order mark, any line ends.
    file : str
        The table, for messages.

    Returns
    -------
    TextTable

    Raises
    ------
    InputError
        Where the file is empty, not text, not separated by commas, or has a faulty header.
    """
    text = _decode(content, file)
    if text.startswith("# %ECSV"):
        raise InputError(
            Fault("the table is ECSV, not CSV", where=file, found="# %ECSV", remedy="let its name end in .ecsv")
        )
    return _records(text, ",", file, 0)


class _HeaderLoader(yaml.SafeLoader):  # type: ignore[misc]
    """Plain values alone; objects that other writers describe in the header's metadata are passed over."""


_HeaderLoader.add_multi_constructor("!", lambda _loader, _suffix, _node: None)


def read_ecsv(content: bytes, file: str) -> TextTable:
    """Read an ECSV file: its header as the YAML it is, its rows as strictly as those of a CSV file.

    Parameters
    ----------
    content : bytes
        UTF-8.
    file : str
        The table, for messages.

    Returns
    -------
    TextTable
        With the units of the header.

    Raises
    ------
    InputError
        As `read_csv`, and where the header is not that of an ECSV file.
    """
    lines = _decode(content, file).splitlines(keepends=True)
    end = next((number for number, line in enumerate(lines) if not line.startswith("#")), len(lines))
    header = _ecsv_header([line[1:].removeprefix(" ").rstrip("\r\n") for line in lines[:end]], file)
    declared = {str(item["name"]): str(item.get("unit") or "") for item in header.get("datatype", [])}
    table = _records("".join(lines[end:]), str(header.get("delimiter", " ")), file, end, comment="#")
    if declared and list(declared) != table.header:
        raise InputError(
            Fault(
                "the columns of the ECSV header differ from those of the table",
                where=f"{file}, line {end + 1}",
                found=", ".join(table.header),
                allowed=", ".join(declared),
                remedy="write the file with a library, or keep the two lists equal",
            )
        )
    units = {name: unit for name, unit in declared.items() if unit}
    return TextTable(table.header, table.records, table.numbers, table.torn, units)


def _ecsv_header(lines: list[str], file: str) -> dict[str, Any]:
    """Parse the commented YAML block."""
    if not lines or not lines[0].startswith("%ECSV"):
        raise InputError(
            Fault(
                "the table is not ECSV",
                where=f"{file}, line 1",
                found=lines[0] if lines else "no commented header",
                allowed="# %ECSV 1.0 and a commented header",
                remedy="let the name end in .csv if it is plain CSV",
            )
        )
    try:
        header = yaml.load("\n".join(lines[1:]), _HeaderLoader)  # a safe loader: it builds plain values alone
        [item["name"] for item in header.get("datatype", [])]
    except (yaml.YAMLError, ValueError, TypeError, KeyError, AttributeError) as error:
        reason = " ".join(str(error).split())[:160]
        raise InputError(
            Fault("the ECSV header cannot be read", where=file, found=reason, remedy="write the file with a library")
        ) from error
    return dict(header)


def _decode(content: bytes, file: str) -> str:
    """Return the text of a file, or say where it is not text."""
    if not content.strip():
        raise InputError(
            Fault(
                "the table is empty",
                where=file,
                found=f"{len(content)} bytes",
                allowed="a table with at least one row",
                remedy="check the file",
            )
        )
    nul = content.find(b"\0")
    if nul >= 0:
        raise InputError(
            Fault(
                "the table holds NUL bytes",
                where=f"{file}, line {_line_of(content, nul)}",
                found=f"byte 0 at offset {nul}",
                allowed="UTF-8 text",
                remedy="save the file as UTF-8 text; a name that ends in .fits or .parquet is read as binary",
            )
        )
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(
            Fault(
                "the table is not UTF-8 text",
                where=f"{file}, line {_line_of(content, error.start)}",
                found=repr(content[error.start : error.start + 4]),
                allowed="UTF-8",
                remedy="save the file as UTF-8",
            )
        ) from error


def _line_of(content: bytes, position: int) -> int:
    """Return the line, counted from 1, of a byte."""
    return content.count(b"\n", 0, position) + 1


def _records(text: str, delimiter: str, file: str, offset: int, comment: str = "") -> TextTable:
    """Split text into rows; `offset` lines precede it in the file."""
    rows = _split(text, delimiter, file, offset, comment)
    try:
        _, header = next(rows)
    except StopIteration:
        raise InputError(
            Fault("the table has no header", where=file, remedy="put the names of the columns in the first line")
        ) from None
    header = [name.strip() for name in header]
    _check_header(header, delimiter, f"{file}, line {offset + 1}")
    table = TextTable(header, [], [], [])
    width = len(header)
    for number, (line, row) in enumerate(rows, start=1):
        if len(row) == width:
            table.records.append(row)
            table.numbers.append(number)
        else:
            table.torn.append(TornRow(number, line, tuple(row), width))
    return table


def _split(text: str, delimiter: str, file: str, offset: int, comment: str) -> Iterator[tuple[int, list[str]]]:
    """Yield line and fields of each row that is not blank."""
    aligned = delimiter == " "
    if aligned:
        text = re.sub(r"^[ \t]+|[ \t]+$", "", text, flags=re.MULTILINE)
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, skipinitialspace=aligned, strict=True)
    try:
        for row in reader:
            blank = not row or (len(row) == 1 and not row[0].strip())
            if not blank and not (comment and row[0].startswith(comment)):
                yield reader.line_num + offset, row
    except csv.Error as error:
        raise InputError(
            Fault(
                "the table cannot be split into fields",
                where=f"{file}, line {reader.line_num + offset}",
                found=str(error),
                allowed="fields separated by commas, quotes closed",
                remedy="mend the quotes or line ends near this line",
            )
        ) from error


def _check_header(header: list[str], delimiter: str, where: str) -> None:
    faults = []
    if len(header) == 1 and delimiter == "," and any(mark in header[0] for mark in ";\t|"):
        faults.append(
            Fault("the table is not separated by commas", where=where, found=header[0], remedy="save it with commas")
        )
    if "" in header:
        faults.append(
            Fault(
                "a column has no name",
                where=f"{where}, column {header.index('') + 1}",
                found="an empty name",
                remedy="name the column or remove it",
            )
        )
    faults += [
        Fault(
            f"column '{name}' appears {header.count(name)} times",
            where=where,
            found=name,
            allowed="each name once",
            remedy="rename or remove one of them",
        )
        for name in sorted(set(header))
        if name and header.count(name) > 1
    ]
    if faults:
        raise InputError(*faults)
