"""A line traverse as a labelled dataset: a plane of one column, or one row, whose places need not be evenly spaced."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import cf_attributes
from wakeledger.core.grid import Array
from wakeledger.core.names import PLANE_VARIABLES, Variable, stamp

if TYPE_CHECKING:
    from collections.abc import Mapping

    import xarray as xr

#: Scalar coordinates of a traverse: the edges of its wake.
WINDOW_EDGES = {
    "wake_from": Variable("lower edge of the wake along the traverse", "m"),
    "wake_to": Variable("upper edge of the wake along the traverse", "m"),
}


def make_traverse(
    along: Literal["y", "z"],
    position: Array,
    profiles: Mapping[str, NDArray[np.generic]],
    *,
    wake: tuple[float, float],
    station: float = float("nan"),
) -> xr.Dataset:
    """Label the profiles of a traverse.

    Parameters
    ----------
    along : {"y", "z"}
        Along which axis the traverse runs.
    position : ndarray, shape (m,)
        Places in ascending order, m.
    profiles : mapping of str to ndarray, shape (m,)
        Arrays in SI by name (`wakeledger.core.names.PLANE_VARIABLES`).
    wake : (float, float)
        Where the wake begins and ends along the traverse, m.
    station : float
        Distance behind the trailing edge, m.

    Returns
    -------
    Dataset
        Dimensions (z, y) with one place across the traverse, at 0; scalar coordinates x, wake_from and wake_to.
    """
    import xarray as xr

    across = np.zeros(1)
    shape = (position.size, 1) if along == "z" else (1, position.size)
    coordinates = {
        "z": ("z", position if along == "z" else across),
        "y": ("y", position if along == "y" else across),
        "x": ((), float(station)),
        "wake_from": ((), float(wake[0])),
        "wake_to": ((), float(wake[1])),
    }
    dataset = xr.Dataset(coords=coordinates)
    for name, values in profiles.items():
        dataset[name] = stamp(xr.DataArray(np.asarray(values).reshape(shape), dims=("z", "y")), name)
    table = {**PLANE_VARIABLES, **WINDOW_EDGES}
    for name in coordinates:
        dataset.coords[name].attrs = stamp(dataset.coords[name], name, table=table).attrs
    if "flag" in dataset:
        dataset["flag"].attrs |= cf_attributes()
    return dataset


def axis_of(plane: xr.Dataset) -> Literal["y", "z"] | None:
    """Along which axis a traverse runs.

    Parameters
    ----------
    plane : Dataset
        With dimensions z and y.

    Returns
    -------
    {"y", "z"} or None
        None where it is a plane of more than one row and column.
    """
    if plane.sizes.get("y") == 1:
        return "z"
    return "y" if plane.sizes.get("z") == 1 else None
