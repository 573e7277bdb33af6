"""One line for everything that can be wrong in a survey file, table by table."""

import pathlib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from wakeledger.core.errors import InputError, SurveyError
from wakeledger.run.config import parse_survey, read_survey

SURVEYS = pathlib.Path(__file__).parent / "surveys"
GOOD = (SURVEYS / "wing.toml").read_text(encoding="utf-8")
SECTION = (SURVEYS / "section.toml").read_text(encoding="utf-8")
PROBE = '[probe]\ncalibration = "probe.toml"\ntip_diameter = "3.2 mm"\nlag = "40 ms"\nbacklash = "estimate"\n'
PLAN = (
    '[plan]\nspacing = ["5 mm", "10 mm"]\nwindow = "0.1 m"\nnoise = "0.1 m/s"\ntotal_pressure_noise = "1 Pa"\n'
    'repeats = [1, 2]\nloading = "elliptic"\nlift_coefficient = 0.5\ntip_core = "20 mm"\nwake_width = "20 mm"\n'
    "profile_drag_coefficient = 0.01\n"
)
BODY = '[[body]]\nname = "tail"\nregion = [["-0.3 m", "0.1 m"], ["0.3 m", "0.3 m"]]\nx = "0.8 m"\n'
LOADING = '[loading]\ntrailing_edge = [["-0.6 m", "0.0 m"], ["0.6 m", "0.0 m"]]\n'
WALLS = 'kind = "closed_walls"\ny = ["-1.2 m", "1.2 m"]\nz = ["-0.9 m", "0.9 m"]'
FREE_AIR = 'kind = "free_air"'


def edited(text, *edits):
    """The text with (old, new) pairs replaced once each; a plain string is appended."""
    for edit in edits:
        if isinstance(edit, str):
            text += edit
        else:
            old, new = edit
            assert old in text, old
            text = text.replace(old, new, 1)
    return text


def refused(text):
    with pytest.raises(SurveyError) as caught:
        parse_survey(text, "survey.toml")
    return caught.value


COLUMN_V = 'v = { column = "V", unit = "m s-1" }\n'
COLUMN_Y = 'y = { column = "Y", unit = "mm" }\n'
PRESSURES = 'static_pressure = { column = "ps", unit = "Pa", relative_to = "static" }\n'
POSITION_ERROR = "[reference.position_error]\nindicated = ['1 m/s', '2 m/s']\n"
MODEL = 'reference_area = "0.180 m^2"\nspan = "1.20 m"\nmean_chord = "160 mm"\nmoment_centre = ["0 m", "12 mm"]\n'
STD = 'std = { v = { column = "sv", unit = "m/s" }, temperature = { column = "sT", unit = "degC" } }\n'
SOURCE = "[[uncertainty.source]] 1 (crossflow noise)"
BALANCE = "[[compare]] 1 (balance)"

#: What is changed, the place that must be named, a word of what was found, a word of the remedy.
BROKEN = [
    # the file as a whole
    ([("[wake]", "[wkae]")], "[wkae]", "unknown key 'wkae'", "'wake'"),
    ([('title = "Clean wing"', 'titel = "x"')], "titel", "unknown key 'titel'", "'title'"),
    ([('title = "Clean wing"', "title = 1.5")], "title", "bare number 1.5", "text in quotation marks"),
    ([("[reference]", "[test.x]")], "", "table [reference] is missing", "add [reference]"),
    ([("[model]\n" + MODEL, "")], "", "table [model] is missing", "reference_area"),
    ([("[boundary]\n" + FREE_AIR, "")], "", "table [boundary] is missing", "free_air"),
    ([("[plane.axes]\n", "[plane.axis]\n")], "[plane] axis", "unknown key 'axis'", "'axes'"),
    # [test]
    ([("run = 117", "runn = 117")], "[test] runn", "unknown key", "'run'"),
    ([('alpha = "6 deg"', "alpha = 6")], "[test] alpha", "bare number 6", "'3 deg'"),
    ([('alpha = "6 deg"', 'alpha = "6 m"')], "[test] alpha", "a length", "an angle"),
    ([("date = 2025-06-30", "date = 2025")], "[test] date", "bare number 2025", "2025-06-30"),
    # [reference]
    ([('speed = "42.0', 'sped = "42.0')], "[reference] sped", "unknown key 'sped'", "'speed'"),
    ([('"42.0 m/s"', "42.0")], "[reference] speed", "bare number 42.0", "text with its unit"),
    ([('"42.0 m/s"', '"42.0"')], "[reference] speed", "no unit", "'42.0 m/s'"),
    ([('"42.0 m/s"', '"42.0 Pa"')], "[reference] speed", "a pressure", "a velocity"),
    ([('"42.0 m/s"', '"-42.0 m/s"')], "[reference] speed", "'-42.0 m/s'", "greater than 0"),
    ([('"42.0 m/s"', '"42,0 m/s"')], "[reference] speed", "'42,0 m/s'", "decimal point"),
    ([('speed = "42.0 m/s"\n', "")], "[reference]", "nothing gives the stream's speed", "dynamic_pressure"),
    ([('density = "1.185 kg/m^3"\n', "")], "[reference]", "cannot give the density", "give density"),
    ([('"1.185 kg/m^3"', '"1.185 kg"')], "[reference] density", "a mass", "a density"),
    ([('"1.185 kg/m^3"', '"-1.185 kg/m^3"')], "[reference] density", "not allowed", "greater than 0"),
    ([('"100.6 kPa"', '"14.6 psia"')], "[reference] static_pressure", "gauge or absolute", "'psi'"),
    ([('"100.6 kPa"', '"0.6 kPa"')], "[reference]", "would mean a temperature", "absolute"),
    ([('speed = "', 'dynamic_pressure = "1 kPa"\nspeed = "')], "[reference]", "each give", "keep one"),
    ([('speed = "42', 'mach = "0.3 m"\nspeed = "42')], "[reference] mach", "a length", "a pure number"),
    ([('speed = "42', 'compressible = "yes"\nspeed = "42')], "[reference] compressible", "'yes'", '"auto"'),
    ([('density = "1.185 kg/m^3"', 'temperature = "20 degC"\nrelative_humidity = 45')],
     "[reference]", "relative_humidity is 45", "between 0 and 1"),
    ([('density = "1.185 kg/m^3"', 'temperature = "20 C"')], "[reference] temperature", "'C'", "degC"),
    ([("[model]", POSITION_ERROR + "[model]")],
     "[reference.position_error]", "key 'correction' is missing", "correction = "),
    ([("[model]", POSITION_ERROR + "correction = ['0 m/s', '0 m/s']\n[model]")],
     "[reference.position_error]", "without calibrated_airspeed", "leave the table out"),
    # [model]
    ([('reference_area = "0.180 m^2"\n', "")], "[model]", "key 'reference_area' is missing", "0.180 m^2"),
    ([('"0.180 m^2"', '"0.180 m"')], "[model] reference_area", "a length", "an area"),
    ([('"0.180 m^2"', '"0 m^2"')], "[model] reference_area", "'0 m^2'", "greater than 0"),
    ([('span = "1.20 m"', "span = 1.20")], "[model] span", "bare number 1.2", "with its unit"),
    ([('span = "1.20 m"', 'spann = "1.20 m"')], "[model] spann", "unknown key", "'span'"),
    ([('["0 m", "12 mm"]', '["0 m"]')], "[model] moment_centre", "a list of 1", '["y", "z"]'),
    ([('["0 m", "12 mm"]', '["0 m", 12]')], "[model] moment_centre item 2", "bare number 12", "with its unit"),
    ([('["0 m", "12 mm"]', '"0 m"')], "[model] moment_centre", "the text '0 m'", "a point"),
    # [plane]
    ([('file = "traverse.csv"\n', "")], "[plane]", "key 'file' is missing", 'file = "traverse.csv"'),
    ([('file = "traverse.csv"', "file = 3")], "[plane] file", "bare number 3", "quotation marks"),
    ([('file = "traverse.csv"', 'file = ""')], "[plane] file", "the text is empty", "quotation marks"),
    ([('station = "0.90 m"\n', "")], "[plane]", "key 'station' is missing", "behind the trailing edge"),
    ([('station = "0.90 m"', "station = 0.9")], "[plane] station", "bare number 0.9", "with its unit"),
    ([('station = "0.90 m"', 'station = "0.9 deg"')], "[plane] station", "an angle", "a length"),
    ([('primary = "total_pressure"\n', "")], "[plane]", "key 'primary' is missing", "velocity"),
    ([('primary = "total_pressure"', 'primary = "total"')], "[plane] primary", "'total'", "'total_pressure'"),
    ([('primary = "total_pressure"', 'primary = "hole_pressures"')], "[plane.columns]", "'p1' is missing", "add it"),
    ([('primary = "total_pressure"', "primary = 1")], "[plane] primary", "bare number 1", "'velocity'"),
    ([("[plane]\n", "plane = 3\n[plan]\n")], "[model] plane", "unknown key", "known keys"),
    # [plane.columns]
    ([("total_pressure = {", "totl_pressure = {")], "[plane.columns] totl_pressure", "unknown key", "'total_pressure'"),
    ([('"U", unit = "m/s"', '"U", unit = "Pa"')], "[plane.columns] u.unit", "a pressure", "a velocity"),
    ([('"U", unit = "m/s"', '"U", unit = "1"')], "[plane.columns] u.unit", "a pure number", 'normalised_by = "speed"'),
    ([('"U", unit = "m/s"', '"U"')], "[plane.columns] u.unit", "key 'unit' is missing", "a velocity"),
    ([('"U", unit = "m/s"', '"U", unit = 1')], "[plane.columns] u.unit", "bare number 1", "quotation marks"),
    ([('"U", unit = "m/s"', '"U", units = "m/s"')], "[plane.columns] u.units", "unknown key 'units'", "'unit'"),
    ([('column = "U", ', "")], "[plane.columns] u", "key 'column' is missing", "name of the column"),
    ([('column = "U", ', "column = 3, ")], "[plane.columns] u.column", "bare number 3", "quotation marks"),
    ([('u = { column = "U", unit = "m/s" }', 'u = "U"')], "[plane.columns] u", "the text 'U'", "column, unit"),
    ([('"U", unit', '"U", relative_to = "total", unit')], "[plane.columns] u.relative_to", "given for u", "pressure"),
    ([('"U", unit', '"U", kinematic = true, unit')], "[plane.columns] u.kinematic", "given for u", "static_pressure"),
    ([('"U", unit = "m/s"', '"U", unit = "1", normalised_by = "dynamic_pressure"')],
     "[plane.columns] u.normalised_by", "u is normalised_by", 'normalised_by = "speed"'),
    ([('"U", unit = "m/s"', '"U", unit = "m/s", normalised_by = "speed"')],
     "[plane.columns] u.unit", "a velocity", 'unit = "1"'),
    ([('"T", unit = "degC"', '"T", unit = "1", normalised_by = "speed"')],
     "[plane.columns] temperature.normalised_by", "temperature is normalised_by", '"total_temperature"'),
    ([('"ps", unit = "Pa", relative_to = "static"', '"ps", unit = "m^2/s^2"')],
     "[plane.columns] static_pressure.unit", "a velocity squared", "kinematic = true"),
    ([('"ps", unit = "Pa"', '"ps", unit = "Pa", kinematic = true')],
     "[plane.columns] static_pressure.unit", "a pressure", "a velocity squared"),
    ([('"ps", unit = "Pa"', '"ps", unit = "Pa", kinematic = "yes"')],
     "[plane.columns] static_pressure.kinematic", "'yes'", "true or false"),
    ([('relative_to = "static"', 'relative_to = "statik"')],
     "[plane.columns] static_pressure.relative_to", "'statik'", "'static'"),
    ([('"ps", unit = "Pa"', '"ps", unit = "psig"')], "[plane.columns] static_pressure.unit", "gauge", "'psi'"),
    ([(COLUMN_Y, "")], "[plane.columns]", "position 'y' is missing", "r and theta"),
    ([(COLUMN_Y, COLUMN_Y + 'r = { column = "R", unit = "m" }\n')], "[plane.columns]", "'theta' is missing", "polar"),
    ([(COLUMN_Y, COLUMN_Y + 'r = { column = "R", unit = "m" }\ntheta = { column = "t", unit = "deg" }\n')],
     "[plane.columns] y", "y is given beside r and theta", "two lengths"),
    ([(COLUMN_V, ""), (STD, ""), ('"plane.v", ', "")], "[plane.columns]", "'v' is missing", "pitch and yaw"),
    ([(COLUMN_V, COLUMN_V + 'pitch = { column = "a", unit = "deg" }\n')],
     "[plane.columns] pitch", "twice", "keep v and w"),
    ([(COLUMN_V, COLUMN_V + 'velocity = { column = "a", unit = "m/s" }\n')],
     "[plane.columns] u", "both given", "vector"),
    ([(COLUMN_V, 'v = { column = "U", unit = "m/s" }\n')], "[plane.columns] v", "'U' is given for u and for v", "once"),
    ([('total_pressure = { column = "pt", unit = "hPa", relative_to = "total" }\n', "")],
     "[plane.columns]", "needs total_pressure", "another primary"),
    ([(PRESSURES, ""), ('u = { column = "U", unit = "m/s" }\n', "")],
     "[plane.columns]", "needs static_pressure", "add it"),
    ([(PRESSURES, "")], "[plane.columns]", "needs static_pressure", 'primary = "velocity"'),
    ([('primary = "total_pressure"', 'primary = "velocity"'), ('u = { column = "U", unit = "m/s" }\n', "")],
     "[plane.columns]", "'u' is missing", "add it"),
    ([('std = { v = {', "std = { vv = {")], "[plane.columns] std.vv", "unknown key", "'v'"),
    ([('"sv", unit = "m/s"', '"sv", unit = "Pa"')], "[plane.columns] std.v.unit", "a pressure", "a velocity"),
    ([("std = { v = {", "std = { speed = {")], "[plane.columns] std.speed", "no column of its own", "add speed"),
    ([('samples = { column = "N" }', 'samples = { column = "N", unit = "m" }')],
     "[plane.columns] samples.unit", "'m'", "leave it out"),
    # [plane.axes]
    ([('z = "+z"', 'z = "+x"')], "[plane.axes]", "no set of axes", "named once"),
    ([('z = "+z"', 'z = "z"')], "[plane.axes] z", "'z'", "'+z'"),
    ([('pitch_offset = "0.3 deg"', "pitch_offset = 0.3")], "[plane.axes] pitch_offset", "bare number 0.3", "'3 deg'"),
    ([("pitch_offset", "ptich_offset")], "[plane.axes] ptich_offset", "unknown key", "'pitch_offset'"),
    ([('pitch_offset = "0.3 deg"', "turn_positions = 1")],
     "[plane.axes] turn_positions", "bare number 1", "true or false"),
    # [probe], [empty_tunnel]
    ([PROBE.replace("3.2 mm", "3.2 s")], "[probe] tip_diameter", "a time", "a length"),
    ([PROBE.replace("calibration", "calibraton")], "[probe] calibraton", "unknown key", "'calibration'"),
    ([PROBE.replace('"estimate"', '"guess"')], "[probe] backlash", "'guess'", '"estimate"'),
    ([PROBE + "displacement = -0.15\n"], "[probe] displacement", "-0.15", "at least 0"),
    ([PROBE.replace("[probe]", '[[probe]]\ntube = 0\noffset = ["0 m", "1 m"]')],
     "[[probe]] 1 tube", "number 0", "at least 1"),
    ([PROBE + "zeros = { before = { p9 = '1 Pa' } }\n"], "[probe] zeros.before.p9", "unknown key", "p1"),
    (["[empty_tunnel]\n"], "[empty_tunnel]", "key 'survey' is missing", "empty.toml"),
    (["[empty_tunnel]\nsurvey = 1\n"], "[empty_tunnel] survey", "bare number 1", "quotation marks"),
    # [boundary]
    ([(FREE_AIR, "")], "[boundary]", "key 'kind' is missing", '"open_jet"'),
    ([(FREE_AIR, 'kind = "free"')], "[boundary] kind", "'free'", "'free_air'"),
    ([(FREE_AIR, 'knd = "free_air"')], "[boundary] knd", "unknown key", "'kind'"),
    ([(FREE_AIR, FREE_AIR + '\ny = ["-1 m", "1 m"]')], "[boundary] y", "free_air", "leave it out"),
    ([(FREE_AIR, 'kind = "closed_walls"\ny = ["-1 m", "1 m"]')], "[boundary]", "key 'z' is missing", "y and z"),
    ([(FREE_AIR, WALLS.replace('"-1.2 m", "1.2 m"', '"1.2 m", "-1.2 m"'))], "[boundary] y", "ascend", "lower"),
    ([(FREE_AIR, WALLS + '\nsection = "circle"')], "[boundary] y", "given for a circle", "diameter"),
    ([(FREE_AIR, WALLS + '\nsection = "oval"')], "[boundary] section", "'oval'", "'polygon'"),
    ([(FREE_AIR, 'kind = "open_jet"\nsection = "circle"\ndiameter = "0 m"')],
     "[boundary] diameter", "'0 m'", "greater"),
    ([(FREE_AIR, 'kind = "open_jet"\nsection = "polygon"\nvertices = [["0 m", "0 m"], ["1 m", "1 m"]]')],
     "[boundary] vertices", "a list of 2", "at least 3"),
    ([(FREE_AIR, FREE_AIR + '\nreflection = "x"')], "[boundary] reflection", "'x'", "'y', 'z'"),
    ([(FREE_AIR, FREE_AIR + '\ninboard_cut = "20 mm"')], "[boundary] inboard_cut", "half model", 'reflection = "y"'),
    # [wake]
    ([("level = 3.0", 'level = "3 mm"')], "[wake] level", "a length", "a pure number"),
    ([("level = 3.0", "level = 0")], "[wake] level", "0 is not allowed", "greater than 0"),
    ([("level = 3.0", "level = inf")], "[wake] level", "inf", "finite"),
    ([('grow = "10 mm"', "grow = 10")], "[wake] grow", "bare number 10", "with its unit"),
    ([('["-0.3 m", "0.1 m"]]]', '["-0.3 m", 0.1]]]')],
     "[wake] include item 1 item 2 item 2", "bare number 0.1", "with its unit"),
    ([('["0.3 m", "-0.1 m"], ', "")], "[wake] include item 1", "a list of 1", "at least 2"),
    ([('["0.3 m", "-0.1 m"]', '["-0.3 m", "-0.1 m"]')], "[wake] include item 1", "no area", "opposite corners"),
    ([('[["0 m", "0 m"], ["1 m", "0 m"], ["0 m", "1 m"]]', '"all"')], "[wake] exclude item 1", "'all'", "points"),
    # [[body]], [loading], [plan]
    ([BODY.replace('name = "tail"\n', "")], "[[body]] 1", "key 'name' is missing", 'name = "tail"'),
    ([BODY.replace('x = "0.8 m"', "x = 0.8")], "[[body]] 1 (tail) x", "bare number 0.8", "with its unit"),
    ([BODY.replace("[[body]]", "[body]")], "[body]", "single table", "[[...]]"),
    ([BODY, BODY], "[[body]] 2 (tail) name", "used twice", "name each once"),
    (["[loading]\n"], "[loading]", "key 'trailing_edge' is missing", "trailing_edge = "),
    ([LOADING.replace(', ["0.6 m", "0.0 m"]', "")], "[loading] trailing_edge", "a list of 1", "at least 2"),
    ([PLAN.replace('"0.1 m/s"', '"0.1 m"')], "[plan] noise item 1", "a length", "a velocity"),
    ([PLAN.replace("[1, 2]", "[0]")], "[plan] repeats item 1", "the bare number 0", "at least 1"),
    ([PLAN.replace("elliptic", "eliptic")], "[plan] loading", "'eliptic'", "'elliptic'"),
    # [uncertainty]
    ([("draws = 1000", "draws = 10")], "[uncertainty] draws", "bare number 10", "at least 100"),
    ([("draws = 1000", 'draws = "many"')], "[uncertainty] draws", "'many'", "whole number"),
    ([("draws = 1000", "draws = 1e3")], "[uncertainty] draws", "bare number 1000.0", "whole number"),
    ([("seed = 20", "sed = 20")], "[uncertainty] sed", "unknown key", "'seed'"),
    ([("seed = 20", "seed = -1")], "[uncertainty] seed", "bare number -1", "at least 0"),
    # [[uncertainty.source]]
    ([('name = "crossflow noise"\n', "")], "[[uncertainty.source]] 1", "key 'name' is missing", "crossflow noise"),
    ([('applies_to = ["plane.v", "plane.w"]\n', "")], SOURCE, "key 'applies_to' is missing", "plane.v"),
    ([('["plane.v", "plane.w"]', '["plane.v", "plane.vv"]')], f"{SOURCE} applies_to item 2", "'plane.vv'", "'plane.v'"),
    ([('["plane.v", "plane.w"]', '["plane.density"]')], f"{SOURCE} applies_to item 1", "'plane.density'", "known here"),
    ([('["plane.v", "plane.w"]', '["probe.p1"]')], f"{SOURCE} applies_to item 1", "'probe.p1'", "known here"),
    ([('["plane.v", "plane.w"]', '"plane.v"')], f"{SOURCE} applies_to", "the text 'plane.v'", "a list of names"),
    ([('["plane.v", "plane.w"]', '["plane.v", "plane.v"]')], f"{SOURCE} applies_to", "named twice", "once"),
    ([('["plane.v", "plane.w"]', "[]")], f"{SOURCE} applies_to", "a list of 0", "a list of names"),
    ([('effect = "random"\n', "")], SOURCE, "key 'effect' is missing", "systematic"),
    ([('effect = "random"', 'effect = "randm"')], f"{SOURCE} effect", "'randm'", "'random'"),
    ([('standard_uncertainty = "0.15 m/s"\n', "")], SOURCE, "'standard_uncertainty' is missing", "coverage_factor"),
    ([('"0.15 m/s"', '"0.15 Pa"')], f"{SOURCE} standard_uncertainty", "does not fit plane.v", "a velocity"),
    ([('"0.15 m/s"', "0.15")], f"{SOURCE} standard_uncertainty", "no unit", "'0.1 %'"),
    ([('"0.15 m/s"', '"0.15"')], f"{SOURCE} standard_uncertainty", "no unit", "'0.1 %'"),
    ([('"0.15 m/s"', '"-0.15 m/s"')], f"{SOURCE} standard_uncertainty", "not allowed", "at least 0"),
    ([('"plane.w"]', '"plane.total_pressure"]')],
     f"{SOURCE} standard_uncertainty", "does not fit plane.total_pressure", "a source of their own"),
    ([('"0.15 m/s"', '"0.15 m/s"\nexpanded_uncertainty = "0.3 m/s"')],
     f"{SOURCE} expanded_uncertainty", "both", "keep one"),
    ([('"0.15 m/s"', '"0.15 m/s"\ncoverage_factor = 2')],
     f"{SOURCE} coverage_factor", "standard uncertainty", "leave it out"),
    ([("coverage_factor = 2\n", "")],
     "[[uncertainty.source]] 2 (stream speed)", "key 'coverage_factor' is missing", "coverage_factor = 2"),
    ([('"rectangular"', '"uniform"')],
     "[[uncertainty.source]] 2 (stream speed) distribution", "'uniform'", "'rectangular'"),
    ([('"rectangular"', '"triangular"')],
     "[[uncertainty.source]] 2 (stream speed) degrees_of_freedom", "triangular", "rectangular"),
    ([("degrees_of_freedom = 9", "degrees_of_freedom = 0")],
     "[[uncertainty.source]] 2 (stream speed) degrees_of_freedom", "0 is not allowed", "greater than 0"),
    ([('correlation_length = "30 mm"', "correlation_length = 30")],
     f"{SOURCE} correlation_length", "number 30", "with its unit"),
    ([('effect = "random"', 'effect = "systematic"')],
     f"{SOURCE} correlation_length", "point to point", "leave it out"),
    ([('correlation_length = "30 mm"', 'correlation_length = "30 mm"\ndistribution = "triangular"')],
     f"{SOURCE} correlation_length", "triangular", "normal"),
    ([('"reference.density"', '"model.span"'), ('effect = "systematic"', 'effect = "random"')],
     "[[uncertainty.source]] 2 (stream speed) effect", "model.span", "systematic"),
    ([('name = "stream speed"', 'name = "crossflow noise"')],
     "[[uncertainty.source]] 2 (crossflow noise) name", "used twice", "name each once"),
    ([("[[uncertainty.source]]\nname = \"crossflow", "[[uncertainty.sorce]]\nname = \"crossflow")],
     "[uncertainty] sorce", "unknown key", "'source'"),
    # [[compare]]
    ([('name = "balance"\n', "")], "[[compare]] 1", "key 'name' is missing", 'name = "balance"'),
    ([('row = "total_drag"\n', "")], BALANCE, "key 'row' is missing", "total_drag"),
    ([('row = "total_drag"', 'row = "totl_drag"')], f"{BALANCE} row", "'totl_drag'", "'total_drag'"),
    ([('value = "11.32 N"\n', "")], BALANCE, "key 'value' is missing", "coefficient"),
    ([('"11.32 N"', "11.32")], f"{BALANCE} value", "bare number 11.32", "with its unit"),
    ([('"11.32 N"', '"11.32 N m"')], f"{BALANCE} value", "a moment", "a force"),
    ([('"11.32 N"', '"11.32 kg"')], f"{BALANCE} value", "a mass", "kgf"),
    ([('"0.06 N"', '"0.06 m"')], f"{BALANCE} standard_uncertainty", "a length", "a force"),
    ([('"0.06 N"', '"0.06 N"\ncoefficient = 0.02')], f"{BALANCE} coefficient", "both given", "keep the one"),
    ([('coefficient = "231 counts"', 'coefficient = "231 N"')],
     "[[compare]] 2 (computation) coefficient", "a force", "a pure number"),
    ([('row = "induced_drag"', 'row = "span_efficiency"')],
     "[[compare]] 2 (computation) coefficient", "span_efficiency", "give value"),
    ([('name = "computation"', 'name = "balance"')], "[[compare]] 2 (balance) name", "used twice", "name each once"),
    ([('"0.06 N"', '"0.06 N"\nas_measured = "half"')], f"{BALANCE} as_measured", "without a half model", "reflection"),
    ([('"0.06 N"', '"0.06 N"\nas_measured = "all"')], f"{BALANCE} as_measured", "'all'", "'whole'"),
    ([(FREE_AIR, FREE_AIR + '\nreflection = "y"')], BALANCE, "'as_measured' is missing", '"half"'),
]  # fmt: skip


@pytest.mark.parametrize(("edits", "place", "found", "remedy"), BROKEN)
def test_a_broken_file_is_told_in_one_line(edits, place, found, remedy):
    error = refused(edited(GOOD, *edits))
    assert error.file == "survey.toml"
    assert (error.place or "") == place
    assert found in error.found
    assert remedy in (error.remedy or "")
    assert "\n" not in error.line
    for word in ("pydantic", "Input should", "validation", "Traceback", "errors.pydantic"):
        assert word not in error.line


@pytest.mark.parametrize(
    ("edits", "place", "found"),
    [
        ([('chord = "0.16 m"\n', "")], "[section]", "key 'chord' is missing"),
        ([('chord = "0.16 m"', "chord = 0.16")], "[section] chord", "bare number 0.16"),
        ([('edge_static = "measured"', 'edge_static = "measure"')], "[section] edge_static", "'measure'"),
        ([('edge_static = "measured"', "")], "[section]", "key 'edge_static' is missing"),
        ([('y = { column = "y"', 'z = { column = "z", unit = "m" }\ny = { column = "y"')],
         "[plane.columns]", "both given"),
        ([('y = { column = "y"', 'x = { column = "y"')], "[plane.columns]", "no position is given"),
        ([('y = { column = "y", unit = "mm" }', 'r = { column = "y", unit = "mm" }')],
         "[plane.columns]", "line traverse"),
        ([("static_pressure = {", "temperature = {"), ('"ps", unit = "Pa", relative_to = "static"', '"T", unit = "K"')],
         "[plane.columns]", "needs static_pressure"),
        ([('primary = "total_pressure"', 'primary = "velocity"')], "[plane.columns]", "needs u or speed"),
    ],
)  # fmt: skip
def test_a_broken_section_is_told_in_one_line(edits, place, found):
    error = refused(edited(SECTION, *edits))
    assert error.place == place
    assert found in error.found
    assert error.remedy


def test_several_planes_are_told_apart():
    text = edited(
        GOOD,
        ("[plane]\n", "[[plane]]\n"),
        ("[boundary]", '[[plane]]\nfile = "b.csv"\nstation = "2 m"\nprimary = "velocity"\n[plane.columns]\n'
         'y = { column = "y", unit = "s" }\n[boundary]'),
    )  # fmt: skip
    error = refused(text)
    assert error.place == "[[plane]] 2 columns.y.unit"


@pytest.mark.parametrize(
    ("text", "place", "found"),
    [
        ('title = "x\n', "line 1", "not TOML"),
        ("a = 1\na = 2\n", "line 2", "overwrite"),
        ("[reference\nspeed = 1\n", "line 1", "not TOML"),
        ("[reference]\nspeed = 42.0 m/s\n", "line 2", "not TOML"),
        ("\n\nspeed: 3\n", "line 3", "not TOML"),
        ("x = [1,\n", "line 1", "too early"),
        ("x = " + "[" * 100000, None, ""),
    ],
)
def test_broken_toml_names_the_line(text, place, found):
    error = refused(text)
    assert place is None or error.place.startswith(place)
    assert found in error.found
    assert error.remedy


@pytest.mark.parametrize(
    "text", ["", "# nothing\n", "reference = 1\n", "reference = []\nplane = []\n", "plane = [1]\n"]
)
def test_empty_and_odd_files_are_refused(text):
    assert refused(text).line.startswith("survey.toml")


@pytest.mark.parametrize(
    ("content", "found"),
    [
        (GOOD.replace("Clean", "Flügel").encode("latin-1"), "not UTF-8"),
        (GOOD.encode("utf-16"), "UTF-16"),
        (b"\x00\x01\x02" * 50, "not a text file"),
        (b"\x89HDF\r\n\x1a\n", "not UTF-8"),
    ],
)
def test_files_that_are_no_text_are_refused(tmp_path, content, found):
    path = tmp_path / "survey.toml"
    path.write_bytes(content)
    with pytest.raises(SurveyError) as caught:
        read_survey(path)
    assert caught.value.file == str(path)
    assert found in caught.value.found
    assert caught.value.remedy


def test_missing_file_directory_and_odd_names(tmp_path):
    for path, found in (
        (tmp_path / "none.toml", "does not exist"),
        (tmp_path, "a directory"),
        (tmp_path / ("x" * 300), "cannot be read"),
        ("a\0b", "cannot be read"),
    ):
        with pytest.raises(SurveyError, match=found) as caught:
            read_survey(path)
        assert caught.value.remedy


def test_an_unreadable_file_is_refused(tmp_path, monkeypatch):
    def refuse(self):
        raise PermissionError(13, "Permission denied", str(self))

    monkeypatch.setattr(pathlib.Path, "read_bytes", refuse)
    with pytest.raises(SurveyError, match="may not be read"):
        read_survey(tmp_path / "survey.toml")


@given(
    key=st.sampled_from(["speed", "density", "reference_area", "station", "grow", "value", "standard_uncertainty"]),
    value=st.one_of(
        st.text(alphabet=st.characters(codec="ascii", exclude_characters='"\\\x7f', min_codepoint=32), max_size=12),
        st.integers(-5, 5),
        st.booleans(),
        st.floats(allow_nan=True),
        st.just([]),
    ),
)
def test_no_value_escapes_as_another_error(key, value):
    written = f'"{value}"' if isinstance(value, str) else str(value).lower()
    lines = [f"{key} = {written}" if line.startswith(f"{key} =") else line for line in GOOD.splitlines()]
    try:
        parse_survey("\n".join(lines), "survey.toml")
    except InputError as error:
        assert error.place
        assert error.remedy
