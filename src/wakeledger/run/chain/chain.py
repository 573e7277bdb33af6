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

from wakeledger.core.errors import InputError, SurveyError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.points import Points
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.probe.traverse import Traverse, correction_input
from wakeledger.intake.state import State, point_state
from wakeledger.physics.fields.boundary import Boundary, FreeAir
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.physics.fields.duct_near_field import duct_near_field
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField, near_field
from wakeledger.physics.fields.outer_flow import induced_crossflow, loss_zero, stream_swirl
from wakeledger.physics.fields.pressure import crossflow_pressure
from wakeledger.physics.fields.wake_region import Mask, WakeRegion, grown_region, region_of, wake_region
from wakeledger.physics.fields.wall_correction import wall_stream_function
from wakeledger.physics.methods.betz_area import loss_free_axial_velocity, profile_integrand
from wakeledger.physics.methods.maskell import wake_deficit, with_blockage
from wakeledger.physics.methods.residual import residual_drag
from wakeledger.physics.methods.vorticity_area import VorticityForces, vorticity_forces
from wakeledger.physics.methods.wave_split import wave_split
from wakeledger.run.chain.coefficients import coefficients, tunnel_figures
from wakeledger.run.chain.empty_tunnel import EmptyTunnel
from wakeledger.run.chain.estimates import area_estimates, on_frozen_geometry, without_walls
from wakeledger.run.chain.outputs import OUTPUTS, WITH_SUPPORT, WITHOUT_CROSSFLOW
from wakeledger.run.chain.places import default_grow, sampled_mask, zero_places
from wakeledger.run.chain.reduction import Frozen, Reduction, Settings, Variation
from wakeledger.run.chain.shear import Displacement
from wakeledger.run.chain.zeroing import axial_velocity, zeroed
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
    empty : EmptyTunnel or None
        The stream without the model, which is taken out of the plane; None where it was not surveyed.
    """

    points: Points
    gridding: Gridding
    settings: Settings
    frozen: Frozen = field(default_factory=Frozen)
    gradients: Mapping[str, Array] = field(default_factory=lambda: MappingProxyType({}))
    traverse: Traverse | None = None
    displacement: Displacement | None = None
    empty: EmptyTunnel | None = None

    @property
    def measured(self) -> frozenset[str]:
        """Names of the variables measured in the flow."""
        names = frozenset(self.points.channels)
        return names if self.traverse is None else names & {"density", "total_temperature"}

    @property
    def directed(self) -> bool:
        """Whether the flow's direction was measured, rather than v and w beside a speed that follows."""
        return self.traverse is not None or bool({"u", "pitch"} & self.measured)

    @property
    def swirls(self) -> bool:
        """Whether the stream may rotate: in a tunnel that was not surveyed empty, without a reflection plane."""
        settings = self.settings
        return settings.bounded and settings.crossflow and self.empty is None and settings.reflection is None

    def with_frozen_shear(self) -> Chain:
        """The same survey with the shear that displaces the probe frozen on the nominal plane."""
        if self.displacement is None:
            return self
        flow = replace(self, displacement=None).flow(self.reference())
        speed = np.sqrt(flow.u**2 + flow.v**2 + flow.w**2)
        return replace(self, displacement=self.displacement.frozen_on(speed))

    def with_gridding(self, gridding: Gridding) -> Chain:
        """The same survey on another grid, without what was found on this one."""
        frozen = replace(self.frozen, near_field=None, cuts=None, parts=None, region=None, turned=None)
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
        v, w = (apply(getattr(state, name), odd=self.gridding.is_odd(name)) for name in ("v", "w"))
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
                u = axial_velocity(2 * (total - static) / reference.density - v**2 - w**2, u)
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
        flow = Flow(grid, u, v, w, total, static, density, total_temperature)
        if self.empty is None:
            return flow
        return self.empty.taken_out(flow, reference, errors, primary=self.settings.primary, measured=self.measured)

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
        zero = loss_zero(loss, ~zero_places(mask, grid, settings.zero_beyond)) + vary.loss_shift
        measured = flow
        flow = zeroed(flow, reference, zero, primary=settings.primary, measured=self.measured, directed=self.directed)
        if flow.v is not measured.v:
            whole_vorticity = axial_vorticity(flow.v, flow.w, grid)
        flow, whole_vorticity, swirl = self._unswirled(flow, whole_vorticity, mask, vary)
        vorticity = np.where(mask, whole_vorticity, 0.0)
        boundary = settings.boundary.whole
        forces = vorticity_forces(
            vorticity,
            grid,
            reference,
            moment_centre=settings.moment_centre,
            boundary=boundary,
            reflection=settings.reflection,
        )
        loss_free = loss_free_axial_velocity(flow, reference)
        energised = self.frozen.energised
        lossy = mask if energised is None else mask & ~energised
        integrand = np.where(lossy, profile_integrand(flow, reference, loss_free), 0.0)
        deficit = wake_deficit(flow, loss_free, lossy)
        blockage = float(with_blockage(grid.integrate(integrand), deficit, reference, boundary).velocity)
        if blockage:
            integrand = integrand - np.where(lossy, reference.density * blockage * (loss_free - flow.u), 0.0)
        near = self.frozen.near_field
        if near is None:
            near = self.near_field(vorticity, grid)
        parts = residual_drag(flow, reference, loss_free, mask, near=near, boundary=boundary, blockage=blockage)
        divergence_part, axial_part = (settings.counted * float(part) for part in parts)
        bias = self.frozen.bias
        tare = settings.given.get("boundary.support_tare", 0.0) + float(errors.get("boundary.support_tare", 0.0))
        profile = settings.counted * float(grid.integrate(integrand)) - tare
        induced = float(forces.induced_drag) - bias.get("induced_drag", 0.0)
        free_air = float(forces.free_air_drag) - bias.get("induced_drag_free_air", 0.0)
        residual = divergence_part + axial_part - bias.get("residual_drag", 0.0)
        values = dict.fromkeys(OUTPUTS, np.nan)
        wave, split_uncertainty = 0.0, 0.0
        if self.frozen.shock_level is not None:
            eddy = self.points.channels.get("turbulent_viscosity")
            split = wave_split(
                flow,
                reference,
                level=self.frozen.shock_level,
                within=mask,
                energised=energised,
                # Its level is relative, so that its unit and what it was divided by do not matter.
                turbulent_viscosity=None if eddy is None else self.gridding.apply(eddy.values),
            )
            wave, split_uncertainty = (settings.counted * one for one in (split.wave_drag, split.split_uncertainty))
            profile -= wave
            values["wave_drag"] = wave
        if settings.computed:
            away = ~mask if energised is None else ~(mask | energised)
            beside = np.where(away, profile_integrand(flow, reference, loss_free), 0.0)
            values["numerical_drag"] = settings.counted * float(grid.integrate(beside))
        values |= {
            "profile_drag": profile,
            "induced_drag": induced,
            "residual_drag": residual,
            "total_drag": profile + induced + wave + residual,
            "lift": float(forces.lift),
            "side_force": float(forces.side_force),
            "rolling_moment": float(forces.rolling_moment),
            "root_bending_moment": float(forces.root_bending_moment),
        }
        if settings.bounded:
            values["induced_drag_free_air"] = free_air
        values |= coefficients(values, free_air, settings, reference, blockage, errors)
        values |= tunnel_figures(values, vorticity, grid, settings, reference, blockage, errors)
        offset, invalid = (0.0, 0.0), 0.0
        if estimates:
            found = area_estimates(
                settings,
                self.frozen,
                flow,
                reference,
                mask,
                forces,
                near,
                wake_blockage=blockage,
                vary=vary,
            )
            # Integrals over the whole window hold the support's wake too.
            values |= {name: value - tare if name in WITH_SUPPORT else value for name, value in found.values.items()}
            offset, invalid = found.offset, found.invalid_area
            if geometric:
                v, w = without_walls(settings, flow, forces)
                lines = on_frozen_geometry(
                    settings, self.frozen, v, w, mask, reference.density, reference.speed, _walls_drag(forces)
                )
                values |= {name: float(value) for name, value in lines.items()}
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
            (divergence_part, axial_part),
            blockage,
            swirl,
            split_uncertainty,
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
        crossflow = [without_walls(self.settings, draw.flow, draw.forces) for draw in draws]
        found = on_frozen_geometry(
            self.settings,
            self.frozen,
            np.stack([v for v, _ in crossflow]),
            np.stack([w for _, w in crossflow]),
            np.stack([draw.region.mask for draw in draws]),
            np.array([reference.density for reference in references]),
            np.array([reference.speed for reference in references]),
            np.array([_walls_drag(draw.forces) for draw in draws]),
        )
        for name, values in found.items():
            vectors[:, OUTPUTS.index(name)] = values
        return vectors

    def _region(self, loss: Array, vorticity: Array, grid: UniformGrid, vary: Variation) -> WakeRegion:
        settings = self.settings
        if vary.mask is not None:
            nan = float("nan")
            return WakeRegion(vary.mask, nan, nan, nan, nan, nan, nan)
        grow = settings.grow
        if grow is None:
            grow = default_grow(self.gridding)
        grow *= vary.grow_factor
        include = region_of(settings.include, grid) if settings.include else None
        exclude = region_of(settings.exclude, grid) if settings.exclude else None
        if settings.core is not None:
            core = sampled_mask(settings.core[1], settings.core[0], grid)
            return grown_region(core, grid, grow=grow, include=include, exclude=exclude)
        return wake_region(loss, vorticity, grid, level=settings.level, grow=grow, include=include, exclude=exclude)

    def _unswirled(self, flow: Flow, vorticity: Array, mask: Mask, vary: Variation) -> tuple[Flow, Array, float]:
        """The plane without the stream's own rotation, as it shows outside the wake in a tunnel not surveyed empty."""
        settings, grid = self.settings, flow.grid
        if not self.swirls:
            return flow, vorticity, 0.0
        boundary = settings.boundary.whole
        own = induced_crossflow(wall_stream_function(np.where(mask, vorticity, 0.0), grid, boundary), grid)
        turned = self.frozen.turned
        if turned is None:
            turned = turned_crossflow(mask, grid, boundary)
        near = self.frozen.near_field
        if near is None:
            near = self.near_field(np.where(mask, vorticity, 0.0), grid)
        left = np.stack([flow.v - near.v, flow.w - near.w]) - own
        swirl = stream_swirl(left, turned, grid, (~mask).astype(float)) + vary.swirl_shift
        yy, zz = grid.mesh()
        v, w = flow.v + swirl * zz, flow.w - swirl * yy
        turned_flow = replace(flow, v=v, w=w)
        if settings.primary == "total_pressure":
            # The speed follows from the pressures and stays.
            square = flow.u**2 + (flow.v**2 - v**2) + (flow.w**2 - w**2)
            turned_flow = replace(turned_flow, u=axial_velocity(square, flow.u))
        return turned_flow, vorticity - 2 * swirl, swirl

    def near_field(self, vorticity: Array, grid: UniformGrid) -> NearField:
        """Disturbance that the bound vortex adds at the plane, m/s; zero where the plane is not behind it."""
        distance = self.settings.station - self.settings.bound_line
        if not distance > 0:
            return NearField(*np.zeros((3, *grid.shape)))
        boundary = self.settings.boundary.whole
        if not isinstance(boundary, FreeAir):
            return duct_near_field(vorticity, grid, boundary, distance=distance)
        return near_field(vorticity, grid, distance=distance)


def turned_crossflow(mask: Mask, grid: UniformGrid, boundary: Boundary) -> Array:
    """Crossflow that the vorticity 2 s⁻¹ of a unit rotation of the stream induces from the wake region, (2, nz, ny)."""
    return induced_crossflow(wall_stream_function(np.where(mask, 2.0, 0.0), grid, boundary), grid)


def _walls_drag(forces: VorticityForces) -> Array:
    """What the walls add to the induced drag, N."""
    return forces.induced_drag - forces.free_air_drag
