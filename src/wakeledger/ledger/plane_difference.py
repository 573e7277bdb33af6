"""The difference of two planes on a common grid."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator, RectBivariateSpline
from scipy.ndimage import distance_transform_edt

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.plane import grid_of
from wakeledger.core.traverse import axis_of

if TYPE_CHECKING:
    import xarray as xr

    from wakeledger.ledger.ledger import Ledger

#: Grids whose places differ by less than this share of a spacing are the same.
_SAME = 1e-6

#: Fields of the difference: name, variable of the plane, scalar of the stream it is divided by, unit, meaning.
_FIELDS = (
    ("total_pressure_loss", "total_pressure_loss", "dynamic_pressure", "1", "total-pressure loss over q"),
    ("axial_vorticity", "axial_vorticity", "speed", "m-1", "axial vorticity over U"),
    ("v", "v", "speed", "1", "velocity to starboard over U"),
    ("w", "w", "speed", "1", "upward velocity over U"),
)


def plane_difference(a: Ledger, b: Ledger) -> tuple[xr.Dataset | None, str]:
    """Plane of B minus plane of A, each divided by its own stream.

    Parameters
    ----------
    a, b : Ledger
        The ledgers.

    Returns
    -------
    dataset : Dataset or None
        Dimensions (z, y): differences of total-pressure loss over q, axial vorticity and crossflow over U, the two wake
        regions and both planes' flags; None where there is no common window.
    note : str
        What was done, or why there is none.

    Notes
    -----
    Along each axis the places are those of the coarser plane inside both windows; a field of the other plane is brought
    there by a bicubic spline, wake regions and flags by their nearest place.
    """
    import xarray as xr

    along = axis_of(a.plane), axis_of(b.plane)
    if along != (None, None):
        return _traverse_difference(a, b, along)
    grids = grid_of(a.plane), grid_of(b.plane)
    same = same_places(grids[0].y, grids[1].y) and same_places(grids[0].z, grids[1].z)
    y, z = (grids[0].y, grids[0].z) if same else (common_places(grids, "y"), common_places(grids, "z"))
    if y.size < 2 or z.size < 2:
        return None, "The two planes have no window in common, so there is no difference of planes."
    dataset = xr.Dataset(
        coords={
            "y": ("y", y, {"units": "m", "long_name": "distance to starboard"}),
            "z": ("z", z, {"units": "m", "long_name": "height, positive up"}),
        }
    )
    for name, variable, scale, unit, meaning in _FIELDS:
        if not (variable in a.plane and variable in b.plane and scale in a.reference and scale in b.reference):
            continue
        fields = [
            brought(one.plane[variable].values, grid, y, z) / one.reference[scale]
            for one, grid in zip((a, b), grids, strict=True)
        ]
        dataset[name] = (("z", "y"), fields[1] - fields[0], {"units": unit, "long_name": f"{meaning}, B minus A"})
    for side, one, grid in (("a", a, grids[0]), ("b", b, grids[1])):
        for name in ("wake_mask", "flag"):
            if name in one.plane:
                dataset[f"{name}_{side}"] = (
                    ("z", "y"), nearest_places(one.plane[name].values, grid, y, z),
                    {"units": "1", "long_name": f"{name.replace('_', ' ')} of {side.upper()}"},
                )  # fmt: skip
    steps = f"{1e3 * (y[1] - y[0]):.3g} mm x {1e3 * (z[1] - z[0]):.3g} mm"
    window = f"y {y[0]:.4g} to {y[-1]:.4g} m, z {z[0]:.4g} to {z[-1]:.4g} m"
    how = (
        "Both planes have the same places; their difference was taken as they stand"
        if same
        else "For the difference of planes the finer one was brought onto the places of the coarser one, inside both "
        "windows, by bicubic splines"
    )
    return dataset, f"{how} ({y.size} x {z.size} places, {steps}, {window})."


def plane_differences(a: Ledger, b: Ledger) -> tuple[tuple[xr.Dataset, ...], tuple[str, ...]]:
    """Planes of B minus planes of A, at every station that both ledgers have.

    Parameters
    ----------
    a, b : Ledger
        The ledgers, of one plane or of several.

    Returns
    -------
    datasets : tuple of Dataset
        As `plane_difference`, in the order of A's planes; where both stand at one station, with that as the coordinate
        ``x``. Where there is no common station, the difference of the first planes.
    notes : tuple of str
        What was done, and which planes have no counterpart.
    """
    of_a, of_b = a.stations or (a,), b.stations or (b,)
    several = len(of_a) + len(of_b) > 2
    pairs = [(one, other) for one in of_a for other in of_b if _at_one_station(one, other)]
    if not pairs:
        dataset, note = plane_difference(of_a[0], of_b[0])
        if several:
            note = f"Plane of A at {of_a[0].station:g} m and of B at {of_b[0].station:g} m: {note}"
        return () if dataset is None else (dataset,), (note,)
    found, notes = [], []
    for one, other in pairs:
        dataset, note = plane_difference(one, other)
        if dataset is not None:
            attributes = {"units": "m", "long_name": "distance behind the trailing edge"}
            found.append(dataset.assign_coords(x=((), one.station, attributes)))
        notes.append(f"Planes at {one.station:g} m: {note}" if several else note)
    for name, planes, others in (("A", of_a, of_b), ("B", of_b, of_a)):
        left = [one.station for one in planes if not any(_at_one_station(one, other) for other in others)]
        if left:
            listed = ", ".join(f"{station:g} m" for station in left)
            notes.append(f"Only {name} has a plane at {listed}: no difference of planes was taken there.")
    return tuple(found), tuple(notes)


def _at_one_station(a: Ledger, b: Ledger) -> bool:
    return math.isclose(a.station, b.station, rel_tol=_SAME, abs_tol=_SAME)


def _traverse_difference(a: Ledger, b: Ledger, along: tuple[str | None, str | None]) -> tuple[xr.Dataset | None, str]:
    """The same along a line."""
    import xarray as xr

    axis = along[0]
    if axis is None or axis != along[1]:
        return None, "The two traverses do not run along the same axis, so there is no difference of their profiles."
    x, y = (np.asarray(one.plane[axis].values, dtype=float) for one in (a, b))
    places, other = (x, y) if np.diff(x).mean() >= np.diff(y).mean() else (y, x)
    places = places[(places >= other[0]) & (places <= other[-1])]
    if places.size < 2:
        return None, "The two traverses have no stretch in common, so there is no difference of their profiles."
    dataset = xr.Dataset(coords={axis: (axis, places, {"units": "m"})})
    name = "total_pressure_loss"
    for side, one, at in (("a", a, x), ("b", b, y)):
        field = PchipInterpolator(at, np.ravel(one.plane[name].values))(places) / one.reference["dynamic_pressure"]
        dataset[f"{name}_{side}"] = (
            axis,
            field,
            {"units": "1", "long_name": f"total-pressure loss over q, {side.upper()}"},
        )
    dataset[name] = dataset[f"{name}_b"] - dataset[f"{name}_a"]
    dataset[name].attrs = {"units": "1", "long_name": "total-pressure loss over q, B minus A"}
    ends = f"{axis} {places[0]:.4g} to {places[-1]:.4g} m"
    note = f"For the difference of profiles the finer traverse was brought onto the {places.size} places of the coarser"
    return dataset, f"{note} one that both cover ({ends})."


def same_places(x: Array, y: Array) -> bool:
    """Whether two axes have the same places.

    Parameters
    ----------
    x, y : ndarray, shape (n,), (m,)
        Ascending places, m.

    Returns
    -------
    bool
    """
    if x.size != y.size:
        return False
    step = abs(float(x[-1] - x[0])) / max(x.size - 1, 1) or 1.0
    return bool(np.abs(x - y).max() < _SAME * step)


def common_places(grids: Sequence[UniformGrid], axis: str) -> Array:
    """Places of the coarsest grid along an axis that lie inside every window.

    Parameters
    ----------
    grids : sequence of UniformGrid
        The grids.
    axis : {"y", "z"}
        The axis.

    Returns
    -------
    ndarray, shape (n,)
        m; empty where the windows do not overlap.
    """
    coarse = max(grids, key=lambda grid: float(getattr(grid, f"d{axis}")))
    places: Array = getattr(coarse, axis)
    slack = _SAME * min(float(getattr(grid, f"d{axis}")) for grid in grids)
    low = max(float(getattr(grid, axis)[0]) for grid in grids) - slack
    high = min(float(getattr(grid, axis)[-1]) for grid in grids) + slack
    inside: Array = places[(places >= low) & (places <= high)]
    return inside


def brought(field: NDArray[np.generic], grid: UniformGrid, y: Array, z: Array) -> Array:
    """A field at other places of its plane, by a bicubic spline; as it stands where they are its own.

    Places nearest to an unknown one (NaN) stay unknown.

    Parameters
    ----------
    field : ndarray, shape (nz, ny)
        The field.
    grid : UniformGrid
        Its grid.
    y, z : ndarray, shape (my,), (mz,)
        The places wanted, m.

    Returns
    -------
    ndarray, shape (mz, my)
    """
    values = np.asarray(field, dtype=float)
    if same_places(grid.y, y) and same_places(grid.z, z):
        return values
    unknown = ~np.isfinite(values)
    if unknown.all():
        return np.full((z.size, y.size), np.nan)
    if unknown.any():
        nearest = distance_transform_edt(unknown, return_distances=False, return_indices=True)
        values = values[tuple(nearest)]
    orders = min(3, grid.nz - 1), min(3, grid.ny - 1)
    spline = RectBivariateSpline(grid.z, grid.y, values, kx=orders[0], ky=orders[1])
    result: Array = spline(np.clip(z, grid.z[0], grid.z[-1]), np.clip(y, grid.y[0], grid.y[-1]))
    if unknown.any():
        result[nearest_places(unknown, grid, y, z) > 0] = np.nan
    return result


def nearest_places(field: NDArray[np.generic], grid: UniformGrid, y: Array, z: Array) -> NDArray[np.int32]:
    """Marks of a plane at other places, each that of the nearest place.

    Parameters
    ----------
    field, grid, y, z
        As for `brought`.

    Returns
    -------
    ndarray of int, shape (mz, my)
    """
    iz = np.clip(np.rint((z - grid.z0) / grid.dz).astype(int), 0, grid.nz - 1)
    iy = np.clip(np.rint((y - grid.y0) / grid.dy).astype(int), 0, grid.ny - 1)
    return np.asarray(field)[np.ix_(iz, iy)].astype(np.int32)
