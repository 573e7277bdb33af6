"""Calibration of a five- or seven-hole probe: from a table of known flows to a record that reduces readings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.intake.probe.coefficients import coefficients, sector_terms
from wakeledger.intake.probe.directions import angles, direction_from_angles, from_plane, to_plane
from wakeledger.intake.probe.inverse import HoleModel, InverseTables, bounds, build_tables, plane_slopes
from wakeledger.intake.probe.record import (
    REGION_NODES,
    BadPoint,
    Calibration,
    CalibrationSet,
    CalibrationTable,
    Level,
    Reading,
)
from wakeledger.intake.probe.residuals import QUANTITIES, REGION, midpoints, reading_errors, regional
from wakeledger.intake.probe.surface import FEWEST_PLACES, fit_surface
from wakeledger.intake.probe.validity import DirectionHull, direction_hull

__all__ = [
    "BadPoint",
    "Calibration",
    "CalibrationSet",
    "CalibrationTable",
    "Level",
    "Reading",
    "calibrate",
]

#: A point is bad if a hole differs from what all other points predict by more than this many robust standard
#: deviations and by more than this share of the dynamic pressure.
BAD_DEVIATIONS = 8.0
BAD_PRESSURE = 0.01
#: Largest typical error of a point's direction, as predicted by all others, as a share of the half range.
_UNRELATED = 0.2
#: Points closer than this are one direction, rad.
SAME_DIRECTION = 1e-6
#: Points belong to one set while their Mach numbers (or Reynolds numbers, relatively) follow each other this closely.
_SAME_LEVEL = {"mach": 0.015, "reynolds": 0.05}


def calibrate(table: CalibrationTable, *, title: str = "") -> Calibration:
    """Calibrate a probe.

    Parameters
    ----------
    table : CalibrationTable
        Readings in known flows, on a grid of directions or anywhere.
    title : str, optional
        Of the product.

    Returns
    -------
    Calibration

    Raises
    ------
    DataError
        If total pressure is not above static pressure, the directions are too few or lie on one line, the pressures
        belong to no smooth surface, or the coefficients do not grow with the angles.

    Notes
    -----
    Each hole's (p - Ps)/(Pt - Ps) becomes a smooth function of direction (`wakeledger.intake.probe.surface`); the
    published coefficients of every sector follow from these functions and are inverted into tables
    (`wakeledger.intake.probe.inverse`). The standard uncertainty is the error with which each point is reduced by a
    calibration that does not know it, root mean square over its region.
    """
    table, notes = _complete(table)
    set_index, levels = _sets(table)
    shape = (len(QUANTITIES), table.n)
    residual, left_out = np.full(shape, np.nan), np.full(shape, np.nan)
    difference, deviations = np.full_like(table.holes, np.nan), np.full_like(table.holes, np.nan)
    bad, edge, covered = (np.zeros(table.n, dtype=bool) for _ in range(3))
    sets = []
    for number, level in enumerate(levels):
        members = np.flatnonzero(set_index == number)
        try:
            one = _calibrate_set(table, members, level)
        except DataError as error:
            place = f"{table.level_name} {level:.4g}" if len(levels) > 1 else None
            raise error.located(file=table.source, place=place) from error
        sets.append(one.record)
        residual[:, members], left_out[:, members] = one.residual, one.left_out
        difference[:, members], deviations[:, members] = one.difference, one.deviations
        bad[members], edge[members], covered[members] = one.bad, one.edge, one.covered
    return Calibration(
        title=title,
        table=table,
        sets=tuple(sets),
        set_index=set_index,
        coefficients=coefficients(table.holes, table.total, table.static),
        residual=residual,
        left_out=left_out,
        difference=difference,
        deviations=deviations,
        bad=bad,
        edge=edge,
        covered=covered,
        notes=notes,
    )


@dataclass(frozen=True, eq=False)
class _SetResult:
    record: CalibrationSet
    residual: Array
    left_out: Array
    difference: Array
    deviations: Array
    bad: NDArray[np.bool_]
    edge: NDArray[np.bool_]
    covered: NDArray[np.bool_]


def _complete(table: CalibrationTable) -> tuple[CalibrationTable, tuple[str, ...]]:
    """The points without an empty cell, and a note for each of the others."""
    columns = {"pitch": table.pitch, "yaw": table.yaw, "total_pressure": table.total, "static_pressure": table.static}
    columns |= {f"p{hole + 1}": values for hole, values in enumerate(table.holes)}
    if table.level is not None and table.level_name is not None:
        columns[table.level_name] = table.level
    notes: list[str] = []
    whole = np.ones(table.n, dtype=bool)
    for name, values in columns.items():
        missing = table.line[~np.isfinite(values) & whole]
        notes.extend(f"line {line}: {name} is missing; the point is not used" for line in missing)
        whole &= np.isfinite(values)
    wrong = np.flatnonzero(whole & ~(table.total > table.static))
    if wrong.size:
        raise DataError(
            f"the total pressure is not above the static pressure at {wrong.size} of {table.n} points",
            file=table.source,
            place=f"line {table.line[wrong[0]]}",
            remedy="check the columns and units of total_pressure and static_pressure",
        )
    chosen = CalibrationTable(
        pitch=table.pitch[whole],
        yaw=table.yaw[whole],
        holes=table.holes[:, whole],
        total=table.total[whole],
        static=table.static[whole],
        line=table.line[whole],
        source=table.source,
        level=None if table.level is None else table.level[whole],
        level_name=table.level_name,
    )
    return chosen, tuple(notes)


def _sets(table: CalibrationTable) -> tuple[NDArray[np.int64], list[float]]:
    """Set of each point, and the level of each set in ascending order."""
    index = np.zeros(table.n, dtype=np.int64)
    if table.level is None or table.level_name is None or not table.n:
        return index, [np.nan]
    order = np.argsort(table.level, kind="stable")
    ascending = table.level[order]
    gap = np.diff(ascending)
    if table.level_name == "reynolds":
        gap = gap / np.maximum(ascending[1:], 1e-300)
    index[order[1:]] = np.cumsum(gap > _SAME_LEVEL[table.level_name])
    return index, [float(np.mean(table.level[index == number])) for number in range(int(index.max()) + 1)]


def _places(pitch: Array, yaw: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """First point of each different direction, and the direction of each point."""
    key = np.round(np.stack([pitch, yaw], axis=1) / SAME_DIRECTION).astype(np.int64)
    _, first, which = np.unique(key, axis=0, return_index=True, return_inverse=True)
    return first, np.ravel(which)


def _calibrate_set(table: CalibrationTable, members: NDArray[np.intp], level: float) -> _SetResult:
    first, which = _places(table.pitch[members], table.yaw[members])
    pitch, yaw = table.pitch[members][first], table.yaw[members][first]
    if pitch.size < FEWEST_PLACES:
        raise DataError(
            f"there are {pitch.size} different calibrated directions", remedy=f"give at least {FEWEST_PLACES}"
        )
    readings = table.pressures[:, members]
    count = np.bincount(which)
    means = np.stack([np.bincount(which, weights=hole) / count for hole in readings])
    directions = direction_from_angles(pitch, yaw)
    image = to_plane(directions)
    fit = fit_surface(image.T, means.T, limit=BAD_DEVIATIONS, floor=BAD_PRESSURE)
    hull = direction_hull(pitch[fit.kept], yaw[fit.kept])
    model = HoleModel(fit.surface, *bounds(directions[:, fit.kept], hull))
    _refuse_wrong_sense(model, hull)
    tables = build_tables(model, hull, sectors=1 if len(means) == 5 else 7)
    edge = hull.on_edge(pitch, yaw)

    gradient = tuple(slope[:, which] for slope in model.gradient(image))
    left = fit.left_out.T[:, which]
    predicted = means[:, which] - left
    left_out = reading_errors(readings, predicted, (gradient[0], gradient[1]), image[:, which])
    _refuse_unrelated(left_out, hull)
    residual = reading_errors(readings, model(image)[:, which], (gradient[0], gradient[1]), image[:, which])
    record = CalibrationSet(
        level=level,
        tables=tables,
        hull=hull,
        low=model.low,
        high=model.high,
        uncertainty=np.hypot(
            _regional(model, directions[:, which], left_out * fit.one_sided[which], fit.kept[which], hull.spacing),
            _table_errors(model, tables, hull, pitch[fit.kept], yaw[fit.kept]),
        ),
        smoothing=fit.smoothing,
    )
    again = Reading.of(record, tables.look_up(model(image)))
    apart = np.arccos(np.clip(np.sum(again.direction * directions, axis=0), -1.0, 1.0))
    covered = fit.kept & ~np.asarray(again.out_of_range) & (apart < 0.25 * hull.spacing)
    return _SetResult(
        record,
        residual,
        left_out,
        readings - predicted,
        fit.deviations.T[:, which],
        ~fit.kept[which],
        edge[which],
        covered[which],
    )


def _refuse_unrelated(left_out: Array, hull: DirectionHull) -> None:
    """Refuse a table whose pressures do not tell the direction."""
    typical = float(np.median(np.hypot(left_out[0], left_out[1])))
    if typical > _UNRELATED * 0.5 * float(np.max(np.ptp(hull.vertices, axis=0))):
        raise DataError(
            f"the hole pressures do not follow the flow direction: points are predicted by the others to "
            f"{np.degrees(typical):.1f} deg only",
            remedy="check which columns are the angles and the holes, and that their lines belong together",
        )


def _regional(model: HoleModel, directions: Array, left_out: Array, inner: NDArray[np.bool_], spacing: float) -> Array:
    """Left-out errors by region on the grid of images, shape (4, nodes, nodes)."""
    axes = [np.linspace(model.low[i], model.high[i], REGION_NODES) for i in range(2)]
    at = from_plane(np.stack([np.ravel(side) for side in np.meshgrid(*axes, indexing="ij")]))
    sizes = regional(directions[:, inner], left_out[:, inner], at, radius=REGION * spacing)
    return sizes.reshape(len(QUANTITIES), REGION_NODES, REGION_NODES)


def _table_errors(model: HoleModel, tables: InverseTables, hull: DirectionHull, pitch: Array, yaw: Array) -> Array:
    """Errors of the look-up, between the calibrated directions, on the grid of images."""
    pitch, yaw = midpoints(pitch, yaw)
    directions = direction_from_angles(pitch, yaw)
    found = tables.look_up(model(to_plane(directions)))
    inside = np.asarray(found.found)
    found_pitch, found_yaw = angles(found.direction)
    errors = np.stack([found_pitch - pitch, found_yaw - yaw, found.total - 1.0, found.static])
    if not inside.any():
        return np.zeros((len(QUANTITIES), REGION_NODES, REGION_NODES))
    return _regional(model, directions, errors, inside, hull.spacing)


def _refuse_wrong_sense(model: HoleModel, hull: DirectionHull) -> None:
    """Refuse a table whose coefficients do not grow with the angles near the axis of the probe."""
    pitch, yaw = np.clip(0.0, hull.vertices.min(axis=0), hull.vertices.max(axis=0))
    image = to_plane(direction_from_angles(np.array([pitch]), np.array([yaw])))
    holes = model(image)
    lead = np.zeros(1, dtype=np.intp)
    if sector_terms(holes, lead).denominator[0] <= 0:
        raise DataError(
            "the centre hole p1 does not read the highest pressure where the flow is along the probe",
            remedy="check which column is p1; holes are numbered as the documentation shows",
        )
    slopes = plane_slopes(holes, model.gradient(image), lead)[:, :, 0]
    pairs = ("port and starboard", "lower and upper") if len(holes) == 5 else ("port and starboard", "top and bottom")
    across = max(abs(slopes[0, 1]), abs(slopes[1, 0]))
    for index, name in enumerate(("yaw", "pitch")):
        if abs(slopes[index, index]) < across:
            raise DataError(
                f"the {name} coefficient changes more with the other angle than with {name}",
                remedy="check the numbers of the outer holes, and which column is pitch and which is yaw",
            )
        if slopes[index, index] < 0:
            raise DataError(
                f"the {name} coefficient falls where {name} grows",
                remedy=f"exchange the {pairs[index]} holes, or correct the sign of {name} in the table: pitch is "
                "positive for upwash, yaw is positive for flow towards starboard",
            )
