"""What can be said of a survey before it is reduced: the record behind ``wakeledger inspect``."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from types import MappingProxyType
from typing import Any, Literal

from wakeledger.ledger.plane_map import SYMBOLS, PlaneMap
from wakeledger.ledger.rows import Check

Action = Literal["continue", "widen", "refine", "repeat", "check", "move_on"]

#: Version of the document `Inspection.to_dict` makes.
INSPECTION_FORMAT = 2


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
    declared_noise : float
        Standard deviation of its random errors as the survey file's sources say; NaN where none acts on it.
    repeatability : float
        Standard deviation of its values at one place, from places measured more than once; NaN where there are none.
    """

    name: str
    unit: str
    minimum: float
    maximum: float
    noise: float = math.nan
    missing: int = 0
    declared_noise: float = math.nan
    repeatability: float = math.nan


@dataclass(frozen=True)
class AngleRange:
    """Range of a flow angle over the points, and where its ends are.

    Attributes
    ----------
    name : {"pitch", "yaw"}
        Pitch is atan2(w, u), positive for upwash; yaw is asin(v/|V|), positive towards starboard; in wind axes.
    minimum, maximum : float
        Its range, rad.
    minimum_at, maximum_at : (float, float)
        Position of the smallest and the largest value, y and z, m.
    """

    name: str
    minimum: float
    maximum: float
    minimum_at: tuple[float, float]
    maximum_at: tuple[float, float]


@dataclass(frozen=True)
class Repeats:
    """Places that were measured more than once.

    Attributes
    ----------
    places : int
        Number of such places.
    points : int
        Number of usable points taken there.
    revisited : int
        Number of places that were left and visited again later.
    """

    places: int = 0
    points: int = 0
    revisited: int = 0

    @property
    def degrees_of_freedom(self) -> int:
        """Degrees of freedom of the repeatability of each variable: points less places."""
        return self.points - self.places


@dataclass(frozen=True)
class Recommendation:
    """One thing to do next.

    Attributes
    ----------
    action : {"continue", "widen", "refine", "repeat", "check", "move_on"}
        Go on with the traverse the way it runs; measure beyond an edge; measure more closely somewhere; measure places
        again; look into something; take the next point.
    message : str
        A sentence that says what, where and why.
    side : {"port", "starboard", "lower", "upper"} or None
        On which side to go on.
    distance : float
        How far beyond the edge, m; NaN where it does not apply or is not known.
    spacing : float
        How closely to measure, m; NaN where it does not apply.
    places : tuple of (float, float)
        Where, y and z, m: the points to repeat, or the centre of what is to be refined.
    """

    action: Action
    message: str
    side: str | None = None
    distance: float = math.nan
    spacing: float = math.nan
    places: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True)
class EdgeState:
    """What is found along one edge of the window, or at one end of a line traverse.

    Attributes
    ----------
    side : {"port", "starboard", "lower", "upper"}
        Which edge.
    total_pressure_loss : float
        Largest loss in the three lines of cells along it over the dynamic pressure, inside the wake region; zero where
        the region does not reach the edge, NaN where it was not measured.
    vorticity : float
        Largest absolute axial vorticity there over the largest in the plane, inside the wake region; zero where the
        region does not reach the edge, NaN where it was not measured.
    loss_share, vorticity_share : float
        Share of the wake region's absolute loss, and vorticity, in the last line of measured points; NaN where it was
        not measured.
    quiet : bool
        Whether the wake does not touch the edge, by the limits of the edge checks. Patches of the wake region that
        stand apart and hold less than a twentieth of the loss and of the circulation do not count here and in the
        shares: they are rather noise.
    missing_reach : float
        How far beyond the edge the wake is expected to go on, m, with room for a quiet edge; NaN where it is quiet.
    message : str
        The same in a sentence.
    """

    side: str
    total_pressure_loss: float = math.nan
    vorticity: float = math.nan
    loss_share: float = math.nan
    vorticity_share: float = math.nan
    quiet: bool = True
    missing_reach: float = math.nan
    message: str = ""


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
    recommendations : tuple of Recommendation
        What to do next, the most urgent first.
    notes : tuple of str
        Sentences about choices that were made in reading.
    reference : mapping of str to float
        The undisturbed stream, SI.
    test : mapping of str to str
        The ``[test]`` table of the survey file.
    angles : tuple of AngleRange
        Ranges of the flow angles; empty where no direction was measured.
    repeats : Repeats
        Places measured more than once.
    missing_places : tuple of (float, float)
        Places without a usable measurement, y and z, m, those in the wake region first.
    missing_in_wake : int
        How many of them lie in the wake region.
    map : PlaneMap or None
        The places as characters.
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
    recommendations: tuple[Recommendation, ...] = ()
    notes: tuple[str, ...] = ()
    reference: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    test: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    angles: tuple[AngleRange, ...] = ()
    repeats: Repeats = Repeats()
    missing_places: tuple[tuple[float, float], ...] = ()
    missing_in_wake: int = 0
    map: PlaneMap | None = None

    @property
    def failed(self) -> bool:
        """Whether any check failed."""
        return any(check.verdict == "fail" for check in self.checks)

    def to_dict(self) -> dict[str, Any]:
        """The record as plain dict, list, str, int, float and None; NaN becomes None.

        Returns
        -------
        dict
            ``format`` and the attributes; the map with a ``legend``.
        """
        mappings = {name: dict(getattr(self, name)) for name in ("flags", "reference", "test")}
        lists = ("channels", "edges", "checks", "recommendations", "angles")
        parts: dict[str, Any] = {name: [asdict(part) for part in getattr(self, name)] for name in lists}
        parts["repeats"] = asdict(self.repeats) | {"degrees_of_freedom": self.repeats.degrees_of_freedom}
        parts["map"] = None if self.map is None else asdict(self.map) | {"legend": dict(SYMBOLS)}
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
