"""The factorisation in blocks is that of the whole."""

import numpy as np
import pytest

from fitter.likelihood.compression import stacked_qr


@pytest.mark.parametrize("heights", [[40], [3, 4, 60, 1, 25], [5, 5], [12, 0, 30, 30], [1] * 30])
def test_blocks_of_any_height(heights):
    """R'R = X'X to rounding: 1e-13 beside the norm, for numbers of order 1; R is upper triangular."""
    x = np.random.default_rng(3).normal(size=(sum(heights), 12))
    blocks = np.split(x.copy(), np.cumsum(heights)[:-1])
    r = stacked_qr(iter(blocks))
    assert r.shape == (min(12, len(x)), 12) and np.array_equal(r, np.triu(r))
    np.testing.assert_allclose(r.T @ r, x.T @ x, rtol=0, atol=1e-13 * np.linalg.norm(x) ** 2)


def test_dependent_columns():
    """A column that repeats another leaves a zero on the diagonal, not a failure."""
    x = np.random.default_rng(4).normal(size=(90, 5))
    x = np.column_stack([x, x.sum(axis=1)])
    r = stacked_qr(iter(np.split(x.copy(), 3)))
    assert abs(r[-1, -1]) < 1e-13 * np.linalg.norm(x) and np.all(np.isfinite(r))
