"""What the chain is given, what it keeps from the nominal plane, and what one pass through it gives."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.boundary import Boundary, ClosedWalls, FreeAir, Reflection
from wakeledger.physics.fields.flow import Flow
from wakeledger.physics.fields.lifting_line import NearField
from wakeledger.physics.fields.wake_region import Mask, WakeRegion
from wakeledger.physics.methods.vorticity_area import VorticityForces
from wakeledger.physics.methods.wake_line import WakeCuts
from wakeledger.physics.vortices.vortex_sum import WakeParts
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.stream.reference import Reference

FREE_AIR = FreeAir()


@dataclass(frozen=True)
class Settings:
    """What the survey file fixes about the chain, in SI.

    Attributes
    ----------
    reference : mapping of str to float
        The inputs of ``[reference]`` as given.
    compressible : bool
        Whether the compressible relations are used; decided once, on the nominal values.
    primary : {"total_pressure", "velocity"}
        Which variables were measured; hole pressures give total and static pressure and direction.
    offsets : (float, float, float)
        Pitch, yaw and roll of the file's axes, rad.
    station, bound_line : float
        Where the plane and the bound line are, m behind the trailing edge.
    reference_area, span : float
        m² and m; the span is NaN where it is not given.
    moment_centre : (float, float)
        y and z of the rolling moment's axis, m.
    level : float
        Boundary level of the wake region in units of the noise.
    grow : float or None
        How far the region is grown, m.
    include, exclude : tuple of ndarray
        Boxes and polygons that belong to the wake region, or do not.
    crossflow : bool
        Whether the direction of the flow was measured; else the profile drag is all that can be had.
    turning_pressure : bool
        Whether a static pressure that was not measured includes what turns the crossflow, beside −½ρ(v² + w²).
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the survey, its reflection plane included.
    given : mapping of str to float
        What is known of the tunnel beforehand by its input (``boundary.solid_blockage`` as a share of the speed,
        ``boundary.support_tare`` in N), SI.
    model_place : (float, float) or None
        y and z of the model between the walls, m.
    computed : bool
        Whether the plane is from a computed flow, with entropy of its own making away from wake and shock.
    zero_beyond : float
        How far from the wake region the zero of the total pressure is taken, m.
    core : (UniformGrid, ndarray of bool) or None
        The wake region before it is grown, common to several planes; None to find it on the plane itself.
    """

    reference: Mapping[str, float]
    compressible: bool
    primary: str
    offsets: tuple[float, float, float]
    station: float
    bound_line: float
    reference_area: float
    span: float
    moment_centre: tuple[float, float] = (0.0, 0.0)
    level: float = 3.0
    grow: float | None = None
    include: tuple[Array, ...] = ()
    exclude: tuple[Array, ...] = ()
    crossflow: bool = True
    turning_pressure: bool = True
    boundary: Boundary = FREE_AIR
    given: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    model_place: tuple[float, float] | None = None
    computed: bool = False
    zero_beyond: float = 0.0
    core: tuple[UniformGrid, Mask] | None = None

    @property
    def reflection(self) -> Reflection | None:
        """The reflection plane; the plane of data then holds both sides of it."""
        return self.boundary.reflection

    @property
    def counted(self) -> float:
        """Share of the whole plane's sums that the ledger counts: both halves of a half model, none below ground."""
        return 0.5 if self.reflection == "z" else 1.0

    @property
    def bounded(self) -> bool:
        """Whether walls or the edge of a jet surround the survey."""
        return not isinstance(self.boundary, FreeAir)

    @property
    def blocked(self) -> bool:
        """Whether the stream at the model differs from the reference by blockage."""
        return isinstance(self.boundary, ClosedWalls) or "boundary.solid_blockage" in self.given


@dataclass(frozen=True)
class Frozen:
    """What is found once on the nominal plane and kept for every draw.

    Attributes
    ----------
    near_field : NearField or None
        Disturbance of the bound vortex at the plane, m/s.
    cuts : WakeCuts or None
        How the wake line cuts the wake.
    parts : WakeParts or None
        How the vortex sum divides the wake.
    region : ndarray of bool or None
        Wake region of the nominal plane, in which every draw is integrated.
    bias : mapping of str to float
        Noise bias of each output, in its unit, subtracted from it.
    turned : ndarray, shape (2, nz, ny), or None
        Crossflow that a unit rotation of the stream leaves behind through the wake region.
    energised : ndarray of bool or None
        Slipstreams and heated flow, kept out of the profile drag.
    shock_level : float or None
        Loss above which smooth loss outside the viscous wake is a shock's, Pa; None where no shock is looked for.

    Notes
    -----
    A region found anew in each draw would take other parts of the noise that the nominal plane already holds into the
    integrals, so that this noise counted twice: u of lift and induced drag came out 1.2 times the scatter of their
    errors (docs/coverage.md). What the choice of the edge itself is worth is a numerical term.
    """

    near_field: NearField | None = None
    cuts: WakeCuts | None = None
    parts: WakeParts | None = None
    region: Mask | None = None
    bias: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    turned: Array | None = None
    energised: Mask | None = None
    shock_level: float | None = None


@dataclass(frozen=True)
class Variation:
    """A numerical choice made differently, to see what it is worth.

    Attributes
    ----------
    grow_factor : float
        Factor on the distance by which the wake region is grown.
    mask : ndarray of bool or None
        A given wake region instead of a found one.
    loss_shift : float
        Added to the loss zero, Pa.
    crossflow_shift : (float, float)
        Added to the crossflow offset, m/s.
    swirl_shift : float
        Added to the stream's swirl, s⁻¹.
    """

    grow_factor: float = 1.0
    mask: Mask | None = None
    loss_shift: float = 0.0
    crossflow_shift: tuple[float, float] = (0.0, 0.0)
    swirl_shift: float = 0.0


@dataclass(frozen=True)
class Reduction:
    """One pass through the chain.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream.
    flow : Flow
        The plane, total pressure zeroed in the outer flow.
    region : WakeRegion
        The wake region (its `mask` in use).
    vorticity : ndarray, shape (nz, ny)
        Axial vorticity inside the region, s⁻¹.
    forces : VorticityForces
        Forces of that vorticity, noise bias included.
    loss_free : ndarray, shape (nz, ny)
        u*, m/s.
    profile_integrand : ndarray, shape (nz, ny)
        Betz's integrand inside the region, Pa.
    loss_zero : float
        Mean loss of the outer flow that was taken out, Pa.
    crossflow_offset : (float, float)
        Outer crossflow not explained by the wake, m/s; taken out for the energy forms only.
    values : mapping of str to float
        The outputs by name; NaN where one cannot be had.
    invalid_area : float
        Area where the expansion to the stream's pressure has no real value, m².
    residual_parts : (float, float)
        Divergence and axial part of the residual, N.
    wake_blockage : float
        Velocity u_b that the wake adds at the model between closed walls, m/s.
    swirl : float
        Solid rotation of the stream found outside the wake and taken out, s⁻¹, counter-clockwise seen from behind.
    split_uncertainty : float
        Standard uncertainty of the border between profile and wave drag, N.
    """

    reference: Reference
    flow: Flow
    region: WakeRegion
    vorticity: Array
    forces: VorticityForces
    loss_free: Array
    profile_integrand: Array
    loss_zero: float
    crossflow_offset: tuple[float, float]
    values: Mapping[str, float]
    invalid_area: float
    residual_parts: tuple[float, float]
    wake_blockage: float = 0.0
    swirl: float = 0.0
    split_uncertainty: float = 0.0

    @property
    def drag(self) -> str:
        """The row with as much of the drag as can be had: the total, or the profile drag alone."""
        return "profile_drag" if np.isnan(self.values["total_drag"]) else "total_drag"

    @property
    def vector(self) -> Array:
        """The outputs in the order of `OUTPUTS`."""
        return np.array([self.values[name] for name in OUTPUTS])
