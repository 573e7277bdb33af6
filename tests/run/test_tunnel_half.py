"""Half models and ground planes from file to ledger: what is doubled, what is absent, and the wall's boundary layer."""

import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.errors import InputError
from wakeledger.run.survey import load, reduce
from wakeledger.synthetic import EmptyTunnel, GaussianElements, RectangularDuct
from wakeledger.synthetic.loadings import biplane_interference

CLOSE = 2e-3
DUCT = RectangularDuct((-0.96, 0.96), (-0.6, 0.68))
WINDOW = (0.0, 0.88), (-0.36, 0.44)
DRAGS = ("profile_drag", "induced_drag", "induced_drag_free_air", "total_drag", "lift")


@pytest.fixture(scope="module")
def tunnel():
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))


@pytest.fixture
def survey(kit, tunnel, tmp_path):
    """Write the survey of a flow, that of the empty tunnel too where it is wanted, load and reduce them."""

    def run(flow, boundary, window=WINDOW, *, empty=False, name="survey", **more):
        y, z = tunnel.points(*window)
        content = tunnel.description(kit, boundary, **more)
        if empty:
            alone = tunnel.columns(flow.empty_state(y, z), y, z)
            plain = {key: value for key, value in content.items() if key not in ("compare", "uncertainty")}
            kit.write(tmp_path / name / "empty", alone, plain)
            content["empty_tunnel"] = {"survey": "empty/survey.toml"}
        return reduce(load(kit.write(tmp_path / name, tunnel.columns(flow.state(y, z), y, z), content)))

    return run


def values(ledger):
    return {row.name: row.value for row in ledger.rows}


@pytest.mark.parametrize("kind", ["closed_walls", "open_jet", "free_air"])
def test_half_a_model_has_the_whole_ones_ledger(tunnel, survey, kind):
    section = None if kind == "free_air" else RectangularDuct(DUCT.y, DUCT.z, kind == "closed_walls")
    boundary = {"kind": kind} if section is None else tunnel.table(section, kind)
    flow = tunnel.wing(section, "y")
    found = survey(flow, boundary | {"reflection": "y"})
    whole = survey(tunnel.wing(section, loading="elliptic"), boundary, ((-0.88, 0.88), (-0.36, 0.44)), name="whole")
    rows, of_whole, exact = values(found), values(whole), flow.truth.rows()
    for row in DRAGS if section is not None else ("profile_drag", "induced_drag", "total_drag", "lift"):
        assert_allclose(rows[row], exact[row], rtol=CLOSE)
        # The mirrored half and the surveyed whole are the same numbers but for the bias of the noise they show: the
        # interpolation's own, 3e-9 of the induced drag here.
        assert_allclose(rows[row], of_whole[row], rtol=1e-8)
    assert "side_force" not in rows
    assert "rolling_moment" not in rows
    assert "root_bending_moment" not in of_whole
    by_row = {row.name: row for row in found.rows}
    q = 0.5 * tunnel.DENSITY * tunnel.SPEED**2
    assert_allclose(by_row["lift"].coefficient, exact["lift"] / (q * tunnel.AREA), rtol=CLOSE)
    # Elliptic: ρUΓ₀s²/3, and ρUΓ₀a²/4 by the spread of the cores.
    assert_allclose(rows["root_bending_moment"], exact["root_bending_moment"], rtol=CLOSE)
    assert_allclose(exact["root_bending_moment"], 1.2 * 40.0 * 2.0 * (0.6**2 / 3 + 0.08**2 / 4), rtol=3e-3)
    assert_allclose(
        by_row["root_bending_moment"].coefficient,
        rows["root_bending_moment"] / (q * tunnel.AREA * tunnel.SPAN),
        rtol=1e-12,
    )


def test_balance_as_measured(tunnel, survey):
    boundary = tunnel.table(DUCT, reflection="y", buoyancy={"value": "0.05 N", "standard_uncertainty": "0.01 N"})
    compare = [
        {"name": name, "row": row, "value": value, "standard_uncertainty": u, "as_measured": part}
        for name, row, value, u, part in (
            ("half lift", "lift", "45.2 N", "0.2 N", "half"),
            ("whole lift", "lift", "90.4 N", "0.4 N", "whole"),
            ("half drag", "total_drag", "2.60 N", "0.03 N", "half"),
            ("whole drag", "total_drag", "5.20 N", "0.06 N", "whole"),
            ("bending", "root_bending_moment", "11.5 N m", "0.2 N m", "half"),
        )
    ]
    found = {each.name: each for each in survey(tunnel.wing(DUCT, "y"), boundary, compare=compare).comparisons}
    assert_allclose([found["half lift"].value, found["whole lift"].value], 90.4)
    # The buoyancy is that of the half in the stream.
    assert_allclose([found["half drag"].value, found["whole drag"].value], 5.2 - 0.1)
    assert_allclose(found["half drag"].standard_uncertainty, np.hypot(0.06, 0.02))
    # One half has one root.
    assert_allclose(found["bending"].value, 11.5)


def layer(**more):
    """Boundary layer of the reflection plane, a vortex in its corner, and some upflow."""
    return EmptyTunnel(upflow=0.12, layer_loss=150.0, layer_thickness=0.06, **more)


def test_clean_wall_survey_takes_the_boundary_layer_out(tunnel, survey):
    vortex = GaussianElements(np.array([0.2]), np.array([-0.28]), np.array([0.05]), np.array([0.08]))
    flow = tunnel.wing(DUCT, "y", empty=layer(vortices=vortex))
    boundary = tunnel.table(DUCT, reflection="y")
    found = survey(flow, boundary, empty=True)
    for row in (*DRAGS, "root_bending_moment"):
        assert_allclose(values(found)[row], flow.truth.rows()[row], rtol=CLOSE)
    # Left in, the layer is profile drag of some hundred counts.
    left = values(survey(flow, boundary, name="left"))["profile_drag"]
    assert left - flow.truth.profile_drag > 100 * tunnel.COUNT


def test_inboard_cut_leaves_the_layer_out(tunnel, survey):
    flow = tunnel.wing(DUCT, "y", empty=EmptyTunnel(layer_loss=150.0, layer_thickness=0.03))
    noise = {
        "name": "total pressure noise",
        "applies_to": ["plane.total_pressure"],
        "effect": "random",
        "standard_uncertainty": "0.05 Pa",
    }
    boundary = tunnel.table(DUCT, reflection="y", inboard_cut="100 mm")
    found = survey(flow, boundary, uncertainty={"draws": 100, "seed": 2, "source": [noise]})
    rows = {row.name: row for row in found.rows}
    exact = flow.truth.rows()
    # The wake inboard of the cut is filled from both sides of the plane: an even profile of the root.
    assert_allclose(rows["profile_drag"].value, exact["profile_drag"], rtol=0.01)
    for row in ("induced_drag", "induced_drag_free_air", "lift", "root_bending_moment"):
        assert_allclose(rows[row].value, exact[row], rtol=CLOSE)
    cut = {line.row: line.standard_uncertainty for line in found.budget if line.source == "inboard cut"}
    assert cut["profile_drag"] > 0
    error = abs(rows["profile_drag"].value - exact["profile_drag"])
    assert error < 3 * rows["profile_drag"].standard_uncertainty
    assert any("100 mm" in note for note in found.notes)


def test_ground(tunnel, survey):
    flow = tunnel.wing(None, "z", z=0.32)
    found = survey(flow, {"kind": "free_air", "reflection": "z"}, ((-0.88, 0.88), (0.0, 0.72)))
    rows, exact = values(found), flow.truth.rows()
    for row in ("profile_drag", "induced_drag", "total_drag", "lift", "rolling_moment"):
        assert_allclose(rows[row], exact[row], rtol=CLOSE)
    # Wieselsberger: the induced drag falls by Prandtl's factor for the image at twice the height, on thin elliptic
    # loading; this one is thick and not quite elliptic.
    free = tunnel.wing(None, z=0.32).truth.induced_drag
    thin = np.pi * tunnel.DENSITY * 2.0**2 / 8
    assert_allclose(free - rows["induced_drag"], biplane_interference(0.64 / tunnel.SPAN) * thin, rtol=0.03)
    section = RectangularDuct((-1.0, 1.0), (-0.76, 0.76))
    flow = tunnel.wing(section, "z", z=0.32)
    between = tunnel.table(RectangularDuct((-1.0, 1.0), (0.0, 0.76)), reflection="z")
    rows, exact = values(survey(flow, between, ((-0.88, 0.88), (0.0, 0.72)), name="walls")), flow.truth.rows()
    for row in (*DRAGS, "rolling_moment"):
        assert_allclose(rows[row], exact[row], rtol=CLOSE)


def test_what_crosses_the_plane_of_symmetry_is_refused(tunnel, survey):
    boundary = tunnel.table(DUCT, reflection="y")
    with pytest.raises(InputError, match="reflection plane"):
        survey(tunnel.wing(DUCT, "y"), boundary, ((-0.2, 0.88), (-0.36, 0.44)))
    with pytest.raises(InputError, match="not symmetric"):
        survey(tunnel.wing(DUCT, "y"), boundary | {"y": ["-0.9 m", "1.0 m"]}, name="walls")
