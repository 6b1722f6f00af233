"""Every format, units, names, and files that are no tables."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from remnantstats.catalog import SampleSettings, read_sample, to_ecsv
from remnantstats.errors import InputError
from remnantstats.fields import parse_settings

WITH_UNITS = ["ecsv", "fits", "vot", "parquet"]


def save(frame: pd.DataFrame, path: Path, units: dict[str, str]) -> Path:
    """Write a frame in the format of the path's ending."""
    from astropy.table import MaskedColumn, Table

    if path.suffix == ".csv":
        frame.to_csv(path, index=False)
        return path
    if path.suffix == ".parquet":
        import pyarrow as pa
        from pyarrow import parquet

        table = pa.Table.from_pandas(frame, preserve_index=False)
        fields = [f.with_metadata({"unit": units[f.name]}) if f.name in units else f for f in table.schema]
        parquet.write_table(table.cast(pa.schema(fields)), path)
        return path
    table = Table()
    for name, cells in frame.items():
        if cells.dtype == object or cells.dtype == "str":
            table[name] = cells.to_numpy(dtype=str)
        else:
            table[name] = MaskedColumn(cells.to_numpy(), mask=np.isnan(cells.to_numpy()))
    for name, unit in units.items():
        table[name].unit = unit
    notation = {".fits": "fits", ".vot": "votable", ".ecsv": "ascii.ecsv"}[path.suffix]
    table.write(path, format=notation)
    return path


@pytest.mark.parametrize("ending", WITH_UNITS)
def test_every_format_converts_the_units_of_its_header(ending, frame, tmp_path):
    theirs = frame(distance=[0.04, 0.06, 0.08, 0.12], cooling_age=[200.0, 500.0, 1000.0, 2500.0])
    sample = read_sample(save(theirs, tmp_path / f"grove.{ending}", {"distance": "kpc", "cooling_age": "Myr"}))
    ours = read_sample(frame())
    pd.testing.assert_frame_equal(sample.table, ours.table)


def test_csv_takes_units_from_the_settings(frame, tmp_path):
    save(frame(cooling_age=[200.0, 500.0, 1000.0, 2500.0]), tmp_path / "grove.csv", {})
    settings = SampleSettings(table="grove.csv", units={"cooling_age": "Myr"})
    sample = read_sample(settings, folder=tmp_path)
    np.testing.assert_allclose(sample.table["cooling_age"], [0.2, 0.5, 1.0, 2.5])


@pytest.mark.parametrize("ending", ["csv", *WITH_UNITS])
def test_missing_cells_are_nan_and_text_is_str(ending, frame, tmp_path):
    table = read_sample(save(frame(), tmp_path / f"grove.{ending}", {})).table
    assert table["log_accretion"].isna().tolist() == [False, True, True, True]
    for name in ("star", "survey", "inclusion", "atmosphere", "pollution", "excess"):
        assert table[name].dtype == object
        assert all(type(word) is str for word in table[name])
    assert set(table["inclusion"]) == {"blind"}
    assert set(table["excess"]) == {"unobserved"}
    assert (table["log_accretion_calibration_err"] == 0).all()


@pytest.mark.parametrize(
    ("unit", "shift"),
    [
        ("dex(g / s)", 0.0),
        ("dex", 0.0),
        ("[g/s]", 0.0),
        ("log10(g/s)", 0.0),
        ("", 0.0),
        ("---", 0.0),
        ("dex(kg / s)", 3.0),
        ("[kg.s-1]", 3.0),
    ],
)
def test_units_of_logarithms(unit, shift, frame, tmp_path):
    path = save(frame(), tmp_path / "grove.csv", {})
    units = {"log_accretion": unit, "log_accretion_limit": unit} if unit else {}
    table = read_sample(path, units=units).table
    assert table["log_accretion"][0] == pytest.approx(8.2 + shift)


@pytest.mark.parametrize(
    ("column", "unit"),
    [
        ("distance", "km / s"),
        ("distance", "dex(pc)"),
        ("cooling_age", "furlong_of_time"),
        ("log_accretion", "g / s"),
        ("log_accretion", "dex(pc)"),
        ("log_accretion_err", "g / s"),
        ("log_dust", "dex(g / s)"),
    ],
)
def test_a_unit_that_cannot_convert(column, unit, frame, tmp_path, refused):
    path = save(frame(log_dust=[None] * 4), tmp_path / "grove.csv", {})
    error = refused(read_sample, path, units={column: unit})
    [fault] = error.faults
    assert fault.where == f"{path}, column '{column}'"
    assert f'"{unit}"' in fault.found
    assert fault.allowed


def test_two_units_for_one_column(frame, tmp_path, refused):
    path = save(frame(), tmp_path / "grove.ecsv", {"distance": "kpc"})
    assert "two units" in str(refused(read_sample, path, units={"distance": "pc"}))
    assert read_sample(path, units={"distance": "kpc"}).table["distance"][0] == pytest.approx(40_000)


def test_in_memory_tables(frame):
    from astropy import units as u
    from astropy.table import QTable, Table

    plain = Table.from_pandas(frame())
    plain["distance"].unit = "kpc"
    assert read_sample(plain).table["distance"][0] == pytest.approx(40_000)
    quantities = QTable(Table.from_pandas(frame()))
    quantities["distance"] = quantities["distance"] * u.kpc
    assert read_sample(quantities).table["distance"][0] == pytest.approx(40_000)
    first, second = read_sample(frame()), read_sample(frame(distance=[1.0, 2.0, 3.0, 4.0]))
    assert first.sources[0].sha256 != second.sources[0].sha256


def test_nullable_and_categorical_frames(frame):
    changed = frame().convert_dtypes().astype({"survey": "category"})
    pd.testing.assert_frame_equal(read_sample(changed).table, read_sample(frame()).table)


def test_renamed_columns(frame, tmp_path):
    path = save(frame().rename(columns={"star": "object"}), tmp_path / "grove.csv", {})
    sample = read_sample(path, columns={"star": "object"})
    assert sample.table["star"][0] == "Ash-1"


def test_stacked_tables_keep_their_rows(frame, tmp_path, refused):
    save(frame(), tmp_path / "one.csv", {})
    other = frame(star=["Cedar-1", "Cedar-2", "Cedar-3", "Cedar-4"], distance=None)
    save(other, tmp_path / "two.ecsv", {})
    settings = SampleSettings(table=["one.csv", "two.ecsv"])
    sample = read_sample(settings, folder=tmp_path)
    assert len(sample) == 8
    assert sample.table["distance"].isna().sum() == 4
    assert sample.place(5) == "two.ecsv, row 2, star 'Cedar-2'"
    assert [source.n_rows for source in sample.sources] == [4, 4]
    assert sample.sources[0].sha256 == hashlib.sha256((tmp_path / "one.csv").read_bytes()).hexdigest()
    save(frame(), tmp_path / "two.ecsv.csv", {})
    error = refused(read_sample, SampleSettings(table=["one.csv", "two.ecsv.csv"]), folder=tmp_path)
    assert "row 1 of one.csv, row 1 of two.ecsv.csv" in error.faults[0].found


def test_byte_order_mark_and_line_ends(frame, write):
    text = frame().to_csv(index=False, lineterminator="\r\n")
    sample = read_sample(write(b"\xef\xbb\xbf" + text.encode()))
    pd.testing.assert_frame_equal(sample.table, read_sample(frame()).table)


def test_numbers_keep_every_digit(frame, write):
    limits = [7.123456789012345, 0.1 + 0.2, 1e-300, None]
    path = write(frame(log_accretion_limit=limits).to_csv(index=False))
    assert read_sample(path).table["log_accretion_limit"].tolist()[:3] == limits[:3]


def test_identifiers_stay_text(frame, write, tmp_path):
    names = ["007", "1e5", "4611686018427387905", "4611686018427387904"]
    assert read_sample(write(frame(star=names).to_csv(index=False))).table["star"].tolist() == names
    numbers = frame(star=[7, 8, 2**62 + 1, 2**62])
    path = tmp_path / "grove.parquet"
    numbers.to_parquet(path)
    assert read_sample(path).table["star"].tolist() == ["7", "8", str(2**62 + 1), str(2**62)]


@pytest.mark.parametrize(
    ("content", "name", "word"),
    [
        ("", "grove.csv", "empty"),
        ("  \n\n", "grove.csv", "empty"),
        (b"", "grove.fits", "empty"),
        ("star,pollution\n", "grove.csv", "no rows"),
        ("star,pollution\nAsh,li\0mit\n", "grove.csv", "NUL"),
        (b"star,pollution\nAsh-\xe9,limit\n", "grove.csv", "UTF-8"),
        ("star,star\nAsh,Birch\n", "grove.csv", "appears 2 times"),
        ("star,,pollution\nAsh,1,limit\n", "grove.csv", "no name"),
        ("star;pollution\nAsh;limit\n", "grove.csv", "commas"),
        ('star,pollution\n"Ash,limit\n', "grove.csv", "split into fields"),
        ("star,pollution\nAsh,limit,\n", "grove.csv", "number of fields"),
        ("star,pollution\nAsh,limit\n", "grove.ecsv", "not ECSV"),
        ("# %ECSV 1.0\n# ---\n# datatype: [}\nstar\nAsh\n", "grove.ecsv", "ECSV header"),
        ("# %ECSV 1.0\n# ---\n# datatype:\n# - {name: other, datatype: string}\nstar\nAsh\n", "grove.ecsv", "differ"),
        ("# %ECSV 1.0\n", "grove.csv", "ECSV, not CSV"),
        ("SIMPLE = nothing", "grove.fits", "cannot be read"),
        ("<VOTABLE><RESOURCE>", "grove.vot", "cannot be read"),
        (b"PAR1 and no more", "grove.parquet", "cannot be read"),
        ("star\nAsh\n", "grove.xlsx", "kind of the table"),
    ],
)
def test_files_that_are_no_tables(content, name, word, write, refused):
    path = write(content, name)
    error = refused(read_sample, path)
    assert word in str(error)
    assert str(path) in error.faults[0].where


def test_random_bytes_never_escape_as_another_error(write):
    random = np.random.default_rng(4)
    for ending in ("csv", "ecsv", "fits", "vot", "parquet"):
        for size in (3, 200):
            path = write(random.bytes(size), f"noise.{ending}")
            with pytest.raises(InputError):
                read_sample(path)


def test_absent_table_and_folder(tmp_path, refused):
    assert "does not exist" in str(refused(read_sample, tmp_path / "none.csv"))
    (tmp_path / "folder.csv").mkdir()
    assert "not a file" in str(refused(read_sample, tmp_path / "folder.csv"))
    both = refused(read_sample, [tmp_path / "none.csv", tmp_path / "nor.fits"])
    assert len(both.faults) == 2
    assert "not a table" in str(refused(read_sample, 3))
    assert "not a path" in str(refused(read_sample, [tmp_path, 3]))


def test_misspelt_and_unknown_columns(frame, refused):
    error = refused(read_sample, frame().rename(columns={"log_accretion_limit": "log_acretion_limit"}))
    assert "did you mean 'log_accretion_limit'" in str(error)
    assert "did you mean 'pollution'" in str(refused(read_sample, frame().rename(columns={"pollution": "polution"})))
    sample = read_sample(frame(colour=[0.1, 0.2, None, 0.3], remark=["a", "", "b", "c"]))
    assert sample.table["colour"].dtype == float
    assert any("colour, remark" in note for note in sample.notes)


def test_absent_required_columns(frame, refused):
    error = refused(read_sample, frame(star=None, pollution=None))
    assert [fault.what for fault in error.faults] == ["column 'star' is missing", "column 'pollution' is missing"]


@pytest.mark.parametrize(
    ("data", "word"),
    [
        ({"table": "a.csv", "columns": {"polution": "p"}}, "did you mean 'pollution'"),
        ({"table": "a.csv", "units": {"distence": "kpc"}}, "did you mean 'distance'"),
        ({"table": "a.csv", "units": {"survey": "kpc"}}, "has no unit"),
        ({"table": "a.csv", "columns": {"star": "x", "survey": "x"}}, "named twice"),
        ({"table": []}, "at least 1"),
        ({"table": ""}, "at least 1"),
        ({"table": "a.csv", "on_bad_rows": "skip"}, "reject"),
        ({}, "required"),
    ],
)
def test_settings(data, word, refused):
    assert word in str(refused(parse_settings, SampleSettings, data, "study.toml", "sample"))


def test_columns_and_units_of_absent_columns(frame, refused):
    assert "is in no table" in str(refused(read_sample, frame(), columns={"teff": "temperature"}))
    assert "is in no table" in str(refused(read_sample, frame(), units={"teff": "K"}))
    assert "would be 'survey'" in str(refused(read_sample, frame(), columns={"survey": "star"}))


def test_photometric_bands_are_known(frame):
    sample = read_sample(frame(flux_W9=[1.0, 2.0, 3.0, -0.1], flux_err_W9=[0.1] * 4, photosphere_W9=[1.0] * 4))
    assert sample.dataset["flux_W9"].attrs["units"] == "mJy"
    assert not any("kept" in note for note in sample.notes)


def test_written_tables_are_read_back(frame, tmp_path):
    from astropy.table import Table

    sample = read_sample(frame())
    path = tmp_path / "out.ecsv"
    to_ecsv(sample.table, path, {"seed": 3})
    pd.testing.assert_frame_equal(read_sample(path).table, sample.table, check_exact=True)
    table = Table.read(path)
    assert table.meta["seed"] == 3
    assert str(table["distance"].unit) == "pc"
    assert str(table["log_accretion"].unit) == "dex(g / s)"
    assert bool(table["log_accretion"].mask[1])
    assert [item.name for item in tmp_path.iterdir()] == ["out.ecsv"]
