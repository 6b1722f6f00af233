"""The transfer f = η R D against brute-force quadrature, and the limits where the answer is known."""

import numpy as np
import pytest
import scipy.special
import scipy.stats

from remnantstats.errors import InferenceError, InputError
from remnantstats.occurrence import occurrence_prior, parse_transfer
from remnantstats.occurrence.density import fit_beta, fit_density, logit_of
from remnantstats.occurrence.transfer import fraction_likelihood
from remnantstats.population.distributions import Beta, Fixed, Normal, Uniform

QUANTILES = np.array([0.05, 0.1587, 0.5, 0.8413, 0.95])
ONE = {"family": "fixed", "value": 1}


def beta(alpha, beta):
    return {"family": "beta", "alpha": alpha, "beta": beta}


def beta_draws(alpha, beta, size=4000):
    """Draws of a Beta distribution without noise, in random order."""
    points = (np.arange(size) + 0.5) / size
    return np.random.default_rng(3).permutation(scipy.stats.beta.ppf(points, alpha, beta))


def brute_force(k, n, prior, retention, delivery, points=240):
    """Posterior of η on a grid: binomial likelihood of k in n with f = η R D (METHODS §8), midpoint rule."""
    x = (np.arange(points) + 0.5) / points
    eta, r, d = x[:, None, None], x[None, :, None], x[None, None, :]
    f = eta * r * d
    log = k * np.log(f) + (n - k) * np.log1p(-f)
    log = log + scipy.stats.beta.logpdf(eta, *prior) + scipy.stats.beta.logpdf(r, *retention)
    log = log + scipy.stats.beta.logpdf(d, *delivery)
    weights = np.exp(log - log.max())
    weights /= weights.sum()
    eta_mass = weights.sum(axis=(1, 2))
    quantiles = np.interp(QUANTILES, np.append(0, np.cumsum(eta_mass)), np.linspace(0, 1, points + 1))
    return {"eta": eta_mass @ x, "r": np.sum(weights * r), "d": np.sum(weights * d), "quantiles": quantiles}


@pytest.mark.parametrize(("k", "n"), [(5, 134), (3, 195), (76, 168), (0, 100), (20, 20)])
def test_without_losses_the_rocky_system_fraction_is_the_debris_fraction(k, n):
    # METHODS §8: with R = D = 1 and both priors uniform, η's posterior is f's, Beta(k + 1, n − k + 1)
    draws = beta_draws(k + 1, n - k + 1)
    prior = occurrence_prior(draws, {"retention": ONE, "delivery": ONE}, seed=1)
    exact = scipy.stats.beta(k + 1, n - k + 1)
    assert prior.method == "joint model"
    np.testing.assert_allclose(prior.quantile(QUANTILES), exact.ppf(QUANTILES), atol=0.01 * exact.std())
    assert prior.values().mean() == pytest.approx(exact.mean(), abs=0.005 * exact.std())
    assert prior.values().std() == pytest.approx(exact.std(), rel=0.01)


def test_quantiles_follow_the_draws_that_were_given():
    draws = np.random.default_rng(8).beta(6, 130, 4000)
    prior = occurrence_prior(draws, {"retention": ONE, "delivery": ONE})
    # within the Monte Carlo error of a quantile of 4,000 draws, about 0.03 sd at 5 and 95 %
    np.testing.assert_allclose(prior.quantile(QUANTILES), np.quantile(draws, QUANTILES), atol=0.06 * draws.std())
    assert prior.values().mean() == pytest.approx(draws.mean(), abs=0.01 * draws.std())


@pytest.mark.parametrize(
    ("k", "n", "prior", "retention", "delivery"),
    [
        (76, 168, (1, 1), (8, 2), (5, 5)),
        (5, 134, (1, 1), (8, 2), (5, 5)),
        (0, 60, (1, 1), (8, 2), (5, 5)),
        (12, 40, (3, 2), (20, 3), (4, 9)),
    ],
)
def test_joint_model_agrees_with_brute_force(k, n, prior, retention, delivery):
    transfer = {"retention": beta(*retention), "delivery": beta(*delivery), "prior": beta(*prior)}
    found = occurrence_prior(beta_draws(k + 1, n - k + 1), transfer, seed=2)
    exact = brute_force(k, n, prior, retention, delivery)
    assert found.method == "joint model"
    assert found.values().mean() == pytest.approx(exact["eta"], rel=0.01)
    assert found.values("retention").mean() == pytest.approx(exact["r"], rel=0.01)
    assert found.values("delivery").mean() == pytest.approx(exact["d"], rel=0.01)
    np.testing.assert_allclose(found.quantile(QUANTILES), exact["quantiles"], rtol=0.02)


def test_importance_weights_agree_with_brute_force_where_they_serve():
    # a vague survey and narrow priors: no prior mass outside the range of the draws
    transfer = {"retention": beta(80, 2), "delivery": beta(60, 2), "prior": beta(8, 8)}
    found = occurrence_prior(beta_draws(4, 4), transfer, seed=2)
    exact = brute_force(3, 6, (8, 8), (80, 2), (60, 2))
    assert found.method == "importance weights"
    assert found.k_hat < 0.7
    assert found.values().mean() == pytest.approx(exact["eta"], rel=0.01)
    np.testing.assert_allclose(found.quantile(QUANTILES), exact["quantiles"], rtol=0.02)


def test_prior_of_the_debris_fraction_is_divided_out():
    # Beta(2, 6) used in the fit: the posterior of 5 in 134 is Beta(7, 135), its likelihood still that of 5 in 134
    draws = beta_draws(7, 135)
    known = occurrence_prior(draws, {"retention": ONE, "delivery": ONE}, fraction_prior=Beta(alpha=2, beta=6))
    exact = scipy.stats.beta(6, 130)
    np.testing.assert_allclose(known.quantile(QUANTILES), exact.ppf(QUANTILES), atol=0.02 * exact.std())
    sampled = occurrence_prior(draws, {"retention": ONE, "delivery": ONE}, fraction_prior=beta_draws(2, 6, 20_000))
    np.testing.assert_allclose(sampled.quantile(QUANTILES), exact.ppf(QUANTILES), atol=0.04 * exact.std())

    def on_logit_scale(t):
        return 2 * scipy.special.log_expit(t) + 6 * scipy.special.log_expit(-t)

    called = occurrence_prior(draws, {"retention": ONE, "delivery": ONE}, fraction_prior=on_logit_scale)
    np.testing.assert_allclose(called.quantile(QUANTILES), known.quantile(QUANTILES), rtol=1e-6)


def test_draws_as_prior_of_the_rocky_system_fraction(tmp_path):
    values = beta_draws(3, 5, 5000)
    (tmp_path / "eta.csv").write_text("eta\n" + "\n".join(map(repr, values.tolist())))
    transfer = parse_transfer(
        {"retention": beta(8, 2), "delivery": beta(5, 5), "prior": {"family": "draws", "file": "eta.csv"}},
        "study.toml",
        tmp_path,
    )
    found = occurrence_prior(beta_draws(13, 29), transfer, seed=2)
    exact = brute_force(12, 40, (3, 5), (8, 2), (5, 5))
    assert found.values().mean() == pytest.approx(exact["eta"], rel=0.01)
    np.testing.assert_allclose(found.quantile(QUANTILES), exact["quantiles"], rtol=0.02)


def test_zero_detections_leave_an_upper_limit_and_a_finite_prior():
    # Hanley & Lippman-Hand 1983: the 95 % upper limit is near 3/n
    found = occurrence_prior(beta_draws(1, 101), {"retention": ONE, "delivery": ONE})
    assert found.quantile(0.95) == pytest.approx(3 / 100, rel=0.03)
    assert np.all(np.isfinite(found.values()))
    assert np.all(found.values() > 0)


def test_draws_are_never_divided_and_clipped():
    # k = n = 20 asks for f near 1, which R D ~ 0.4 forbids: η piles up towards 1, never at it
    found = occurrence_prior(beta_draws(21, 1), {"retention": beta(8, 2), "delivery": beta(5, 5)})
    assert np.all(found.values() < 1)
    assert np.unique(found.values()).size > 7000
    product = found.values() * found.values("retention") * found.values("delivery")
    exact = brute_force(20, 20, (1, 1), (8, 2), (5, 5))
    assert found.values("delivery").mean() == pytest.approx(exact["d"], rel=0.01)
    assert product.mean() < 0.9


def test_priors_that_conflict_with_the_data_are_marked():
    # f = 0.40 ± 0.02 with R at most 0.3: no η in [0, 1] reaches it
    low = {"family": "uniform", "low": 0.2, "high": 0.3}
    found = occurrence_prior(beta_draws(401, 601), {"retention": low, "delivery": ONE})
    assert found.values().mean() > 0.98
    assert "conflict with the debris fraction" in found.marks[0]
    assert not occurrence_prior(beta_draws(401, 601), {"retention": ONE, "delivery": ONE}).marks


def test_earthlike_fraction_is_the_product():
    found = occurrence_prior(beta_draws(6, 130), {"retention": ONE, "delivery": ONE, "earthlike": beta(2, 8)})
    np.testing.assert_array_equal(found.values("earthlike_fraction"), found.values() * found.values("earthlike"))
    assert found.values("earthlike_fraction").mean() == pytest.approx(6 / 136 * 0.2, rel=0.03)
    assert found.earthlike_beta != found.beta


def test_same_seed_same_result_and_a_fit_is_accepted():
    class FitLike:
        fraction_prior = Beta(alpha=2, beta=6)

        def fraction_draws(self):
            return beta_draws(7, 135)

    transfer = {"retention": beta(8, 2), "delivery": beta(5, 5)}
    first, second = (occurrence_prior(FitLike(), transfer, seed=9) for _ in range(2))
    other = occurrence_prior(beta_draws(7, 135), transfer, seed=9, fraction_prior=Beta(alpha=2, beta=6))
    np.testing.assert_array_equal(first.values(), second.values())
    np.testing.assert_array_equal(first.values(), other.values())
    assert first.seed == 9


def test_a_fixed_debris_fraction_says_nothing():
    with pytest.raises(InputError, match="held fixed"):
        occurrence_prior(beta_draws(6, 130), {"retention": ONE, "delivery": ONE}, fraction_prior=Fixed(value=0.3))
    with pytest.raises(InferenceError, match="do not vary"):
        occurrence_prior(np.full(1000, 0.3), {"retention": ONE, "delivery": ONE})


@pytest.mark.parametrize("bad", [np.full(500, 1.2), np.full(500, np.nan), np.full(20, 0.3), -np.ones(300)])
def test_draws_that_are_not_fractions_are_refused(bad):
    with pytest.raises(InputError, match="posterior draws of the debris fraction"):
        occurrence_prior(bad, {"retention": ONE, "delivery": ONE})


@pytest.mark.parametrize(("a", "b"), [(1.0, 101.0), (0.5, 0.5), (6.0, 130.0), (2000.0, 5000.0)])
def test_beta_fit_is_that_of_scipy(a, b):
    draws = np.random.default_rng(4).beta(a, b, 4000)
    fit = fit_beta(draws)
    expected = scipy.stats.beta.fit(draws, floc=0, fscale=1)[:2]
    np.testing.assert_allclose([fit.alpha, fit.beta], expected, rtol=1e-5)
    assert fit.divergence < 0.004


def test_divergence_of_a_fit_is_the_kullback_leibler_integral():
    # two far modes: KL by quadrature on a fine grid
    x = (np.arange(200_000) + 0.5) / 200_000
    density = 0.5 * scipy.stats.beta.pdf(x, 8, 40) + 0.5 * scipy.stats.beta.pdf(x, 40, 40)
    draws = np.concatenate([beta_draws(8, 40), beta_draws(40, 40)])
    fit = fit_beta(draws)
    exact = np.mean(density * (np.log(density + 1e-300) - scipy.stats.beta.logpdf(x, fit.alpha, fit.beta)))
    assert fit.divergence == pytest.approx(exact, rel=0.15)


def test_likelihood_is_binomial_for_binomial_data():
    fit = fraction_likelihood(beta_draws(13, 29))
    f = np.array([0.1, 0.2, 0.3, 0.5, 0.7])
    found = fit.ratio_at(logit_of(f))
    exact = 12 * np.log(f) + 28 * np.log1p(-f)
    np.testing.assert_allclose(found - found[2], exact - exact[2], atol=0.02)


def test_density_of_a_skewed_posterior_is_followed_by_splines():
    t = np.random.default_rng(5).gamma(2.0, 1.0, 8000) - 3
    fit = fit_density(scipy.special.expit(t))
    assert fit.splines > 0
    assert fit.misfit < 0.012
    assert np.exp(fit.log_mass).sum() == pytest.approx(1, abs=1e-9)


def test_a_prior_on_another_range_than_the_draws_is_refused():
    with pytest.raises(InferenceError, match="no probability"):
        fraction_likelihood(beta_draws(60, 40), Uniform(low=0.0, high=0.01))
    assert np.isfinite(fraction_likelihood(beta_draws(60, 40), Normal(mean=0.5, sd=1.0)).misfit)
