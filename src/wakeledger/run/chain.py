"""The whole chain from raw points to rows as one function of data, settings and errors.

The reduction, its Monte Carlo draws, its numerical terms and whatever plans or compares surveys all run this function:
nothing is computed one way for the value and another way for its uncertainty.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.errors import InputError, SurveyError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.points import Points
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.probe.traverse import Traverse, correction_input
from wakeledger.intake.state import State, point_state
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField, near_field
from wakeledger.physics.fields.outer_flow import crossflow_offset, induced_crossflow, loss_zero
from wakeledger.physics.fields.pressure import crossflow_pressure
from wakeledger.physics.fields.wake_region import Mask, WakeRegion, region_of, wake_region
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, profile_integrand
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.entropy_area import entropy_profile_drag
from wakeledger.physics.methods.momentum_area import momentum_drag
from wakeledger.physics.methods.residual import residual_drag
from wakeledger.physics.methods.vorticity_area import VorticityForces, vorticity_forces
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.vortices.vortex_sum import evaluate as evaluate_vortex_sum
from wakeledger.run.outputs import OUTPUTS, ROWS, WITHOUT_CROSSFLOW, coefficient_of, estimate_of
from wakeledger.run.reduction import Frozen, Reduction, Settings, Variation
from wakeledger.run.shear import Displacement
from wakeledger.stream.reference import Reference, resolve_reference

#: What of a flow state changes with the place.
STATE: tuple[str, ...] = ("u", "v", "w", "total_pressure", "static_pressure")


_NO_ERRORS: Mapping[str, Array] = MappingProxyType({})
_AS_FOUND = Variation()


@dataclass(frozen=True)
class Chain:
    """Data and settings of one survey, ready to be reduced under any errors.

    Attributes
    ----------
    points : Points
        The points as read.
    gridding : Gridding
        How they come onto the uniform grid.
    settings : Settings
        The survey's settings.
    frozen : Frozen
        What was found once on the nominal plane.
    gradients : mapping of str to ndarray, shape (2, n)
        Derivative of each channel along y and z at the points, for errors of position, or of ``state.u`` and so on
        where several tubes took the points; empty where there are none.
    traverse : Traverse or None
        How hole pressures become flow states; None where flow variables were measured.
    displacement : Displacement or None
        Of the probe in shear; None where it is not corrected.
    """

    points: Points
    gridding: Gridding
    settings: Settings
    frozen: Frozen = field(default_factory=Frozen)
    gradients: Mapping[str, Array] = field(default_factory=lambda: MappingProxyType({}))
    traverse: Traverse | None = None
    displacement: Displacement | None = None

    @property
    def measured(self) -> frozenset[str]:
        """Names of the variables measured in the flow."""
        names = frozenset(self.points.channels)
        return names if self.traverse is None else names & {"density", "total_temperature"}

    def with_frozen_shear(self) -> Chain:
        """The same survey with the shear that displaces the probe frozen on the nominal plane."""
        if self.displacement is None:
            return self
        flow = replace(self, displacement=None).flow(self.reference())
        speed = np.sqrt(flow.u**2 + flow.v**2 + flow.w**2)
        return replace(self, displacement=self.displacement.frozen_on(speed))

    def with_gridding(self, gridding: Gridding) -> Chain:
        """The same survey on another grid, without what was found on this one."""
        frozen = replace(self.frozen, near_field=None, cuts=None, parts=None, region=None)
        displacement = None if self.displacement is None else self.displacement.frozen_on(None)
        return replace(self, gridding=gridding, frozen=frozen, displacement=displacement)

    def reference(self, errors: Mapping[str, Array] = _NO_ERRORS) -> Reference:
        """The undisturbed stream under errors of its inputs."""
        given = dict(self.settings.reference)
        for name in given:
            error = errors.get(f"reference.{name}")
            if error is not None:
                given[name] += float(error)
        try:
            return resolve_reference(given, compressible=self.settings.compressible)
        except InputError as error:
            if not errors:
                raise
            raise SurveyError(
                f"an error drawn for [reference] gives no stream ({error.found})",
                place="[[uncertainty.source]]",
                remedy="give what acts on [reference] a smaller standard uncertainty",
            ) from error

    def state(self, reference: Reference, errors: Mapping[str, Array] = _NO_ERRORS) -> State:
        """The flow state at every point, in wind axes, under errors of the points, flow angles and positions."""
        values = {}
        for name, channel in self.points.channels.items():
            array = channel.values
            error = errors.get(f"plane.{name}")
            if error is not None:
                array = array + error
            for axis, coordinate in enumerate(("y", "z")):
                shift = errors.get(f"position.{coordinate}")
                if shift is not None and name in self.gradients:
                    # A point believed at y + δ was measured at y: the field read at its nominal place changes by −δ ∂f.
                    array = array - shift * self.gradients[name][axis]
            values[name] = array
        if self.traverse is not None:
            # Errors of angles are those of the probe's mounting.
            state = self.traverse.state(values, reference, errors, rotation=rotation_matrix(*self.settings.offsets))
            return self._elsewhere(state, errors)
        pitch, yaw, roll = (
            offset + errors.get(f"angle.{name}", 0.0)
            for name, offset in zip(("pitch", "yaw", "roll"), self.settings.offsets, strict=True)
        )
        turn = rotation_matrix(pitch, yaw, roll)
        return point_state(
            values,
            self.points.channels,
            reference,
            primary=self.settings.primary,
            axes=self.points.axes,
            rotation=np.moveaxis(turn, 0, -1) if turn.ndim > 2 else turn,
        )

    def _elsewhere(self, state: State, errors: Mapping[str, Array]) -> State:
        """States of a rake under errors of position; the readings of its tubes have no common slopes."""
        moved = {name: self.gradients.get(f"state.{name}") for name in STATE}
        for axis, coordinate in enumerate(("y", "z")):
            shift = errors.get(f"position.{coordinate}")
            if shift is not None:
                changes = {
                    name: getattr(state, name) - shift * slope[axis]
                    for name, slope in moved.items()
                    if slope is not None
                }
                state = replace(state, **changes)
        return state

    def flow(self, reference: Reference, errors: Mapping[str, Array] = _NO_ERRORS) -> Flow:
        """The gridded plane under errors of the inputs.

        The primary variables are gridded and the dependent one follows from them on the grid, so that H, p and u are
        consistent at every place.
        """
        state = self.state(reference, errors)
        grid = self.gridding.grid
        apply = self.gridding.apply
        v, w = apply(state.v), apply(state.w)
        u = apply(state.u)
        density: Any = reference.density
        total_temperature: Any = np.nan
        measured_total = state.total_pressure if "total_pressure" in self.measured else None
        if (
            state.total_pressure is not None
            and state.static_pressure is not None
            and (self.settings.primary == "total_pressure" or reference.compressible)
        ):
            fields = [u, v, w, apply(state.total_pressure), apply(state.static_pressure)]
            if reference.compressible:
                fields += [apply(state.density), apply(state.temperature)]
            if self.displacement is not None:
                error = float(errors.get(correction_input("displacement"), 0.0))
                fields = list(self.displacement.undone(np.stack(fields), grid, error=error))
            u, v, w, total, static = fields[:5]
            if reference.compressible:
                density, temperature = fields[5:]
                warming = (u**2 + v**2 + w**2) / (2 * reference.heat_capacity)
                total_temperature = temperature + warming
                if self.settings.primary == "velocity" and measured_total is not None:
                    static = total * (1 - warming / total_temperature) ** (
                        reference.heat_capacity / reference.gas_constant
                    )
                    density = static / (reference.gas_constant * (total_temperature - warming))
            else:
                u = _axial(2 * (total - static) / reference.density - v**2 - w**2, u)
        else:
            kinetic = 0.5 * reference.density * (u**2 + v**2 + w**2)
            # A measured total pressure comes first: a biased static pressure then costs almost nothing.
            if measured_total is not None:
                total = apply(measured_total)
                static = total - kinetic
            elif state.static_pressure is not None:
                static = apply(state.static_pressure)
                total = static + kinetic
            else:
                excess: Array = -0.5 * reference.density * (v**2 + w**2)
                if self.settings.turning_pressure:
                    excess = crossflow_pressure(v, w, grid, density=reference.density)
                static = reference.static_pressure + excess
                total = static + kinetic
        return Flow(grid, u, v, w, total, static, density, total_temperature)

    def reduce(
        self,
        errors: Mapping[str, Array] = _NO_ERRORS,
        *,
        vary: Variation = _AS_FOUND,
        estimates: bool = True,
        geometric: bool = True,
    ) -> Reduction:
        """One pass from points to rows.

        Parameters
        ----------
        errors : mapping of str to ndarray
            Additive errors of the inputs in SI, by the names of `layouts`.
        vary : Variation
            Numerical choices made differently.
        estimates : bool
            Whether to evaluate the cross-checks; they are NaN otherwise.
        geometric : bool
            Whether those on frozen geometry are among them.

        Returns
        -------
        Reduction
        """
        settings = self.settings
        reference = self.reference(errors)
        flow = self.flow(reference, errors)
        grid = flow.grid
        loss = reference.total_pressure - flow.total_pressure
        whole_vorticity = axial_vorticity(flow.v, flow.w, grid)
        region = self._region(loss, whole_vorticity, grid, vary)
        mask = region.mask
        zero = loss_zero(loss, mask) + vary.loss_shift
        measured = flow
        flow = self._zeroed(flow, reference, zero)
        if flow.v is not measured.v:
            whole_vorticity = axial_vorticity(flow.v, flow.w, grid)
        vorticity = np.where(mask, whole_vorticity, 0.0)
        forces = vorticity_forces(vorticity, grid, reference, moment_centre=settings.moment_centre)
        loss_free = loss_free_axial_velocity(flow, reference)
        integrand = np.where(mask, profile_integrand(flow, reference, loss_free), 0.0)
        near = self.frozen.near_field
        if near is None:
            near = self.near_field(vorticity, grid)
        divergence_part, axial_part = residual_drag(flow, reference, loss_free, mask, near=near)
        bias = self.frozen.bias
        profile = float(grid.integrate(integrand))
        induced = float(forces.induced_drag) - bias.get("induced_drag", 0.0)
        residual = float(divergence_part + axial_part) - bias.get("residual_drag", 0.0)
        values = dict.fromkeys(OUTPUTS, np.nan)
        values |= {
            "profile_drag": profile,
            "induced_drag": induced,
            "residual_drag": residual,
            "total_drag": profile + induced + residual,
            "lift": float(forces.lift),
            "side_force": float(forces.side_force),
            "rolling_moment": float(forces.rolling_moment),
        }
        area = settings.reference_area + float(errors.get("model.reference_area", 0.0))
        span = settings.span + float(errors.get("model.span", 0.0))
        q = reference.dynamic_pressure
        if induced > 0:
            values["span_efficiency"] = values["lift"] ** 2 / (np.pi * q * span**2 * induced)
        for row in ROWS:
            if row != "span_efficiency":
                values[coefficient_of(row)] = values[row] / (q * area * (span if row == "rolling_moment" else 1.0))
        offset, invalid = (0.0, 0.0), 0.0
        if estimates:
            offset, invalid = self._estimate(values, flow, reference, region, forces, near, vary, geometric)
        if not settings.crossflow:
            values |= dict.fromkeys((name for name in OUTPUTS if name not in WITHOUT_CROSSFLOW), np.nan)
        return Reduction(
            reference,
            flow,
            region,
            vorticity,
            forces,
            loss_free,
            integrand,
            zero,
            offset,
            MappingProxyType(values),
            invalid,
            (float(divergence_part), float(axial_part)),
        )

    def vectors(self, errors: Mapping[str, Array], *, estimates: bool = True) -> Array:
        """Outputs under many draws of errors.

        Parameters
        ----------
        errors : mapping of str to ndarray, shape (k, n) or (k,)
            Additive errors of the inputs in SI, one draw after the other.
        estimates : bool
            Whether to evaluate the cross-checks; they are NaN otherwise.

        Returns
        -------
        ndarray, shape (k, m)
            Over `OUTPUTS`.
        """
        count = len(next(iter(errors.values())))
        vary = Variation(mask=self.frozen.region)
        draws = [
            self.reduce(
                {name: array[k] for name, array in errors.items()}, vary=vary, estimates=estimates, geometric=False
            )
            for k in range(count)
        ]
        vectors = np.stack([draw.vector for draw in draws])
        if not estimates:
            return vectors
        # The estimates on frozen geometry are matrix products: all draws at once.
        references = [draw.reference for draw in draws]
        found = self._on_frozen_geometry(
            np.stack([draw.flow.v for draw in draws]),
            np.stack([draw.flow.w for draw in draws]),
            np.stack([draw.region.mask for draw in draws]),
            np.array([reference.density for reference in references]),
            np.array([reference.speed for reference in references]),
        )
        for name, values in found.items():
            vectors[:, OUTPUTS.index(name)] = values
        return vectors

    def _on_frozen_geometry(
        self, v: Array, w: Array, mask: Mask, density: Array | float, speed: Array | float
    ) -> dict[str, Array]:
        """Wake line and vortex sum of fields of shape (..., nz, ny), noise bias subtracted."""
        found, bias = {}, self.frozen.bias
        if self.frozen.cuts is not None:
            line = evaluate_wake_line(self.frozen.cuts, v, w, density, speed, mask=mask)
            for row, value in (("induced_drag", line.induced_drag), ("lift", line.lift)):
                name = estimate_of(row, "wake_line")
                found[name] = value - bias.get(name, 0.0)
        if self.frozen.parts is not None:
            name = estimate_of("induced_drag", "vortex_sum")
            found[name] = evaluate_vortex_sum(self.frozen.parts, v, w, density) - bias.get(name, 0.0)
        return found

    def _region(self, loss: Array, vorticity: Array, grid: UniformGrid, vary: Variation) -> WakeRegion:
        settings = self.settings
        if vary.mask is not None:
            nan = float("nan")
            return WakeRegion(vary.mask, nan, nan, nan, nan, nan, nan)
        grow = settings.grow
        if grow is None:
            grow = default_grow(self.gridding)
        return wake_region(
            loss,
            vorticity,
            grid,
            level=settings.level,
            grow=grow * vary.grow_factor,
            include=region_of(settings.include, grid) if settings.include else None,
            exclude=region_of(settings.exclude, grid) if settings.exclude else None,
        )

    def _zeroed(self, flow: Flow, reference: Reference, zero: float) -> Flow:
        """The plane with its total pressure raised by a constant, and what depends on it following.

        A measured speed stays, and a static pressure that rests on the total one follows; where the speed itself comes
        from the pressures, it follows, at the same static pressure and the same measured, else total, temperature.
        Where the flow's direction was measured, the crossflow follows the speed; where v and w themselves were, they
        stay.
        """
        total = flow.total_pressure + zero
        raised = total / flow.total_pressure
        if self.settings.primary == "velocity":
            if not reference.compressible:
                implied = zero if "total_pressure" in self.measured else 0.0
                return replace(flow, total_pressure=total, static_pressure=flow.static_pressure + implied)
            return replace(
                flow,
                total_pressure=total,
                static_pressure=flow.static_pressure * raised,
                density=flow.density * raised,
            )
        if not reference.compressible:
            square = 2 * (total - flow.static_pressure) / reference.density
            return replace(self._with_speed(flow, square), total_pressure=total)
        exponent = reference.gas_constant / reference.heat_capacity
        ratio = np.maximum(total / flow.static_pressure, 1.0) ** exponent
        if {"temperature", "density"} & self.measured:
            # The static temperature was measured and stays.
            temperature = flow.static_pressure / (reference.gas_constant * flow.density)
            total_temperature, density = temperature * ratio, flow.density
        else:
            total_temperature, density = flow.total_temperature, flow.density * raised**exponent
        square = 2 * reference.heat_capacity * total_temperature * (1 - 1 / ratio)
        return replace(
            self._with_speed(flow, square), total_pressure=total, density=density, total_temperature=total_temperature
        )

    def _with_speed(self, flow: Flow, square: Array) -> Flow:
        """The plane with another square of the speed, m²/s², in the measured direction or at the measured crossflow."""
        crossflow = flow.v**2 + flow.w**2
        if self.traverse is None and not {"u", "pitch"} & self.measured:
            return replace(flow, u=_axial(square - crossflow, flow.u))
        factor = np.sqrt(np.maximum(square, 0.0) / (flow.u**2 + crossflow))
        return replace(flow, u=factor * flow.u, v=factor * flow.v, w=factor * flow.w)

    def _estimate(
        self,
        values: dict[str, float],
        flow: Flow,
        reference: Reference,
        region: WakeRegion,
        forces: VorticityForces,
        near: NearField,
        vary: Variation,
        geometric: bool,
    ) -> tuple[tuple[float, float], float]:
        """Fill in the cross-checks; gives the crossflow offset and the area without a real expansion."""
        grid, mask, bias = flow.grid, region.mask, self.frozen.bias
        entropy, invalid = entropy_profile_drag(flow, reference, mask)
        values[estimate_of("profile_drag", "entropy_area")] = float(entropy)
        own = induced_crossflow(forces.stream_function, grid)
        outer = (~mask).astype(float)
        offset: Array = np.zeros(2)
        if outer.sum() > 0:
            offset = crossflow_offset(flow.v, flow.w, own, near, outer)
        offset = offset + np.asarray(vary.crossflow_shift)
        v, w = flow.v - offset[0], flow.w - offset[1]
        energy = float(crossflow_energy(v, w, grid, density=reference.density))
        name = estimate_of("induced_drag", "energy_area")
        values[name] = energy - bias.get(name, 0.0)
        # Turning the flow keeps its speed.
        square = flow.u**2 + (flow.v**2 - v**2) + (flow.w**2 - w**2)
        aligned = replace(flow, u=np.sqrt(np.maximum(square, 0.0)), v=v, w=w)
        name = estimate_of("total_drag", "momentum_area")
        values[name] = float(momentum_drag(aligned, reference)) - bias.get(name, 0.0)
        if geometric:
            found = self._on_frozen_geometry(flow.v, flow.w, mask, reference.density, reference.speed)
            values |= {name: float(value) for name, value in found.items()}
        return (float(offset[0]), float(offset[1])), float(invalid)

    def near_field(self, vorticity: Array, grid: UniformGrid) -> NearField:
        """Disturbance that the bound vortex adds at the plane, m/s; zero where the plane is not behind it."""
        distance = self.settings.station - self.settings.bound_line
        if not distance > 0:
            return NearField(*np.zeros((3, *grid.shape)))
        return near_field(vorticity, grid, distance=distance)


def _axial(square: Array, measured: Array) -> Array:
    """Axial velocity of a given square, in the direction measured; as measured where the square is not positive."""
    return np.where(square > 0, np.copysign(np.sqrt(np.maximum(square, 0.0)), measured), measured)


def default_grow(gridding: Gridding) -> float:
    """How far the wake region is grown where the survey file does not say, m: four spacings of the measured points."""
    from wakeledger.physics.fields.wake_region import GROW_CELLS

    return GROW_CELLS * max(gridding.raw_spacing)


def sampled_mask(mask: Mask, grid: UniformGrid, onto: UniformGrid) -> NDArray[np.bool_]:
    """A wake region brought onto another grid of the same plane, by nearest place."""
    iz = np.clip(np.rint((onto.z - grid.z0) / grid.dz).astype(int), 0, grid.nz - 1)
    iy = np.clip(np.rint((onto.y - grid.y0) / grid.dy).astype(int), 0, grid.ny - 1)
    return mask[np.ix_(iz, iy)]
