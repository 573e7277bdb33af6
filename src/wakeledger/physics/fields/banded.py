"""Linear maps along one axis of a field whose rows take neighbouring points only, for any number of fields at once.

A map is applied as small dense blocks, each on the stretch of points that its rows take: a few products of matrices
cost less than one product per weight.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from wakeledger.core.grid import Array

_ROWS = 32


@dataclass(frozen=True, eq=False)
class Banded:
    """A map from n points of an axis to m values.

    Attributes
    ----------
    shape : (int, int)
        m and n.
    blocks : tuple of (slice, slice, ndarray)
        Values, the points they take, and the weights.
    """

    shape: tuple[int, int]
    blocks: tuple[tuple[slice, slice, Array], ...]

    @classmethod
    def of(cls, matrix: sparse.csr_array) -> Banded:
        """The map of a sparse matrix with its entries about the diagonal, shape (m, n)."""
        blocks = []
        for start in range(0, matrix.shape[0], _ROWS):
            rows = slice(start, min(start + _ROWS, matrix.shape[0]))
            part = sparse.csr_array(matrix[rows])
            columns = slice(int(part.indices.min()), int(part.indices.max()) + 1)
            weights = part[:, columns].toarray()
            weights.flags.writeable = False
            blocks.append((rows, columns, weights))
        return cls(matrix.shape, tuple(blocks))

    def along_y(self, field: Array) -> Array:
        """Values along the last axis, shape (..., nz, n) to (..., nz, m)."""
        out: Array = np.empty((*field.shape[:-1], self.shape[0]))
        for rows, columns, weights in self.blocks:
            np.matmul(field[..., columns], weights.T, out=out[..., rows])
        return out

    def along_z(self, field: Array) -> Array:
        """Values along the last axis but one, shape (..., n, ny) to (..., m, ny)."""
        out: Array = np.empty((*field.shape[:-2], self.shape[0], field.shape[-1]))
        for rows, columns, weights in self.blocks:
            np.matmul(weights, field[..., columns, :], out=out[..., rows, :])
        return out
