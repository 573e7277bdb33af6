"""A wake in a test section: exact flow between walls, in an open jet or over a reflection plane, and its ledger.

The crossflow is that of Gaussian vortices with all their images (`wakeledger.synthetic.walls`). Between closed walls
the stream beside the wake is faster by 2u_b, so that the plane passes what the section does. With u* the axial velocity
without the losses and u that with them, everything follows from closed forms and two compact integrals:

    ∬_C u dA = UC,    u_b = (1/2C)∬(u* − u) dA,    D − D_i = ∬ [(H∞ − H) + ½ρ(U² − u²)] dA,

the last being the momentum balance of a duct with parallel walls. In an open jet and in free air u_b = 0, and the
momentum flow of what comes in through the side is taken along.

A half model is given by its starboard half. Its loads are doubled here as in the ledger; over a ground plane they are
not.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from functools import cached_property
from typing import Literal

import numpy as np
from scipy.optimize import brentq
from scipy.special import erf

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.elements import GaussianElements
from wakeledger.synthetic.losses import GaussianLosses, no_losses
from wakeledger.synthetic.wakes import FlowState, SyntheticWake
from wakeledger.synthetic.walls import Duct, RectangularDuct, bound_field

#: Relative change of the compact integrals at which their spacing is fine enough.
_CLOSE = 1e-10
_REFINEMENTS = 4


@dataclass(frozen=True, eq=False)
class EmptyTunnel:
    """What the test section does without a model; what it adds to a model's flow is the same.

    Attributes
    ----------
    upflow, sidewash : float
        Uniform crossflow upwards and to starboard, m/s.
    swirl : float
        Turning of the stream about `axis`, rad/s, counter-clockwise seen from behind.
    axis : (float, float)
        y and z of the swirl's axis, m.
    losses : GaussianLosses
        Loss of total pressure, as behind a screen's seam.
    layer_loss, layer_thickness : float
        Total-pressure loss of the boundary layer at the wall y = 0, Pa, and the distance in which it falls to 1/e as
        exp(−(y/δ)²), m; no boundary layer where the loss is zero.
    vortices : GaussianElements or None
        Vortices along the walls, such as one in the corner of a half model's wall.
    """

    upflow: float = 0.0
    sidewash: float = 0.0
    swirl: float = 0.0
    axis: tuple[float, float] = (0.0, 0.0)
    losses: GaussianLosses = field(default_factory=no_losses)
    layer_loss: float = 0.0
    layer_thickness: float = 0.01
    vortices: GaussianElements | None = None

    def loss(self, y: Array, z: Array) -> Array:
        """Loss of total pressure, Pa, at points of any shape (m)."""
        layer: Array = self.layer_loss * np.exp(-((np.asarray(y, float) / self.layer_thickness) ** 2))
        return self.losses.loss(y, z) + layer

    def turning(self, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow v, w of upflow, sidewash and swirl, m/s; the vortices are apart."""
        yy, zz = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
        v: Array = self.sidewash - self.swirl * (zz - self.axis[1])
        w: Array = self.upflow + self.swirl * (yy - self.axis[0])
        return v, w


@dataclass(frozen=True)
class TunnelTruth:
    """Exact rows of a wake in a test section, without what the empty tunnel adds.

    Attributes
    ----------
    profile_drag : float
        Maskell's integral over the wake, N.
    induced_drag : float
        With the walls, N.
    induced_drag_free_air : float
        Of the same vorticity without them, the reflection plane staying, N.
    residual_drag : float
        What is left of the momentum balance, −½ρ∬[(u* − U − 2u_b)² − u'²] dA with the bound line's u', N.
    total_drag : float
        Force on the model in the tunnel, N.
    lift, side_force, rolling_moment : float
        N, N and N m; NaN for the side force and rolling moment of a half model.
    root_bending_moment : float
        Of one half about y = 0, positive tip up, N m; NaN without a half model.
    wake_blockage : float
        u_b, m/s.
    quadrature_error : float
        Change of the total with the last refinement of the quadrature, N.
    """

    profile_drag: float
    induced_drag: float
    induced_drag_free_air: float
    residual_drag: float
    total_drag: float
    lift: float
    side_force: float
    rolling_moment: float
    root_bending_moment: float
    wake_blockage: float
    quadrature_error: float

    def rows(self) -> dict[str, float]:
        """The rows by their names in the vocabulary, those that do not apply left out."""
        rows = {name: value for name, value in asdict(self).items() if name not in _NO_ROWS}
        return {name: value for name, value in rows.items() if not np.isnan(value)}


_NO_ROWS = ("wake_blockage", "quadrature_error")


@dataclass(frozen=True, eq=False)
class TunnelWake:
    """A wake with a known state everywhere in its test section.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream; incompressible.
    elements : GaussianElements
        The vortices on the survey's side of the reflection plane.
    losses : GaussianLosses
        Loss of total pressure on that side.
    section : RectangularDuct, RoundDuct or None
        Of the whole configuration, both sides of the reflection plane; None for free air.
    reflection : {"y", "z"} or None
        Solid plane y = 0 of a half model, or z = 0 of the ground.
    cores : GaussianElements or None
        Concentrated vortices whose low pressure is put into the state; they add no vorticity.
    empty : EmptyTunnel or None
        What the tunnel adds to the flow.
    bound_distance : float or None
        Distance of the plane behind the bound line, m, in a rectangular section; None for a plane far downstream, where
        the crossflow is two-dimensional.

    Raises
    ------
    ValueError
        If the stream is compressible, or a bound line is asked for elsewhere than in a rectangular section.

    Notes
    -----
    The vortices stand three core lengths or more clear of the walls, but may reach across the reflection plane.
    """

    reference: Reference
    elements: GaussianElements
    losses: GaussianLosses = field(default_factory=no_losses)
    section: Duct | None = None
    reflection: Literal["y", "z"] | None = None
    cores: GaussianElements | None = None
    empty: EmptyTunnel | None = None
    bound_distance: float | None = None

    def __post_init__(self) -> None:
        if self.reference.compressible:
            raise ValueError("a wake between walls is exact only in incompressible flow; set compressible = False")
        if self.bound_distance is not None and not isinstance(self.section, RectangularDuct):
            raise ValueError("a bound line has its images in a rectangular section only")

    # -- both halves ----------------------------------------------------------------------------------------------

    @cached_property
    def whole(self) -> GaussianElements:
        """The vortices with their reflection."""
        return self._reflected(self.elements)

    @cached_property
    def _still(self) -> SyntheticWake:
        """The same wake in free air, whose losses and core pressures these are too."""
        return SyntheticWake(
            self.reference,
            (self.whole,),
            self._reflected_losses(self.losses),
            None if self.cores is None else self._reflected(self.cores),
        )

    def _reflected(self, elements: GaussianElements) -> GaussianElements:
        return elements if self.reflection is None else elements + elements.mirrored(self.reflection)

    def _reflected_losses(self, losses: GaussianLosses) -> GaussianLosses:
        if self.reflection is None:
            return losses
        turn = (-1, 1) if self.reflection == "y" else (1, -1)
        return losses + GaussianLosses(turn[0] * losses.y, turn[1] * losses.z, losses.strength, losses.width)

    @property
    def _share(self) -> float:
        """Part of the whole plane's integrals that the ledger's forces are."""
        return 0.5 if self.reflection == "z" else 1.0

    @property
    def _closed(self) -> bool:
        return self.section is not None and self.section.closed

    # -- state ----------------------------------------------------------------------------------------------------

    def crossflow(self, y: Array, z: Array) -> tuple[Array, Array]:
        """Crossflow v, w of the model's wake, m/s, at points of any shape (m)."""
        v, w = self._velocity(self.whole, y, z)
        _, near_v, near_w = self._bound(y, z)
        return v + near_v, w + near_w

    def _bound(self, y: Array, z: Array) -> tuple[Array, Array, Array]:
        """Disturbance u', v, w of the bound line and the legs' beginning, m/s."""
        still: Array = np.zeros(np.broadcast(y, z).shape)
        if self.bound_distance is None or not isinstance(self.section, RectangularDuct):
            return still, still, still
        lines = [self.elements]
        if self.reflection == "y":
            # From the port tip over the plane of symmetry to the starboard one.
            lines = [self.elements.mirrored("y")[::-1] + self.elements]
        elif self.reflection == "z":
            lines.append(self.elements.mirrored("z"))
        parts = [bound_field(line, self.section, self.bound_distance, y, z) for line in lines]
        u, v, w = (np.sum([part[k] for part in parts], axis=0) for k in range(3))
        return u, v, w

    def _velocity(self, elements: GaussianElements, y: Array, z: Array) -> tuple[Array, Array]:
        return elements.velocity(y, z) if self.section is None else self.section.velocity(elements, y, z)

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points, with what the empty tunnel adds.

        Parameters
        ----------
        y, z : ndarray, any shape
            Points, m.

        Returns
        -------
        FlowState
            Turning and losses of the empty tunnel leave the static pressure as it is; the speed follows.
        """
        return self._state(np.asarray(y, float), np.asarray(z, float), model=True)

    def empty_state(self, y: Array, z: Array) -> FlowState:
        """The flow at points without the model, as a survey of the empty tunnel meets it."""
        return self._state(np.asarray(y, float), np.asarray(z, float), model=False)

    @property
    def without_model(self) -> WithoutModel:
        """The empty tunnel, to be recorded like the flow with the model."""
        return WithoutModel(self)

    def state_on(self, grid: UniformGrid) -> FlowState:
        """The flow on a grid, arrays of shape (nz, ny)."""
        return self.state(*grid.mesh())

    def _state(self, y: Array, z: Array, *, model: bool) -> FlowState:
        ref = self.reference
        still: Array = np.zeros(np.broadcast(y, z).shape)
        v, w, loss, static = still, still, still, still + ref.static_pressure
        if model:
            v, w = self.crossflow(y, z)
            loss = self._still.losses.loss(y, z)
            axial = self._lossless_square(y, z)
            static = ref.static_pressure + ref.dynamic_pressure - ref.density * (axial + v**2 + w**2) / 2
        if self.empty is not None:
            loss = loss + self.empty.loss(y, z)
            turned = self.empty.turning(y, z)
            v, w = v + turned[0], w + turned[1]
            if self.empty.vortices is not None:
                turned = self._velocity(self._reflected(self.empty.vortices), y, z)
                v, w = v + turned[0], w + turned[1]
        total = ref.total_pressure - loss
        square = 2 * (total - static) / ref.density - v**2 - w**2
        if not (square > 0).all():
            raise ValueError("the losses leave no real axial velocity somewhere; make them smaller or wider")
        density, temperature = still + ref.density, still + ref.temperature
        return FlowState(np.sqrt(square), v, w, total, static, density, temperature, temperature)

    def _lossless_square(self, y: Array, z: Array) -> Array:
        """u*², m²/s²: the stream's, faster by 2u_b between closed walls, and more in the low pressure of the cores."""
        low, bound = self._still.core_pressure(y, z), self._bound(y, z)[0]
        square: Array = (self.reference.speed + self._faster + bound) ** 2 - 2 * low / self.reference.density
        return square

    # -- truth ----------------------------------------------------------------------------------------------------

    @cached_property
    def _compact(self) -> tuple[UniformGrid, Array, Array, Array]:
        """A grid over losses and cores of both halves, with loss, core pressure and the bound line's u' on it."""
        return self._on(1 / 3.5)

    def _on(self, fraction: float) -> tuple[UniformGrid, Array, Array, Array]:
        grid = self._still.compact_window(fraction)
        y, z = grid.mesh()
        return grid, self._still.losses.loss(y, z), self._still.core_pressure(y, z), self._bound(y, z)[0]

    @cached_property
    def _faster(self) -> float:
        """How much faster the stream is beside the wake, m/s, so that the section passes UC; 0 without walls."""
        if self.section is None or not self._closed:
            return 0.0
        grid, loss, core, bound = self._compact
        speed, density, area = self.reference.speed, self.reference.density, self.section.area

        def surplus(faster: float) -> float:
            beside = speed + faster + bound
            slower = np.sqrt(beside**2 - 2 * (core + loss) / density) - beside
            return faster * area + float(grid.integrate(slower))

        return float(brentq(surplus, -0.2 * speed, 0.5 * speed, xtol=1e-14 * speed, rtol=1e-14))

    def _integrals(self, fraction: float) -> tuple[float, float, float]:
        """Profile and residual drag on the whole plane, N, and the volume flow that the wake lacks, m³/s."""
        ref = self.reference
        grid, loss, core, bound = self._on(fraction)
        star = np.sqrt((ref.speed + self._faster + bound) ** 2 - 2 * core / ref.density)
        u = np.sqrt(star**2 - 2 * loss / ref.density)
        deficit = float(grid.integrate(star - u))
        blocked = deficit / (2 * self.section.area) if self.section is not None and self._closed else 0.0
        profile = loss + ref.density * (star - u) * (star + u - 2 * (ref.speed + blocked)) / 2
        # The bound line's own u'² is the energy of its crossflow, which is no row's.
        beside = star - ref.speed - self._faster - bound
        residual = -ref.density * float(grid.integrate((beside + bound) ** 2 - bound**2)) / 2
        if self.section is not None and self._closed:
            # ∬(u* − U − 2u_b)² over the section, of which the compact part is that with e for 2u_b.
            off = self._faster - 2 * blocked
            residual -= ref.density * (off * float(grid.integrate(beside)) + off**2 * self.section.area / 2)
        return float(grid.integrate(profile)), residual, deficit

    @cached_property
    def truth(self) -> TunnelTruth:
        """Exact rows: closed forms and image sums, and quadrature of the compact integrands to about 1e-9."""
        ref, whole, share = self.reference, self.whole, self._share
        fraction = 1 / 2.5
        coarse, fine = self._integrals(fraction), self._integrals(fraction / 1.3)
        for _ in range(_REFINEMENTS):
            if abs(fine[0] - coarse[0]) + abs(fine[1] - coarse[1]) <= _CLOSE * (abs(fine[0]) + 1e-12):
                break
            fraction /= 1.5
            coarse, fine = fine, self._integrals(fraction / 1.3)
        free = whole.induced_drag(density=ref.density)
        walled = free if self.section is None else self.section.induced_drag(whole, density=ref.density)
        half = self.reflection == "y"
        surveyed = self.elements if self.reflection == "z" else whole
        bending = root_bending_moment(self.elements, speed=ref.speed, density=ref.density)
        blocked = 0.0
        if self.section is not None and self._closed:
            blocked = fine[2] / (2 * self.section.area)
        return TunnelTruth(
            profile_drag=share * fine[0],
            induced_drag=share * walled,
            induced_drag_free_air=share * free,
            residual_drag=share * fine[1],
            total_drag=share * (fine[0] + walled + fine[1]),
            lift=surveyed.lift(speed=ref.speed, density=ref.density),
            side_force=np.nan if half else surveyed.side_force(speed=ref.speed, density=ref.density),
            rolling_moment=np.nan if half else surveyed.rolling_moment(speed=ref.speed, density=ref.density),
            root_bending_moment=bending if half else np.nan,
            wake_blockage=blocked,
            quadrature_error=share * (abs(fine[0] - coarse[0]) + abs(fine[1] - coarse[1])),
        )


@dataclass(frozen=True)
class WithoutModel:
    """A test section without its model.

    Attributes
    ----------
    flow : TunnelWake
        The section with it.
    """

    flow: TunnelWake

    @property
    def reference(self) -> Reference:
        """The undisturbed stream."""
        return self.flow.reference

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points; see `TunnelWake.empty_state`."""
        return self.flow.empty_state(y, z)


def root_bending_moment(elements: GaussianElements, *, speed: float, density: float) -> float:
    """Moment of the starboard half's lift about y = 0, ρU∬ ½y² ξ dA over y > 0, N m, positive tip up.

    Parameters
    ----------
    elements : GaussianElements
        Vortices of the starboard half; with their reflection in y = 0 where their cores reach across it.
    speed, density : float
        m/s and kg/m³.

    Returns
    -------
    float

    Notes
    -----
    With Γ_b(y) = ∫_y^∞∫ξ dz dy' the moment is ρU∫₀^∞ y Γ_b dy, by parts ρU∬ ½y²ξ dA.
    """
    spread = elements.core / np.sqrt(2.0)
    ratio = elements.y / spread
    # ∫ sign(y) y² over a Gaussian of that spread about y: what crosses the plane stands in its image's place.
    second = (elements.y**2 + spread**2) * erf(ratio / np.sqrt(2)) + elements.y * spread * np.sqrt(2 / np.pi) * np.exp(
        -(ratio**2) / 2
    )
    return float(density * speed * (second @ elements.circulation) / 2)
