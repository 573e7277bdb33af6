"""Induced drag from the crossflow's kinetic energy, the part outside the window included.

½ρ∬(v² + w²) over the window plus ½ρ∮ψ v_t ds along its edge. No derivative of the data and no Poisson solve enters, so
noise is a third of the vorticity form's; but it sees a flow-angle offset, which must have been removed, and the bound
vortex, whose effect at the station is predicted by `wakeledger.physics.fields.lifting_line`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from wakeledger.core.estimate import Estimate
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.plane import array_of, grid_of
from wakeledger.physics.fields.edge import edge_integrals
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    import xarray as xr


def crossflow_energy(v: Array, w: Array, grid: UniformGrid, *, density: float) -> Array:
    """Crossflow kinetic energy per metre of wake, N: inside the window and beyond its edge.

    Parameters
    ----------
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    grid : UniformGrid
        The grid.
    density : float
        kg/m³.

    Returns
    -------
    ndarray, shape (...)
    """
    inside = grid.integrate(v**2 + w**2)
    return 0.5 * density * (inside + edge_integrals(v, w, grid).energy_integral)


def energy_area(plane: xr.Dataset, reference: Reference) -> Estimate:
    """Induced drag of a labelled plane from its crossflow energy.

    Parameters
    ----------
    plane : Dataset
        With v and w from which any flow-angle offset has been removed.
    reference : Reference
        The undisturbed stream.

    Returns
    -------
    Estimate
        Row ``induced_drag``, N, positive downstream; high near the model by the bound vortex's energy.

    Raises
    ------
    DataError
        If the plane lacks a variable or is not uniform.
    """
    value = crossflow_energy(array_of(plane, "v"), array_of(plane, "w"), grid_of(plane), density=reference.density)
    return Estimate("induced_drag", "energy_area", float(value), reason="no uncertainty source was given")
