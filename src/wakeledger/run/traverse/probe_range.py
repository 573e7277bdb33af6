"""The Mach or Reynolds number that a probe met in a survey, against those it was calibrated at."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.intake.probe.pitot import PitotReduction
from wakeledger.intake.probe.reduction import HoleReduction
from wakeledger.run.chain.chain import Chain
from wakeledger.stream.gas import mach_from_pressure_ratio, sutherland_viscosity
from wakeledger.stream.reference import Reference

_WORDS = {"mach": "Mach number", "reynolds": "tip Reynolds number"}
#: A number is outside the calibrated ones if it is further away than this: of Mach as it is, of Reynolds as a share.
_NEAR = {"mach": 0.015, "reynolds": 0.05}


@dataclass(frozen=True)
class ProbeRange:
    """Where one probe was used, against where it was calibrated.

    Attributes
    ----------
    name : {"mach", "reynolds"}
        Which number the calibration tells.
    calibrated, met : (float, float)
        Least and largest of the calibration and of the points.
    below, above : float
        Share of the points below the calibration's least and above its largest number.
    """

    name: str
    calibrated: tuple[float, float]
    met: tuple[float, float]
    below: float
    above: float

    @property
    def outside(self) -> float:
        """Share of the points outside the calibrated numbers."""
        return self.below + self.above

    @property
    def sentence(self) -> str:
        """What was found."""
        met = f"the {_WORDS[self.name]} ({_spread(self.met)})"
        calibrated = f"({_spread(self.calibrated)})"
        if not self.outside:
            return f"At the points {met} is within the calibration's {calibrated}."
        parts = [
            f"at {share:.0%} of the points it is {side} the calibration's {calibrated}"
            for side, share in (("below", self.below), ("above", self.above))
            if share
        ]
        return f"At the points {met} leaves the calibrated range: {' and '.join(parts)}, where the nearest set holds."


def _spread(ends: tuple[float, float]) -> str:
    low, high = (f"{value:.3g}" for value in ends)
    return low if low == high else f"{low} to {high}"


def probe_range(chain: Chain) -> ProbeRange | None:
    """The number that the calibration tells, of the probe that leaves it furthest.

    Parameters
    ----------
    chain : Chain
        The survey.

    Returns
    -------
    ProbeRange or None
        None where no calibration tells a Mach or Reynolds number, or that of the points is unknown.
    """
    found = [one for one in (_of_tube(*each) for each in _tubes(chain)) if one is not None]
    return max(found, key=lambda one: one.outside, default=None)


def tip_notes(chain: Chain) -> list[str]:
    """Sentences about the Reynolds number of the probes' tips and the calibrated range."""
    found = []
    reference = chain.reference()
    for diameter in sorted({one.tip_diameter for one, _, _, _ in _tubes(chain) if math.isfinite(one.tip_diameter)}):
        if math.isfinite(reference.temperature):
            number = reference.density * reference.speed * diameter / sutherland_viscosity(reference.temperature)
            told = any(
                one.calibration.table.level_name == "reynolds"
                for one, _, _, _ in _tubes(chain)
                if one.tip_diameter == diameter
            )
            other = "" if told else "; the calibration does not tell its own, so the two cannot be compared"
            found.append(
                f"The Reynolds number of the {1e3 * diameter:.3g} mm tip is {number:.3g} in the stream{other}."
            )
        else:
            found.append(
                "The Reynolds number of the tip is unknown: [reference] has no temperature, which the viscosity needs."
            )
    ranges = probe_range(chain)
    return found if ranges is None else [*found, ranges.sentence]


def _tubes(chain: Chain) -> list[tuple[HoleReduction, Array, Array, Reference]]:
    """Calibrated tubes with total and static pressure at their points."""
    if chain.traverse is None:
        return []
    reference = chain.reference()
    values = {name: channel.values for name, channel in chain.points.channels.items()}
    pressures = chain.traverse.pressures(values, reference)
    found = []
    for tube in chain.traverse.tubes:
        if isinstance(tube.reduction, PitotReduction):
            continue
        at = slice(None) if tube.points is None else tube.points
        reading = tube.reduction.read({name: array[at] for name, array in pressures.items()}, reference)
        found.append((tube.reduction, reading.total, reading.static, reference))
    return found


def _of_tube(reduction: HoleReduction, total: Array, static: Array, reference: Reference) -> ProbeRange | None:
    name = reduction.calibration.table.level_name
    if name is None:
        return None
    number = _number(name, reduction.tip_diameter, total, static, reference)
    number = number[np.isfinite(number)]
    if not number.size:
        return None
    levels = reduction.calibration.levels
    low, high = float(levels.min()), float(levels.max())
    near = _NEAR[name] if name == "mach" else 0.0
    share = _NEAR[name] if name == "reynolds" else 0.0
    return ProbeRange(
        name,
        (low, high),
        (float(number.min()), float(number.max())),
        float(np.mean(number < low * (1 - share) - near)),
        float(np.mean(number > high * (1 + share) + near)),
    )


def _number(name: str, diameter: float, total: Array, static: Array, reference: Reference) -> Array:
    """Mach number, or Reynolds number of the tip, at points; NaN where it is unknown."""
    with np.errstate(invalid="ignore", divide="ignore"):
        speed = np.sqrt(2.0 * (total - static) / reference.density)
        if name == "reynolds":
            if not math.isfinite(reference.temperature):
                return np.full(total.shape, np.nan)
            return np.asarray(reference.density * speed * diameter / sutherland_viscosity(reference.temperature))
        if reference.static_pressure > 0:
            return mach_from_pressure_ratio(static / total, gamma=reference.gamma)
        return np.asarray(reference.mach * speed / reference.speed)
