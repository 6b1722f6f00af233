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
    "DEBRIS_FRACTION",
    "DUST_SHARE",
    "GROUP_RAW",
    "GROUP_SD",
    "ROW_DEVIATION",
    "CORRELATION",
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

Support = Literal["unit", "positive", "real", "correlation"]
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
    """

    name: str
    prior: Any
    support: Support
    size: int = 1

    @property
    def free(self) -> bool:
        """Whether the parameter is sampled."""
        return not self.prior.is_fixed

    @property
    def bounds(self) -> tuple[float, float]:
        """Open interval on which the parameter moves: support of the prior within that of the parameter."""
        low, high = self.prior.support
        return max(low, _BOUNDS[self.support][0]), min(high, _BOUNDS[self.support][1])

    @property
    def limits(self) -> tuple[float, float]:
        """Values that the parameter itself can take, whatever its prior."""
        return _BOUNDS[self.support]

    def draw(self, rng: np.random.Generator) -> float:
        """Draw one value from the prior."""
        return float(self.prior.sample(rng, 1)[0])

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
        least, most = _BOUNDS[self.support]
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
        low, high = self.bounds
        if np.isfinite(low) and np.isfinite(high):
            value = low + (high - low) * scipy.special.expit(u)
            if self.support != "unit":
                return {self.name: value}
            logit = u if (low, high) == (0.0, 1.0) else scipy.special.logit(value)
            return {self.name: value, logit_of(self.name): logit}
        if np.isfinite(low):
            return {self.name: low + np.exp(u)}
        return {self.name: u}

    def unconstrain(self, value: npt.ArrayLike) -> FloatArray:
        """Inverse of `constrain`, kept finite at the ends of the support."""
        x = np.asarray(value, dtype=float)
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
        value = self.constrain(u)[self.name]
        if np.isfinite(low) and np.isfinite(high):
            jacobian = np.log(high - low) + scipy.special.log_expit(u) + scipy.special.log_expit(-u)
        elif np.isfinite(low):
            jacobian = u
        else:
            jacobian = np.zeros_like(u)
        return np.asarray(self.prior.logpdf(value) + jacobian)
