"""The probe's displacement in shear on the gridded plane, its direction frozen on the nominal one."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.probe.displacement import STANDARD_UNCERTAINTY, displacement_on_plane, speed_noise


@dataclass(frozen=True, eq=False)
class Displacement:
    """Displacement of a probe towards the higher speed.

    Attributes
    ----------
    diameter : float
        Outside diameter of the tip, m.
    coefficient, standard_uncertainty : float
        In diameters.
    speed : ndarray, shape (nz, ny), or None
        Nominal speed, m/s, that tells where there is shear and where it points; None to take that of each plane.
    noise : float
        Its standard deviation, m/s.

    Notes
    -----
    With the shear frozen the correction is linear in the fields: errors are neither rectified nor given a direction.
    """

    diameter: float
    coefficient: float
    standard_uncertainty: float = STANDARD_UNCERTAINTY
    speed: Array | None = None
    noise: float = np.nan

    def frozen_on(self, speed: Array | None) -> Displacement:
        """The same with the shear of a nominal speed, m/s, shape (nz, ny); None to undo it."""
        return replace(self, speed=speed, noise=np.nan if speed is None else speed_noise(speed))

    def undone(self, fields: Array, grid: UniformGrid, *, error: float = 0.0) -> Array:
        """Fields as they are at the probe's axis.

        Parameters
        ----------
        fields : ndarray, shape (m, nz, ny)
            As gridded, the velocity components first.
        grid : UniformGrid
            The grid.
        error : float
            Of the coefficient, in standard uncertainties.

        Returns
        -------
        ndarray, shape (m, nz, ny)
        """
        speed = np.sqrt(np.sum(fields[:3] ** 2, axis=0)) if self.speed is None else self.speed
        return displacement_on_plane(
            fields,
            speed,
            grid,
            diameter=self.diameter,
            coefficient=self.coefficient + error * self.standard_uncertainty,
            noise=None if self.speed is None else self.noise,
        ).values
