"""Published survey fractions and general formulae for proportions, through table, inference and summary.

With limits that see everything and a uniform prior the posterior of the fraction is Beta(k + 1, n − k + 1).
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import scipy.optimize
import scipy.special
import scipy.stats
from helpers.surveys import counted_survey, only, posed
from statsmodels.stats.proportion import proportion_confint

from remnantstats.api import infer
from remnantstats.catalog import read_sample
from remnantstats.inference.quick import importance_draws
from remnantstats.population import load_model
from remnantstats.sensitivity import ChannelSettings

LEVELS = {"q05": 0.05, "q16": 0.1587, "q50": 0.5, "q84": 0.8413, "q95": 0.95}
FRACTION = {"pollution": "debris_fraction", "excess": "dusty_fraction"}
DUST, METALS = "excess", "pollution"

# channel, detections, stars, printed per cent: value, upper and lower error
PUBLISHED = {
    # Rocchetto et al. 2015, MNRAS 449, 574 (arXiv:1410.6527): infrared dust, H atmospheres, 17-25 kK: 3.7 +2.4 -1.0 %
    "Rocchetto 2015": (DUST, 5, 134, 3.7, 2.4, 1.0),
    # Wilson et al. 2019, MNRAS 487, 133 (arXiv:1904.05891): infrared dust, single stars: 1.5 +1.5 -0.5 %
    "Wilson 2019, dust": (DUST, 3, 195, 1.5, 1.5, 0.5),
    # the same paper: photospheric metals of 168 stars with ultraviolet spectra, 45 +/- 4 %; 76 of 168 is implied
    "Wilson 2019, metals": (METALS, 76, 168, 45.0, 4.0, 4.0),
    # Koester, Gaensicke & Farihi 2014, A&A 566, A34: metals in 48 of 85 H-atmosphere stars, 56 %; no error printed
    "Koester 2014": (METALS, 48, 85, 56.0, None, None),
}


def fitted(channel, detected, size, model="steady", quick=True):
    sample = read_sample(counted_survey(detected, size, channel), rules=only(channel))
    return infer(sample, model, seed=1, quick=quick)


def row_of(fit, quantity):
    return fit.summary().set_index("quantity").loc[quantity]


def agrees_with(row, exact, effective):
    """Each quantile within four Monte Carlo errors of where the exact distribution has it."""
    for column, level in LEVELS.items():
        error = np.sqrt(level * (1 - level) / min(effective, 4000))
        assert exact.cdf(row[column]) == pytest.approx(level, abs=4 * error + 1e-3), column


def prints(row, detected, size, value, up, down):
    """The interval, written about k/n, as the paper prints it: to its last digit, and Monte Carlo error."""
    share = 100 * detected / size
    digit = 0.05 if value < 10 else 0.5
    assert share == pytest.approx(value, abs=digit + 0.03)
    if up is None:
        return
    noise = 0.1 if value < 10 else 0.3
    assert 100 * row.q84 - share == pytest.approx(up, abs=digit + noise)
    assert share - 100 * row.q16 == pytest.approx(down, abs=digit + noise)


@pytest.mark.parametrize("survey", PUBLISHED)
def test_published_fraction_by_the_quick_engine(survey):
    channel, detected, size, value, up, down = PUBLISHED[survey]
    fit = fitted(channel, detected, size)
    row = row_of(fit, FRACTION[channel])
    assert fit.fraction == FRACTION[channel]
    agrees_with(row, scipy.stats.beta(detected + 1, size - detected + 1), row.ess_bulk)
    if survey == "Koester 2014":
        # 48/85 = 56.47 %, printed cut to 56 %
        assert int(100 * detected / size) == value
    else:
        prints(row, detected, size, value, up, down)


def test_published_fraction_by_the_engine_of_record():
    channel, detected, size, value, up, down = PUBLISHED["Rocchetto 2015"]
    fit = fitted(channel, detected, size, quick=False)
    row = row_of(fit, "dusty_fraction")
    assert fit.engine == "full" and fit.verdict != "fail"
    agrees_with(row, scipy.stats.beta(detected + 1, size - detected + 1), row.ess_tail)
    prints(row, detected, size, value, up, down)


@pytest.mark.parametrize("size", [50, 300])
def test_no_detections_rule_of_three(size):
    # Hanley & Lippman-Hand 1983, JAMA 249, 1743: nothing seen in n, 95 % upper limit near 3/n
    row = row_of(fitted(METALS, 0, size), "debris_fraction")
    assert row.q95 == pytest.approx(3 / size, rel=0.08)
    assert row.q95 == pytest.approx(scipy.stats.beta(1, size + 1).ppf(0.95), rel=0.05)


def with_prior(alpha, beta):
    prior = {"family": "beta", "alpha": alpha, "beta": beta, "basis": "test"}
    return load_model("steady").with_priors({"debris_fraction": prior}, "test")


def posterior_quantile(detected, size, alpha, beta, level):
    problem = posed(counted_survey(detected, size), ChannelSettings(), with_prior(alpha, beta))
    draws = importance_draws(problem, np.random.default_rng(0), draws=20_000)
    assert draws.usable
    return np.quantile(problem.theta(draws.resampled(np.random.default_rng(1), 20_000))["debris_fraction"], level)


@pytest.mark.parametrize(("detected", "size"), [(5, 134), (48, 85)])
def test_intervals_of_the_statistics_library(detected, size):
    """Jeffreys' prior gives Jeffreys' interval; Clopper and Pearson's ends are those of priors at either extreme."""
    tail = 0.1587
    scale = np.sqrt(detected * (size - detected) / size**3)
    low, high = proportion_confint(detected, size, alpha=2 * tail, method="jeffreys")
    assert posterior_quantile(detected, size, 0.5, 0.5, tail) == pytest.approx(low, abs=0.04 * scale)
    assert posterior_quantile(detected, size, 0.5, 0.5, 1 - tail) == pytest.approx(high, abs=0.04 * scale)
    low, high = proportion_confint(detected, size, alpha=2 * tail, method="beta")
    assert posterior_quantile(detected, size, 1e-4, 1, tail) == pytest.approx(low, abs=0.04 * scale)
    assert posterior_quantile(detected, size, 1, 1e-4, 1 - tail) == pytest.approx(high, abs=0.04 * scale)
    exact = scipy.stats.binomtest(detected, size).proportion_ci(1 - 2 * tail, method="exact")
    assert (low, high) == pytest.approx((exact.low, exact.high))


@pytest.mark.parametrize("share", [0.2, 0.45])
def test_imperfect_detection_limit(share):
    """Rogan & Gladen 1978, Am. J. Epidemiol. 107, 71: (p + Sp − 1)/(Se + Sp − 1), Se = P + (1 − P) q, Sp = 1 − q.

    Every star has one limit, the population is fixed, and the values stand where a genuine detection is as likely as a
    spurious one: then only the counts inform.
    """
    size, limit, mean, sd = 4000, 6.8, 7.6, 0.8
    settings = ChannelSettings(ceiling=0.8, false_positive=0.1)
    total = np.hypot(sd, settings.width)
    caught = settings.ceiling * scipy.special.ndtr((mean - limit) / total)

    def balance(value):
        genuine = settings.ceiling * scipy.stats.norm.pdf(value, mean, total) / caught
        return genuine - scipy.stats.halfnorm.pdf(value - limit, scale=settings.spurious_scale)

    value = scipy.optimize.brentq(balance, limit + 1e-6, limit + 2)
    seen = np.arange(size) < round(share * size)
    table = pd.DataFrame(
        {
            "star": [f"s{i}" for i in range(size)],
            "survey": "a",
            "atmosphere": "H",
            "pollution": np.where(seen, "detected", "limit"),
            "log_accretion": np.where(seen, value, np.nan),
            "log_accretion_err": np.where(seen, settings.width, np.nan),
            "log_accretion_limit": limit,
        }
    )
    fixed = {"family": "fixed", "basis": "test"}
    model = load_model("steady").with_priors(
        {"mean_log_accretion": fixed | {"value": mean}, "sd_log_accretion": fixed | {"value": sd}}, "test"
    )
    problem = posed(table, settings, model)
    draws = importance_draws(problem, np.random.default_rng(0))
    fraction = problem.theta(draws.resampled(np.random.default_rng(1), 6000))["debris_fraction"]
    q = settings.false_positive
    sensitivity, specificity = caught + (1 - caught) * q, 1 - q
    p = seen.mean()
    slope = sensitivity + specificity - 1
    assert fraction.mean() == pytest.approx((p + specificity - 1) / slope, abs=0.1 * fraction.std())
    assert fraction.std() == pytest.approx(np.sqrt(p * (1 - p) / size) / slope, rel=0.04)
    # the raw share is far off
    assert abs(p - fraction.mean()) > 3 * fraction.std()
