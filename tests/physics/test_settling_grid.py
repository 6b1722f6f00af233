"""Settling times at the published nodes and between them; what a grid refuses."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from remnantstats.errors import InputError
from remnantstats.physics.settling import SettlingGrid, koester2009_grid

# Koester 2009, A&A 498, 517, Table 4: log10 years, H atmosphere, log g = 8 (CHECKS.md)
ELEMENTS = ("C", "Na", "Mg", "Si", "Ca", "Fe")
PUBLISHED = {
    6000: (4.50, 4.34, 4.29, 4.21, 4.14, 4.00),
    7000: (3.88, 3.60, 3.54, 3.52, 3.45, 3.33),
    8000: (3.49, 3.16, 3.07, 3.12, 3.06, 2.95),
    9000: (3.03, 2.70, 2.60, 2.66, 2.61, 2.50),
    10000: (2.18, 1.74, 1.65, 1.79, 1.68, 1.59),
    11000: (0.55, 0.00, 0.05, 0.32, -0.04, -0.03),
    12000: (-1.70, -2.10, -1.74, -1.79, -1.95, -2.09),
    13000: (-1.73, -2.14, -1.79, -1.83, -1.99, -2.12),
    15000: (-1.48, -2.03, -1.69, -1.70, -1.89, -1.97),
    17000: (-1.32, -1.94, -1.62, -1.58, -1.80, -1.83),
    20000: (-1.21, -1.83, -1.55, -1.43, -1.72, -1.68),
}
KOESTER = koester2009_grid()


def square(**changes):
    """A table of one element on two temperatures and two gravities."""
    table = {
        "atmosphere": ["H"] * 4,
        "teff": [10000.0, 10000.0, 20000.0, 20000.0],
        "logg": [7.5, 8.5, 7.5, 8.5],
        "element": ["Ca"] * 4,
        "log_settling_time": [3.0, 2.0, 1.0, 0.0],
        "log_cvz_fraction": [-8.0, -9.0, -12.0, -14.0],
    }
    return pd.DataFrame(table | changes)


def refusal(table):
    with pytest.raises(InputError) as caught:
        SettlingGrid.from_table(table, "grid.csv")
    return str(caught.value)


@pytest.mark.parametrize("teff", PUBLISHED)
def test_published_times_at_the_nodes(teff):
    np.testing.assert_allclose(KOESTER.log_settling_time_at("H", ELEMENTS, teff, 8.0), PUBLISHED[teff], atol=1e-12)


@given(st.floats(6000.0, 20000.0), st.sampled_from(ELEMENTS))
def test_between_nodes_lies_between_neighbours(teff, element):
    nodes = np.array(sorted(PUBLISHED))
    right = int(np.clip(np.searchsorted(nodes, teff), 1, nodes.size - 1))
    column = ELEMENTS.index(element)
    ends = sorted((PUBLISHED[nodes[right - 1]][column], PUBLISHED[nodes[right]][column]))
    value = KOESTER.log_settling_time_at("H", element, teff, 8.0)[0]
    assert ends[0] - 1e-12 <= value <= ends[1] + 1e-12


def test_times_fall_with_temperature_up_to_thirteen_thousand():
    teff = np.linspace(6000.0, 13000.0, 300)
    for element in ELEMENTS:
        assert np.all(np.diff(KOESTER.log_settling_time_at("H", element, teff, 8.0)) < 0)


def test_metals_sink_in_days_to_weeks_in_warm_hydrogen():
    # common practice, no source: above about 12,000 K, days to weeks
    teff = np.linspace(12000.0, 20000.0, 50)
    for element in ELEMENTS:
        days = 365.25 * 10 ** KOESTER.log_settling_time_at("H", element, teff, 8.0)
        assert days.min() > 1.0
        assert days.max() < 30.0


def test_shipped_grid_says_what_it_holds():
    assert KOESTER.elements("H") == tuple(sorted(ELEMENTS))
    assert KOESTER.elements("He") == ()


def test_bilinear_in_two_dimensions():
    grid = SettlingGrid.from_table(square())
    assert grid.log_settling_time_at("H", "Ca", 12500.0, 7.75)[0] == pytest.approx(3.0 - 0.25 * 2.0 - 0.25 * 1.0)
    # at logg 8: −8.5 at the cool end, −13 at the hot end
    assert grid.log_cvz_fraction_at("H", "Ca", 15000.0, 8.0)[0] == pytest.approx(-10.75)


def test_row_order_and_column_order_do_not_matter():
    shuffled = square().sample(frac=1.0, random_state=3)[::-1]
    first, second = SettlingGrid.from_table(square()), SettlingGrid.from_table(shuffled[shuffled.columns[::-1]])
    teff, logg = np.linspace(10000.0, 20000.0, 7), np.linspace(7.5, 8.5, 7)
    np.testing.assert_array_equal(
        first.log_settling_time_at("H", "Ca", teff, logg), second.log_settling_time_at("H", "Ca", teff, logg)
    )


def test_each_row_has_its_own_element_and_atmosphere():
    helium = square(atmosphere=["He"] * 4, log_settling_time=[6.0] * 4)
    grid = SettlingGrid.from_table(
        pd.concat([square(), helium, square(element=["Mg"] * 4, log_settling_time=[5.0] * 4)])
    )
    values = grid.log_settling_time_at(["H", "He", "H"], ["Ca", "Ca", "Mg"], 10000.0, 7.5)
    assert values.tolist() == [3.0, 6.0, 5.0]


def test_a_star_outside_is_refused_with_element_teff_and_logg():
    with pytest.raises(InputError) as caught:
        KOESTER.log_settling_time_at(
            "H", ["Ca", "Ca", "Sc", "Ca"], [8000.0, 25000.0, 8000.0, 8000.0], [8.0, 8.0, 8.0, 8.4], labels=list("abcd")
        )
    text = str(caught.value)
    assert "3 faults" in text and "star a" not in text
    assert "a star lies outside the settling times of Koester 2009" in text
    assert "star b" in text and "element Ca, atmosphere H, teff = 25000 K, logg = 8" in text
    assert "star c" in text and "element Sc, atmosphere H" in text
    assert "star d" in text and "logg = 8.4" in text
    assert "Ca in H: teff 6000 to 20000 K, logg 7.9 to 8.1" in text
    assert "nothing is extrapolated" in text


def test_outside_marks_without_raising():
    marks = KOESTER.outside(["H", "He", "H", "H"], "Ca", [8000.0, 8000.0, np.nan, 20000.0], [8.1, 8.0, 8.0, 7.9])
    assert marks.tolist() == [False, True, True, False]


def test_no_convection_zone_mass_is_refused():
    with pytest.raises(InputError, match=r"(?s)no convection-zone mass for Ca in H.*log_cvz_fraction.*give no rate"):
        KOESTER.log_cvz_fraction_at("H", "Ca", 8000.0, 8.0)


def test_missing_column_is_named_with_its_neighbour():
    text = refusal(square().rename(columns={"log_settling_time": "log_setling_time"}))
    assert "no column 'log_settling_time'" in text
    assert "did you mean 'log_setling_time'?" in text


def test_missing_node_is_named():
    text = refusal(square().iloc[:3])
    assert "not a full rectangle" in text
    assert "grid.csv, Ca in H atmospheres" in text
    assert "1 of 4 nodes missing, the first at teff = 20000 K, logg = 8.5" in text


def test_node_twice():
    assert "has a node twice" in refusal(pd.concat([square(), square().iloc[:1]]))


def test_one_temperature():
    text = refusal(square().iloc[:2])
    assert "one temperature only" in text and "teff = 10000 K" in text


def test_unknown_atmosphere():
    text = refusal(square(atmosphere=["H", "H", "H", "C"]))
    assert "atmosphere is unknown" in text and "row 3" in text and "H or He" in text


def test_cell_that_is_no_number():
    text = refusal(square(log_settling_time=[3.0, np.nan, 1.0, np.inf]))
    assert "2 faults" in text and "row 1, column 'log_settling_time'" in text and "found: " in text


def test_empty_grid():
    assert "the settling grid is empty" in refusal(square().iloc[:0])
