"""Errors that vary smoothly in space: correlation exp(-(d/L)²/2) at any positions."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from wakeledger.core.grid import Array

# Nodes 0.7 L apart: the sum over them departs from the integral by 2 exp(-2 (pi/1.4)^2), 8e-5 of the variance; weights
# beyond 3 L are below 1.3e-4 of the largest.
_NODE_SPACING = 0.7
_REACH = 3.0


class Expansion(Protocol):
    """A linear map from independent variables to errors of the points."""

    def __call__(self, latents: Array) -> Array:
        """Errors, (draws, n), from variables, (draws, latents)."""

    def transposed(self, weights: Array) -> Array:
        """Weights of the variables, (k, latents), from weights of the errors, (k, n)."""


def squared_exponential(x: Array, length: float) -> Array:
    """Correlation matrix exp(-(d/L)²/2) along one axis.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Positions along the axis, m.
    length : float
        Correlation length L, m.

    Returns
    -------
    ndarray, shape (n, n)
    """
    x = np.asarray(x, dtype=float)
    result: Array = np.exp(-0.5 * ((x[:, None] - x[None, :]) / length) ** 2)
    return result


def correlated_field(positions: Array, length: float) -> tuple[int, Expansion]:
    """Linear map from independent variables of unit variance to a field correlated as exp(-(d/L)²/2).

    Parameters
    ----------
    positions : ndarray, shape (n, 2)
        Where the field is wanted, m: a tensor grid in any order, or scattered points.
    length : float
        Correlation length L, m.

    Returns
    -------
    latents : int
        Number of independent variables.
    expand : callable
        Takes (draws, latents), gives (draws, n) with unit variance at each point.

    Notes
    -----
    On a tensor grid the correlation is a product of one matrix per axis, of which the square roots are taken (parts of
    the spectrum below 1e-12 of its largest are left out). At scattered points white noise on a grid of nodes is
    smoothed with exp(-(d/L)²), whose convolution with itself is the correlation wanted.
    """
    positions = np.asarray(positions, dtype=float)
    a, a_index = np.unique(positions[:, 0], return_inverse=True)
    b, b_index = np.unique(positions[:, 1], return_inverse=True)
    if a.size * b.size <= 2 * positions.shape[0] and max(a.size, b.size) <= 2000:
        return _tensor_field(a, a_index, b, b_index, length)
    return _scattered_field(positions, length)


def _tensor_field(
    a: Array, a_index: NDArray[np.int64], b: Array, b_index: NDArray[np.int64], length: float
) -> tuple[int, Expansion]:
    root_a = _square_root(squared_exponential(a, length))
    root_b = _square_root(squared_exponential(b, length))
    return root_a.shape[1] * root_b.shape[1], _TensorField(root_a, root_b, a_index * b.size + b_index)


@dataclass(frozen=True, eq=False)
class _TensorField:
    root_a: Array
    root_b: Array
    pick: NDArray[np.int64]

    def __call__(self, latents: Array) -> Array:
        field = self.root_a @ latents.reshape(-1, self.root_a.shape[1], self.root_b.shape[1]) @ self.root_b.T
        result: Array = field.reshape(len(latents), -1)[:, self.pick]
        return result

    def transposed(self, weights: Array) -> Array:
        shape = len(self.root_a), len(self.root_b)
        # Points that share a place share its error, so their weights add.
        places = np.stack([np.bincount(self.pick, row, minlength=shape[0] * shape[1]) for row in weights])
        result: Array = self.root_a.T @ places.reshape(-1, *shape) @ self.root_b
        return result.reshape(len(weights), -1)


@dataclass(frozen=True, eq=False)
class _ScatteredField:
    matrix: Any

    def __call__(self, latents: Array) -> Array:
        result: Array = (self.matrix @ latents.T).T
        return result

    def transposed(self, weights: Array) -> Array:
        result: Array = (self.matrix.T @ weights.T).T
        return result


def _square_root(correlation: Array) -> Array:
    values, vectors = np.linalg.eigh(correlation)
    kept = values > 1e-12 * values[-1]
    root: Array = vectors[:, kept] * np.sqrt(values[kept])
    return root


def _scattered_field(positions: Array, length: float) -> tuple[int, Expansion]:
    scaled = (positions - positions.min(axis=0)) / (_NODE_SPACING * length)
    reach = int(np.ceil(_REACH / _NODE_SPACING))
    steps = np.arange(-reach, reach + 1)
    nearest = np.rint(scaled)
    weights, nodes = [], []
    for axis in (0, 1):
        node = nearest[:, axis, None] + steps
        nodes.append(node)
        weights.append(np.exp(-((_NODE_SPACING * (scaled[:, axis, None] - node)) ** 2)))
    weight = (weights[0][:, :, None] * weights[1][:, None, :]).reshape(len(positions), -1)
    weight /= np.sqrt((weight**2).sum(axis=1, keepdims=True))
    stride = nodes[1].max() + reach + 1
    key = ((nodes[0][:, :, None] + reach) * stride + nodes[1][:, None, :] + reach).reshape(len(positions), -1)
    unique, column = np.unique(key, return_inverse=True)
    pointer = np.arange(0, weight.size + 1, weight.shape[1])
    matrix = sparse.csr_array((weight.ravel(), column.ravel(), pointer), shape=(len(positions), unique.size))
    return int(unique.size), _ScatteredField(matrix)
