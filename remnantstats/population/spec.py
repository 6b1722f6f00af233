"""Population models are data: reading and checking `models/*.toml`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from html import escape
from importlib import resources
from pathlib import Path
from typing import Any, Literal

from pydantic import Field

from ..errors import Fault, ModelError, nearest
from ..fields import Settings, parse_settings, read_toml
from .distributions import Number, describe, parse_distribution
from .families import FAMILIES

__all__ = ["CovariateSpec", "PopulationModel", "load_model", "model_names"]


class CovariateSpec(Settings):
    """A covariate and what it acts on.

    Attributes
    ----------
    name : str
        A numeric column of the sample table, or `log_` and such a column for its log10.
    acts_on : list of {"fraction", "rate"}
        The log-odds of debris, the mean log rate, or both.
    mass_slope : float
        For `progenitor_mass` alone: slope of the initial mass function, the prior of every star's mass.
    relation_scatter : float
        For `progenitor_mass` alone: scatter of the initial–final mass relation, Msun.
    """

    name: str = Field(min_length=1, pattern=r"^[A-Za-z][A-Za-z0-9_]*$")
    acts_on: list[Literal["fraction", "rate"]] = Field(min_length=1)
    mass_slope: Number = -2.3
    relation_scatter: Number = Field(default=0.06, gt=0)


class ModelFile(Settings):
    """A model file but for its priors."""

    title: str = Field(min_length=1)
    description: str = ""
    channels: Literal["one", "both"] = "one"
    family: str = "normal"
    groups: bool = False
    covariates: list[CovariateSpec] = Field(default_factory=list)
    constants: dict[str, float] = Field(default_factory=dict)


@dataclass(frozen=True)
class PopulationModel:
    """A population model: what is out there, with a prior for every parameter.

    Attributes
    ----------
    name : str
        File name without its ending.
    source : str
        Where it was read.
    file : ModelFile
        Structure.
    priors : mapping of str to Distribution
        Prior of every parameter that the model may need.
    text : str
        The model file as read.
    """

    name: str
    source: str
    file: ModelFile
    priors: Mapping[str, Any] = field(default_factory=dict)
    text: str = ""

    @property
    def covariates(self) -> tuple[CovariateSpec, ...]:
        """Covariates in the order of the file."""
        return tuple(self.file.covariates)

    def with_priors(self, overrides: Mapping[str, Any], where: str, key: str = "model.priors") -> PopulationModel:
        """Replace priors by name.

        Parameters
        ----------
        overrides : mapping
            Distributions, or the tables that TOML gives for them.
        where : str
            File, for messages.
        key : str, optional
            TOML table in which the overrides stand.

        Returns
        -------
        PopulationModel

        Raises
        ------
        ModelError
            For a parameter that the model does not have.
        """
        unknown = [name for name in overrides if name not in self.priors]
        if unknown:
            raise ModelError(
                *[
                    Fault(
                        f"the model '{self.name}' has no parameter '{name}'",
                        where=f"{where}, key '{key}'",
                        found=name,
                        allowed=", ".join(self.priors),
                        remedy=nearest(name, list(self.priors)),
                    )
                    for name in unknown
                ]
            )
        given = {
            name: parse_distribution(value, where, f"{key}.{name}") if isinstance(value, Mapping) else value
            for name, value in overrides.items()
        }
        return replace(self, priors={**self.priors, **given})

    def __repr__(self) -> str:
        lines = [f"PopulationModel '{self.name}': {self.file.title}"]
        lines += [f"  {name:<36} {describe(prior)}" for name, prior in self.priors.items()]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{escape(name)}</td><td>{escape(describe(prior))}</td><td>{escape(prior.basis)}</td></tr>"
            for name, prior in self.priors.items()
        )
        head = "<tr><th>parameter</th><th>prior</th><th>basis</th></tr>"
        return f"<p><b>{escape(self.name)}</b>: {escape(self.file.title)}</p><table>{head}{rows}</table>"


def _folder() -> Path:
    """Folder of the shipped models: inside an installed package, or beside it in a source tree."""
    shipped = Path(str(resources.files("remnantstats"))) / "models"
    return shipped if shipped.is_dir() else Path(__file__).resolve().parents[2] / "models"


def model_names() -> list[str]:
    """Names of the shipped models."""
    return sorted(path.stem for path in _folder().glob("*.toml"))


def load_model(name: str | Path, folder: Path | None = None, where: str = "") -> PopulationModel:
    """Read a population model.

    Parameters
    ----------
    name : str or pathlib.Path
        Name of a shipped model, or a path to a model file.
    folder : pathlib.Path, optional
        Folder to which a relative path is relative; default the working directory.
    where : str, optional
        File and key that name the model, for messages.

    Returns
    -------
    PopulationModel

    Raises
    ------
    ModelError, InputError
        Where there is no such model, or the file is not a model file.
    """
    text = str(name)
    if text in model_names():
        return _read(_folder() / f"{text}.toml")
    is_path = "/" in text or text.endswith(".toml")
    path = (folder or Path()) / text
    if not is_path and not path.is_file():
        raise ModelError(
            Fault(
                f"there is no population model '{text}'",
                where=where or "name of the model",
                found=text,
                allowed=", ".join(model_names()) + ", or a path to a model file",
                remedy=nearest(text, model_names()),
            )
        )
    return _read(path)


def _read(path: Path) -> PopulationModel:
    data = read_toml(path, "model file")
    priors = data.pop("priors", None)
    if not isinstance(priors, dict) or "title" not in data:
        raise ModelError(
            Fault(
                "this file is not a population model",
                where=str(path),
                found="keys " + (", ".join(sorted(data)) or "none"),
                allowed="a title and a table [priors]; see `remnantstats models steady`",
                remedy="copy a shipped model and change that",
            )
        )
    file = parse_settings(ModelFile, data, str(path))
    if file.family not in FAMILIES:
        raise ModelError(
            Fault(
                f"unknown family '{file.family}'",
                where=f"{path}, key 'family'",
                allowed=", ".join(sorted(FAMILIES)),
                remedy=nearest(file.family, list(FAMILIES)),
            )
        )
    if file.channels == "both" and not FAMILIES[file.family].two_channels:
        raise ModelError(
            Fault(
                f"the family '{file.family}' is for one channel",
                where=f"{path}, key 'channels'",
                found="both",
                allowed="one",
                remedy="use the family 'normal' for two channels",
            )
        )
    parsed = {key: parse_distribution(value, str(path), f"priors.{key}") for key, value in priors.items()}
    return PopulationModel(path.stem, str(path), file, parsed, path.read_text(encoding="utf-8-sig"))
