"""What a survey would know before it is made: the record behind ``wakeledger plan``."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from types import MappingProxyType
from typing import Any, Literal

import numpy as np

from wakeledger.core.grid import Array

#: Version of the document `Plan.to_dict` makes.
PLAN_FORMAT = 1

Kind = Literal["random", "systematic", "numerical"]


@dataclass(frozen=True)
class SetUp:
    """One way to make the survey, and what it would know.

    Attributes
    ----------
    spacing, window : float
        Distance of the points, and from the wake to the edge of the window, m.
    probe : str
        Noise of the probe, in words.
    velocity_noise, total_pressure_noise, static_pressure_noise : float
        The same, m/s and Pa.
    angle_accuracy, reference_accuracy, density_accuracy, reference_drift : float
        Standard uncertainties: rad, parts of the dynamic pressure and of the density, Pa; 0 where none was given.
    repeats : int
        How often the whole survey is made.
    lines_y, lines_z, points : int
        Points along y and z, and of one survey.
    minutes : float
        Of all repeats together; NaN where neither settling time nor traverse speed is given.
    expanded_uncertainty : float
        Of the row (95 %), in the plan's unit: 1.96 times the root mean square of what such surveys are off the exact
        row; NaN where no such survey can be reduced.
    stated : float
        What the ledger of such a survey would state for it, with its numerical terms; NaN where unknown.
    failing : tuple of str
        Checks that would fail.
    reason : str or None
        Why no such survey can be reduced.
    """

    spacing: float
    window: float
    probe: str
    velocity_noise: float
    total_pressure_noise: float
    static_pressure_noise: float
    angle_accuracy: float
    reference_accuracy: float
    density_accuracy: float
    reference_drift: float
    repeats: int
    lines_y: int
    lines_z: int
    points: int
    minutes: float
    expanded_uncertainty: float
    stated: float = math.nan
    failing: tuple[str, ...] = ()
    reason: str | None = None


@dataclass(frozen=True)
class PlanLine:
    """One source's part in the uncertainty of the set-up that was chosen.

    Attributes
    ----------
    source : str
        Name of the source or numerical term.
    kind : {"random", "systematic", "numerical"}
        Whether repeats make it smaller (random), or not.
    standard_uncertainty : float
        In the plan's unit, all repeats together.
    share : float
        Its square over that of the whole.
    """

    source: str
    kind: Kind
    standard_uncertainty: float
    share: float


@dataclass(frozen=True)
class Improvement:
    """One thing done better.

    Attributes
    ----------
    what : str
        What.
    expanded_uncertainty : float
        Of the row afterwards, in the plan's unit.
    gain : float
        By how much that is less.
    minutes : float
        What it takes more; 0 for a better instrument, NaN where unknown.
    points : int
        Points that it takes more, all repeats together; 0 for a better instrument.
    """

    what: str
    expanded_uncertainty: float
    gain: float
    minutes: float
    points: int = 0

    @property
    def gain_per_minute(self) -> float:
        """Gain over the minutes it takes more; NaN where it takes none."""
        return self.gain / self.minutes if self.minutes > 0 else math.nan


@dataclass(frozen=True, eq=False)
class Plan:
    """A planned survey.

    Attributes
    ----------
    title : str
        Of the file.
    row, unit : str
        What is to be known; the unit of every uncertainty here, ``counts`` or a UDUNITS string.
    value : float
        What the row is expected to be, in that unit.
    target : float
        Largest expanded uncertainty wanted.
    time_limit : float
        Most minutes allowed; infinite where there is no limit.
    reached : bool
        Whether some set-up within the time limit reaches the target.
    chosen : SetUp or None
        The one that takes the fewest minutes to reach it, else the one that knows most; None where no survey can be
        reduced at all.
    beyond : SetUp or None
        The cheapest one that reaches the target in more than the time limit, where none does within it.
    expanded_uncertainty : float
        Of the row with the chosen set-up (95 %): the declared sources by a full Monte Carlo, and what surveys without
        noise are off the exact row.
    stated : float
        What the ledger of such a survey would state: the declared sources, and the numerical terms in place of what it
        cannot know, being off the exact row.
    non_linearity : float
        Standard uncertainty of the declared sources by the full Monte Carlo over that from unit errors, less 1.
    left : float
        Mean error of the chosen set-up without any noise, in the plan's unit.
    draws : int
        Of that Monte Carlo.
    budget : tuple of PlanLine
        Of the chosen set-up, the largest first.
    terms : tuple of PlanLine
        Numerical terms that the ledger of the chosen set-up would state, the largest first; shares are those of
        `stated`. NaN for those that cannot be had, which leave it unknown.
    improvements : tuple of Improvement
        The one that gains most first.
    by_probe : tuple of SetUp
        The cheapest set-up with each probe; the one that knows most where it does not reach the target.
    spacings, windows : tuple of float
        Axes of the map, m.
    probes : tuple of str
        Third axis of the map.
    uncertainty : ndarray, shape (probes, windows, spacings)
        Expanded uncertainty with everything else as chosen; NaN where no survey can be reduced.
    failing : ndarray of bool, same shape
        Where a check would fail.
    minutes : ndarray, shape (windows, spacings)
        With the repeats chosen.
    tried : int
        Number of set-ups compared.
    notes : tuple of str
        Sentences about what was assumed.
    inputs, provenance : mapping of str to str
        SHA-256 of the files; versions, time and command line.
    """

    title: str
    row: str
    unit: str
    value: float
    target: float
    time_limit: float
    reached: bool
    chosen: SetUp | None
    beyond: SetUp | None
    expanded_uncertainty: float
    stated: float
    non_linearity: float
    left: float
    draws: int
    budget: tuple[PlanLine, ...]
    terms: tuple[PlanLine, ...]
    improvements: tuple[Improvement, ...]
    by_probe: tuple[SetUp, ...]
    spacings: tuple[float, ...]
    windows: tuple[float, ...]
    probes: tuple[str, ...]
    uncertainty: Array
    failing: Array
    minutes: Array
    tried: int
    notes: tuple[str, ...] = ()
    inputs: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    provenance: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    def to_dict(self) -> dict[str, Any]:
        """The document of ``plan.json``: plain values, SI where no unit is named, None where something is unknown."""
        entries = {name: getattr(self, name) for name in self.__dataclass_fields__}
        for name in ("chosen", "beyond"):
            entries[name] = None if entries[name] is None else asdict(entries[name])
        for name in ("budget", "terms", "by_probe"):
            entries[name] = [asdict(one) for one in entries[name]]
        entries["improvements"] = [asdict(one) | {"gain_per_minute": one.gain_per_minute} for one in self.improvements]
        document: dict[str, Any] = {"format": PLAN_FORMAT, **_plain(entries)}
        return document


def _plain(value: Any) -> Any:
    """Arrays and tuples as lists, numbers as Python's own, what is not finite as None."""
    if isinstance(value, Mapping):
        return {str(key): _plain(one) for key, one in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if isinstance(value, bool | str) or value is None:
        return value
    if isinstance(value, int | np.integer):
        return int(value)
    return float(value) if math.isfinite(value) else None
