"""A section between walls from its survey file: the duct's own momentum balance, and what the corrections add."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import InputError
from wakeledger.run.survey import load, reduce

SPEED, DENSITY, PRESSURE = 32.0, 1.19, 98_500.0
Q = 0.5 * DENSITY * SPEED**2
CHORD, HEIGHT = 0.3, 0.9


def duct(depth=0.25, width=0.02, n=161, half=0.16):
    """A traverse far behind a section in a duct, and its exact force and u_b/U."""
    z = np.linspace(-half, half, n)
    fine = np.linspace(-half, half, 20_001)
    shape = np.exp(-((fine / width) ** 2))
    blocked = depth * SPEED * np.trapezoid(shape, fine) / (2 * HEIGHT)
    star = SPEED + 2 * blocked
    static = PRESSURE + 0.5 * DENSITY * (SPEED**2 - star**2)
    u = star - depth * SPEED * shape
    inside = (PRESSURE + DENSITY * SPEED**2) - (static + DENSITY * u**2)
    beside = (PRESSURE + DENSITY * SPEED**2) - (static + DENSITY * star**2)
    force = float(np.trapezoid(inside, fine)) + beside * (HEIGHT - 2 * half)
    total = static + 0.5 * DENSITY * (star - depth * SPEED * np.exp(-((z / width) ** 2))) ** 2
    return {"z": z, "pt": total, "ps": np.full(n, static)}, force, blocked / SPEED


def description(boundary, **more):
    units = {"z": ("z", "m"), "total_pressure": ("pt", "Pa"), "static_pressure": ("ps", "Pa")}
    content = {
        "title": "section between walls",
        "reference": {
            "speed": f"{SPEED} m/s",
            "density": f"{DENSITY} kg/m^3",
            "static_pressure": f"{PRESSURE} Pa",
            "compressible": False,
        },
        "plane": {
            "file": "traverse.csv",
            "station": "0.4 m",
            "primary": "total_pressure",
            "columns": {name: {"column": column, "unit": unit} for name, (column, unit) in units.items()},
        },
        "section": {"chord": f"{CHORD} m", "edge_static": "measured"},
        "uncertainty": {"draws": 200, "seed": 3, "source": []},
        **more,
    }
    return content if boundary is None else content | {"boundary": boundary}


@pytest.fixture
def reduced(kit, tmp_path):
    """Write, load and reduce a survey with a boundary."""

    def run(name, boundary, data, **more):
        return reduce(load(kit.write(tmp_path / name, data, description(boundary, **more))))

    return run


WALLS = {"kind": "closed_walls", "z": ["-0.40 m", "0.50 m"]}
SOLID = {"solid_blockage": {"value": "0.40 %", "standard_uncertainty": "0.08 %"}}


def test_the_row_is_the_force_in_the_duct(reduced):
    data, force, blocked = duct()
    unbounded = reduced("free", None, data).rows[0]
    row = reduced("walls", WALLS, data).rows[0]
    # Jones recovers to the pressure ahead of the model, 4u_b/U of q away: second order of 0.6 %.
    assert_allclose(row.value, force, rtol=5e-4)
    assert_allclose(unbounded.value / force - 1, blocked, rtol=0.3)
    assert unbounded.coefficient_corrected is None
    assert_allclose(row.coefficient, force / (Q * CHORD), rtol=5e-4)
    # Without solid blockage q grows by 2 τ c_d', τ = c/4h.
    wake = CHORD / (4 * HEIGHT) * row.coefficient
    assert_allclose(row.coefficient_corrected, row.coefficient * (1 - 2 * wake), rtol=1e-10)


def test_a_static_pressure_taken_as_the_streams_is_that_behind_the_model(reduced):
    data, force, blocked = duct()
    more = {"section": {"chord": f"{CHORD} m", "edge_static": "stream"}}
    found = reduced("walls", WALLS, {name: data[name] for name in ("z", "pt", "ps")}, **more)
    # Taken as that ahead of the model it would be 2u_b/U out.
    assert_allclose(found.rows[0].value, force, rtol=0.2 * blocked)
    assert any("lower by what the walls add" in note for note in found.notes)


def test_estimates_keep_their_places_beside_the_row(reduced):
    data, _, _ = duct()
    free = {each.method: each for each in reduced("free", None, data).estimates}
    walls = {each.method: each for each in reduced("walls", WALLS, data).estimates}
    for method in ("betz", "momentum"):
        assert_allclose(walls[method].difference, free[method].difference, rtol=1e-6)
        assert walls[method].value < free[method].value


def test_given_solid_blockage_and_its_uncertainty(reduced):
    data, _, _ = duct()
    noise = {
        "name": "total pressure noise",
        "applies_to": ["plane.total_pressure"],
        "effect": "random",
        "standard_uncertainty": "0.5 Pa",
    }
    uncertainty = {"draws": 200, "seed": 3, "source": [noise]}
    ledger = reduced("walls", WALLS | SOLID, data, uncertainty=uncertainty)
    row = ledger.rows[0]
    wake = CHORD / (4 * HEIGHT) * row.coefficient
    assert_allclose(row.coefficient_corrected, row.coefficient * (1 - 3 * 0.004 - 2 * wake), rtol=1e-10)
    lines = {line.source: line for line in ledger.budget}
    # It moves the corrected coefficient and not the force.
    assert lines["solid blockage"].standard_uncertainty == 0.0
    said = " ".join(ledger.notes)
    assert "+0.40% +- 0.08% more, as given" in said
    assert "counts too high" in said


def test_without_solid_blockage_that_is_said(reduced):
    data, _, _ = duct()
    assert any("it is not corrected" in note for note in reduced("walls", WALLS, data).notes)


@pytest.mark.parametrize(
    ("boundary", "match"),
    [
        ({"kind": "open_jet", "y": ["-1 m", "1 m"], "z": ["-1 m", "1 m"]}, "are those of closed walls"),
        ({"kind": "closed_walls", "y": ["-1 m", "1 m"]}, r"runs along z: give the walls"),
        ({"kind": "closed_walls", "section": "circle", "diameter": "1 m"}, "two parallel ones"),
        (WALLS | {"reflection": "y"}, "beside a \\[section\\]"),
        (WALLS | {"buoyancy": {"value": "1 N", "standard_uncertainty": "0.1 N"}}, "does not use it"),
        (WALLS | {"solid_blockage": {"value": "0.4 %"}}, "never taken as exact"),
        (WALLS | {"solid_blockage": {"value": "0.4", "standard_uncertainty": "0.1"}}, "is 40% of the speed"),
        (WALLS | {"solid_blockage": {"value": 0.4, "standard_uncertainty": "0.1 %"}}, "bare number"),
    ],
)
def test_walls_that_do_not_fit_are_refused(reduced, boundary, match):
    data, _, _ = duct()
    with pytest.raises(InputError, match=match):
        reduced("walls", boundary, data)


def test_a_supersonic_section_has_no_wall_correction(reduced):
    data, _, _ = duct()
    fast = {"mach": 1.4, "static_pressure": "50 kPa", "temperature": "220 K", "compressible": True}
    absolute = {"z": data["z"], "pt": 150_000.0 - 20 * (data["pt"].max() - data["pt"]), "ps": 0 * data["ps"] + 50_000.0}
    with pytest.raises(InputError, match="subsonic"):
        reduced("walls", WALLS, absolute, reference=fast)


def test_two_walls_are_not_enough_round_a_plane(kit, tmp_path):
    data, _, _ = duct()
    content = description({"kind": "closed_walls", "z": ["-0.4 m", "0.5 m"]})
    content["model"] = {"reference_area": "0.2 m^2"}
    del content["section"]
    with pytest.raises(InputError, match="key 'y' is missing"):
        load(kit.write(tmp_path, data, content))
