"""A round wake that was at the stream's pressure and is now at another: its drag is a closed form, the plane's is not.

Far downstream, at the stream's pressure, the wake has a Gaussian velocity defect u = U[1 − d exp(−r²/s²)] and the
stream's total temperature. Its drag ∬ρu(U − u) dA is there

    D = πs² p∞ γ/(γ−1) ln(T_c/T∞)        (T_c the static temperature on its axis; incompressible: πs²ρU²(d − d²/2)).

The plane is reached from there along every streamtube, without loss, at a static pressure declared for each tube; mass
flow is conserved, so the tubes become wider or narrower. Seen from the plane, u* of Betz's comparison differs from U,
and methods that expand to the stream's pressure and methods that keep the local one disagree by a known amount.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.integrate import cumulative_simpson
from scipy.interpolate import CubicSpline

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.stream.reference import Reference
from wakeledger.synthetic.wakes import FlowState

_TUBES = 6001
#: Radius of the outermost tube in units of the wider of defect and pressure step: exp(−49).
_REACH = 7.0


@dataclass(frozen=True, eq=False)
class ExpandedWake:
    """A round wake on the x axis, without crossflow.

    Attributes
    ----------
    reference : Reference
        The undisturbed stream.
    defect : float
        Peak d of the velocity defect at the stream's pressure, as a part of U; below 1, negative for an excess.
    width : float
        Width s of the defect at the stream's pressure, m.
    pressure_coefficient : float
        Static pressure on the axis of the plane over that of the stream, in units of q.
    pressure_width : float
        Width of the pressure step over that of the defect.

    Raises
    ------
    ValueError
        If the tubes on the axis cannot reach the declared pressure.
    """

    reference: Reference
    defect: float
    width: float
    pressure_coefficient: float = 0.0
    pressure_width: float = 1.5

    def __post_init__(self) -> None:
        if not self.defect < 1:
            raise ValueError(f"the peak defect is {self.defect}; it must be below 1")
        if not (self._tube(np.zeros(1))[1] > 0).all():
            raise ValueError("the flow on the axis cannot reach the declared pressure")

    @property
    def drag(self) -> float:
        """Drag of the wake, N: the closed form."""
        ref, area = self.reference, np.pi * self.width**2
        if not ref.compressible:
            return float(area * ref.density * ref.speed**2 * (self.defect - self.defect**2 / 2))
        heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
        axis = ref.total_temperature - (ref.speed * (1 - self.defect)) ** 2 / (2 * heat)
        return float(area * ref.static_pressure * heat / ref.gas_constant * np.log(axis / ref.temperature))

    @cached_property
    def local_pressure_drag(self) -> float:
        """What a comparison at the plane's own pressure makes of it, N.

        Compressible −∬ρu(u − u*) dA; incompressible Betz's ∬[(H∞ − H) + ½ρ(u* − u)(u* + u − 2U)] dA. Integrated over
        the tubes' mass flow.
        """
        ref = self.reference
        expanded_flux, u, density, static, _, total = self._tube(self._label)
        if ref.compressible:
            heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
            ideal = ref.temperature * (static / ref.static_pressure) ** (ref.gas_constant / heat)
            star = np.sqrt(2 * heat * (ref.total_temperature - ideal))
            per_flux = star - u
        else:
            star = np.sqrt(2 * (ref.total_pressure - static) / ref.density)
            betz = ref.total_pressure - total + ref.density * (star - u) * (star + u - 2 * ref.speed) / 2
            per_flux = betz / (density * u)
        return float(np.pi * CubicSpline(self._label, expanded_flux * per_flux).integrate(0.0, self._label[-1]))

    def state(self, y: Array, z: Array) -> FlowState:
        """The flow at points of any shape, m."""
        square = np.asarray(y, float) ** 2 + np.asarray(z, float) ** 2
        outermost = self._square[-1]
        label = CubicSpline(self._square, self._label)(np.minimum(square, outermost))
        label = label + np.maximum(square - outermost, 0.0)
        _, u, density, static, temperature, total = self._tube(label)
        still = np.zeros(u.shape)
        return FlowState(
            u, still, still, total, static, density, temperature, np.full(u.shape, self.reference.total_temperature)
        )

    def state_on(self, grid: UniformGrid) -> FlowState:
        """The flow on a grid, arrays of shape (nz, ny)."""
        return self.state(*grid.mesh())

    @cached_property
    def _label(self) -> Array:
        """Squared radius of each tube at the stream's pressure, m²."""
        reach = _REACH * self.width * max(self.pressure_width, 1.0)
        label: Array = np.linspace(0.0, reach**2, _TUBES)
        return label

    @cached_property
    def _square(self) -> Array:
        """Squared radius of each tube on the plane, m²: the mass flow inside is the same."""
        expanded_flux, u, density = self._tube(self._label)[:3]
        square: Array = cumulative_simpson(expanded_flux / (density * u), x=self._label, initial=0.0)
        return square

    def _tube(self, label: Array) -> tuple[Array, Array, Array, Array, Array, Array]:
        """ρu at the stream's pressure; then u, ρ, p, T and total pressure on the plane."""
        ref = self.reference
        expanded = ref.speed * (1 - self.defect * np.exp(-label / self.width**2))
        step = np.exp(-label / (self.width * self.pressure_width) ** 2)
        static = ref.static_pressure + self.pressure_coefficient * ref.dynamic_pressure * step
        if not ref.compressible:
            total = ref.static_pressure + ref.density * expanded**2 / 2
            u = np.sqrt(np.maximum(2 * (total - static) / ref.density, 0.0))
            same = np.ones(label.shape)
            return ref.density * expanded, u, ref.density * same, static, ref.temperature * same, total
        heat = ref.gamma * ref.gas_constant / (ref.gamma - 1)
        kappa = ref.gas_constant / heat
        expanded_temperature = ref.total_temperature - expanded**2 / (2 * heat)
        expanded_density = ref.static_pressure / (ref.gas_constant * expanded_temperature)
        temperature = expanded_temperature * (static / ref.static_pressure) ** kappa
        u = np.sqrt(np.maximum(2 * heat * (ref.total_temperature - temperature), 0.0))
        density = static / (ref.gas_constant * temperature)
        total = static * (ref.total_temperature / temperature) ** (1 / kappa)
        return expanded_density * expanded, u, density, static, temperature, total
