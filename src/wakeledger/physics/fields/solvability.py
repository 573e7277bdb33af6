"""The integral condition that a boundary puts on the vorticity or the divergence of the crossflow."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Boundary, ClosedWalls, OpenJet


@dataclass(frozen=True)
class Solvability:
    """Whether the field meets the integral condition of its boundary.

    Attributes
    ----------
    quantity : str
        "net circulation" (of ψ) or "net source" (of φ).
    required : bool
        Whether the boundary requires it to vanish: the net circulation in an open jet, the net source between closed
        walls; in free air too for a finite energy, but the solve itself needs nothing there.
    net, gross : ndarray, shape (...)
        ∬ and ½∬|·| of the field, the reflected half included, m²/s.
    """

    quantity: str
    required: bool
    net: Array
    gross: Array

    @property
    def share(self) -> Array:
        """|net| over gross, shape (...); zero where there is no field."""
        gross = np.where(self.gross > 0, self.gross, 1.0)
        result: Array = np.where(self.gross > 0, np.abs(self.net) / gross, 0.0)
        return result

    def satisfied(self, tolerance: float = 0.02) -> NDArray[np.bool_]:
        """Where the condition is met within `tolerance` of the gross value, or not required; shape (...)."""
        return np.asarray(~np.asarray(self.required) | (self.share <= tolerance))


def solvability(field: Array, grid: UniformGrid, boundary: Boundary, *, of: str = "vorticity") -> Solvability:
    """The integral condition that a boundary puts on a field.

    Parameters
    ----------
    field : ndarray, shape (..., nz, ny)
        Axial vorticity ξ or crossflow divergence σ, s⁻¹.
    grid : UniformGrid
        The window.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds it.
    of : {"vorticity", "divergence"}
        Which of the two the field is.

    Returns
    -------
    Solvability

    Notes
    -----
    A reflection plane makes the vorticity of both halves cancel and the divergence double. Where the condition is not
    met, the surplus leaves evenly through the section's edge: ∂ψ/∂n = −Γ/P with the edge's length P, so that the drag
    stays a symmetric form of the vorticity; the value then depends on that choice.
    """
    net = np.asarray(field.sum(axis=(-2, -1)) * grid.cell_area)
    gross = np.asarray(np.abs(field).sum(axis=(-2, -1)) * grid.cell_area / 2)
    if of == "vorticity":
        net = np.zeros_like(net) if boundary.reflection else net
        return Solvability("net circulation", isinstance(boundary, OpenJet), net, gross)
    doubled = 2 if boundary.reflection else 1
    return Solvability("net source", isinstance(boundary, ClosedWalls), doubled * net, doubled * gross)
