"""Derivatives of a point's flow state by what was measured there: in closed form where it is simple, else by steps.

Where the velocity has the direction of three measured components and, from total and static pressure, the speed
V² = 2 (H − p)/ρ,

    velocity = V R d/|d|,    ∂velocity/∂d_i = V/|d| (R_i − velocity (Rᵀ velocity)_i/V²),
    ∂velocity/∂H = −∂velocity/∂p = velocity/(2 (H − p)),

and an angle turns every velocity alike. For all else the chain's own state, shifted by a small step at all points at
once, gives the derivatives: each point's state depends on what was measured at that point alone.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from wakeledger.confidence.sources import InputLayout
from wakeledger.core.grid import Array
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.state import State, absolute
from wakeledger.run.chain.chain import Chain
from wakeledger.stream.reference import Reference

#: Step of a point's own derivative, as a share of the range of its input: errors of 1e-10 from curvature and rounding.
_STEP = 1e-5
#: The same for flow angles, rad, and for errors counted in standard uncertainties.
_ANGLE_STEP, _SIGMA_STEP = 1e-5, 1e-3
_FIELDS = ("u", "v", "w", "total_pressure", "static_pressure", "density", "temperature")
_ANGLES = ("pitch", "yaw", "roll")

Slopes = dict[str, Array]


class StateSlopes:
    """Derivatives of the state of every point by its inputs, at given errors.

    Parameters
    ----------
    chain : Chain
        The survey.
    errors : mapping of str to ndarray
        Errors under which the derivatives are wanted.
    """

    def __init__(self, chain: Chain, errors: Mapping[str, Array]) -> None:
        self.chain, self.errors = chain, errors
        self.reference: Reference = chain.reference(errors)
        names = set(chain.points.channels)
        moved = any(name.startswith("position.") for name in errors)
        # Angles may err from point to point.
        turned = any(name.startswith("angle.") and np.ndim(error) for name, error in errors.items())
        self.plain = chain.traverse is None and not moved and not turned
        self.pressures = (
            self.plain
            and chain.settings.primary == "total_pressure"
            and not self.reference.compressible
            and {"u", "v", "w", "total_pressure", "static_pressure"} <= names
        )
        if self.plain:
            self.state: State = chain.state(self.reference, errors)
            offsets = zip(_ANGLES, chain.settings.offsets, strict=True)
            self.angles = [offset + float(errors.get(f"angle.{name}", 0.0)) for name, offset in offsets]
        if self.pressures:
            self._prepare()

    def _prepare(self) -> None:
        """Sizes that the components of the direction and the pressures are divided by."""
        state, channels = self.state, self.chain.points.channels
        self.velocity = (state.u, state.v, state.w)
        self.rotation = rotation_matrix(*self.angles)
        self.scale = {
            name: float(np.diff(absolute(np.array([0.0, 1.0]), channels[name], self.reference))[0])
            for name in ("u", "v", "w", "total_pressure", "static_pressure")
        }
        square = sum(
            (self.scale[name] * (channels[name].values + self.errors.get(f"plane.{name}", 0.0))) ** 2 for name in "uvw"
        )
        self.speed = np.sqrt(state.u**2 + state.v**2 + state.w**2)
        with np.errstate(invalid="ignore", divide="ignore"):
            self.by_length = self.speed / np.sqrt(square)
            assert state.total_pressure is not None and state.static_pressure is not None
            self.per_pressure = 0.5 / (state.total_pressure - state.static_pressure)

    def __call__(self, name: str, layout: InputLayout, wanted: frozenset[str]) -> Slopes:
        """Derivatives of the fields of the state that are wanted by one input, shape (n,) each; zeros are left out.

        Parameters
        ----------
        name : str
            The input.
        layout : InputLayout
            Its layout.
        wanted : frozenset of str
            Names of fields.

        Returns
        -------
        dict of str to ndarray, shape (n,)
            Points without a state have no derivative: zero.
        """
        room, _, channel = name.partition(".")
        with np.errstate(invalid="ignore", divide="ignore"):
            if room == "angle" and self.plain:
                found = self._by_angle(channel, wanted)
            elif room == "plane" and self.pressures and channel in ("total_pressure", "static_pressure"):
                found = self._by_pressure(channel, wanted)
            elif room == "plane" and self.pressures and channel in ("u", "v", "w"):
                found = self._by_direction(channel, wanted)
            else:
                found = self._by_steps(name, layout, wanted)
        for slope in found.values():
            if not np.isfinite(slope.sum()):
                np.copyto(slope, 0.0, where=~np.isfinite(slope))
        return {field: slope for field, slope in found.items() if slope.any()}

    def _by_angle(self, angle: str, wanted: frozenset[str]) -> Slopes:
        at = _ANGLES.index(angle)
        turned = []
        for sign in (1.0, -1.0):
            angles = list(self.angles)
            angles[at] += sign * _ANGLE_STEP
            turned.append(rotation_matrix(*angles))
        turn = (turned[0] - turned[1]) / (2 * _ANGLE_STEP) @ rotation_matrix(*self.angles).T
        velocity = (self.state.u, self.state.v, self.state.w)
        return {
            field: sum((turn[i, j] * velocity[j] for j in range(3)), np.zeros(()))
            for i, field in enumerate("uvw")
            if field in wanted
        }

    def _by_pressure(self, channel: str, wanted: frozenset[str]) -> Slopes:
        size = self.scale[channel]
        share = (size if channel == "total_pressure" else -size) * self.per_pressure
        found: Slopes = {
            field: share * velocity for field, velocity in zip("uvw", self.velocity, strict=True) if field in wanted
        }
        if channel in wanted:
            found[channel] = np.where(np.isfinite(self.speed), size, 0.0)
        return found

    def _by_direction(self, channel: str, wanted: frozenset[str]) -> Slopes:
        axes = self.chain.points.axes
        letter = "uvw".index(channel)
        at = [int(np.argmax(np.abs(axis))) for axis in axes].index(letter)
        own = self.rotation[:, at]
        share = np.sign(axes[at, letter]) * self.scale[channel] * self.by_length
        along = sum((own[k] * self.velocity[k] for k in range(3)), np.zeros(())) / self.speed**2
        return {field: share * (own[i] - self.velocity[i] * along) for i, field in enumerate("uvw") if field in wanted}

    def _by_steps(self, name: str, layout: InputLayout, wanted: frozenset[str]) -> Slopes:
        step = _step(name, layout)
        here = np.asarray(self.errors.get(name, 0.0 if layout.is_scalar else np.zeros(layout.size)))
        up, down = (self.chain.state(self.reference, {**self.errors, name: here + sign * step}) for sign in (1.0, -1.0))
        found = {}
        for field in _FIELDS:
            above, below = getattr(up, field), getattr(down, field)
            if field in wanted and above is not None and below is not None:
                found[field] = (above - below) * (0.5 / step)
        return found


def _step(name: str, layout: InputLayout) -> float:
    room = name.split(".", 1)[0]
    if room == "angle":
        return _ANGLE_STEP
    if room in ("calibration", "correction"):
        return _SIGMA_STEP
    if room == "position":
        return 1e-6
    values = np.asarray(layout.nominal, float)
    finite = values[np.isfinite(values)]
    spread = float(np.ptp(finite)) if finite.size else 0.0
    return _STEP * (spread or float(np.abs(finite).max(initial=0.0)) or 1.0)
