"""Parameters of a posed model: names, priors, and the unconstrained scale on which both engines move.

Every name that reaches an output is made here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.special

from ..errors import Fault, ModelError

__all__ = [
    "BY_INVERSE",
    "CORRELATION",
    "DEBRIS_FRACTION",
    "DUST_SHARE",
    "GROUP_RAW",
    "GROUP_SD",
    "ROW_DEVIATION",
    "Parameter",
    "covariate_mean",
    "covariate_sd",
    "fraction_offset",
    "fraction_slope",
    "logit_of",
    "rate_offset",
    "rate_slope",
]

FloatArray = npt.NDArray[np.float64]

DEBRIS_FRACTION = "debris_fraction"
DUST_SHARE = "dust_share"
CORRELATION = "rate_dust_correlation"
GROUP_SD = "group_sd"
#: standardised deviations of the groups; the non-centred form samples these
GROUP_RAW = "group_deviation"
#: the same, spread over rows
ROW_DEVIATION = "group_deviation by row"

#: parameters whose prior is given for their inverse
BY_INVERSE = frozenset({"tail_weight"})

Support = Literal["unit", "positive", "real", "correlation"]
#: from 500 degrees of freedom, all but normal, to one
_INVERSE_BOUNDS = (0.002, 1.0)
_BOUNDS: dict[str, tuple[float, float]] = {
    "unit": (0.0, 1.0),
    "positive": (0.0, np.inf),
    "real": (-np.inf, np.inf),
    "correlation": (-1.0, 1.0),
}


def fraction_slope(covariate: str) -> str:
    """Change of the log-odds of debris per unit of a covariate."""
    return f"fraction_slope[{covariate}]"


def rate_slope(covariate: str) -> str:
    """Change of the mean log rate per unit of a covariate."""
    return f"rate_slope[{covariate}]"


def fraction_offset(atmosphere: str = "He") -> str:
    """Offset of an atmosphere's log-odds of debris."""
    return f"fraction_offset[{atmosphere}]"


def rate_offset(atmosphere: str = "He") -> str:
    """Offset of an atmosphere's mean log rate."""
    return f"rate_offset[{atmosphere}]"


def covariate_mean(covariate: str) -> str:
    """Population mean of a covariate known with error (centred)."""
    return f"covariate_mean[{covariate}]"


def covariate_sd(covariate: str) -> str:
    """Population spread of a covariate known with error."""
    return f"covariate_sd[{covariate}]"


def logit_of(name: str) -> str:
    """Key under which the log-odds of a probability travel beside it."""
    return f"logit({name})"


@dataclass(frozen=True)
class Parameter:
    """A parameter with its prior.

    Attributes
    ----------
    name : str
        As in every output.
    prior : Distribution
        Its prior; `fixed` keeps it out of the sampled vector.
    support : {"unit", "positive", "real", "correlation"}
        Values that make sense.
    size : int
        1 for a scalar; the number of groups for the groups' deviations.
    inverse : bool
        The prior, and the unconstrained scale, are those of the parameter's inverse.
    """

    name: str
    prior: Any
    support: Support
    size: int = 1
    inverse: bool = False

    @property
    def free(self) -> bool:
        """Whether the parameter is sampled."""
        return not self.prior.is_fixed

    @property
    def fixed_value(self) -> float:
        """Value of a parameter that is held fixed."""
        value = float(self.prior.value)
        return 1 / value if self.inverse else value

    def sample_prior(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Draw from the prior, on the parameter's own scale."""
        drawn = np.asarray(self.prior.sample(rng, size), dtype=float)
        return 1 / drawn if self.inverse else drawn

    @property
    def bounds(self) -> tuple[float, float]:
        """Open interval on which the parameter moves: support of the prior within that of the parameter."""
        low, high = self.prior.support
        return max(low, self._range[0]), min(high, self._range[1])

    @property
    def _range(self) -> tuple[float, float]:
        """Values that make sense, on the scale of the prior."""
        return _INVERSE_BOUNDS if self.inverse else _BOUNDS[self.support]

    @property
    def limits(self) -> tuple[float, float]:
        """Values that the parameter itself can take, whatever its prior."""
        return _BOUNDS[self.support]

    def draw(self, rng: np.random.Generator) -> float:
        """Draw one value from the prior."""
        return float(self.sample_prior(rng, 1)[0])

    def check(self, where: str) -> None:
        """Refuse a prior that does not fit.

        Raises
        ------
        ModelError
            Where the prior puts mass outside the parameter's support, or is a set of draws.
        """
        place = f"{where}, prior of '{self.name}'"
        if self.prior.family == "draws":
            raise ModelError(
                Fault(
                    "a prior of the population model needs a density; draws have none",
                    where=place,
                    allowed="any other family",
                    remedy="fit one of the families to the draws and give that",
                )
            )
        low, high = self.prior.support
        least, most = self._range
        if low < least or high > most or (self.prior.is_fixed and self._degenerate(low)):
            raise ModelError(
                Fault(
                    "the prior reaches values that the parameter cannot take",
                    where=place,
                    found=f"support {low:g} to {high:g}",
                    allowed=f"within {least:g} to {most:g}",
                    remedy="choose a family with that support, or narrower bounds",
                )
            )

    def _degenerate(self, value: float) -> bool:
        if self.support == "unit":
            return value <= 0
        if self.support == "positive":
            return value <= 0
        return self.support == "correlation" and abs(value) >= 1

    def constrain(self, u: FloatArray) -> dict[str, FloatArray]:
        """Take unconstrained values to the parameter's own scale.

        Parameters
        ----------
        u : ndarray
            Unconstrained values, any shape.

        Returns
        -------
        dict
            The parameter, and its log-odds where it is a probability.
        """
        value = self._on_prior_scale(u)
        if self.inverse:
            return {self.name: 1 / value}
        if self.support != "unit":
            return {self.name: value}
        logit = u if self.bounds == (0.0, 1.0) else scipy.special.logit(value)
        return {self.name: value, logit_of(self.name): logit}

    def _on_prior_scale(self, u: FloatArray) -> FloatArray:
        """The value that the prior is about."""
        low, high = self.bounds
        if np.isfinite(low) and np.isfinite(high):
            return np.asarray(low + (high - low) * scipy.special.expit(u))
        return low + np.exp(u) if np.isfinite(low) else u

    def unconstrain(self, value: npt.ArrayLike) -> FloatArray:
        """Inverse of `constrain`, kept finite at the ends of the support."""
        x = np.asarray(value, dtype=float)
        x = 1 / x if self.inverse else x
        low, high = self.bounds
        if np.isfinite(low) and np.isfinite(high):
            share = np.clip((x - low) / (high - low), 1e-12, 1 - 1e-12)
            return np.asarray(scipy.special.logit(share))
        if np.isfinite(low):
            return np.asarray(np.log(np.maximum(x - low, 1e-300)))
        return x

    def log_prior(self, u: FloatArray) -> FloatArray:
        """Log prior density on the unconstrained scale, Jacobian included."""
        low, high = self.bounds
        if self.prior.family == "beta":
            a, b = self.prior.alpha, self.prior.beta
            return np.asarray(
                a * scipy.special.log_expit(u) + b * scipy.special.log_expit(-u) - scipy.special.betaln(a, b)
            )
        value = self._on_prior_scale(u)
        if np.isfinite(low) and np.isfinite(high):
            jacobian = np.log(high - low) + scipy.special.log_expit(u) + scipy.special.log_expit(-u)
        elif np.isfinite(low):
            jacobian = u
        else:
            jacobian = np.zeros_like(u)
        return np.asarray(self.prior.logpdf(value) + jacobian)
