"""The occurrence prior as files: `occurrence_prior.json` and `occurrence_prior.nc`."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from ..errors import Fault, InputError
from ..files import atomic_path, write_text
from .density import BetaFit
from .prior import QUANTITIES, OccurrencePrior, as_dataset
from .settings import Assumption

__all__ = ["SCHEMA_VERSION", "read_prior", "write_prior"]

FloatArray = npt.NDArray[np.float64]

#: version of both files' layout; a reader refuses any other
SCHEMA_VERSION = 1
#: draws written to the JSON file; the NetCDF file has all
MOST_JSON_DRAWS = 4000
#: probabilities at which the JSON file tabulates quantiles
PROBABILITIES = np.linspace(0.0, 1.0, 201)
#: files larger than this are refused unread
LARGEST_FILE = 200_000_000
#: fewest draws accepted from a file
FEWEST_DRAWS = 100


def write_prior(prior: OccurrencePrior, folder: Path, marks: Sequence[str] = ()) -> tuple[Path, Path]:
    """Write an occurrence prior to `folder`, each file whole or not at all.

    Parameters
    ----------
    prior : OccurrencePrior
        The prior.
    folder : pathlib.Path
        Made where missing.
    marks : sequence of str, optional
        What the files must be marked with (``"quick look"``), beside the prior's own marks.

    Returns
    -------
    tuple of pathlib.Path
        The JSON and the NetCDF file.

    Raises
    ------
    InputError
        Where the files cannot be written.
    """
    header = _header(prior, tuple(dict.fromkeys((*prior.marks, *marks))))
    as_json, as_netcdf = folder / "occurrence_prior.json", folder / "occurrence_prior.nc"
    order = np.argsort(prior.values(), kind="stable")
    size = min(order.size, MOST_JSON_DRAWS)
    # evenly through the sorted draws: the thinned set keeps the quantiles
    kept = order[((np.arange(size) + 0.5) * order.size / size).astype(int)]
    body = {
        "quantiles": {
            "probability": PROBABILITIES.tolist(),
            **{name: prior.quantile(PROBABILITIES, name).tolist() for name in QUANTITIES},
        },
        "draws": {name: prior.values(name)[kept].tolist() for name in QUANTITIES},
    }
    write_text(as_json, json.dumps(header | body, indent=1, ensure_ascii=False, allow_nan=False) + "\n")
    flat = {key: value if isinstance(value, int | str) else json.dumps(value) for key, value in header.items()}
    with atomic_path(as_netcdf) as temporary:
        prior.draws.assign_attrs(flat).to_netcdf(temporary, engine="h5netcdf")
    return as_json, as_netcdf


def read_prior(path: Path | str) -> OccurrencePrior:
    """Read an exported occurrence prior.

    Parameters
    ----------
    path : path
        `occurrence_prior.json` or `occurrence_prior.nc`.

    Returns
    -------
    OccurrencePrior

    Raises
    ------
    InputError
        Where the file is absent, malformed, of another version, or holds what is not a fraction.
    """
    path = Path(path)
    if not path.is_file():
        raise InputError(
            Fault("the occurrence prior does not exist", where=str(path), allowed=_ALLOWED, remedy="check the path")
        )
    if path.stat().st_size > LARGEST_FILE:
        raise InputError(Fault("the file is too large", where=str(path), found=f"{path.stat().st_size:,} bytes"))
    header, draws = _from_netcdf(path) if path.suffix in (".nc", ".h5") else _from_json(path)
    _check_version(header, path)
    try:
        return _assemble(header, _checked(draws, path), path)
    except (TypeError, ValueError, KeyError, AttributeError, OverflowError) as error:
        raise InputError(
            Fault("the occurrence prior is malformed", where=str(path), found=str(error)[:120], remedy=_REMEDY)
        ) from error


_ALLOWED = "occurrence_prior.json or occurrence_prior.nc, as written by `remnantstats run`"
_REMEDY = "export the prior again with `remnantstats run`"


def _header(prior: OccurrencePrior, marks: tuple[str, ...]) -> dict[str, Any]:
    """All but the draws."""
    return {
        "schema_version": SCHEMA_VERSION,
        "kind": "occurrence_prior",
        "marks": list(marks),
        "reference": prior.reference,
        "method": prior.method,
        "k_hat": prior.k_hat if math.isfinite(prior.k_hat) else None,
        "effective_draws": prior.effective_draws,
        "seed": prior.seed,
        "beta": _beta_out(prior.beta),
        "earthlike_beta": _beta_out(prior.earthlike_beta),
        "assumptions": [item._asdict() for item in prior.assumptions],
        "notes": list(prior.notes),
    }


def _beta_out(fit: BetaFit | None) -> dict[str, float] | None:
    return None if fit is None else {"alpha": fit.alpha, "beta": fit.beta, "divergence": fit.divergence}


def _beta_in(value: Any, key: str, path: Path) -> BetaFit:
    found = [value.get(name) if isinstance(value, Mapping) else None for name in ("alpha", "beta", "divergence")]
    numbers = [float(item) for item in found if isinstance(item, int | float) and math.isfinite(item)]
    if len(numbers) < 3 or min(numbers[:2]) <= 0 or numbers[2] < 0:
        raise InputError(
            Fault(
                "this is not a fitted Beta distribution",
                where=f"{path}, key '{key}'",
                found=repr(value)[:80],
                allowed="alpha > 0, beta > 0, divergence ≥ 0",
                remedy=_REMEDY,
            )
        )
    return BetaFit(*numbers)


def _from_json(path: Path) -> tuple[dict[str, Any], dict[str, Any]]:
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (ValueError, RecursionError, OSError) as error:
        raise InputError(
            Fault(
                "the file cannot be read as JSON",
                where=str(path),
                found=str(error)[:120],
                allowed=_ALLOWED,
                remedy=_REMEDY,
            )
        ) from error
    if not isinstance(content, dict):
        raise InputError(
            Fault("the file is not an occurrence prior", where=str(path), allowed=_ALLOWED, remedy="check the path")
        )
    draws = content.get("draws", {})
    return content, draws if isinstance(draws, dict) else {}


def _from_netcdf(path: Path) -> tuple[dict[str, Any], dict[str, Any]]:
    try:
        with xr.open_dataset(path, engine="h5netcdf", decode_cf=False) as opened:
            header = {str(key): _attribute(value) for key, value in opened.attrs.items()}
            draws = {name: opened[name].values for name in QUANTITIES if name in opened}
    # the readers of HDF5 raise what they like on a damaged file
    except Exception as error:
        raise InputError(
            Fault(
                "the file is not a readable NetCDF-4 file",
                where=str(path),
                found=str(error)[:120],
                allowed=_ALLOWED,
                remedy=_REMEDY,
            )
        ) from error
    return header, draws


#: attributes of the NetCDF file that are text as they stand; the others are numbers or JSON
_TEXTS = ("kind", "reference", "method")


def _attribute(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _check_version(header: dict[str, Any], path: Path) -> None:
    if header.get("kind") != "occurrence_prior":
        raise InputError(
            Fault(
                "the file is not an occurrence prior",
                where=f"{path}, key 'kind'",
                found=repr(header.get("kind"))[:80],
                allowed="'occurrence_prior'",
                remedy="check the path",
            )
        )
    version = header.get("schema_version")
    if type(version) is not int or version != SCHEMA_VERSION:
        raise InputError(
            Fault(
                "the occurrence prior is of a version that this package does not read",
                where=f"{path}, key 'schema_version'",
                found=repr(version)[:80],
                allowed=str(SCHEMA_VERSION),
                remedy=_REMEDY,
            )
        )
    if path.suffix in (".nc", ".h5"):
        for key in set(header) - set(_TEXTS):
            if isinstance(header[key], str):
                try:
                    header[key] = json.loads(header[key])
                except ValueError:
                    raise _malformed(path, key, header[key]) from None


def _malformed(path: Path, key: str, found: Any) -> InputError:
    return InputError(
        Fault("the occurrence prior is malformed", where=f"{path}, key '{key}'", found=repr(found)[:80], remedy=_REMEDY)
    )


def _checked(draws: dict[str, Any], path: Path) -> dict[str, FloatArray]:
    """Draws as arrays; every fault at once."""
    faults: list[Fault] = []
    found: dict[str, FloatArray] = {}
    for name in QUANTITIES:
        values = _numbers(draws.get(name))
        fault = _draws_fault(values, name, path)
        if fault is not None or values is None:
            faults += [fault] if fault else []
        else:
            found[name] = values
    if not faults and len({values.size for values in found.values()}) > 1:
        faults.append(Fault("the quantities have different numbers of draws", where=f"{path}, key 'draws'"))
    if not faults and not np.allclose(
        found["earthlike_fraction"], found["rocky_system_fraction"] * found["earthlike"], rtol=1e-9, atol=1e-12
    ):
        faults.append(
            Fault(
                "'earthlike_fraction' is not the product of 'rocky_system_fraction' and 'earthlike'",
                where=f"{path}, key 'draws.earthlike_fraction'",
                remedy=_REMEDY,
            )
        )
    if faults:
        raise InputError(*faults)
    return found


def _numbers(values: Any) -> FloatArray | None:
    try:
        return None if values is None else np.asarray(values, dtype=float)
    except (TypeError, ValueError, OverflowError):
        return None


def _draws_fault(values: FloatArray | None, name: str, path: Path) -> Fault | None:
    """What is wrong with the draws of one quantity."""
    place = f"{path}, key 'draws.{name}'"
    if values is None:
        return Fault(f"the draws of '{name}' are missing, or not numbers", where=place, remedy=_REMEDY)
    if values.ndim != 1 or values.size < FEWEST_DRAWS:
        return Fault("too few draws", where=place, found=str(values.shape), allowed=f"at least {FEWEST_DRAWS}")
    bad = ~((values >= 0) & (values <= 1))
    if not np.any(bad):
        return None
    return Fault(
        f"{int(bad.sum())} draws of '{name}' are not fractions",
        where=place,
        found=f"{values[bad][0]:g}",
        allowed="finite numbers in [0, 1]",
        remedy=_REMEDY,
    )


def _assemble(header: dict[str, Any], draws: dict[str, FloatArray], path: Path) -> OccurrencePrior:
    for key in ("beta", "assumptions", "method", "effective_draws"):
        if header.get(key) is None:
            raise InputError(Fault(f"'{key}' is missing", where=f"{path}, key '{key}'", remedy=_REMEDY))
    effective = header["effective_draws"]
    if type(effective) not in (int, float) or not 0 < effective < math.inf:
        raise _malformed(path, "effective_draws", effective)
    product = header.get("earthlike_beta")
    k_hat, seed = header.get("k_hat"), header.get("seed")
    return OccurrencePrior(
        draws=as_dataset(draws),
        beta=_beta_in(header["beta"], "beta", path),
        earthlike_beta=None if product is None else _beta_in(product, "earthlike_beta", path),
        assumptions=tuple(
            Assumption(str(item["name"]), str(item["description"]), str(item["basis"]))
            for item in header["assumptions"]
        ),
        method=str(header["method"]),
        k_hat=math.nan if k_hat is None else float(k_hat),
        effective_draws=float(effective),
        reference=str(header.get("reference", "")),
        seed=None if seed is None else int(seed),
        notes=tuple(str(note) for note in header.get("notes", [])),
        marks=tuple(str(mark) for mark in header.get("marks", [])),
    )
