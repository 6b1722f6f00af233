"""Posing a population model on a sample."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from ..catalog import Sample
from ..errors import Fault, ModelError
from ..sensitivity import CHANNELS, ChannelSettings, RecoveryTable, detection_curve, recovery_index
from . import parameters as names
from .covariates import centred_covariates, group_index
from .distributions import HalfNormal, Normal
from .efficiency import efficiency_parameters
from .families import FAMILIES
from .parameters import Parameter, Support
from .problem import Problem
from .rows import LatentCovariate, Rows, blocks, rows_of
from .spec import PopulationModel

__all__ = ["pose"]


def pose(
    model: PopulationModel,
    sample: Sample,
    channels: Mapping[str, ChannelSettings],
    groups: str | None = None,
    atmospheres: Sequence[str] = ("H",),
    recoveries: Mapping[str, RecoveryTable] | None = None,
) -> Problem:
    """Pose a population model on a sample.

    Parameters
    ----------
    model : PopulationModel
    sample : Sample
    channels : mapping of str to ChannelSettings
        Channels in use, "pollution" first.
    groups : str, optional
        Column that defines groups, for models that pool.
    atmospheres : sequence of str, optional
        Atmospheres admitted.
    recoveries : mapping of str to RecoveryTable, optional
        Injection–recovery counts, by channel.

    Returns
    -------
    Problem

    Raises
    ------
    ModelError
        Where the model does not fit the sample: channels, covariates, groups, atmospheres, priors.
    """
    used = tuple(name for name in CHANNELS if name in channels)
    _check_channels(model, used)
    _check_family(model, used)
    _check_atmospheres(sample, atmospheres)
    covariates, reference, latent = centred_covariates(sample, model.covariates)
    index = np.zeros(len(sample), dtype=np.int64)
    labels: tuple[str, ...] = ()
    if model.file.groups:
        index, labels = group_index(sample, groups or "survey")
    recoveries = recoveries or {}
    curves = {name: detection_curve(sample, name, channels[name], recoveries.get(name)) for name in used}
    rows = rows_of(sample, curves, covariates, latent, index)
    # a star's own counts enter as their normal approximation, in its curve; those of a class are inferred jointly
    joint = {name: table for name, table in recoveries.items() if table.by != "star"}
    rows = _with_classes(rows, sample, joint)
    parameters = _parameters(model, used, bool(rows.helium.any()), latent, len(labels))
    parameters += tuple(item for name, table in joint.items() for item in efficiency_parameters(name, table))
    if not any(item.free for item in parameters):
        raise ModelError(
            Fault("every parameter is fixed; there is nothing to infer", where=model.source, remedy="free one prior")
        )
    return Problem(model, sample, used, curves, rows, tuple(blocks(rows)), parameters, reference, labels, joint)


def _with_classes(rows: Rows, sample: Sample, tables: Mapping[str, RecoveryTable]) -> Rows:
    """Rows that know their class in each recovery table."""
    channels = {
        name: replace(channel, recovery=recovery_index(sample, name, tables[name])) if name in tables else channel
        for name, channel in rows.channels.items()
    }
    return replace(rows, channels=channels)


def _check_channels(model: PopulationModel, used: tuple[str, ...]) -> None:
    if model.file.channels == "both" and len(used) < 2:
        raise ModelError(
            Fault(
                f"the model '{model.name}' needs both channels",
                where="study file",
                found="only " + ", ".join(used),
                allowed="tables [pollution] and [excess]",
                remedy="use a one-channel model such as 'steady'",
            )
        )
    if model.file.channels == "one" and len(used) > 1:
        raise ModelError(
            Fault(
                f"the model '{model.name}' is for one channel, and the study has two",
                where="study file",
                found=", ".join(used),
                allowed="one of [pollution] and [excess]",
                remedy="use 'dust-sometimes' or 'dust-always', or leave one channel out",
            )
        )


def _check_family(model: PopulationModel, used: tuple[str, ...]) -> None:
    """A family without a mean: nothing can act on it, and its constants are rates."""
    family = FAMILIES[model.file.family]
    missing = [name for name in family.constants if name not in model.file.constants]
    if missing:
        raise ModelError(
            Fault(
                f"the model '{model.name}' lacks a constant of its family '{model.file.family}'",
                where=f"{model.source}, table [constants]",
                allowed=", ".join(family.constants),
                remedy=f"give '{missing[0]}'",
            )
        )
    if family.location_scale:
        return
    acting = [covariate.name for covariate in model.covariates if "rate" in covariate.acts_on]
    if acting:
        raise ModelError(
            Fault(
                f"the family '{model.file.family}' has no mean rate on which a covariate could act",
                where=f"{model.source}, covariate '{acting[0]}'",
                found='acts_on with "rate"',
                allowed='acts_on = ["fraction"]',
                remedy="let the covariate act on the fraction alone, or use the family 'normal'",
            )
        )
    if used != ("pollution",):
        raise ModelError(
            Fault(
                f"the family '{model.file.family}' describes accretion rates",
                where="study file",
                found=", ".join(used),
                allowed="pollution",
                remedy="use the model 'steady' or 'heavy-tail' for the infrared channel",
            )
        )


def _check_atmospheres(sample: Sample, admitted: Sequence[str]) -> None:
    atmosphere = sample.table["atmosphere"].to_numpy(dtype=str)
    for other in sorted(set(atmosphere) - set(admitted)):
        raise ModelError(
            Fault(
                f"{int((atmosphere == other).sum())} stars have an atmosphere that is not admitted",
                where="column 'atmosphere'",
                found=other,
                allowed=", ".join(admitted),
                remedy='admit them with atmospheres = ["H", "He"] under [model], or leave them out',
            )
        )


def _parameters(
    model: PopulationModel, channels: tuple[str, ...], helium: bool, latent: LatentCovariate | None, groups: int
) -> tuple[Parameter, ...]:
    wanted: list[tuple[str, Support]] = [(names.DEBRIS_FRACTION, "unit")]
    family = FAMILIES[model.file.family]
    for channel in channels if family.location_scale else ():
        value = CHANNELS[channel].value
        wanted += [(f"mean_{value}", "real"), (f"sd_{value}", "positive")]
    wanted += [(name, "positive" if name == "tail_weight" else "real") for name in family.shape_parameters]
    if len(channels) == 2:
        wanted += [(names.CORRELATION, "correlation"), (names.DUST_SHARE, "unit")]
    for covariate in model.covariates:
        if "fraction" in covariate.acts_on:
            wanted.append((names.fraction_slope(covariate.name), "real"))
        if "rate" in covariate.acts_on:
            wanted.append((names.rate_slope(covariate.name), "real"))
    if helium:
        wanted.append((names.fraction_offset(), "real"))
    if helium and family.location_scale:
        wanted.append((names.rate_offset(), "real"))
    if groups:
        wanted.append((names.GROUP_SD, "positive"))
    found = [_parameter(model, name, support) for name, support in wanted]
    if groups:
        unit = Normal(mean=0, sd=1, basis="by construction")
        found.append(Parameter(names.GROUP_RAW, unit, "real", groups))
    if latent is not None and latent.nodes is None:
        found += _latent_parameters(model, latent)
    _check_fixed_fraction(model, found, groups)
    return tuple(found)


def _parameter(model: PopulationModel, name: str, support: Support) -> Parameter:
    if name not in model.priors:
        raise ModelError(
            Fault(
                f"the model '{model.name}' gives no prior for '{name}', which this study needs",
                where=f"{model.source}, table [priors]",
                remedy=f"add a prior for '{name}' to the model file",
            )
        )
    parameter = Parameter(name, model.priors[name], support, inverse=name in names.BY_INVERSE)
    parameter.check(model.source)
    return parameter


def _latent_parameters(model: PopulationModel, latent: LatentCovariate) -> list[Parameter]:
    """Mean and spread of a covariate known with error; priors scaled to the sample unless the model gives them."""
    spread = float(np.std(latent.estimate)) or 1.0
    defaults: list[tuple[str, Any, Support]] = [
        (
            names.covariate_mean(latent.name),
            Normal(mean=0, sd=3 * spread, basis="weak, scaled to the sample's spread"),
            "real",
        ),
        (
            names.covariate_sd(latent.name),
            HalfNormal(sd=3 * spread, basis="weak, scaled to the sample's spread"),
            "positive",
        ),
    ]
    return [Parameter(name, model.priors.get(name, prior), support) for name, prior, support in defaults]


def _check_fixed_fraction(model: PopulationModel, found: list[Parameter], groups: int) -> None:
    fraction = next(item for item in found if item.name == names.DEBRIS_FRACTION)
    moves = groups or any(item.name.startswith(("fraction_slope", "fraction_offset")) for item in found)
    if not fraction.free and fraction.prior.value >= 1 and moves:
        raise ModelError(
            Fault(
                "a debris fraction fixed at 1 cannot vary between stars",
                where=f"{model.source}, prior of '{names.DEBRIS_FRACTION}'",
                found="fixed at 1",
                allowed="a fraction below 1, or a model without covariates and groups on it",
                remedy="use the model 'steady', or free the fraction",
            )
        )
