"""The sample as the likelihood reads it: weighted rows, parted into blocks that share one formula."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..catalog import Sample
from ..errors import Fault, InputError
from ..sensitivity import CHANNELS, DetectionCurve

__all__ = ["Block", "ChannelRows", "LatentCovariate", "Rows", "blocks", "rows_of"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

UNOBSERVED, LIMIT, DETECTED, DOUBTFUL = "unobserved", "limit", "detected", "doubtful"


@dataclass(frozen=True)
class ChannelRows:
    """One channel of the rows; every array has shape (n,).

    Attributes
    ----------
    outcome : ndarray of str
        "unobserved", "limit", "detected" (surely genuine) or "doubtful" (genuine or spurious).
    value, error, calibration : ndarray
        Measured value, the error that took part in the decision, and the one that did not; NaN where not detected.
    limit, width : ndarray
        Midpoint of the efficiency and its width; NaN where not needed.
    false_positive : ndarray
        Probability that a star not genuinely detected is listed as detected.
    selection_limit, selection_width : ndarray
        The observation that put the star in the sample; NaN for blind stars.
    same : ndarray of bool
        The tabulated detection is itself the selecting observation.
    ceiling : float, or ndarray of shape (n,)
    recovery : ndarray of int, shape (n,)
        Index of the row's class in an injection–recovery table whose efficiency is inferred; −1 where there is none.
    spurious_scale : float
    threshold_on : str
    """

    outcome: npt.NDArray[np.str_]
    value: FloatArray
    error: FloatArray
    calibration: FloatArray
    limit: FloatArray
    width: FloatArray
    false_positive: FloatArray
    selection_limit: FloatArray
    selection_width: FloatArray
    same: BoolArray
    ceiling: float | FloatArray
    spurious_scale: float
    threshold_on: str
    recovery: IntArray | None = None

    def take(self, index: IntArray) -> ChannelRows:
        """The rows at `index`."""
        taken: ChannelRows = _take(self, index)
        return taken

    @property
    def decision(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Slope, offset and variance of the decision variable given true and tabulated value.

        "true": the decision looks at the true value, with spread `width`. "measured" with a calibration error e on top
        of the error s: the value on which the decision was taken is, given the true x and the tabulated x̂, normal with
        mean (x e² + x̂ s²)/(s² + e²) and variance s²e²/(s² + e²).
        """
        if self.threshold_on == "true":
            return np.ones_like(self.limit), -self.limit, self.width**2
        noise, further = self.error**2, self.calibration**2
        total = noise + further
        return further / total, self.value * noise / total - self.limit, noise * further / total

    @property
    def decided(self) -> BoolArray:
        """Whether a detected row carries a factor for its decision (else it is certain given the value)."""
        return np.full(self.value.shape, True) if self.threshold_on == "true" else self.calibration > 0

    @property
    def log_spurious(self) -> FloatArray:
        """Log of q times the density of a spurious value; −inf where none is possible."""
        above = self.value - self.limit
        scale = self.spurious_scale
        with np.errstate(divide="ignore", invalid="ignore"):
            density = 0.5 * np.log(2 / np.pi) - np.log(scale) - 0.5 * (above / scale) ** 2
            return np.where(above > 0, np.log(self.false_positive) + density, -np.inf)


@dataclass(frozen=True)
class LatentCovariate:
    """A covariate known with error, to be integrated over.

    Attributes
    ----------
    name : str
        The covariate.
    estimate, error : ndarray, shape (n,)
        Centred estimate and its standard error, for a population that is normal with free mean and spread.
    nodes, log_weights : ndarray, shape (n, K), or None
        Fixed nodes and weights of the star's own posterior, where the population is given.
    """

    name: str
    estimate: FloatArray
    error: FloatArray
    nodes: FloatArray | None = None
    log_weights: FloatArray | None = None

    def take(self, index: IntArray) -> LatentCovariate:
        """The rows at `index`."""
        taken: LatentCovariate = _take(self, index)
        return taken


@dataclass(frozen=True)
class Rows:
    """Weighted rows.

    Attributes
    ----------
    star : ndarray of int, shape (n,)
        Position in the sample's table.
    weight : ndarray, shape (n,)
        How many stars the row stands for.
    blind : ndarray of bool, shape (n,)
    helium : ndarray of bool, shape (n,)
    group : ndarray of int, shape (n,)
        Index of the star's group; zero where the model has none.
    covariates : mapping of str to ndarray, shape (n,)
        Centred on the mean of the blind stars.
    latent : LatentCovariate or None
    channels : mapping of str to ChannelRows
    """

    star: IntArray
    weight: FloatArray
    blind: BoolArray
    helium: BoolArray
    group: IntArray
    covariates: Mapping[str, FloatArray] = field(default_factory=dict)
    latent: LatentCovariate | None = None
    channels: Mapping[str, ChannelRows] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.star)

    def take(self, index: IntArray) -> Rows:
        """The rows at `index`."""
        return replace(
            self,
            star=self.star[index],
            weight=self.weight[index],
            blind=self.blind[index],
            helium=self.helium[index],
            group=self.group[index],
            covariates={name: z[index] for name, z in self.covariates.items()},
            latent=None if self.latent is None else self.latent.take(index),
            channels={name: rows.take(index) for name, rows in self.channels.items()},
        )


@dataclass(frozen=True)
class Block:
    """Rows that share one formula.

    Attributes
    ----------
    rows : Rows
    outcome : mapping of str to str
        Outcome of each channel, the same for every row.
    decided : mapping of str to bool
        Whether a detection of that channel carries a factor for its decision.
    selected_by : str
        "" for blind stars, else the channel whose detection put the stars in the sample.
    same : bool
        The selecting observation is the tabulated one.
    """

    rows: Rows
    outcome: Mapping[str, str]
    decided: Mapping[str, bool]
    selected_by: str
    same: bool

    @property
    def decisions(self) -> int:
        """Most decisions that one of its terms carries."""
        undecided = [
            value in (LIMIT, DOUBTFUL) or (value == DETECTED and self.decided[name])
            for name, value in self.outcome.items()
        ]
        return sum(undecided) + (self.selected_by != "")


def _take(item: Any, index: IntArray) -> Any:
    """Index every array of a dataclass along its first axis."""
    changes = {
        entry.name: getattr(item, entry.name)[index]
        for entry in fields(item)
        if isinstance(getattr(item, entry.name), np.ndarray)
    }
    return replace(item, **changes)


def blocks(rows: Rows) -> Iterator[Block]:
    """Part rows into blocks.

    Parameters
    ----------
    rows : Rows

    Yields
    ------
    Block
        Rows unobserved in every channel are left out: they carry no information on the population.
    """
    names = list(rows.channels)
    keys = np.where(rows.blind, "blind", "known").astype(object)
    for name in names:
        channel = rows.channels[name]
        selected = np.isfinite(channel.selection_limit) & ~rows.blind
        flags = np.where(channel.decided, "+", "-").astype(object)
        flags[~np.isin(channel.outcome, (DETECTED, DOUBTFUL))] = "-"
        chosen = np.where(selected, np.where(channel.same, "same", "sel"), "").astype(object)
        keys = keys + "|" + channel.outcome.astype(object) + "," + flags + "," + chosen
    for key in sorted(set(keys)):
        yield from _block(rows.take(np.flatnonzero(keys == key)), key, names)


def _block(rows: Rows, key: str, names: list[str]) -> Iterator[Block]:
    inclusion, *parts = key.split("|")
    split = {name: part.split(",") for name, part in zip(names, parts, strict=True)}
    outcome = {name: item[0] for name, item in split.items()}
    selected = [name for name, item in split.items() if item[2]]
    if all(value == UNOBSERVED for value in outcome.values()) or (inclusion == "known" and not selected):
        return
    yield Block(
        rows=rows,
        outcome=outcome,
        decided={name: item[1] == "+" for name, item in split.items()},
        selected_by=selected[0] if selected else "",
        same=any(item[2] == "same" for item in split.values()),
    )


def rows_of(
    sample: Sample,
    curves: Mapping[str, DetectionCurve],
    covariates: Mapping[str, FloatArray],
    latent: LatentCovariate | None,
    group: IntArray,
) -> Rows:
    """Lay out a sample as rows of weight one.

    Parameters
    ----------
    sample : Sample
    curves : mapping of str to DetectionCurve
        Detection curves of the channels in use.
    covariates : mapping of str to ndarray, shape (n,)
        Centred covariates.
    latent : LatentCovariate or None
    group : ndarray of int, shape (n,)

    Returns
    -------
    Rows

    Raises
    ------
    InputError
        For a star selected by a channel that the study does not use.
    """
    table = sample.table
    size = len(table)
    inclusion = table["inclusion"].to_numpy(dtype=str)
    known = {CHANNELS[name].known for name in curves}
    odd = np.flatnonzero((inclusion != "blind") & ~np.isin(inclusion, sorted(known)))
    if odd.size:
        raise InputError(
            Fault(
                f"{odd.size} stars were selected by a channel that this study does not use",
                where=f"star {table['star'].iloc[odd[0]]}, column 'inclusion'",
                found=str(inclusion[odd[0]]),
                allowed=", ".join(["blind", *sorted(known)]),
                remedy="add that channel to the study and the model, or leave these stars out",
            )
        )
    return Rows(
        star=np.arange(size),
        weight=np.ones(size),
        blind=inclusion == "blind",
        helium=table["atmosphere"].to_numpy(dtype=str) == "He",
        group=group,
        covariates=covariates,
        latent=latent,
        channels={name: _channel_rows(sample, name, curve, inclusion) for name, curve in curves.items()},
    )


def _channel_rows(
    sample: Sample, channel: str, curve: DetectionCurve, inclusion: npt.NDArray[np.str_]
) -> ChannelRows:
    names, table = CHANNELS[channel], sample.table
    listed = table[names.name].to_numpy(dtype=str)
    value = table[names.value].to_numpy(dtype=float)
    selected = inclusion == names.known
    quoted = table[names.limit].to_numpy(dtype=float)
    selection_limit = np.where(selected, table["selection_limit"].to_numpy(dtype=float), np.nan)
    width = np.where(np.isnan(curve.width), 1.0, curve.width)
    own_width = table["selection_width"].to_numpy(dtype=float)
    same = selected & (listed == DETECTED) & (selection_limit == quoted) & (curve.threshold_on == "measured")
    false_positive = np.where(selected, 0.0, curve.false_positive)
    with np.errstate(invalid="ignore"):
        doubtful = (listed == DETECTED) & (false_positive > 0) & (value > curve.limit)
    return ChannelRows(
        outcome=np.where(doubtful, DOUBTFUL, listed),
        value=value,
        error=table[names.error].to_numpy(dtype=float),
        calibration=np.nan_to_num(table[names.calibration].to_numpy(dtype=float)),
        limit=curve.limit,
        width=width,
        false_positive=false_positive,
        selection_limit=np.where(same, curve.limit, selection_limit),
        selection_width=np.where(np.isnan(own_width), width, own_width),
        same=same,
        ceiling=curve.ceiling,
        spurious_scale=curve.spurious_scale,
        threshold_on=curve.threshold_on,
    )
