"""Standard uncertainty of the reduced plane at each of its places, from draws of the declared errors."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.core.grid import Array
from wakeledger.ledger.encoding import UNCERTAINTY_SUFFIX
from wakeledger.physics.fields.differences import axial_vorticity
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.prepared import Prepared

if TYPE_CHECKING:
    import xarray as xr

#: Draws; a standard uncertainty is known within 1/sqrt(2 (n - 1)), 11 %.
FIELD_DRAWS = 40
#: Draws whose errors are held at a time: those of a large plane fill the memory.
_AT_ONCE = 8
_OF_CROSSFLOW = ("v", "w", "axial_vorticity", "stream_function")


def with_uncertainties(plane: xr.Dataset, fields: Mapping[str, Array]) -> xr.Dataset:
    """A plane with the standard uncertainties of its fields beside them, named as the archive links them.

    Parameters
    ----------
    plane : Dataset
        In wind axes, dimensions (z, y).
    fields : mapping of str to ndarray, shape (nz, ny)
        From `field_uncertainties`.

    Returns
    -------
    Dataset
    """
    beside = {}
    for name, values in fields.items():
        meaning = f"standard uncertainty (k = 1) of {name} by the declared sources, from {FIELD_DRAWS} draws"
        attributes = {"units": plane[name].attrs["units"], "long_name": meaning}
        beside[f"{name}{UNCERTAINTY_SUFFIX}"] = (("z", "y"), values, attributes)
    return plane.assign(beside)


def field_uncertainties(prepared: Prepared, *, seed: int) -> Mapping[str, Array]:
    """Standard uncertainty of the fields of the plane by the declared sources.

    Parameters
    ----------
    prepared : Prepared
        The survey.
    seed : int
        Of the survey file.

    Returns
    -------
    mapping of str to ndarray, shape (nz, ny)
        By field of the plane (u, v, w, total_pressure, static_pressure, total_pressure_loss, axial_vorticity,
        stream_function), in its unit; empty where there is no source. Numerical terms are no part of it.
    """
    chain, sources = prepared.chain, prepared.sources
    if not sources:
        return {}
    sampler, vary = ErrorSampler(sources, prepared.layouts, seed=seed), Variation(mask=chain.frozen.region)
    # Deviations from the plane itself, whose squares lose no digits to an absolute pressure.
    at_hand = _fields(prepared.nominal)
    total = {name: np.zeros(array.shape) for name, array in at_hand.items()}
    squares = {name: np.zeros(array.shape) for name, array in at_hand.items()}
    for start in range(0, FIELD_DRAWS, _AT_ONCE):
        errors = sampler.draw(start, min(start + _AT_ONCE, FIELD_DRAWS))
        for k in range(min(_AT_ONCE, FIELD_DRAWS - start)):
            drawn = chain.reduce({name: array[k] for name, array in errors.items()}, vary=vary, estimates=False)
            for name, array in _fields(drawn).items():
                deviation = array - at_hand[name]
                total[name] += deviation
                squares[name] += deviation**2
    found = {
        name: np.sqrt(np.maximum(squares[name] - total[name] ** 2 / FIELD_DRAWS, 0.0) / (FIELD_DRAWS - 1))
        for name in total
    }
    directed = chain.settings.crossflow
    return {name: array for name, array in found.items() if directed or name not in _OF_CROSSFLOW}


def _fields(reduced: Reduction) -> dict[str, Array]:
    flow = reduced.flow
    return {
        "u": flow.u,
        "v": flow.v,
        "w": flow.w,
        "total_pressure": flow.total_pressure,
        "static_pressure": flow.static_pressure,
        "total_pressure_loss": reduced.reference.total_pressure - flow.total_pressure,
        "axial_vorticity": axial_vorticity(flow.v, flow.w, flow.grid),
        "stream_function": reduced.forces.stream_function,
    }
