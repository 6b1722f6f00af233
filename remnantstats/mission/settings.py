"""The `[mission]` table of a study, or of a file of its own."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

import numpy as np
import numpy.typing as npt
from pydantic import Field, field_validator

from ..errors import Fault, InputError, nearest
from ..fields import Settings, parse_settings, read_toml
from ..occurrence.settings import NO_BASIS, Assumption
from ..population.distributions import Number, Positive
from .targets import read_targets

__all__ = ["LARGEST_MISSION", "MissionSettings", "load_mission", "parse_mission"]

#: most targets that a mission may have
LARGEST_MISSION = 10_000

_MEANING = {
    "completeness": "completeness: chance that a planet sought is found at a target that has one: {}",
    "targets": "target list: {}",
    "density": "density of candidate stars: {:g} per cubic parsec",
    "planet_separation": "separation of planet and star: {:g} au, seen at greatest elongation",
    "wavelength": "wavelength: {:g} µm",
    "inner_working_angle": "inner working angle: {:g} λ/D",
}
_APERTURE = ("planet_separation", "wavelength", "inner_working_angle")


class MissionSettings(Settings):
    """What a mission is asked for and what it can do.

    Parameters
    ----------
    success : list of float
        Chances of finding at least one planet, each in (0, 1), for which a number of targets is wanted.
    completeness : float or None
        Chance in (0, 1] that a planet sought is found at a target that has one; None where the target list gives it.
    targets : str or None
        Path of a target list.
    max_targets : int
        Most targets considered without a list, 1 to 10,000.
    density : float or None
        Candidate stars per cubic parsec, for the distances to the nearest hosts.
    planet_separation, wavelength, inner_working_angle : float or None
        In au, µm and λ/D; all three are needed for the aperture.
    basis : dict
        Source or reason of each factor, by its key.
    """

    success: list[Annotated[Number, Field(gt=0, lt=1)]] = Field(default=[0.9, 0.95, 0.99], min_length=1, max_length=50)
    completeness: Annotated[Number, Field(gt=0, le=1)] | None = None
    targets: str | None = None
    max_targets: Annotated[int, Field(ge=1, le=LARGEST_MISSION)] = 500
    density: Positive | None = None
    planet_separation: Positive | None = None
    wavelength: Positive | None = None
    inner_working_angle: Positive | None = None
    basis: dict[str, str] = Field(default={})

    @field_validator("basis")
    @classmethod
    def _known(cls, value: dict[str, str]) -> dict[str, str]:
        for key in value:
            if key not in _MEANING:
                hint = nearest(key, [*_MEANING])
                raise ValueError(f"the keys of this table are factors of [mission]; '{key}': {hint}")
        return value

    @property
    def gives_aperture(self) -> bool:
        """Whether an aperture can be computed."""
        return all(getattr(self, key) is not None for key in ("density", *_APERTURE))

    def assumptions(self, completeness: npt.ArrayLike | None = None) -> list[Assumption]:
        """Return every factor that is set, with its basis.

        Parameters
        ----------
        completeness : array_like, optional
            Of the targets; where they differ, they are the target list's own and the common value was not used.

        Returns
        -------
        list of Assumption
        """
        values = {key: getattr(self, key) for key in _MEANING}
        if self.targets is not None and completeness is not None and np.any(completeness != self.completeness):
            low, high = np.min(completeness), np.max(completeness)
            values["completeness"] = f"from the target list, {low:g} to {high:g}"
        return [
            Assumption(key, text.format(values[key]), self.basis.get(key, "").strip() or NO_BASIS)
            for key, text in _MEANING.items()
            if values[key] is not None
        ]


def parse_mission(data: Any, where: str, folder: Path) -> MissionSettings:
    """Read the `[mission]` table, and its target list to see that it is sound.

    Parameters
    ----------
    data : dict
        What TOML gave.
    where : str
        The file, for messages.
    folder : pathlib.Path
        Folder to which the target list is relative; in the result its path is joined to it.

    Returns
    -------
    MissionSettings

    Raises
    ------
    InputError
        With every fault of the table, or of the target list.
    """
    if not isinstance(data, Mapping):
        raise InputError(
            Fault("this is not a table", where=f"{where}, key 'mission'", found=repr(data)[:80], allowed="[mission]")
        )
    mission = parse_settings(MissionSettings, dict(data), where, "mission")
    if mission.targets is None and mission.completeness is None:
        raise InputError(
            Fault(
                "neither a completeness nor a target list is given",
                where=f"{where}, key 'mission.completeness'",
                allowed="a number in (0, 1], or 'targets', a CSV file with a column completeness",
                remedy="add 'completeness' or 'targets'",
            )
        )
    given = [key for key in _APERTURE if getattr(mission, key) is not None]
    missing = [key for key in ("density", *_APERTURE) if getattr(mission, key) is None]
    if given and missing:
        raise InputError(
            Fault(
                "the aperture needs 'density', 'planet_separation', 'wavelength' and 'inner_working_angle' together",
                where=f"{where}, key 'mission.{missing[0]}'",
                found="given: " + ", ".join(given),
                remedy="add " + ", ".join(f"'{key}'" for key in missing) + ", or remove the others",
            )
        )
    if mission.targets is not None:
        path = folder / mission.targets
        read_targets(path, mission.completeness)
        mission = mission.model_copy(update={"targets": str(path)})
    return mission


def load_mission(path: Path | str) -> MissionSettings:
    """Read a mission file: a TOML file with a `[mission]` table, or with that table's keys at its top.

    Parameters
    ----------
    path : path
        The file.

    Returns
    -------
    MissionSettings

    Raises
    ------
    InputError
        As `parse_mission`.
    """
    path = Path(path)
    data = read_toml(path, "mission file")
    return parse_mission(data.get("mission", data), str(path), path.parent)
