"""From an occurrence prior to the number of targets that a mission needs."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from ..errors import Fault, InputError
from ..occurrence.prior import OccurrencePrior
from .chances import NoneFound, none_found, planets_found
from .distances import nearest_hosts
from .result import MissionSize, first_reaching
from .settings import MissionSettings, parse_mission
from .targets import read_targets

__all__ = ["size_mission"]

FloatArray = npt.NDArray[np.float64]


def size_mission(prior: OccurrencePrior, mission: MissionSettings | Mapping[str, Any]) -> MissionSize:
    """Size a mission that looks for the planet sought.

    The probability of finding none is E[Π (1 − η h c_j)], the expectation over the occurrence prior, with c_j the
    completeness at target j. Listed targets are observed by falling completeness, then by rising distance.

    Parameters
    ----------
    prior : OccurrencePrior
        Draws of the share of stars with the planet sought.
    mission : MissionSettings or mapping
        The mission, or its `[mission]` table as a dictionary.

    Returns
    -------
    MissionSize
        The same for the same input: nothing is drawn at random.

    Raises
    ------
    InputError
        Where the mission or its target list is not valid.
    """
    if not isinstance(mission, MissionSettings):
        mission = parse_mission(mission, "mission", Path())
    occurrence = prior.values("earthlike_fraction")
    order = None if mission.targets is None else _order(read_targets(mission.targets, mission.completeness))
    completeness = _completeness(mission, order)
    none = none_found(occurrence, completeness, prior.effective_draws)
    table = _table(none, occurrence, completeness)
    if order is not None:
        chances = table["p_at_least_one"].to_numpy()
        order = order.assign(gain=np.diff(chances, prepend=0.0), p_at_least_one=chances)
    zero = float(np.mean(occurrence == 0))
    return MissionSize(
        table=table,
        needs=_needs(table, mission.success),
        distances=nearest_hosts(occurrence, mission),
        order=order,
        probability_zero=zero,
        assumptions=(*prior.assumptions, *mission.assumptions(completeness)),
        notes=_notes(none, mission, order, zero),
        marks=prior.marks,
    )


def _order(targets: pd.DataFrame) -> pd.DataFrame:
    """Targets in the order of observation."""
    ordered = targets.sort_values(["completeness", "distance"], ascending=[False, True], kind="stable")
    ordered = ordered.reset_index(drop=True)
    ordered.insert(0, "rank", np.arange(1, len(ordered) + 1))
    return ordered


def _completeness(mission: MissionSettings, order: pd.DataFrame | None) -> FloatArray:
    if order is not None:
        return np.asarray(order["completeness"], dtype=float)
    if mission.completeness is None:
        raise InputError(
            Fault(
                "neither a completeness nor a target list is given",
                where="key 'mission.completeness'",
                allowed="a number in (0, 1]",
                remedy="add 'completeness' or 'targets'",
            )
        )
    return np.full(mission.max_targets, mission.completeness)


def _table(none: NoneFound, occurrence: FloatArray, completeness: FloatArray) -> pd.DataFrame:
    """A row a number of targets."""
    low, middle, high = planets_found(occurrence, completeness).T
    return pd.DataFrame(
        {
            "n_targets": np.arange(1, completeness.size + 1),
            "p_at_least_one": 1.0 - none.probability,
            "expected": occurrence.mean() * np.cumsum(completeness),
            "q05": low,
            "q50": middle,
            "q95": high,
            "mc_error": none.error,
            "p_at_least_one_naive": 1.0 - none.naive,
            "source": np.where(none.from_draws, "draws", none.fit),
        }
    )


def _needs(table: pd.DataFrame, success: list[float]) -> pd.DataFrame:
    """A row a success level."""
    needed = [first_reaching(table["p_at_least_one"], level) for level in success]
    naive = [first_reaching(table["p_at_least_one_naive"], level) for level in success]
    return pd.DataFrame(
        {
            "success": success,
            "n_targets": pd.array(needed, dtype="Int64"),
            "reached": [number is not None for number in needed],
            "p_at_limit": float(table["p_at_least_one"].iloc[-1]),
            "n_targets_naive": pd.array(naive, dtype="Int64"),
        }
    )


def _notes(none: NoneFound, mission: MissionSettings, order: pd.DataFrame | None, zero: float) -> tuple[str, ...]:
    notes = []
    if order is not None:
        notes.append("targets are observed by falling completeness, then by rising distance")
    if not np.all(none.from_draws):
        first = int(np.argmin(none.from_draws)) + 1
        notes.append(
            f"from {first} targets on the draws' Monte Carlo error of the chance of finding none exceeds 5 %: "
            f"there it comes from a {none.fit}"
        )
    if zero > 0:
        notes.append(
            f"with probability {zero:.3g} no star has the planet sought; "
            "quantiles of distance beyond that are infinite (null in mission.json)"
        )
    if mission.density is not None:
        notes.append("distances are quantiles: their mean does not exist where the occurrence may be very near zero")
    return tuple(notes)
