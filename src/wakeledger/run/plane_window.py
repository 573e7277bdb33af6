"""The part of a plane that is gridded: as the survey file has it, or where the wake is in a plane far larger than it.

A computed plane reaches to the far field, with cells a thousand times larger there than across a vortex core. One
uniform grid over all of it would be too coarse for the cores or too large to compute. Lift and induced drag follow from
the vorticity alone and profile drag from the loss, so a window that holds both loses nothing; outside there is only
what the solution's own noise adds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.intake.state import State
from wakeledger.physics.fields.triangle_quadrature import delaunay, triangle_areas
from wakeledger.run.load import SurveyInput

#: Share of the squares of vorticity and of loss that may lie beyond each side of the window before it is widened.
_BEYOND = 1e-4
#: What is fainter than this share of the largest vorticity or loss is left aside: a level's drift over the far field.
_FAINT = 0.01
#: How far the window reaches beyond them, as a share of their larger side.
_MARGIN = 0.5
#: The spacing that this percentage of the points stay below is taken as the finest one.
_FINE_PERCENT = 5.0
#: A plane whose points stand as close everywhere needs no window: cells for each point.
_UNEVEN = 4.0


@dataclass(frozen=True)
class Window:
    """A box in the plane.

    Attributes
    ----------
    low, high : (float, float)
        Corners (y, z), m; infinite where there is no limit.
    given : bool
        Whether the survey file gives it.
    """

    low: tuple[float, float]
    high: tuple[float, float]
    given: bool

    def holds(self, y: Array, z: Array) -> NDArray[np.bool_]:
        """Points inside, their shape."""
        return (y >= self.low[0]) & (y <= self.high[0]) & (z >= self.low[1]) & (z <= self.high[1])


def window_of(
    survey: SurveyInput, state: State, usable: NDArray[np.bool_], *, loss_free: float, most_cells: int
) -> Window | None:
    """The window of a survey.

    Parameters
    ----------
    survey : SurveyInput
        An area survey.
    state : State
        The flow state at its points.
    usable : ndarray of bool, shape (n,)
        Points whose state is known.
    loss_free : float
        Total pressure of the undisturbed stream, Pa.
    most_cells : int
        Most cells of a resampled plane.

    Returns
    -------
    Window or None
        None where the whole plane is gridded.

    Raises
    ------
    SurveyError
        If the window of the survey file holds hardly any point.
    """
    y, z = survey.points.y, survey.points.z
    box = survey.survey.plane.window
    if box is not None:
        window = Window((float(box[0, 0]), float(box[0, 1])), (float(box[1, 0]), float(box[1, 1])), given=True)
        inside = int(np.count_nonzero(window.holds(y, z) & usable))
        if inside < 25:
            raise SurveyError(
                f"the window holds {inside} usable points, the plane reaches from y = {y.min():g} to {y.max():g} m and"
                f" from z = {z.min():g} to {z.max():g} m",
                file=survey.survey.path,
                place="[plane] window",
                remedy="give two corners in the project's frame that hold the wake",
            )
        return window
    if not _too_large(y[usable], z[usable], most_cells):
        return None
    half = survey.survey.boundary is not None and survey.survey.boundary.reflection is not None
    triangles = survey.points.triangles
    found = _disturbed(y, z, state, usable, triangles, loss_free)
    if found is None:
        return None
    low, high = found
    size = high - low
    if half:
        side = 0 if survey.survey.boundary.reflection == "y" else 1  # type: ignore[union-attr]
        size[side] = 2 * max(abs(low[side]), abs(high[side]))
    margin = _MARGIN * float(size.max())
    low, high = low - margin, high + margin
    if half:
        # What lies next to the mirror stays, however little of the wake comes near it.
        low[side] = -np.inf
    covered = np.prod(np.minimum(high, [y.max(), z.max()]) - np.maximum(low, [y.min(), z.min()]))
    if covered > 0.7 * np.ptp(y) * np.ptp(z):
        return None
    return Window((float(low[0]), float(low[1])), (float(high[0]), float(high[1])), given=False)


def _too_large(y: Array, z: Array, most_cells: int) -> bool:
    """Whether one grid as fine as the finest part of the points has too many cells, and the points stand unevenly."""
    from scipy.spatial import cKDTree

    if y.size < 25:
        return False
    places = np.unique(np.round(np.column_stack([y, z]), 12), axis=0)
    distance = cKDTree(places).query(places, 2)[0][:, 1]
    cells = float(np.ptp(y) * np.ptp(z)) / float(np.percentile(distance, _FINE_PERCENT)) ** 2
    return bool(cells > max(most_cells, _UNEVEN * places.shape[0]))


def _disturbed(
    y: Array,
    z: Array,
    state: State,
    usable: NDArray[np.bool_],
    triangles: NDArray[np.int64] | None,
    loss_free: float,
) -> tuple[Array, Array] | None:
    """Corners of the box that holds the vorticity and the loss, all but a ten-thousandth of their squares a side."""
    if triangles is None:
        number = np.flatnonzero(usable)
        try:
            triangles = number[delaunay(y[usable], z[usable])]
        except ValueError:
            return None
    else:
        triangles = triangles[usable[triangles].all(axis=1)]
    area = triangle_areas(y, z, triangles)
    triangles, area = triangles[area > 0], area[area > 0]
    if not area.size:
        return None
    place = np.stack([y[triangles].mean(axis=1), z[triangles].mean(axis=1)], axis=-1)
    fields = [_vorticity(y, z, state.v, state.w, triangles)]
    if state.total_pressure is not None:
        fields.append(loss_free - state.total_pressure[triangles].mean(axis=1))
    weights = [area * np.where(np.abs(field) > _FAINT * np.abs(field).max(), field, 0.0) ** 2 for field in fields]
    boxes = [_box(place, weight) for weight in weights if weight.sum() > 0]
    if not boxes:
        return None
    return np.min([low for low, _ in boxes], axis=0), np.max([high for _, high in boxes], axis=0)


def _vorticity(y: Array, z: Array, v: Array, w: Array, triangles: NDArray[np.int64]) -> Array:
    """Axial vorticity of the linear field on each triangle, 1/s."""
    a, b, c = triangles.T
    dy1, dz1, dy2, dz2 = y[b] - y[a], z[b] - z[a], y[c] - y[a], z[c] - z[a]
    twice = dy1 * dz2 - dy2 * dz1
    dw_dy = ((w[b] - w[a]) * dz2 - (w[c] - w[a]) * dz1) / twice
    dv_dz = ((v[c] - v[a]) * dy1 - (v[b] - v[a]) * dy2) / twice
    result: Array = dw_dy - dv_dz
    return result


def _box(place: Array, weight: Array) -> tuple[Array, Array]:
    low, high = np.empty(2), np.empty(2)
    for k in (0, 1):
        order = np.argsort(place[:, k])
        share = np.cumsum(weight[order]) / weight.sum()
        low[k] = place[order[np.searchsorted(share, _BEYOND)], k]
        high[k] = place[order[min(int(np.searchsorted(share, 1 - _BEYOND)), order.size - 1)], k]
    return low, high
