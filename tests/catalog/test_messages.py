"""The wording of faults: file, row, star, column, value found, what is allowed, what to do."""

from __future__ import annotations

from remnantstats.catalog import RowRules, read_sample


def test_a_faulty_cell(frame, write, refused):
    path = write(frame(distance=[40, 60, -80, 120]).to_csv(index=False), "targets.csv")
    assert str(refused(read_sample, path)) == (
        "'distance' is not positive\n"
        f"  where:   {path}, row 3, star 'Birch-1', column 'distance'\n"
        "  found:   -80\n"
        "  allowed: a number above 0\n"
        "  to do:   correct the cell"
    )


def test_a_detection_below_its_limit_names_the_calibration_column(frame, refused):
    [fault] = refused(read_sample, frame(log_accretion=[7.4, None, None, None])).faults
    assert fault.where == "table in memory, row 1, star 'Ash-1', column 'log_accretion'"
    assert fault.found == "7.4 (log_accretion_limit = 7.5)"
    assert "log_accretion_calibration_err" in fault.remedy


def test_a_misspelt_word_names_the_nearest(frame, refused):
    [fault] = refused(read_sample, frame(pollution=["detected", "limt", "limit", "unobserved"])).faults
    assert fault.found == "limt"
    assert fault.allowed == "detected, limit, unobserved"
    assert fault.remedy == "did you mean 'limit'?"


def test_a_fault_is_shown_in_the_user_s_unit(frame, refused):
    [fault] = refused(read_sample, frame(cooling_age=[200, -500, 1000, 2500]), units={"cooling_age": "Myr"}).faults
    assert fault.found == "-500"


def test_text_in_a_number(frame, refused):
    [fault] = refused(read_sample, frame(distance=["40", "60 pc", "80", "120"])).faults
    assert fault.what == "a number column holds something else"
    assert fault.found == "60 pc"


def test_a_ragged_row_names_its_line(write, refused):
    path = write("star,pollution,log_accretion_limit\nAsh,limit,7\nBirch,limit,7,5\n")
    [fault] = refused(read_sample, path).faults
    assert fault.where == f"{path}, row 2 (line 3)"
    assert fault.found == "4 fields: Birch,limit,7,5"
    assert fault.allowed == "3 fields, as in the header"


def test_a_unit_that_cannot_convert(frame, refused):
    [fault] = refused(read_sample, frame(), units={"distance": "km / s"}).faults
    assert fault.where == "table in memory, column 'distance'"
    assert fault.found == 'unit "km / s"'
    assert fault.allowed.startswith("pc")
    [fault] = refused(read_sample, frame(), units={"log_accretion": "g / s"}).faults
    assert "write dex(g / s) as its unit" in fault.remedy


def test_atmospheres_not_admitted(frame, refused):
    mixed = frame(atmosphere=["H", "H", "He", "H"])
    [fault] = refused(read_sample, mixed, rules=RowRules(atmospheres=("H",))).faults
    assert fault.what == "the study does not admit stars with atmosphere He"
    assert fault.where == "table in memory, column 'atmosphere', first row 3, star 'Birch-1'"
    assert fault.remedy == 'write atmospheres = ["H", "He"] in [model], or leave these stars out of the table'


def test_a_missing_column_names_a_likely_one(frame, refused):
    [fault] = refused(read_sample, frame().rename(columns={"star": "star_name"})).faults
    assert fault.what == "column 'star' is missing"
    assert "[sample.columns]" in fault.remedy
    assert "did you mean 'star_name'" in fault.remedy


def test_many_faults_are_numbered_and_counted(frame, refused):
    error = refused(read_sample, frame(distance=[-1] * 4, cooling_age=[-1] * 4, teff=[-1] * 4, mass=[-1] * 4))
    assert str(error).startswith("16 faults:\n1. ")
    assert str(error).endswith("… and 4 more of the same table")
