"""Means of residuals in redshift bins, by generalised least squares with the whole covariance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import BoolArray, FloatArray, IntArray

if TYPE_CHECKING:
    from fitter.sample.noise import Noise

__all__ = ["BinnedMeans", "binned_means", "redshift_edges"]

_BLOCK = 65_536  # rows at a time: memory stays proportional to the block, not to N


@dataclass(frozen=True)
class BinnedMeans:
    """Bin means of residuals.

    Parameters
    ----------
    redshift : (b,) float
        Geometric mean of the members' redshifts.
    mean : (b,) float
        Best estimate of the mean residual, mag.
    covariance : (b, b) float
        Its covariance, mag².
    count : (b,) int
        Members.
    """

    redshift: np.ndarray
    mean: np.ndarray
    covariance: np.ndarray
    count: np.ndarray

    @property
    def error(self) -> np.ndarray:
        """Standard deviation of each bin's mean, what it shares with the others included, mag."""
        return np.sqrt(np.diag(self.covariance))


def redshift_edges(redshift: np.ndarray, bins: int | None = None) -> np.ndarray:
    """Return edges equal in ln z that cover the given redshifts.

    Parameters
    ----------
    redshift : (n,) float
    bins : int, optional
        4 to 18 by default, by the number of supernovae.
    """
    bins = bins or int(np.clip(len(redshift) // 12, 4, 18))
    edges = np.exp(np.linspace(np.log(redshift.min()), np.log(redshift.max()), bins + 1))
    edges[0], edges[-1] = redshift.min(), np.nextafter(redshift.max(), np.inf)
    return edges


def binned_means(
    noise: Noise, residual: FloatArray, redshift: FloatArray, edges: FloatArray, *, scale: float = 1.0, apart: BoolArray | None = None
) -> BinnedMeans:
    """Generalised least squares mean of the residuals in each bin.

    Parameters
    ----------
    noise : Noise
        C, with its systematic modes.
    residual, redshift : (N,) float
    edges : (b + 1,) float
        Increasing; empty bins are left out.
    scale : float
        Factor on all errors.
    apart : (N,) bool, optional
        Rows that belong to no bin (calibrators): they get a mean of their own, so that what they share with the
        others counts, and it is not returned.

    Returns
    -------
    BinnedMeans

    Notes
    -----
    b = (XᵀC⁻¹X)⁻¹ XᵀC⁻¹ r with X the bins' indicators. The modes U of C = S + U Uᵀ are fitted beside b with unit
    Gaussian priors, which is the same, and needs no N × N array for a diagonal S.
    """
    apart = np.zeros(len(residual), dtype=bool) if apart is None else np.asarray(apart)
    index = np.searchsorted(edges, redshift, side="right") - 1
    outside = (index < 0) | (index >= len(edges) - 1)
    index = np.where(apart | outside, len(edges) - 1, index)  # the last column is the leftovers'
    present, column = np.unique(index, return_inverse=True)
    b, k = len(present), noise.modes.shape[1]
    normal = _normal_matrix(noise, residual, column, b)
    normal[np.arange(b, b + k), np.arange(b, b + k)] += 1.0
    inverse = np.linalg.inv(normal[:-1, :-1])
    solution = inverse @ normal[:-1, -1]
    keep = present < len(edges) - 1
    count = np.bincount(column, minlength=b)
    log_z = np.bincount(column, weights=np.log(redshift), minlength=b) / count
    chosen = np.flatnonzero(keep)
    covariance = scale**2 * inverse[np.ix_(chosen, chosen)]
    return BinnedMeans(np.exp(log_z[keep]), solution[:b][keep], covariance, count[keep])


def _normal_matrix(noise: Noise, residual: FloatArray, column: IntArray, b: int) -> np.ndarray:
    """[X U r]ᵀ S⁻¹ [X U r], summed over blocks of rows where S is diagonal."""
    n = len(residual)
    blocks = [slice(i, min(i + _BLOCK, n)) for i in range(0, n, _BLOCK)] if noise.is_diagonal else [slice(None)]
    width = b + noise.modes.shape[1] + 1
    total = np.zeros((width, width))
    for rows in blocks:
        indicator = (column[rows, None] == np.arange(b)).astype(float)
        design = np.column_stack([indicator, noise.modes[rows], residual[rows]])
        white = noise.whiten(design, rows) if noise.is_diagonal else noise.whiten(design)
        total += white.T @ white
    return total
