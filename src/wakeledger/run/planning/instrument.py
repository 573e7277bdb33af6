"""Probes to choose from, and what the noise of their readings makes of the flow variables."""

from __future__ import annotations

import math
from dataclasses import dataclass

from wakeledger.core.errors import SurveyError
from wakeledger.run.config.plan import PlanTable
from wakeledger.stream.reference import Reference

#: Slope of a hole's pressure with the angle of the stream in dynamic pressures per radian, and the outer holes'
#: pressure coefficient in a level stream: potential flow about a sphere, outer holes 45 degrees off the axis.
_SLOPE, _OUTER = 9 / 4, -1 / 8


@dataclass(frozen=True)
class Probe:
    """Standard deviation of what one reading at one point says of the flow.

    Attributes
    ----------
    velocity : float
        Of each component, m/s.
    total_pressure, static_pressure : float
        Pa.
    hole : float
        Of each hole, Pa; NaN where it is not what was given.
    """

    velocity: float
    total_pressure: float
    static_pressure: float
    hole: float = math.nan

    @property
    def label(self) -> str:
        """Its noise as it is printed."""
        if math.isfinite(self.hole):
            return f"{self.hole:.3g} Pa at each hole"
        return f"{self.velocity:.3g} m/s, {self.total_pressure:.3g} Pa"


def probes(plan: PlanTable, reference: Reference, path: object = None) -> tuple[Probe, ...]:
    """The probes of a plan, the best one first.

    Parameters
    ----------
    plan : PlanTable
        The plan.
    reference : Reference
        The stream.
    path : path-like, optional
        The file, for messages.

    Returns
    -------
    tuple of Probe

    Raises
    ------
    SurveyError
        If two probes are the same.
    """
    count = plan.instruments
    found: list[Probe] = []
    for k in range(count):
        if plan.hole_noise is not None:
            found.append(of_holes(plan.hole_noise[k], reference))
            continue
        given = (plan.noise, plan.total_pressure_noise, plan.static_pressure_noise or plan.total_pressure_noise)
        velocity, total, static = (values[k if len(values) > 1 else 0] for values in given if values is not None)
        found.append(Probe(velocity, total, static))
    if len(set(found)) < count:
        raise SurveyError("two probes are the same", file=path, place="[plan] noise", remedy="give each once")
    return tuple(sorted(found, key=lambda probe: (probe.velocity, probe.total_pressure, probe.static_pressure)))


def of_holes(noise: float, reference: Reference) -> Probe:
    """A five-hole probe in a stream that meets it nearly head-on.

    Parameters
    ----------
    noise : float
        Standard deviation of each hole's reading, Pa.
    reference : Reference
        The stream.

    Returns
    -------
    Probe

    Notes
    -----
    With holes 45 degrees off the axis of a sphere an angle is (p4 − p5)/(2 · 9/4 q), the total pressure is p1, and the
    static pressure p1 − (p1 − p̄)/(9/8), p̄ being the mean of the outer four.
    """
    q = reference.dynamic_pressure
    angle = math.sqrt(2) * noise / (2 * _SLOPE * q)
    share = 1 / (1 - _OUTER)
    static = noise * math.hypot(1 - share, share / 2)
    return Probe(reference.speed * angle, noise, static, noise)
