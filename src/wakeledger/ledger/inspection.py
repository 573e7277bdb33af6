"""What can be said of a survey before it is reduced: the record behind ``wakeledger inspect``."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from types import MappingProxyType
from typing import Any

from wakeledger.ledger.rows import Check

#: Version of the document `Inspection.to_dict` makes.
INSPECTION_FORMAT = 1


@dataclass(frozen=True)
class ChannelSummary:
    """One measured variable of the survey.

    Attributes
    ----------
    name : str
        Name of the variable.
    unit : str
        UDUNITS string of the values below.
    minimum, maximum : float
        Range of its values over all points.
    noise : float
        Standard deviation of the point-to-point scatter, estimated from the data; NaN where it cannot be.
    missing : int
        Number of points without a value.
    """

    name: str
    unit: str
    minimum: float
    maximum: float
    noise: float = math.nan
    missing: int = 0


@dataclass(frozen=True)
class EdgeState:
    """What is found along one edge of the window.

    Attributes
    ----------
    side : {"port", "starboard", "lower", "upper"}
        Which edge.
    total_pressure_loss : float
        Largest loss along it over the dynamic pressure, inside the wake region; zero where the region does not reach
        the edge, NaN where it was not measured.
    vorticity : float
        Largest absolute axial vorticity along it over the largest in the plane, inside the wake region; zero where the
        region does not reach the edge, NaN where it was not measured.
    """

    side: str
    total_pressure_loss: float = math.nan
    vorticity: float = math.nan


@dataclass(frozen=True)
class Inspection:
    """A survey as read and gridded, not reduced.

    Attributes
    ----------
    title : str
        Title of the survey.
    source : str
        Name of the data file.
    points : int
        Number of points read.
    arrangement : str
        How they lie ("tensor grid, uniform", "scattered", ...).
    shape : tuple of int
        Points of the plane along y and z, (ny, nz).
    spacing : tuple of float
        Spacing of the plane along y and z, m.
    window : tuple of float
        Its outermost points, m: y from, y to, z from, z to.
    station : float
        Distance behind the trailing edge, m; NaN where it is not given.
    coverage : float
        Part of the window's cells that hold a measurement.
    flags : mapping of str to int
        Number of cells by quality flag (`wakeledger.core.flags.decode`).
    channels : tuple of ChannelSummary
        The measured variables.
    edges : tuple of EdgeState
        What is found along the window's edges.
    checks : tuple of Check
        Checks that can be made without reducing.
    recommendations : tuple of str
        Sentences that say what to do.
    notes : tuple of str
        Sentences about choices that were made in reading.
    reference : mapping of str to float
        The undisturbed stream, SI.
    test : mapping of str to str
        The ``[test]`` table of the survey file.
    """

    title: str
    source: str
    points: int
    arrangement: str
    shape: tuple[int, int]
    spacing: tuple[float, float]
    window: tuple[float, float, float, float]
    coverage: float
    station: float = math.nan
    flags: Mapping[str, int] = field(default_factory=lambda: MappingProxyType({}))
    channels: tuple[ChannelSummary, ...] = ()
    edges: tuple[EdgeState, ...] = ()
    checks: tuple[Check, ...] = ()
    recommendations: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    reference: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    test: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    @property
    def failed(self) -> bool:
        """Whether any check failed."""
        return any(check.verdict == "fail" for check in self.checks)

    def to_dict(self) -> dict[str, Any]:
        """The record as plain dict, list, str, int, float and None; NaN becomes None.

        Returns
        -------
        dict
            ``format`` and the attributes.
        """
        mappings = {name: dict(getattr(self, name)) for name in ("flags", "reference", "test")}
        parts = {name: [asdict(part) for part in getattr(self, name)] for name in ("channels", "edges", "checks")}
        values = {key: getattr(self, key) for key in self.__dataclass_fields__}
        plain = _plain(values | mappings | parts)
        return {"format": INSPECTION_FORMAT, **plain}


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(entry) for entry in value]
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    return value
