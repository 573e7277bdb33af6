"""From the coefficient plane back to direction, total and static pressure, by tables that are fast to read.

The smooth surfaces give each hole's pressure as a function of direction. They are inverted once, by Newton's method at
the nodes of a uniform grid over the compressed coefficient plane of every sector; a reading then costs one bilinear
look-up in a grid twice as fine.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.probe.coefficients import leading_hole, sector_terms
from wakeledger.intake.probe.directions import angles, from_plane, to_plane
from wakeledger.intake.probe.validity import DirectionHull

#: Nodes of a table along each side.
NODES = 97
#: A sector's table reaches to directions at which its hole reads this much less than the highest one, in dynamic
#: pressures: noise and displaced holes shift the boundaries between sectors.
OVERLAP = 0.15
#: A table reaches one spacing of the calibration, and at least this far, beyond the hull, rad: a reading near the edge
#: under errors still finds a value, and the cubic between the last nodes stays away from the range.
MARGIN = 0.05
#: Readings that give back a direction further off than this come from a fold of the coefficients, rad.
FOLD = np.radians(1.0)
_MESH, _FINER = 121, 4
_ITERATIONS = 12
_STEP = 1e-5
_REACHED = 1e-9
_REACH = 0.1
_FEWEST = 9
_PATCH_MARGIN = 4
_FAR = 10.0


@dataclass(frozen=True, eq=False)
class InverseTables:
    """Tables over the compressed coefficient plane, one for each sector.

    Attributes
    ----------
    origin, step : ndarray, shape (sectors, 2)
        First node and spacing of each table's grid along x and y of the plane.
    image : ndarray, shape (sectors, ny, nx, 2)
        Stereographic image (v, w)/(1 + u) of the direction.
    total, dynamic : ndarray, shape (sectors, ny, nx)
        (P_lead - Pt) and (Pt - Ps), over the plane's pressure scale.
    solved : ndarray of bool, shape (sectors, ny, nx)
        Nodes that belong to a direction in or near the calibrated range; all others hold the value of the nearest one
        that does.
    """

    origin: Array
    step: Array
    image: Array
    total: Array
    dynamic: Array
    solved: NDArray[np.bool_]

    @property
    def sectors(self) -> int:
        """Number of sectors."""
        return int(self.origin.shape[0])

    @cached_property
    def _values(self) -> tuple[Array, ...]:
        """Image, total and dynamic on the refined grid, each of shape (sectors * ny * nx,)."""
        channels = (self.image[..., 0], self.image[..., 1], self.total, self.dynamic)
        return tuple(np.ravel(refined(channel)) for channel in channels)

    @cached_property
    def _whole(self) -> NDArray[np.bool_]:
        """Cells of the coarse grid whose corners are all solved, shape (sectors * (ny - 1) * (nx - 1),)."""
        rows = self.solved[:, 1:] & self.solved[:, :-1]
        return np.ravel(rows[:, :, 1:] & rows[:, :, :-1])

    def __getstate__(self) -> dict[str, object]:
        """Without the refined grids, which are made again where they are needed."""
        return {name: value for name, value in self.__dict__.items() if not name.startswith("_")}

    def look_up(self, holes: Array, *, check: bool = True) -> Inverted:
        """Direction and pressures of readings.

        Parameters
        ----------
        holes : ndarray, shape (5 or 7, n)
            Hole pressures, Pa, against anything common.
        check : bool, optional
            Whether to tell which readings belong to a direction at all.

        Returns
        -------
        Inverted
            NaN where a hole reads NaN; where a reading is off a table, the value at its edge.
        """
        lead = leading_hole(holes)
        terms = sector_terms(holes, lead)
        with np.errstate(invalid="ignore", divide="ignore"):
            x, y, scale = terms.compressed()
            rows, columns = (2 * number - 1 for number in self.total.shape[1:])
            across, fx, off_x = _cell((x - _of(self.origin[:, 0], lead)) * _of(2.0 / self.step[:, 0], lead), columns)
            up, fy, off_y = _cell((y - _of(self.origin[:, 1], lead)) * _of(2.0 / self.step[:, 1], lead), rows)
        corner = up * columns + across
        if self.sectors > 1:
            corner += lead * (rows * columns)
        both = fx * fy
        weights = (1.0 - fx - fy + both, fx - both, fy - both, both)
        corners = (corner, corner + 1, corner + columns, corner + columns + 1)

        def read(table: Array) -> Array:
            value: Array = weights[0] * table.take(corners[0])
            for weight, index in zip(weights[1:], corners[1:], strict=True):
                value += weight * table.take(index)
            return value

        image_y, image_z, of_total, of_dynamic = (read(table) for table in self._values)
        total = terms.lead - of_total * scale
        direction = from_plane(np.stack([image_y, image_z]))
        found = None
        if check:
            cell = (up // 2) * (columns // 2) + across // 2 + lead * ((rows // 2) * (columns // 2))
            found = self._whole.take(cell) & ~(off_x | off_y)
        return Inverted(direction, total, total - of_dynamic * scale, lead, found)


def _of(numbers: Array, lead: NDArray[np.intp]) -> Array | float:
    """A sector's number for each reading."""
    return float(numbers[0]) if numbers.size == 1 else numbers.take(lead)


@dataclass(frozen=True, eq=False)
class Inverted:
    """What the tables give for readings.

    Attributes
    ----------
    direction : ndarray, shape (3, n)
        Unit vectors of the flow in probe axes.
    total, static : ndarray, shape (n,)
        Pa, against the same as the holes.
    sector : ndarray of int, shape (n,)
        Sector of each reading.
    found : ndarray of bool, shape (n,), or None
        Readings that belong to a direction in or near the calibrated range; the others hold the nearest value.
    """

    direction: Array
    total: Array
    static: Array
    sector: NDArray[np.intp]
    found: NDArray[np.bool_] | None


def _cell(position: Array, side: int) -> tuple[NDArray[np.intp], Array, NDArray[np.bool_]]:
    """Cell, place in the cell (NaN for a reading that is), and whether the position is off the grid."""
    held = np.minimum(np.maximum(position, 0.0), side - 1.0)
    cell = np.minimum(np.where(np.isnan(held), 0.0, held).astype(np.intp), side - 2)
    return cell, held - cell, held != position


def refined(nodes: Array) -> Array:
    """A grid of twice the fineness through the nodes, cubic between them.

    Parameters
    ----------
    nodes : ndarray, shape (sectors, ny, nx)
        Values at the nodes.

    Returns
    -------
    ndarray, shape (sectors, 2 ny - 1, 2 nx - 1)
    """
    for axis in (1, 2):
        moved = np.moveaxis(nodes, axis, 0)
        fine = np.empty((2 * len(moved) - 1, *moved.shape[1:]))
        fine[::2] = moved
        fine[1::2] = 0.5 * (moved[:-1] + moved[1:])
        fine[3:-3:2] = (9.0 * (moved[1:-2] + moved[2:-1]) - moved[:-3] - moved[3:]) / 16.0
        nodes = np.moveaxis(fine, 0, axis)
    return np.ascontiguousarray(nodes)


class HoleModel:
    """Hole pressures (p - Ps)/(Pt - Ps) as splines of the direction's stereographic image, quick to differentiate.

    Parameters
    ----------
    surface : callable
        From the two coordinates of images, shape (...), to hole pressures, shape (holes, ...).
    low, high : ndarray, shape (2,)
        Corners of the rectangle of images the model covers.
    """

    def __init__(self, surface: Callable[[Array, Array], Array], low: Array, high: Array) -> None:
        from scipy.interpolate import RectBivariateSpline

        self.low, self.high = low, high
        self.axes = tuple(np.linspace(low[i], high[i], _MESH) for i in range(2))
        self.mesh = np.meshgrid(*self.axes, indexing="ij")
        self.samples = surface(*self.mesh)
        self._splines = [RectBivariateSpline(*self.axes, sample, kx=5, ky=5) for sample in self.samples]

    def __call__(self, image: Array, *, dx: int = 0, dy: int = 0) -> Array:
        """Pressures, or their derivatives, shape (holes, n), at images of shape (2, n)."""
        return np.stack([spline.ev(image[0], image[1], dx=dx, dy=dy) for spline in self._splines])

    def gradient(self, image: Array) -> tuple[Array, Array]:
        """Derivatives along the two coordinates of the image, each of shape (holes, n)."""
        return self(image, dx=1), self(image, dy=1)


def plane_slopes(holes: Array, gradient: tuple[Array, Array], lead: NDArray[np.intp]) -> Array:
    """Derivatives of the compressed coefficients along the direction's image.

    Parameters
    ----------
    holes : ndarray, shape (holes, n)
        Pressures.
    gradient : pair of ndarray, shape (holes, n)
        Their derivatives along the two coordinates of the image.
    lead : ndarray of int, shape (n,)
        Sector of each.

    Returns
    -------
    ndarray, shape (2, 2, n)
        [i, j]: of coefficient i along coordinate j.
    """
    columns = []
    for slope in gradient:
        ahead = sector_terms(holes + _STEP * slope, lead).compressed()
        behind = sector_terms(holes - _STEP * slope, lead).compressed()
        columns.append(np.stack([(ahead[i] - behind[i]) / (2 * _STEP) for i in range(2)]))
    return np.stack(columns, axis=1)


def solve_pairs(matrix: Array, right: Array) -> Array:
    """Solutions of many two-by-two systems, shape (2, n)."""
    determinant = matrix[0, 0] * matrix[1, 1] - matrix[0, 1] * matrix[1, 0]
    return np.stack(
        [
            (matrix[1, 1] * right[0] - matrix[0, 1] * right[1]) / determinant,
            (matrix[0, 0] * right[1] - matrix[1, 0] * right[0]) / determinant,
        ]
    )


def newton_step(holes: Array, gradient: tuple[Array, Array], lead: NDArray[np.intp], target: Array) -> Array:
    """Change of the direction's image that brings the coefficients to a target, to first order.

    Parameters
    ----------
    holes, gradient, lead
        As in `plane_slopes`.
    target : ndarray, shape (2, n)
        Compressed coefficients wanted.

    Returns
    -------
    ndarray, shape (2, n)
    """
    now = sector_terms(holes, lead).compressed()
    return solve_pairs(plane_slopes(holes, gradient, lead), target - np.stack(now[:2]))


def margin(hull: DirectionHull) -> float:
    """How far beyond the hull the tables reach, rad."""
    return max(hull.spacing, MARGIN)


def build_tables(model: HoleModel, hull: DirectionHull, *, sectors: int) -> InverseTables:
    """Invert a model of the hole pressures in every sector.

    Parameters
    ----------
    model : HoleModel
        Hole pressures as a function of direction.
    hull : DirectionHull
        Range of calibrated directions.
    sectors : int
        1 for five holes, 7 for seven.

    Returns
    -------
    InverseTables
    """
    parts = [_sector_table(model, hull, sector) for sector in range(sectors)]
    return without_folds(InverseTables(*(np.stack([part[i] for part in parts]) for i in range(6))), model, hull)


def without_folds(tables: InverseTables, model: HoleModel, hull: DirectionHull) -> InverseTables:
    """The tables without the readings that two calibrated directions have in common.

    Parameters
    ----------
    tables : InverseTables
        As inverted.
    model : HoleModel
        Hole pressures as a function of direction.
    hull : DirectionHull
        Range of calibrated directions.

    Returns
    -------
    InverseTables
        Where the coefficients fold, as behind the separation on a probe far off its axis, a direction reads like
        another one: nodes about readings that give back another direction than theirs by more than `FOLD` count as not
        solved, so that such readings are out of range.
    """
    from scipy.ndimage import binary_dilation

    image = np.stack(model.mesh).reshape(2, -1)
    if not _misread(tables, image, model.samples.reshape(len(model.samples), -1), hull)[0].any():
        return tables
    fine = (np.linspace(low, high, _FINER * (_MESH - 1) + 1) for low, high in zip(model.low, model.high, strict=True))
    image = np.stack(np.meshgrid(*fine, indexing="ij")).reshape(2, -1)
    image = image[:, hull.holds(*angles(from_plane(image)))]
    holes = model(image)
    wrong, lead, across, up = _misread(tables, image, holes, hull)
    spoilt = np.zeros(tables.solved.shape, dtype=bool)
    for i, j in ((0, 0), (0, 1), (1, 0), (1, 1)):
        spoilt[lead[wrong], up[wrong] + i, across[wrong] + j] = True
    spoilt = binary_dilation(spoilt, structure=np.ones((1, 3, 3)))
    return replace(tables, solved=tables.solved & ~spoilt)


def _misread(
    tables: InverseTables, image: Array, holes: Array, hull: DirectionHull
) -> tuple[NDArray[np.bool_], NDArray[np.intp], NDArray[np.intp], NDArray[np.intp]]:
    """Calibrated directions whose pressures give back another one; sector and cell (along x and y) of all, (n,)."""
    direction = from_plane(image)
    inverted = tables.look_up(holes)
    assert inverted.found is not None
    cosine = np.sum(inverted.direction * direction, axis=0)
    wrong = inverted.found & hull.holds(*angles(direction)) & (cosine < np.cos(FOLD))
    lead = inverted.sector
    x, y, _ = sector_terms(holes, lead).compressed()
    cells = []
    for coefficient, axis in ((x, 0), (y, 1)):
        place = np.nan_to_num((coefficient - tables.origin[lead, axis]) / tables.step[lead, axis])
        cells.append(np.clip(place, 0, NODES - 2).astype(np.intp))
    return wrong, lead, cells[0], cells[1]


def _sector_table(model: HoleModel, hull: DirectionHull, sector: int) -> tuple[NDArray[Any], ...]:
    from scipy.ndimage import distance_transform_edt
    from scipy.spatial import cKDTree

    empty = (
        np.zeros(2),
        np.ones(2),
        np.zeros((NODES, NODES, 2)),
        np.zeros((NODES, NODES)),
        np.ones((NODES, NODES)),
        np.zeros((NODES, NODES), dtype=bool),
    )
    mesh = np.stack(model.mesh)
    usable = _belongs(mesh, model.samples, hull, sector, share=1.0)
    if np.count_nonzero(usable) < _FEWEST:
        return empty
    patch = _Patch(model, usable, sector)
    turning = patch.turning(mesh[:, usable])
    sense = np.sign(np.median(turning))
    proper = turning * sense > 0
    image = mesh[:, usable][:, proper]
    plane = patch(image)
    low, high = plane.min(axis=1), plane.max(axis=1)
    step = (high - low) / (NODES - 1)
    nodes = np.stack(np.meshgrid(low[0] + step[0] * np.arange(NODES), low[1] + step[1] * np.arange(NODES)))
    target = nodes.reshape(2, -1)
    reach, nearest = cKDTree((plane / step[:, None]).T).query((target / step[:, None]).T)
    found = image[:, nearest]
    near = np.flatnonzero(reach < _REACH * NODES)
    found[:, near], reached = patch.solve(found[:, near], target[:, near])
    good = np.zeros(target.shape[1], dtype=bool)
    good[near] = reached
    good &= patch.turning(found) * sense > 0
    holes = model(found)
    good &= _belongs(found, holes, hull, sector, share=1.5)
    if not good.any():
        return empty
    terms = sector_terms(holes, np.full(found.shape[1], sector))
    scale = terms.compressed()[2]
    solved = good.reshape(NODES, NODES)
    rows, columns = distance_transform_edt(~solved, return_distances=False, return_indices=True)
    held = np.stack([*found, (terms.lead - 1.0) / scale, 1.0 / scale], axis=-1).reshape(NODES, NODES, 4)[rows, columns]
    return low, step, held[..., :2], held[..., 2], held[..., 3], solved


class _Patch:
    """Compressed coefficients of one sector as splines over the part of the mesh that concerns it."""

    def __init__(self, model: HoleModel, usable: NDArray[np.bool_], sector: int) -> None:
        from scipy.interpolate import RectBivariateSpline

        parts, axes = [], []
        for axis, coordinates in enumerate(model.axes):
            wanted = np.flatnonzero(usable.any(axis=1 - axis))
            first = max(0, min(int(wanted[0]) - _PATCH_MARGIN, len(coordinates) - 2 * _PATCH_MARGIN))
            part = slice(first, max(int(wanted[-1]) + 1 + _PATCH_MARGIN, first + 2 * _PATCH_MARGIN))
            parts.append(part)
            axes.append(coordinates[part])
        holes = model.samples[:, parts[0], parts[1]]
        with np.errstate(invalid="ignore", divide="ignore"):
            plane = sector_terms(holes, np.full(holes.shape[1:], sector)).compressed()[:2]
        held = (np.clip(np.nan_to_num(side), -_FAR, _FAR) for side in plane)
        self._splines = [RectBivariateSpline(*axes, side, kx=5, ky=5) for side in held]
        self.low, self.high = (np.array([axis[end] for axis in axes])[:, None] for end in (0, -1))

    def __call__(self, image: Array) -> Array:
        return np.stack([spline.ev(*image) for spline in self._splines])

    def slopes(self, image: Array) -> Array:
        """[i, j]: derivative of coefficient i along coordinate j of the image."""
        return np.stack([[s.ev(*image, dx=1), s.ev(*image, dy=1)] for s in self._splines])

    def turning(self, image: Array) -> Array:
        """Determinant of the slopes; where it changes sign, the coefficients fold and no longer tell the direction."""
        slopes = self.slopes(image)
        return np.asarray(slopes[0, 0] * slopes[1, 1] - slopes[0, 1] * slopes[1, 0])

    def solve(self, image: Array, target: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Images with the wanted coefficients, and whether they were reached."""
        image = image.copy()
        miss = target - self(image)
        most = 0.1 * np.max(self.high - self.low)
        active = np.arange(image.shape[1])
        for _ in range(_ITERATIONS):
            active = active[np.max(np.abs(miss[:, active]), axis=0) > 0.1 * _REACHED]
            if not active.size:
                break
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                change = solve_pairs(self.slopes(image[:, active]), miss[:, active])
            change = np.clip(np.nan_to_num(change), -most, most)
            image[:, active] = np.clip(image[:, active] + change, self.low, self.high)
            miss[:, active] = target[:, active] - self(image[:, active])
        return image, np.max(np.abs(miss), axis=0) < _REACHED


def _belongs(image: Array, holes: Array, hull: DirectionHull, sector: int, *, share: float) -> NDArray[np.bool_]:
    """Directions near the calibrated range at which a sector's hole may lead."""
    belongs: NDArray[np.bool_] = hull.outside(*angles(from_plane(image))) <= share * margin(hull)
    if len(holes) == 7:
        belongs &= holes[sector] >= holes.max(axis=0) - share * OVERLAP
    return belongs


def bounds(directions: Array, hull: DirectionHull) -> tuple[Array, Array]:
    """Rectangle of images that holds calibrated directions and the margin around them.

    Parameters
    ----------
    directions : ndarray, shape (3, n)
        Calibrated directions.
    hull : DirectionHull
        Their hull.

    Returns
    -------
    low, high : ndarray, shape (2,)
    """
    image = to_plane(directions)
    reach = np.max(0.5 * (1.0 + np.sum(image**2, axis=0))) * 1.5 * margin(hull)
    return image.min(axis=1) - reach, image.max(axis=1) + reach
