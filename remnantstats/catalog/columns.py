"""The columns a sample table may hold: name, unit, kind, range and meaning of each."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

__all__ = ["CHANNELS", "COLUMNS", "ChannelColumns", "Column", "find_column", "sample_columns"]

Kind = Literal["text", "number"]
Bound = Literal["finite", "positive", "non-negative", "probability"]

OUTCOMES = ("detected", "limit", "unobserved")
INCLUSIONS = ("blind", "known-polluted", "known-dusty")
ATMOSPHERES = ("H", "He")


@dataclass(frozen=True)
class Column:
    """One known column of the sample table.

    Parameters
    ----------
    name : str
        Our name.
    kind : {"text", "number"}
        What its cells hold.
    unit : str or None
        Our unit, as astropy reads it; ``""`` for a pure number, None for text.
    meaning : str
        What it is, in a phrase.
    bound : {"finite", "positive", "non-negative", "probability"}
        Range of its numbers; a probability lies in [0, 1).
    words : tuple of str
        The words a text cell may hold; empty where it is free.
    logarithm : bool
        Whether the numbers are decimal logarithms of a quantity with a unit.
    default : str or float
        Value of an absent column or empty cell.
    conversion : bool
        Whether the column only feeds a conversion (abundances, line limits, photometry).
    """

    name: str
    kind: Kind
    unit: str | None
    meaning: str
    bound: Bound = "finite"
    words: tuple[str, ...] = ()
    logarithm: bool = False
    default: str | float = float("nan")
    conversion: bool = False


@dataclass(frozen=True)
class ChannelColumns:
    """Names of the columns of one channel.

    Parameters
    ----------
    outcome, value, error, calibration, limit, width, false_positive : str
        Outcome word, measured value, its error in the decision, its further error, limit, width of the limit, and
        probability of a spurious detection.
    selected_as : str
        The inclusion word of stars observed because of this channel.
    """

    outcome: str
    value: str
    error: str
    calibration: str
    limit: str
    width: str
    false_positive: str
    selected_as: str


def _text(name: str, meaning: str, *, words: tuple[str, ...] = (), default: str = "") -> Column:
    return Column(name, "text", None, meaning, words=words, default=default)


def _measured(name: str, unit: str, meaning: str, *, logarithm: bool = False) -> tuple[Column, Column]:
    """A stellar property and its error."""
    bound: Bound = "finite" if logarithm else "positive"
    return (
        Column(name, "number", unit, meaning, bound=bound, logarithm=logarithm),
        Column(f"{name}_err", "number", "dex" if logarithm else unit, f"error of {name}", bound="positive"),
    )


def _channel(outcome: str, value: str, unit: str, noun: str) -> tuple[Column, ...]:
    """The columns of one channel."""
    return (
        _text(outcome, f"outcome of the {outcome} channel", words=OUTCOMES, default="unobserved"),
        Column(value, "number", unit, f"log10 of the measured {noun}", logarithm=True),
        Column(f"{value}_err", "number", "dex", f"error of {value} that took part in the decision", bound="positive"),
        Column(
            f"{value}_calibration_err",
            "number",
            "dex",
            f"error of {value} that took no part in the decision",
            bound="non-negative",
            default=0.0,
        ),
        Column(f"{value}_limit", "number", unit, f"log10 of the smallest detectable {noun}", logarithm=True),
        Column(f"{value}_width", "number", "dex", f"width of {value}_limit for this star", bound="positive"),
        Column(
            f"{outcome}_false_positive",
            "number",
            "",
            f"probability of a spurious detection in the {outcome} channel",
            bound="probability",
        ),
    )


def _input(name: str, unit: str, meaning: str, bound: Bound = "finite", logarithm: bool = False) -> Column:
    return Column(name, "number", unit, meaning, bound=bound, logarithm=logarithm, conversion=True)


_ALL: tuple[Column, ...] = (
    _text("star", "identifier of the star"),
    _text("survey", "survey the star belongs to"),
    _text("inclusion", "why the star is in the sample", words=INCLUSIONS, default="blind"),
    _text("atmosphere", "main element of the atmosphere", words=ATMOSPHERES, default="H"),
    *_measured("teff", "K", "effective temperature"),
    *_measured("logg", "dex(cm / s2)", "log10 of the surface gravity", logarithm=True),
    *_measured("mass", "Msun", "mass of the white dwarf"),
    *_measured("cooling_age", "Gyr", "time since the star became a white dwarf"),
    *_measured("progenitor_mass", "Msun", "mass of the progenitor"),
    Column("distance", "number", "pc", "distance", bound="positive"),
    *_channel("pollution", "log_accretion", "dex(g / s)", "accretion rate"),
    Column(
        "selection_limit", "number", "dex(g / s)", "limit of the observation that selected the star", logarithm=True
    ),
    Column("selection_width", "number", "dex", "width of selection_limit", bound="positive"),
    *_channel("excess", "log_dust", "dex", "ratio of dust to stellar luminosity"),
    Column("element", "text", None, "element that was measured", default="", conversion=True),
    _input("log_abundance", "dex", "log10 of the number abundance, relative to H or He", logarithm=True),
    _input("log_abundance_err", "dex", "error of log_abundance", "positive"),
    _input("log_abundance_limit", "dex", "smallest detectable log_abundance", logarithm=True),
    _input("ew_limit", "mAngstrom", "smallest detectable equivalent width", "positive"),
    _input("snr", "", "signal-to-noise ratio per pixel", "positive"),
    _input("resolution", "", "resolving power of the spectrum", "positive"),
)

#: every column with a fixed name, in the order in which tables are written
COLUMNS: dict[str, Column] = {column.name: column for column in _ALL}

_BANDS = (
    (re.compile(r"flux_err_(?P<band>\w+)"), "error of the flux in {band}", "positive"),
    (re.compile(r"flux_(?P<band>\w+)"), "flux in {band}", "finite"),
    (re.compile(r"photosphere_(?P<band>\w+)"), "flux of the photosphere in {band}", "positive"),
)


def _channel_columns(outcome: str, value: str, selected_as: str) -> ChannelColumns:
    return ChannelColumns(
        outcome=outcome,
        value=value,
        error=f"{value}_err",
        calibration=f"{value}_calibration_err",
        limit=f"{value}_limit",
        width=f"{value}_width",
        false_positive=f"{outcome}_false_positive",
        selected_as=selected_as,
    )


#: the two channels and their columns
CHANNELS: dict[str, ChannelColumns] = {
    "pollution": _channel_columns("pollution", "log_accretion", "known-polluted"),
    "excess": _channel_columns("excess", "log_dust", "known-dusty"),
}


def find_column(name: str) -> Column | None:
    """Return the known column of this name, photometric bands included.

    Parameters
    ----------
    name : str
        A column's name.

    Returns
    -------
    Column or None
        None where the name is not known.
    """
    if name in COLUMNS:
        return COLUMNS[name]
    for pattern, meaning, bound in _BANDS:
        match = pattern.fullmatch(name)
        if match:
            return _input(name, "mJy", meaning.format(band=match["band"]), bound)  # type: ignore[arg-type]
    return None


def sample_columns() -> tuple[Column, ...]:
    """Return the columns that every `Sample.table` holds, in order.

    Returns
    -------
    tuple of Column
        All columns but those that only feed a conversion.
    """
    return tuple(column for column in _ALL if not column.conversion)
