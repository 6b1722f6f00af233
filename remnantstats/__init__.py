"""Occurrence of rocky debris around white dwarfs, corrected for sensitivity, carried to planets and missions.

Importing the package loads none of its rooms; each is loaded when one of its names is first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .api import infer, simulate_sample
    from .catalog import Sample, read_sample
    from .errors import InferenceError, InputError, ModelError, RemnantStatsError
    from .inference import Fit
    from .mission import MissionSize, size_mission
    from .occurrence import OccurrencePrior, occurrence_prior, read_prior
    from .population import PopulationModel, load_model, model_names
    from .sensitivity import ChannelSettings
    from .study import RunResult, run
    from .study_file import load_study

_HOMES = {
    "ChannelSettings": "sensitivity",
    "Fit": "inference",
    "InferenceError": "errors",
    "InputError": "errors",
    "MissionSize": "mission",
    "ModelError": "errors",
    "OccurrencePrior": "occurrence",
    "PopulationModel": "population",
    "RemnantStatsError": "errors",
    "RunResult": "study",
    "Sample": "catalog",
    "infer": "api",
    "load_model": "population",
    "load_study": "study_file",
    "model_names": "population",
    "occurrence_prior": "occurrence",
    "read_prior": "occurrence",
    "read_sample": "catalog",
    "run": "study",
    "simulate_sample": "api",
    "size_mission": "mission",
}

__all__ = [
    "ChannelSettings",
    "Fit",
    "InferenceError",
    "InputError",
    "MissionSize",
    "ModelError",
    "OccurrencePrior",
    "PopulationModel",
    "RemnantStatsError",
    "RunResult",
    "Sample",
    "infer",
    "load_model",
    "load_study",
    "model_names",
    "occurrence_prior",
    "read_prior",
    "read_sample",
    "run",
    "simulate_sample",
    "size_mission",
]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        return import_module("importlib.metadata").version("remnantstats")
    if name in _HOMES:
        return getattr(import_module(f".{_HOMES[name]}", __name__), name)
    raise AttributeError(f"module 'remnantstats' has no attribute '{name}'")


def __dir__() -> list[str]:
    return [*__all__, "__version__"]
