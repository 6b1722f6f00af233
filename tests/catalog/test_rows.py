"""Each rule on the rows, several at once, and reject mode."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from remnantstats.catalog import ChannelRules, RowRules, census, depth, error_notes, read_sample

NONE = [None] * 4
DUST = {
    "excess": ["detected", "limit", "unobserved", "limit"],
    "log_dust": [-2.5, None, None, None],
    "log_dust_err": [0.1, None, None, None],
    "log_dust_limit": [-3.0, -3.1, None, -2.9],
}

FAULTS = [
    ({"star": ["Ash-1", "Ash-1", "Birch-1", "Birch-2"]}, "star", 2, "more than once"),
    ({"star": ["Ash-1", "", "Birch-1", "Birch-2"]}, "star", 1, "names no star"),
    ({"distance": ["40", "60 pc", "80", "120"]}, "distance", 1, "something else"),
    ({"distance": ["40", "6,5", "80", "120"]}, "distance", 1, "something else"),
    ({"distance": ["40", "0x10", "80", "1_000"]}, "distance", 2, "something else"),
    ({"distance": [True, False, True, True]}, "distance", 4, "something else"),
    ({"distance": [40, np.inf, 80, 120]}, "distance", 1, "infinite"),
    ({"distance": ["40", "-Infinity", "1e999", "120"]}, "distance", 2, "infinite"),
    ({"log_accretion_limit": [7.5, None, 7.9, None]}, "log_accretion_limit", 1, "no limit"),
    ({"log_accretion": NONE}, "log_accretion", 1, "no value"),
    ({"log_accretion_err": NONE}, "log_accretion_err", 1, "no error"),
    ({"log_accretion": [8.2, 7.0, None, 7.0]}, "log_accretion", 2, "not detected has a value"),
    ({"log_accretion": [7.5, None, None, None]}, "log_accretion", 1, "at or below its limit"),
    ({"log_accretion_err": [0.0, None, None, None]}, "log_accretion_err", 1, "not positive"),
    ({"log_accretion_calibration_err": [-0.1, 0, 0, 0]}, "log_accretion_calibration_err", 1, "negative"),
    ({"log_accretion_width": [0.1, 0, 0.1, 0.1]}, "log_accretion_width", 1, "not positive"),
    ({"cooling_age": [0.2, -0.5, 1.0, 0.0]}, "cooling_age", 2, "not positive"),
    ({"cooling_age_err": [0.2, 0.0, 1.0, 0.1]}, "cooling_age_err", 1, "not positive"),
    ({"teff": [9e3, -1, 9e3, None]}, "teff", 1, "not positive"),
    ({"mass": [0.6, 0, 0.6, None]}, "mass", 1, "not positive"),
    ({"progenitor_mass": [2, 0, 2, None]}, "progenitor_mass", 1, "not positive"),
    ({"pollution": ["detected", "Limit", "limit", ""]}, "pollution", 2, "unknown outcome"),
    ({"atmosphere": ["H", "", "DA", "He"]}, "atmosphere", 2, "unknown atmosphere"),
    ({"inclusion": ["blind", "", "blnd", "blind"]}, "inclusion", 1, "unknown inclusion"),
    (
        {"inclusion": ["known-polluted", "known-dusty", "", "blind"], "selection_limit": [None, None, 7, 7]},
        "selection_limit",
        2,
        "no limit of its selection",
    ),
    ({"selection_width": [0.1, 0.0, None, None]}, "selection_width", 1, "not positive"),
    ({"pollution_false_positive": [0.0, 1.0, -0.1, 0.5]}, "pollution_false_positive", 2, "out of range"),
]


@pytest.mark.parametrize(("changes", "column", "count", "words"), FAULTS)
def test_each_fault(changes, column, count, words, frame, write, refused):
    path = write(frame(**changes).to_csv(index=False))
    for table in (frame(**changes), path):
        error = refused(read_sample, table)
        assert len(error.faults) == count, str(error)
        for fault in error.faults:
            assert words in fault.what
            assert f"column '{column}'" in fault.where
            assert "row " in fault.where and "star '" in fault.where
            assert fault.found and fault.allowed and fault.remedy


def test_all_faults_in_one_error(frame, refused):
    bad = frame(
        star=["Ash-1", "Ash-1", "Birch-1", "Birch-2"],
        distance=["40", "near", "-3", "inf"],
        pollution=["detected", "limit", "limt", "unobserved"],
        log_accretion=[7.0, None, None, 8.0],
    )
    error = refused(read_sample, bad)
    assert len(error.faults) == 8
    rows = [int(fault.where.split("row ")[1].split(",")[0]) for fault in error.faults]
    assert rows == sorted(rows)


def test_one_cell_shows_one_fault(frame, refused):
    error = refused(read_sample, frame(log_accretion=["8.2 dex", None, None, None]))
    assert len(error.faults) == 1


def test_reject_mode(frame, write):
    bad = frame(distance=[40, -1, 80, "far"], cooling_age=[0.2, -1, 1.0, 2.5])
    sample = read_sample(write(bad.to_csv(index=False)), on_bad_rows="reject")
    assert sample.table["star"].tolist() == ["Ash-1", "Birch-1"]
    assert sample.table.index.tolist() == [0, 1]
    assert sample.place(1).endswith("row 3, star 'Birch-1'")
    rejected = sample.rejected
    assert rejected["row"].tolist() == [2, 2, 4]
    assert set(rejected["column"]) == {"distance", "cooling_age"}
    assert rejected["found"].tolist()[-1] == "far"
    assert rejected["original_distance"].tolist() == ["-1", "-1", "far"]
    assert sample.sources[0].n_rows == 4
    assert "2 rows were rejected" in sample.notes


def test_torn_rows_are_counted_from_the_first_data_row(write, refused):
    text = "star,pollution,log_accretion_limit\nAsh,limit,7\n\nBirch,limit\nCedar,limit,7,5\nElm,limit,x\n"
    path = write(text)
    error = refused(read_sample, path)
    assert [fault.where for fault in error.faults] == [
        f"{path}, row 2 (line 4)",
        f"{path}, row 3 (line 5)",
        f"{path}, row 4, star 'Elm', column 'log_accretion_limit'",
    ]
    sample = read_sample(path, on_bad_rows="reject")
    assert sample.table["star"].tolist() == ["Ash"]
    assert sample.rejected["row"].tolist() == [2, 3, 4]
    assert sample.rejected["original_star"].tolist() == ["Birch", "Cedar", "Elm"]


def test_nothing_left_is_an_error_even_when_rejecting(frame, refused):
    error = refused(read_sample, frame(distance=[-1] * 4), on_bad_rows="reject")
    assert "no row is left" in str(error)
    error = refused(read_sample, frame(log_accretion_limit=None), on_bad_rows="reject")
    assert "for want of column 'log_accretion_limit'" in str(error)


def test_an_absent_column_is_one_fault(frame, refused):
    [fault] = refused(read_sample, frame(log_accretion_limit=None)).faults
    assert "2 rows need" in fault.found


@pytest.mark.parametrize("mode", ["stop", "reject"])
def test_atmospheres_not_admitted_are_one_fault(mode, frame, refused):
    mixed = frame(atmosphere=["H", "He", "He", "H"])
    [fault] = refused(read_sample, mixed, rules=RowRules(atmospheres=("H",)), on_bad_rows=mode).faults
    assert fault.found == "2 stars with atmosphere He"
    assert "[model]" in fault.remedy
    assert len(read_sample(mixed)) == 4


def test_absent_atmosphere_is_noted(frame):
    sample = read_sample(frame(atmosphere=None))
    assert set(sample.table["atmosphere"]) == {"H"}
    assert any("assumed to have atmosphere H" in note for note in sample.notes)


BARE = {"log_accretion_limit": [None, 7.4, 7.9, None]}


def test_a_measured_detection_may_lack_its_limit(frame):
    sample = read_sample(frame(**BARE))
    assert np.isnan(sample.table["log_accretion_limit"][0])
    assert "imput" in error_notes(sample)[0]


@pytest.mark.parametrize(
    ("channel", "changes"),
    [
        (ChannelRules(threshold_on="true"), {}),
        (ChannelRules(spurious=True), {}),
        (ChannelRules(), {"pollution_false_positive": [0.1, 0, 0, 0]}),
        (ChannelRules(), {"log_accretion_calibration_err": [0.2, 0, 0, 0]}),
    ],
)
def test_otherwise_it_needs_its_limit(channel, changes, frame, refused):
    [fault] = refused(read_sample, frame(**BARE, **changes), rules=RowRules(pollution=channel)).faults
    assert fault.what == "an observed star has no limit"
    assert "row 1," in fault.where


@pytest.mark.parametrize(
    ("channel", "changes"),
    [(ChannelRules(threshold_on="true"), {}), (ChannelRules(), {"log_accretion_calibration_err": [0.2, 0, 0, 0]})],
)
def test_values_below_the_limit_where_they_may_be(channel, changes, frame):
    below = frame(log_accretion=[7.1, None, None, None], **changes)
    assert len(read_sample(below, rules=RowRules(pollution=channel))) == 4


def test_channels_in_use(frame, refused):
    both = read_sample(frame(**DUST))
    assert set(both.rules.channels) == {"pollution", "excess"}
    assert both.observed("excess").tolist() == [True, True, False, True]
    wrong = DUST | {"excess": ["detected", "limit", "maybe", "limit"]}
    assert len(refused(read_sample, frame(**wrong)).faults) == 1
    ignored = read_sample(frame(**wrong), rules=RowRules())
    assert not ignored.observed("excess").any()
    assert any("'excess' is not used" in note for note in ignored.notes)
    typed = refused(read_sample, frame(**wrong | {"log_dust_limit": ["-3", "x", "", ""]}), rules=RowRules())
    assert len(typed.faults) == 1
    dust_only = read_sample(frame(**DUST, pollution=None), rules=RowRules(pollution=None, excess=ChannelRules()))
    assert not dust_only.observed("pollution").any()
    assert "unknown channel" in str(refused(both.observed, "polution"))


def test_unobserved_stars(frame, refused):
    seen = read_sample(frame())
    assert "1 star is unobserved in every channel of the study" in seen.notes
    nothing = frame(pollution=["unobserved"] * 4, log_accretion=NONE)
    assert "no star was observed" in str(refused(read_sample, nothing))


def test_covariates_and_groups(frame, refused):
    rules = RowRules(covariates=("cooling_age", "colour"), groups="run")
    table = frame(cooling_age=[0.2, None, -1, 1], colour=[1, 2, 3, "red"], colour_err=[0, 1, 1, 1], run=[1, 2, "", 2])
    found = {fault.where.split("column ")[1] for fault in refused(read_sample, table, rules=rules).faults}
    assert found == {"'cooling_age'", "'colour'", "'colour_err'", "'run'"}
    sample = read_sample(frame(colour=[1, 2, 3, 4], run=[1, 2, 2, 1]), rules=rules)
    assert sample.table["run"].tolist() == ["1", "2", "2", "1"]
    absent = refused(read_sample, frame(), rules=rules)
    assert len(absent.faults) == 2
    assert "holds text" in str(refused(read_sample, frame(), rules=RowRules(covariates=("survey",))))


def test_a_harmless_extra_column_may_hold_anything(frame):
    sample = read_sample(frame(weather=["fine", "inf", "", "3"], ratio=[1.0, np.inf, 2.0, 3.0]))
    assert sample.table["weather"].tolist() == ["fine", "inf", "", "3"]


def test_census_and_depth(frame):
    sample = read_sample(frame(**DUST))
    counts = census(sample)
    assert counts["stars"].sum() == 4
    assert counts["pollution_detected"].tolist() == [0, 1]
    reach = depth(sample)
    assert reach["survey"].tolist() == ["(all)", "harbour", "lantern"]
    assert reach["observed"].tolist() == [3, 1, 2]
    assert reach["could_show_7"].tolist() == [0, 0, 0]
    assert reach["could_show_8"].tolist() == [3, 1, 2]
    assert reach["q50"][0] == pytest.approx(7.5)
    assert depth(sample, "excess", show=(-3,))["could_show_-3"][0] == 2


def test_wide_errors_are_named(frame):
    sample = read_sample(frame(log_accretion_err=[0.31, None, None, None]))
    assert "Ash-1" in error_notes(sample)[0]
    assert "log_accretion_calibration_err" in error_notes(sample)[0]
    wide = read_sample(frame(log_accretion_err=[0.31, None, None, None], log_accretion_width=[0.2] * 4))
    assert not error_notes(wide)


def test_dataset_and_views(frame):
    sample = read_sample(frame(star=["<b>Ash</b>", "Ash-2", "Birch-1", "Birch-2"]))
    data = sample.dataset
    assert dict(data.sizes) == {"star": 4}
    assert data["distance"].attrs == {"units": "pc", "long_name": "distance"}
    assert data["log_accretion"].attrs["units"] == "dex(g / s)"
    assert "1 detected, 2 limit, 1 unobserved" in repr(sample)
    assert "<b>Ash" not in sample._repr_html_()
    assert "&lt;b&gt;Ash" in sample._repr_html_()


def test_the_caller_s_frame_is_left_alone(frame):
    table = frame()
    before = table.copy()
    read_sample(table)
    pd.testing.assert_frame_equal(table, before)
