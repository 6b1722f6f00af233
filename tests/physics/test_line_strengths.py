"""Noise to equivalent width to abundance."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from remnantstats.errors import InputError
from remnantstats.physics.spectra import LineGrid, equivalent_width_limit, line_width

TEFF = (8000.0, 10000.0, 14000.0)
ABUNDANCE = (-10.0, -9.0, -8.0, -7.0, -6.0)


def table(width=lambda teff, abundance: 10 ** (2.0 + 0.5 * (abundance + 8.0) - (teff - 8000.0) / 4000.0)):
    rows = [(teff, abundance, width(teff, abundance)) for teff in TEFF for abundance in ABUNDANCE]
    return pd.DataFrame(rows, columns=["teff", "log_abundance", "equivalent_width"])


GRID = LineGrid.from_table(table(), "lines.csv")


def refusal(frame):
    with pytest.raises(InputError) as caught:
        LineGrid.from_table(frame, "lines.csv")
    return str(caught.value)


def test_cayrel_by_hand():
    # Cayrel 1988: 1.5 √(FWHM δλ)/SNR a sigma. λ/R = 0.2 Å, pixel 0.05 Å: 1.5 × 0.1/50 = 3 mÅ, at 3 sigma 9
    assert equivalent_width_limit(50.0, 4000.0, 20_000.0, 0.05) == pytest.approx(9.0)


def test_cayrel_against_noise():
    """The standard error of a Gaussian line fitted with known place and width to white noise."""
    pixel, fwhm, snr = 0.05, 0.4, 40.0
    x = np.arange(-4.0, 4.0, pixel)
    profile = np.exp(-4 * np.log(2) * (x / fwhm) ** 2)
    profile /= profile.sum() * pixel
    error = 1000.0 / snr / np.sqrt(np.sum(profile**2))
    limit = equivalent_width_limit(snr, 4000.0, 4000.0 / fwhm, pixel, k=1.0)
    # this bound is √(2√π/2.3548) = 1.227 in place of Cayrel's 1.5, which allows for continuum and place
    assert limit / error == pytest.approx(1.5 / 1.227, rel=0.005)


def test_the_wider_of_instrument_and_star_counts():
    np.testing.assert_allclose(line_width(4000.0, [4000.0, 40_000.0], 0.5), [1.0, 0.5])


@given(st.floats(1.0, 500.0), st.floats(500.0, 1e5), st.floats(0.01, 2.0), st.floats(1.01, 10.0))
def test_limit_is_monotone(snr, resolution, pixel, factor):
    base = equivalent_width_limit(snr, 4000.0, resolution, pixel)
    assert 0.0 < base < np.inf
    assert equivalent_width_limit(snr * factor, 4000.0, resolution, pixel) < base
    assert equivalent_width_limit(snr, 4000.0, resolution * factor, pixel) < base
    assert equivalent_width_limit(snr, 4000.0, resolution, pixel * factor) > base
    assert equivalent_width_limit(snr, 4000.0, resolution, pixel, k=3.0 * factor) > base


def test_nodes_of_the_grid():
    frame = table()
    np.testing.assert_allclose(GRID.equivalent_width(frame["teff"], frame["log_abundance"]), frame["equivalent_width"])
    np.testing.assert_allclose(GRID.abundance(frame["teff"], frame["equivalent_width"]), frame["log_abundance"])


@given(st.floats(8000.0, 14000.0), st.floats(-10.0, -6.0))
def test_inversion(teff, abundance):
    width = GRID.equivalent_width(teff, abundance)
    assert GRID.abundance(teff, width * (1 - 1e-12) if abundance > -8 else width * (1 + 1e-12))[0] == pytest.approx(
        abundance, abs=1e-6
    )


@given(st.floats(8000.0, 14000.0), st.floats(-10.0, -6.5), st.floats(0.01, 0.5))
def test_more_metal_makes_a_stronger_line(teff, abundance, step):
    assert GRID.equivalent_width(teff, abundance + step)[0] > GRID.equivalent_width(teff, abundance)[0]


def test_chunks_do_not_matter(monkeypatch):
    teff, width = np.linspace(8000.0, 14000.0, 50), np.full(50, 20.0)
    whole = GRID.abundance(teff, width)
    monkeypatch.setattr("remnantstats.physics.spectra._CHUNK_POINTS", 17)
    np.testing.assert_array_equal(GRID.abundance(teff, width), whole)


def test_line_outside_is_refused_by_name():
    with pytest.raises(InputError) as caught:
        GRID.abundance([9000.0, 20000.0, 9000.0, np.nan], [50.0, 50.0, 1e5, 50.0], labels=list("abcd"))
    text = str(caught.value)
    assert "3 faults" in text and "star a" not in text
    assert "a star lies outside lines.csv" in text
    assert "star b" in text and "teff = 20000 K" in text
    assert "star c" in text and "equivalent width = 1e+05" in text
    assert "star d" in text and "teff = nan K" in text
    assert "teff 8000 to 14000 K" in text and "nothing is extrapolated" in text


@pytest.mark.parametrize("width", [0.0, -1.0, np.nan])
def test_a_width_that_is_none_is_refused(width):
    with pytest.raises(InputError, match=f"equivalent width = {width:.4g}"):
        GRID.abundance(9000.0, width)


def test_abundance_outside_is_refused():
    with pytest.raises(InputError, match=r"(?s)log_abundance = -11.*log_abundance -10 to -6"):
        GRID.equivalent_width(9000.0, -11.0)


def test_missing_column():
    text = refusal(table().rename(columns={"equivalent_width": "equivalent_widht"}))
    assert "no column 'equivalent_width'" in text and "did you mean 'equivalent_widht'?" in text


def test_missing_node():
    text = refusal(table().iloc[:-1])
    assert "not a full rectangle" in text and "14 rows for 3 temperatures and 5 abundances" in text


@pytest.mark.parametrize("width", [lambda t, a: -a, lambda t, a: 5.0, lambda t, a: a + 8.0])
def test_grid_that_does_not_rise(width):
    text = refusal(table(width))
    assert "does not rise with abundance" in text and "cut the grid where the line saturates" in text
