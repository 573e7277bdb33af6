"""The quadratic form behind the wake line: circulation of cells times their path stream function.

D_i = ½ρ Σ Γ_c ψ_c over the cells of the wake, both factors line integrals of the measured crossflow, the constant of ψ
and a uniform crossflow read from closed lines around the wake. With the cells given it is quadratic in (v, w), so its
derivatives and what noise adds to it are exact and in closed form.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.physics.fields.path_integrals import (
    OuterFlow,
    adjoint_of_circulation,
    adjoint_of_paths,
    cell_integrals,
    cell_weights,
    centred_integral,
    integrals_over_cells,
)

Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class PathForm:
    """Where the form is evaluated.

    Attributes
    ----------
    grid : UniformGrid
        The grid.
    cells : ndarray of bool, shape (..., nz − 1, ny − 1)
        Cells of the wake; a leading shape gives each field its own wake.
    outer : OuterFlow
        How the outer flow is read.
    """

    grid: UniformGrid
    cells: Mask
    outer: OuterFlow


@dataclass(frozen=True, eq=False)
class PathFields:
    """Both factors of the form on the block of cells around the wake; the fields' leading shape (...) goes before.

    Attributes
    ----------
    y, z : ndarray, shape (columns,), (rows,)
        Centres of the block's cells, m.
    inside : ndarray of bool, shape (..., rows, columns)
        Cells of the wake.
    circulation : ndarray, shape (..., rows, columns)
        Line integral around each cell, in the wake or not, m²/s.
    stream_function : ndarray, shape (..., rows, columns)
        ψ of the wake itself: averaged over all paths, without constant and offset, m²/s.
    by_row, by_column : ndarray, shape (..., nz), (..., ny)
        ΣΓψ with each row, each column as the base line, less the mean over all base lines, m⁴/s².
    offset_v, offset_w : ndarray, shape (...)
        Uniform crossflow that was removed, m/s.
    """

    y: Array
    z: Array
    inside: Mask
    circulation: Array
    stream_function: Array
    by_row: Array
    by_column: Array
    offset_v: Array
    offset_w: Array


def path_fields(
    form: PathForm, v: Array, w: Array, *, offset: tuple[Array | float, Array | float] | None = None
) -> PathFields:
    """Both factors of the form for measured fields.

    Parameters
    ----------
    form : PathForm
        Where it is evaluated.
    v, w : ndarray, shape (..., nz, ny)
        Crossflow, m/s.
    offset : (v0, w0), optional
        Uniform crossflow to remove, m/s, scalars or shape (...); read from the outer flow where not given.

    Returns
    -------
    PathFields
    """
    grid, outer = form.grid, form.outer
    rows, columns = _block(form.cells)
    inside: Mask = form.cells[..., rows, columns]
    mid_z, mid_y = cell_weights(grid.nz)[rows], cell_weights(grid.ny)[columns]
    run_z, run_y = centred_integral(grid.nz) * grid.dz, centred_integral(grid.ny) * grid.dy
    to_z, to_y = _path_to_cells(grid.nz)[rows] * grid.dz, _path_to_cells(grid.ny)[columns] * grid.dy
    circulation = _block_circulation(v, w, grid, rows, columns)
    # Only the points about the block and the means along whole rows and columns enter.
    about_z, about_y = _held(mid_z), _held(mid_y)
    straight_z = (to_z @ v[..., about_y]) @ mid_y[:, about_y].T
    straight_y = mid_z[:, about_z] @ (w[..., about_z, :] @ to_y.T)
    upward, across = v.mean(axis=-1) @ to_z.T, w.mean(axis=-2) @ to_y.T
    psi = (straight_z - straight_y + upward[..., :, None] - across[..., None, :]) / 2
    held = circulation * inside
    in_y = held.sum(axis=-2) @ mid_y
    in_z = held.sum(axis=-1) @ mid_z
    # Each base line: up or across from it, less its own level, plus the way along it.
    by_row = (
        (held * straight_z).sum(axis=(-2, -1))[..., None]
        - np.einsum("...zy,...y->...z", v, in_y) @ run_z.T
        - np.einsum("...zy,...y->...z", w, in_y @ run_y)
    )
    by_column = (
        -(held * straight_y).sum(axis=(-2, -1))[..., None]
        + np.einsum("...zy,...z->...y", w, in_z) @ run_y.T
        + np.einsum("...zy,...z->...y", v, in_z @ run_z)
    )
    middle = (by_row.mean(axis=-1, keepdims=True) + by_column.mean(axis=-1, keepdims=True)) / 2
    found = outer.offset(v, w) if offset is None else offset
    v0, w0 = (np.broadcast_to(np.asarray(part, float), v.shape[:-2]) for part in found)
    y, z = _cell_centres(grid, rows, columns)
    foreign = outer.constant(v, w)[..., None, None]
    foreign = foreign + v0[..., None, None] * (z - outer.z0)[:, None] - w0[..., None, None] * (y - outer.y0)
    return PathFields(y, z, inside, circulation, psi - foreign, by_row - middle, by_column - middle, v0, w0)


@lru_cache(maxsize=16)
def _path_to_cells(n: int) -> Array:
    """Integral from all starting points alike to the value of each cell, for unit spacing, shape (n − 1, n)."""
    matrix: Array = cell_weights(n) @ centred_integral(n)
    matrix.flags.writeable = False
    return matrix


def _held(weights: Array) -> slice:
    """Points from the first to the last that any row of weights takes."""
    places = np.flatnonzero(weights.any(axis=0))
    return slice(int(places[0]), int(places[-1]) + 1)


def _block(cells: Mask) -> tuple[slice, slice]:
    """Rows and columns that hold the wake and one cell around it."""
    everywhere: Mask = np.asarray(cells.reshape(-1, *cells.shape[-2:]).any(axis=0), dtype=bool)
    rows, columns = np.flatnonzero(everywhere.any(axis=1)), np.flatnonzero(everywhere.any(axis=0))
    nz, ny = everywhere.shape
    if rows.size == 0:
        return slice(0, nz), slice(0, ny)
    return (
        slice(max(0, int(rows[0]) - 1), min(nz, int(rows[-1]) + 2)),
        slice(max(0, int(columns[0]) - 1), min(ny, int(columns[-1]) + 2)),
    )


def _cell_centres(grid: UniformGrid, rows: slice, columns: slice) -> tuple[Array, Array]:
    y = grid.y0 + grid.dy * (np.arange(columns.start, columns.stop) + 0.5)
    z = grid.z0 + grid.dz * (np.arange(rows.start, rows.stop) + 0.5)
    return y, z


def path_sensitivity(form: PathForm, v: Array, w: Array) -> tuple[Array, Array]:
    """Exact derivatives of ΣΓψ with respect to every measured velocity, the offset being read from the field itself.

    Parameters
    ----------
    form : PathForm
        Where it is evaluated; its cells have no leading shape.
    v, w : ndarray, shape (nz, ny)
        Crossflow, m/s.

    Returns
    -------
    from_v, from_w : ndarray, shape (nz, ny)
        m³/s.
    """
    grid, outer = form.grid, form.outer
    rows, columns = _block(form.cells)
    fields = path_fields(form, v, w)
    held, weight = np.zeros(form.cells.shape), np.zeros(form.cells.shape)
    held[rows, columns] = fields.circulation * fields.inside
    weight[rows, columns] = fields.stream_function * fields.inside
    y, z = _cell_centres(grid, slice(0, grid.nz - 1), slice(0, grid.ny - 1))
    net = held.sum()
    moment_y, moment_z = held.sum(axis=0) @ (y - outer.y0), held.sum(axis=1) @ (z - outer.z0)
    gamma_v, gamma_w = adjoint_of_circulation(weight, grid)
    psi_v, psi_w = adjoint_of_paths(cell_weights(grid.nz).T @ held @ cell_weights(grid.ny), grid)
    a, b = outer.v_from_v, outer.v_from_w
    from_v = gamma_v + psi_v - net * outer.constant_from_v - moment_z * a - moment_y * b
    from_w = gamma_w + psi_w - net * outer.constant_from_w - moment_z * b + moment_y * a
    return from_v, from_w


def path_noise_bias(form: PathForm, variance_v: Array, variance_w: Array) -> float:
    """What independent noise of known variance adds to ΣΓψ on average.

    Parameters
    ----------
    form : PathForm
        Where it is evaluated; its cells have no leading shape. The offset is read from the field itself.
    variance_v, variance_w : ndarray, shape (nz, ny)
        Variance of v and w at each point, m²/s².

    Returns
    -------
    float
        m⁴/s².

    Notes
    -----
    Σ a_i b_i with a and b linear in the data gains Σ cov(a_i, b_i); every term is separable along the axes.
    """
    grid, outer = form.grid, form.outer
    cells = form.cells
    # A cell's edge and the paths to its middle share the points of the edge, each along its own axis.
    ends_z, ends_y = grid.dz * _path_to_ends(grid.nz), grid.dy * _path_to_ends(grid.ny)
    share_z, share_y = (
        step * integrals * (weights + 1 / weights.shape[1]) / 2
        for step, integrals, weights in (
            (grid.dz, cell_integrals(grid.nz), cell_weights(grid.nz)),
            (grid.dy, cell_integrals(grid.ny), cell_weights(grid.ny)),
        )
    )
    rows, columns = _block(cells)
    inside = cells[rows, columns].astype(float)
    from_v = ends_z[0, rows, None] * variance_v[:-1][rows] + ends_z[1, rows, None] * variance_v[1:][rows]
    from_w = ends_y[0, columns] * variance_w[:, :-1][:, columns] + ends_y[1, columns] * variance_w[:, 1:][:, columns]
    bias = -np.vdot(from_v, inside @ share_y[columns]) - np.vdot(from_w, share_z[rows].T @ inside)
    # What the outer flow takes off ψ: its constant, and the offset times the distance from where it is read.
    y, z = _cell_centres(grid, rows, columns)
    a, b = outer.v_from_v, outer.v_from_w
    for on_v, on_w, weight in (
        (outer.constant_from_v, outer.constant_from_w, inside),
        (a, b, inside * (z - outer.z0)[:, None]),
        (b, -a, inside * (y - outer.y0)),
    ):
        bias -= np.vdot(weight, _block_circulation(variance_v * on_v, variance_w * on_w, grid, rows, columns))
    return float(bias)


@lru_cache(maxsize=32)
def _path_to_ends(n: int) -> Array:
    """Minus and plus the integral to each cell's value from the point before it and the point behind, shape (2, n − 1).

    The integral runs from all starting points alike, for unit spacing.
    """
    path, cell = _path_to_cells(n), np.arange(n - 1)
    return np.stack([-path[cell, cell], path[cell, cell + 1]])


def _block_circulation(v: Array, w: Array, grid: UniformGrid, rows: slice, columns: slice) -> Array:
    """Circulation around the cells of a block."""
    along_z = integrals_over_cells(grid.nz).along_z(w[..., :, columns.start : columns.stop + 1])[..., rows, :]
    along_y = integrals_over_cells(grid.ny).along_y(v[..., rows.start : rows.stop + 1, :])[..., columns]
    circulation: Array = grid.dz * np.diff(along_z, axis=-1) - grid.dy * np.diff(along_y, axis=-2)
    return circulation
