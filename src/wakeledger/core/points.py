"""Points as read from a file, before anything is done to them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: What a variable may have been divided by before it was written: quantities of the undisturbed stream.
NORMALISATIONS: tuple[str, ...] = (
    "speed",
    "sound_speed",
    "dynamic_pressure",
    "density_speed_squared",
    "density_sound_speed_squared",
    "static_pressure",
    "total_pressure",
    "density",
    "temperature",
    "total_temperature",
    "viscosity",
)


@dataclass(frozen=True)
class Column:
    """Where a variable stands in a file and how to bring it to SI: value_SI = scale * value_file + offset.

    Attributes
    ----------
    column : str
        Name of the table's column or of the file's array.
    unit : str
        The unit as the survey file writes it, for messages.
    scale, offset : float
        Conversion to SI.
    relative_to, normalised_by, kinematic
        As in `Channel`.
    """

    column: str
    unit: str
    scale: float = 1.0
    offset: float = 0.0
    relative_to: str | None = None
    normalised_by: str | None = None
    kinematic: bool = False


@dataclass(frozen=True)
class Channel:
    """One measured variable at every point, in SI, and what it is measured against.

    Attributes
    ----------
    values : ndarray, shape (n,)
        The values in SI; NaN where the cell of the file was empty.
    relative_to : {None, "total", "static"}
        The reference pressure that was subtracted before it was written, None for an absolute value.
    normalised_by : str or None
        The reference quantity it was divided by (`NORMALISATIONS`), None for a dimensional value.
    kinematic : bool
        True for a pressure divided by density, m² s⁻², or a viscosity divided by density, m² s⁻¹.
    """

    values: Array
    relative_to: str | None = None
    normalised_by: str | None = None
    kinematic: bool = False


@dataclass(frozen=True)
class Points:
    """The points of one plane in file order, lossless.

    Attributes
    ----------
    y, z : ndarray, shape (n,)
        Positions in wind axes, m (y to starboard, z up).
    channels : mapping of str to Channel
        Variables by name (`wakeledger.core.names.VARIABLES`). Vector components are along the **file's** axes.
    axes : ndarray, shape (3, 3)
        Signed permutation P with wind = P @ file for the components of a vector.
    std : mapping of str to ndarray, shape (n,)
        Standard deviation of the samples at each point, in SI, where the file gives it.
    samples : ndarray of int, shape (n,), or None
        Number of samples behind each point's mean and standard deviation.
    row : ndarray of int, shape (n,), or None
        Traverse row each point belongs to, where the file gives it.
    line : ndarray of int, shape (n,)
        Line of the file (or flat index into its arrays) each point came from, counted from 1.
    source : str
        Name of the file.
    triangles : ndarray of int, shape (m, 3), or None
        Triangles between the points, where the file connects them and its values stand at the corners.
    areas : ndarray, shape (n,), or None
        Area of the cell that each point is the centre of, m², where the file's values stand for cells.
    how : str
        How the points came out of a file that holds more than them: cut, taken at cell centres, merged; empty where
        they stand in it as they are.
    averaged : str
        What the values are means over, where the file holds many instants; empty where it holds one.
    """

    y: Array
    z: Array
    channels: Mapping[str, Channel]
    line: NDArray[np.int64]
    source: str
    axes: Array = field(default_factory=lambda: np.eye(3))
    std: Mapping[str, Array] = field(default_factory=lambda: MappingProxyType({}))
    samples: NDArray[np.int64] | None = None
    row: NDArray[np.int64] | None = None
    triangles: NDArray[np.int64] | None = None
    areas: Array | None = None
    how: str = ""
    averaged: str = ""

    @property
    def n(self) -> int:
        """Number of points."""
        return int(self.y.size)
