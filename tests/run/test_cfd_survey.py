"""Computed planes from file to rows: one field in every normalisation, windows, a near field to compare with."""

import os
from pathlib import Path

import numpy as np
import pytest

from wakeledger.core.errors import InputError
from wakeledger.run.config.survey import parse_survey
from wakeledger.run.gridded import grid_survey
from wakeledger.run.load import load, load_survey

pyvista = pytest.importorskip("pyvista", reason="the packages of the extra cfd are not installed")
REFERENCE = Path(
    os.environ.get("WAKELEDGER_REFERENCE_DATA", Path(__file__).resolve().parents[3] / "shared" / "reference")
)
needs_reference = pytest.mark.skipif(not REFERENCE.is_dir(), reason="the reference data are not beside the project")

GAMMA, GAS = 1.4, 287.05287
PRESSURE, TEMPERATURE, MACH = 40_000.0, 250.0, 0.5
DENSITY = PRESSURE / (GAS * TEMPERATURE)
SOUND = np.sqrt(GAMMA * GAS * TEMPERATURE)
SPEED = MACH * SOUND
TOTAL = PRESSURE * (1 + 0.2 * MACH**2) ** 3.5
TOTAL_TEMPERATURE = TEMPERATURE * (1 + 0.2 * MACH**2)


def flow(y, z):
    """Velocity, pressure, density and temperature of a small vortex with a warm wake in its core."""
    square = (y**2 + z**2) / 0.04
    hollow = np.exp(-square)
    u = SPEED * (1 - 0.1 * hollow)
    v, w = -8.0 * z * hollow / 0.2, 8.0 * y * hollow / 0.2
    p = PRESSURE * (1 - 0.01 * hollow)
    temperature = TEMPERATURE * (1 + 0.005 * hollow)
    return {"U": np.stack([u, v, w], axis=-1), "p": p, "rho": p / (GAS * temperature), "T": temperature}


#: What each solver writes: factors on U, p, rho and T, what is subtracted from p first, and how the file says so.
VARIANTS = {
    "SI": ({}, 0.0, {"U": 'unit = "m/s"', "p": 'unit = "Pa"', "rho": 'unit = "kg/m^3"', "T": 'unit = "K"'}),
    "gauge": (
        {},
        PRESSURE,
        {"U": 'unit = "m/s"', "p": 'unit = "Pa", relative_to = "static"', "rho": 'unit = "kg/m^3"', "T": 'unit = "K"'},
    ),
    "by a": (
        {"U": SOUND, "p": DENSITY * SOUND**2, "rho": DENSITY, "T": TEMPERATURE},
        0.0,
        {
            "U": 'normalised_by = "sound_speed"',
            "p": 'normalised_by = "density_sound_speed_squared"',
            "rho": 'normalised_by = "density"',
            "T": 'unit = "1", normalised_by = "temperature"',
        },
    ),
    "by U": (
        {"U": SPEED, "p": DENSITY * SPEED**2, "rho": DENSITY, "T": TEMPERATURE},
        0.0,
        {
            "U": 'normalised_by = "speed"',
            "p": 'normalised_by = "density_speed_squared"',
            "rho": 'normalised_by = "density"',
            "T": 'normalised_by = "temperature"',
        },
    ),
    "pressure coefficient": (
        {"U": SPEED, "p": 0.5 * DENSITY * SPEED**2, "rho": DENSITY, "T": TEMPERATURE},
        PRESSURE,
        {
            "U": 'normalised_by = "speed"',
            "p": 'normalised_by = "dynamic_pressure", relative_to = "static"',
            "rho": 'normalised_by = "density"',
            "T": 'normalised_by = "temperature"',
        },
    ),
    "by p": (
        {"U": SOUND, "p": PRESSURE, "rho": DENSITY, "T": TOTAL_TEMPERATURE},
        0.0,
        {
            "U": 'normalised_by = "sound_speed"',
            "p": 'normalised_by = "static_pressure"',
            "rho": 'normalised_by = "density"',
            "T": 'normalised_by = "total_temperature"',
        },
    ),
    "by H": (
        {"U": SPEED, "p": TOTAL, "T": TEMPERATURE},
        0.0,
        {
            "U": 'normalised_by = "speed"',
            "p": 'normalised_by = "total_pressure"',
            "rho": 'unit = "kg/m^3"',
            "T": 'normalised_by = "temperature"',
        },
    ),
    "kinematic": (
        {"p": DENSITY},
        PRESSURE,
        {
            "U": 'unit = "m/s"',
            "p": 'unit = "m^2/s^2", kinematic = true, relative_to = "static"',
            "rho": 'unit = "kg/m^3"',
            "T": 'unit = "K"',
        },
    ),
}

SURVEY = """
[reference]
mach = {mach}
static_pressure = "40 kPa"
temperature = "250 K"
[model]
reference_area = "1 m^2"
span = "1 m"
mean_chord = "1 m"
[boundary]
kind = "free_air"
[plane]
file = "plane.vtp"
station = "2 m"
primary = "velocity"
{more}
[plane.columns]
{columns}
"""


def survey(folder, columns, *, mach=MACH, more=""):
    lines = "\n".join(f"{name} = {{ {entry} }}" for name, entry in columns.items())
    return parse_survey(SURVEY.format(columns=lines, mach=mach, more=more), folder / "survey.toml")


def write(folder, factors=None, *, gauge=0.0, size=0.8, n=41):
    line = np.linspace(-size, size, n)
    y, z = np.meshgrid(line, line, indexing="ij")
    mesh = pyvista.StructuredGrid(np.full(y.shape, 2.0)[..., None], y[..., None], z[..., None])
    places = np.asarray(mesh.points, dtype=float)
    fields = flow(places[:, 1], places[:, 2])
    fields["p"] = fields["p"] - gauge
    surface = mesh.cast_to_unstructured_grid()
    for name, values in fields.items():
        surface.point_data[name] = values / (factors or {}).get(name, 1.0)
    surface.save(folder / "plane.vtu")
    (folder / "plane.vtu").rename(folder / "plane.vtp")
    return places


KEYS = {"velocity": "U", "static_pressure": "p", "density": "rho", "temperature": "T"}


@pytest.mark.parametrize("variant", VARIANTS.values(), ids=VARIANTS.keys())
def test_one_field_in_every_normalisation_is_one_state(tmp_path, variant):
    factors, gauge, entries = variant
    places = write(tmp_path, factors, gauge=gauge)
    columns = {key: f'column = "{name}", {entries[name]}' for key, name in KEYS.items()}
    state = grid_survey(load_survey(survey(tmp_path, columns)), quick=True).state
    truth = flow(places[:, 1], places[:, 2])
    # The reference gas constant and the survey file's own differ in no digit that is kept; 1e-9 is rounding.
    for k, name in enumerate("uvw"):
        np.testing.assert_allclose(getattr(state, name), truth["U"][:, k], rtol=1e-9, atol=1e-9 * SPEED)
    np.testing.assert_allclose(state.static_pressure, truth["p"], rtol=1e-9)
    np.testing.assert_allclose(state.density, truth["rho"], rtol=1e-9)
    np.testing.assert_allclose(state.temperature, truth["T"], rtol=1e-9)


@pytest.mark.parametrize(
    ("entry", "found", "remedy"),
    [
        ('column = "U", unit = "1", normalised_by = "density"', "normalised_by 'density'", '"speed" or "sound_speed"'),
        ('column = "U", unit = "m/s", normalised_by = "sound_speed"', "a velocity", 'has unit = "1"'),
        ('column = "U", unit = "1"', "pure number", 'normalised_by = "speed" (or sound_speed)'),
    ],
)
def test_a_normalisation_that_makes_no_sense(tmp_path, entry, found, remedy):
    with pytest.raises(InputError) as caught:
        survey(tmp_path, {"velocity": entry, "static_pressure": 'column = "p", unit = "Pa"'})
    assert found in caught.value.found
    assert remedy in caught.value.remedy


def test_a_normalisation_that_the_stream_does_not_have(tmp_path):
    write(tmp_path)
    text = SURVEY.replace("mach = {mach}", 'speed = "160 m/s"').replace(
        'temperature = "250 K"', 'density = "1.2 kg/m^3"'
    )
    text = text.replace('static_pressure = "40 kPa"\n', "compressible = false\n")
    lines = 'velocity = { column = "U", normalised_by = "sound_speed" }'
    file = parse_survey(text.format(columns=lines, more=""), tmp_path / "survey.toml")
    with pytest.raises(InputError, match=r'normalised_by = "sound_speed", which \[reference\] does not determine'):
        grid_survey(load_survey(file))


# Windows


def test_a_window_is_kept_to(tmp_path):
    write(tmp_path)
    columns = {key: f'column = "{name}", {VARIANTS["SI"][2][name]}' for key, name in KEYS.items()}
    more = 'window = [["-0.5 m", "0.45 m"], ["0.61 m", "-0.41 m"]]'
    grid = grid_survey(load_survey(survey(tmp_path, columns, more=more)), quick=True).chain.gridding.grid
    # The lines of the file are 40 mm apart, the outermost inside the window are the grid's.
    np.testing.assert_allclose([grid.y[0], grid.y[-1], grid.z[0], grid.z[-1]], [-0.48, 0.6, -0.4, 0.44], atol=1e-6)
    more = 'window = [["5 m", "5 m"], ["6 m", "6 m"]]'
    with pytest.raises(InputError, match=r"the window holds 0 usable points, the plane reaches from y = -0\.8"):
        grid_survey(load_survey(survey(tmp_path, columns, more=more)), quick=True)


def test_a_plane_far_larger_than_its_wake_is_cut_about_it(tmp_path):
    # 60 m by 60 m, with lines down to 50 mm apart about a vortex of 0.2 m.
    line = 30 * np.sinh(np.linspace(-5, 5, 81)) / np.sinh(5)
    y, z = np.meshgrid(line, line, indexing="ij")
    mesh = pyvista.StructuredGrid(np.full(y.shape, 2.0)[..., None], y[..., None], z[..., None])
    mesh = mesh.cast_to_unstructured_grid()
    places = np.asarray(mesh.points, dtype=float)
    for name, values in flow(places[:, 1], places[:, 2]).items():
        mesh.point_data[name] = values
    mesh.save(tmp_path / "plane.vtu")
    (tmp_path / "plane.vtu").rename(tmp_path / "plane.vtp")
    columns = {key: f'column = "{name}", {VARIANTS["SI"][2][name]}' for key, name in KEYS.items()}
    gridded = grid_survey(load_survey(survey(tmp_path, columns)))
    grid = gridded.chain.gridding.grid
    # Vorticity and loss fall to a hundredth within 0.45 m and reach half as much again of the box beyond.
    assert 0.5 < -grid.y[0] < 1.5 and 0.5 < grid.z[-1] < 1.5
    assert max(grid.dy, grid.dz) < 0.1
    # What a plane without the far field gives.
    write(tmp_path, size=1.0, n=101)
    near = grid_survey(load_survey(survey(tmp_path, columns)))
    drag = [float(each.first.values["profile_drag"]) for each in (gridded, near)]
    assert drag[0] == pytest.approx(drag[1], rel=0.01)
    assert drag[1] > 100.0


# The reference case


CASE = """
[reference]
speed = "30 m/s"
density = "1.225 kg/m^3"
[model]
reference_area = "6 m^2"
span = "6 m"
mean_chord = "1 m"
[plane]
file = {file}
station = "{x} m"
primary = "velocity"
[plane.columns]
velocity = {{ column = "U", unit = "m/s" }}
static_pressure = {{ column = "p", unit = "m^2/s^2", kinematic = true, relative_to = "static" }}
{columns}
[boundary]
kind = "free_air"
reflection = "y"
"""
RAW = '"{folder}/U_slice_x2.0.raw", "{folder}/p_slice_x2.0.raw"'
NEAR_FIELD = {"lift": 2 * 740.62, "total_drag": 2 * 37.99}


@needs_reference
@pytest.mark.parametrize(
    ("name", "x"), [("slice_x1.0.vtp", 1.0), ("slice_x2.0_legacy.vtk", 2.0), ("raw", 2.0), ("slice_x3.0.vtp", 3.0)]
)
def test_the_reference_case_closes_on_its_near_field(tmp_path, name, x):
    folder = REFERENCE / "cfd_wing"
    columns = ""
    file = f'"{folder / name}"'
    if name == "raw":
        file = f"[{RAW.format(folder=folder)}]"
        columns = "\n".join(f'{letter} = {{ column = "{letter}", unit = "m" }}' for letter in "xyz")
    path = tmp_path / "survey.toml"
    text = CASE.format(file=file, x=x, columns=columns)
    if "legacy" in name:
        # On a coarse grid of a small window, as scattered points take their time.
        text = text.replace("[plane]", '[plane]\nwindow = [["0 m", "-0.6 m"], ["3.8 m", "0.7 m"]]')
    path.write_text(text)
    gridded = grid_survey(load(path), quick="legacy" in name)
    first = gridded.first.values
    # Its README: lift within 0.5 % of the near field, the sum of the drags 1 to 5 % below it.
    assert first["lift"] == pytest.approx(NEAR_FIELD["lift"], rel=0.005)
    # The small window of the legacy file leaves out 1 % that is lost above and below it.
    low = 0.93 if "legacy" in name else 0.95
    assert low < first["total_drag"] / NEAR_FIELD["total_drag"] < 0.99
    # Induced drag decays and turns into profile drag; elliptic loading has L²/(pi q b²) = 35.2 N, with 1 to 6 % less
    # here as cores spread and the images of the walls act.
    elliptic = NEAR_FIELD["lift"] ** 2 / (np.pi * 0.5 * 1.225 * 900 * 36)
    assert 0.9 < first["induced_drag"] / elliptic < 1.0
    assert gridded.chain.gridding.kind == ("scattered" if "legacy" in name else "tensor")
