"""The posterior density and its gradient as one compiled function of the unconstrained vector."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pytensor
import pytensor.tensor as pt
from pytensor.graph.replace import clone_replace

try:
    from pytensor.graph.traversal import ancestors
except ImportError:  # PyTensor 2.x before the move
    from pytensor.graph.basic import ancestors

__all__ = ["compiled_density"]

FloatArray = npt.NDArray[np.float64]
#: arrays larger than this become data of the compiled function, so that a new sample meets a warm compilation cache
_DATA = 4


def compiled_density(model: Any) -> Callable[[FloatArray], tuple[float, FloatArray]]:
    """Compile log posterior and gradient.

    Parameters
    ----------
    model : pymc.Model

    Returns
    -------
    callable
        Takes an unconstrained vector, shape (d,); gives the log density and its gradient.
    """
    u = pt.vector("unconstrained", dtype="float64")
    parts, at = {}, 0
    for variable in model.value_vars:
        # the one vector is that of the groups; asking the model for its shapes would compile a function
        size = 1 if variable.ndim == 0 else len(model.coords["group"])
        part = u[at] if variable.ndim == 0 else u[at : at + size]
        parts[variable] = part
        at += size
    (log_density,) = clone_replace([model.logp()], replace=parts)
    log_density = _with_data(log_density)
    gradient = pt.grad(log_density, u)
    function = pytensor.function([u], [log_density, gradient], mode="NUMBA", trust_input=True)
    # the compiled kernel itself: the wrapper around it keeps its inputs in place, which threads would overwrite
    kernel = function.vm.jit_fn
    data = [container.storage[0] for container in function.input_storage[1:]]

    def density(x: FloatArray) -> tuple[float, FloatArray]:
        # a fresh array: one of another memory layout, or read-only, would be compiled for anew
        value, slope = kernel(np.array(x, dtype=np.float64), *data)
        return float(value), slope

    return density


def _with_data(graph: Any) -> Any:
    """Replace constant arrays by shared variables of the same broadcast pattern."""
    constants = [
        variable
        for variable in ancestors([graph])
        if isinstance(variable, pt.TensorConstant) and variable.data.size > _DATA and variable.data.dtype.kind == "f"
    ]
    replace = {
        constant: pytensor.shared(
            np.ascontiguousarray(constant.data), shape=tuple(1 if size == 1 else None for size in constant.data.shape)
        )
        for constant in constants
    }
    return clone_replace([graph], replace=replace)[0] if replace else graph
