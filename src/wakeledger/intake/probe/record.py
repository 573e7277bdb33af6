"""The record of a calibrated probe, and what it makes of readings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.probe.coefficients import Coefficients
from wakeledger.intake.probe.directions import angles, to_plane
from wakeledger.intake.probe.inverse import InverseTables, Inverted
from wakeledger.intake.probe.residuals import QUANTITIES, representative
from wakeledger.intake.probe.validity import DirectionHull

#: Nodes along each side of the grid that the uncertainty by region is given on.
REGION_NODES = 33

Level = Literal["mach", "reynolds"]


@dataclass(frozen=True, eq=False)
class CalibrationTable:
    """Readings of a probe in known flows.

    Attributes
    ----------
    pitch, yaw : ndarray, shape (n,)
        Flow direction in probe axes, rad.
    holes : ndarray, shape (5 or 7, n)
        Hole pressures p1, p2, ..., Pa.
    total, static : ndarray, shape (n,)
        Pressures of the calibration stream against the same as the holes, Pa.
    line : ndarray of int, shape (n,)
        Line of the file each point came from.
    source : str
        Name of the file.
    level : ndarray, shape (n,), or None
        Mach or Reynolds number of each point, where the table has it.
    level_name : {"mach", "reynolds"} or None
        Which of the two it is.
    """

    pitch: Array
    yaw: Array
    holes: Array
    total: Array
    static: Array
    line: NDArray[np.int64]
    source: str
    level: Array | None = None
    level_name: Level | None = None

    @property
    def n(self) -> int:
        """Number of points."""
        return int(self.pitch.size)

    @property
    def pressures(self) -> Array:
        """Hole pressures (p - Ps)/(Pt - Ps), shape (holes, n)."""
        return (self.holes - self.static) / (self.total - self.static)


@dataclass(frozen=True, eq=False)
class CalibrationSet:
    """The calibration at one Mach (or Reynolds) number.

    Attributes
    ----------
    level : float
        Mean Mach or Reynolds number, NaN where the table has none.
    tables : InverseTables
        From the coefficient planes to direction and pressures.
    hull : DirectionHull
        Range of validity.
    low, high : ndarray, shape (2,)
        Rectangle of stereographic images that the uncertainty is given over.
    uncertainty : ndarray, shape (4, 33, 33)
        Standard uncertainty of `QUANTITIES` by region: rad, and shares of the dynamic pressure; along (v, w) images.
    smoothing : float
        Of the surfaces, as a share of the radial functions' largest eigenvalue.
    """

    level: float
    tables: InverseTables
    hull: DirectionHull
    low: Array
    high: Array
    uncertainty: Array
    smoothing: float

    def uncertainty_at(self, direction: Array) -> Array:
        """Standard uncertainty of `QUANTITIES` at directions.

        Parameters
        ----------
        direction : ndarray, shape (3, n)
            Unit vectors in probe axes.

        Returns
        -------
        ndarray, shape (4, n)
        """
        cells = REGION_NODES - 1
        with np.errstate(invalid="ignore", divide="ignore"):
            place = (to_plane(direction) - self.low[:, None]) / (self.high - self.low)[:, None] * cells
        held = np.clip(np.nan_to_num(place), 0.0, cells)
        cell = np.minimum(held.astype(np.intp), cells - 1)
        fx, fy = held - cell
        corner = cell[0] * REGION_NODES + cell[1]
        flat = self.uncertainty.reshape(len(QUANTITIES), -1)
        near, far = flat.take(corner, axis=1), flat.take(corner + REGION_NODES, axis=1)
        near += fy * (flat.take(corner + 1, axis=1) - near)
        far += fy * (flat.take(corner + REGION_NODES + 1, axis=1) - far)
        return np.asarray(near + fx * (far - near))


@dataclass(frozen=True)
class BadPoint:
    """A calibration point that does not lie on the smooth surface through all others.

    Attributes
    ----------
    line : int
        Line of the calibration file.
    pitch, yaw : float
        Its direction, rad.
    hole : int
        Number of the hole that differs most, 1 for the centre.
    difference : float
        Measured less predicted pressure of that hole, as a share of the dynamic pressure.
    deviations : float
        The same in robust standard deviations.
    """

    line: int
    pitch: float
    yaw: float
    hole: int
    difference: float
    deviations: float

    @property
    def sentence(self) -> str:
        """What is wrong with it, in one sentence."""
        return (
            f"line {self.line} (pitch {np.degrees(self.pitch):.1f} deg, yaw {np.degrees(self.yaw):.1f} deg): "
            f"p{self.hole} lies {self.difference:+.3f} q from what all other points predict, "
            f"{self.deviations:.0f} robust standard deviations; the point is not used"
        )


@dataclass(frozen=True, eq=False)
class Calibration:
    """A calibrated probe.

    Attributes
    ----------
    title : str
    table : CalibrationTable
        The points that are complete, in file order.
    sets : tuple of CalibrationSet
        Ascending in Mach or Reynolds number; a single one where the table has neither.
    set_index : ndarray of int, shape (n,)
        Which set each point belongs to.
    coefficients : Coefficients
        The published coefficients of each point.
    residual : ndarray, shape (4, n)
        Errors of `QUANTITIES` if the point is reduced with the calibration: rad, and shares of q.
    left_out : ndarray, shape (4, n)
        The same with a calibration that does not know the point.
    difference : ndarray, shape (holes, n)
        Hole pressures less what all other points predict, as shares of q.
    deviations : ndarray, shape (holes, n)
        The same in robust standard deviations.
    bad : ndarray of bool, shape (n,)
        Points the calibration does not rest on.
    edge : ndarray of bool, shape (n,)
        Points on the edge of the range; left out, they are extrapolated to.
    covered : ndarray of bool, shape (n,)
        Points within the range whose coefficients lead back to their direction.
    notes : tuple of str
        Points that are not complete, and the like.
    text : str
        Text of the probe file.
    inputs : mapping of str to str
        SHA-256 of each input file by name.
    provenance : mapping of str to str
        Versions, time.
    """

    title: str
    table: CalibrationTable
    sets: tuple[CalibrationSet, ...]
    set_index: NDArray[np.int64]
    coefficients: Coefficients
    residual: Array
    left_out: Array
    difference: Array
    deviations: Array
    bad: NDArray[np.bool_]
    edge: NDArray[np.bool_]
    covered: NDArray[np.bool_]
    notes: tuple[str, ...] = ()
    text: str = ""
    inputs: Mapping[str, str] = field(default_factory=dict)
    provenance: Mapping[str, str] = field(default_factory=dict)

    @property
    def holes(self) -> int:
        """Number of holes."""
        return int(self.table.holes.shape[0])

    @property
    def levels(self) -> Array:
        """Mach or Reynolds number of each set, shape (sets,)."""
        return np.array([one.level for one in self.sets])

    @property
    def bad_points(self) -> tuple[BadPoint, ...]:
        """The points that are not used, the worst first."""
        found = []
        for index in np.flatnonzero(self.bad):
            hole = int(np.argmax(self.deviations[:, index]))
            found.append(
                BadPoint(
                    int(self.table.line[index]),
                    float(self.table.pitch[index]),
                    float(self.table.yaw[index]),
                    hole + 1,
                    float(self.difference[hole, index]),
                    float(self.deviations[hole, index]),
                )
            )
        return tuple(sorted(found, key=lambda point: -point.deviations))

    def standard_uncertainty(self) -> Array:
        """Root mean square over the range of the left-out errors of `QUANTITIES`, shape (4,)."""
        inner = representative(self.edge, ~self.bad)
        return np.asarray(np.sqrt(np.mean(self.left_out[:, inner] ** 2, axis=1)))

    def read(self, holes: Array, *, level: Array | float | None = None, check: bool = True) -> Reading:
        """Flow direction and pressures of readings.

        Parameters
        ----------
        holes : ndarray, shape (5 or 7, n)
            Hole pressures, Pa, against anything common.
        level : ndarray, shape (n,), or float, optional
            Mach or Reynolds number of each; needed where there are several sets, between which the results are
            interpolated linearly. Below the first set and above the last one, that set holds.
        check : bool, optional
            Whether to tell which readings lie outside the calibrated range.

        Returns
        -------
        Reading

        Raises
        ------
        ValueError
            If there are several sets and no level.
        """
        if len(self.sets) == 1:
            return Reading.of(self.sets[0], self.sets[0].tables.look_up(holes, check=check))
        if level is None:
            raise ValueError(f"the calibration has sets of different {self.table.level_name}; a level is needed")
        levels = self.levels
        number = np.broadcast_to(np.asarray(level, dtype=float), holes.shape[1:])
        upper = np.clip(np.searchsorted(levels, number), 1, levels.size - 1)
        share = np.clip((number - levels[upper - 1]) / (levels[upper] - levels[upper - 1]), 0.0, 1.0)
        weights = [
            np.where(upper - 1 == index, 1.0 - share, 0.0) + np.where(upper == index, share, 0.0)
            for index in range(levels.size)
        ]
        weights = [np.where(np.isnan(number), np.nan, weight) for weight in weights]
        parts = [Reading.of(one, one.tables.look_up(holes, check=check)) for one in self.sets]
        return Reading.blended(parts, weights)


@dataclass(frozen=True, eq=False)
class Reading:
    """Flow direction and pressures of readings, in probe axes.

    Attributes
    ----------
    direction : ndarray, shape (3, n)
        Unit vectors of the flow.
    total, static : ndarray, shape (n,)
        Pa, against the same as the holes.
    sector : ndarray of int, shape (n,)
        0 for the centre, else the number of the leading hole less one.
    out_of_range : ndarray of bool, shape (n,), or None
        Readings outside the calibrated range; None where it was not asked for.
    weights : tuple of (CalibrationSet, ndarray)
        The sets and their share in each reading.
    """

    direction: Array
    total: Array
    static: Array
    sector: NDArray[np.intp]
    out_of_range: NDArray[np.bool_] | None
    weights: tuple[tuple[CalibrationSet, Array | float], ...]

    @property
    def pitch(self) -> Array:
        """atan2(w, u), rad."""
        return angles(self.direction)[0]

    @property
    def yaw(self) -> Array:
        """asin(v/|V|), rad."""
        return angles(self.direction)[1]

    @classmethod
    def of(cls, one: CalibrationSet, found: Inverted) -> Reading:
        """The reading of one set."""
        beyond = None
        if found.found is not None:
            beyond = ~(found.found & one.hull.holds(*angles(found.direction)))
        return cls(found.direction, found.total, found.static, found.sector, beyond, ((one, 1.0),))

    @classmethod
    def blended(cls, parts: list[Reading], weights: list[Array]) -> Reading:
        """The weighted mean of the readings of several sets."""
        direction = sum((w * part.direction for w, part in zip(weights, parts, strict=True)), np.zeros(1))
        direction = direction / np.sqrt(np.sum(direction**2, axis=0))
        total = sum((w * part.total for w, part in zip(weights, parts, strict=True)), np.zeros(1))
        static = sum((w * part.static for w, part in zip(weights, parts, strict=True)), np.zeros(1))
        beyond: NDArray[np.bool_] | None = np.zeros(total.shape, dtype=bool)
        for w, part in zip(weights, parts, strict=True):
            beyond = None if part.out_of_range is None or beyond is None else beyond | ((w > 0) & part.out_of_range)
        if beyond is not None:
            beyond |= np.isnan(total)
        shares = tuple((part.weights[0][0], w) for w, part in zip(weights, parts, strict=True))
        return cls(direction, total, static, parts[0].sector, beyond, shares)

    def reshaped(self, shape: tuple[int, ...]) -> Reading:
        """The same with its points arranged anew, as draws of points; without the shares of the sets."""
        beyond = None if self.out_of_range is None else self.out_of_range.reshape(shape)
        return Reading(
            self.direction.reshape(3, *shape),
            self.total.reshape(shape),
            self.static.reshape(shape),
            self.sector.reshape(shape),
            beyond,
            (),
        )

    def standard_uncertainty(self) -> Array:
        """The calibration's standard uncertainty of `QUANTITIES`: rad, and shares of Pt - Ps, shape (4, n)."""
        return np.asarray(sum(weight * one.uncertainty_at(self.direction) for one, weight in self.weights))
