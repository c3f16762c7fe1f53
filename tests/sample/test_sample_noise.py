"""The covariance against dense linear algebra in all its forms."""

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitter.errors import InputError
from fitter.sample import cholesky
from fitter.sample.cholesky import Cholesky, NotPositiveDefinite, mirror_lower
from fitter.sample.noise import Noise


def positive(n, seed=0, floor=0.5):
    a = np.random.default_rng(seed).normal(size=(n, n))
    return a @ a.T / n + floor * np.eye(n)


@given(n=st.integers(1, 40), seed=st.integers(0, 2**32 - 1), m=st.integers(1, 4))
@settings(max_examples=60, deadline=None)
def test_factor_of_any_size(n, seed, m):
    a = positive(n, seed)
    x = np.random.default_rng(seed + 1).normal(size=(n, m))
    factor, lower = Cholesky(a), np.linalg.cholesky(a)
    np.testing.assert_allclose(factor.solve(x), np.linalg.solve(lower, x), rtol=1e-9, atol=1e-11)
    np.testing.assert_allclose(factor.product(x), lower @ x, rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(factor.transpose_product(x), lower.T @ x, rtol=1e-10, atol=1e-12)
    assert factor.log_det == pytest.approx(np.linalg.slogdet(a)[1], abs=1e-10 * n)
    np.testing.assert_allclose(factor.inverse(), np.linalg.inv(a), rtol=1e-8, atol=1e-10)


def test_factor_across_blocks(monkeypatch):
    monkeypatch.setattr(cholesky, "_BLOCK", 7)
    a, x = positive(61), np.random.default_rng(3).normal(size=(61, 2))
    lower = np.linalg.cholesky(a)
    np.testing.assert_allclose(Cholesky(a).transpose_product(x), lower.T @ x, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(Cholesky(a).product(x), lower @ x, rtol=1e-12, atol=1e-13)
    half = np.tril(a)
    mirror_lower(half)
    np.testing.assert_array_equal(half, np.tril(a) + np.tril(a, -1).T)


def test_factor_leaves_the_matrix_alone():
    a = positive(20)
    before = a.copy()
    Cholesky(a, np.ones(20))
    np.testing.assert_array_equal(a, before)


def test_factor_refuses_a_negative_eigenvalue():
    a = np.diag([1.0, 2.0, -1.0, 3.0])
    with pytest.raises(NotPositiveDefinite) as caught:
        Cholesky(a)
    assert caught.value.order == 3


@pytest.fixture
def forms():
    """The same covariance (30 rows) as a dense matrix beside variances, and as a precision."""
    n = 30
    variance = np.random.default_rng(1).uniform(0.5, 1, n)
    dense = positive(n, floor=0.1)
    total = dense + np.diag(variance)
    return total, Noise(variance, dense=dense), Noise(np.zeros(n), precision=np.linalg.inv(total))


def test_whitened_product_is_chi2(forms):
    total, *noises = forms
    x = np.random.default_rng(2).normal(size=(30, 3))
    for noise in noises:
        white = noise.whiten(x)
        np.testing.assert_allclose(white.T @ white, x.T @ np.linalg.solve(total, x), rtol=1e-10, atol=1e-10)
        assert noise.whiten(x[:, 0]).shape == (30,)
        assert noise.log_det == pytest.approx(np.linalg.slogdet(total)[1], abs=1e-10)
        np.testing.assert_allclose(noise.total_variance, np.diag(total), rtol=1e-10)


def test_dense_whitening_is_by_the_lower_factor(forms):
    total, noise, _ = forms
    x = np.arange(30.0)
    np.testing.assert_allclose(noise.whiten(x), np.linalg.solve(np.linalg.cholesky(total), x), rtol=1e-10)


def test_diagonal_whitens_block_by_block():
    noise = Noise(np.arange(1.0, 11.0))
    x = np.random.default_rng(0).normal(size=(10, 2))
    blocks = [noise.whiten(x[rows], rows=rows) for rows in (slice(0, 4), slice(4, 10))]
    np.testing.assert_array_equal(np.vstack(blocks), noise.whiten(x))
    np.testing.assert_allclose(noise.whiten(x), x / np.sqrt(np.arange(1.0, 11.0))[:, None])


def test_correlated_noise_has_no_blocks(forms):
    with pytest.raises(ValueError, match="all rows together"):
        forms[1].whiten(np.ones(5), rows=slice(0, 5))


def test_modes_count_in_the_total_only(forms):
    total, noise, _ = forms
    modes = np.random.default_rng(5).normal(size=(30, 2))
    with_modes = Noise(noise.variance, dense=noise.dense, modes=modes, mode_names=("a", "b"))
    assert with_modes.log_det == noise.log_det
    np.testing.assert_allclose(with_modes.covariance(), total + modes @ modes.T, rtol=1e-12)
    np.testing.assert_allclose(with_modes.total_variance, np.diag(total + modes @ modes.T), rtol=1e-12)


def test_plus_variance_and_select(forms):
    total, *noises = forms
    some = np.arange(30) % 3 != 1
    for noise in noises:
        np.testing.assert_allclose(noise.plus_variance(0.25).covariance(), total + 0.25 * np.eye(30), rtol=1e-9, atol=1e-10)
        np.testing.assert_allclose(noise.select(some).covariance(), total[np.ix_(some, some)], rtol=1e-9, atol=1e-10)
        np.testing.assert_array_equal(noise.select(some).source_rows, np.arange(1, 31)[some])


def test_draws_have_the_covariance(forms):
    total, *noises = forms
    modes = 0.5 * np.ones((30, 1))
    for noise in noises:
        noisy = Noise(noise.variance, dense=noise.dense, precision=noise.precision, modes=modes, mode_names=("a",))
        draws = noisy.draw(np.random.default_rng(7), 40_000)
        # The error of an element of the sample covariance is √((c_ii c_jj + c_ij²)/n); five of those over 900 elements.
        expected = total + modes @ modes.T
        error = np.sqrt((np.outer(np.diag(expected), np.diag(expected)) + expected**2) / 40_000)
        assert np.max(np.abs(np.cov(draws.T, bias=True) - expected) / error) < 5


def test_arrays_are_read_only_and_the_callers_own_stays_writable():
    variance = np.ones(3)
    noise = Noise(variance)
    with pytest.raises(ValueError):
        noise.variance[0] = 2
    variance[0] = 1.0
    with pytest.raises(AttributeError):
        noise.variance = variance


def test_pickle_leaves_the_factor_behind(forms):
    noise = forms[1]
    _ = noise.log_det
    again = pickle.loads(pickle.dumps(noise))
    assert "_factor" not in again.__dict__
    assert again.log_det == noise.log_det


@pytest.mark.parametrize("exact", [True, False])
def test_not_positive_definite_says_by_how_much_and_where(exact, monkeypatch):
    if not exact:
        monkeypatch.setattr("fitter.sample.noise._EXACT_EIGENVALUES", 10)
    dense = positive(40)
    dense[16, 16] = -2.0
    noise = Noise(np.zeros(40), dense=dense, source="sys.txt", source_rows=np.arange(101, 141))
    smallest = np.linalg.eigvalsh(dense)[0]
    with pytest.raises(InputError) as caught:
        noise.whiten(np.ones(40))
    error = caught.value
    assert (error.file, error.row) == ("sys.txt", 117)
    assert "not positive definite" in str(error) and f"{smallest:.3g}" in str(error) and "{sigma: COLUMN}" in error.cure


def test_precision_that_is_not_positive_definite():
    noise = Noise(np.zeros(2), precision=np.array([[1.0, 2.0], [2.0, 1.0]]), source="inverse.npz")
    with pytest.raises(InputError, match=r"inverse\.npz.*inverse covariance is not positive definite.*smallest eigenvalue is -1"):
        _ = noise.log_det


def test_datum_without_an_error():
    noise = Noise(np.array([0.01, 0.0, 0.02]), source="t.csv", source_rows=np.array([5, 6, 8]))
    with pytest.raises(InputError) as caught:
        _ = noise.log_det
    assert (caught.value.file, caught.value.row, caught.value.value) == ("t.csv", 6, 0.0)


def test_matrix_beyond_what_can_be_factored(monkeypatch):
    monkeypatch.setattr("fitter.sample.noise.LARGEST", 3)
    with pytest.raises(InputError, match="dense matrix of 4 rows.*modes"):
        Noise(np.zeros(4), dense=np.eye(4))
