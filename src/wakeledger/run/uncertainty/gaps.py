"""Filled places as a numerical term: what the missing points may have been, drawn and reduced by the very chain.

The gaps of the lattice are simulated given the data around them (`wakeledger.intake.gridding.conditional`), all
channels of the flow state together; each draw is a plane like the nominal one with other values in its gaps.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.intake.gridding import Gridding
from wakeledger.intake.gridding.conditional import Hole, drawn_deviations, find_holes
from wakeledger.intake.gridding.tensor import TensorScheme
from wakeledger.intake.gridding.window import CutScheme
from wakeledger.intake.state import State
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.stream.reference import Reference

#: Draws of the gaps; the size of the term is then known within a seventh.
DRAWS = 24
#: Channels of a flow state that may be missing.
_CHANNELS = ("u", "v", "w", "total_pressure", "static_pressure", "density", "temperature")


@dataclass(frozen=True, eq=False)
class _DrawnGridding(Gridding):
    """A gridding that takes deviations of its gaps behind the values of the points."""

    rows: slice = field(default_factory=lambda: slice(None))
    columns: slice = field(default_factory=lambda: slice(None))
    tensor: TensorScheme | None = None

    def apply(self, values: Array, *, odd: bool = False) -> Array:
        """Grid values at the points, gaps moved by what stands behind them."""
        fields = super().apply(values[..., : self.n], odd=odd)
        assert self.tensor is not None
        shape = self.tensor.missing.shape
        deviations = self.tensor.resampled(values[..., self.n :].reshape(-1, *shape))[:, self.rows, self.columns]
        return fields + deviations.reshape(fields.shape)


@dataclass(frozen=True)
class _DrawnChain(Chain):
    """A chain whose gaps deviate from their fill.

    Attributes
    ----------
    deviations : mapping of str to ndarray
        By channel of the state, on the flat lattice.
    """

    deviations: Mapping[str, Array] = field(default_factory=dict)

    def state(self, reference: Reference, errors: Mapping[str, Array] | None = None) -> State:
        """The state at the points, and behind it the deviations."""
        state = super().state(reference, errors or {})
        longer: dict[str, Any] = {}
        for name in _CHANNELS:
            values = getattr(state, name)
            if values is not None:
                added = self.deviations.get(name)
                if added is None:
                    added = np.zeros(next(iter(self.deviations.values())).size)
                longer[name] = np.concatenate([np.broadcast_to(values, state.u.shape), added])
        return replace(state, **longer)


def _tensor(gridding: Gridding) -> tuple[TensorScheme, slice, slice] | None:
    """The scheme on its lattice and the part of its grid that is kept; None for scattered points."""
    scheme, rows, columns = gridding.scheme, slice(None), slice(None)
    if isinstance(scheme, CutScheme):
        rows, columns, scheme = scheme.rows, scheme.columns, scheme.whole
    return (scheme, rows, columns) if isinstance(scheme, TensorScheme) else None


def gap_draws(
    chain: Chain, nominal: Reduction, noise: Sequence[Mapping[str, Array]], *, draws: int = DRAWS, seed: int = 0
) -> Array | None:
    """Changes of the outputs when the gaps hold what they may have held.

    Parameters
    ----------
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its reduction.
    noise : sequence of mapping
        A few draws of the random errors alone.
    draws : int
        Draws of the gaps.
    seed : int
        Of the draws.

    Returns
    -------
    ndarray, shape (draws, m), or None
        None where the points stand on no lattice, or the data beside a gap do not tell what it may hold.
    """
    found = _tensor(chain.gridding)
    if found is None:
        return None
    scheme, rows, columns = found
    missing = scheme.missing
    if not missing.any():
        return None
    state = chain.state(nominal.reference)
    names = [name for name in _CHANNELS if _varies(getattr(state, name))]
    fields = _lattice(chain.gridding, scheme, state, names)
    still = chain.state(nominal.reference)
    noisy = None
    if noise:
        moved = [chain.state(nominal.reference, errors) for errors in noise]
        noisy = np.stack([_lattice(chain.gridding, scheme, _less(one, still, names), names) for one in moved])
    holes = find_holes(fields, missing, scheme.lattice.y, scheme.lattice.z, noise=noisy)
    if not all(hole.known for hole in holes if _kept(hole, scheme, rows, columns)):
        return None
    holes = tuple(hole for hole in holes if hole.known)
    gridding = _DrawnGridding(
        **{name: getattr(chain.gridding, name) for name in Gridding.__dataclass_fields__},
        rows=rows,
        columns=columns,
        tensor=scheme,
    )
    rng = np.random.default_rng([seed, 17])
    vary = Variation(mask=nominal.region.mask)
    changes = []
    for _ in range(draws):
        drawn = drawn_deviations(holes, rng, len(names), (missing.shape[0], missing.shape[1]))
        drawn = _mirrored(drawn, chain.gridding, names)
        other = _DrawnChain(
            **{name: getattr(chain, name) for name in Chain.__dataclass_fields__ if name != "gridding"},
            gridding=gridding,
            deviations={name: one.ravel() for name, one in zip(names, drawn, strict=True)},
        )
        changes.append(other.reduce(vary=vary).vector - nominal.vector)
    return np.stack(changes)


def _varies(values: Array | None) -> bool:
    return values is not None and np.ndim(values) > 0 and bool(np.isfinite(values).any())


def _lattice(gridding: Gridding, scheme: TensorScheme, state: State, names: Sequence[str]) -> Array:
    """Channels of a state on the lattice, gaps filled, shape (c, nr, nc)."""
    fields = []
    for name in names:
        values = np.broadcast_to(getattr(state, name), state.u.shape)
        if gridding.mirror is not None:
            values = gridding.mirror.values(values, odd=name in ("v", "w") and gridding.is_odd(name))
        fields.append(scheme.lattice_fields(values[None])[0])
    return np.stack(fields)


def _less(state: State, still: State, names: Sequence[str]) -> State:
    """What errors alone change in a state."""
    return replace(state, **{name: getattr(state, name) - getattr(still, name) for name in names})


def _kept(hole: Hole, scheme: TensorScheme, rows: slice, columns: slice) -> bool:
    """Whether a gap reaches into the part of the grid that is kept."""
    touched: NDArray[np.bool_] = np.zeros(scheme.missing.size, dtype=bool)
    touched[hole.cells] = True
    reach = scheme.resampled(touched.reshape(1, *scheme.missing.shape).astype(float))[0, rows, columns]
    return bool(np.abs(reach).max(initial=0.0) > 1e-3)


def _mirrored(drawn: Array, gridding: Gridding, names: Sequence[str]) -> Array:
    """Draws that have the symmetry of the reflection plane, of the same size."""
    if gridding.mirror is None:
        return drawn
    axis = -1 if gridding.mirror.axis == "y" else -2
    signs = np.array([-1.0 if name in ("v", "w") and gridding.is_odd(name) else 1.0 for name in names])
    # A gap and its twin are drawn apart; their mean has half the variance.
    paired: Array = (drawn + signs[:, None, None] * np.flip(drawn, axis=axis)) / np.sqrt(2)
    return paired
