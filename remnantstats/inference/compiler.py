"""From a posed model to a PyMC model."""

from __future__ import annotations

from typing import Any

import numpy as np
import pymc as pm
import pytensor.tensor as pt

from ..population import Problem
from ..population.parameters import GROUP_RAW, Parameter, logit_of
from .pytensor_ops import PYTENSOR

__all__ = ["build_model"]


def build_model(problem: Problem) -> Any:
    """Build the PyMC model of a posed problem.

    Parameters
    ----------
    problem : Problem

    Returns
    -------
    pymc.Model
        Free parameters under their own names, the marginal likelihood as a potential.
    """
    with pm.Model(coords={"group": list(problem.groups)} if problem.groups else None) as model:
        theta: dict[str, Any] = {}
        for parameter in problem.parameters:
            theta.update(_variable(parameter))
        pm.Potential("log_likelihood_of_sample", problem.total(PYTENSOR, theta, pt.sum))
    return model


def _variable(parameter: Parameter) -> dict[str, Any]:
    name = parameter.name
    if not parameter.free:
        value = parameter.fixed_value
        fixed: dict[str, Any] = {name: pt.constant(value, dtype="float64")}
        if parameter.support == "unit" and value < 1:
            fixed[logit_of(name)] = pt.constant(np.log(value) - np.log1p(-value), dtype="float64")
        return fixed
    if parameter.inverse:
        inverse = _random_variable(f"inverse_{name}", parameter.prior, None)
        return {name: pm.Deterministic(name, 1 / inverse)}
    variable = _random_variable(name, parameter.prior, "group" if name == GROUP_RAW else None)
    if parameter.support == "unit":
        return {name: variable, logit_of(name): pt.log(variable) - pt.log1p(-variable)}
    return {name: variable}


def _random_variable(name: str, prior: Any, dims: str | None) -> Any:
    build = {
        "beta": lambda p: pm.Beta(name, alpha=p.alpha, beta=p.beta, dims=dims),
        "uniform": lambda p: pm.Uniform(name, lower=p.low, upper=p.high, dims=dims),
        "normal": lambda p: pm.Normal(name, mu=p.mean_, sigma=p.sd, dims=dims),
        "halfnormal": lambda p: pm.HalfNormal(name, sigma=p.sd, dims=dims),
        "lognormal": lambda p: pm.LogNormal(name, mu=p.mean_log, sigma=p.sd_log, dims=dims),
        "exponential": lambda p: pm.Exponential(name, scale=p.scale, dims=dims),
        "student_t": lambda p: pm.StudentT(name, nu=p.df, mu=p.mean_, sigma=p.sd, dims=dims),
    }
    return build[prior.family](prior)
