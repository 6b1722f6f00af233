"""The study file: typed, and checked as a whole before anything is written."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, model_validator

from .catalog import ChannelRules, RowRules, SampleSettings
from .errors import Fault, InputError
from .fields import Settings, parse_settings, read_toml
from .mission import MissionSettings, parse_mission
from .occurrence import TransferSettings, parse_transfer
from .population import PopulationModel, load_model
from .population.covariates import column_of
from .population.distributions import Number
from .population.masses import PROGENITOR_MASS
from .population.quantities import Thresholds
from .sensitivity import CHANNELS, ChannelSettings, RecoveryTable, midpoint_shift, read_recovery

__all__ = ["Study", "load_study"]


class ModelSettings(Settings):
    """The `[model]` table."""

    name: str | list[str]
    groups: str | None = None
    atmospheres: list[Literal["H", "He"]] = Field(default=["H"], min_length=1)
    priors: dict[str, Any] = Field(default_factory=dict)
    stacking: bool = False

    @model_validator(mode="after")
    def _named(self) -> ModelSettings:
        if not self.names or not all(self.names):
            raise ValueError("the name of a model, or a list of names, none empty")
        if len(set(self.names)) < len(self.names):
            raise ValueError("each model once")
        if self.stacking and len(self.names) < 2:
            raise ValueError("stacking only with several models")
        return self

    @property
    def names(self) -> list[str]:
        """Names of the models, the first one leading."""
        return [self.name] if isinstance(self.name, str) else list(self.name)


class ThresholdSettings(Settings):
    """The `[thresholds]` table."""

    log_accretion: list[Number] = Field(default_factory=lambda: [6.0, 7.0, 8.0], max_length=50)
    log_dust: list[Number] = Field(default_factory=lambda: [-3.0], max_length=50)

    @model_validator(mode="after")
    def _once(self) -> ThresholdSettings:
        for values in (self.log_accretion, self.log_dust):
            if len(set(values)) < len(values):
                raise ValueError("each threshold once")
        return self


class OutputSettings(Settings):
    """The `[output]` table."""

    directory: Annotated[str, Field(min_length=1)] = "results"


class StudyFile(Settings):
    """The study file but for the tables that other rooms read."""

    title: Annotated[str, Field(min_length=1, max_length=500)]
    seed: Annotated[int, Field(ge=0, le=2**32 - 1)]
    sample: SampleSettings
    model: ModelSettings
    pollution: ChannelSettings | None = None
    excess: ChannelSettings | None = None
    thresholds: ThresholdSettings = Field(default_factory=ThresholdSettings)
    transfer: dict[str, Any] | None = None
    mission: dict[str, Any] | None = None
    output: OutputSettings = Field(default_factory=OutputSettings)


@dataclass(frozen=True)
class Study:
    """A study file, read and checked.

    Attributes
    ----------
    path : pathlib.Path
    file : StudyFile
    models : tuple of PopulationModel
        In the order of the file, priors overridden.
    transfer : TransferSettings or None
    mission : MissionSettings or None
    recoveries : mapping of str to RecoveryTable
        Injection–recovery counts, by channel.
    """

    path: Path
    file: StudyFile
    models: tuple[PopulationModel, ...]
    transfer: TransferSettings | None
    mission: MissionSettings | None
    recoveries: Mapping[str, RecoveryTable] = field(default_factory=dict)

    @property
    def folder(self) -> Path:
        """Folder to which paths in the study are relative."""
        return self.path.parent

    @property
    def output(self) -> Path:
        """Output directory that the file names."""
        return self.folder / self.file.output.directory

    @property
    def channels(self) -> dict[str, ChannelSettings]:
        """Channels in use; with neither table in the file, pollution by the default selection."""
        given = {"pollution": self.file.pollution, "excess": self.file.excess}
        found = {name: settings for name, settings in given.items() if settings is not None}
        return found or {"pollution": ChannelSettings()}

    @property
    def thresholds(self) -> Thresholds:
        """Values above which the fraction is reported."""
        return Thresholds(tuple(self.file.thresholds.log_accretion), tuple(self.file.thresholds.log_dust))

    @property
    def rules(self) -> RowRules:
        """What the study asks of each row of its sample."""
        rules = {
            name: ChannelRules(
                settings.threshold_on,
                settings.false_positive > 0,
                settings.width,
                midpoint_shift(settings),
                settings.efficiency_table is not None,
            )
            for name, settings in self.channels.items()
        }
        # a progenitor mass may also come from the remnant's mass: the model itself checks that
        needed = {item.name for model in self.models for item in model.covariates} - {PROGENITOR_MASS}
        covariates = {column_of(name) for name in needed}
        groups = self.file.model.groups or ("survey" if any(model.file.groups for model in self.models) else None)
        return RowRules(
            pollution=rules.get("pollution"),
            excess=rules.get("excess"),
            atmospheres=tuple(self.file.model.atmospheres),
            covariates=tuple(sorted(covariates)),
            groups=groups,
        )

    def fingerprint(self, model: PopulationModel, parts: Mapping[str, str]) -> str:
        """Hash of all that a fit depends on.

        Parameters
        ----------
        model : PopulationModel
        parts : mapping of str to str
            Hashes of the tables, the engine and the package version.
        """
        content = {
            "channels": {name: item.model_dump(mode="json") for name, item in self.channels.items()},
            "model": model.text,
            "priors": {name: prior.model_dump(mode="json") for name, prior in model.priors.items()},
            "settings": self.file.model.model_dump(mode="json"),
            "sample": self.file.sample.model_dump(mode="json"),
            "seed": self.file.seed,
            # sampling went on until every reported quantity had converged, so what is reported is part of the draws
            "thresholds": self.file.thresholds.model_dump(mode="json"),
            "recoveries": {name: [item.value.tolist(), item.injected.tolist(), item.recovered.tolist(), item.labels]
                           for name, item in self.recoveries.items()},
            **parts,
        }
        return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def load_study(path: str | Path) -> Study:
    """Read and check a study file, with its models, transfer, mission and target list.

    Parameters
    ----------
    path : str or pathlib.Path

    Returns
    -------
    Study

    Raises
    ------
    InputError
        With every fault of the file that could be told at once.
    """
    path = Path(path)
    data = read_toml(path, "study file")
    where = str(path)
    file = parse_settings(StudyFile, data, where)
    if (path.parent / file.output.directory).exists() and not (path.parent / file.output.directory).is_dir():
        raise InputError(
            Fault(
                "the output directory is a file",
                where=f"{where}, key 'output.directory'",
                found=file.output.directory,
                allowed="a directory, or a name that does not exist yet",
                remedy="choose another name",
            )
        )
    loaded = [load_model(name, path.parent, f"{where}, key 'model.name'") for name in file.model.names]
    models = _with_overrides(loaded, file.model.priors, where)
    transfer = None if file.transfer is None else parse_transfer(file.transfer, where, path.parent)
    mission = None if file.mission is None else parse_mission(file.mission, where, path.parent)
    if mission is not None and transfer is None:
        raise InputError(
            Fault(
                "a mission is sized from an occurrence prior, and the study makes none",
                where=f"{where}, table [mission]",
                found="no table [transfer]",
                allowed="[mission] together with [transfer]",
                remedy="add [transfer], or size from an exported prior with `remnantstats size`",
            )
        )
    study = Study(path, file, models, transfer, mission)
    return replace(study, recoveries=_recoveries(study))


def _recoveries(study: Study) -> dict[str, RecoveryTable]:
    return {
        name: read_recovery(study.folder / settings.efficiency_table, CHANNELS[name].value)
        for name, settings in study.channels.items()
        if settings.efficiency_table is not None
    }


def _with_overrides(
    models: list[PopulationModel], priors: Mapping[str, Any], where: str
) -> tuple[PopulationModel, ...]:
    """Models with the study's priors; each override goes to every model that has the parameter."""
    known = {name for model in models for name in model.priors}
    # the first model tells of a parameter that none has
    strange = {name: value for name, value in priors.items() if name not in known}
    if strange:
        models[0].with_priors(strange, where)
    return tuple(
        model.with_priors({name: value for name, value in priors.items() if name in model.priors}, where)
        for model in models
    )
