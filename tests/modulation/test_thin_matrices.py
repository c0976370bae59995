"""Products of a matrix kept by rows in single precision, against the usual form."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csr_array, random_array

from dosekit.modulation.thin_matrices import ThinMatrix


@pytest.fixture
def pair(rng):
    usual = csr_array(random_array((37, 53), density=0.3, rng=rng), dtype=np.float64)
    usual.data = usual.data.astype(np.float32).astype(np.float64)
    thin = ThinMatrix(
        usual.data.astype(np.float32), usual.indices.astype(np.int32), usual.indptr.astype(np.int64), usual.shape
    )
    return usual, thin


@pytest.mark.naive
def test_products_equal_those_of_the_usual_form(pair, rng):
    usual, thin = pair
    assert thin.entries == usual.nnz
    vector, slope = rng.normal(size=53), rng.normal(size=37)
    np.testing.assert_allclose(thin @ vector, usual @ vector, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(thin.T @ slope, usual.T @ slope, rtol=1e-12, atol=1e-13)


def test_adjoint(pair, rng):
    _, thin = pair
    vector, slope = rng.normal(size=53), rng.normal(size=37)
    assert np.dot(thin @ vector, slope) == pytest.approx(np.dot(vector, thin.T @ slope), rel=1e-12)


def test_same_bits_for_any_number_of_threads(pair, rng):
    import numba

    _, thin = pair
    vector, slope = rng.normal(size=53), rng.normal(size=37)
    before = numba.get_num_threads()
    try:
        numba.set_num_threads(1)
        alone = (thin @ vector).tobytes(), (thin.T @ slope).tobytes()
    finally:
        numba.set_num_threads(before)
    assert ((thin @ vector).tobytes(), (thin.T @ slope).tobytes()) == alone


def test_empty_rows():
    thin = ThinMatrix(np.zeros(0, dtype=np.float32), np.zeros(0, dtype=np.int32), np.zeros(4, dtype=np.int64), (3, 2))
    assert (thin @ np.ones(2)).tolist() == [0.0, 0.0, 0.0]
    assert (thin.T @ np.ones(3)).tolist() == [0.0, 0.0]
