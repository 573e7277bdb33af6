"""What the ledger keeps beside its rows: labelled arrays, notes and provenance."""

from __future__ import annotations

import platform
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag, decode
from wakeledger.core.grid import Array
from wakeledger.core.plane import make_plane
from wakeledger.intake.probe.record import Calibration
from wakeledger.intake.speeds import measured_speed_ratio, speed_note
from wakeledger.intake.state import State, nonphysical
from wakeledger.physics.fields.boundary import Boundary, Circle, ClosedWalls, FreeAir
from wakeledger.physics.fields.differences import axial_vorticity, crossflow_divergence
from wakeledger.physics.fields.outer_flow import LEAST_SHARE
from wakeledger.physics.loading.span import SpanLoading
from wakeledger.physics.methods.wake_line import WakeLine
from wakeledger.physics.vortices.identify import Vortex
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.places import default_grow
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.crossflow_sense import crossflow_notes
from wakeledger.run.gridded import survey_window
from wakeledger.run.load import SurveyInput
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr

#: Doubt about a predicted difference as a fraction of it (k = 1): the bound line is taken as straight and level.
EXPECTED_DOUBT = 0.2
#: Corners of the polygon that stands for a circular section.
_CIRCLE_CORNERS = 72
_PACKAGES = ("wakeledger", "numpy", "scipy", "xarray", "netCDF4", "pandas", "pint", "pydantic")


def plane_table(chain: Chain, nominal: Reduction) -> xr.Dataset:
    """The reduced plane in wind axes with its mask and flags."""
    flow, reference = nominal.flow, nominal.reference
    fields = {
        "u": flow.u,
        "v": flow.v,
        "w": flow.w,
        "total_pressure": flow.total_pressure,
        "static_pressure": flow.static_pressure,
        "total_pressure_loss": reference.total_pressure - flow.total_pressure,
        "axial_vorticity": axial_vorticity(flow.v, flow.w, flow.grid),
        "crossflow_divergence": crossflow_divergence(flow.v, flow.w, flow.grid),
        "stream_function": nominal.forces.stream_function,
        "wake_mask": nominal.region.mask.astype(np.int8),
        "flag": plane_flags(chain),
    }
    if not chain.settings.crossflow:
        unknown = ("v", "w", "axial_vorticity", "crossflow_divergence", "stream_function")
        fields = {name: field for name, field in fields.items() if name not in unknown}
    if reference.compressible:
        fields["density"] = np.asarray(flow.density)
        heat = 2 * reference.heat_capacity
        fields["temperature"] = flow.total_temperature - (flow.u**2 + flow.v**2 + flow.w**2) / heat
    return make_plane(flow.grid, fields, station=chain.settings.station).assign_attrs(
        section_attributes(chain.settings.boundary)
    )


def section_attributes(boundary: Boundary) -> dict[str, str | Array]:
    """What surrounds the plane, as attributes of its table.

    Parameters
    ----------
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it.

    Returns
    -------
    dict
        Empty in free air without a reflection plane. Else ``boundary`` and ``reflection`` ("y", "z" or empty), and of
        walls or a jet the corners of the whole section, ``section_y`` and ``section_z``, m, once around.
    """
    if isinstance(boundary, FreeAir):
        return {"boundary": "free_air", "reflection": boundary.reflection} if boundary.reflection else {}
    section = boundary.section
    if isinstance(section, Circle):
        angle = np.linspace(0, 2 * np.pi, _CIRCLE_CORNERS, endpoint=False)
        y, z = (
            centre + section.diameter / 2 * f(angle) for centre, f in zip(section.centre, (np.cos, np.sin), strict=True)
        )
    else:
        y, z = section.corners.T
    return {
        "boundary": "closed_walls" if isinstance(boundary, ClosedWalls) else "open_jet",
        "reflection": boundary.reflection or "",
        "section_y": np.array(y),
        "section_z": np.array(z),
    }


def out_of_range(chain: Chain) -> NDArray[np.bool_]:
    """Points outside the calibrated range of the probe, shape (n,)."""
    if chain.traverse is None:
        return np.zeros(chain.points.n, dtype=bool)
    values = {name: channel.values for name, channel in chain.points.channels.items()}
    return chain.traverse.out_of_range(values, chain.reference())


def plane_flags(chain: Chain) -> NDArray[np.int32]:
    """Flags of the cells, those that stand for a point outside the probe's calibrated range among them."""
    flags = chain.gridding.flag.astype(np.int32)
    if chain.traverse is not None:
        beyond = chain.gridding.near(out_of_range(chain)) & chain.gridding.filled
        flags |= np.where(beyond, np.int32(Flag.OUT_OF_RANGE), np.int32(0))
    return flags


def _dataset(dimension: str, columns: Sequence[tuple[str, Array, str, str]]) -> xr.Dataset:
    import xarray as xr

    return xr.Dataset(
        {
            name: (dimension, np.asarray(values), {"units": unit, "long_name": meaning})
            for name, values, unit, meaning in columns
        }
    )


def wake_line_table(line: WakeLine) -> xr.Dataset | None:
    """The wake's trace with its bound circulation and normal velocity; None where there is none."""
    if line.reason is not None:
        return None
    return _dataset(
        "part",
        (
            ("y", line.y, "m", "distance to starboard of the trace"),
            ("z", line.z, "m", "height of the trace"),
            ("arc_length", line.arc_length, "m", "length along the trace from the port end of its chain"),
            ("chain", np.asarray(line.chain, dtype=np.int32), "1", "number of the chain a part belongs to"),
            ("circulation", line.circulation, "m2 s-1", "circulation of the part, counter-clockwise seen from behind"),
            ("bound_circulation", line.bound_circulation, "m2 s-1", "bound circulation to starboard of the part"),
            (
                "normal_velocity",
                line.normal_velocity,
                "m s-1",
                "velocity normal to the trace, positive up for a flat wake",
            ),
            ("stream_function", line.stream_function, "m2 s-1", "mean stream function of the part from path integrals"),
        ),
    )


def vortex_table(vortices: Sequence[Vortex]) -> xr.Dataset | None:
    """The identified vortices from port to starboard; None where there are none."""
    if not vortices:
        return None
    return _dataset(
        "vortex",
        (
            ("y", np.array([x.y for x in vortices]), "m", "distance to starboard of the centre"),
            ("z", np.array([x.z for x in vortices]), "m", "height of the centre"),
            (
                "circulation",
                np.array([x.circulation for x in vortices]),
                "m2 s-1",
                "circulation, counter-clockwise seen from behind",
            ),
            ("core_length", np.array([x.core_length for x in vortices]), "m", "core length a of exp(-(r/a)^2)"),
            (
                "core_radius",
                np.array([x.core_radius for x in vortices]),
                "m",
                "radius at which the swirl is largest, 1.1209 core lengths",
            ),
            ("peak_swirl", np.array([x.peak_swirl for x in vortices]), "m s-1", "largest azimuthal mean of the swirl"),
            ("u", np.array([x.u for x in vortices]), "m s-1", "axial velocity at the centre"),
        ),
    )


def calibration_tables(calibrations: Mapping[str, Calibration]) -> dict[str, xr.Dataset]:
    """Calibrations of probes as they are kept, by name."""
    from wakeledger.intake.probe.stored import to_dataset

    return {name: to_dataset(calibration) for name, calibration in calibrations.items()}


def span_table(loading: SpanLoading, *, crossflow: bool = True) -> xr.Dataset:
    """Distributions along the span; without a measured crossflow that of the profile drag alone."""
    table = _dataset(
        "y",
        (
            ("y", loading.y, "m", "distance to starboard"),
            ("bound_circulation", loading.bound_circulation, "m2 s-1", "bound circulation, positive for lift"),
            ("lift_per_span", loading.lift_per_span, "N/m", "lift per unit span"),
            ("profile_drag_per_span", loading.profile_drag_per_span, "N/m", "profile drag per unit span"),
            ("induced_drag_per_span", loading.induced_drag_per_span, "N/m", "induced drag per unit span"),
        ),
    )
    return table if crossflow else table[["y", "profile_drag_per_span"]]


def reference_scalars(reference: Reference) -> dict[str, float]:
    """The undisturbed stream as scalars, SI; unknown ones are left out."""
    values = {
        "speed": reference.speed,
        "density": reference.density,
        "static_pressure": reference.static_pressure,
        "total_pressure": reference.total_pressure,
        "dynamic_pressure": reference.dynamic_pressure,
        "temperature": reference.temperature,
        "mach": reference.mach,
    }
    return {name: float(value) for name, value in values.items() if np.isfinite(value)}


def provenance(command: str) -> dict[str, str]:
    """Package versions, command line and time."""
    found = {"command": command, "time": datetime.now(UTC).isoformat(timespec="seconds")}
    found["version python"] = platform.python_version()
    for package in _PACKAGES:
        try:
            found[f"version {package}"] = version(package)
        except PackageNotFoundError:
            continue
    return found


def notes(survey: SurveyInput, chain: Chain, nominal: Reduction, state: State) -> list[str]:
    """Sentences about what was done to the data, each choice named."""
    gridding, region, grid = chain.gridding, nominal.region, nominal.flow.grid
    ways = {
        "uniform": "used as they stand",
        "tensor": f"resampled by cubic splines to {1e3 * grid.dy:.3g} mm x {1e3 * grid.dz:.3g} mm",
        "scattered": f"interpolated to {1e3 * grid.dy:.3g} mm x {1e3 * grid.dz:.3g} mm",
    }
    arranged = "scattered points" if gridding.kind == "scattered" else f"points on a {gridding.kind} grid"
    found = [f"{survey.points.n} {arranged}, {ways[gridding.kind]} ({grid.ny} x {grid.nz})."]
    counts = decode(gridding.flag)
    beyond = np.count_nonzero(
        (survey.points.y < grid.y[0] - grid.dy)
        | (survey.points.y > grid.y[-1] + grid.dy)
        | (survey.points.z < grid.z[0] - grid.dz)
        | (survey.points.z > grid.z[-1] + grid.dz)
    )
    window = survey_window(survey, state)
    if survey.points.averaged:
        found.append(f"The values are means over {survey.points.averaged}.")
    if survey.points.how:
        found.append(f"The points come from a computed flow: {survey.points.how}.")
    if beyond and window is not None:
        why = (
            "as [plane] window has it"
            if window.given
            else "that holds the vorticity and the loss and half as much again, as a grid of the whole plane would be"
            " too coarse for them; [plane] window gives another"
        )
        found.append(
            f"The plane was cut to a window {why}: y {grid.y[0]:.4g} to {grid.y[-1]:.4g} m,"
            f" z {grid.z[0]:.4g} to {grid.z[-1]:.4g} m; {beyond} points lie outside it."
        )
    elif beyond:
        found.append(
            f"The plane was cut to the largest rectangle that the points cover, y {grid.y[0]:.4g} to"
            f" {grid.y[-1]:.4g} m, z {grid.z[0]:.4g} to {grid.z[-1]:.4g} m; {beyond} points lie outside it."
        )
    if gridding.filled.any():
        number = int(gridding.filled.sum())
        whose = "its" if number == 1 else "their"
        found.append(f"{_places(number)} without a usable point {_were(number)} filled from {whose} neighbours.")
    if counts["averaged"]:
        found.append(f"{_places(counts['averaged'])} {_were(counts['averaged'])} measured more than once and averaged.")
    impossible = int(np.count_nonzero(nonphysical(state)))
    if impossible:
        found.append(f"{_places(impossible, 'point')} without a real flow state {_were(impossible)} taken as missing.")
    grow = default_grow(gridding) if chain.settings.grow is None else chain.settings.grow
    found.append(
        f"The wake region is bounded at {chain.settings.level:g} times the noise of the smoothed loss and vorticity and"
        f" grown by {1e3 * grow:.4g} mm;"
        f" it covers {region.mask.mean():.0%} of the window."
    )
    if chain.settings.include or chain.settings.exclude:
        found.append("Places were included in or excluded from the wake region by the survey file.")
    if np.mean(~region.mask) < LEAST_SHARE:
        found.append("The total pressure was not zeroed: too little outer flow is left.")
    else:
        found.append(
            f"The total pressure was zeroed in the outer flow: {0.0 - nominal.loss_zero:+.3g} Pa were taken out"
            f" ({counts_text(nominal.loss_zero * region.mask.sum() * grid.cell_area, nominal, chain)})."
        )
    if chain.settings.crossflow:
        pitch, yaw = (np.degrees(np.arctan2(nominal.crossflow_offset[k], nominal.reference.speed)) for k in (1, 0))
        found.append(
            f"Outside the wake the flow is turned by {pitch:+.3f} deg in pitch and {yaw:+.3f} deg in yaw; that was"
            " taken out of the energy form and the momentum balance, and the vorticity form does not see it."
        )
        found += crossflow_notes(nominal)
    found += speed_note(measured_speed_ratio(state, survey.points, nominal.reference))
    if survey.survey.plane.primary == "velocity" and state.static_pressure is None and state.total_pressure is None:
        found.append("No pressure was measured: the static pressure follows from the crossflow's momentum balance.")
    if nominal.invalid_area > 0:
        found.append(
            f"Over {1e4 * nominal.invalid_area:.3g} cm2 the total pressure lies below the stream's static pressure;"
            " there entropy_area takes the flow as brought to rest."
        )
    return found


def _places(number: int, thing: str = "place") -> str:
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"


def _were(number: int) -> str:
    return "was" if number == 1 else "were"


def counts_text(force: float, nominal: Reduction, chain: Chain) -> str:
    """A drag in counts, or in newtons where there is no reference area."""
    coefficient = force / (nominal.reference.dynamic_pressure * chain.settings.reference_area)
    return f"{1e4 * coefficient:+.2f} counts" if np.isfinite(coefficient) else f"{force:+.3g} N"
