"""The loss of a normal shock by the Rankine-Hugoniot relations, alone and lying over a viscous wake.

The entropies of a boundary layer and of the shock above it add up along a streamline. On the plane, at the stream's
pressure and total temperature, the state follows from their sum in closed form, and so does what the shock's own
entropy costs: the mass that crossed it, times U less the velocity it would have reached without the viscous loss.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from scipy.special import erf

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.wakes import FlowState


def normal_shock_entropy(mach: Array | float, *, gamma: float = 1.4) -> Array:
    """Entropy rise Δs/R of a normal shock; zero up to Mach 1.

    Parameters
    ----------
    mach : ndarray or float
        Mach number ahead of the shock.
    gamma : float
        Ratio of the specific heats.

    Returns
    -------
    ndarray

    Notes
    -----
    Δs/R = [ln(p2/p1) − γ ln(ρ2/ρ1)]/(γ − 1), p2/p1 = 1 + 2γ(M² − 1)/(γ + 1), ρ2/ρ1 = (γ + 1)M²/((γ − 1)M² + 2).
    """
    square = np.maximum(np.asarray(mach, float), 1.0) ** 2
    pressure = 1 + 2 * gamma * (square - 1) / (gamma + 1)
    density = (gamma + 1) * square / ((gamma - 1) * square + 2)
    entropy: Array = (np.log(pressure) - gamma * np.log(density)) / (gamma - 1)
    return entropy


def stream_tube_wave_drag(reference: Reference, *, mach: float, area: float) -> float:
    """Wave drag of a stream tube that crosses a normal shock and expands back to the stream's pressure, N.

    Parameters
    ----------
    reference : Reference
        The undisturbed stream, compressible.
    mach : float
        Mach number of the tube ahead of the shock.
    area : float
        Area of the tube at the shock, m².

    Returns
    -------
    float
        ṁ(U − u_e): ṁ from the isentropic state ahead of the shock, u_e from the total pressure behind it.
    """
    heat = reference.gamma * reference.gas_constant / (reference.gamma - 1)
    ahead = reference.total_temperature / (1 + (reference.gamma - 1) / 2 * mach**2)
    density = reference.density * (ahead / reference.temperature) ** (1 / (reference.gamma - 1))
    flow = density * mach * np.sqrt(reference.gamma * reference.gas_constant * ahead) * area
    return float(flow * (reference.speed - _expanded(reference, normal_shock_entropy(mach), heat)))


def _expanded(reference: Reference, entropy: Array, heat: float) -> Array:
    """Velocity at the stream's pressure and total temperature, m/s."""
    temperature = reference.temperature * np.exp(entropy * reference.gas_constant / heat)
    velocity: Array = np.sqrt(2 * heat * (reference.total_temperature - temperature))
    return velocity


@dataclass(frozen=True, eq=False)
class ShockedWake:
    """A plane at the stream's pressure with a viscous wake and, above its middle, the loss of a shock.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream, compressible.
    foot_mach : float
        Mach number ahead of the shock at its foot in the plane of symmetry; 1 for no shock.
    height : float
        Height of the shock, m; the Mach number ahead falls linearly to 1 over it.
    half_span : float
        Half width in y over which both losses fade as (1 − y²/b²)², m.
    defect : float
        Peak velocity defect of the viscous wake alone, as a part of U; 0 for none.
    width : float
        Width s of the viscous wake, whose entropy is Gaussian in z, m.
    smear : float
        Width over which the lower edge of the shock's loss is blurred, m.
    """

    reference: Reference
    foot_mach: float = 1.3
    height: float = 0.5
    half_span: float = 1.0
    defect: float = 0.3
    width: float = 0.04
    smear: float = 0.015

    def shock_entropy(self, y: Array, z: Array) -> Array:
        """Entropy rise Δs/R of the shock alone, points of any shape."""
        strength = (self.foot_mach - 1) * self._fade(y)
        # The upper part only: beneath the dividing streamline no fluid met the shock.
        mach = 1 + strength * np.clip(1 - z / self.height, 0.0, 1.0 + 3 * self.smear / self.height)
        passed = (1 + erf(z / self.smear)) / 2
        entropy: Array = passed * normal_shock_entropy(mach, gamma=self.reference.gamma)
        return entropy

    def viscous_entropy(self, y: Array, z: Array) -> Array:
        """Entropy rise Δs/R of the viscous wake alone, points of any shape."""
        ref = self.reference
        heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
        slowest = ref.total_temperature - (ref.speed * (1 - self.defect)) ** 2 / (2 * heat)
        peak = heat / ref.gas_constant * np.log(slowest / ref.temperature)
        entropy: Array = peak * self._fade(y) * np.exp(-((z / self.width) ** 2))
        return entropy

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points of any shape, m."""
        ref = self.reference
        heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
        y, z = np.broadcast_arrays(np.asarray(y, float), np.asarray(z, float))
        entropy = self.shock_entropy(y, z) + self.viscous_entropy(y, z)
        temperature = ref.temperature * np.exp(entropy * ref.gas_constant / heat)
        static = np.full(y.shape, ref.static_pressure)
        still = np.zeros(y.shape)
        return FlowState(
            u=_expanded(ref, entropy, heat),
            v=still,
            w=still,
            total_pressure=ref.total_pressure * np.exp(-entropy),
            static_pressure=static,
            density=static / (ref.gas_constant * temperature),
            temperature=temperature,
            total_temperature=np.full(y.shape, ref.total_temperature),
        )

    def state_on(self, grid: UniformGrid) -> FlowState:
        """The flow on a grid, arrays of shape (nz, ny)."""
        return self.state(*grid.mesh())

    @property
    def wave_drag(self) -> float:
        """What the shock's own entropy costs, ∬ρu(U − u_shock) dA with the plane's mass flux, N."""
        return self._drags[0]

    @property
    def viscous_drag(self) -> float:
        """The rest of the loss's drag, N."""
        return self._drags[1]

    @cached_property
    def _drags(self) -> tuple[float, float]:
        ref = self.reference
        heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
        nodes, weights = np.polynomial.legendre.leggauss(60)
        y, y_weight = self.half_span * nodes, self.half_span * weights
        inner = max(8 * self.width, 8 * self.smear)
        pieces = np.unique([-inner, -inner / 3, 0.0, inner / 3, inner, max(self.height, 1.01 * inner)])
        z = np.concatenate([(a + b) / 2 + (b - a) / 2 * nodes for a, b in pairwise(pieces)])
        z_weight = np.concatenate([(b - a) / 2 * weights for a, b in pairwise(pieces)])
        yy, zz = np.meshgrid(y, z)
        state = self.state(yy, zz)
        flux = state.density * state.u
        wave = flux * (ref.speed - _expanded(ref, self.shock_entropy(yy, zz), heat))
        total = flux * (ref.speed - state.u)
        return float(z_weight @ wave @ y_weight), float(z_weight @ (total - wave) @ y_weight)

    def _fade(self, y: Array) -> Array:
        fade: Array = np.maximum(1 - (np.asarray(y, float) / self.half_span) ** 2, 0.0) ** 2
        return fade
