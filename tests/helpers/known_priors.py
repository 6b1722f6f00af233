"""Occurrence priors of known form, for the tests of this folder."""

import numpy as np
import scipy.stats

from remnantstats.occurrence.prior import build_prior
from remnantstats.occurrence.settings import Assumption


def known_prior(eta, earthlike=1.0, effective=None):
    """An occurrence prior with the given draws of η and h."""
    eta = np.asarray(eta, dtype=float)
    ones = np.ones(eta.size)
    return build_prior(
        {"rocky_system_fraction": eta, "retention": ones, "delivery": ones, "earthlike": earthlike * ones},
        assumptions=(Assumption("retention", "retention: fixed at 1", "a test"),),
        method="joint model",
        k_hat=0.1,
        effective_draws=float(effective or eta.size),
    )


def beta_prior(alpha, beta, size=4000, **rest):
    """Draws of a Beta distribution by its quantiles, without noise."""
    return known_prior(scipy.stats.beta.ppf((np.arange(size) + 0.5) / size, alpha, beta), **rest)


def single_prior(value, **rest):
    """All but certain: draws within a part in 10⁹ of a value."""
    return known_prior(value * (1 + 1e-9 * np.linspace(-1, 1, 200)), **rest)
