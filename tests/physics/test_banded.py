"""Maps along one axis in blocks, against the whole matrix."""

import numpy as np
import pytest
from scipy import sparse

from wakeledger.physics.fields.banded import Banded


@pytest.mark.parametrize(("m", "n"), [(3, 4), (31, 32), (70, 71), (71, 70), (130, 130)])
def test_equals_the_matrix(m: int, n: int) -> None:
    rng = np.random.default_rng(m)
    matrix = sum(rng.normal(size=(m, 1)) * np.eye(m, n, k=k) for k in range(-3, 5))
    banded = Banded.of(sparse.csr_array(matrix))
    field = rng.normal(size=(2, 5, n))
    # Rounding of eight terms of order one.
    np.testing.assert_allclose(banded.along_y(field), field @ matrix.T, rtol=0, atol=2e-14)
    upright = np.swapaxes(field, -1, -2)
    np.testing.assert_allclose(banded.along_z(upright), matrix @ upright, rtol=0, atol=2e-14)
    np.testing.assert_allclose(banded.along_y(field[0]), field[0] @ matrix.T, rtol=0, atol=2e-14)
    assert np.abs(field @ matrix.T).max() > 1
