"""Abundances to rates and back; errors against brute force."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from remnantstats.errors import InputError
from remnantstats.physics import accretion
from remnantstats.physics.accretion_errors import StarParameters, rate_with_errors
from remnantstats.physics.settling import SettlingGrid, koester2009_grid

METALS = ("C", "O", "Na", "Mg", "Al", "Si", "S", "Ca", "Ti", "Cr", "Fe", "Ni")
layer = {
    "log_settling_time": st.floats(-3.0, 7.0),
    "log_cvz_fraction": st.floats(-18.0, -3.0),
    "mass": st.floats(0.3, 1.3),
}


def curved_grid(single_logg: bool = False) -> SettlingGrid:
    """An invented grid that bends in both directions."""
    logg_nodes = [8.0] if single_logg else [7.0, 7.5, 8.0, 8.5, 9.0]
    rows = [
        (kind, teff, logg, element, 2.0 - 3e-4 * (teff - 1e4) - 0.8 * (logg - 8.0), -10.0 - 8e-4 * (teff - 1e4))
        for kind in ("H", "He")
        for element in ("Ca", "Mg")
        for teff in np.arange(6000.0, 20001.0, 1000.0)
        for logg in logg_nodes
    ]
    names = ["atmosphere", "teff", "logg", "element", "log_settling_time", "log_cvz_fraction"]
    return SettlingGrid.from_table(pd.DataFrame(rows, columns=names), "an invented grid")


GRID = curved_grid()


def test_steady_state_written_out():
    # one star in cgs by hand: M_cvz X_Z / t_Z over the calcium share
    solar_mass, year = 1.988416e33, 3.15576e7
    mass_share = 1e-7 * 40.078 / 1.008
    expected = 0.6 * solar_mass * 1e-9 * mass_share / (100.0 * year) / 0.016
    assert 10 ** accretion.rate_of_abundance(-7.0, "Ca", "H", 2.0, -9.0, 0.6) == pytest.approx(expected, rel=1e-4)


def test_bulk_earth():
    # Allègre et al. 2001 (from memory, CHECKS.md): calcium 0.016; shares of a whole, rounded
    assert accretion.BULK_EARTH["Ca"] == pytest.approx(0.016)
    assert sum(accretion.BULK_EARTH.values()) == pytest.approx(1.0, abs=0.005)


def test_ordinary_abundances_give_ordinary_rates():
    # common practice, no source: 10^6 to 10^9 g/s. Time of Koester 2009 at 20,000 K; mixed mass 10^-16 invented
    log_time = koester2009_grid().log_settling_time_at("H", "Ca", 20000.0, 8.0)
    rates = accretion.rate_of_abundance(np.array([-8.5, -7.0, -6.0]), "Ca", "H", log_time, -16.0, 0.6)
    assert np.all((rates > 6.0) & (rates < 9.0))


@given(st.floats(4.0, 13.0), st.sampled_from(METALS), st.sampled_from(["H", "He"]), *layer.values())
def test_round_trip(log_rate, element, atmosphere, log_time, log_cvz, mass):
    abundance = accretion.abundance_of_rate(log_rate, element, atmosphere, log_time, log_cvz, mass)
    assert np.isfinite(abundance)
    back = accretion.rate_of_abundance(abundance, element, atmosphere, log_time, log_cvz, mass)
    assert back == pytest.approx(log_rate, abs=1e-10)


@given(st.floats(-12.0, -3.0), st.floats(0.01, 2.0), st.sampled_from(METALS), *layer.values())
def test_monotone_where_physics_says_so(abundance, step, element, log_time, log_cvz, mass):
    def rate(a=abundance, t=log_time, q=log_cvz, m=mass):
        return float(accretion.rate_of_abundance(a, element, "H", t, q, m))

    assert rate(a=abundance + step) > rate()
    assert rate(t=log_time + step) < rate()
    assert rate(q=log_cvz + step) > rate()
    assert rate(m=mass + step) > rate()


def test_the_total_exceeds_the_part_by_the_share():
    assert accretion.total_rate(7.0, "Ca") == pytest.approx(7.0 - np.log10(0.016))
    assert accretion.total_rate(7.0, "Ca", {"Ca": 0.1}) == pytest.approx(8.0)


def test_helium_weighs_four():
    difference = accretion.log_mass_share(-7.0, "Ca", "H") - accretion.log_mass_share(-7.0, "Ca", "He")
    assert difference == pytest.approx(np.log10(4.0026 / 1.008))


def test_vectorised_over_stars_and_elements():
    together = accretion.rate_of_abundance(
        [-7.0, -6.0], ["Ca", "Mg"], ["H", "He"], [1.0, 5.0], [-10.0, -6.0], [0.6, 0.7]
    )
    apart = [
        float(accretion.rate_of_abundance(-7.0, "Ca", "H", 1.0, -10.0, 0.6)),
        float(accretion.rate_of_abundance(-6.0, "Mg", "He", 5.0, -6.0, 0.7)),
    ]
    np.testing.assert_allclose(together, apart)


def test_unknown_element_is_refused():
    with pytest.raises(InputError, match=r"(?s)no atomic weight is known.*column 'element'.*Xx"):
        accretion.metal_rate(-7.0, ["Ca", "Xx"], "H", 1.0, -10.0, 0.6)


def test_element_without_a_share_is_refused():
    with pytest.raises(InputError, match=r"(?s)no mass share in the debris is known.*Li"):
        accretion.total_rate(7.0, "Li")


def stars(n, **changes):
    values = {"atmosphere": "H", "teff": 11300.0, "teff_err": 250.0, "logg": 8.05, "logg_err": 0.06, "mass": 0.62}
    values |= changes
    return StarParameters(**{k: v if isinstance(v, str) else np.broadcast_to(v, (n,)) for k, v in values.items()})


def test_errors_against_brute_force():
    n = 400
    many = rate_with_errors(
        GRID,
        stars(n),
        "Ca",
        np.full(n, -7.0),
        np.full(n, 0.12),
        np.full(n, -8.0),
        rng=np.random.default_rng(2),
        draws=64,
    )
    rng = np.random.default_rng(99)
    teff, logg = rng.normal(11300.0, 250.0, 200_000), rng.normal(8.05, 0.06, 200_000)
    draws = accretion.rate_of_abundance(
        -7.0,
        "Ca",
        "H",
        GRID.log_settling_time_at("H", "Ca", teff, logg),
        GRID.log_cvz_fraction_at("H", "Ca", teff, logg),
        0.62,
    )
    # 64 draws give each star's error to 1/√126 = 9 %; 400 stars give their mean square to under 1 %
    assert np.sqrt(np.mean(many.calibration_err**2)) == pytest.approx(draws.std(), rel=0.02)
    assert many.calibration_err.std() / draws.std() == pytest.approx(0.089, abs=0.02)
    assert many.log_rate[0] + many.calibration_bias.mean() == pytest.approx(draws.mean(), abs=4 * draws.std() / 160)
    np.testing.assert_allclose(many.decision_err, 0.12)
    assert np.all(many.clamped_share == 0.0)


def test_value_and_limit_move_together():
    n = 50
    abundance, limit = np.linspace(-8, -6, n), np.linspace(-9, -8, n)
    result = rate_with_errors(GRID, stars(n), "Ca", abundance, 0.1, limit, rng=np.random.default_rng(1))
    np.testing.assert_allclose(result.log_rate - result.log_limit, abundance - limit)


def test_a_limit_without_a_value():
    result = rate_with_errors(GRID, stars(2), "Ca", [np.nan, -7.0], 0.1, [-8.0, np.nan], rng=np.random.default_rng(1))
    assert np.isnan(result.log_rate).tolist() == np.isnan(result.decision_err).tolist() == [True, False]
    assert np.isnan(result.log_limit).tolist() == [False, True]
    assert np.isfinite(result.calibration_err).all()


def test_best_value_is_the_plain_conversion():
    result = rate_with_errors(GRID, stars(1, teff_err=0.0, logg_err=0.0), "Mg", -6.5, 0.1, rng=np.random.default_rng(1))
    time = GRID.log_settling_time_at("H", "Mg", 11300.0, 8.05)
    cvz = GRID.log_cvz_fraction_at("H", "Mg", 11300.0, 8.05)
    np.testing.assert_allclose(result.log_rate, accretion.rate_of_abundance(-6.5, "Mg", "H", time, cvz, 0.62))
    np.testing.assert_allclose(result.calibration_err, 0.0, atol=1e-12)


def test_model_error_and_abundance_slopes_enter_the_calibration_error():
    quiet = stars(300, logg_err=0.0)
    plain = rate_with_errors(GRID, quiet, "Ca", -7.0, 0.1, rng=np.random.default_rng(5))
    extra = rate_with_errors(GRID, quiet, "Ca", -7.0, 0.1, rng=np.random.default_rng(5), model_err=0.3)
    np.testing.assert_allclose(extra.calibration_err, np.hypot(plain.calibration_err, 0.3))
    # the invented grid gives −5e-4 dex per K for the ratio: a slope of +5e-4 in the abundance undoes it
    undone = rate_with_errors(GRID, quiet, "Ca", -7.0, 0.1, rng=np.random.default_rng(5), abundance_slopes=(5e-4, 0.0))
    assert plain.calibration_err.mean() == pytest.approx(5e-4 * 250.0, rel=0.02)
    np.testing.assert_allclose(undone.calibration_err, 0.0, atol=1e-10)


def test_result_does_not_depend_on_chunks(monkeypatch):
    n = 37
    mixed = stars(n, teff=np.linspace(7000, 19000, n))
    arguments = (GRID, mixed, np.where(np.arange(n) % 2, "Ca", "Mg"), np.full(n, -7.0), 0.1)
    whole = rate_with_errors(*arguments, rng=np.random.default_rng(8))
    monkeypatch.setattr("remnantstats.physics.accretion_errors._CHUNK_POINTS", 64 * 5)
    parts = rate_with_errors(*arguments, rng=np.random.default_rng(8))
    np.testing.assert_array_equal(whole.calibration_err, parts.calibration_err)
    np.testing.assert_array_equal(whole.log_rate, parts.log_rate)


def test_draws_beyond_the_edge_are_counted():
    result = rate_with_errors(GRID, stars(200, teff=20000.0), "Ca", -7.0, 0.1, rng=np.random.default_rng(4))
    assert result.clamped_share.mean() == pytest.approx(0.5, abs=0.02)


def test_one_gravity_only_leaves_its_error_out():
    grid = curved_grid(single_logg=True)
    wide = stars(100, logg_err=0.5)
    result = rate_with_errors(grid, wide, "Ca", -7.0, 0.1, rng=np.random.default_rng(4))
    assert result.calibration_err.mean() == pytest.approx(5e-4 * 250.0, rel=0.03)
    assert np.all(result.clamped_share == 0.0)


def test_star_outside_the_grid_is_refused_by_name():
    with pytest.raises(
        InputError, match=r"(?s)outside an invented grid.*star two.*element Ca.*teff = 21000 K, logg = 8\.05"
    ):
        rate_with_errors(
            GRID,
            stars(2, teff=np.array([10000.0, 21000.0])),
            "Ca",
            -7.0,
            0.1,
            rng=np.random.default_rng(1),
            labels=["one", "two"],
        )


def test_times_alone_give_no_rate():
    with pytest.raises(InputError, match="times alone give no rate"):
        rate_with_errors(koester2009_grid(), stars(1, logg=8.0), "Ca", -7.0, 0.1, rng=np.random.default_rng(1))


def test_nothing_in_nothing_out():
    empty = StarParameters("H", *(np.empty(0) for _ in range(5)))
    result = rate_with_errors(GRID, empty, "Ca", np.empty(0), np.empty(0), rng=np.random.default_rng(1))
    assert result.log_rate.shape == result.calibration_err.shape == (0,)


def test_missing_cells_of_an_error_do_not_pass_as_zero():
    result = rate_with_errors(GRID, stars(1, teff_err=np.nan), "Ca", -7.0, 0.1, rng=np.random.default_rng(1))
    assert np.isnan(result.calibration_err).all()
