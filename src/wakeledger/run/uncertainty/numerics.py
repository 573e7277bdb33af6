"""Numerical terms of the uncertainty: what a choice that could have been made otherwise is worth.

Each term is the change of every output of the chain when one choice is made differently: the wake region's edge, the
spacing of the points, the spline between them, the filling of gaps, the zeros taken from the outer flow.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np

from wakeledger.confidence.terms import NumericalTerm
from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.physics.fields.outer_flow import LEAST_SHARE, OuterFlow
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.methods.residual import residual_drag
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.outputs import OUTPUTS, estimate_of
from wakeledger.run.chain.places import sampled_mask
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.gridded import Regrid
from wakeledger.run.uncertainty.changes import changes, changes_with
from wakeledger.run.uncertainty.gaps import gap_draws
from wakeledger.run.uncertainty.spacing import CORES as CORES
from wakeledger.run.uncertainty.spacing import FROZEN, NO_CORES, Cores, core_term, spacing_term
from wakeledger.run.uncertainty.spacing import ORDER as ORDER
from wakeledger.run.uncertainty.spacing import RESOLUTION as RESOLUTION
from wakeledger.run.uncertainty.wake_edge import MASK as MASK
from wakeledger.run.uncertainty.wake_edge import mask_term

RESAMPLING = "spline between the points"
GAPS = "filled points"
LOSS_ZERO = "zero of the total pressure"
OFFSET_ZERO = "zero of the flow angles"
SWIRL = "rotation of the stream"
CUT = "inboard cut"
EDGE = "edge of the window"
#: Width of the strip along the window's edge, in cells.
EDGE_CELLS = 3
PAIR = "bound vortex in the residual"
SPLIT = "border between profile and wave drag"
PRESSURE = "static pressure that was not measured"
METHOD = "choices inside {}"

#: Doubt of what the bound vortex's predicted disturbance takes out of the residual, as a share of it (k = 1): the bound
#: line is taken as straight and level.
PAIR_DOUBT = 0.2
#: Shift that shows which outputs hang on a zero, SI.
_TRIED = 1e-3
#: Factors on a distance that bound the plausible choices.
SWEEP = (0.5, 1.5)
#: Estimates that integrate over the same region as a row, and so share its doubt.
_SAME_REGION = {
    estimate_of("profile_drag", "entropy_area"): "profile_drag",
    estimate_of("induced_drag", "wake_line"): "induced_drag",
    estimate_of("lift", "wake_line"): "lift",
}


def numerical_terms(
    chain: Chain,
    nominal: Reduction,
    *,
    outer: OuterFlow,
    regrid: Regrid,
    method_uncertainty: Mapping[str, float],
    noise: Sequence[Mapping[str, Array]] = (),
    cores: Cores = NO_CORES,
) -> tuple[NumericalTerm, ...]:
    """All numerical terms of one plane.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its nominal reduction.
    outer : OuterFlow
        Zeros found in the outer flow, with their uncertainties.
    regrid : Regrid
        Makes a gridding of the same points with one choice made differently.
    method_uncertainty : mapping of str to float
        Standard uncertainty that an estimate's own method adds, by output, N.
    noise : sequence of mapping
        A few draws of the random errors alone, to tell the region's own effect from theirs.
    cores : Cores
        Vortices of the plane.

    Returns
    -------
    tuple of NumericalTerm
        Over `wakeledger.run.chain.outputs.OUTPUTS`; terms that do not apply are left out.
    """
    edge = mask_term(chain, nominal, noise, zero_uncertainty=outer.loss_zero_uncertainty)
    terms: list[NumericalTerm | None] = [
        replace(edge, standard_uncertainty=_followed(edge.standard_uncertainty)),
        spacing_term(chain, nominal, noise, cores),
        core_term(chain, nominal, cores),
    ]
    if chain.gridding.kind != "uniform":
        terms.append(_resampling_term(chain, nominal, regrid))
    if chain.gridding.filled.any():
        terms.append(_gap_term(chain, nominal, regrid, noise))
    # Where too little outer flow is left, no zero is taken out, and what is not done has no doubt of its own: by how
    # much the pressures and the direction are off is for the declared sources to say.
    if outer.share >= LEAST_SHARE:
        terms += [
            _shifted(chain, nominal, LOSS_ZERO, outer.loss_zero_uncertainty, lambda size: [Variation(loss_shift=size)]),
            _shifted(chain, nominal, OFFSET_ZERO, outer.offset_uncertainty, _both_offsets),
        ]
        if chain.swirls:
            terms.append(
                _shifted(chain, nominal, SWIRL, outer.swirl_uncertainty, lambda size: [Variation(swirl_shift=size)])
            )
    terms.append(_edge_term(chain, nominal, noise))
    if regrid.cut:
        terms.append(_cut_term(chain, nominal, regrid))
    if chain.settings.primary == "velocity" and not {"total_pressure", "static_pressure"} & chain.measured:
        terms.append(_pressure_term(chain, nominal))
    terms.append(_pair_term(chain, nominal))
    if nominal.split_uncertainty:
        terms.append(_split_term(nominal))
    for name, value in method_uncertainty.items():
        vector = np.zeros(len(OUTPUTS))
        # Of an estimate that has no value nothing is in doubt; one whose method's doubt is unknown is itself unknown.
        vector[OUTPUTS.index(name)] = value if np.isfinite(nominal.values[name]) else 0.0
        terms.append(NumericalTerm(METHOD.format(name), vector))
    return tuple(term for term in terms if term is not None)


def _deviation(chain: Chain, nominal: Reduction, vary: Variation) -> Array:
    return changes(chain.reduce(vary=vary).vector, nominal.vector)


def _beyond_noise(change: Callable[[Mapping[str, Array]], Array], noise: Sequence[Mapping[str, Array]]) -> Array:
    """What a choice changes, less what the points' noise makes of it: that is a source of its own."""
    found = change({})
    if not noise:
        return found
    by_noise = np.mean([np.square(change(errors) - found) for errors in noise], axis=0)
    less: Array = np.sign(found) * np.sqrt(np.maximum(np.square(found) - by_noise, 0.0))
    return less


def _followed(vector: Array) -> Array:
    """Changes in which estimates over the same region as a row have those of the row."""
    for follower, leader in _SAME_REGION.items():
        vector[OUTPUTS.index(follower)] = vector[OUTPUTS.index(leader)]
    return vector


def _edge_term(chain: Chain, nominal: Reduction, noise: Sequence[Mapping[str, Array]]) -> NumericalTerm | None:
    """What lies along the window's edge: as much may lie beyond it. None where the wake keeps clear of the edge."""
    strip = np.ones(nominal.flow.grid.shape, dtype=bool)
    strip[EDGE_CELLS:-EDGE_CELLS, EDGE_CELLS:-EDGE_CELLS] = False
    mask = nominal.region.mask
    if not (mask & strip).any():
        return None

    def change(errors: Mapping[str, Array]) -> Array:
        without, same = (
            chain.reduce(errors, vary=Variation(mask=region), estimates=False).vector
            for region in (mask & ~strip, mask)
        )
        return changes(without, same, estimates=False)

    return NumericalTerm(EDGE, _followed(_beyond_noise(change, noise)), "rectangular")


def _resampling_term(chain: Chain, nominal: Reduction, regrid: Regrid) -> NumericalTerm:
    other = chain.with_gridding(regrid(degree=5, spacing=(nominal.flow.grid.dy, nominal.flow.grid.dz)))
    same = other.gridding.grid.shape == nominal.flow.grid.shape
    vary = Variation(mask=nominal.region.mask if same else None)
    found = changes(other.reduce(vary=vary).vector, nominal.vector)
    found[[OUTPUTS.index(name) for name in FROZEN]] = 0.0
    return NumericalTerm(RESAMPLING, found)


def _pressure_term(chain: Chain, nominal: Reduction) -> NumericalTerm:
    """Doubt of a static pressure from the crossflow: half of what the pressure that turns it is worth.

    The crossflow is taken to be in equilibrium with the pressure. A sheet that rolls up, or a plane with curvature of
    its own, is not, by a part of that pressure.
    """
    without = replace(chain, settings=replace(chain.settings, turning_pressure=False))
    return NumericalTerm(PRESSURE, _deviation(without, nominal, Variation(mask=nominal.region.mask)) / 2)


def _pair_term(chain: Chain, nominal: Reduction) -> NumericalTerm:
    """Doubt of the residual, which the total drag shares."""
    whole = residual_drag(
        nominal.flow,
        nominal.reference,
        nominal.loss_free,
        nominal.region.mask,
        boundary=chain.settings.boundary.whole,
        blockage=nominal.wake_blockage,
    )
    doubt = PAIR_DOUBT * abs(chain.settings.counted * float(sum(whole)) - sum(nominal.residual_parts))
    return NumericalTerm(PAIR, changes_with(dict.fromkeys(("residual_drag", "total_drag"), doubt), nominal.values))


def _split_term(nominal: Reduction) -> NumericalTerm:
    """The border between profile and wave drag: what one gains, the other loses."""
    size = nominal.split_uncertainty
    return NumericalTerm(SPLIT, changes_with({"profile_drag": -size, "wave_drag": size}, nominal.values))


def _gap_term(chain: Chain, nominal: Reduction, regrid: Regrid, noise: Sequence[Mapping[str, Array]]) -> NumericalTerm:
    """What the gaps may have held, given the data around them; where those do not tell, what filling does beside."""
    drawn = gap_draws(chain, nominal, noise)
    if drawn is None:
        return _pattern_term(chain, nominal, regrid)
    known = np.where(np.isfinite(nominal.vector), drawn, 0.0)
    size = np.sqrt(np.mean(np.square(known), axis=0))
    # Rows that the gaps move together with the drag have its sign.
    together = np.sign(known.T @ known[:, OUTPUTS.index(nominal.drag)])
    return NumericalTerm(GAPS, np.where(together < 0, -size, size))


def _pattern_term(chain: Chain, nominal: Reduction, regrid: Regrid) -> NumericalTerm:
    """Remove measured points in the same pattern beside the true gaps, fill them, and see what that does."""
    state = chain.state(nominal.reference)
    usable = np.isfinite(state.v) & np.isfinite(state.w)
    inside = ~usable
    found = []
    step_y, step_z = chain.gridding.raw_spacing
    places = np.stack([chain.points.y, chain.points.z], axis=1)
    gap = places[inside]
    if gap.size == 0:
        gap = _filled_places(chain)
    grid = chain.gridding.grid
    spacing = None if chain.gridding.kind == "uniform" else (grid.dy, grid.dz)
    moves = ((2, 0), (-2, 0), (0, 2), (0, -2), (2, 2), (-2, -2), (2, -2), (-2, 2))
    # Scattered points take seconds to grid anew.
    for dy, dz in moves if chain.gridding.operators() is not None else moves[:2]:
        moved = gap + np.array([dy * step_y, dz * step_z])
        also_missing = _nearest(places, moved, (step_y, step_z))
        if not also_missing.any():
            continue
        try:
            gridding = regrid(usable=usable & ~also_missing, spacing=spacing)
        except DataError:
            continue
        if gridding.grid != chain.gridding.grid:
            continue
        trial = replace(chain, gridding=gridding)
        vector = trial.reduce(vary=Variation(mask=nominal.region.mask)).vector
        found.append(changes(vector, nominal.vector))
    if not found:
        # No such pattern fits beside the gaps: all that the filled places contribute is in doubt.
        without = nominal.region.mask & ~chain.gridding.filled
        return NumericalTerm(GAPS, _deviation(chain, nominal, Variation(mask=without)))
    return NumericalTerm(GAPS, np.sqrt(np.mean(np.square(found), axis=0)))


def _cut_term(chain: Chain, nominal: Reduction, regrid: Regrid) -> NumericalTerm | None:
    """What half the inboard cut, and half as much again, would have given."""
    grid = chain.gridding.grid
    spacing = None if chain.gridding.kind == "uniform" else (grid.dy, grid.dz)
    found = []
    for factor in SWEEP:
        gridding = regrid(cut_factor=factor, spacing=spacing)
        vary = Variation(mask=sampled_mask(nominal.region.mask, grid, gridding.grid))
        other = chain.with_gridding(gridding)
        if chain.empty is not None:
            other = replace(other, empty=chain.empty.with_cut(factor))
        found.append(changes(other.reduce(vary=vary).vector, nominal.vector))
    frozen = [OUTPUTS.index(name) for name in FROZEN]
    size = np.abs(found).max(axis=0)
    size[frozen] = 0.0
    return NumericalTerm(CUT, size / np.sqrt(3), "rectangular")


def _filled_places(chain: Chain) -> Array:
    grid = chain.gridding.grid
    yy, zz = grid.mesh()
    filled = chain.gridding.filled
    places: Array = np.stack([yy[filled], zz[filled]], axis=1)
    return places


def _nearest(places: Array, wanted: Array, spacing: tuple[float, float]) -> Mask:
    """Points within half a spacing of any wanted place."""
    from scipy.spatial import cKDTree

    scaled, targets = places / np.asarray(spacing), wanted / np.asarray(spacing)
    distance, _ = cKDTree(targets).query(scaled, distance_upper_bound=0.75)
    found: Mask = np.isfinite(distance)
    return found


def _both_offsets(size: float) -> list[Variation]:
    return [Variation(crossflow_shift=pair) for pair in ((size, 0.0), (0.0, size))]


def _shifted(
    chain: Chain, nominal: Reduction, name: str, size: float, varied: Callable[[float], Sequence[Variation]]
) -> NumericalTerm:
    """What the doubt of a zero moves, several shifts added in squares; what hangs on it is unknown where that is."""
    found = [_deviation(chain, nominal, vary) for vary in varied(size if np.isfinite(size) else _TRIED)]
    vector = found[0] if len(found) == 1 else np.sqrt(sum(np.square(one) for one in found))
    if not np.isfinite(size):
        vector = np.where(vector == 0, 0.0, np.nan)
    return NumericalTerm(name, vector)
