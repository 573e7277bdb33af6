"""The vocabulary: every variable and every row, what it means, its unit and its positive sense.

Names are data: attributes of arrays come from these tables through `stamp`, never through arithmetic.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import xarray as xr


@dataclass(frozen=True)
class Variable:
    """Meaning of one variable.

    Attributes
    ----------
    long_name : str
        What it is, with its positive sense where it has one.
    unit : str
        UDUNITS string of the SI unit used inside.
    standard_name : str or None
        CF standard name, where one exists.
    """

    long_name: str
    unit: str
    standard_name: str | None = None


def _table(**entries: Variable) -> Mapping[str, Variable]:
    return MappingProxyType(entries)


#: Variables a data file may give at each point (``[plane.columns]``).
VARIABLES: Mapping[str, Variable] = _table(
    u=Variable("velocity along x, positive downstream", "m s-1"),
    v=Variable("velocity along y, positive to starboard", "m s-1"),
    w=Variable("velocity along z, positive up", "m s-1"),
    speed=Variable("magnitude of the velocity", "m s-1"),
    pitch=Variable("flow pitch angle atan2(w, u), positive for upwash", "rad"),
    yaw=Variable("flow yaw angle asin(v/|V|), positive towards starboard", "rad"),
    total_pressure=Variable("total pressure", "Pa"),
    static_pressure=Variable("static pressure", "Pa", "air_pressure"),
    density=Variable("density of the air", "kg m-3", "air_density"),
    temperature=Variable("static temperature", "K", "air_temperature"),
    total_temperature=Variable("total temperature", "K"),
    turbulent_viscosity=Variable("dynamic turbulent viscosity", "Pa s"),
    reynolds_stress_uu=Variable("mean square of the fluctuation of u", "m2 s-2"),
    reynolds_stress_vv=Variable("mean square of the fluctuation of v", "m2 s-2"),
    reynolds_stress_ww=Variable("mean square of the fluctuation of w", "m2 s-2"),
    reynolds_stress_uv=Variable("mean product of the fluctuations of u and v", "m2 s-2"),
    reynolds_stress_uw=Variable("mean product of the fluctuations of u and w", "m2 s-2"),
    reynolds_stress_vw=Variable("mean product of the fluctuations of v and w", "m2 s-2"),
    **{f"p{number}": Variable(f"pressure of hole {number} of the probe, 1 the centre", "Pa") for number in range(1, 8)},
    reference_dynamic_pressure=Variable("dynamic pressure of the stream while the point was taken", "Pa"),
    reference_static_pressure=Variable("static pressure of the stream while the point was taken", "Pa"),
    time=Variable("time at which the point was taken", "s"),
)

#: Variables of a plane in wind axes, as kept in the archive.
PLANE_VARIABLES: Mapping[str, Variable] = _table(
    y=Variable("distance to starboard", "m"),
    z=Variable("height, positive up", "m"),
    x=Variable("distance behind the trailing edge, positive downstream", "m"),
    u=VARIABLES["u"],
    v=VARIABLES["v"],
    w=VARIABLES["w"],
    total_pressure=VARIABLES["total_pressure"],
    static_pressure=VARIABLES["static_pressure"],
    density=VARIABLES["density"],
    temperature=VARIABLES["temperature"],
    axial_vorticity=Variable("axial vorticity dw/dy - dv/dz, positive counter-clockwise seen from behind", "s-1"),
    crossflow_divergence=Variable("divergence of the crossflow dv/dy + dw/dz", "s-1"),
    stream_function=Variable("stream function of the crossflow, v = d(psi)/dz, w = -d(psi)/dy", "m2 s-1"),
    total_pressure_loss=Variable("total pressure of the undisturbed stream minus the local one", "Pa"),
    wake_mask=Variable("1 inside the wake region, 0 outside", "1"),
    flag=Variable("quality flags of each cell", "1", "quality_flag"),
)

#: Rows of the ledger: meaning and unit (a section's drag is per unit span).
ROWS: Mapping[str, Variable] = _table(
    profile_drag=Variable("profile drag, positive downstream", "N"),
    induced_drag=Variable("induced drag as tested, positive downstream", "N"),
    induced_drag_free_air=Variable("induced drag the same wake has in free air, positive downstream", "N"),
    wave_drag=Variable("wave drag, positive downstream", "N"),
    residual_drag=Variable("drag of the axial velocity disturbance and the crossflow's divergence, paired", "N"),
    numerical_drag=Variable("drag of the loss away from wake and shock, in no other row, positive downstream", "N"),
    total_drag=Variable("total drag, positive downstream", "N"),
    lift=Variable("lift, positive up", "N"),
    side_force=Variable("side force, positive to starboard", "N"),
    rolling_moment=Variable("rolling moment, positive starboard wing down", "N m"),
    root_bending_moment=Variable("root bending moment of one half, positive tip up", "N m"),
    induced_drag_minimum=Variable("least induced drag for this lift and trailing edge", "N"),
    span_efficiency=Variable("span efficiency C_L^2/(pi A C_Di)", "1"),
    section_drag=Variable("section drag per unit span, positive downstream", "N/m"),
)

#: Methods by row, the primary one first.
METHODS: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "profile_drag": ("betz_area", "entropy_area"),
        "induced_drag": ("vorticity_area", "energy_area", "wake_line", "vortex_sum"),
        "total_drag": ("sum_of_rows", "momentum_area"),
        "lift": ("vorticity_area", "wake_line"),
        "section_drag": ("jones", "betz", "momentum"),
    }
)

#: Checks of the ledger, in the order in which they are printed.
CHECKS: tuple[str, ...] = (
    "net_circulation",
    "mass_balance",
    "edge_vorticity",
    "edge_total_pressure_loss",
    "core_resolution",
    "noise_bias",
    "declared_noise",
    "outer_flow",
    "missing_points",
    "probe_range",
)


def stamp(array: xr.DataArray, name: str, *, table: Mapping[str, Variable] = PLANE_VARIABLES) -> xr.DataArray:
    """Give an array its name and attributes from the table, dropping whatever it carried.

    Parameters
    ----------
    array : DataArray
        Values in the table's SI unit.
    name : str
        Key of `table`.
    table : mapping, optional
        Which vocabulary to take the meaning from.

    Returns
    -------
    DataArray
        A copy with ``units``, ``long_name`` and, where it exists, ``standard_name``.

    Raises
    ------
    KeyError
        If the table has no such name.
    """
    meaning = table[name]
    attributes = {"units": meaning.unit, "long_name": meaning.long_name}
    if meaning.standard_name:
        attributes["standard_name"] = meaning.standard_name
    stamped = array.copy(deep=False)
    stamped.attrs = attributes
    stamped.name = name
    return stamped
