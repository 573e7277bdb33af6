"""Values that stand for cells: stretched, of several sizes side by side, with hanging nodes."""

import numpy as np
import pytest

from wakeledger.intake.gridding import make_gridding
from wakeledger.intake.readers import read_points

STATION, CORE = 2.03, 0.15


def vortex(places):
    """A viscous vortex with a wake in its core that grows slowly along x."""
    x, y, z = places.T
    square = y**2 + z**2
    grown = 1 + 0.05 * (x - 2)
    rate = np.where(square > 0, -np.expm1(-1.2564 * square / CORE**2) / np.maximum(square, 1e-30), 1.2564 / CORE**2)
    hollow = np.exp(-square / CORE**2) * grown
    return {"p": -hollow, "U": np.stack([30 - 2 * hollow, -z * rate * grown, y * rate * grown], axis=-1)}


def graded(n, ratio=1.12):
    half = np.cumsum(ratio ** np.arange(n))
    return np.concatenate([-half[::-1], [0.0], half]) / half[-1]


@pytest.fixture(scope="module")
def cells(cfd):
    """Seven cells across the core, every other size of them split where the vortex is."""
    x = 2 + np.array([-0.33, -0.1, 0.12, 0.35])
    return cfd.boxes((x, graded(8), graded(8) + 0.013), split=lambda y, z: abs(y) < 0.25 and abs(z - 0.03) < 0.2)


@pytest.fixture(scope="module")
def meshes(cfd, cells):
    """The same cells with faces that have hanging nodes, and without knowledge of these."""
    return {"polyhedra": cfd.polyhedra(cells), "hexahedra": cfd.hexahedra(cells)}


def errors(found, truth):
    """Largest error of the crossflow as a share of its largest value, and of u as a share of the wake's depth."""
    crossflow = np.abs(found[:, 1:] - truth[:, 1:]).max() / np.abs(truth[:, 1:]).max()
    return crossflow, np.abs(found[:, 0] - truth[:, 0]).max() / 2.0


def test_centres_are_kept_and_carried_to_the_plane(cfd, cells, meshes, tmp_path):
    mesh = meshes["polyhedra"].copy()
    for name, values in vortex(cfd.centres(cells)).items():
        mesh.cell_data[name] = values
    mesh.save(tmp_path / "volume.vtu")
    points = read_points(tmp_path / "volume.vtu", cfd.COLUMNS, axes=np.eye(3), station=STATION)
    truth = vortex(np.column_stack([np.full(points.n, STATION), points.y, points.z]))
    found = np.stack([points.channels[name].values for name in "uvw"], axis=-1)
    kept = errors(found, truth["U"])
    # Left where it is, the value of the cell misses the growth over a fiftieth of a length: 0.1 %. Carried along x by
    # its neighbours, what is left is what the field's other derivatives leak into the fit.
    assert max(kept) < 2e-4
    # Means over the cells about a point, which viewers make: the same field, on the same mesh.
    cut = mesh.cell_data_to_point_data().slice(normal="x", origin=(STATION, 0, 0))
    averaged = errors(np.asarray(cut.point_data["U"]), vortex(np.asarray(cut.points, dtype=float))["U"])
    assert averaged[0] > 0.05 and averaged[1] > 0.04


def test_the_gridded_field_is_better_for_it(cfd, cells, meshes, tmp_path):
    mesh = meshes["polyhedra"].copy()
    for name, values in vortex(cfd.centres(cells)).items():
        mesh.cell_data[name] = values
    mesh.save(tmp_path / "cells.vtu")
    at_points = mesh.cell_data_to_point_data()
    at_points.save(tmp_path / "points.vtu")
    worst = {}
    for name in ("cells", "points"):
        points = read_points(tmp_path / f"{name}.vtu", cfd.COLUMNS, axes=np.eye(3), station=STATION)
        gridding = make_gridding(points.y, points.z, np.ones(points.n, dtype=bool), spacing=CORE / 4, max_cells=20_000)
        grid = gridding.grid
        zz, yy = np.meshgrid(grid.z, grid.y, indexing="ij")
        near = np.hypot(yy, zz) < 3 * CORE
        truth = vortex(np.column_stack([np.full(near.sum(), STATION), yy[near], zz[near]]))["U"]
        found = np.stack([gridding.apply(points.channels[each].values)[near] for each in "uvw"], axis=-1)
        worst[name] = errors(found, truth)
    # 0.8 % against 6 % of the largest crossflow, 0.5 % against 5 % of the wake's depth.
    assert worst["cells"][0] < 0.2 * worst["points"][0]
    assert worst["cells"][1] < 0.2 * worst["points"][1]


@pytest.mark.parametrize("kind", ["hexahedra", "polyhedra"])
def test_linear_fields_are_exact(cfd, cells, meshes, tmp_path, kind):
    # Centres of volume: of polyhedra the mean of the corners would be drawn to the hanging nodes.
    mesh = meshes[kind].copy()
    for name, values in cfd.arrays(cfd.centres(cells)).items():
        mesh.cell_data[name] = values
    mesh.save(tmp_path / "volume.vtu")
    points = read_points(tmp_path / "volume.vtu", cfd.COLUMNS, axes=np.eye(3), station=STATION)
    crossed = cells[(cells[:, 0] < STATION) & (cells[:, 1] > STATION)]
    cfd.check(points, STATION, places=cfd.centres(crossed)[:, 1:])
    assert points.areas.sum() == pytest.approx(4.0, rel=1e-6)


def test_a_slanted_cut_of_one_layer(cfd, tmp_path):
    # One layer of cells, as of a plane case: no neighbour tells the slope along x, and none is assumed.
    cells = cfd.boxes((np.array([1.0, 3.0]), graded(4), graded(4)))
    mesh = cfd.hexahedra(cells)
    for name, values in cfd.arrays(cfd.centres(cells)).items():
        mesh.cell_data[name] = values
    mesh.save(tmp_path / "layer.vtu")
    points = read_points(tmp_path / "layer.vtu", cfd.COLUMNS, axes=np.eye(3), station=2.5)
    cfd.check(points, 2.0)


def test_ghost_cells_count_once(cfd, cells, meshes, tmp_path):
    mesh = meshes["hexahedra"].copy()
    for name, values in cfd.arrays(cfd.centres(cells)).items():
        mesh.cell_data[name] = values
    ghost = np.zeros(mesh.n_cells, dtype=np.uint8)
    ghost[cfd.centres(cells)[:, 1] > 0.5] = 1
    mesh.cell_data["vtkGhostType"] = ghost
    mesh.save(tmp_path / "part.vtu")
    points = read_points(tmp_path / "part.vtu", cfd.COLUMNS, axes=np.eye(3), station=STATION)
    cfd.check(points, STATION)
    assert points.y.max() < 0.5
