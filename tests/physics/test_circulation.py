"""Line integrals of the velocity against the circulation of Gaussian vortices and a measured survey."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
from scipy.special import erf

from wakeledger.core.grid import UniformGrid
from wakeledger.physics.fields.circulation import (
    CrossflowSpline,
    cell_circulations,
    cell_circulations_adjoint,
    circle_weights,
)
from wakeledger.physics.fields.gaussian_elements import element_velocity, induced_drag_of_elements, pair_logarithm
from wakeledger.synthetic.elements import GaussianElements

CORE = 0.03
CHORD_INCHES = 48.0


def window(spacing: float) -> UniformGrid:
    return UniformGrid(-0.70, -0.31, spacing, spacing, int(1.4 / spacing) + 1, int(0.62 / spacing) + 1)


def pair() -> GaussianElements:
    return GaussianElements(np.array([-0.39, 0.39]), np.array([0.01, -0.02]), np.array([-1.0, 1.3]), np.array(CORE))


def exact_cells(elements: GaussianElements, grid: UniformGrid) -> np.ndarray:
    total = np.zeros((grid.nz - 1, grid.ny - 1))
    for y, z, gamma, core in zip(elements.y, elements.z, elements.circulation, elements.core, strict=True):
        along_y = np.diff(erf((grid.y - y) / core)) / 2
        along_z = np.diff(erf((grid.z - z) / core)) / 2
        total += gamma * np.outer(along_z, along_y)
    return total


# Eight-point edges are of eighth order; at h/a = 0.5 their truncation is 3e-4 of the largest cell, at 0.25 under 2e-6.
@pytest.mark.parametrize(("ratio", "tolerance"), [(0.5, 5e-4), (0.25, 5e-6)])
def test_cells_hold_the_circulation_of_gaussian_vortices(ratio: float, tolerance: float) -> None:
    grid = window(ratio * CORE)
    cells = cell_circulations(*pair().velocity_on(grid), grid)
    exact = exact_cells(pair(), grid)
    assert np.abs(cells - exact).max() < tolerance * np.abs(exact).max()


def test_cells_add_up_to_the_line_integral_around_their_union() -> None:
    grid = window(0.4 * CORE)
    v, w = pair().velocity_on(grid)
    cells = cell_circulations(v, w, grid)
    rectangle = CrossflowSpline.on_grid(v, w, grid).around_rectangle(
        (grid.y[80], grid.y[110]), (grid.z[10], grid.z[40])
    )
    # Two interpolations of the same smooth data outside the cores.
    assert cells[10:40, 80:110].sum() == pytest.approx(rectangle, rel=1e-6)
    assert rectangle == pytest.approx(1.3, rel=1e-6)


def test_cells_take_leading_axes_and_ignore_a_uniform_velocity() -> None:
    grid = window(0.5 * CORE)
    v, w = pair().velocity_on(grid)
    draws = cell_circulations(np.stack([v, 2 * v + 3]), np.stack([w, 2 * w - 5]), grid)
    np.testing.assert_allclose(draws[1], 2 * draws[0], atol=1e-13)


def test_circles_read_the_lamb_oseen_profile() -> None:
    grid = window(0.5 * CORE)
    spline = CrossflowSpline.on_grid(*pair().velocity_on(grid), grid)
    radii = np.array([1.0, 1.5, 2.0, 4.0]) * CORE
    exact = 1.3 * -np.expm1(-((radii / CORE) ** 2))
    # The quintic spline is within 1e-4 at two points per core.
    np.testing.assert_allclose(spline.around_circle(0.39, -0.02, radii), exact, rtol=1e-4)


def test_polygon_sense_gives_the_sign() -> None:
    grid = window(0.5 * CORE)
    spline = CrossflowSpline.on_grid(*pair().velocity_on(grid), grid)
    y, z = np.array([-0.6, -0.2, -0.3, -0.55]), np.array([-0.2, -0.25, 0.2, 0.25])
    counter_clockwise = spline.around_polygon(y, z)
    assert counter_clockwise == pytest.approx(-1.0, rel=1e-6)
    assert spline.around_polygon(y[::-1], z[::-1]) == pytest.approx(-counter_clockwise, rel=1e-12)


def test_curves_outside_the_window_are_refused() -> None:
    grid = window(0.5 * CORE)
    spline = CrossflowSpline.on_grid(*pair().velocity_on(grid), grid)
    with pytest.raises(ValueError, match="leaves the window"):
        spline.around_circle(0.39, 0.0, 0.4)
    with pytest.raises(ValueError, match="leaves the window"):
        spline.around_rectangle((-1.0, 0.0), (-0.1, 0.1))
    v, w = pair().velocity_on(grid)
    v[3, 3] = np.nan
    with pytest.raises(ValueError, match="finite"):
        CrossflowSpline.on_grid(v, w, grid)


def test_circle_weights_are_the_line_integral() -> None:
    grid = window(0.5 * CORE)
    v, w = pair().velocity_on(grid)
    points, on_v, on_w = circle_weights(grid, 0.39, -0.02, 2 * CORE)
    # Local fifth-degree polynomials instead of the spline: 3e-4 at two points per core.
    assert on_v @ v.ravel()[points] + on_w @ w.ravel()[points] == pytest.approx(1.3 * -np.expm1(-4.0), rel=5e-4)
    # A uniform velocity has no circulation.
    assert abs(on_v.sum()) + abs(on_w.sum()) < 1e-14


def test_pair_logarithm_is_continuous_at_the_centre_and_far_away() -> None:
    # ½(ln s² − γ) at r = 0, ln r far outside; the joints of the three branches differ by rounding only.
    assert pair_logarithm(np.array(0.0), np.array(2.0)) == pytest.approx((np.log(2) - np.euler_gamma) / 2, rel=1e-14)
    for joint in (1e-2, 36.0):
        below, above = pair_logarithm(joint * np.array([1 - 1e-9, 1 + 1e-9]), np.array(1.0))
        assert above - below == pytest.approx(0.0, abs=2e-9)
    assert pair_logarithm(np.array(100.0), np.array(1.0)) == pytest.approx(np.log(10.0), rel=1e-14)


def test_element_sum_and_velocity_equal_the_synthetic_ones() -> None:
    rng = np.random.default_rng(4)
    y, z, gamma = rng.standard_normal((3, 12))
    core = rng.uniform(0.01, 0.4, 12)
    truth = GaussianElements(y, z, gamma, core)
    assert induced_drag_of_elements(y, z, gamma, core, 1.2) == pytest.approx(truth.induced_drag(density=1.2), rel=1e-11)
    at_y, at_z = rng.standard_normal((2, 30))
    parts = [element_velocity(at_y, at_z, *element) for element in zip(y, z, gamma, core, strict=True)]
    np.testing.assert_allclose(sum(np.stack(part) for part in parts), np.stack(truth.velocity(at_y, at_z)), atol=1e-12)


@pytest.mark.parametrize("axis", ["y", "z"])
def test_reflection_is_the_half_of_elements_with_their_images(axis: str) -> None:
    y, z = np.array([0.3, 0.5, 0.45]), np.array([0.2, 0.35, 0.6])
    gamma, core = np.array([0.4, -0.3, 1.0]), np.array([0.05, 0.1, 0.03])
    one_side = GaussianElements(y, z, gamma, core)
    whole = one_side + one_side.mirrored(axis)
    half = induced_drag_of_elements(y, z, gamma, core, 1.0, reflection=axis)
    assert 2 * half == pytest.approx(whole.induced_drag(density=1.0), rel=1e-12)


def wing_tip_planes() -> dict[str, tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]]:
    root = os.environ.get("WAKELEDGER_REFERENCE_DATA")
    folder = Path(root) if root else Path(__file__).parents[3] / "shared" / "reference"
    path = folder / "wing_tip" / "velocity.csv"
    if not path.exists():
        pytest.skip("no reference data: set WAKELEDGER_REFERENCE_DATA (wing_tip is not beside the repository)")
    data = np.genfromtxt(path, delimiter=",", skip_header=1)
    planes = {}
    for name, x in (("inflow", -54.703), ("near", 5.784), ("far", 21.479)):
        plane = data[data[:, 0] == x]
        plane = plane[np.lexsort((plane[:, 2], plane[:, 1]))]
        up, inboard = np.unique(plane[:, 1]), np.unique(plane[:, 2])
        u, v_up, w_inboard = (plane[:, k].reshape(up.size, inboard.size)[:, ::-1] for k in (3, 4, 5))
        # Traverse axes are left-handed: z' = 39.7714 − z grows towards the tip (starboard), so w' = −w; y' is up.
        incidence = np.deg2rad(10.0)
        z = (up - 0.75 * CHORD_INCHES * np.sin(incidence) - 5.3588) / CHORD_INCHES
        y = ((39.7714 - inboard) / CHORD_INCHES)[::-1]
        planes[name] = (y, z, u, -w_inboard, v_up)
    return planes


def test_wing_tip_survey_circulation_from_the_windows_edge() -> None:
    # Chow, Zilliac & Bradshaw, AIAA J. 35(10), 1997; Γ/(Uc) by line integral 0.340 and 0.339, 1 % (DERIVED).
    planes = wing_tip_planes()
    for name, expected in (("near", 0.340), ("far", 0.339)):
        y, z, _, v, w = planes[name]
        circulation = CrossflowSpline(v, w, y, z).around_rectangle((y[0], y[-1]), (z[0], z[-1]))
        assert circulation == pytest.approx(expected, rel=0.01)
    y, z, _, v, w = planes["inflow"]
    inflow = CrossflowSpline(v, w, y, z).around_rectangle((y[0], y[-1]), (z[0], z[-1]))
    # About zero: 0.002 in size (DERIVED).
    assert abs(inflow) < 0.003


def test_the_adjoint_of_the_cells_is_their_transpose() -> None:
    rng = np.random.default_rng(9)
    for ny, nz in ((31, 17), (6, 12)):
        grid = UniformGrid(0.0, 0.0, 0.02, 0.03, ny, nz)
        v, w = rng.standard_normal((2, nz, ny))
        weights = rng.standard_normal((nz - 1, ny - 1))
        by_v, by_w = cell_circulations_adjoint(weights, grid)
        forward = (weights * cell_circulations(v, w, grid)).sum()
        assert (by_v * v + by_w * w).sum() == pytest.approx(forward, rel=1e-11)
