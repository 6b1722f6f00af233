"""Mission files and target lists: what is refused and how it is told (INTERFACE §2)."""

import pytest

from remnantstats.errors import InputError
from remnantstats.mission import load_mission, parse_mission, read_targets


def refusal(call, *arguments):
    with pytest.raises(InputError) as caught:
        call(*arguments)
    return str(caught.value)


def test_defaults_and_integers(tmp_path):
    mission = parse_mission({"completeness": 1, "density": 1}, "study.toml", tmp_path)
    assert mission.success == [0.9, 0.95, 0.99]
    assert (mission.completeness, mission.max_targets, mission.density) == (1.0, 500, 1.0)
    assert not mission.gives_aperture
    assert [item.name for item in mission.assumptions()] == ["completeness", "density"]


@pytest.mark.parametrize(
    ("change", "expected"),
    [
        ({"completness": 0.5}, "did you mean 'completeness'?"),
        ({"completeness": 0}, "key 'mission.completeness'"),
        ({"completeness": 1.2}, "key 'mission.completeness'"),
        ({"completeness": "0.5"}, "key 'mission.completeness'"),
        ({"success": []}, "key 'mission.success'"),
        ({"success": [0.9, 1]}, "key 'mission.success.1'"),
        ({"success": 0.9}, "key 'mission.success'"),
        ({"max_targets": 0}, "key 'mission.max_targets'"),
        ({"max_targets": 10**9}, "key 'mission.max_targets'"),
        ({"max_targets": 2.5}, "key 'mission.max_targets'"),
        ({"density": -1}, "key 'mission.density'"),
        ({"density": float("inf")}, "key 'mission.density'"),
        ({"density": 0.01, "wavelength": 0.8}, "key 'mission.planet_separation'"),
        ({"basis": {"densty": "x"}}, "did you mean 'density'?"),
        ({"targets": "none.csv"}, "does not exist"),
    ],
)
def test_refusals_name_the_key(change, expected, tmp_path):
    assert expected in refusal(parse_mission, {"completeness": 0.5} | change, "study.toml", tmp_path)


def test_neither_completeness_nor_list(tmp_path):
    assert "key 'mission.completeness'" in refusal(parse_mission, {}, "study.toml", tmp_path)
    assert "not a table" in refusal(parse_mission, 3, "study.toml", tmp_path)


@pytest.mark.parametrize("head", ["", "[mission]\n", 'title = "a study"\n[mission]\n'])
def test_mission_file_with_or_without_its_table(head, tmp_path):
    path = tmp_path / "mission.toml"
    path.write_text(head + "completeness = 0.5\nmax_targets = 7\n")
    assert load_mission(path).max_targets == 7


def test_missing_mission_file(tmp_path):
    assert "mission file does not exist" in refusal(load_mission, tmp_path / "mission.toml")


def test_list_without_completeness_takes_the_common_one(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text("target,distance,notes\na,3.5,x\nb,7,y\n")
    table = read_targets(path, 0.4)
    assert list(table["completeness"]) == [0.4, 0.4]
    assert list(table.columns) == ["target", "distance", "completeness"]
    text = refusal(read_targets, path)
    assert "column 'completeness' is missing" in text
    assert "set 'completeness' in [mission]" in text


def test_every_fault_of_a_list_at_once(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text(
        "target,distance,completeness,progenitor_mass\n"
        "a,3,0.5,1\nb,0,0.5,1\na,4,0.5,1\nc,far,0.5,1\nd,4,1.5,1\n,4,0.5,1\ne,4,,1\nf,4,0.5,-1\ng,inf,0.5,1\n"
    )
    text = refusal(read_targets, path)
    assert text.startswith("8 faults")
    for part in (
        f"{path}, row 3, target 'b', column 'distance'",
        "target 'a' is listed twice",
        "found:   first in row 2",
        "'far'",
        "row 6, target 'd', column 'completeness'",
        "a target has no name",
        "row 8, target 'e', column 'completeness'",
        "column 'progenitor_mass'",
        "'inf'",
    ):
        assert part in text


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"", "cannot be read"),
        (b"\xff\xfe", "cannot be read"),
        (b"target,distance,completeness\n", "no rows"),
        (b"target,distance,completeness\na,3,1,7\n", "cannot be read"),
        (b"target,distance,completeness\na,3\n", "row 2, target 'a', column 'completeness'"),
        (b"name,dist\na,3\n", "column 'target' is missing"),
        (b"target,Distance,completeness\na,3,1\n", "column 'distance' is missing"),
    ],
)
def test_lists_that_cannot_be_read(content, expected, tmp_path):
    path = tmp_path / "t.csv"
    path.write_bytes(content)
    assert expected in refusal(read_targets, path)


def test_list_is_checked_with_the_settings(tmp_path):
    (tmp_path / "t.csv").write_text("target,distance,completeness\na,-3,1\n")
    assert "row 2, target 'a'" in refusal(parse_mission, {"targets": "t.csv"}, "study.toml", tmp_path)
