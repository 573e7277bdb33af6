"""The spacing of the points as a numerical term: coarser grids of the same points, and cores that are not resolved."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.physics.fields.core_response import core_error
from wakeledger.physics.vortices.identify import Vortex
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import OUTPUTS, estimate_of
from wakeledger.run.chain.places import sampled_mask
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.uncertainty.changes import changes, changes_with, with_induced_drag

RESOLUTION = "spacing of the points"
CORES = "cores against the spacing"
#: Order claimed when a decimated grid is extrapolated; the observed order between h/a = 0.5 and 1 is 4 to 8.
ORDER = 3.0
#: Lowest order that is believed.
LOWEST = 1.0
#: Spacing over core length up to which a coarser grid shows a core well enough to tell an order.
SHOWN = 1.2
#: A change tells an order where it is this many times what noise makes of it.
CLEAR = 3.0
#: Outputs that are evaluated on geometry frozen at the nominal grid: their own method uncertainty covers them.
FROZEN = frozenset(
    {
        estimate_of("induced_drag", "wake_line"),
        estimate_of("induced_drag", "vortex_sum"),
        estimate_of("lift", "wake_line"),
    }
)
_NAMED = ("profile_drag", "induced_drag", "lift")
#: Rows and columns with which the lines that are kept begin.
_PHASES = {2: ((0, 0), (0, 1), (1, 0), (1, 1)), 4: ((0, 0), (0, 2), (2, 0), (2, 2))}

Noise = Sequence[Mapping[str, Array]]


@dataclass(frozen=True)
class Cores:
    """Vortices of a plane, and the spacing of its points about each.

    Attributes
    ----------
    vortices : sequence of Vortex
        Mirrored ones included.
    spacings : sequence of (float, float)
        Along y and z, m.
    """

    vortices: Sequence[Vortex] = ()
    spacings: Sequence[tuple[float, float]] = ()

    def per_core(self, step: float) -> list[tuple[float, float, float]]:
        """Circulation of each, m²/s, and every so-many-th spacing over its core length."""
        return [
            (one.circulation, step * dy / one.core_length, step * dz / one.core_length)
            for one, (dy, dz) in zip(self.vortices, self.spacings, strict=True)
            if one.core_length > 0
        ]

    def resolved(self, step: float) -> bool:
        """Whether every so-many-th line still shows the cores."""
        return all(max(dy, dz) <= SHOWN for _, dy, dz in self.per_core(step))

    def change(self, nominal: Reduction, counted: float, step: float) -> Array:
        """What differences over so many spacings make of the outputs by the vortices' self energy."""
        squares = sum(gamma**2 * core_error(dy, dz) for gamma, dy, dz in self.per_core(step))
        size = counted * nominal.reference.density / (8 * math.pi) * squares
        return changes_with(with_induced_drag(size, nominal.values), nominal.values)


NO_CORES = Cores()


def observed_order(near: Array, far: Array, near_noise: Array, far_noise: Array) -> Array:
    """Order with which outputs converge, from every second and every fourth line of the points.

    Parameters
    ----------
    near, far : ndarray, shape (m,)
        Change from all lines to every second, and from there to every fourth, each output's unit.
    near_noise, far_noise : ndarray, shape (m,)
        Standard deviation of what noise makes of them; NaN where it is not known.

    Returns
    -------
    ndarray, shape (m,)
        p of f = f₀ + c hᵖ, 2ᵖ = far/near, within `LOWEST` and `ORDER`: a lucky high one must not shrink the term. The
        assumed `ORDER` where a change is not clear of its noise, or the two do not go the same way.
    """
    clear = (np.abs(near) > CLEAR * near_noise) & (np.abs(far) > CLEAR * far_noise) & (near * far > 0)
    ratio = np.divide(far, near, out=np.full(near.shape, 2.0**ORDER), where=clear)
    order: Array = np.clip(np.log2(ratio), LOWEST, ORDER)
    return order


def spacing_term(chain: Chain, nominal: Reduction, noise: Noise, cores: Cores) -> NumericalTerm:
    """What the spacing of the points costs, by the plane from every second row and column of them.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    noise : sequence of mapping
        A few draws of the random errors alone.
    cores : Cores
        Vortices of the plane.

    Returns
    -------
    NumericalTerm
        Mean change over the lines kept, over 2ᵖ − 1 (scattered points: 2^(p/2) − 1) with the observed or the assumed
        order, which its note names. What the vortices' cores are known to lose with fewer points has a term of its own
        and is left out. Unknown where too few lines remain.
    """
    coarse = _coarser(chain, nominal, 2)
    if not coarse:
        return NumericalTerm(RESOLUTION, np.full(len(OUTPUTS), np.nan))
    vectors = [one.reduce(vary=vary).vector for one, vary in coarse]
    near = changes(np.mean(vectors, axis=0), nominal.vector)
    # Half of the points that stand on no lines are √2 times as far apart.
    apart = 2.0 if chain.gridding.operators() is not None else math.sqrt(2.0)
    order = _order(chain, nominal, near, coarse, noise) if cores.resolved(4) else np.full(len(OUTPUTS), ORDER)
    wider, own = (cores.change(nominal, chain.settings.counted, step) for step in (apart, 1.0))
    rest = near - (wider - own)
    size = np.where(np.abs(rest) < np.abs(near), rest, near) / (apart**order - 1)
    size[[OUTPUTS.index(name) for name in FROZEN]] = 0.0
    lower = [
        f"{order[OUTPUTS.index(name)]:.1f} for the {name.replace('_', ' ')}"
        for name in _NAMED
        if order[OUTPUTS.index(name)] < ORDER
    ]
    said = f"order {ORDER:g}, as assumed: no observed order below it is clear of the noise"
    if lower:
        said = (
            f"the observed order of convergence where it is below {ORDER:g} ({', '.join(lower)}), else with {ORDER:g}"
        )
    return NumericalTerm(RESOLUTION, size, note=f"The term for the spacing of the points is extrapolated with {said}.")


def _coarser(chain: Chain, nominal: Reduction, step: int) -> list[tuple[Chain, Variation]]:
    found = []
    for phase in _PHASES[step]:
        try:
            coarse = chain.with_gridding(chain.gridding.decimated(step, phase=phase))
        except DataError:
            continue
        mask = sampled_mask(nominal.region.mask, nominal.flow.grid, coarse.gridding.grid)
        found.append((coarse, Variation(mask=mask)))
    return found


def _order(
    chain: Chain, nominal: Reduction, near: Array, coarse: Sequence[tuple[Chain, Variation]], noise: Noise
) -> Array:
    assumed = np.full(len(OUTPUTS), ORDER)
    if not noise and not chain.settings.computed:
        return assumed
    coarsest = _coarser(chain, nominal, 4) if chain.gridding.operators() is not None else []
    if not coarsest:
        return assumed

    def means(errors: Mapping[str, Array]) -> tuple[Array, Array, Array]:
        fine = chain.reduce(errors, vary=Variation(mask=nominal.region.mask), estimates=False).vector
        two, four = (
            np.mean([one.reduce(errors, vary=vary, estimates=False).vector for one, vary in them], axis=0)
            for them in (coarse, coarsest)
        )
        return fine, two, four

    _, two, four = means({})
    drawn = [means(errors) for errors in noise]
    near_noise = far_noise = np.zeros(len(OUTPUTS))
    if drawn:
        near_noise, far_noise = (np.std([one[k + 1] - one[k] for one in drawn], axis=0, ddof=1) for k in (0, 1))
    found = observed_order(near, four - two, near_noise, far_noise)
    return np.where(np.isfinite(found), found, ORDER)


def core_term(chain: Chain, nominal: Reduction, cores: Cores) -> NumericalTerm | None:
    """What differences over the spacing take from the self energy of the vortices.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its reduction.
    cores : Cores
        Its vortices.

    Returns
    -------
    NumericalTerm or None
        The error that the program's own differences make of a Gaussian of that circulation and core
        (`wakeledger.physics.fields.core_response`); None without vortices.

    Notes
    -----
    Where a core is coarser than 1.5 spacings, every second line holds nothing of it, and decimation says little. The
    error is not taken out of the value: cores are Gaussian to some extent only.
    """
    if not cores.per_core(1):
        return None
    return NumericalTerm(CORES, cores.change(nominal, chain.settings.counted, 1))
