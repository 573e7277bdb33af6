"""The probe file: what it takes, and one line for everything that can be wrong in it."""

import numpy as np
import pytest

from wakeledger.core.errors import DataError, InputError, SurveyError
from wakeledger.run.config.probe_file import parse_probe_file, read_probe_file
from wakeledger.run.traverse.calibrate import read_calibration_table

GOOD = """\
title = "Probe 17"
holes = 5
[data]
file = "cal.csv"
[data.columns]
pitch = { column = "alpha", unit = "deg" }
yaw = { column = "beta", unit = "deg" }
p1 = { column = "P1", unit = "Pa" }
p2 = { column = "P2", unit = "Pa" }
p3 = { column = "P3", unit = "Pa" }
p4 = { column = "P4", unit = "Pa" }
p5 = { column = "P5", unit = "Pa" }
total_pressure = { column = "pt", unit = "kPa" }
static_pressure = { column = "ps", unit = "Pa" }
mach = { column = "M" }
"""
HEADER = "alpha,beta,P1,P2,P3,P4,P5,pt,ps,M\n"


def test_columns_come_in_si():
    probe = parse_probe_file(GOOD, "folder/probe.toml")
    assert (probe.title, probe.holes) == ("Probe 17", 5)
    assert probe.file.as_posix() == "folder/cal.csv"
    assert probe.columns["pitch"].scale == pytest.approx(np.pi / 180)
    assert probe.columns["total_pressure"].scale == 1000.0
    assert probe.columns["mach"].scale == 1.0
    assert "p6" not in probe.columns
    assert probe.text == GOOD


#: What is changed, the place that must be named, a word of what was found, a word of the remedy.
BROKEN = [
    (("holes = 5", "holes = 6"), "holes", "6", "5"),
    (("holes = 5", 'holes = "5"'), "holes", "'5'", ""),
    (("holes = 5\n", ""), None, "'holes' is missing", "holes = 5 or holes = 7"),
    (("holes = 5", "hole = 5"), "hole", "unknown key 'hole'", "'holes'"),
    (("holes = 5", "holes = 7"), "[data.columns]", "'p6' is missing", "p7"),
    (("[data]", "[date]"), "[date]", "unknown key 'date'", "'data'"),
    (('file = "cal.csv"\n', ""), "[data]", "'file' is missing", "calibration.csv"),
    (('pitch = { column = "alpha", unit = "deg" }\n', ""), "[data.columns]", "given by yaw", "cone and roll"),
    (("pitch = {", "cone = {"), "[data.columns]", "given by cone, yaw", "cone and roll"),
    (("p4 = {", "p44 = {"), "[data.columns] p44", "unknown key 'p44'", "'p4'"),
    (('p5 = { column = "P5", unit = "Pa" }\n', ""), "[data.columns]", "'p5' is missing", "five-hole"),
    (('"P1", unit = "Pa"', '"P1"'), "[data.columns] p1.unit", "'unit' is missing", "Pa"),
    (('"P1", unit = "Pa"', '"P1", unit = "deg"'), "[data.columns] p1.unit", "an angle", "pressure"),
    (('"P1", unit = "Pa"', '"P1", unit = "Paa"'), "[data.columns] p1.unit", "'Paa' is not known", "pressure"),
    (('"P1", unit', '"P1", relative_to = "static", unit'), "[data.columns] p1.relative_to", "unknown key", "column"),
    (('"P2"', '"P1"'), "[data.columns] p2", "for p1 and for p2", "once"),
    (("mach = { column", 'p6 = { unit = "Pa", column'), "holes", "five holes", "holes = 7"),
    (("mach = { column", 'reynolds = { column = "Re" }\nmach = { column'), "[data.columns]", "both given", "differ"),
    (("title =", "title"), None, "not TOML", "quotation marks"),
    (('title = "Probe 17"', "title = 1.5"), "title", "1.5", "text"),
]


@pytest.mark.parametrize(("edit", "place", "found", "remedy"), BROKEN)
def test_what_is_wrong_is_said_in_one_line(edit, place, found, remedy):
    assert edit[0] in GOOD
    with pytest.raises(SurveyError) as caught:
        parse_probe_file(GOOD.replace(*edit), "probe.toml")
    error = caught.value
    assert error.file == "probe.toml"
    assert place in (error.place or "") if place else True
    assert found in error.found
    assert remedy in (error.remedy or "")
    assert "\n" not in error.line


def test_files_that_cannot_be_read(tmp_path):
    with pytest.raises(SurveyError, match="does not exist"):
        read_probe_file(tmp_path / "none.toml")
    with pytest.raises(SurveyError, match="this is a directory"):
        read_probe_file(tmp_path)
    (tmp_path / "latin.toml").write_bytes("title = 'é'".encode("latin-1"))
    with pytest.raises(SurveyError, match="not UTF-8"):
        read_probe_file(tmp_path / "latin.toml")
    (tmp_path / "binary.toml").write_bytes(b"\x00\x01")
    with pytest.raises(SurveyError, match="not a text file"):
        read_probe_file(tmp_path / "binary.toml")
    (tmp_path / "survey.toml").write_text('[plane]\nprimary = "velocity"\n')
    with pytest.raises(SurveyError, match="this is a survey file"):
        read_probe_file(tmp_path / "survey.toml")


def table_of(tmp_path, text, lines):
    (tmp_path / "probe.toml").write_text(text)
    (tmp_path / "cal.csv").write_text(HEADER + lines)
    return read_calibration_table(read_probe_file(tmp_path / "probe.toml"))


def test_the_table_is_read_in_file_order_with_its_lines(tmp_path):
    table = table_of(tmp_path, GOOD, "10,0,1,2,3,4,5,0.1,7,0.2\n-5,30,6,7,8,9,,0.1,8,0.2\n")
    assert np.degrees(table.pitch) == pytest.approx([10.0, -5.0])
    assert np.degrees(table.yaw) == pytest.approx([0.0, 30.0])
    assert table.holes[:, 0].tolist() == [1.0, 2.0, 3.0, 4.0, 5.0]
    assert np.isnan(table.holes[4, 1])
    assert table.total.tolist() == [100.0, 100.0]
    assert table.line.tolist() == [2, 3]
    assert (table.level_name, table.level.tolist()) == ("mach", [0.2, 0.2])


def test_cone_and_roll_become_pitch_and_yaw(tmp_path):
    text = GOOD.replace("pitch = {", "cone = {").replace("yaw = {", "roll = {")
    table = table_of(tmp_path, text, "10,0,1,2,3,4,5,0.1,7,0.2\n20,90,1,2,3,4,5,0.1,7,0.2\n20,-180,1,2,3,4,5,0.1,7,0\n")
    assert np.degrees(table.pitch) == pytest.approx([10.0, 0.0, -20.0], abs=1e-12)
    assert np.degrees(table.yaw) == pytest.approx([0.0, 20.0, 0.0], abs=1e-12)


@pytest.mark.parametrize(
    ("lines", "place", "found"),
    [
        ("10,0,1,2,3,4,x,0.1,7,0.2\n", "line 2, column 'P5'", "'x' is not a number"),
        ("10,0,1,2,3,4,5,0.1,7\n", "line 2", "too short"),
        ("10,0,1,2,3,4,inf,0.1,7,0\n", "line 2, column 'P5'", "infinite"),
        ("1,1,1,2,3,4,5,0.1,7,0\n10,95,1,2,3,4,5,0.1,7,0.2\n", "line 3, column 'beta'", "yaw is 95 deg"),
    ],
)
def test_what_is_wrong_in_the_table_is_said_in_one_line(tmp_path, lines, place, found):
    with pytest.raises(DataError) as caught:
        table_of(tmp_path, GOOD, lines)
    assert caught.value.place == place
    assert found in caught.value.found
    assert caught.value.file.endswith("cal.csv")


def test_a_missing_table_is_an_input_error(tmp_path):
    (tmp_path / "probe.toml").write_text(GOOD)
    with pytest.raises(InputError, match=r"cal\.csv"):
        read_calibration_table(read_probe_file(tmp_path / "probe.toml"))
