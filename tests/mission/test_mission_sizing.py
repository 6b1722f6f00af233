"""Numbers of targets: exact formulas, published values and what must always hold."""

import json

import numpy as np
import pytest
import scipy.stats
from helpers.known_priors import beta_prior, known_prior, single_prior
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import betaln

from remnantstats.errors import InputError
from remnantstats.mission import load_mission, size_mission, write_mission
from remnantstats.mission.chances import none_found, planets_found


def exact_none(a, b, n):
    # METHODS §9, c = h = 1: P(none in N) = B(a, b + N)/B(a, b)
    return np.exp(betaln(a, b + n) - betaln(a, b))


@pytest.mark.parametrize(("n", "chance"), [(25, 0.778), (150, 0.221)])
def test_one_star_in_a_hundred(n, chance):
    # CHECKS "Missions", common practice, no source: (0.99)^25 = 0.778, (0.99)^150 = 0.221
    size = size_mission(single_prior(0.01), {"completeness": 1, "max_targets": n})
    assert 1 - size.table["p_at_least_one"].iloc[-1] == pytest.approx(chance, abs=5e-4)


def test_a_finite_list_finds_none_less_often_than_poisson():
    # Brown & Soummer 2010, ApJ 715, 122: an expected 5 planets goes with P(none) = 0.004 < e⁻⁵ = 0.0067; the list
    # here is ours, with completeness falling from 1 to 0.1 as on a list ordered by ease, at an occurrence of 0.3
    completeness = np.linspace(1, 0.1, 31)
    occurrence = np.full(200, 5 / completeness.sum())
    none = none_found(occurrence, completeness, 200).probability[-1]
    assert occurrence[0] * completeness.sum() == pytest.approx(5)
    assert none < np.exp(-5)
    assert none == pytest.approx(0.004, abs=0.001)
    assert none == pytest.approx(np.prod(1 - occurrence[0] * completeness), rel=1e-12)


@pytest.mark.parametrize(("a", "b"), [(6, 130), (2, 5), (1, 101)])
def test_none_found_under_a_beta_prior(a, b):
    rng = np.random.default_rng(6)
    size = size_mission(known_prior(rng.beta(a, b, 8000)), {"completeness": 1, "max_targets": 300})
    table = size.table[size.table["source"] == "draws"]
    exact = exact_none(a, b, table["n_targets"].to_numpy())
    deviation = (1 - table["p_at_least_one"] - exact) / table["mc_error"]
    assert len(table) >= 20
    # the rows share their draws, so that this is about one comparison
    assert np.max(np.abs(deviation)) < 4


@pytest.mark.parametrize(("a", "b"), [(3, 20), (0.8, 9), (6, 130)])
def test_where_draws_fail_the_fitted_beta_takes_over(a, b):
    size = size_mission(beta_prior(a, b, effective=400), {"completeness": 1, "max_targets": 3000})
    table = size.table
    assert set(table["source"]) == {"draws", "fitted Beta"}
    assert any("fitted Beta" in note for note in size.notes)
    exact = exact_none(a, b, table["n_targets"].to_numpy())
    fitted = (table["source"] == "fitted Beta").to_numpy()
    np.testing.assert_allclose(1 - table["p_at_least_one"][fitted], exact[fitted], rtol=0.05)


def test_fitted_density_follows_an_incomplete_search_too():
    # E[(1 − c q)^N] by quadrature in q
    a, b, c = 2, 30, 0.4
    size = size_mission(beta_prior(a, b, effective=200), {"completeness": c, "max_targets": 2000})
    q = (np.arange(400_000) + 0.5) / 400_000
    exact = np.mean(scipy.stats.beta.pdf(q, a, b) * (1 - c * q) ** 2000)
    assert size.table["source"].iloc[-1] == "fitted Beta"
    assert 1 - size.table["p_at_least_one"].iloc[-1] == pytest.approx(exact, rel=0.05)


def test_needed_is_the_smallest_number():
    size = size_mission(beta_prior(2, 5), {"completeness": 1, "success": [0.9, 0.95]})
    n = np.arange(1, 501)
    for level in (0.5, 0.9, 0.95):
        assert size.needed(level) == n[exact_none(2, 5, n) <= 1 - level][0]
    assert list(size.needs["n_targets"]) == [size.needed(0.9), size.needed(0.95)]
    assert size.needs["reached"].all()


def test_mixture_is_not_the_product_at_the_mean():
    # Jensen: the mean of (1 − q)^N exceeds (1 − mean q)^N, so the naive number of targets is too small
    size = size_mission(beta_prior(1, 20), {"completeness": 0.6, "success": [0.9]})
    table = size.table.iloc[1:]
    assert np.all(table["p_at_least_one"] < table["p_at_least_one_naive"])
    assert size.needs["n_targets_naive"][0] < size.needs["n_targets"][0] / 2
    mean = 1 / 21
    naive = size.table["p_at_least_one_naive"].iloc[9]
    assert naive == pytest.approx(1 - (1 - 0.6 * mean) ** 10, rel=1e-3)


def test_unreachable_level_says_so(tmp_path):
    eta = np.where(np.arange(1000) < 200, 0.0, 0.3)
    earthlike = np.where(np.arange(1000) < 200, 0.0, 1.0)
    size = size_mission(known_prior(np.maximum(eta, 0.1), earthlike), {"completeness": 1, "success": [0.5, 0.9]})
    assert size.probability_zero == pytest.approx(0.2)
    assert size.needed(0.9) is None
    assert size.needed(0.5) is not None
    assert size.needs["n_targets"].isna().tolist() == [False, True]
    assert size.needs["p_at_limit"][1] == pytest.approx(0.8)
    assert "not reached; 500 targets" in repr(size)
    assert "with probability 0.2 there is none to be found" in repr(size)
    written = json.loads(write_mission(size, tmp_path)[1].read_text(encoding="utf-8"))
    assert written["needs"][1]["n_targets"] is None
    assert written["probability_zero"] == pytest.approx(0.2)


@settings(max_examples=40, deadline=None)
@given(
    a=st.floats(0.5, 8),
    b=st.floats(1, 60),
    low=st.floats(0.05, 1),
    factor=st.floats(0.1, 1),
    level=st.floats(0.05, 0.9),
)
def test_more_completeness_never_needs_more_targets(a, b, low, factor, level):
    prior = beta_prior(a, b, size=1000)
    better = size_mission(prior, {"completeness": low, "max_targets": 120}).needed(level)
    worse = size_mission(prior, {"completeness": low * factor, "max_targets": 120}).needed(level)
    assert worse is None or (better is not None and better <= worse)


@settings(max_examples=40, deadline=None)
@given(a=st.floats(0.5, 8), b=st.floats(1, 60), c=st.lists(st.floats(0.01, 1), min_size=2, max_size=30))
def test_every_target_adds_to_the_chance(a, b, c):
    none = none_found(beta_prior(a, b, size=500).values(), np.array(c), 500)
    assert np.all(np.diff(none.probability) <= 0)
    assert np.all((none.probability >= 0) & (none.probability <= 1))
    assert np.all(none.probability >= none.naive * (1 - 1e-12))


@pytest.mark.parametrize(("a", "b", "c"), [(2, 5, 1.0), (2, 5, 0.4), (0.8, 30, 0.6)])
def test_yield_under_a_beta_prior_is_beta_binomial(a, b, c):
    # for c = 1 the number found is beta-binomial (scipy.stats.betabinom); else its mixture by quadrature
    found = planets_found(beta_prior(a, b).values(), np.full(80, c))
    for n in (1, 10, 80):
        if c == 1:
            expected = scipy.stats.betabinom.ppf([0.05, 0.5, 0.95], n, a, b)
        else:
            q = scipy.stats.beta.ppf((np.arange(20_000) + 0.5) / 20_000, a, b)
            cumulative = np.array([scipy.stats.binom.cdf(k, n, c * q).mean() for k in range(n + 1)])
            expected = np.searchsorted(cumulative, [0.05, 0.5, 0.95])
        np.testing.assert_array_equal(found[n - 1], expected)


def test_yield_of_a_list_against_simulation():
    rng = np.random.default_rng(12)
    completeness = np.sort(rng.uniform(0.1, 1, 60))[::-1]
    q = beta_prior(3, 9).values()
    drawn = rng.choice(q, 200_000)[:, None]
    counts = np.sum(rng.random((200_000, 60)) < drawn * completeness, axis=1)
    np.testing.assert_allclose(
        planets_found(q, completeness)[-1], np.quantile(counts, [0.05, 0.5, 0.95], method="inverted_cdf"), atol=0
    )


def write_list(folder, rows, header="target,distance,completeness"):
    path = folder / "targets.csv"
    path.write_text("\n".join([header, *rows]))
    return path


def test_listed_targets_are_observed_best_first(tmp_path):
    write_list(tmp_path, ["far,20,0.9", "poor,3,0.2", "near,5,0.9", "fair,4,0.5"])
    (tmp_path / "mission.toml").write_text('targets = "targets.csv"\nsuccess = [0.5]')
    size = size_mission(single_prior(0.3), load_mission(tmp_path / "mission.toml"))
    assert size.order is not None
    assert list(size.order["target"]) == ["near", "far", "fair", "poor"]
    assert list(size.order["rank"]) == [1, 2, 3, 4]
    chances = 1 - np.cumprod(1 - 0.3 * np.array([0.9, 0.9, 0.5, 0.2]))
    np.testing.assert_allclose(size.table["p_at_least_one"], chances, rtol=1e-6)
    np.testing.assert_allclose(size.order["gain"], np.diff(chances, prepend=0), rtol=1e-6)
    assert len(size.table) == 4
    described = {item.name: item.description for item in size.assumptions}
    assert "from the target list, 0.2 to 0.9" in described["completeness"]
    assert any("falling completeness" in note for note in size.notes)


def test_files_and_views(tmp_path):
    size = size_mission(
        beta_prior(2, 5),
        {"completeness": 0.6, "max_targets": 30, "basis": {"completeness": "<i>yield</i> study"}, "density": 0.01},
    )
    as_csv, as_json = write_mission(size, tmp_path, ["quick look"])
    lines = as_csv.read_text(encoding="utf-8").splitlines()
    assert lines[0].startswith("n_targets,p_at_least_one,expected,q05,q50,q95")
    assert len(lines) == 31
    assert lines[1].endswith(",quick look")
    content = json.loads(as_json.read_text(encoding="utf-8"))
    assert content["schema_version"] == 1
    assert content["marks"] == ["quick look"]
    assert content["order"] is None
    assert [row["k"] for row in content["distances"]] == [1, 2, 3, 4, 5]
    assert content["distances"][0]["aperture_q50"] is None
    bases = {item["name"]: item["basis"] for item in content["assumptions"]}
    assert bases == {"retention": "a test", "completeness": "<i>yield</i> study", "density": "assumed, no basis given"}
    assert "<i>" not in size._repr_html_()
    with pytest.raises(InputError, match="success level"):
        size.needed(1.0)


def test_certain_planets_found_at_the_first_target():
    size = size_mission(single_prior(1 - 1e-9), {"completeness": 1, "max_targets": 5})
    assert size.needed(0.99) == 1
    assert list(size.table["q50"]) == [1, 2, 3, 4, 5]
