"""The `[transfer]` table of a study: what carries the debris fraction to planets."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

from pydantic import Field

from ..errors import Fault, InputError, nearest
from ..fields import Settings, parse_settings
from ..population.distributions import Beta, Distribution, Fixed, Number, describe, load_draws, parse_distribution

__all__ = ["NO_BASIS", "Assumption", "TransferSettings", "parse_transfer"]

#: shown for a factor whose source or reason the user did not give
NO_BASIS = "assumed, no basis given"

_REQUIRED = ("retention", "delivery")
_FACTORS = (*_REQUIRED, "prior", "earthlike")
_KEYS = (*_FACTORS, "at")
_MEANING = {
    "retention": "retention: share of rocky systems that outlast the giant phases",
    "delivery": "delivery: share of retained systems that feed the star now",
    "prior": "prior on the rocky-system fraction",
    "earthlike": "share of rocky systems with the planet sought",
}


class Assumption(NamedTuple):
    """One assumption behind a result.

    Parameters
    ----------
    name : str
        The quantity, by its key in the study file.
    description : str
        What is assumed of it.
    basis : str
        Source or reason.
    """

    name: str
    description: str
    basis: str


class TransferSettings(Settings):
    """What carries the debris fraction to the rocky-system fraction: f = η · R · D.

    Parameters
    ----------
    retention : Distribution
        R, share of rocky systems kept through the giant phases.
    delivery : Distribution
        D, share of retained systems that feed the star now, at the age to which the debris fraction refers.
    prior : Distribution, optional
        Prior on the rocky-system fraction η; uniform by default.
    earthlike : Distribution, optional
        h, share of rocky systems with the planet sought; 1 by default.
    at : dict of str to float, optional
        Covariates at which the debris fraction is taken; those not named stay at the sample's reference.
    """

    retention: Distribution
    delivery: Distribution
    prior: Distribution = Beta(alpha=1.0, beta=1.0, basis="uniform, the default")
    earthlike: Distribution = Fixed(value=1.0)
    at: dict[str, Number] = Field(default_factory=dict)

    def assumptions(self) -> list[Assumption]:
        """Return every assumption with its basis, in the order of the study file."""
        found = []
        for key in _FACTORS:
            distribution = getattr(self, key)
            found.append(
                Assumption(key, f"{_MEANING[key]}: {describe(distribution)}", distribution.basis.strip() or NO_BASIS)
            )
        return found


def parse_transfer(data: Any, where: str, folder: Path) -> TransferSettings:
    """Read the `[transfer]` table.

    Parameters
    ----------
    data : dict
        What TOML gave.
    where : str
        The file, for messages.
    folder : pathlib.Path
        Folder to which files of draws are relative.

    Returns
    -------
    TransferSettings

    Raises
    ------
    InputError
        With every fault of the table: a key unknown or missing, a distribution that is malformed or reaches outside
        [0, 1].
    """
    if not isinstance(data, Mapping):
        raise InputError(
            Fault("this is not a table", where=f"{where}, key 'transfer'", found=repr(data)[:80], allowed="[transfer]")
        )
    faults = [
        Fault(f"unknown key '{key}'", where=f"{where}, key 'transfer.{key}'", remedy=nearest(str(key), _KEYS))
        for key in data
        if key not in _KEYS
    ]
    faults += [
        Fault(
            f"required key '{key}' is missing",
            where=f"{where}, key 'transfer.{key}'",
            allowed='a distribution in [0, 1], such as { family = "beta", alpha = 8, beta = 2, basis = "…" }',
            remedy=f"add '{key}' ({_MEANING[key]}), or remove [transfer] to stop at the debris fraction",
        )
        for key in _REQUIRED
        if key not in data
    ]
    parsed: dict[str, Any] = {}
    for key in _FACTORS:
        if key in data:
            try:
                parsed[key] = _fraction(data[key], where, f"transfer.{key}", folder)
            except InputError as error:
                faults += error.faults
    if faults:
        raise InputError(*faults)
    return parse_settings(TransferSettings, {**parsed, "at": data.get("at", {})}, where, "transfer")


def _fraction(data: Any, where: str, key: str, folder: Path) -> Any:
    """One distribution of a fraction."""
    distribution = load_draws(parse_distribution(data, where, key), folder, key)
    low, high = distribution.support
    place = f"{where}, key '{key}'"
    if low < 0 or high > 1:
        raise InputError(
            Fault(
                "a fraction cannot lie outside 0 to 1",
                where=place,
                found=f"{describe(distribution)}, which reaches from {low:g} to {high:g}",
                allowed="a distribution whose values all lie in [0, 1]",
                remedy="use beta, or uniform, fixed or draws within [0, 1]",
            )
        )
    if key == "transfer.prior" and low == high:
        raise InputError(
            Fault(
                "the rocky-system fraction is what is inferred; it cannot be fixed",
                where=place,
                found=describe(distribution),
                allowed="a distribution with some width",
                remedy="give a beta, uniform or draws, or leave 'prior' out for a uniform one",
            )
        )
    if key in ("transfer.retention", "transfer.delivery") and high == 0:
        raise InputError(
            Fault(
                f"a {key.split('.')[1]} of zero would forbid debris altogether",
                where=place,
                found=describe(distribution),
                allowed="a distribution with some mass above 0",
                remedy="change this value",
            )
        )
    return distribution
