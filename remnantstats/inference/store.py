"""The fit as a DataTree in the ArviZ schema, on both library stacks; the one place of conversion."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from ..population import Problem
from ..population.quantities import Quantity
from ..population.rows import DETECTED, DOUBTFUL
from ..sensitivity import CHANNELS, DetectionCurve

__all__ = ["build_tree"]

FloatArray = npt.NDArray[np.float64]

#: version of the layout; a reader of another one must refuse
SCHEMA_VERSION = 1


def build_tree(
    problem: Problem,
    quantities: Sequence[Quantity],
    prior: Sequence[Quantity],
    shape: tuple[int, int],
    parts: Mapping[str, Any],
    attributes: Mapping[str, Any],
) -> Any:
    """Lay out a fit.

    Parameters
    ----------
    problem : Problem
    quantities : sequence of Quantity
        Posterior draws, chains laid end to end.
    prior : sequence of Quantity
        Prior draws.
    shape : tuple of int
        Chains and draws per chain.
    parts : mapping
        `log_likelihood` (S, n), `log_prior` (name → S), `sample_stats` (name → (chains, draws)),
        `predictive` (channel → outcome and value of shape (D, n)).
    attributes : mapping
        Written on the root and on the posterior.

    Returns
    -------
    xarray.DataTree
    """
    star = problem.sample.table["star"].to_numpy(dtype=str)
    groups = {
        "posterior": _draws(quantities, shape),
        "sample_stats": xr.Dataset({key: (("chain", "draw"), value) for key, value in parts["sample_stats"].items()}),
        "log_likelihood": xr.Dataset(
            {"stars": (("chain", "draw", "star"), parts["log_likelihood"].reshape(*shape, -1))}, {"star": star}
        ),
        "log_prior": xr.Dataset(
            {key: (("chain", "draw"), value.reshape(shape)) for key, value in parts["log_prior"].items()}
        ),
        "prior": _draws(prior, (1, len(prior[0].values))),
        "posterior_predictive": _predictive(parts["predictive"], star),
        "observed_data": _observed(problem, star),
        "constant_data": _constant(problem, star),
    }
    tree = xr.DataTree.from_dict({f"/{name}": _with_index(dataset) for name, dataset in groups.items()})
    tree.attrs.update({key: _plain(value) for key, value in attributes.items()})
    tree.attrs["schema_version"] = SCHEMA_VERSION
    tree["posterior"].attrs.update(tree.attrs)
    return tree


def _plain(value: Any) -> Any:
    return value if isinstance(value, str | int | float) else str(value)


def _with_index(dataset: xr.Dataset) -> xr.Dataset:
    coords = {dim: np.arange(dataset.sizes[dim]) for dim in ("chain", "draw") if dim in dataset.sizes}
    return dataset.assign_coords(coords)


def _draws(quantities: Sequence[Quantity], shape: tuple[int, int]) -> xr.Dataset:
    variables: dict[str, Any] = {}
    coords: dict[str, tuple[Any, ...]] = {}
    for item in quantities:
        if not item.dim:
            variables[item.name] = (("chain", "draw"), item.values.reshape(shape))
            continue
        # two quantities may run over the same kind of label but not the same labels
        dim = item.dim if coords.get(item.dim, item.labels) == item.labels else f"{item.name}_{item.dim}"
        coords[dim] = item.labels
        variables[item.name] = (("chain", "draw", dim), item.values.reshape(*shape, -1))
    return xr.Dataset(variables, {dim: list(labels) for dim, labels in coords.items()})


def _predictive(outcomes: Mapping[str, Any], star: npt.NDArray[np.str_]) -> xr.Dataset:
    variables: dict[str, Any] = {}
    for name, item in outcomes.items():
        detected = (item.outcome == DETECTED).astype(np.int8)
        variables[f"{name}_detected"] = (("chain", "draw", "star"), detected[None])
        variables[CHANNELS[name].value] = (("chain", "draw", "star"), item.value[None].astype(np.float32))
    return xr.Dataset(variables, {"star": star})


def _observed(problem: Problem, star: npt.NDArray[np.str_]) -> xr.Dataset:
    variables: dict[str, Any] = {}
    for name, channel in problem.rows.channels.items():
        detected = np.isin(channel.outcome, (DETECTED, DOUBTFUL)).astype(np.int8)
        variables[f"{name}_detected"] = ("star", detected)
        variables[f"{name}_outcome"] = ("star", problem.sample.table[name].to_numpy(dtype=str))
        variables[CHANNELS[name].value] = ("star", channel.value, {"units": problem_unit(name)})
    return xr.Dataset(variables, {"star": star})


def problem_unit(channel: str) -> str:
    """Unit of a channel's value, for attributes."""
    return "log10 g/s" if channel == "pollution" else "log10 L_dust/L_star"


def _constant(problem: Problem, star: npt.NDArray[np.str_]) -> xr.Dataset:
    variables: dict[str, Any] = {}
    for name, curve in problem.curves.items():
        variables.update(_curve(name, curve))
    for name, values in problem.rows.covariates.items():
        variables[f"covariate_{name}"] = ("star", values, {"reference": problem.reference[name]})
    variables["inclusion"] = ("star", problem.sample.table["inclusion"].to_numpy(dtype=str))
    return xr.Dataset(variables, {"star": star})


def _curve(name: str, curve: DetectionCurve) -> dict[str, Any]:
    value = CHANNELS[name].value
    attributes = {"units": problem_unit(name), "ceiling": np.asarray(curve.ceiling), "threshold_on": curve.threshold_on}
    return {
        f"{value}_limit_50": ("star", curve.limit, attributes),
        f"{value}_width": ("star", curve.width, {"units": "dex"}),
        f"{name}_false_positive": ("star", curve.false_positive),
    }
