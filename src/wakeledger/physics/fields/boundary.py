"""What surrounds the survey plane: free air, the closed walls of a test section, or the edge of an open jet.

A boundary is a frozen record that is checked when it is made. Sections are those of the whole configuration; one given
up to the reflection plane only is doubled. The reflection plane is solid in every case: ψ = 0 and v_n = 0 on y = 0 (a
half model on its wall or floor) or on z = 0 (the ground).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array, UniformGrid

Reflection = Literal["y", "z"]
#: Part of a section's size below which two places count as one.
_SAME = 1e-9
_PLACE = "[boundary]"


@dataclass(frozen=True)
class Rectangle:
    """A rectangular section.

    Attributes
    ----------
    y, z : (float, float)
        Positions of the two side walls, and of floor and ceiling, ascending, m.

    Raises
    ------
    SurveyError
        If the positions are not finite and ascending.
    """

    y: tuple[float, float]
    z: tuple[float, float]

    def __post_init__(self) -> None:
        for axis in ("y", "z"):
            low, high = (float(value) for value in getattr(self, axis))
            if not (math.isfinite(low) and math.isfinite(high) and low < high):
                raise SurveyError(
                    f"the walls {axis} = [{low:g} m, {high:g} m] are not two ascending positions",
                    place=f"{_PLACE} {axis}",
                    remedy="give the lower position first",
                )
            object.__setattr__(self, axis, (low, high))

    @property
    def corners(self) -> Array:
        """Corners (y, z), counter-clockwise from the lower port one, m, shape (4, 2)."""
        (y0, y1), (z0, z1) = self.y, self.z
        return np.array([[y0, z0], [y1, z0], [y1, z1], [y0, z1]])

    @property
    def area(self) -> float:
        """Cross-section area, m²."""
        return (self.y[1] - self.y[0]) * (self.z[1] - self.z[0])


@dataclass(frozen=True)
class Circle:
    """A circular section.

    Attributes
    ----------
    diameter : float
        m, positive.
    centre : (float, float)
        y and z of the centre, m.

    Raises
    ------
    SurveyError
        If the diameter is not positive or a value is not finite.
    """

    diameter: float
    centre: tuple[float, float] = (0.0, 0.0)

    def __post_init__(self) -> None:
        diameter, centre = float(self.diameter), tuple(float(value) for value in self.centre)
        if not (math.isfinite(diameter) and diameter > 0 and all(math.isfinite(value) for value in centre)):
            raise SurveyError(
                f"a circular section of diameter {diameter:g} m about {centre} was given",
                place=f"{_PLACE} diameter",
                remedy="give a positive diameter and a finite centre",
            )
        object.__setattr__(self, "diameter", diameter)
        object.__setattr__(self, "centre", centre)

    @property
    def area(self) -> float:
        """Cross-section area, m²."""
        return math.pi * self.diameter**2 / 4


@dataclass(frozen=True)
class Polygon:
    """A section with straight walls.

    Attributes
    ----------
    vertices : tuple of (float, float)
        Corners (y, z) in order, m; stored counter-clockwise seen from behind, corners on a straight wall left out.

    Raises
    ------
    SurveyError
        If there are fewer than three corners, or the walls cross or touch each other.
    """

    vertices: tuple[tuple[float, float], ...]

    def __post_init__(self) -> None:
        corners = np.asarray(self.vertices, float)
        place = f"{_PLACE} vertices"
        if corners.ndim != 2 or corners.shape[1:] != (2,) or not np.isfinite(corners).all():
            raise SurveyError("the corners of the section are not finite pairs of y and z", place=place)
        corners = _simplified(corners)
        if len(corners) < 3:
            raise SurveyError(f"the section has {len(corners)} corners", place=place, remedy="give three or more")
        if _walls_meet(corners):
            raise SurveyError(
                "the section's walls cross or touch each other",
                place=place,
                remedy="give its corners in order, once around",
            )
        if _signed_area(corners) < 0:
            corners = corners[::-1]
        object.__setattr__(self, "vertices", tuple((float(y), float(z)) for y, z in corners))

    @property
    def corners(self) -> Array:
        """Corners (y, z), counter-clockwise, m, shape (m, 2)."""
        return np.asarray(self.vertices, float)

    @property
    def area(self) -> float:
        """Cross-section area, m²."""
        return _signed_area(self.corners)


Section = Rectangle | Circle | Polygon


@dataclass(frozen=True)
class FreeAir:
    """The unbounded stream.

    Attributes
    ----------
    reflection : {"y", "z"} or None
        Solid plane y = 0 or z = 0.
    """

    reflection: Reflection | None = None

    def __post_init__(self) -> None:
        _check_reflection(self.reflection)

    @property
    def free(self) -> FreeAir:
        """The same configuration in free air: itself."""
        return self

    @property
    def whole(self) -> FreeAir:
        """What surrounds both halves together, for a window that holds both."""
        return FreeAir()


@dataclass(frozen=True)
class ClosedWalls:
    """A closed test section: ψ = 0 and ∂φ/∂n = 0 on its walls.

    Attributes
    ----------
    section : Rectangle, Circle or Polygon
        The whole configuration's; one that ends on the reflection plane is doubled.
    reflection : {"y", "z"} or None
        Solid plane y = 0 or z = 0.

    Raises
    ------
    SurveyError
        If the section is neither symmetric about the reflection plane nor ends on it.
    """

    section: Section
    reflection: Reflection | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "section", _whole_section(self.section, self.reflection))

    @property
    def free(self) -> FreeAir:
        """The same configuration in free air."""
        return FreeAir(self.reflection)

    @property
    def whole(self) -> ClosedWalls:
        """What surrounds both halves together, for a window that holds both."""
        return ClosedWalls(self.section)

    @property
    def flow_area(self) -> float:
        """Area C that belongs to the ledger's forces, m²; see `flow_area`."""
        return flow_area(self.section, self.reflection)

    @property
    def surveyed_area(self) -> float:
        """Area of the stream on the survey's side of the reflection plane, m²."""
        return self.section.area / 2 if self.reflection else self.section.area


@dataclass(frozen=True)
class OpenJet:
    """An open jet: φ = 0 and ∂ψ/∂n = 0 on its edge, which is constant pressure to first order.

    Attributes
    ----------
    section : Rectangle, Circle or Polygon
        The whole configuration's; one that ends on the reflection plane is doubled.
    reflection : {"y", "z"} or None
        Solid plane y = 0 or z = 0 (a floor or wall the model stands on).

    Raises
    ------
    SurveyError
        If the section is neither symmetric about the reflection plane nor ends on it.
    """

    section: Section
    reflection: Reflection | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "section", _whole_section(self.section, self.reflection))

    @property
    def free(self) -> FreeAir:
        """The same configuration in free air."""
        return FreeAir(self.reflection)

    @property
    def whole(self) -> OpenJet:
        """What surrounds both halves together, for a window that holds both."""
        return OpenJet(self.section)

    @property
    def flow_area(self) -> float:
        """Area C that belongs to the ledger's forces, m²; see `flow_area`."""
        return flow_area(self.section, self.reflection)

    @property
    def surveyed_area(self) -> float:
        """Area of the stream on the survey's side of the reflection plane, m²."""
        return self.section.area / 2 if self.reflection else self.section.area


Boundary = FreeAir | ClosedWalls | OpenJet


def flow_area(section: Section, reflection: Reflection | None) -> float:
    """Area of the stream that belongs to the forces in the ledger, m².

    Parameters
    ----------
    section : Rectangle, Circle or Polygon
        The whole section.
    reflection : {"y", "z"} or None
        The solid plane. On y = 0 a half model stands whose forces are doubled, so that the whole section counts; below
        z = 0 there is no stream, so that half of it does.

    Returns
    -------
    float
    """
    return section.area / 2 if reflection == "z" else section.area


def points_inside(section: Section, y: Array, z: Array, *, margin: float = 0.0) -> NDArray[np.bool_]:
    """Which points lie inside a section.

    Parameters
    ----------
    section : Rectangle, Circle or Polygon
        The section.
    y, z : ndarray, any common shape
        Points, m.
    margin : float
        How far outside a point may lie and still count, m.

    Returns
    -------
    ndarray of bool
    """
    y, z = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
    if isinstance(section, Circle):
        radius = np.hypot(y - section.centre[0], z - section.centre[1])
        return np.asarray(radius <= section.diameter / 2 + margin)
    corners = section.corners
    inside = np.zeros(y.shape, dtype=bool)
    for (y0, z0), (y1, z1) in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        crosses = (z0 > z) != (z1 > z)
        with np.errstate(divide="ignore", invalid="ignore"):
            inside ^= crosses & (y < (y1 - y0) * (z - z0) / (z1 - z0) + y0)
    return inside | (wall_distance(section, y, z) <= margin)


def wall_distance(section: Section, y: Array, z: Array) -> Array:
    """Distance of points from the nearest wall of a section, on either side of it.

    Parameters
    ----------
    section : Rectangle, Circle or Polygon
        The section.
    y, z : ndarray, any common shape
        Points, m.

    Returns
    -------
    ndarray
        m, not negative.
    """
    y, z = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
    if isinstance(section, Circle):
        radius = np.hypot(y - section.centre[0], z - section.centre[1])
        distance: Array = np.abs(radius - section.diameter / 2)
        return distance
    nearest = np.full(y.shape, np.inf)
    corners = section.corners
    for (y0, z0), (y1, z1) in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        along = np.clip(((y - y0) * (y1 - y0) + (z - z0) * (z1 - z0)) / ((y1 - y0) ** 2 + (z1 - z0) ** 2), 0, 1)
        nearest = np.minimum(nearest, np.hypot(y - y0 - along * (y1 - y0), z - z0 - along * (z1 - z0)))
    return nearest


def check_window(grid: UniformGrid, boundary: Boundary) -> None:
    """Refuse a window that does not lie on one side of the reflection plane.

    Parameters
    ----------
    grid : UniformGrid
        The window.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it.

    Raises
    ------
    SurveyError
        If the window reaches across the reflection plane by more than a thousandth of a spacing, or lies on its port
        side or below it.
    """
    if boundary.reflection is None:
        return
    first, step = (grid.y0, grid.dy) if boundary.reflection == "y" else (grid.z0, grid.dz)
    if first < -1e-3 * step:
        side = "starboard of" if boundary.reflection == "y" else "above"
        raise SurveyError(
            f"the survey reaches {boundary.reflection} = {first:g} m across the reflection plane "
            f"{boundary.reflection} = 0",
            place=f"{_PLACE} reflection",
            remedy=f"survey {side} the plane only, or leave the reflection out for a whole model",
        )


def _check_reflection(reflection: object) -> None:
    if reflection not in (None, "y", "z"):
        raise SurveyError(
            f"reflection {reflection!r} is not known", place=f"{_PLACE} reflection", remedy='it is "y" or "z"'
        )


def _whole_section(section: Section, reflection: Reflection | None) -> Section:
    _check_reflection(reflection)
    if reflection is None:
        return section
    axis = 0 if reflection == "y" else 1
    failure = SurveyError(
        f"the section is not symmetric about the reflection plane {reflection} = 0, nor does it end on it",
        place=f"{_PLACE} section",
        remedy="give the walls of the whole configuration, the model's plane of symmetry at zero",
    )
    if isinstance(section, Circle):
        if abs(section.centre[axis]) > _SAME * section.diameter:
            raise failure
        return section
    if isinstance(section, Rectangle):
        low, high = section.y if axis == 0 else section.z
        size = high - low
        if abs(low) <= _SAME * size or abs(high) <= _SAME * size:
            whole = (-size, size)
        elif abs(low + high) <= _SAME * size:
            whole = (-size / 2, size / 2)
        else:
            raise failure
        return Rectangle(whole, section.z) if axis == 0 else Rectangle(section.y, whole)
    corners = section.corners
    across, tolerance = corners[:, axis], _SAME * float(np.ptp(corners, axis=0).max())
    mirrored = corners * np.where(np.arange(2) == axis, -1.0, 1.0)
    if across.min() < -tolerance < tolerance < across.max():
        distance = np.abs(corners[:, None] - mirrored[None]).max(axis=-1)
        if not (distance.min(axis=1) <= tolerance).all():
            raise failure
        return section
    on = np.abs(across) <= tolerance
    start = np.flatnonzero(on & np.roll(on, -1))
    if on.sum() != 2 or start.size != 1:
        raise failure
    # From the far end of the edge on the plane all the way round, and back over the mirrored side.
    half = np.roll(corners, -int(start[0]) - 1, axis=0)
    half[:, axis] = np.where(np.abs(half[:, axis]) <= tolerance, 0.0, half[:, axis])
    back = (half * np.where(np.arange(2) == axis, -1.0, 1.0))[-2:0:-1]
    return Polygon(tuple((float(y), float(z)) for y, z in np.concatenate([half, back])))


def _signed_area(corners: Array) -> float:
    following = np.roll(corners, -1, axis=0)
    return float(np.sum(corners[:, 0] * following[:, 1] - following[:, 0] * corners[:, 1]) / 2)


def _simplified(corners: Array) -> Array:
    """Corners without repetitions and without those on a straight wall."""
    size = float(np.ptp(corners, axis=0).max()) if len(corners) else 0.0
    keep = np.hypot(*(corners - np.roll(corners, 1, axis=0)).T) > _SAME * size
    corners = corners[keep]
    if len(corners) < 3:
        return corners
    before, after = corners - np.roll(corners, 1, axis=0), np.roll(corners, -1, axis=0) - corners
    turn = before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0]
    straight = np.abs(turn) <= _SAME * np.hypot(*before.T) * np.hypot(*after.T)
    forward = np.einsum("ij,ij->i", before, after) > 0
    kept: Array = corners[~(straight & forward)]
    return kept


def _walls_meet(corners: Sequence[Array] | Array) -> bool:
    """Whether two walls that are not neighbours meet, or neighbours lie on each other."""
    corners = np.asarray(corners)
    count = len(corners)
    ends = np.roll(corners, -1, axis=0)

    def side(a: Array, b: Array, p: Array) -> float:
        return float((b[0] - a[0]) * (p[1] - a[1]) - (b[1] - a[1]) * (p[0] - a[0]))

    for i in range(count):
        nxt = (i + 1) % count
        folded = side(corners[i], ends[i], ends[nxt]) == 0 and (ends[i] - corners[i]) @ (ends[nxt] - ends[i]) < 0
        if folded:
            return True
        for j in range(i + 2, count):
            if (j + 1) % count == i:
                continue
            one = side(corners[i], ends[i], corners[j]) * side(corners[i], ends[i], ends[j])
            other = side(corners[j], ends[j], corners[i]) * side(corners[j], ends[j], ends[i])
            box = np.all(np.minimum(corners[i], ends[i]) <= np.maximum(corners[j], ends[j])) and np.all(
                np.minimum(corners[j], ends[j]) <= np.maximum(corners[i], ends[i])
            )
            if one <= 0 and other <= 0 and box:
                return True
    return False
