"""From the debris fraction to the rocky-system fraction: f = η · R · D.

The data's likelihood for f acts on the product of the priors on η, R and D; draws of f are never divided by draws of
R · D.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import Fault, InputError
from ..population.distributions import Beta
from .density import LogitDensity, fit_density, logit_logpdf, logit_of
from .joint import DESIGN, sample_joint
from .prior import OccurrencePrior, build_prior
from .settings import Assumption, TransferSettings, parse_transfer

__all__ = ["fraction_likelihood", "occurrence_prior"]

FloatArray = npt.NDArray[np.float64]

#: largest Pareto k̂, and share of prior mass outside the posterior draws' range, with which importance weights serve
LARGEST_K_HAT = 0.7
LARGEST_OUTSIDE = 0.01
#: share of the result outside the posterior draws' range above which it rests on extrapolation
LARGEST_BEYOND = 0.05
#: prior draws that are weighted for each draw that is returned
PROPOSALS = 10
#: fewest draws of the debris fraction that a density is fitted to
FEWEST_DRAWS = 200

_CONFLICT = (
    "unreliable: the priors of [transfer] conflict with the debris fraction "
    "({:.0%} of the result lies where no posterior draw of it does)"
)


@dataclass(frozen=True)
class _Weighting:
    """Prior draws of (η, R, D) and how well importance weights on them would serve."""

    draws: dict[str, FloatArray]
    weights: FloatArray
    k_hat: float
    outside: float

    @property
    def effective(self) -> float:
        return float(1.0 / np.sum(self.weights**2))

    @property
    def serves(self) -> bool:
        return self.k_hat <= LARGEST_K_HAT and self.outside <= LARGEST_OUTSIDE


def occurrence_prior(
    fraction: Any,
    transfer: TransferSettings | Mapping[str, Any],
    *,
    fraction_prior: Any = None,
    seed: int | np.random.Generator = 0,
    draws: int = 8000,
    reference: str = "",
) -> OccurrencePrior:
    """Carry the debris fraction to the rocky-system fraction and the share with the planet sought.

    Importance weights on prior draws serve where their Pareto k̂ is at most 0.7 and at most 1 % of the prior mass of
    η R D lies outside the range of the posterior draws; otherwise the joint density of (η, R, D) is sampled by
    quadrature.

    Parameters
    ----------
    fraction : array_like of shape (n,), or an object with `fraction_draws()`
        Posterior draws of the debris fraction at its reference, in [0, 1]; or a fit, which gives them, and may give
        `fraction_prior` too.
    transfer : TransferSettings or mapping
        Distributions of R, D, η's prior and h, or the `[transfer]` table as a dictionary.
    fraction_prior : Distribution, callable or array_like, optional
        Prior on the debris fraction with which `fraction` was inferred: a distribution, the log density of logit f,
        or draws. By default what the fit gives, else Beta(1, 1).
    seed : int or numpy.random.Generator, optional
        Source of randomness.
    draws : int, optional
        Draws to return.
    reference : str, optional
        To what stars the debris fraction refers, for the record.

    Returns
    -------
    OccurrencePrior

    Raises
    ------
    InputError
        Where the draws are too few, not finite or outside [0, 1], or the transfer is not valid.
    InferenceError
        Where prior and draws contradict each other.

    Notes
    -----
    Pareto smoothing: Vehtari, Simpson, Gelman, Yao & Gabry 2024, J. Mach. Learn. Res. 25, 72.
    """
    if not isinstance(transfer, TransferSettings):
        transfer = parse_transfer(transfer, "transfer", Path())
    if hasattr(fraction, "transferred"):
        fraction, own_prior, own_reference = fraction.transferred(transfer.at)
        fraction_prior = own_prior if fraction_prior is None else fraction_prior
        reference = reference or own_reference
    elif hasattr(fraction, "fraction_draws"):
        fraction_prior = getattr(fraction, "fraction_prior", None) if fraction_prior is None else fraction_prior
        fraction = fraction.fraction_draws()
    observed = _checked(fraction)
    rng = np.random.default_rng(seed)
    likelihood = fraction_likelihood(observed, fraction_prior)
    weighting = _weigh(transfer, likelihood, observed, rng, PROPOSALS * draws)
    if weighting.serves:
        method, effective = "importance weights", min(weighting.effective, draws)
        found = _resample(weighting, rng, draws)
    else:
        method, effective = "joint model", float(draws)
        found = sample_joint(transfer, likelihood, rng, draws)
    beyond = _beyond(found, observed)
    found["earthlike"] = transfer.earthlike.sample(rng, draws)
    return build_prior(
        found,
        assumptions=(*_reference_assumption(reference), *transfer.assumptions()),
        method=method,
        k_hat=weighting.k_hat,
        effective_draws=float(min(effective, observed.size)),
        reference=reference,
        seed=int(seed) if isinstance(seed, int | np.integer) else None,
        notes=_notes(weighting, likelihood, observed.size, method),
        marks=(_CONFLICT.format(beyond),) if beyond > LARGEST_BEYOND else (),
    )


def fraction_likelihood(fraction: npt.ArrayLike, prior: Any = None) -> LogitDensity:
    """Estimate the data's log likelihood for the debris fraction from posterior draws and the prior used.

    Parameters
    ----------
    fraction : array_like, shape (n,)
        Posterior draws in [0, 1].
    prior : Distribution, callable or array_like, optional
        As in `occurrence_prior`.

    Returns
    -------
    LogitDensity
        Its `ratio_at` is log L at logit f, up to a constant. Beyond the draws' range it never rises again.

    Raises
    ------
    InferenceError
        Where the draws do not vary or lie where the prior has no probability.
    InputError
        Where the prior is fixed.
    """
    fit = fit_density(fraction, _base(prior))
    t = logit_of(fraction)
    # a likelihood of a fraction is bounded; what the fit does out there is noise of a slope that is not positive
    ratio = fit.log_ratio.copy()
    below, above = fit.grid < t.min(), fit.grid > t.max()
    ratio[below] = np.minimum.accumulate(np.minimum(ratio[below], fit.ratio_at(t.min()))[::-1])[::-1]
    ratio[above] = np.minimum.accumulate(np.minimum(ratio[above], fit.ratio_at(t.max())))
    return LogitDensity(fit.grid, ratio, fit.log_mass, fit.log_total, fit.splines, fit.misfit)


def _base(prior: Any) -> Callable[[FloatArray], FloatArray]:
    """Log density of logit f under the prior used."""
    if prior is None:
        return logit_logpdf(Beta(alpha=1.0, beta=1.0))
    family = getattr(prior, "family", None)
    if family == "fixed":
        raise InputError(
            Fault(
                "the debris fraction was held fixed: the data say nothing of occurrence",
                where="key 'model.priors.debris_fraction'",
                allowed="a prior with some width",
                remedy="free the debris fraction, or remove [transfer]",
            )
        )
    if family == "draws":
        prior = np.asarray(prior.values)
    elif family is not None:
        return logit_logpdf(prior)
    elif callable(prior):
        chosen: Callable[[FloatArray], FloatArray] = prior
        return chosen
    shape = fit_density(prior)
    uniform = logit_logpdf(Beta(alpha=1.0, beta=1.0))
    return lambda t: uniform(t) + shape.ratio_at(t)


def _checked(fraction: Any) -> FloatArray:
    """Posterior draws as a flat array."""
    values = np.asarray(fraction, dtype=float).ravel()
    if values.size < FEWEST_DRAWS:
        raise InputError(
            Fault(
                "too few posterior draws of the debris fraction",
                found=str(values.size),
                allowed=f"at least {FEWEST_DRAWS}",
                remedy="draw more",
            )
        )
    bad = ~((values >= 0) & (values <= 1))
    if np.any(bad):
        raise InputError(
            Fault(
                f"{int(bad.sum())} posterior draws of the debris fraction are not fractions",
                found=f"{values[bad][0]:g}",
                allowed="finite numbers in [0, 1]",
                remedy="give the draws on their natural scale",
            )
        )
    return values


def _weigh(
    transfer: TransferSettings, likelihood: LogitDensity, observed: FloatArray, rng: np.random.Generator, size: int
) -> _Weighting:
    """Weight prior draws of (η, R, D) by the likelihood of their product."""
    draws = {
        "rocky_system_fraction": transfer.prior.sample(rng, size),
        "retention": transfer.retention.sample(rng, size),
        "delivery": transfer.delivery.sample(rng, size),
    }
    product = draws["rocky_system_fraction"] * draws["retention"] * draws["delivery"]
    outside = float(np.mean((product < observed.min()) | (product > observed.max())))
    log_weights = likelihood.ratio_at(logit_of(product))
    # imported here for start-up time alone: it brings matplotlib with it
    from arviz_stats.base.array import array_stats

    smooth: Any = array_stats.psislw
    try:
        # it takes the negative of the log weights
        smoothed, k_hat = smooth(-log_weights)
    except ValueError:
        # it refuses a tail of equal weights, which needs no smoothing
        smoothed, k_hat = log_weights, 0.0
    weights = np.exp(smoothed - smoothed.max())
    return _Weighting(draws, weights / weights.sum(), float(k_hat), outside)


def _resample(weighting: _Weighting, rng: np.random.Generator, draws: int) -> dict[str, FloatArray]:
    """Equally weighted draws by systematic resampling, in random order."""
    points = (np.arange(draws) + rng.random()) / draws
    chosen = np.searchsorted(np.cumsum(weighting.weights), points).clip(max=weighting.weights.size - 1)
    chosen = rng.permutation(chosen)
    return {name: values[chosen] for name, values in weighting.draws.items()}


def _beyond(found: Mapping[str, FloatArray], observed: FloatArray) -> float:
    """Share of the product of the result that lies outside the range of the draws of f."""
    product = found["rocky_system_fraction"] * found["retention"] * found["delivery"]
    return float(np.mean((product < observed.min()) | (product > observed.max())))


def _reference_assumption(reference: str) -> list[Assumption]:
    if not reference:
        return []
    return [Assumption("reference", f"the debris fraction refers to {reference}", "the study's model")]


def _notes(weighting: _Weighting, likelihood: LogitDensity, count: int, method: str) -> tuple[str, ...]:
    """What a reader should know of how the prior was made."""
    notes = [
        "delivery must refer to the same age as the debris fraction",
        f"{weighting.outside:.1%} of the prior mass of the product lies outside the posterior draws' range; "
        f"Pareto k̂ of importance weights {weighting.k_hat:.2f}",
    ]
    if method == "joint model":
        notes.append(f"joint model: quadrature over the product, {DESIGN:,} points in retention and delivery")
    # what chance alone would give, at the 1 % point of the Kolmogorov distribution
    if likelihood.misfit > 0.02 + 1.63 / np.sqrt(count):
        notes.append(
            f"the fitted density of the debris fraction departs from its draws by {likelihood.misfit:.3f} in "
            "cumulative probability: look at the posterior for several modes"
        )
    return tuple(notes)
