"""The scatter of the data about the truth: one covariance, kept in the cheapest form it allows."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.cholesky import LARGEST, Cholesky, NotPositiveDefinite

__all__ = ["Noise", "read_only"]

_EXACT_EIGENVALUES = 3000  # rows up to which the smallest eigenvalue is found directly


def _no_modes() -> FloatArray:
    return np.empty((0, 0))


def _no_rows() -> IntArray:
    return np.empty(0, dtype=int)


def read_only(values: ArrayLike, dtype: DTypeLike | None = float) -> NDArray[Any]:
    """Return a C-ordered view that cannot be written to (the array behind it is left alone)."""
    view = np.ascontiguousarray(values, dtype=dtype).view()
    view.setflags(write=False)
    return view


@dataclass(frozen=True, eq=False)
class Noise:
    """Covariance of N data, C = diag(variance) + dense + modes modesᵀ, or the inverse of ``precision`` + modes modesᵀ.

    Parameters
    ----------
    variance : (N,) array
        Uncorrelated part, mag²; zeros if there is none.
    dense : (N, N) array or None
        Symmetric, without ``variance``, mag².
    precision : (N, N) array or None
        An inverse covariance as it was given, mag⁻²; then ``variance`` is 0 and ``dense`` None.
    modes : (N, k) array
        One-sigma shifts, mag, each with an amplitude drawn from a unit Gaussian; none by default.
    mode_names : sequence of str
        k names.
    source : str or None
        The file or files that a message about this covariance should name.
    source_rows : (N,) array of int
        The row of that file, from 1, that each datum stands in (1 … N by default).
    """

    variance: FloatArray
    dense: FloatArray | None = None
    precision: FloatArray | None = None
    modes: FloatArray = field(default_factory=_no_modes)
    mode_names: tuple[str, ...] = ()
    source: str | None = None
    source_rows: IntArray = field(default_factory=_no_rows)

    def __post_init__(self) -> None:
        n = len(self.variance)
        modes = self.modes if np.size(self.modes) else np.empty((n, 0))
        rows = self.source_rows if np.size(self.source_rows) else np.arange(1, n + 1)
        arrays = {"variance": read_only(self.variance), "modes": read_only(modes), "source_rows": read_only(rows, int)}
        arrays |= {k: read_only(getattr(self, k)) for k in ("dense", "precision") if getattr(self, k) is not None}
        for key, value in arrays.items():
            object.__setattr__(self, key, value)
        object.__setattr__(self, "mode_names", tuple(self.mode_names))
        if (self.dense is not None or self.precision is not None) and n > LARGEST:
            raise InputError(
                f"a dense matrix of {n} rows is beyond the {LARGEST} that can be factored",
                file=self.source,
                cure="Give the systematics as modes (N × k one-sigma shifts) instead",
            )

    def __getstate__(self) -> dict[str, Any]:
        # The factor is quicker to make again than to send between processes.
        return {k: v for k, v in self.__dict__.items() if k in self.__dataclass_fields__}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)

    @property
    def n(self) -> int:
        """Number of data."""
        return len(self.variance)

    @property
    def is_diagonal(self) -> bool:
        """Whether, modes apart, the data are uncorrelated: then ``whiten`` works on any block of rows."""
        return self.dense is None and self.precision is None

    @cached_property
    def _sigma(self) -> FloatArray:
        """Standard deviations (N,) of a diagonal covariance."""
        if not np.all(self.variance > 0):
            raise self._no_error()
        return read_only(np.sqrt(self.variance))

    @property
    def _matrix(self) -> FloatArray:
        """The covariance, without the variance apart, or the precision; of a noise that is not diagonal."""
        matrix = self.dense if self.precision is None else self.precision
        if matrix is None:
            raise ValueError("a diagonal covariance has no matrix")
        return matrix

    @cached_property
    def _factor(self) -> Cholesky:
        """Cholesky factor of the covariance or of the precision."""
        try:
            return Cholesky(self._matrix, self.variance if self.precision is None else None)
        except NotPositiveDefinite as failure:
            raise self._not_positive_definite(failure) from None

    def whiten(self, x: ArrayLike, rows: slice = slice(None)) -> FloatArray:
        """L⁻¹ x, with C = L Lᵀ (for a precision P = G Gᵀ, Gᵀ x); modes are left out.

        Parameters
        ----------
        x : (N,) or (N, m) array
            Columns to whiten; only the rows ``rows`` where those are given.
        rows : slice
            A block of rows; only for ``is_diagonal``.

        Raises
        ------
        InputError
            The covariance is not positive definite: names the file, by how much, and the worst row.
        """
        x = np.asarray(x, dtype=float)
        if self.is_diagonal:
            sigma = self._sigma[rows]
            return x / (sigma if x.ndim == 1 else sigma[:, None])
        if rows != slice(None):
            raise ValueError("a correlated covariance whitens all rows together")
        return self._factor.transpose_product(x) if self.precision is not None else self._factor.solve(x)

    @cached_property
    def log_det(self) -> float:
        """ln det C, modes left out; C in mag²."""
        if self.is_diagonal:
            return 2.0 * float(np.log(self._sigma).sum())
        return -self._factor.log_det if self.precision is not None else self._factor.log_det

    @cached_property
    def total_variance(self) -> FloatArray:
        """(N,) diagonal of C with everything in it, modes too, mag²."""
        diagonal = np.array(self.variance)
        if not self.is_diagonal:
            diagonal += np.diagonal(self.inverted()._matrix)
        return read_only(diagonal + np.einsum("ij,ij->i", self.modes, self.modes))

    def covariance(self) -> FloatArray:
        """The whole C as one (N, N) array, modes included, mag²."""
        if self.precision is not None:
            return self.inverted().covariance()
        full = self.modes @ self.modes.T
        if self.dense is not None:
            full += self.dense
        full[np.diag_indices(self.n)] += self.variance
        return full

    def apply(self, x: np.ndarray) -> np.ndarray:
        """C x for x of shape (N,), with everything in C, without forming it."""
        if self.precision is not None:
            base = self._factor.inverse_times(x)
        else:
            base = self.variance * x if self.dense is None else self.dense @ x + self.variance * x
        return base + self.modes @ (self.modes.T @ x)

    def apply_inverse(self, x: np.ndarray) -> np.ndarray:
        """C⁻¹ x for x of shape (N,); the modes by the Woodbury identity."""
        base = self._base_inverse(x[:, None])[:, 0]
        if not self.mode_names:
            return base
        spread, capacitance = self._woodbury
        return base - spread @ np.linalg.solve(capacitance, self.modes.T @ base)

    @cached_property
    def _woodbury(self) -> tuple[FloatArray, FloatArray]:
        spread = self._base_inverse(self.modes)
        return spread, np.eye(len(self.mode_names)) + self.modes.T @ spread

    def _base_inverse(self, x: np.ndarray) -> np.ndarray:
        if self.precision is not None:
            return self.precision @ x
        return x / self.variance[:, None] if self.dense is None else self._factor.inverse_times(x)

    def draw(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Return (size, N) draws of the scatter from the whole C, mag."""
        white = rng.standard_normal((self.n, size))
        if self.is_diagonal:
            scatter = white * self._sigma[:, None]
        elif self.precision is not None:
            scatter = self.inverted()._factor.product(white)
        else:
            scatter = self._factor.product(white)
        if self.mode_names:
            scatter += self.modes @ rng.standard_normal((len(self.mode_names), size))
        return scatter.T

    def inverted(self) -> Noise:
        """Return the same noise with a precision turned into a dense covariance."""
        return self if self.precision is None else self._inverse

    @cached_property
    def _inverse(self) -> Noise:
        try:
            dense = Cholesky(self._matrix).inverse()
        except NotPositiveDefinite as failure:
            raise self._not_positive_definite(failure) from None
        return self._like(dense=dense, precision=None)

    def plus_variance(self, variance: float | FloatArray) -> Noise:
        """Return the noise with ``variance`` (number or (N,), mag²) added to the diagonal of C."""
        noise = self.inverted()
        return noise._like(variance=noise.variance + variance)

    def select(self, mask: BoolArray | IntArray) -> Noise:
        """Return the noise of some of the rows (mask or indices): what is left out is marginalised, not held."""
        noise = self.inverted()
        index = np.arange(self.n)[mask]
        dense = None if noise.dense is None else noise.dense[np.ix_(index, index)]
        return noise._like(variance=noise.variance[index], dense=dense, modes=noise.modes[index], source_rows=noise.source_rows[index])

    def _like(self, **changed: Any) -> Noise:
        return Noise(**{k: changed.get(k, getattr(self, k)) for k in self.__dataclass_fields__})

    def _no_error(self) -> InputError:
        worst = int(np.argmin(np.where(np.isnan(self.variance), -np.inf, self.variance)))
        return InputError(
            "the uncertainty terms leave a datum without any error: its variance must be above 0",
            file=self.source,
            row=int(self.source_rows[worst]),
            value=float(self.variance[worst]),
            cure="Add a statistical term, e.g. {sigma: COLUMN}, or an {intrinsic: …} scatter",
        )

    def _not_positive_definite(self, failure: NotPositiveDefinite) -> InputError:
        what = "inverse covariance" if self.precision is not None else "covariance"
        matrix = self._matrix
        smallest, vector = _smallest_eigenpair(matrix, self.variance)
        worst = failure.order - 1 if vector is None else int(np.argmax(np.abs(vector)))
        largest = float(np.max(np.abs(np.diagonal(matrix))))
        by = (
            f": its smallest eigenvalue is {smallest:.3g}, beside a largest diagonal element of {largest:.3g}" if vector is not None else ""
        )
        return InputError(
            f"the {what} is not positive definite{by}; the worst element is in matrix row {self.source_rows[worst]}",
            file=self.source,
            row=int(self.source_rows[worst]),
            cure="Check that row and its column; a systematics-only matrix needs the statistical errors added, e.g. {sigma: COLUMN}",
        )


def _smallest_eigenpair(matrix: FloatArray, variance: FloatArray) -> tuple[float, FloatArray | None]:
    """Smallest eigenvalue of matrix + diag(variance) and its vector; (nan, None) where it cannot be had."""
    n = len(matrix)
    if n <= _EXACT_EIGENVALUES:
        from scipy.linalg import eigh

        full = np.array(matrix)
        full[np.diag_indices(n)] += variance
        values, vectors = eigh(full, subset_by_index=[0, 0], overwrite_a=True)
        return float(values[0]), vectors[:, 0]
    from scipy.sparse.linalg import ArpackError, LinearOperator, eigsh

    operator = LinearOperator((n, n), matvec=lambda v: matrix @ v + variance * v, dtype=float)
    start = np.random.default_rng(0).standard_normal(n)  # ARPACK's own start would differ from call to call
    try:
        values, vectors = eigsh(operator, k=1, which="SA", tol=1e-4, v0=start, maxiter=300)
    except ArpackError:
        return np.nan, None
    return float(values[0]), vectors[:, 0]
