"""Distributions as users write them in TOML, wherever one is asked for.

Each is a small typed object that can be sampled and evaluated; each may carry a `basis`, its source or reason.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.stats
from pydantic import BeforeValidator, Field, TypeAdapter, ValidationError, field_validator, model_validator

from ..errors import Fault, InputError, nearest
from ..fields import Settings

__all__ = [
    "Beta",
    "Distribution",
    "Draws",
    "Exponential",
    "Fixed",
    "HalfNormal",
    "LogNormal",
    "Normal",
    "StudentT",
    "Uniform",
    "describe",
    "load_draws",
    "parse_distribution",
]

FloatArray = npt.NDArray[np.float64]
Number = Annotated[float, BeforeValidator(lambda value: float(value) if type(value) is int else value)]
Positive = Annotated[Number, Field(gt=0)]


class _Family(Settings):
    """What every distribution can do."""

    basis: str = ""

    @cached_property
    def frozen(self) -> Any:
        """The distribution as a frozen SciPy object."""
        raise TypeError(f"{type(self).__name__} has no density")

    @property
    def support(self) -> tuple[float, float]:
        """Lowest and highest value with positive density."""
        low, high = self.frozen.support()
        return float(low), float(high)

    @property
    def is_fixed(self) -> bool:
        """Whether the distribution is a single value."""
        return False

    def sample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draw `size` values."""
        return np.asarray(self.frozen.rvs(size=size, random_state=rng), dtype=float)

    def logpdf(self, value: npt.ArrayLike) -> FloatArray:
        """Natural log of the density at `value`."""
        return np.asarray(self.frozen.logpdf(value), dtype=float)

    def mean(self) -> float:
        """Mean of the distribution."""
        return float(self.frozen.mean())


class Fixed(_Family):
    """A single value, held fixed."""

    family: Literal["fixed"] = "fixed"
    value: Number

    @property
    def support(self) -> tuple[float, float]:
        """The value, twice."""
        return self.value, self.value

    @property
    def is_fixed(self) -> bool:
        """Always true."""
        return True

    def sample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Return the value `size` times."""
        return np.full(size, self.value)

    def mean(self) -> float:
        """The value."""
        return self.value


class Beta(_Family):
    """Beta distribution on (0, 1)."""

    family: Literal["beta"] = "beta"
    alpha: Positive
    beta: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.beta(self.alpha, self.beta)


class Uniform(_Family):
    """Uniform between `low` and `high`."""

    family: Literal["uniform"] = "uniform"
    low: Number
    high: Number

    @model_validator(mode="after")
    def _ordered(self) -> Uniform:
        if not self.low < self.high:
            raise ValueError(f"low < high; here low = {self.low:g}, high = {self.high:g}")
        return self

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.uniform(self.low, self.high - self.low)


class Normal(_Family):
    """Normal distribution."""

    family: Literal["normal"] = "normal"
    mean_: Number = Field(alias="mean")
    sd: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.norm(self.mean_, self.sd)


class HalfNormal(_Family):
    """Normal about zero, folded to positive values; `sd` is that of the unfolded normal."""

    family: Literal["halfnormal"] = "halfnormal"
    sd: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.halfnorm(scale=self.sd)


class LogNormal(_Family):
    """Log-normal; mean and standard deviation are those of the natural logarithm."""

    family: Literal["lognormal"] = "lognormal"
    mean_log: Number
    sd_log: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.lognorm(s=self.sd_log, scale=np.exp(self.mean_log))


class Exponential(_Family):
    """Exponential with mean `scale`."""

    family: Literal["exponential"] = "exponential"
    scale: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.expon(scale=self.scale)


class StudentT(_Family):
    """Student-t about `mean` with scale `sd` and `df` degrees of freedom."""

    family: Literal["student_t"] = "student_t"
    df: Positive
    mean_: Number = Field(alias="mean")
    sd: Positive

    @cached_property
    def frozen(self) -> Any:
        """The SciPy distribution."""
        return scipy.stats.t(self.df, loc=self.mean_, scale=self.sd)


class Draws(_Family):
    """Draws from elsewhere: one column of a CSV file."""

    family: Literal["draws"] = "draws"
    file: str
    values: tuple[float, ...] = Field(default=(), exclude=True, repr=False)

    @field_validator("file")
    @classmethod
    def _named(cls, value: str) -> str:
        if not value.strip():
            raise ValueError("the name of a CSV file with one column of numbers")
        return value

    @cached_property
    def _array(self) -> FloatArray:
        if not self.values:
            raise InputError(
                Fault("draws were not loaded", where=self.file, remedy="read the study with load_draws first")
            )
        return np.asarray(self.values)

    @property
    def support(self) -> tuple[float, float]:
        """Lowest and highest draw."""
        return float(self._array.min()), float(self._array.max())

    def sample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Resample the draws with replacement."""
        return rng.choice(self._array, size=size, replace=True)

    def mean(self) -> float:
        """Mean of the draws."""
        return float(self._array.mean())


Distribution = Annotated[
    Fixed | Beta | Uniform | Normal | HalfNormal | LogNormal | Exponential | StudentT | Draws,
    Field(discriminator="family"),
]
_ADAPTER: TypeAdapter[Any] = TypeAdapter(Distribution)
_FAMILIES: Mapping[str, type[_Family]] = {
    kind.model_fields["family"].default: kind
    for kind in (Fixed, Beta, Uniform, Normal, HalfNormal, LogNormal, Exponential, StudentT, Draws)
}


def parse_distribution(data: Any, where: str, key: str) -> Any:
    """Read one distribution from what TOML gave.

    Parameters
    ----------
    data : dict
        ``{family = …, …}``.
    where : str
        The file, for messages.
    key : str
        TOML key at which the distribution stands.

    Returns
    -------
    Distribution

    Raises
    ------
    InputError
        For an unknown family, an unknown or missing parameter, or an improper distribution.
    """
    place = f"{where}, key '{key}'"
    if not isinstance(data, Mapping) or "family" not in data:
        raise InputError(
            Fault(
                "this is not a distribution",
                where=place,
                found=repr(data)[:80],
                allowed="a table such as { family = \"beta\", alpha = 1, beta = 1 }",
                remedy="write the family and its parameters",
            )
        )
    family = data["family"]
    if family not in _FAMILIES:
        raise InputError(
            Fault(
                f"unknown distribution family {family!r}",
                where=place,
                found=f"family = {family!r}",
                allowed=", ".join(sorted(_FAMILIES)),
                remedy=nearest(str(family), list(_FAMILIES)),
            )
        )
    try:
        return _ADAPTER.validate_python(dict(data))
    except ValidationError as error:
        faults = [_fault(item, _FAMILIES[family], place) for item in error.errors(include_url=False)]
        raise InputError(*faults) from error


def _fault(item: Any, kind: type[_Family], place: str) -> Fault:
    names = [field.alias or name for name, field in kind.model_fields.items() if name not in ("values", "family")]
    name = str(item["loc"][-1]) if item["loc"] else ""
    parameters = f"family {kind.model_fields['family'].default!r} takes " + ", ".join(names)
    if item["type"] == "extra_forbidden":
        return Fault(f"unknown parameter '{name}'", where=place, allowed=parameters, remedy=nearest(name, names))
    if item["type"] == "missing":
        return Fault(f"parameter '{name}' is missing", where=place, allowed=parameters, remedy=f"add '{name}'")
    return Fault(
        f"parameter '{name}' is not allowed (improper or malformed distribution)",
        where=place,
        found=repr(item["input"])[:80],
        allowed=item["msg"].removeprefix("Value error, "),
        remedy="give a proper distribution",
    )


def load_draws(distribution: Any, folder: Path, key: str) -> Any:
    """Read the file of a `Draws` distribution; other families pass through.

    Parameters
    ----------
    distribution : Distribution
        As parsed.
    folder : pathlib.Path
        Folder to which the file's path is relative.
    key : str
        TOML key, for messages.

    Returns
    -------
    Distribution

    Raises
    ------
    InputError
        Where the file is absent or is not one column of finite numbers.
    """
    if not isinstance(distribution, Draws):
        return distribution
    path = folder / distribution.file
    place = f"{path}, key '{key}'"
    allowed = "a CSV file with one column of at least 100 finite numbers, with or without a heading"
    if not path.is_file():
        raise InputError(Fault("the file of draws does not exist", where=place, allowed=allowed, remedy="check 'file'"))
    try:
        lines = [line.strip() for line in path.read_text(encoding="utf-8-sig").splitlines() if line.strip()]
        start = 0 if _is_number(lines[0]) else 1
        values = tuple(float(line) for line in lines[start:])
    except (UnicodeDecodeError, ValueError, IndexError) as error:
        raise InputError(
            Fault("the file of draws cannot be read", where=place, found=str(error)[:80], allowed=allowed)
        ) from error
    if len(values) < 100 or not np.all(np.isfinite(values)):
        raise InputError(
            Fault("too few draws, or not finite", where=place, found=f"{len(values)} values", allowed=allowed)
        )
    return distribution.model_copy(update={"values": values})


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def describe(distribution: Any) -> str:
    """Return a distribution as a reader would write it, ``Beta(1, 1)``."""
    names = {
        "fixed": "fixed at {value:g}",
        "beta": "Beta({alpha:g}, {beta:g})",
        "uniform": "uniform from {low:g} to {high:g}",
        "normal": "normal, mean {mean_:g}, sd {sd:g}",
        "halfnormal": "half-normal, sd {sd:g}",
        "lognormal": "log-normal, natural log of mean {mean_log:g}, sd {sd_log:g}",
        "exponential": "exponential, mean {scale:g}",
        "student_t": "Student-t, {df:g} degrees of freedom, mean {mean_:g}, scale {sd:g}",
        "draws": "draws from {file}",
    }
    values = {name: getattr(distribution, name) for name in type(distribution).model_fields}
    return names[distribution.family].format(**values)
