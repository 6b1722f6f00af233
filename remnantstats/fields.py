"""Settings read from TOML: one strict base class, and validation faults told in the user's terms."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ConfigDict, ValidationError

from .errors import Fault, InputError, nearest

__all__ = ["Settings", "parse_settings", "read_toml"]

#: a settings or model file larger than this is refused before it is parsed
LARGEST_TOML = 1_000_000

Model = TypeVar("Model", bound="Settings")


class Settings(BaseModel):
    """Base of every typed settings object: frozen, no unknown keys, no silent conversion."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False, populate_by_name=True)


def read_toml(path: Path, kind: str) -> dict[str, Any]:
    """Read a TOML file.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    kind : str
        What it is to the user (``"study file"``), for messages.

    Returns
    -------
    dict

    Raises
    ------
    InputError
        Where the file is absent, too large, not text or not TOML.
    """
    if not path.is_file():
        raise InputError(
            Fault(
                f"the {kind} does not exist" if not path.exists() else f"the {kind} is not a file",
                where=str(path),
                allowed="a TOML file",
                remedy="check the path",
            )
        )
    size = path.stat().st_size
    if size > LARGEST_TOML:
        raise InputError(
            Fault(
                f"the {kind} is too large",
                where=str(path),
                found=f"{size:,} bytes",
                allowed=f"at most {LARGEST_TOML:,} bytes",
                remedy="check that this is the file you meant",
            )
        )
    try:
        text = path.read_bytes().decode("utf-8-sig")
        return tomllib.loads(text)
    except UnicodeDecodeError as error:
        raise InputError(
            Fault(
                f"the {kind} is not UTF-8 text",
                where=f"{path}, byte {error.start}",
                found=f"{error.object[error.start : error.start + 4]!r}",
                allowed="UTF-8",
                remedy="save the file as UTF-8",
            )
        ) from error
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(
            Fault(
                f"the {kind} is not valid TOML",
                where=str(path),
                found=str(error) or "nested too deeply",
                allowed="TOML 1.0",
                remedy="mend the line named above",
            )
        ) from error


def parse_settings(model: type[Model], data: Any, where: str, prefix: str = "") -> Model:
    """Validate `data` against a settings class and tell faults in the user's terms.

    Parameters
    ----------
    model : type
        A subclass of `Settings`.
    data : object
        What TOML gave.
    where : str
        The file, for messages.
    prefix : str, optional
        TOML table in which `data` stands.

    Returns
    -------
    Settings

    Raises
    ------
    InputError
        With every fault of the file.
    """
    try:
        return model.model_validate(data)
    except ValidationError as error:
        faults = [_fault(item, model, where, prefix) for item in error.errors(include_url=False)]
        raise InputError(*faults) from error


def _fault(item: Any, model: type[BaseModel], where: str, prefix: str) -> Fault:
    """One pydantic error as a fault."""
    location = [str(part) for part in item["loc"] if not _is_tag(str(part))]
    key = ".".join(([prefix] if prefix else []) + location)
    place = f"{where}, key '{key}'" if key else where
    if item["type"] == "extra_forbidden":
        known = _known_keys(model, location[:-1])
        hint = nearest(location[-1], known) if known else "remove it"
        allowed = ", ".join(known) if known else ""
        return Fault(
            f"unknown key '{location[-1]}'",
            where=place,
            found=_short(item["input"]),
            allowed=allowed,
            remedy=f"{hint} (or remove it)",
        )
    if item["type"] == "missing":
        return Fault(f"required key '{location[-1]}' is missing", where=place, remedy=f"add '{key}'")
    message = item["msg"].removeprefix("Value error, ")
    return Fault(
        "a setting is not valid", where=place, found=_short(item["input"]), allowed=message, remedy="change this value"
    )


#: parts that pydantic adds to a location for unions; they are not TOML keys
_TAGS = {"function-after", "function-before", "constrained-str", "str", "int", "float", "bool"}
_FAMILIES = {"fixed", "beta", "uniform", "normal", "halfnormal", "lognormal", "exponential", "student_t", "draws"}


def _is_tag(part: str) -> bool:
    return part in _TAGS or part in _FAMILIES or part.startswith(("function-", "list[", "union[", "tagged-union["))


def _known_keys(model: type[BaseModel], path: list[str]) -> list[str]:
    """Keys allowed at a path inside a settings class."""
    current: Any = model
    for part in path:
        fields = getattr(current, "model_fields", {})
        match = next((field for name, field in fields.items() if part in (name, field.alias)), None)
        if match is None:
            return []
        current = next((kind for kind in _candidates(match.annotation) if hasattr(kind, "model_fields")), None)
        if current is None:
            return []
    return [field.alias or name for name, field in current.model_fields.items()]


def _candidates(annotation: Any) -> list[Any]:
    arguments = getattr(annotation, "__args__", ())
    return [annotation] if not arguments else [kind for item in arguments for kind in _candidates(item)]


def _short(value: Any, limit: int = 80) -> str:
    text = repr(value)
    return text if len(text) <= limit else text[: limit - 1] + "…"
