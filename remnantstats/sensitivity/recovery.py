"""Injection–recovery tables: the efficiency of the true value, as counts."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
import scipy.linalg
import scipy.optimize
import scipy.special
import scipy.stats

from ..errors import Fault, InputError, nearest

__all__ = ["EfficiencyFit", "RecoveryTable", "fit_efficiency", "read_recovery"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

#: chance below which a fall of the efficiency with rate is no accident of counting
_FALLS = 1e-3
#: class tables with more classes than this would be too many parameters
_MOST_CLASSES = 20


@dataclass(frozen=True)
class RecoveryTable:
    """Counts of injected and recovered signals.

    Attributes
    ----------
    by : {"all", "class", "star"}
        What a label stands for: every star, the stars of a survey, one star.
    labels : tuple of str
        Distinct labels, sorted; one empty label for "all".
    label : ndarray of int, shape (m,)
        Index of each row's label.
    value : ndarray, shape (m,)
        True log value injected.
    injected, recovered : ndarray of int, shape (m,)
    source : str
        File, for messages.
    """

    by: Literal["all", "class", "star"]
    labels: tuple[str, ...]
    label: IntArray
    value: FloatArray
    injected: IntArray
    recovered: IntArray
    source: str

    def of(self, index: int) -> tuple[FloatArray, IntArray, IntArray]:
        """Values, injected and recovered counts of one label."""
        rows = self.label == index
        return self.value[rows], self.injected[rows], self.recovered[rows]


@dataclass(frozen=True)
class EfficiencyFit:
    """Best fit of c Φ((x − L)/w) to the counts of one label, with its normal approximation.

    Attributes
    ----------
    limit, width, ceiling : float
    limit_error : float
        dex, standard error of the midpoint, width and ceiling being free.
    """

    limit: float
    width: float
    ceiling: float
    limit_error: float


def read_recovery(path: Path, value: str) -> RecoveryTable:
    """Read a table of injection and recovery.

    Parameters
    ----------
    path : pathlib.Path
        CSV with columns `value` (by its own name, `log_accretion` or `log_dust`), `n_injected`, `n_recovered`, and
        optionally `class` (a survey of the sample) or `star`.
    value : str
        Name of the value's column.

    Returns
    -------
    RecoveryTable

    Raises
    ------
    InputError
        For an absent file, a missing or unknown column, counts that are none, more recovered than injected, or an
        efficiency that falls with rate; with the rows named.
    """
    if not path.is_file():
        raise InputError(
            Fault(
                "the efficiency table does not exist",
                where=str(path),
                found="no such file",
                allowed="a CSV file; the path is relative to the study file",
                remedy="check efficiency_table",
            )
        )
    try:
        frame = pd.read_csv(path, dtype=str, keep_default_na=False, encoding="utf-8-sig")
    except (ValueError, UnicodeDecodeError, OSError) as error:
        raise InputError(
            Fault("the efficiency table cannot be read", where=str(path), found=str(error)[:120], allowed="a CSV file")
        ) from error
    _check_columns(frame, path, value)
    numbers = {name: _numbers(frame, path, name) for name in (value, "n_injected", "n_recovered")}
    injected, recovered = numbers["n_injected"], numbers["n_recovered"]
    _refuse(path, (injected <= 0) | (injected % 1 != 0), "n_injected", injected, "whole numbers above zero")
    wrong = (recovered < 0) | (recovered > injected) | (recovered % 1 != 0)
    _refuse(path, wrong, "n_recovered", recovered, "whole numbers from 0 to n_injected")
    by: Literal["all", "class", "star"] = "star" if "star" in frame else "class" if "class" in frame else "all"
    text = frame[by].to_numpy(dtype=str) if by != "all" else np.full(len(frame), "")
    labels, index = np.unique(text, return_inverse=True)
    table = RecoveryTable(
        by, tuple(map(str, labels)), index.astype(np.int64), numbers[value], injected.astype(np.int64),
        recovered.astype(np.int64), str(path),
    )
    if by == "class" and len(labels) > _MOST_CLASSES:
        raise InputError(
            Fault("too many classes", where=str(path), found=str(len(labels)), allowed=f"at most {_MOST_CLASSES}",
                  remedy="give one table a star, with a column 'star'")
        )
    _refuse_falling(table)
    return table


def _check_columns(frame: pd.DataFrame, path: Path, value: str) -> None:
    known = [value, "n_injected", "n_recovered", "class", "star"]
    faults = [
        Fault(f"the efficiency table has no column '{name}'", where=str(path), found=", ".join(map(str, frame.columns)),
              remedy=f"add '{name}'")
        for name in known[:3]
        if name not in frame
    ]
    faults += [
        Fault(f"unknown column '{name}'", where=str(path), remedy=nearest(str(name), known))
        for name in frame.columns
        if name not in known
    ]
    if "class" in frame and "star" in frame:
        faults.append(Fault("give 'class' or 'star', not both", where=str(path), remedy="drop one of the two columns"))
    if not faults and not len(frame):
        faults.append(Fault("the efficiency table has no rows", where=str(path), remedy="add rows"))
    if faults:
        raise InputError(*faults)


def _numbers(frame: pd.DataFrame, path: Path, name: str) -> FloatArray:
    values: FloatArray = pd.to_numeric(frame[name], errors="coerce").to_numpy(dtype=np.float64)
    _refuse(path, ~np.isfinite(values), name, frame[name].to_numpy(), "a finite number")
    return values


def _refuse(path: Path, bad: npt.NDArray[np.bool_], column: str, found: npt.NDArray[np.generic], allowed: str) -> None:
    rows = np.flatnonzero(bad)
    if rows.size:
        raise InputError(
            *[
                Fault("a cell of the efficiency table is not valid", where=f"{path}, row {row + 1}, column '{column}'",
                      found=str(found[row]), allowed=allowed, remedy="correct the cell")
                for row in rows
            ]
        )


def _refuse_falling(table: RecoveryTable) -> None:
    """Refuse counts whose efficiency falls with rate by more than chance allows."""
    faults = []
    for index, label in enumerate(table.labels):
        rows = np.flatnonzero(table.label == index)
        rows = rows[np.argsort(table.value[rows], kind="stable")]
        for low, high in itertools.pairwise(rows):
            counts = [[table.recovered[row], table.injected[row] - table.recovered[row]] for row in (low, high)]
            if table.value[high] > table.value[low] and _falls(counts):
                name = f"{table.by} '{label}', " if label else ""
                share = [table.recovered[row] / table.injected[row] for row in (low, high)]
                faults.append(
                    Fault(
                        "the efficiency falls with rate",
                        where=f"{table.source}, {name}rows {low + 1} and {high + 1}",
                        found=f"{share[0]:.3f} at {table.value[low]:g}, {share[1]:.3f} at {table.value[high]:g}",
                        allowed="an efficiency that does not fall with rate, to counting error",
                        remedy="check the two rows; a true fall cannot be described by this efficiency curve",
                    )
                )
    if faults:
        raise InputError(*faults)


def _falls(counts: list[list[int]]) -> bool:
    return bool(scipy.stats.fisher_exact(counts, alternative="greater").pvalue < _FALLS)


def _curvature(function: Callable[[FloatArray], float], point: FloatArray, step: float = 1e-3) -> FloatArray:
    """Second derivatives by central differences."""
    steps = step * np.eye(len(point))
    return np.array(
        [
            [
                sum(i * j * function(point + i * one + j * two) for i in (1, -1) for j in (1, -1)) / (4 * step**2)
                for two in steps
            ]
            for one in steps
        ]
    )


def fit_efficiency(value: FloatArray, injected: IntArray, recovered: IntArray) -> EfficiencyFit:
    """Fit c Φ((x − L)/w) to counts by maximum posterior, with weak priors that keep a thin table finite.

    Parameters
    ----------
    value : ndarray, shape (m,)
    injected, recovered : ndarray of int, shape (m,)

    Returns
    -------
    EfficiencyFit
    """
    middle, reach = float(np.median(value)), max(float(np.ptp(value)), 0.5)

    def loss(p: FloatArray) -> float:
        limit, log_width, logit = p
        chance = scipy.special.expit(logit) * scipy.special.ndtr((value - limit) / np.exp(log_width))
        chance = np.clip(chance, 1e-12, 1 - 1e-12)
        counts = np.sum(recovered * np.log(chance) + (injected - recovered) * np.log1p(-chance))
        prior = ((limit - middle) / (2 * reach)) ** 2 + ((log_width - np.log(0.2)) / 1.0) ** 2
        ceiling = scipy.special.log_expit(logit) + scipy.special.log_expit(-logit)
        return float(-counts + 0.5 * prior - ceiling)

    share = recovered / injected
    start = np.array([float(np.interp(0.5 * share.max(), np.maximum.accumulate(share), value)), np.log(0.2), 2.0])
    found = scipy.optimize.minimize(loss, start, method="Nelder-Mead", options={"maxiter": 4000, "xatol": 1e-6})
    # the minimiser's own estimate of the curvature is not to be had: it starts from the unit matrix, and stops at once
    covariance = scipy.linalg.pinvh(_curvature(loss, found.x))
    error = float(np.sqrt(max(covariance[0, 0], 0.0)))
    limit, log_width, logit = found.x
    return EfficiencyFit(float(limit), float(np.exp(log_width)), float(scipy.special.expit(logit)), error)
