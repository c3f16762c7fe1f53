"""Cholesky factor in half the memory of the matrix it factors.

A covariance of 20,000 supernovae takes 3.2 GB. The factor is kept in LAPACK's
rectangular full packed format [1]_: n(n+1)/2 numbers, yet factored and solved by
the same matrix-matrix kernels as a full matrix.

References
----------
.. [1] Gustavson et al. 2010, ACM Trans. Math. Softw. 37, 18.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np

from fitter.array_types import FloatArray, IntArray

__all__ = ["LARGEST", "Cholesky", "NotPositiveDefinite"]

LARGEST = 46_340  # n² must fit LAPACK's 32-bit integers
_BLOCK = 512


class NotPositiveDefinite(ArithmeticError):
    """The matrix has an eigenvalue that is not positive; ``order`` is the first leading minor that fails."""

    def __init__(self, order: int) -> None:
        self.order = order
        super().__init__(f"the leading minor of order {order} is not positive")


class Cholesky:
    """A = L Lᵀ with L lower triangular.

    Parameters
    ----------
    matrix : (N, N) array
        Symmetric; read, never written. Only one triangle is used.
    extra : (N,) array or None
        Added to the diagonal.

    Raises
    ------
    NotPositiveDefinite
        Where A has no such factor.
    """

    def __init__(self, matrix: FloatArray, extra: FloatArray | None = None) -> None:
        from scipy.linalg import lapack

        self.n = len(matrix)
        # The transpose of a C-ordered symmetric matrix is itself in Fortran's order: no copy.
        full = matrix.T if matrix.flags.c_contiguous else matrix
        self._packed, _ = lapack.dtrttf(full, transr="N", uplo="L")
        if extra is not None:
            self._add_to_diagonal(extra)
        self._packed, order = lapack.dpftrf(self.n, self._packed, transr="N", uplo="L", overwrite_a=1)
        if order > 0 or not np.isfinite(self.log_det):
            raise NotPositiveDefinite(max(int(order), 1))

    @property
    def _columns(self) -> FloatArray:
        """The packed numbers as the rectangle they are laid out in (a view)."""
        even = self.n % 2 == 0
        return self._packed.reshape((self.n + even, -1), order="F")

    def _diagonal_indices(self) -> tuple[IntArray, IntArray]:
        """Rows and columns, in the rectangle, of the N diagonal elements."""
        n2, even = self.n // 2, int(self.n % 2 == 0)
        first, second = np.arange(self.n - n2), np.arange(n2)
        return np.concatenate([first + even, second]), np.concatenate([first, second + 1 - even])

    def _add_to_diagonal(self, extra: FloatArray) -> None:
        self._columns[self._diagonal_indices()] += extra

    def _blocks(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """L11, L21 and the transpose of L22, as views; only their own triangles hold numbers of L."""
        n2, even = self.n // 2, int(self.n % 2 == 0)
        n1, rectangle = self.n - n2, self._columns
        return rectangle[even : even + n1], rectangle[even + n1 :], rectangle[:n2, 1 - even :]

    @cached_property
    def log_det(self) -> float:
        """ln det A."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return 2.0 * float(np.log(self._columns[self._diagonal_indices()]).sum())

    def solve(self, x: FloatArray) -> FloatArray:
        """L⁻¹ x for x of shape (N,) or (N, m)."""
        from scipy.linalg import lapack

        x = np.asarray(x, dtype=float)
        flat = x.reshape(self.n, -1)
        out = lapack.dtfsm(1.0, self._packed, flat, transr="N", side="L", uplo="L", trans="N", diag="N")
        return out.reshape(x.shape)

    def inverse_times(self, x: FloatArray) -> FloatArray:
        """A⁻¹ x for x of shape (N,) or (N, m)."""
        from scipy.linalg import lapack

        flat = np.asarray(x, dtype=float).reshape(self.n, -1)
        out, _ = lapack.dpftrs(self.n, self._packed, flat, transr="N", uplo="L")
        return out.reshape(np.shape(x))

    def transpose_product(self, x: FloatArray) -> FloatArray:
        """Lᵀ x for x of shape (N,) or (N, m)."""
        x = np.asarray(x, dtype=float)
        flat, n1 = x.reshape(self.n, -1), self.n - self.n // 2
        l11, l21, u22 = self._blocks()
        top = _upper_product(l11.T, flat[:n1]) + l21.T @ flat[n1:]
        return np.concatenate([top, _upper_product(u22, flat[n1:])]).reshape(x.shape)

    def product(self, x: FloatArray) -> FloatArray:
        """L x for x of shape (N,) or (N, m)."""
        x = np.asarray(x, dtype=float)
        flat, n1 = x.reshape(self.n, -1), self.n - self.n // 2
        l11, l21, u22 = self._blocks()
        bottom = l21 @ flat[:n1] + _lower_product(u22.T, flat[n1:])
        return np.concatenate([_lower_product(l11, flat[:n1]), bottom]).reshape(x.shape)

    def inverse(self, out: FloatArray | None = None) -> FloatArray:
        """A⁻¹, (N, N), symmetric; the factor is spent and must not be used afterwards.

        ``out`` is a C-ordered (N, N) array to write it to.
        """
        from scipy.linalg import lapack

        packed, _ = lapack.dpftri(self.n, self._packed, transr="N", uplo="L", overwrite_a=1)
        out = np.empty((self.n, self.n)) if out is None else out
        self._packed = packed
        l11, l21, u22 = self._blocks()
        n1 = len(l11)
        out[:n1, :n1], out[n1:, :n1], out[n1:, n1:] = l11, l21, u22.T
        mirror_lower(out)
        del self._packed
        return out


def mirror_lower(matrix: FloatArray) -> None:
    """Copy the lower triangle of a square array onto the upper one, in place, block by block."""
    n = len(matrix)
    for i in range(0, n, _BLOCK):
        rows = slice(i, min(i + _BLOCK, n))
        matrix[:i, rows] = matrix[rows, :i].T
        block = matrix[rows, rows]
        block[...] = np.tril(block) + np.tril(block, -1).T


def _upper_product(upper: FloatArray, x: FloatArray) -> FloatArray:
    """U x where U is the upper triangle of an array whose other half holds something else."""
    out = np.empty_like(x, order="C")
    for i in range(0, len(x), _BLOCK):
        rows = slice(i, min(i + _BLOCK, len(x)))
        out[rows] = np.triu(upper[rows, rows]) @ x[rows] + upper[rows, rows.stop :] @ x[rows.stop :]
    return out


def _lower_product(lower: FloatArray, x: FloatArray) -> FloatArray:
    """L x where L is the lower triangle of an array whose other half holds something else."""
    out = np.empty_like(x, order="C")
    for i in range(0, len(x), _BLOCK):
        rows = slice(i, min(i + _BLOCK, len(x)))
        out[rows] = np.tril(lower[rows, rows]) @ x[rows] + lower[rows, :i] @ x[:i]
    return out
