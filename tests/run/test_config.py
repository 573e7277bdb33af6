"""The survey file: a complete good one, what it gives, and what of it this version acts on."""

import hashlib
import math
import pathlib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from wakeledger.core.points import Column
from wakeledger.run.config import Axes, parse_survey, read_survey

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


# --- what a good file gives -----------------------------------------------------------------------------------------


def test_a_full_file_is_read_in_si():
    survey = parse_survey(GOOD, "folder/survey.toml")
    assert survey.title == "Clean wing"
    assert survey.test.given() == {"run": "117", "configuration": "clean", "alpha": "6 deg", "date": "2025-06-30"}
    assert survey.reference.given() == {"speed": 42.0, "density": 1.185, "static_pressure": 100600.0}
    assert survey.reference.compressible == "auto"
    assert survey.reference.resolve().dynamic_pressure == pytest.approx(0.5 * 1.185 * 42.0**2, rel=1e-14)
    assert survey.model.reference_area == 0.18
    assert survey.model.moment_centre == (0.0, 0.012)
    # interface: the quarter-chord line lies three quarters of the mean chord ahead of the trailing edge, x = 0.
    assert survey.model.quarter_chord() == pytest.approx(-0.12, rel=1e-14)
    assert survey.plane.file == "traverse.csv"
    assert str(survey.resolve(survey.plane.file)) == "folder/traverse.csv"
    assert survey.plane.station == 0.9
    assert survey.plane.axes.pitch_offset == pytest.approx(math.radians(0.3), rel=1e-14)
    assert survey.boundary.kind == "free_air"
    assert survey.wake.level == 3.0
    assert survey.wake.grow == pytest.approx(0.01, rel=1e-14)
    np.testing.assert_array_equal(survey.wake.include[0], [[-0.3, -0.1], [0.3, 0.1]])
    np.testing.assert_array_equal(survey.wake.exclude[0], [[0, 0], [1, 0], [0, 1]])
    assert (survey.uncertainty.draws, survey.uncertainty.seed) == (1000, 20)
    assert survey.unsupported() == []
    assert survey.notes() == []


def test_columns_carry_their_conversion():
    plane = parse_survey(GOOD, "survey.toml").plane
    assert set(plane.columns) == {"y", "z", "u", "v", "w", "total_pressure", "static_pressure", "temperature", "row"}
    assert plane.columns["y"] == Column("Y", "mm", 0.001)
    assert plane.columns["z"].scale == pytest.approx(0.0254, rel=1e-14)
    assert plane.columns["w"].scale == pytest.approx(0.3048, rel=1e-14)
    assert plane.columns["total_pressure"] == Column("pt", "hPa", 100.0, relative_to="total")
    assert plane.columns["temperature"] == Column("T", "degC", 1.0, 273.15)
    assert plane.columns["row"] == Column("row", "1")
    assert plane.std == {"v": Column("sv", "m/s"), "temperature": Column("sT", "degC", 1.0, 0.0)}
    assert plane.samples == Column("N", "1")
    assert not plane.polar


def test_uncertainties_are_brought_to_standard_ones():
    noise, speed, angle = parse_survey(GOOD, "survey.toml").uncertainty.source
    assert (noise.standard_uncertainty, noise.scale, noise.correlation_length) == (0.15, "absolute", 0.03)
    assert noise.applies_to == ("plane.v", "plane.w")
    assert noise.degrees_of_freedom == math.inf
    assert (speed.standard_uncertainty, speed.scale, speed.relative) == (0.001, "relative", True)
    assert (speed.distribution, speed.degrees_of_freedom, speed.shared_id) == ("rectangular", 9.0, "pitot-3")
    assert angle.standard_uncertainty == pytest.approx(math.radians(0.05), rel=1e-14)


def test_comparisons_keep_what_is_unknown_unknown():
    balance, computation = parse_survey(GOOD, "survey.toml").compare
    assert (balance.value, balance.standard_uncertainty, balance.coefficient) == (11.32, 0.06, None)
    assert computation.coefficient == pytest.approx(0.0231, rel=1e-14)
    assert (computation.value, computation.standard_uncertainty) == (None, None)
    assert computation.coefficient_standard_uncertainty is None


@pytest.mark.parametrize(
    ("line", "attribute", "expected"),
    [
        ('value = "11.32 N"\nstandard_uncertainty = "0.5 %"', "standard_uncertainty", 0.0566),
        ("coefficient = 0.0231\nstandard_uncertainty = 0.0002", "coefficient_standard_uncertainty", 0.0002),
        (
            'coefficient = 0.0231\ncoefficient_standard_uncertainty = "2 counts"',
            "coefficient_standard_uncertainty",
            0.0002,
        ),
    ],
)
def test_ways_to_give_the_uncertainty_of_a_comparison(line, attribute, expected):
    text = edited(GOOD, ('value = "11.32 N"\nstandard_uncertainty = "0.06 N"', line))
    assert getattr(parse_survey(text, "s.toml").compare[0], attribute) == pytest.approx(expected, rel=1e-13)


def test_text_and_digest_are_those_of_the_file(tmp_path):
    path = tmp_path / "survey.toml"
    content = ("\ufeff" + GOOD.replace("\n", "\r\n")).encode()
    path.write_bytes(content)
    survey = read_survey(path)
    assert survey.path == path
    assert survey.sha256 == hashlib.sha256(content).hexdigest()
    again = parse_survey(survey.text, path)
    assert again.sha256 == survey.sha256
    assert again.reference == survey.reference


def test_a_survey_is_frozen():
    survey = parse_survey(GOOD, "survey.toml")
    with pytest.raises(ValueError, match="frozen"):
        survey.title = "another"
    with pytest.raises(ValueError, match="read-only"):
        survey.wake.include[0][0, 0] = 1.0


def test_a_section_takes_one_coordinate_and_needs_no_model():
    survey = parse_survey(SECTION, "survey.toml")
    assert survey.section.chord == 0.16
    assert survey.model is None
    assert survey.plane.axes.file_axis("z") == "y"
    assert "no coefficients" in survey.notes()[0]


def test_normalised_kinematic_vector_and_polar_columns():
    text = edited(
        GOOD,
        ('y = { column = "Y", unit = "mm" }\nz = { column = "Z", unit = "in" }', ""),
        ('u = { column = "U", unit = "m/s" }\nv = { column = "V", unit = "m s-1" }\n'
         'w = { column = "W", unit = "ft/s" }\n',
         'r = { column = "R", unit = "mm" }\ntheta = { column = "phi", unit = "deg" }\n'
         'velocity = { column = "U", unit = "1", normalised_by = "speed" }\n'),
        ('"pt", unit = "hPa", relative_to = "total"', '"cpt", unit = "%", relative_to = "static", '
         'normalised_by = "dynamic_pressure"'),
        ('"ps", unit = "Pa", relative_to = "static"', '"p", unit = "m^2/s^2", kinematic = true'),
        ('std = { v = { column = "sv", unit = "m/s" }, ', "std = { "),
        ('standard_uncertainty = "0.15 m/s"', 'standard_uncertainty = "0.4 %"'),
    )  # fmt: skip
    survey = parse_survey(text, "survey.toml")
    assert survey.plane.polar
    assert survey.plane.columns["theta"].scale == pytest.approx(math.pi / 180, rel=1e-14)
    assert survey.plane.columns["velocity"] == Column("U", "1", normalised_by="speed")
    assert survey.plane.columns["total_pressure"].scale == pytest.approx(0.01, rel=1e-14)
    assert survey.plane.columns["static_pressure"].kinematic
    noise = survey.uncertainty.source[0]
    assert (noise.standard_uncertainty, noise.scale, noise.relative) == (0.004, "normalised", False)


def test_flight_inputs():
    text = edited(
        GOOD,
        ('speed = "42.0 m/s"\ndensity = "1.185 kg/m^3"\nstatic_pressure = "100.6 kPa"',
         'calibrated_airspeed = "90 kt"\npressure_altitude = "5000 ft"\nisa_offset = "5 degC"\nweight = "1200 kgf"\n'
         'compressible = false\n[reference.position_error]\nindicated = ["60 kt", "120 kt"]\n'
         'correction = ["-2 kt", "4 kt"]'),
        ("reference.speed", "reference.calibrated_airspeed"),
        ('"reference.density"', '"reference.weight"'),
    )  # fmt: skip
    survey = parse_survey(text, "survey.toml")
    given = survey.reference.given()
    # By hand: 90 kt is half way through the table, so +1 kt.
    assert given["calibrated_airspeed"] == pytest.approx(91 * 1852 / 3600, rel=1e-14)
    assert survey.reference.calibrated_airspeed == pytest.approx(90 * 1852 / 3600, rel=1e-14)
    assert given["pressure_altitude"] == pytest.approx(1524.0, rel=1e-14)
    assert given["isa_offset"] == 5.0
    assert survey.reference.compressible is False
    assert any("weight" in note for note in survey.notes())


@pytest.mark.parametrize(
    ("edits", "place"),
    [
        ((PROBE,), "[probe]"),
        ((BODY,), "[[body]]"),
        ((LOADING,), "[loading]"),
        ((("row = {", 'tube = { column = "tube" }\nrow = {'),), "[plane.columns] tube"),
        ((("row = {", 'reference_dynamic_pressure = { column = "q", unit = "Pa" }\nrow = {'),),
         "[plane.columns] reference_dynamic_pressure"),
        ((("row = {", 'p1 = { column = "p1", unit = "Pa" }\nrow = {'),), "[plane.columns] p1"),
        ((PROBE, ('["angle.pitch", "angle.yaw"]', '["calibration"]'), ('"0.05 deg"', '"0.5 %"')), "[probe]"),
    ],
)  # fmt: skip
def test_later_work_validates_and_is_refused_in_words(edits, place):
    found = parse_survey(edited(GOOD, *edits), "survey.toml").unsupported()
    assert found
    assert found[0].startswith(place + ":")
    assert all(len(sentence.split()) > 5 for sentence in found)


@pytest.mark.parametrize(
    "edits",
    [
        ('[empty_tunnel]\nsurvey = "empty.toml"\n',),
        ((FREE_AIR, WALLS),),
        ((FREE_AIR, 'kind = "open_jet"\nsection = "circle"\ndiameter = "2 m"'),),
        (("[plane]\n", "[[plane]]\n"),
         ("[boundary]", '[[plane]]\nfile = "b.csv"\nstation = "2 m"\nprimary = "velocity"\n[plane.columns]\n'
          + "".join(f'{n} = {{ column = "{n}", unit = "m" }}\n' for n in "yz")
          + "".join(f'{n} = {{ column = "{n}", unit = "m/s" }}\n' for n in "uvw") + "[boundary]")),
    ],
)  # fmt: skip
def test_tunnels_and_several_planes_are_acted_on(edits):
    assert parse_survey(edited(GOOD, *edits), "survey.toml").unsupported() == []


def test_what_is_lost_is_said():
    text = edited(GOOD, ('span = "1.20 m"\nmean_chord = "160 mm"\n', ""))
    notes = parse_survey(text, "survey.toml").notes()
    assert "span efficiency" in notes[0]
    assert "bound vortex" in notes[1]


# --- axes -----------------------------------------------------------------------------------------------------------


def test_axes_turn_the_files_vectors_into_the_projects():
    # A file with x upstream, y up, z to starboard: wind (u, v, w) = (-x, z, y) of the file; it is right-handed.
    matrix = Axes(x="-x", y="+z", z="+y").matrix()
    np.testing.assert_array_equal(matrix @ [1.0, 2.0, 3.0], [-1.0, 3.0, 2.0])
    assert np.linalg.det(matrix) == pytest.approx(1.0)
    assert np.linalg.det(Axes(y="-y").matrix()) == pytest.approx(-1.0)


@given(
    order=st.permutations("xyz"), signs=st.tuples(*[st.sampled_from("+-")] * 3), file_axis=st.sampled_from([0, 1, 2])
)
def test_any_signed_permutation_points_where_it_says(order, signs, file_axis):
    directions = [sign + axis for sign, axis in zip(signs, order, strict=True)]
    axes = Axes(**dict(zip("xyz", directions, strict=True)))
    turned = axes.matrix() @ np.eye(3)[file_axis]
    assert turned["xyz".index(order[file_axis])] == (1.0 if signs[file_axis] == "+" else -1.0)
    assert np.abs(turned).sum() == 1.0
    assert axes.file_axis(order[file_axis]) == "xyz"[file_axis]


@given(
    size=st.sampled_from([("ft", 0.3048), ("in", 0.0254), ("mm", 0.001), ("cm", 0.01)]),
    metres=st.floats(min_value=0.01, max_value=100.0),
)
def test_the_same_survey_in_other_units_is_the_same(size, metres):
    unit, factor = size
    survey = parse_survey(edited(GOOD, ('"0.90 m"', f'"{metres / factor!r} {unit}"')), "survey.toml")
    # 1e-12: text with 17 digits and a few roundings.
    assert survey.plane.station == pytest.approx(metres, rel=1e-12)
