"""The exported prior: written, read back, and refused where it is damaged (INTERFACE §5)."""

import json
import sys

import numpy as np
import pytest
import scipy.stats
import xarray as xr

from remnantstats.errors import InputError
from remnantstats.files import atomic_path
from remnantstats.occurrence import occurrence_prior, read_prior, write_prior

TRANSFER = {
    "retention": {"family": "beta", "alpha": 8, "beta": 2, "basis": "<b>survival & co</b> é"},
    "delivery": {"family": "beta", "alpha": 5, "beta": 5},
    "earthlike": {"family": "beta", "alpha": 2, "beta": 8},
}


@pytest.fixture(scope="module")
def prior():
    draws = scipy.stats.beta.ppf((np.arange(4000) + 0.5) / 4000, 6, 130)
    return occurrence_prior(draws, TRANSFER, seed=4, reference="H stars of 1 Gyr")


def assert_same(first, second):
    assert first.assumptions == second.assumptions
    assert (first.beta, first.earthlike_beta) == (second.beta, second.earthlike_beta)
    assert (first.method, first.seed, first.reference) == (second.method, second.seed, second.reference)
    assert first.notes == second.notes
    assert first.k_hat == second.k_hat


def test_round_trip_by_netcdf_is_exact(prior, tmp_path):
    _, path = write_prior(prior, tmp_path)
    back = read_prior(path)
    assert_same(back, prior)
    for name in prior.draws:
        np.testing.assert_array_equal(back.values(name), prior.values(name))


def test_round_trip_by_json_keeps_the_quantiles(prior, tmp_path):
    path, _ = write_prior(prior, tmp_path)
    back = read_prior(path)
    assert_same(back, prior)
    assert back.draws.sizes["draw"] == 4000
    points = [0.05, 0.5, 0.95]
    np.testing.assert_allclose(back.quantile(points), prior.quantile(points), rtol=2e-3)


def test_files_carry_assumptions_and_marks(prior, tmp_path):
    as_json, as_netcdf = write_prior(prior, tmp_path, ["quick look"])
    content = json.loads(as_json.read_text(encoding="utf-8"))
    assert content["schema_version"] == 1
    assert content["marks"] == ["quick look"]
    bases = {item["name"]: item["basis"] for item in content["assumptions"]}
    assert bases["retention"] == "<b>survival & co</b> é"
    assert bases["delivery"] == "assumed, no basis given"
    assert content["beta"]["divergence"] >= 0
    assert read_prior(as_netcdf).marks == ("quick look",)
    with xr.open_dataset(as_netcdf, engine="h5netcdf") as opened:
        assert "survival" in opened.attrs["assumptions"]
        assert opened["retention"].attrs["units"] == "1"
    assert sorted(item.name for item in tmp_path.iterdir()) == ["occurrence_prior.json", "occurrence_prior.nc"]


def damage(path, change):
    content = json.loads(path.read_text(encoding="utf-8"))
    change(content)
    path.write_text(json.dumps(content), encoding="utf-8")


@pytest.mark.parametrize(
    ("change", "key"),
    [
        (lambda c: c.update(schema_version=2), "schema_version"),
        (lambda c: c.update(schema_version="1"), "schema_version"),
        (lambda c: c.pop("schema_version"), "schema_version"),
        (lambda c: c.update(kind="other"), "kind"),
        (lambda c: c.pop("draws"), "draws.rocky_system_fraction"),
        (lambda c: c["draws"].pop("earthlike"), "draws.earthlike"),
        (lambda c: c["draws"]["retention"].__setitem__(3, 1.5), "draws.retention"),
        (lambda c: c["draws"]["delivery"].__setitem__(3, float("nan")), "draws.delivery"),
        (lambda c: c["draws"]["delivery"].__setitem__(3, "x"), "draws.delivery"),
        (lambda c: c["draws"].update(delivery=[[0.5]]), "draws.delivery"),
        (lambda c: c["draws"]["delivery"].pop(), "draws"),
        (lambda c: c["draws"]["earthlike_fraction"].__setitem__(3, 0.9), "draws.earthlike_fraction"),
        (lambda c: c.pop("beta"), "beta"),
        (lambda c: c.update(beta={"alpha": -1, "beta": 2, "divergence": 0}), "beta"),
        (lambda c: c.update(beta=3), "beta"),
        (lambda c: c["draws"]["delivery"].__setitem__(3, 10**400), "draws.delivery"),
        (lambda c: c.pop("assumptions"), "assumptions"),
        (lambda c: c.update(effective_draws="many"), "effective_draws"),
    ],
)
def test_damaged_json_is_refused_by_key(prior, tmp_path, change, key):
    path, _ = write_prior(prior, tmp_path)
    damage(path, change)
    with pytest.raises(InputError) as caught:
        read_prior(path)
    assert f"key '{key}'" in str(caught.value)
    assert str(path) in str(caught.value)


@pytest.mark.parametrize(
    "change", [lambda c: c.update(assumptions=[1]), lambda c: c.update(seed="x"), lambda c: c.update(notes=3)]
)
def test_malformed_fields_are_refused(prior, tmp_path, change):
    path, _ = write_prior(prior, tmp_path)
    damage(path, change)
    with pytest.raises(InputError, match="malformed"):
        read_prior(path)


@pytest.mark.parametrize("text", ["", "{", "[1]", "nonsense", "[" * 100_000])
def test_what_is_not_a_prior_is_refused(tmp_path, text):
    for name in ("p.json", "p.nc"):
        (tmp_path / name).write_text(text)
        with pytest.raises(InputError):
            read_prior(tmp_path / name)


def test_absent_file_and_bytes_that_are_not_text(tmp_path):
    with pytest.raises(InputError, match="does not exist"):
        read_prior(tmp_path / "none.json")
    (tmp_path / "p.json").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="cannot be read as JSON"):
        read_prior(tmp_path / "p.json")


def test_damaged_netcdf_is_refused_by_key(prior, tmp_path):
    _, path = write_prior(prior, tmp_path)
    for change in ({"schema_version": 7}, {"assumptions": "[{"}):
        with xr.open_dataset(path, engine="h5netcdf") as opened:
            changed = opened.load().assign_attrs(change)
        other = tmp_path / "changed.nc"
        changed.to_netcdf(other, engine="h5netcdf")
        with pytest.raises(InputError, match=f"key '{next(iter(change))}'"):
            read_prior(other)


def test_a_write_that_fails_leaves_the_earlier_file(tmp_path):
    path = tmp_path / "a.txt"
    path.write_text("earlier")
    with pytest.raises(InputError, match="could not be written"), atomic_path(path) as temporary:
        temporary.write_text("half")
        raise OSError(28, "No space left on device")
    with pytest.raises(ZeroDivisionError), atomic_path(path) as temporary:
        temporary.write_text("half")
        raise ZeroDivisionError
    assert path.read_text() == "earlier"
    assert [item.name for item in tmp_path.iterdir()] == ["a.txt"]


def test_a_file_in_the_place_of_a_folder_is_told(prior, tmp_path):
    (tmp_path / "out").write_text("")
    with pytest.raises(InputError, match="could not be written"):
        write_prior(prior, tmp_path / "out")


def test_views(prior):
    assert "joint model" in repr(prior)
    page = prior._repr_html_()
    assert "&lt;b&gt;survival &amp; co&lt;/b&gt;" in page
    assert "<b>" not in page
    summary = prior.summary()
    assert list(summary.columns) == ["quantity", "mean", "sd", "q05", "q16", "q50", "q84", "q95"]
    assert list(summary["quantity"]) == list(prior.draws)
    with pytest.raises(InputError, match="no quantity 'eta'"):
        prior.quantile(0.5, "eta")
    with pytest.raises(InputError, match="outside 0 to 1"):
        prior.quantile(1.5)


def test_fitted_beta_enters_an_open_pymc_model(prior):
    assert "pymc" not in vars(sys.modules["remnantstats.occurrence.prior"])
    pymc = pytest.importorskip("pymc")
    with pymc.Model() as model:
        prior.to_pymc("eta")
        prior.to_pymc("eta_h", "earthlike_fraction")
        with pytest.raises(InputError, match="no Beta distribution"):
            prior.to_pymc("r", "retention")
    assert [variable.name for variable in model.free_RVs] == ["eta", "eta_h"]
    alpha, beta = (float(parameter.eval()) for parameter in model["eta"].owner.inputs[-2:])
    assert (alpha, beta) == pytest.approx((prior.beta.alpha, prior.beta.beta))
