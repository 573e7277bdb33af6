"""Field of a bound line between walls and in a jet, against three-dimensional images summed one by one."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.boundary import Circle, ClosedWalls, OpenJet, Rectangle
from wakeledger.physics.fields.duct_near_field import duct_near_field
from wakeledger.physics.fields.lifting_line import near_field
from wakeledger.synthetic import LiftingLine, RectangularDuct, shed, straight_edge
from wakeledger.synthetic.walls import bound_field

Y, Z = (-0.7, 0.8), (-0.5, 0.6)
DISTANCE = 0.5
CORE = 0.025
GRID = UniformGrid(-0.50, -0.10, 0.0125, 0.0125, 89, 33)


def elements():
    def loading(eta):
        return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.3 * eta)

    return shed(loading, straight_edge(0.9, y=0.05, z=0.1), peak=2.0, core=CORE, n=40)


def by_images(line, closed, x, y, z, reach):
    """What the bound line's images and the legs' beginnings add, with whole rings of images."""
    total = np.zeros((3, y.size))
    number = range(-reach, reach + 1)
    for turn_y in (1, -1):
        for turn_z in (1, -1):
            sign = turn_y * turn_z if closed else 1
            for m in number:
                for n in number:
                    here = line.scaled(circulation=sign)
                    at_y = Y[0] + turn_y * (line.y - Y[0]) + 2 * m * (Y[1] - Y[0])
                    at_z = Z[0] + turn_z * (line.z - Z[0]) + 2 * n * (Z[1] - Z[0])
                    order = slice(None, None, turn_y)
                    image = type(line)(at_y[order], at_z[order], here.circulation[order], here.core[order])
                    u, v, w = LiftingLine(image).velocity(x, y, z)
                    there = image.velocity(y, z)
                    total += np.stack([u, v - there[0], w - there[1]])
    return total


@pytest.mark.parametrize("closed", [True, False])
def test_field_of_the_bound_line_with_all_its_images(closed):
    line = elements()
    grid = GRID
    boundary = (ClosedWalls if closed else OpenJet)(Rectangle(Y, Z))
    found = duct_near_field(line.vorticity_on(grid), grid, boundary, distance=DISTANCE)
    places = [(5, 6), (20, 40), (17, 62), (28, 80), (10, 50)]
    y, z = (np.array([axis[place[k]] for place in places]) for axis, k in ((grid.y, 1), (grid.z, 0)))
    # What rings of images leave out falls as the square of their reach.
    coarse, fine = (by_images(line, closed, DISTANCE, y, z, reach) for reach in (4, 9))
    limit = fine + (fine - coarse) / ((19 / 9) ** 2 - 1)
    truth = bound_field(line, RectangularDuct(Y, Z, closed), DISTANCE, y, z)
    largest = np.abs(limit).max()
    exact = {"u": limit[0], "v": limit[1], "w": limit[2]}
    for own, (name, values) in zip(truth, exact.items(), strict=True):
        at = np.array([getattr(found, name)[place] for place in places])
        if closed and name == "u":
            # The order of summation leaves a uniform axial velocity; what passes the section is what comes in.
            values, at, own = values - values.mean(), at - at.mean(), own - own.mean()
        # Thin line against thin line; the limit of the images is as good as that.
        assert_allclose(own, values, atol=1e-3 * largest)
        # The bound line is as thick as the sheet: (a/X)² of it or so.
        assert_allclose(at, values, atol=0.01 * largest)
    assert largest > 0.02


def test_far_walls_are_free_air():
    line = elements()
    grid = GRID
    vorticity = line.vorticity_on(grid)
    free = near_field(vorticity, grid, distance=DISTANCE)
    far = duct_near_field(vorticity, grid, ClosedWalls(Rectangle((-8, 8), (-8, 8))), distance=DISTANCE)
    for name in ("u", "v", "w"):
        assert_allclose(getattr(far, name), getattr(free, name), atol=0.01 * np.abs(free.w).max())


def test_it_dies_away_with_the_sections_own_wavenumber():
    line = elements()
    grid = GRID
    walls = ClosedWalls(Rectangle(Y, Z))
    vorticity = line.vorticity_on(grid)
    near, far = (duct_near_field(vorticity, grid, walls, distance=x) for x in (1.5, 2.0))
    # The first mode that a bound line raises is one up and down the section's height.
    assert_allclose(np.abs(far.w).max() / np.abs(near.w).max(), np.exp(-np.pi * 0.5 / 1.1), rtol=0.02)
    free = near_field(vorticity, grid, distance=1.5)
    assert np.abs(near.w).max() < 0.6 * np.abs(free.w).max()


def test_between_walls_nothing_is_added_to_what_passes():
    grid = UniformGrid(Y[0] + 0.005, Z[0] + 0.005, 0.01, 0.01, 150, 110)
    found = duct_near_field(elements().vorticity_on(grid), grid, ClosedWalls(Rectangle(Y, Z)), distance=DISTANCE)
    assert abs(found.u.mean()) < 1e-10 * np.abs(found.u).max()


def test_on_the_walls_it_is_tangent_and_at_a_jets_edge_it_is_normal():
    line = elements()
    grid = UniformGrid(Y[0], Z[0], 0.0125, 0.0125, 121, 89)
    vorticity = line.vorticity_on(grid)
    closed = duct_near_field(vorticity, grid, ClosedWalls(Rectangle(Y, Z)), distance=DISTANCE)
    jet = duct_near_field(vorticity, grid, OpenJet(Rectangle(Y, Z)), distance=DISTANCE)
    size = np.abs(closed.w).max()
    for edge in ((slice(None), 0), (slice(None), -1)):
        assert np.abs(closed.v[edge]).max() < 1e-12 * size
        assert np.abs(jet.w[edge]).max() < 1e-12 * size
        assert np.abs(jet.u[edge]).max() < 1e-12 * size


def test_a_circle_is_stood_for_by_the_square_of_its_area():
    line = elements()
    grid = GRID
    vorticity = line.vorticity_on(grid)
    side = np.sqrt(np.pi) / 2 * 2.0
    circle = duct_near_field(vorticity, grid, ClosedWalls(Circle(2.0)), distance=DISTANCE)
    square = duct_near_field(
        vorticity, grid, ClosedWalls(Rectangle((-side / 2, side / 2), (-side / 2, side / 2))), distance=DISTANCE
    )
    assert_allclose(circle.w, square.w, rtol=1e-12)
    with pytest.raises(ValueError, match="behind the bound line"):
        duct_near_field(vorticity, grid, ClosedWalls(Circle(2.0)), distance=0.0)


def test_images_here_are_those_of_the_duct():
    # The endless legs, of which the near field is the rest, in the walls' own closed form.
    line = elements()
    v, w = RectangularDuct(Y, Z).velocity(line, np.array([0.3]), np.array([Z[1]]))
    assert abs(w[0]) < 1e-12 < abs(v[0])
