"""Units of the scalars that describe the stream and the model, as written to the archive."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import xarray as xr

#: UDUNITS strings by name; a name that is not here is written without a unit.
SCALAR_UNITS: Mapping[str, str] = MappingProxyType(
    {
        "speed": "m s-1",
        "density": "kg m-3",
        "static_pressure": "Pa",
        "total_pressure": "Pa",
        "dynamic_pressure": "Pa",
        "mach": "1",
        "temperature": "K",
        "total_temperature": "K",
        "relative_humidity": "1",
        "gamma": "1",
        "gas_constant": "J kg-1 K-1",
        "reference_area": "m2",
        "span": "m",
        "mean_chord": "m",
        "quarter_chord_x": "m",
        "moment_centre_y": "m",
        "moment_centre_z": "m",
        "station": "m",
        "chord": "m",
    }
)


def scalar(name: str, value: float, of: str) -> xr.DataArray:
    """A scalar of the stream or the model with its unit.

    Parameters
    ----------
    name : str
        Its name.
    value : float
        Its value, SI.
    of : str
        What it describes, for the long name.

    Returns
    -------
    DataArray
        Zero-dimensional, with ``long_name`` and, where it is known, ``units``.
    """
    import xarray as xr

    attributes = {"long_name": f"{name.replace('_', ' ')} of the {of}"}
    if name in SCALAR_UNITS:
        attributes["units"] = SCALAR_UNITS[name]
    return xr.DataArray(float(value), attrs=attributes)
