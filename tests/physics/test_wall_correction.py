"""Fields between walls, in open jets and beside reflection planes against images, sine transforms and closed forms."""

import numpy as np
import pytest

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields import section_panels, section_setup, wall_correction
from wakeledger.physics.fields.boundary import Circle, ClosedWalls, FreeAir, OpenJet, Polygon, Rectangle
from wakeledger.physics.fields.differences import axial_vorticity, ddy, ddz
from wakeledger.physics.fields.duct_solve import duct_stream_function
from wakeledger.physics.fields.poisson import stream_function
from wakeledger.physics.fields.section_panels import mean_logarithm, panels_of
from wakeledger.physics.fields.solvability import solvability
from wakeledger.physics.fields.wall_correction import (
    section_interaction,
    wall_crossflow,
    wall_stream_function,
    wall_velocity_potential,
)
from wakeledger.physics.loading.boundary_factor import boundary_factor, classical_boundary_factor
from wakeledger.synthetic.elements import GaussianElements, vortex_pair
from wakeledger.synthetic.loadings import biplane_interference, shed, straight_edge

CORE = 0.03
STEP = CORE / 2
#: Off-centre and unequal, but without net circulation.
UNEQUAL = GaussianElements(
    np.array([-0.35, 0.3, 0.1]),
    np.array([0.02, -0.05, 0.1]),
    np.array([-1.0, 0.7, 0.3]),
    np.array([1.0, 1.0, 1.3]) * CORE,
)
OCTAGON = Polygon(
    ((-1.0, -0.5), (-0.6, -0.7), (0.6, -0.7), (1.0, -0.5), (1.0, 0.5), (0.6, 0.7), (-0.6, 0.7), (-1.0, 0.5))
)


def window(y0=-0.6, y1=0.6, z0=-0.3, z1=0.345, step=STEP):
    return UniformGrid(y0, z0, step, step, round((y1 - y0) / step) + 1, round((z1 - z0) / step) + 1)


WINDOW = window()
#: Sections around the window: far away, within a cell of one wall, touching one wall, touching all four.
SECTIONS = {
    "far": Rectangle((-1.5, 1.6), (-1.2, 1.3)),
    "near": Rectangle((-0.601, 1.0), (-0.7, 0.36)),
    "touching one wall": Rectangle((-0.6, 1.4), (-0.9, 1.1)),
    "touching all walls": Rectangle((-0.6, 0.6), (-0.3, 0.345)),
}


def walls_by_images(vortices, section, sign, y, z, *, rows=14):
    """ψ that the images in a rectangle add at points (y, z): rows along y in closed form, summed over z.

    Σ ln|ζ − kL| over a row of spacing L is ln|2 sin(πζ/L)| but for a constant; rows above and below cancel
    exponentially. Images are points: cores do not reach them. Independent of boundary elements and transforms.
    """
    (y0, y1), (z0, z1) = section.y, section.z
    spacing, height = 2 * (y1 - y0), z1 - z0
    psi = np.zeros(np.shape(y))
    for at_y, at_z, circulation in zip(vortices.y, vortices.z, vortices.circulation, strict=True):
        for n in range(-rows, rows + 1):
            for turn_y in (False, True):
                for turn_z in (False, True):
                    image_y = 2 * y0 - at_y if turn_y else at_y
                    image_z = (2 * z0 - at_z if turn_z else at_z) + 2 * n * height
                    phase = np.pi * ((y - image_y) + 1j * (z - image_z)) / spacing
                    above = np.where(phase.imag >= 0, 1, -1)
                    if n == 0 and not turn_y and not turn_z:
                        # The vortex itself is left out of its row.
                        phase = np.where(np.abs(phase) < 1e-9, 1e-9, phase)
                        row = np.log(np.abs(2 * np.sin(phase) / (np.abs(phase) * spacing / np.pi)))
                    else:
                        row = np.abs(phase.imag) + np.log(np.abs(1 - np.exp(2j * above * phase)))
                    psi -= sign ** (turn_y + turn_z) * circulation * row / (2 * np.pi)
    return psi


def walls_by_circle_theorem(vortices, radius, sign, y, z):
    """ψ that a circular wall about the origin adds: one image at the inverse point (Milne-Thomson)."""
    psi = np.zeros(np.shape(y))
    for at_y, at_z, circulation in zip(vortices.y, vortices.z, vortices.circulation, strict=True):
        place = complex(at_y, at_z)
        distance = np.abs(y + 1j * z - radius**2 / np.conj(place)) * abs(place) / radius
        psi -= sign * circulation * np.log(distance) / (2 * np.pi)
    return psi


# h/a = 0.5 leaves 5e-5 of a Gaussian beyond the grid's wavenumbers: 3e-8 of its ψ, as in free air.
@pytest.mark.parametrize("place", list(SECTIONS))
@pytest.mark.parametrize("kind", [ClosedWalls, OpenJet])
def test_rectangles_against_image_rows(place, kind):
    section = SECTIONS[place]
    xi = UNEQUAL.vorticity_on(WINDOW)
    psi = wall_stream_function(xi, WINDOW, kind(section))
    sign = -1.0 if kind is ClosedWalls else 1.0
    walls = walls_by_images(UNEQUAL, section, sign, *WINDOW.mesh())
    difference = psi - UNEQUAL.stream_function_on(WINDOW) - walls
    # The image rows' constant is their own in an open jet, where nothing fixes it.
    constant = difference.mean() if kind is OpenJet else 0.0
    assert np.abs(difference - constant).max() < 5e-8 * np.abs(psi).max() / 0.3
    drag = float(np.sum(psi * xi))
    assert drag > 0
    assert float(np.sum(difference * xi)) == pytest.approx(0.0, abs=2e-11 * drag)


@pytest.mark.parametrize("place", list(SECTIONS))
def test_boundary_elements_against_sine_transforms(place):
    xi = UNEQUAL.vorticity_on(WINDOW)
    boundary = ClosedWalls(SECTIONS[place])
    psi, sines = wall_stream_function(xi, WINDOW, boundary), duct_stream_function(xi, WINDOW, boundary)
    assert np.abs(psi - sines).max() < 2e-7 * np.abs(psi).max()
    assert np.sum(sines * xi) == pytest.approx(np.sum(psi * xi), rel=1e-10)


def test_sine_transforms_of_an_eigenfunction():
    """ξ = sin sin in a duct that the window fills: ψ = ξ/k² exactly."""
    grid = window(0.0, 1.2, 0.0, 0.6, 0.05)
    y, z = grid.mesh()
    xi = np.sin(2 * np.pi * y / 1.2) * np.sin(np.pi * z / 0.6)
    psi = duct_stream_function(xi, grid, ClosedWalls(Rectangle((0.0, 1.2), (0.0, 0.6))))
    assert psi == pytest.approx(xi / ((2 * np.pi / 1.2) ** 2 + (np.pi / 0.6) ** 2), rel=1e-12, abs=1e-16)
    with pytest.raises(ValueError, match="rectangular section"):
        duct_stream_function(xi, grid, ClosedWalls(Circle(4.0)))


# A window well inside, one whose corners touch the wall, and one that covers the whole section.
@pytest.mark.parametrize("radius", [1.0, float(np.hypot(0.6, 0.345)), 0.5])
@pytest.mark.parametrize("kind", [ClosedWalls, OpenJet])
def test_circles_against_the_circle_theorem(radius, kind):
    grid = window(step=0.015) if radius > 0.5 else window(-0.51, 0.51, -0.51, 0.51, step=0.02)
    vortices = UNEQUAL if radius > 0.5 else UNEQUAL.scaled(length=0.8).with_core(0.04)
    xi = vortices.vorticity_on(grid)
    y, z = grid.mesh()
    inside = np.hypot(y, z) <= radius
    psi = wall_stream_function(np.where(inside, xi, 0.0), grid, kind(Circle(2 * radius)))
    sign = -1.0 if kind is ClosedWalls else 1.0
    exact = vortices.stream_function_on(grid) + walls_by_circle_theorem(vortices, radius, sign, y, z)
    # The vortex nearest to the smallest circle is 5 cores from it: exp(−25) of it are missing.
    assert np.abs(psi - exact)[inside].max() < 2e-7 * np.abs(psi).max()
    assert (psi[np.hypot(y, z) > radius + 1e-6] == 0).all()


@pytest.mark.parametrize("kind", [ClosedWalls, OpenJet])
def test_the_edge_condition_holds_on_slanted_and_reentrant_walls(kind):
    """ψ = 0, or v_t = 0, on the edge of an octagon and of a section with a corner of 270° (a fillet cut out)."""
    notched = Polygon(((-1.0, -0.7), (1.0, -0.7), (1.0, 0.5), (0.7, 0.5), (0.7, 0.8), (-1.0, 0.8)))
    grid = window(step=0.03)
    vortices = UNEQUAL.with_core(0.06)
    for section in (OCTAGON, notched):
        corners = section.corners[:, 0] + 1j * section.corners[:, 1]
        ahead = np.roll(corners, -1) - corners
        tangent = ahead / np.abs(ahead)
        places = corners + 0.3 * ahead + 1e-6j * tangent
        v, w = wall_crossflow(vortices.vorticity_on(grid), grid, kind(section), places.real, places.imag)
        own = vortices.velocity(places.real, places.imag)
        along = ((v + own[0]) + 1j * (w + own[1])) * tangent.conj()
        kept, zero = (along.real, along.imag) if kind is ClosedWalls else (along.imag, along.real)
        # Panels interpolate the flow at the wall itself to about 1e-6 of it; inside it converges far below.
        assert np.abs(zero).max() < 1e-5 * np.abs(kept).max()
        assert np.abs(kept).max() > 0.02


def _drag(psi, xi, grid):
    return 0.5 * float(np.sum(psi * xi)) * grid.cell_area


@pytest.mark.parametrize("kind", [ClosedWalls, OpenJet])
def test_boundary_elements_converge(kind, monkeypatch):
    """More corner levels and shorter panels change the drag in an octagon by no more than 1e-11 of it."""
    grid = window(step=0.03)
    xi = UNEQUAL.with_core(0.06).vorticity_on(grid)
    boundary = kind(OCTAGON)
    drags = {}
    for levels, reach in ((1, 1.0), (3, 1.0), (5, 0.6)):
        monkeypatch.setattr(section_panels, "CORNER_LEVELS", levels)
        monkeypatch.setattr(section_panels, "_REACH", reach)
        section_setup.section_setup.cache_clear()
        wall_correction._solver.cache_clear()
        drags[levels] = _drag(wall_stream_function(xi, grid, boundary), xi, grid)
    monkeypatch.undo()
    section_setup.section_setup.cache_clear()
    wall_correction._solver.cache_clear()
    assert drags[3] == pytest.approx(drags[5], rel=1e-11)
    # Without grading (one level) the corners of 135° cost about 1e-8: the grading is what converges.
    assert drags[1] == pytest.approx(drags[5], rel=1e-6)


def test_panels_reproduce_an_analytic_function_up_to_the_edge():
    """Cauchy's integral, its derivative and the conjugate of F = 1/(ζ − p) with p outside the section."""
    pole = 1.6 + 1.2j
    places = np.array([-0.3 - 0.2j, 0.6 - 0.2j, -0.5 - 0.4999j, -0.4 + 0.45j])
    for section in (Rectangle((-1.0, 1.0), (-0.7, 0.7)), Circle(2.0), OCTAGON):
        panels = panels_of(section, lambda edge: np.abs(edge + 0.3), floor=1e-3)
        values = 1 / (panels.nodes - pole)
        assert np.abs(panels.cauchy(places) @ values - 1 / (places - pole)).max() < 1e-12
        assert np.abs(panels.cauchy(places, derivative=True) @ values + 1 / (places - pole) ** 2).max() < 1e-10
        assert np.ptp(panels.conjugate @ values.real - values.imag) < 1e-8
        logarithm = panels.arc @ np.log(np.abs(panels.nodes[:, None] - places[:2])) / panels.arc.sum()
        assert mean_logarithm(section, places[:2]) == pytest.approx(logarithm, rel=1e-9)


# -- half models and ground planes ----------------------------------------------------------------------------------


BOUNDARIES = {
    "free air": lambda plane: FreeAir(plane),
    "walls": lambda plane: ClosedWalls(Rectangle((-1.0, 1.0), (-1.0, 1.0)), plane),
    "walls at the window": lambda plane: ClosedWalls(Rectangle((-0.62, 0.62), (-0.62, 0.62)), plane),
    "jet": lambda plane: OpenJet(Rectangle((-1.0, 1.0), (-0.9, 0.9)), plane),
    "jet at the window": lambda plane: OpenJet(Rectangle((-0.6, 0.6), (-0.6, 0.6)), plane),
    "round walls": lambda plane: ClosedWalls(Circle(2.0), plane),
    "round jet": lambda plane: OpenJet(Circle(2.0), plane),
}


@pytest.mark.parametrize("name", list(BOUNDARIES))
@pytest.mark.parametrize("plane", ["y", "z"])
@pytest.mark.parametrize("first", [0.0, 0.5, 3.0])
def test_half_is_whole(name, plane, first):
    """A half window against the doubled one, point by point, with points on the plane, beside it, or away from it."""
    n, steps = 36, 0.015
    rng = np.random.default_rng(4)
    # A rough field: the equality is one of the operators, not of smooth fields only.
    half_field = rng.normal(size=(41, n)) * np.hanning(41)[:, None] * np.hanning(n)
    if first == 0:
        half_field[:, 0] = 0.0
    count = round(2 * (first + n - 1)) + 1
    whole_field = np.zeros((41, count))
    whole_field[:, -n:] += half_field
    whole_field[:, :n] -= half_field[:, ::-1]
    last = (first + n - 1) * steps
    half_grid = UniformGrid(first * steps, -0.3, steps, steps, n, 41)
    whole_grid = UniformGrid(-last, -0.3, steps, steps, count, 41)
    if plane == "z":
        half_field, whole_field = half_field.T, whole_field.T
        half_grid = UniformGrid(-0.3, first * steps, steps, steps, 41, n)
        whole_grid = UniformGrid(-0.3, -last, steps, steps, 41, count)
    half = wall_stream_function(half_field, half_grid, BOUNDARIES[name](plane))
    whole = wall_stream_function(whole_field, whole_grid, BOUNDARIES[name](None))
    same = whole[:, -n:] if plane == "y" else whole[-n:]
    assert np.abs(half - same).max() < 1e-12 * np.abs(whole).max()
    assert 2 * np.sum(half * half_field) == pytest.approx(np.sum(whole * whole_field), rel=1e-12)


def test_half_window_whose_points_do_not_mirror_onto_the_grid():
    tip = GaussianElements(np.array([0.3]), np.array([0.02]), np.array([1.0]), np.array([CORE]))
    grid = UniformGrid(0.3 * STEP, -0.3, STEP, STEP, 40, 41)
    psi = wall_stream_function(tip.vorticity_on(grid), grid, FreeAir("y"))
    exact = (tip + tip.mirrored("y")).stream_function_on(grid)
    assert np.abs(psi - exact).max() < 1e-7 * np.abs(exact).max()


# Exact for elliptic loadings (check_values 4.3, DERIVED; Wieselsberger, NACA TM 77): h/b and D_i/D_i,free.
@pytest.mark.parametrize(("height", "ratio"), [(0.1, 0.5158), (0.15, 0.6295), (0.25, 0.7678), (0.5, 0.9065)])
def test_ground_effect_is_wieselsbergers(height, ratio):
    core = 0.02
    wing = shed("elliptic", straight_edge(1.0, z=height), peak=1.0, core=core, n=120)
    grid = UniformGrid(-0.6, max(height - 0.1, 0.0), 0.01, 0.01, 121, 21)
    xi = wing.vorticity_on(grid)
    ground = wall_stream_function(xi, grid, FreeAir("z"))
    change = _drag(ground, xi, grid) - _drag(stream_function(xi, grid), xi, grid)
    # Thickness changes the wing's own drag, hardly what its image adds: the thin sheet's drag is the unit.
    assert 1 + change / (np.pi / 8) == pytest.approx(ratio, abs=5e-4)
    assert change / (np.pi / 8) == pytest.approx(-biplane_interference(2 * height), abs=5e-4)


def test_biplane_by_reflection():
    """A biplane is a wing and its image of the same sign: ground effect with the sign of the mutual drag reversed."""
    height = 0.1
    wing = shed("elliptic", straight_edge(1.0, z=height), peak=1.0, core=0.02, n=120)
    upper = UniformGrid(-0.6, 0.0, 0.01, 0.01, 121, 21)
    both = UniformGrid(-0.6, -0.2, 0.01, 0.01, 121, 41)
    xi = wing.vorticity_on(upper)
    pair = np.concatenate([xi[:0:-1], xi])
    pair[20] *= 2
    single = _drag(stream_function(xi, upper), xi, upper)
    mutual = single - _drag(wall_stream_function(xi, upper, FreeAir("z")), xi, upper)
    biplane = _drag(stream_function(pair, both), pair, both)
    # The elements reach the plane of symmetry with exp(−25) of their peak.
    assert biplane == pytest.approx(2 * (single + mutual), rel=1e-8)
    # e = 2/(1 + σ) = 1.3475 at a gap of 0.2 (check_values 4.3).
    assert 2 / (1 + mutual / (np.pi / 8)) == pytest.approx(1.3475, abs=5e-4)


# -- the boundary factor from a plane of data ---------------------------------------------------------------------


@pytest.mark.parametrize("kind", [ClosedWalls, OpenJet])
@pytest.mark.parametrize("section", [Rectangle((-1.0, 1.0), (-0.7, 0.7)), Circle(2.0)], ids=["rectangle", "circle"])
@pytest.mark.parametrize("loading", ["elliptic", "uniform"])
def test_boundary_factor_of_a_surveyed_wake_is_the_classical_one(kind, section, loading):
    span = 1.2
    if loading == "elliptic":
        wake = shed("elliptic", straight_edge(span), peak=1.0, core=0.04, n=80)
    else:
        wake = vortex_pair(circulation=1.0, spacing=span, core=0.04)
    grid = window(-0.78, 0.78, -0.2, 0.2, 0.02)
    xi = wake.vorticity_on(grid)
    boundary = kind(section)
    tested = _drag(wall_stream_function(xi, grid, boundary), xi, grid)
    free = _drag(wall_stream_function(xi, grid, boundary.free), xi, grid)
    lift = float(np.sum(grid.y * xi)) * grid.cell_area
    found = boundary_factor(tested, free, lift, dynamic_pressure=0.5, area=boundary.flow_area)
    classical = classical_boundary_factor(boundary, loading, span=span)
    assert np.sign(found) == (1.0 if kind is ClosedWalls else -1.0)
    # Gaussian cores act on walls as points; the elements' share of the sheet is what differs.
    assert found == pytest.approx(classical, rel=1e-4)


def test_upwash_at_a_far_plane_is_twice_delta():
    """Small wing in a closed square: far upwash w/U = 2δ (S/C) C_L, δ = 0.13678 (check_values 4.5)."""
    pair = vortex_pair(circulation=1.0, spacing=0.04, core=0.01)
    grid = window(-0.08, 0.08, -0.05, 0.05, 0.005)
    v, w = wall_crossflow(pair.vorticity_on(grid), grid, ClosedWalls(Rectangle((-0.5, 0.5), (-0.5, 0.5))), 0.0, 0.0)
    # C_L S = 2 L/(ρU²) = 2 Γ s with U = 1, C = 1.
    assert w[0] == pytest.approx(2 * 0.13678 * 2 * 0.04, rel=1e-3)
    assert v[0] == pytest.approx(0.0, abs=1e-9)
    assert wall_crossflow(pair.vorticity_on(grid), grid, FreeAir(), 0.0, 0.0)[1][0] == 0.0


@pytest.mark.parametrize("place", ["far", "near"])
def test_wall_crossflow_is_the_gradient_of_the_walls_stream_function(place):
    xi = UNEQUAL.vorticity_on(WINDOW)
    for kind in (ClosedWalls, OpenJet):
        boundary = kind(SECTIONS[place])
        added = wall_stream_function(xi, WINDOW, boundary) - stream_function(xi, WINDOW)
        at = (np.array([20, 30]), np.array([20, 50]))
        v, w = wall_crossflow(np.stack([xi, -xi]), WINDOW, boundary, WINDOW.y[at[1]], WINDOW.z[at[0]])
        # Differences of tenth order of fields good to 3e-8 on a step of 0.015.
        assert v[0] == pytest.approx(ddz(added, WINDOW)[at], abs=3e-6 * np.abs(v).max() + 3e-7)
        assert w[0] == pytest.approx(-ddy(added, WINDOW)[at], abs=3e-6 * np.abs(w).max() + 3e-7)
        assert v[1] == pytest.approx(-v[0], rel=1e-12)


def test_interaction_of_line_vortices_is_symmetric():
    y, z = np.array([-0.5, 0.2, 0.4, 0.55]), np.array([0.1, -0.2, 0.3, 0.0])
    for boundary in (ClosedWalls(OCTAGON), OpenJet(OCTAGON), OpenJet(Circle(1.4)), ClosedWalls(SECTIONS["far"])):
        walls = section_interaction(boundary, y, z, margin=0.01)
        assert walls == pytest.approx(walls.T, rel=1e-9)
        assert np.abs(walls).max() > 0.01


def test_survey_made_by_images_reduces_to_the_exact_drags():
    """Velocities of vortices and their images in a closed duct → vorticity in a mask → both drags."""
    section = Rectangle((-0.8, 0.8), (-0.6, 0.6))
    grid = window(-0.66, 0.66, -0.42, 0.42, 0.01)
    v, w = UNEQUAL.velocity_on(grid)
    y, z = grid.mesh()
    step = 1e-5
    # Velocities of the walls from their exact stream function by central differences: good to 1e-9.
    v += _slope(lambda d: walls_by_images(UNEQUAL, section, -1.0, y, z + d), step)
    w -= _slope(lambda d: walls_by_images(UNEQUAL, section, -1.0, y + d, z), step)
    xi = np.where(np.hypot(y, z) < 0.55, axial_vorticity(v, w, grid), 0.0)
    tested = _drag(wall_stream_function(xi, grid, ClosedWalls(section)), xi, grid)
    free = _drag(wall_stream_function(xi, grid, FreeAir()), xi, grid)
    exact_free = UNEQUAL.induced_drag(density=1.0)
    walls = walls_by_images(UNEQUAL, section, -1.0, UNEQUAL.y, UNEQUAL.z)
    exact_tested = exact_free + 0.5 * float(walls @ UNEQUAL.circulation)
    # Tenth-order differences at h/a = 1/3 cost 1e-4.
    assert tested == pytest.approx(exact_tested, rel=2e-4)
    assert free == pytest.approx(exact_free, rel=2e-4)
    assert free - tested == pytest.approx(exact_free - exact_tested, rel=1e-3)


def _slope(function, step):
    return (function(step) - function(-step)) / (2 * step)


# -- solvability, potentials, errors ------------------------------------------------------------------------------


def test_solvability_is_checked_and_reported():
    grid = window()
    one = GaussianElements(np.array([0.2]), np.array([0.1]), np.array([0.8]), np.array([CORE])).vorticity_on(grid)
    pair = UNEQUAL.vorticity_on(grid)
    section = SECTIONS["far"]
    both = solvability(np.stack([pair, one]), grid, OpenJet(section))
    assert both.quantity == "net circulation"
    assert both.required
    assert both.net == pytest.approx([0.0, 0.8], abs=1e-10)
    assert both.share == pytest.approx([0.0, 2.0], abs=1e-9)
    assert both.satisfied().tolist() == [True, False]
    # Closed walls carry any circulation, and a reflection plane cancels it.
    assert solvability(one, grid, ClosedWalls(section)).satisfied()
    half = window(0.0, 0.6)
    part = GaussianElements(np.array([0.2]), np.array([0.1]), np.array([0.8]), np.array([CORE])).vorticity_on(half)
    assert solvability(part, half, OpenJet(Rectangle((-1.5, 1.5), (-1.2, 1.3)), "y")).satisfied()
    source = solvability(part, half, ClosedWalls(Rectangle((-1.5, 1.5), (-1.2, 1.3)), "y"), of="divergence")
    assert source.quantity == "net source"
    assert source.net == pytest.approx(1.6)
    assert not source.satisfied()
    assert solvability(one, grid, OpenJet(section), of="divergence").satisfied()
    assert solvability(np.zeros(grid.shape), grid, OpenJet(section)).satisfied()


def test_one_sided_wake_between_walls_and_its_surplus_in_a_jet():
    """One vortex alone: exact images between closed walls; in a jet its surplus leaves evenly, keeping symmetry."""
    grid = window()
    first = GaussianElements(np.array([0.2]), np.array([0.1]), np.array([0.8]), np.array([CORE]))
    second = first.shifted(y=-0.5, z=-0.15)
    one, two = first.vorticity_on(grid), second.vorticity_on(grid)
    section = SECTIONS["far"]
    psi = wall_stream_function(one, grid, ClosedWalls(section))
    exact = first.stream_function_on(grid) + walls_by_images(first, section, -1.0, *grid.mesh())
    assert np.abs(psi - exact).max() < 1e-7 * np.abs(exact).max()
    for shape in (section, Circle(2.4)):
        jet = OpenJet(shape)
        there = np.sum(wall_stream_function(one, grid, jet) * two)
        back = np.sum(wall_stream_function(two, grid, jet) * one)
        assert there == pytest.approx(back, rel=1e-12)


def test_potentials_exchange_the_conditions():
    """φ between closed walls is −ψ in an open jet of the same field; beside a reflection plane it is even."""
    grid = window(-0.6, 0.6)
    sigma = UNEQUAL.vorticity_on(grid)
    section = Rectangle((-1.5, 1.5), (-1.2, 1.3))
    for kind, other in ((ClosedWalls, OpenJet), (OpenJet, ClosedWalls)):
        phi = wall_velocity_potential(sigma, grid, kind(section))
        assert phi == pytest.approx(-wall_stream_function(sigma, grid, other(section)), rel=1e-13)
    half = window(0.0, 0.6)
    source = GaussianElements(np.array([0.3]), np.array([0.1]), np.array([1.0]), np.array([CORE]))
    even = source.vorticity_on(grid) + source.vorticity_on(grid)[:, ::-1]
    for kind in (ClosedWalls, OpenJet):
        whole = wall_velocity_potential(even, grid, kind(section))
        found = wall_velocity_potential(source.vorticity_on(half), half, kind(section, "y"))
        assert np.abs(found - whole[:, 40:]).max() < 1e-12 * np.abs(whole).max()
    free = wall_velocity_potential(sigma, grid, FreeAir())
    assert free == pytest.approx(-stream_function(sigma, grid), rel=1e-14)


def test_batches_and_free_air():
    xi = UNEQUAL.vorticity_on(WINDOW)
    assert wall_stream_function(xi, WINDOW, FreeAir()) == pytest.approx(stream_function(xi, WINDOW), rel=1e-14)
    for boundary in (ClosedWalls(SECTIONS["near"]), OpenJet(Circle(2.0)), FreeAir()):
        both = wall_stream_function(np.stack([[xi, -2 * xi]]), WINDOW, boundary)
        assert both.shape == (1, 2, *WINDOW.shape)
        assert both[0, 1] == pytest.approx(-2 * both[0, 0], rel=1e-11, abs=1e-13)


def test_misplaced_windows_are_refused():
    xi = np.zeros(WINDOW.shape)
    with pytest.raises(SurveyError, match="across the reflection plane"):
        wall_stream_function(xi, WINDOW, ClosedWalls(Rectangle((-1.0, 1.0), (-1.0, 1.0)), "y"))
    fine = window(-0.6, 0.6, -0.6, 0.6, 0.003)
    with pytest.raises(SurveyError, match="coarser grid"):
        wall_stream_function(np.zeros(fine.shape), fine, ClosedWalls(Circle(1.2)))
