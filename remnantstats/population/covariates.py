"""Covariates and groups of the stars, as the models use them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from ..catalog import Sample
from ..errors import Fault, ModelError
from .masses import PROGENITOR_MASS, progenitor_posterior
from .rows import LatentCovariate
from .spec import CovariateSpec

__all__ = ["centred_covariates", "column_of", "covariate_values", "group_index"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

LN10 = float(np.log(10))


def column_of(name: str) -> str:
    """Column of the sample table from which a covariate comes: `log_cooling_age` comes from `cooling_age`."""
    return name.removeprefix("log_")


def covariate_values(sample: Sample, name: str) -> tuple[FloatArray, FloatArray]:
    """A covariate and its standard error, from the sample table.

    Parameters
    ----------
    sample : Sample
    name : str
        A column, or `log_` and a column for its log10.

    Returns
    -------
    value, error : ndarray, shape (n,)
        Error NaN where the table gives none.

    Raises
    ------
    ModelError
        Where the table lacks the column, or a star its value.
    """
    table = sample.table
    column = name if name in table.columns and name != column_of(name) else column_of(name)
    log = column != name
    if column not in table.columns:
        raise ModelError(
            Fault(
                f"the model needs the covariate '{name}', and the table has no column '{column}'",
                where="sample table",
                allowed=f"a column '{column}'",
                remedy="add it, name it under [sample.columns], or use a model without this covariate",
            )
        )
    value = table[column].to_numpy(dtype=float)
    given = f"{column}_err" in table.columns
    error = table[f"{column}_err"].to_numpy(dtype=float) if given else np.full(len(table), np.nan)
    bad = np.flatnonzero(~np.isfinite(value) | (value <= 0 if log else False))
    if bad.size:
        raise ModelError(
            Fault(
                f"{bad.size} stars have no usable '{column}', which the model needs",
                where=f"star {table['star'].iloc[bad[0]]}, column '{column}'",
                found=f"{value[bad[0]]:g}",
                allowed="a finite number" + (" above zero" if log else ""),
                remedy="give the value, or leave these stars out",
            )
        )
    if log:
        return np.log10(value), error / (value * LN10)
    return value, error


def centred_covariates(
    sample: Sample, specs: Sequence[CovariateSpec]
) -> tuple[dict[str, FloatArray], dict[str, float], LatentCovariate | None]:
    """Covariates centred on the mean of the blind stars, and the one known with error.

    Parameters
    ----------
    sample : Sample
    specs : sequence of CovariateSpec

    Returns
    -------
    covariates : dict of str to ndarray, shape (n,)
    reference : dict of str to float
        The means.
    latent : LatentCovariate or None

    Raises
    ------
    ModelError
        Where a column of errors has gaps, or two covariates carry errors.
    """
    blind = sample.table["inclusion"].to_numpy(dtype=str) == "blind"
    centred, reference = {}, {}
    latent: LatentCovariate | None = None
    for spec in specs:
        if spec.name == PROGENITOR_MASS:
            mass = progenitor_posterior(sample, spec.mass_slope, spec.relation_scatter)
            if mass is not None:
                centred[spec.name], reference[spec.name], latent = _latent_mass(mass, blind, latent)
                continue
        value, error = covariate_values(sample, spec.name)
        reference[spec.name] = float(value[blind].mean() if blind.any() else value.mean())
        centred[spec.name] = value - reference[spec.name]
        if not np.any(error > 0):
            continue
        _refuse_second(latent, spec.name)
        gaps = np.flatnonzero(~(error > 0))
        if gaps.size:
            raise ModelError(
                Fault(
                    f"{gaps.size} stars have no error of '{column_of(spec.name)}' while others have one",
                    where=f"star {sample.table['star'].iloc[gaps[0]]}, column '{column_of(spec.name)}_err'",
                    allowed="an error for every star, or for none",
                    remedy="fill the column or drop it",
                )
            )
        latent = LatentCovariate(spec.name, centred[spec.name], error)
    return centred, reference, latent


def _latent_mass(
    mass: tuple[FloatArray, FloatArray], blind: BoolArray, latent: LatentCovariate | None
) -> tuple[FloatArray, float, LatentCovariate]:
    """Progenitor masses as centred means, their reference, and the latent covariate."""
    _refuse_second(latent, PROGENITOR_MASS)
    nodes, log_weights = mass
    weight = np.exp(log_weights)
    mean = (nodes * weight).sum(axis=1)
    sd = np.sqrt(((nodes - mean[:, None]) ** 2 * weight).sum(axis=1))
    reference = float(mean[blind].mean() if blind.any() else mean.mean())
    centred = mean - reference
    return centred, reference, LatentCovariate(PROGENITOR_MASS, centred, sd, nodes - reference, log_weights)


def _refuse_second(latent: LatentCovariate | None, name: str) -> None:
    if latent is not None:
        raise ModelError(
            Fault(
                "two covariates carry errors; the model can integrate over one",
                where=f"columns '{column_of(latent.name)}_err' and '{column_of(name)}_err'",
                remedy="drop the errors of the better known one, and say so where you report the result",
            )
        )


def group_index(sample: Sample, column: str) -> tuple[IntArray, tuple[str, ...]]:
    """Index of each star's group, and the groups' names in sorted order.

    Raises
    ------
    ModelError
        Where the table lacks the column.
    """
    if column not in sample.table.columns:
        raise ModelError(
            Fault(
                f"the model pools over groups, and the table has no column '{column}'",
                where="sample table",
                allowed="the column named by [model] groups",
                remedy="name a column that the table has",
            )
        )
    groups, index = np.unique(sample.table[column].to_numpy(dtype=str), return_inverse=True)
    return index.astype(np.int64), tuple(str(group) for group in groups)
