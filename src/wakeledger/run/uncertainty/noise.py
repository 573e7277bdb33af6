"""Noise of the crossflow, and the bias it leaves in the quadratic forms of the chain."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy import sparse

from wakeledger.confidence.correlation import squared_exponential
from wakeledger.confidence.noise_bias import modal_noise_bias, quadratic_noise_bias
from wakeledger.confidence.sampling import SourceErrors
from wakeledger.confidence.sources import InputLayout, Source
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.intake.gridding import Gridding
from wakeledger.physics.fields.boundary import Boundary
from wakeledger.physics.fields.differences import difference_matrix
from wakeledger.physics.fields.poisson import green_weights, stream_function
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.physics.fields.wall_correction import wall_part
from wakeledger.physics.fields.wall_modes import wall_modes
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.physics.methods.residual import divergence_drag
from wakeledger.physics.methods.vorticity_area import vorticity_drag
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.methods.wake_line import noise_bias as wake_line_bias
from wakeledger.physics.vortices.vortex_sum import evaluate as evaluate_vortex_sum
from wakeledger.physics.vortices.vortex_sum import noise_bias as vortex_sum_bias
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.estimates import counted_mask
from wakeledger.run.chain.outputs import estimate_of
from wakeledger.run.chain.places import mask_at
from wakeledger.run.chain.reduction import Reduction

#: Drawn error fields of each source: for its variance, and for a bias that has no closed form.
_DRAWS = 64
#: Errors drawn of each independent source at most: 64 draws of 50 000 points, fewer of more, which tell as much.
_MOST_ERRORS = 3_200_000
_FEWEST_DRAWS = 4


@dataclass(frozen=True)
class Noise:
    """Errors of the crossflow that differ from point to point, from one source.

    Attributes
    ----------
    name : str
        The source.
    variance : (float, float)
        Variance of v and w at one point of the wake, m²/s².
    outer_variance : (float, float)
        The same over all points, m²/s².
    correlation : (ndarray or None, ndarray or None)
        Correlation matrices along z and y of the raw tensor grid; None where points are independent.
    fields : ndarray, shape (2, k, nz, ny), or None
        Drawn errors of v and w on the grid, m/s; None where they are not needed.
    drawn : bool
        Whether the drawn fields are all that is known of it.
    """

    name: str
    variance: tuple[float, float]
    outer_variance: tuple[float, float]
    correlation: tuple[Array | None, Array | None] = (None, None)
    fields: Array | None = None
    drawn: bool = False

    @property
    def is_white(self) -> bool:
        """Whether every point has its own error."""
        return self.correlation[0] is None and self.correlation[1] is None


def declared_noise(
    chain: Chain, nominal: Reduction, sources: Sequence[Source], layouts: Mapping[str, InputLayout], *, seed: int
) -> tuple[Noise, ...]:
    """Noise of v and w that the survey's random and per-row sources cause.

    Parameters
    ----------
    chain : Chain
        The survey.
    nominal : Reduction
        Its nominal reduction.
    sources, layouts
        As in Monte Carlo.
    seed : int
        The survey's seed.

    Returns
    -------
    tuple of Noise
        Sources that do not reach the crossflow are left out.
    """
    found = []
    wake = mask_at(nominal.region.mask, nominal.flow.grid, chain.points.y, chain.points.z)
    still = chain.state(nominal.reference)
    for source in sources:
        if source.effect == "systematic":
            continue
        if source.prefix and all(name.startswith(source.prefix) for name in source.applies_to):
            found += _of_empty_tunnel(chain, nominal, source, layouts, seed=seed)
            continue
        correlation = _correlation(source, chain)
        # A point beside a reflection plane carries the error of its twin: only drawn fields hold that.
        independent = correlation is not None and all(matrix is None for matrix in correlation)
        independent = independent and chain.gridding.mirror is None
        count = _DRAWS
        if independent:
            count = min(_DRAWS, max(_FEWEST_DRAWS, _MOST_ERRORS // chain.points.n))
        draws = SourceErrors(source, layouts, seed=seed).draw(0, count)
        states = [
            chain.state(nominal.reference, {name: array[k] for name, array in draws.items()}) for k in range(count)
        ]
        errors = np.stack([[state.v for state in states] - still.v, [state.w for state in states] - still.w])
        if not np.nanmax(np.abs(errors)) > 0:
            continue
        inner, outer = _mean_square(errors[:, :, wake]), _mean_square(errors)
        fields = None if independent else _on_grid(chain, errors)
        found.append(Noise(source.name, inner, outer, correlation or (None, None), fields))
    return tuple(found)


def _of_empty_tunnel(
    chain: Chain, nominal: Reduction, source: Source, layouts: Mapping[str, InputLayout], *, seed: int
) -> list[Noise]:
    """Noise that taking out the empty tunnel brings in, as drawn fields on the survey's own grid."""
    if chain.empty is None:
        return []
    grid, mask = nominal.flow.grid, nominal.region.mask
    _, v, w, _, _ = chain.empty.flow(nominal.reference, grid, {})
    draws = SourceErrors(source, layouts, seed=seed).draw(0, _DRAWS)
    fields = [
        chain.empty.flow(nominal.reference, grid, {name: array[k] for name, array in draws.items()})[1:3]
        for k in range(_DRAWS)
    ]
    errors = np.stack([[v - one[0] for one in fields], [w - one[1] for one in fields]])
    if not np.abs(errors).max() > 0:
        return []
    white = source.effect == "random" and source.correlation_length is None
    none = (None, None) if white else (np.eye(0), np.eye(0))
    inner, outer = _mean_square(errors[:, :, mask]), _mean_square(errors)
    return [Noise(source.name, inner, outer, none, errors, drawn=True)]


def _on_grid(chain: Chain, errors: Array) -> Array:
    """Errors of v and w at the points, shape (2, k, n), as fields of shape (2, k, nz, ny)."""
    gridding = chain.gridding
    return np.stack(
        [
            gridding.apply(np.nan_to_num(error), odd=gridding.is_odd(name))
            for name, error in zip("vw", errors, strict=True)
        ]
    )


def _mean_square(errors: Array) -> tuple[float, float]:
    """Mean square of v and w over draws and points, those without a flow state left out; zero where there is none."""
    known = [component[np.isfinite(component)] for component in errors]
    v, w = (float(np.mean(component**2)) if component.size else 0.0 for component in known)
    return v, w


def white_noise(name: str, v: float, w: float) -> Noise:
    """Independent noise of given standard deviations of v and w, m/s."""
    return Noise(name, (v**2, w**2), (v**2, w**2))


def noise_bias(chain: Chain, nominal: Reduction, noises: Sequence[Noise]) -> dict[str, float]:
    """What noise adds on average to each quadratic output of the chain.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its nominal reduction.
    noises : sequence of Noise
        Independent noises; their biases add.

    Returns
    -------
    dict of str to float
        By output, N; to be subtracted.

    Notes
    -----
    D = ½ρ Σ_ij ξ_i g(i − j) ξ_j A with noise in ξ = ∂w/∂y − ∂v/∂z adds ½ρA Σ_ij g(i − j) cov(ξ_i, ξ_j) over the wake
    region; the crossflow energy adds ½ρ ∬(σ_v² + σ_w²) dA. Between walls or in a jet their response is added to g, as a
    few squares (`physics.fields.wall_modes`). Where points are scattered, or noise is not white for the wake line and
    the vortex sum, the mean over drawn noise fields stands in for the closed form. What the walls' own noise changes
    in the circulations and paths of these two is left out; it is below 1 % of their bias.
    """
    total: dict[str, float] = {}
    for noise in _white_together(noises):
        for name, value in _bias_of(chain, nominal, noise).items():
            total[name] = total.get(name, 0.0) + value
    return total


def _white_together(noises: Sequence[Noise]) -> list[Noise]:
    """White noises as one: their closed forms are linear in the variances, and each is costly on a large plane."""
    white = [noise for noise in noises if noise.is_white and noise.fields is None]
    others = [noise for noise in noises if not (noise.is_white and noise.fields is None)]
    if not white:
        return others
    variance, outer = np.sum([(noise.variance, noise.outer_variance) for noise in white], axis=0)
    name = ", ".join(noise.name for noise in white)
    return [Noise(name, (variance[0], variance[1]), (outer[0], outer[1])), *others]


def _bias_of(chain: Chain, nominal: Reduction, noise: Noise) -> dict[str, float]:
    grid, mask, reference = nominal.flow.grid, nominal.region.mask, nominal.reference
    gridding, counted = chain.gridding, chain.settings.counted
    boundary, density = chain.settings.boundary.whole, reference.density
    energy = estimate_of("induced_drag", "energy_area")
    line, vortices = estimate_of("induced_drag", "wake_line"), estimate_of("induced_drag", "vortex_sum")
    cuts, parts = chain.frozen.cuts, chain.frozen.parts
    closed = not noise.drawn and gridding.operators() is not None
    if closed:
        found = _closed_forms(gridding, mask, noise, density, boundary)
    elif noise.fields is None:
        return {}
    else:
        v, w = noise.fields
        found = {
            "induced_drag": _mean(vorticity_drag(v, w, grid, mask, density=density, boundary=boundary)),
            "induced_drag_free_air": _mean(vorticity_drag(v, w, grid, mask, density=density)),
            "residual_drag": _mean(divergence_drag(v, w, grid, mask, density=density, boundary=boundary)),
            energy: _mean(crossflow_energy(v, w, grid, density=density)),
        }
    walls = found["induced_drag"] - found["induced_drag_free_air"]
    if closed:
        found[energy] = 0.5 * density * _energy_gain(gridding, noise.outer_variance)
        white = noise.is_white and gridding.kind == "uniform" and gridding.mirror is None
        if white and cuts is not None:
            by_v, by_w = (np.full(grid.shape, variance) for variance in noise.variance)
            found[line] = wake_line_bias(cuts, by_v, by_w, density) + counted * walls
        if white and parts is not None:
            found[vortices] = vortex_sum_bias(parts, *noise.variance, density) + walls
    found = {name: value if name == line else counted * value for name, value in found.items()}
    if noise.fields is not None:
        above = counted_mask(chain.settings, mask, grid)
        if cuts is not None and line not in found:
            found[line] = counted * walls + _paired_mean(
                lambda v, w: evaluate_wake_line(cuts, v, w, density, reference.speed, mask=above).induced_drag,
                nominal,
                noise.fields,
            )
        if parts is not None and vortices not in found:
            found[vortices] = counted * (
                walls + _paired_mean(lambda v, w: evaluate_vortex_sum(parts, v, w, density), nominal, noise.fields)
            )
    found[estimate_of("total_drag", "momentum_area")] = found[energy]
    return found


def _energy_gain(gridding: Gridding, variance: tuple[float, float]) -> float:
    """∬(σ_v² + σ_w²) dA of the gridded field, from the variances of v and w at a point, m⁴/s²."""
    total = 0.0
    for name, size in zip("vw", variance, strict=True):
        along_z, along_y = (one.power(2).sum(axis=1) for one in _operators(gridding, odd=gridding.is_odd(name)))
        total += size * float(gridding.grid.integrate(np.outer(along_z, along_y)))
    return total


def _operators(gridding: Gridding, *, odd: bool) -> tuple[sparse.csr_array, sparse.csr_array]:
    """Resampling along z and along y, without zeros."""
    if gridding.kind == "uniform" and gridding.mirror is None:
        return sparse.eye_array(gridding.grid.nz, format="csr"), sparse.eye_array(gridding.grid.ny, format="csr")
    operators = gridding.operators(odd=odd)
    assert operators is not None
    along_z, along_y = operators
    return sparse.csr_array(along_z), sparse.csr_array(along_y)


def _closed_forms(gridding: Gridding, mask: Mask, noise: Noise, density: float, boundary: Boundary) -> dict[str, float]:
    grid, region = gridding.grid, mask.astype(float)
    scale = density * grid.cell_area
    kernel = scale * green_weights(grid.nz, grid.ny, grid.dz, grid.dy)
    walls = wall_modes(grid, boundary, mask)
    walls_of_potential = wall_modes(grid, boundary, mask, of="divergence")
    net = _without_net_source(grid, mask, boundary)

    @cache
    def gains(axis: str, odd: bool) -> tuple[float, float, float]:
        """What unit noise adds through the derivative along an axis: in free air, and by walls to either form."""
        wz, wy = _operators(gridding, odd=odd)
        slope = (
            (sparse.csr_array(difference_matrix(grid.nz) @ wz / grid.dz), wy)
            if axis == "z"
            else (wz, sparse.csr_array(difference_matrix(grid.ny) @ wy / grid.dy))
        )
        free = quadratic_noise_bias(*slope, kernel, region, 1.0, correlation=noise.correlation)
        of_walls, of_potential, of_net = (
            scale * modal_noise_bias(*slope, *modes, region, 1.0, correlation=noise.correlation)
            for modes in (walls, walls_of_potential, net)
        )
        return free, free + of_walls, free + of_potential + of_net

    # D = ∂/∂y of w and −∂/∂z of v for the vorticity, ∂/∂y of v and ∂/∂z of w for the divergence.
    v, w = noise.variance
    of_v, of_w = gridding.is_odd("v"), gridding.is_odd("w")
    return {
        "induced_drag": v * gains("z", of_v)[1] + w * gains("y", of_w)[1],
        "induced_drag_free_air": v * gains("z", of_v)[0] + w * gains("y", of_w)[0],
        "residual_drag": v * gains("y", of_v)[2] + w * gains("z", of_w)[2],
    }


def _without_net_source(grid: UniformGrid, mask: Mask, boundary: Boundary) -> tuple[Array, Array]:
    """What taking the mean divergence off the region changes in Σ σ g σ, as the difference of two squares.

    With the sum s of σ over the n points and b = g 1, the form loses (2s/n) Σ b σ − (s/n)² Σ b.
    """
    count = int(np.count_nonzero(mask))
    if not count:
        return np.zeros(0), np.zeros((0, *grid.shape))
    one = mask.astype(float)
    response = np.where(mask, stream_function(one, grid) + wall_part(one, grid, boundary, of="divergence"), 0.0)
    other = one * (response.sum() / count**2) - response * (2 / count)
    size = math.sqrt(float(np.linalg.norm(other)) / math.sqrt(count))
    return np.array([0.25, -0.25]), np.stack([size * one + other / size, size * one - other / size])


def _mean(values: Array) -> float:
    return float(np.mean(values))


def _paired_mean(form: Callable[[Array, Array], Array], nominal: Reduction, fields: Array) -> float:
    """Mean change of a quadratic form under drawn errors, each taken with both signs so that linear parts cancel."""
    v, w = nominal.flow.v, nominal.flow.w
    still = form(v, w)
    return _mean((form(v + fields[0], w + fields[1]) + form(v - fields[0], w - fields[1])) / 2 - still)


def _correlation(source: Source, chain: Chain) -> tuple[Array | None, Array | None] | None:
    """Correlation of a source's errors along z and y of the raw tensor grid; None where it does not separate."""
    operators = chain.gridding.operators()
    if operators is None:
        return None
    if source.effect == "per_row":
        rows = chain.gridding.row_index
        along_y = np.unique(chain.points.z[rows == rows[0]]).size == 1
        count = operators[1].shape[1] if along_y else operators[0].shape[1]
        together = np.ones((count, count))
        return (None, together) if along_y else (together, None)
    if source.correlation_length is None:
        return None, None
    grid = chain.gridding.grid
    if chain.gridding.kind != "uniform":
        return None
    return (
        squared_exponential(grid.z, source.correlation_length),
        squared_exponential(grid.y, source.correlation_length),
    )
