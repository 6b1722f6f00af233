"""The size of a mission, as tables and as files."""

from __future__ import annotations

import html
import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from ..errors import Fault, InputError
from ..files import write_text
from ..occurrence.settings import Assumption

__all__ = ["SCHEMA_VERSION", "MissionSize", "write_mission"]

#: version of the layout of `mission.json`
SCHEMA_VERSION = 1


@dataclass(frozen=True, repr=False)
class MissionSize:
    """How many targets a mission needs, how far and how big.

    Attributes
    ----------
    table : pandas.DataFrame
        A row a number of targets: `n_targets`, `p_at_least_one`, `expected`, `q05`, `q50`, `q95` (planets found),
        `mc_error` (of `p_at_least_one` as a mean over draws), `p_at_least_one_naive` (the product at the mean
        occurrence, which promises too much), `source` (``"draws"`` or the fitted density).
    needs : pandas.DataFrame
        A row a success level: `success`, `n_targets` (missing where not reached), `reached`, `p_at_limit` (chance of
        at least one at the last target), `n_targets_naive`.
    distances : pandas.DataFrame
        A row a neighbour: `k`, `q05`, `q50`, `q95` [pc], `aperture_q05`, `aperture_q50`, `aperture_q95` [m]; no rows
        without a density of candidate stars.
    order : pandas.DataFrame or None
        Of a target list, the order of observation: `rank`, `target`, `distance` [pc], `completeness`,
        `progenitor_mass` [Msun] where given, `gain` and `p_at_least_one`.
    probability_zero : float
        Share of the draws in which no star has the planet sought.
    assumptions : tuple of Assumption
        Every factor with its basis, those of the occurrence prior first.
    notes, marks : tuple of str
        What a reader should know; what every output must be marked with.
    """

    table: pd.DataFrame
    needs: pd.DataFrame
    distances: pd.DataFrame
    order: pd.DataFrame | None
    probability_zero: float
    assumptions: tuple[Assumption, ...]
    notes: tuple[str, ...] = ()
    marks: tuple[str, ...] = ()

    def needed(self, level: float) -> int | None:
        """Return the smallest number of targets that finds at least one planet with probability `level`.

        Parameters
        ----------
        level : float
            In (0, 1).

        Returns
        -------
        int or None
            None where the last target is reached before; see `limit` for why.

        Raises
        ------
        InputError
            Where `level` is not a probability between 0 and 1.
        """
        if not 0 < level < 1:
            raise InputError(
                Fault("this is not a success level", found=repr(level), allowed="0 < level < 1", remedy="change it")
            )
        return first_reaching(self.table["p_at_least_one"], level)

    def limit(self) -> str:
        """Return in words what the last target reaches."""
        last = self.table.iloc[-1]
        text = f"{int(last['n_targets'])} targets find at least one with probability {last['p_at_least_one']:.4g}"
        if self.probability_zero > 0:
            text += f"; with probability {self.probability_zero:.3g} there is none to be found"
        return text

    def __repr__(self) -> str:
        lines = ["MissionSize"]
        for row in self.needs.itertuples():
            if row.reached:
                lines.append(f"  {row.success:.4g}: {row.n_targets} targets")
            else:
                lines.append(f"  {row.success:.4g}: not reached; {self.limit()}")
        return "\n".join(lines + [f"  {text}" for text in (*self.marks, *self.notes)])

    def _repr_html_(self) -> str:
        tables = "".join(
            table.to_html(index=False, float_format=lambda value: f"{value:.4g}")
            for table in (self.needs, self.distances)
            if len(table)
        )
        return f"<pre>{html.escape(repr(self))}</pre>{tables}"


def first_reaching(chances: pd.Series, level: float) -> int | None:
    """Return the smallest number of targets at which `chances` reaches `level`, or None."""
    reached = np.flatnonzero(chances.to_numpy() >= level)
    return int(reached[0]) + 1 if reached.size else None


def write_mission(size: MissionSize, folder: Path, marks: Sequence[str] = ()) -> tuple[Path, Path]:
    """Write `mission.csv` and `mission.json` to `folder`, each whole or not at all.

    Parameters
    ----------
    size : MissionSize
        The result.
    folder : pathlib.Path
        Made where missing.
    marks : sequence of str, optional
        What the files must be marked with, beside the result's own marks.

    Returns
    -------
    tuple of pathlib.Path
        The CSV and the JSON file.

    Raises
    ------
    InputError
        Where the files cannot be written.
    """
    marked = list(dict.fromkeys((*size.marks, *marks)))
    as_csv, as_json = folder / "mission.csv", folder / "mission.json"
    table = size.table.assign(mark="; ".join(marked)) if marked else size.table
    write_text(as_csv, table.to_csv(index=False, lineterminator="\n"))
    content = {
        "schema_version": SCHEMA_VERSION,
        "kind": "mission_size",
        "marks": marked,
        "needs": _records(size.needs),
        "limit": size.limit(),
        "probability_zero": size.probability_zero,
        "distances": _records(size.distances),
        "order": None if size.order is None else _records(size.order),
        "table": _records(size.table),
        "assumptions": [item._asdict() for item in size.assumptions],
        "notes": list(size.notes),
    }
    write_text(as_json, json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n")
    return as_csv, as_json


def _records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Rows as JSON can hold them: what is missing or infinite becomes null."""
    return [
        {str(key): _plain(value) for key, value in row.items()}
        for row in table.astype(object).to_dict(orient="records")
    ]


def _plain(value: Any) -> Any:
    if value is None or value is pd.NA:
        return None
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value
