"""A sample looked over before it is fitted: error budget, correlations, outliers, rows that stand twice."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fitter.sample.advice import smooth_residuals
from fitter.sample.budget import Budget, error_budget
from fitter.sample.sample import Sample

__all__ = ["Correlations", "Outlier", "budget", "condition_number", "correlations", "outliers", "repeated_rows"]

BEYOND = 4.0  # σ
EIGENVALUES_OF = 3000  # rows up to which a dense matrix is diagonalised
_LANCZOS = 25  # products with a larger one, at most
_CORRELATED_ROWS = 1500  # rows of which correlations are looked at
_INVERTED = 6000  # rows up to which a precision is inverted for its diagonal


@dataclass(frozen=True)
class Correlations:
    """Correlation coefficients between rows, everything but a free scatter included.

    Parameters
    ----------
    median, largest : float
        Of the absolute values.
    pair : tuple of int
        The rows (in the table) with the largest.
    within, between : float or None
        Median correlation of rows of the same group, and of different ones.
    n : int
        Rows that were looked at, spread evenly over the sample.
    """

    median: float
    largest: float
    pair: tuple[int, int]
    within: float | None
    between: float | None
    n: int


@dataclass(frozen=True)
class Outlier:
    """A row far from the smooth curve: its line in the table, its name, how far in σ and in mag."""

    row: int
    name: str
    pull: float
    residual: float


def budget(sample: Sample) -> list[Budget]:
    """The part of each term; the shares add to 1. Empty where a large precision would have to be inverted."""
    if sample.noise.precision is not None and sample.n > _INVERTED:
        return []
    return error_budget(sample)


def condition_number(sample: Sample) -> float:
    """Largest over smallest eigenvalue of the covariance.

    Exact for few rows. For many, the largest is found by Lanczos steps with the covariance and the smallest by steps with its inverse, for
    which the Cholesky factor is at hand: a few per cent, in the time of fifty solutions at most. For a diagonal with modes the smallest
    eigenvalue lies between the smallest variance and the k + 1 smallest (interlacing): the smallest is taken.
    """
    noise = sample.noise
    if sample.n <= EIGENVALUES_OF:
        from scipy.linalg import eigvalsh

        whole = noise.precision if noise.precision is not None and not noise.mode_names else noise.covariance()
        values = eigvalsh(whole)
        with np.errstate(over="ignore"):
            return float(values[-1] / values[0]) if values[0] > 0 else np.inf
    if noise.is_diagonal:
        largest = _largest_eigenvalue(lambda v: noise.variance * v + noise.modes @ (noise.modes.T @ v), noise.n)
        return max(largest, float(noise.variance.max())) / float(noise.variance.min())
    return _largest_eigenvalue(noise.apply, noise.n) * _largest_eigenvalue(noise.apply_inverse, noise.n)


def _largest_eigenvalue(apply: Callable[[np.ndarray], np.ndarray], n: int) -> float:
    """Largest eigenvalue of a positive definite matrix that is known by its products, from below: Lanczos, orthogonalised in full."""
    vector = np.random.default_rng(0).standard_normal(n)
    basis = [vector / np.linalg.norm(vector)]
    diagonal: list[float] = []
    beside: list[float] = []
    found = 0.0
    for _ in range(_LANCZOS):
        product = apply(basis[-1])
        diagonal.append(float(basis[-1] @ product))
        known = np.array(basis)
        product = product - known.T @ (known @ product)
        size = float(np.linalg.norm(product))
        before, found = found, float(np.linalg.eigvalsh(np.diag(diagonal) + np.diag(beside, 1) + np.diag(beside, -1))[-1])
        if abs(found - before) < 3e-3 * found or size < 1e-12 * found:
            break
        beside.append(size)
        basis.append(product / size)
    return found


def correlations(sample: Sample) -> Correlations | None:
    """Correlations of rows spread over the sample; None where there are none, or a large precision would have to be inverted."""
    noise = sample.noise
    if sample.n < 2 or (noise.is_diagonal and not noise.mode_names) or (noise.precision is not None and sample.n > _INVERTED):
        return None
    index = np.unique(np.linspace(0, sample.n - 1, min(sample.n, _CORRELATED_ROWS)).round().astype(int))
    matrix = noise.select(index).covariance()
    scale = np.sqrt(np.diagonal(matrix))
    matrix = matrix / scale / scale[:, None]
    upper = np.triu_indices(len(index), 1)
    values = matrix[upper]
    at = int(np.argmax(np.abs(values)))
    within = between = None
    if sample.group is not None:
        same = sample.group[index][upper[0]] == sample.group[index][upper[1]]
        within, between = (float(np.median(values[s])) if s.any() else None for s in (same, ~same))
    one, other = (int(sample.row[index[side[at]]]) for side in upper)
    return Correlations(float(np.median(np.abs(values))), float(np.abs(values[at])), (one, other), within, between, len(index))


def outliers(sample: Sample) -> list[Outlier]:
    """Rows more than 4σ from a smooth curve through all (calibrators apart), the worst first.

    Where the data scatter by more than their errors, as they do when an intrinsic scatter is still to be fitted, σ is what they scatter by.
    """
    if sample.noise.precision is not None and sample.n > _INVERTED:
        return []
    used = np.flatnonzero(~sample.is_calibrator)
    sigma = np.sqrt(sample.noise.total_variance[used])
    residual = smooth_residuals(sample.redshift[used], sample.data[used], sigma)
    if residual is None:
        return []
    pull = residual / sigma
    pull /= max(1.0, 1.4826 * float(np.median(np.abs(pull))))
    worst = [i for i in np.argsort(-np.abs(pull)) if abs(pull[i]) > BEYOND]
    names = [""] * sample.n if sample.name is None else sample.name
    return [Outlier(int(sample.row[used[i]]), str(names[used[i]]), float(pull[i]), float(residual[i])) for i in worst]


def repeated_rows(sample: Sample) -> list[tuple[int, int]]:
    """Pairs of rows (lines of the table) with the same redshift and the same data: one supernova twice, whatever it is called."""
    order = np.lexsort((sample.data, sample.redshift))
    same = (np.diff(sample.redshift[order]) == 0) & (np.diff(sample.data[order]) == 0)
    return [(int(sample.row[order[i]]), int(sample.row[order[i + 1]])) for i in np.flatnonzero(same)]
