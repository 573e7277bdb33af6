"""The stream without the model: its crossflow and losses, taken out as vectors before anything is squared."""

from __future__ import annotations

from collections.abc import Mapping, Set
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.sources import Source
from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.flow import Flow
from wakeledger.run.chain.zeroing import axial_velocity
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    from wakeledger.run.chain.chain import Chain
    from wakeledger.run.gridded import Regrid

#: What names of inputs of the empty-tunnel survey begin with.
PREFIX = "empty_tunnel."
#: Least share of the model's window that the empty-tunnel survey must cover.
LEAST_COVER = 0.9


@dataclass(frozen=True, eq=False)
class EmptyTunnel:
    """A survey of the tunnel without the model.

    Attributes
    ----------
    chain : Chain
        Its own chain, gridded on its own points.
    regrid : Regrid
        Makes griddings of the same points with one choice made differently.
    sources : tuple of Source
        Of its probe's calibration and corrections.
    """

    chain: Chain
    regrid: Regrid
    sources: tuple[Source, ...] = ()

    def with_cut(self, factor: float) -> EmptyTunnel:
        """The same with another inboard cut, as a multiple of the one asked for."""
        grid = self.chain.gridding.grid
        spacing = None if self.chain.gridding.kind == "uniform" else (grid.dy, grid.dz)
        gridding = self.regrid(cut_factor=factor, spacing=spacing)
        return replace(self, chain=replace(self.chain, gridding=gridding))

    def flow(self, reference: Reference, grid: UniformGrid, errors: Mapping[str, Array]) -> tuple[Array, ...]:
        """What the stream itself has at a station, on another grid and at another speed.

        Parameters
        ----------
        reference : Reference
            The stream of the survey with the model.
        grid : UniformGrid
            Its grid.
        errors : mapping of str to ndarray
            Errors by input; those of this survey begin with "empty_tunnel.".

        Returns
        -------
        u, v, w, total_pressure, static_pressure : ndarray, shape (nz, ny)
            Disturbances of the undisturbed stream, m/s and Pa, scaled with the speed and the dynamic pressure; beyond
            the survey's own edge those of the edge.
        """
        own = {name.removeprefix(PREFIX): array for name, array in errors.items() if name.startswith(PREFIX)}
        stream = self.chain.reference(own)
        flow = self.chain.flow(stream, own)
        speed = reference.speed / stream.speed
        pressure = reference.dynamic_pressure / stream.dynamic_pressure
        fields = np.stack(
            [
                speed * (flow.u - stream.speed),
                speed * flow.v,
                speed * flow.w,
                pressure * (flow.total_pressure - stream.total_pressure),
                pressure * (flow.static_pressure - stream.static_pressure),
            ]
        )
        along_z, along_y = _onto(flow.grid.z, grid.z), _onto(flow.grid.y, grid.y)
        if along_y is not None:
            fields = fields @ along_y.T
        return tuple(fields if along_z is None else along_z @ fields)

    def taken_out(
        self,
        flow: Flow,
        reference: Reference,
        errors: Mapping[str, Array],
        *,
        primary: str,
        measured: Set[str],
    ) -> Flow:
        """A plane less what the stream itself has there.

        Parameters
        ----------
        flow : Flow
            With the model.
        reference : Reference
            Its undisturbed stream.
        errors : mapping of str to ndarray
            Errors by input.
        primary : {"total_pressure", "velocity"}
            Which variables were measured with the model.
        measured : set of str
            Their names.

        Returns
        -------
        Flow
            Velocity, total and static pressure less their disturbances in the empty tunnel. In an incompressible stream
            the axial velocity follows from the pressures where they were measured, else a pressure from the other.
        """
        u, v, w, total, static = self.flow(reference, flow.grid, errors)
        changed = replace(
            flow,
            u=flow.u - u,
            v=flow.v - v,
            w=flow.w - w,
            total_pressure=flow.total_pressure - total,
            static_pressure=flow.static_pressure - static,
        )
        if reference.compressible:
            return changed
        crossflow = changed.v**2 + changed.w**2
        kinetic = 0.5 * reference.density * (changed.u**2 + crossflow)
        if primary == "total_pressure":
            square = 2 * (changed.total_pressure - changed.static_pressure) / reference.density - crossflow
            return replace(changed, u=axial_velocity(square, changed.u))
        if "total_pressure" in measured:
            return replace(changed, static_pressure=changed.total_pressure - kinetic)
        return replace(changed, total_pressure=changed.static_pressure + kinetic)

    def check_cover(self, grid: UniformGrid, place: str) -> float:
        """Share of a window that this survey covers.

        Raises
        ------
        SurveyError
            If it covers less than `LEAST_COVER` of it.
        """
        own = self.chain.gridding.grid
        shares = []
        for axis in ("y", "z"):
            mine, theirs = getattr(own, axis), getattr(grid, axis)
            step = mine[1] - mine[0]
            shares.append(float(np.mean((theirs >= mine[0] - step) & (theirs <= mine[-1] + step))))
        share = shares[0] * shares[1]
        if share < LEAST_COVER:
            raise SurveyError(
                f"the survey of the empty tunnel covers {share:.0%} of the window (its own is y {own.y[0]:.4g} to"
                f" {own.y[-1]:.4g} m, z {own.z[0]:.4g} to {own.z[-1]:.4g} m)",
                place=place,
                remedy=f"survey at least {LEAST_COVER:.0%} of the same window without the model, or leave it out",
            )
        return share


def _onto(lines: Array, x: Array) -> Array | None:
    """Cubic interpolation from lines to places as a matrix, held at the ends; None where they coincide."""
    from scipy.interpolate import make_interp_spline

    if lines.size == x.size and np.allclose(lines, x, rtol=0, atol=1e-6 * (lines[1] - lines[0])):
        return None
    spline = make_interp_spline(lines, np.eye(lines.size), k=3)
    return np.asarray(spline(np.clip(x, lines[0], lines[-1])), dtype=float)
