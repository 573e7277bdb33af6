"""A whole wake: an exact, self-consistent flow state at any point, and the ledger it must lead to.

The crossflow comes from Gaussian vortex elements, the total pressure from Gaussian patches of loss, and the static
pressure from a declared closed form: Bernoulli outside the cores plus, for each concentrated vortex, the term by which
the pressure of a Gaussian vortex in radial equilibrium lies below it,

    p = p∞ + ½ρU² − ½ρ[(U + u')² + v² + w²] + Σ δp,   δp = −(ρΓ²/4π²a²) [E1(r²/a²) − E1(2r²/a²)],

which for one isolated vortex is exact. The axial velocity follows from H, p, v, w. Whatever the choice of p, momentum
drag and the sum of profile, induced and residual drag are the same integral, so the truth is exact.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from functools import cached_property

import numpy as np
from scipy.special import exp1

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.elements import GaussianElements
from wakeledger.synthetic.lifting_line import LiftingLine
from wakeledger.synthetic.losses import GaussianLosses, no_losses

#: Relative change of profile and residual drag at which the quadrature's spacing is fine enough.
_CLOSE = 1e-10
_REFINEMENTS = 4


@dataclass(frozen=True, eq=False)
class FlowState:
    """The flow at a set of points, SI, absolute pressures; every array has the points' shape.

    Attributes
    ----------
    u, v, w : ndarray
        Velocity in wind axes, m/s.
    total_pressure, static_pressure : ndarray
        Pa; absolute, or above the reference static pressure where that is given as 0.
    density : ndarray
        kg/m³.
    temperature, total_temperature : ndarray
        K; the reference's (perhaps NaN) in incompressible flow.
    """

    u: Array
    v: Array
    w: Array
    total_pressure: Array
    static_pressure: Array
    density: Array
    temperature: Array
    total_temperature: Array

    def fields(self) -> Mapping[str, Array]:
        """The arrays by their names in the vocabulary, those that are not known left out."""
        return {name: value for name, value in vars(self).items() if np.isfinite(value).all()}


@dataclass(frozen=True)
class Truth:
    """Exact rows of a wake.

    Attributes
    ----------
    profile_drag : float
        Betz's integral over the wake (compressible: −∬ρuΔu dA with the local-pressure defect), N.
    induced_drag : float
        ½ρ∬ψξ dA as the E1 double sum, N.
    residual_drag : float
        What is left of the exact momentum drag: −½ρ∬[(u*−U)² − u'²] dA; compressible: the remainder of the flux, N.
    total_drag : float
        Sum of the three, the exact momentum drag, N.
    lift, side_force : float
        ρU∬yξ dA and −ρU∬zξ dA, N.
    rolling_moment : float
        −½ρU∬(y² + z²)ξ dA about the x axis, positive starboard wing down, N m.
    quadrature_error : float
        Change of the total with the last refinement of the quadrature, N.
    """

    profile_drag: float
    induced_drag: float
    residual_drag: float
    total_drag: float
    lift: float
    side_force: float
    rolling_moment: float
    quadrature_error: float

    def rows(self) -> dict[str, float]:
        """The rows by their names in the vocabulary."""
        return {name: value for name, value in asdict(self).items() if name != "quadrature_error"}


@dataclass(frozen=True, eq=False)
class SyntheticWake:
    """A wake in free air with a known state everywhere.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream; compressible relations are used where it says so.
    sheets : tuple of GaussianElements
        Vorticity, one set per surface, each in order along its trailing edge.
    losses : GaussianLosses
        Loss of total pressure.
    cores : GaussianElements or None
        Concentrated vortices whose low pressure is put into the state (`tip_cores`); they add no vorticity.
    bound_distance : tuple of float or None
        Distance of the plane behind each sheet's bound line, m; None for a plane far downstream, where the crossflow
        is two-dimensional and only the cores disturb the axial velocity.

    Raises
    ------
    ValueError
        If there is not one distance for each sheet, or a bound line is asked for in compressible flow.
    """

    reference: Reference
    sheets: tuple[GaussianElements, ...]
    losses: GaussianLosses = field(default_factory=no_losses)
    cores: GaussianElements | None = None
    bound_distance: tuple[float, ...] | None = None

    def __post_init__(self) -> None:
        if self.bound_distance is not None:
            if len(self.bound_distance) != len(self.sheets):
                raise ValueError(f"{len(self.sheets)} sheets need as many distances, {self.bound_distance} were given")
            if self.reference.compressible:
                raise ValueError("a bound line is exact only in incompressible flow; set compressible = False")

    @cached_property
    def elements(self) -> GaussianElements:
        """All vortex elements together."""
        together = self.sheets[0]
        for sheet in self.sheets[1:]:
            together = together + sheet
        return together

    # -- state ----------------------------------------------------------------------------------------------------

    def _crossflow(self, y: Array, z: Array) -> tuple[Array, Array, Array]:
        """Disturbance u', v, w of the vortices and their bound lines, m/s."""
        if self.bound_distance is None:
            v, w = self.elements.velocity(y, z)
            return np.zeros(np.shape(v)), v, w
        parts = [
            LiftingLine(sheet).velocity(x, y, z) for sheet, x in zip(self.sheets, self.bound_distance, strict=True)
        ]
        u, v, w = (np.sum([part[k] for part in parts], axis=0) for k in range(3))
        return u, v, w

    def core_pressure(self, y: Array, z: Array) -> Array:
        """Σ δp of the concentrated vortices, Pa."""
        pressure = np.zeros(np.broadcast(y, z).shape)
        if self.cores is None:
            return pressure
        for yc, zc, circulation, core in zip(
            self.cores.y, self.cores.z, self.cores.circulation, self.cores.core, strict=True
        ):
            q = ((np.asarray(y) - yc) ** 2 + (np.asarray(z) - zc) ** 2) / core**2
            outside = np.maximum(q, 1e-9)
            shape = np.where(q > 1e-9, exp1(outside) - exp1(2 * outside), np.log(2) - q)
            pressure -= self.reference.density * (circulation / (2 * np.pi * core)) ** 2 * shape
        return pressure

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points.

        Parameters
        ----------
        y, z : ndarray, any shape
            Points, m.

        Returns
        -------
        FlowState

        Raises
        ------
        ValueError
            If the losses are so large that no real axial velocity is left somewhere.
        """
        return self._parts(np.asarray(y, float), np.asarray(z, float))[0]

    def state_on(self, grid: UniformGrid) -> FlowState:
        """The flow on a grid, arrays of shape (nz, ny)."""
        return self.state(*grid.mesh())

    def _parts(self, y: Array, z: Array) -> tuple[FlowState, Array, Array]:
        """State, the velocity u* without the losses, and the bound lines' u'."""
        ref = self.reference
        disturbance, v, w = self._crossflow(y, z)
        loss = self.losses.loss(y, z)
        lossless = (ref.speed + disturbance) ** 2 + v**2 + w**2
        pressure_step = self.core_pressure(y, z)
        density = np.full(loss.shape, ref.density)
        if ref.compressible:
            kappa = (ref.gamma - 1) / ref.gamma
            twice_cp = 2 * ref.gas_constant / kappa
            t0 = ref.total_temperature
            static = ref.total_pressure * (1 - lossless / (twice_cp * t0)) ** (1 / kappa) + pressure_step
            total = ref.total_pressure - loss
            temperature = t0 * (static / total) ** kappa
            ideal = t0 * (static / ref.total_pressure) ** kappa
            density = static / (ref.gas_constant * temperature)
            u2 = twice_cp * (t0 - temperature) - v**2 - w**2
            ustar2 = twice_cp * (t0 - ideal) - v**2 - w**2
        else:
            t0 = ref.total_temperature
            static = ref.static_pressure + ref.dynamic_pressure - ref.density * lossless / 2 + pressure_step
            total = ref.total_pressure - loss
            temperature = np.full(loss.shape, ref.temperature)
            u2 = 2 * (total - static) / ref.density - v**2 - w**2
            ustar2 = u2 + 2 * loss / ref.density
        if not (u2 > 0).all():
            raise ValueError("the losses leave no real axial velocity somewhere; make them smaller or wider")
        state = FlowState(np.sqrt(u2), v, w, total, static, density, temperature, np.full(loss.shape, t0))
        return state, np.sqrt(ustar2), disturbance

    # -- truth ----------------------------------------------------------------------------------------------------

    @cached_property
    def truth(self) -> Truth:
        """Exact rows: closed forms, and quadrature of the compact integrands to about 1e-9."""
        ref = self.reference
        fraction = 1 / 2.5
        coarse, fine = self._quadrature(fraction), self._quadrature(fraction / 1.3)
        for _ in range(_REFINEMENTS):
            if abs(sum(fine) - sum(coarse)) <= _CLOSE * (abs(fine[0]) + abs(fine[1])):
                break
            fraction /= 1.5
            coarse, fine = fine, self._quadrature(fraction / 1.3)
        induced = self.elements.induced_drag(density=ref.density)
        return Truth(
            profile_drag=fine[0],
            induced_drag=induced,
            residual_drag=fine[1],
            total_drag=fine[0] + induced + fine[1],
            lift=self.elements.lift(speed=ref.speed, density=ref.density),
            side_force=self.elements.side_force(speed=ref.speed, density=ref.density),
            rolling_moment=self.elements.rolling_moment(speed=ref.speed, density=ref.density),
            quadrature_error=abs(sum(fine) - sum(coarse)),
        )

    def _quadrature(self, fraction: float) -> tuple[float, float]:
        """Profile and residual drag by evenly weighted sums at a fraction of the smallest Gaussian's width, N.

        The integrands are smooth and vanish at the window's edge, so the sums converge faster than any power.
        """
        ref = self.reference
        grid = self.compact_window(fraction)
        y, z = grid.mesh()
        state, ustar, disturbance = self._parts(y, z)
        if ref.compressible:
            mass_flux = state.density * state.u
            profile = -mass_flux * (state.u - ustar)
            flux = -mass_flux * (ustar - ref.speed) - (state.static_pressure - ref.static_pressure)
            residual = flux - ref.density * (state.v**2 + state.w**2) / 2
        else:
            loss = ref.total_pressure - state.total_pressure
            profile = loss + ref.density * (ustar - state.u) * (ustar + state.u - 2 * ref.speed) / 2
            residual = -ref.density * ((ustar - ref.speed) ** 2 - disturbance**2) / 2
        return float(grid.integrate(profile)), float(grid.integrate(residual))

    def compact_window(self, fraction: float) -> UniformGrid:
        """Grid that holds everything the quadrature needs, at a fraction of the smallest Gaussian's width."""
        sources = [(self.losses.y, self.losses.z, self.losses.width)] if self.losses.strength.any() else []
        if self.cores is not None:
            sources.append((self.cores.y, self.cores.z, self.cores.core))
        if self.reference.compressible:
            # Outside the wake the remainder falls with the fourth power of the crossflow.
            wake = self.elements
            reach = np.ptp(wake.y) + np.ptp(wake.z)
            sources.append((wake.y, wake.z, np.full(wake.n, reach / 7)))
        if not sources:
            return UniformGrid(0.0, 0.0, 1e-3, 1e-3, 2, 2)
        low = [min(float((s[k] - 7 * s[2]).min()) for s in sources) for k in (0, 1)]
        high = [max(float((s[k] + 7 * s[2]).max()) for s in sources) for k in (0, 1)]
        smallest = float(self.elements.core.min())
        if self.losses.strength.any():
            smallest = min(smallest, float(self.losses.width.min()))
        size = fraction * min(smallest, float(self.cores.core.min()) if self.cores is not None else smallest)
        count = [int(np.ceil((high[k] - low[k]) / size)) + 1 for k in (0, 1)]
        return UniformGrid(low[0], low[1], size, size, max(count[0], 2), max(count[1], 2))
