"""From N supernovae to K numbers: the QR factorisation that makes χ² independent of N.

With L L' = C, the columns [U, T, B, x, d] of the design are whitened and factored once. The leading rows of R
eliminate the nuisance amplitudes; the rest gives χ² = ‖y − R [f; x]‖² + ρ², exactly [1]_. QR rather than normal
equations, since χ² is a difference of large numbers [2]_.

References
----------
.. [1] Goliath, M. et al. 2001, A&A 380, 6; Bridle, S. et al. 2002, MNRAS 335, 1193 (marginalised offset).
.. [2] Golub, G. & Van Loan, C., Matrix Computations, chapter 5.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from fitter.array_types import FloatArray
from fitter.likelihood.design import Design

__all__ = ["Compressed", "compress", "compress_many", "stacked_qr"]

_ROWS = 2048  # rows of the design held at once: a block that stays in the cache
_PANEL = 32  # columns that LAPACK eliminates at once
_MANY = 50_000  # rows above which one thread is asked for: threads gain nothing on blocks so narrow, and lose much on a busy machine


class Whitening(Protocol):
    """What the compression needs of a covariance, its modes apart."""

    @property
    def is_diagonal(self) -> bool:
        """Whether `whiten` works on any block of rows."""

    @property
    def log_det(self) -> float:
        """ln det C."""

    def whiten(self, x: FloatArray, rows: slice = ...) -> FloatArray:
        """L⁻¹ x, with C = L Lᵀ."""


@dataclass(frozen=True)
class Compressed:
    """The likelihood of f at the nodes: ln L = log_norm − ½ (‖y − R x‖² + ρ²).

    Attributes
    ----------
    r : (q, K+1+s) array
    y : (q,) array
        x = [f − f_ref; sampled linear parameters].
    rho2 : float
        What no model can explain.
    log_norm : float
        Normalisation: ln det C, the marginalised templates, factors of 2π.
    nuisance_r, nuisance_x, nuisance_y : arrays
        The conditional Gaussian of the m nuisance amplitudes: nuisance_r λ = nuisance_y − nuisance_x x + N(0, 1);
        shapes (m, m) upper triangular, (m, K+1+s), (m,).
    """

    r: FloatArray
    y: FloatArray
    rho2: float
    log_norm: float
    nuisance_r: FloatArray
    nuisance_x: FloatArray
    nuisance_y: FloatArray

    def chi2(self, x: FloatArray) -> FloatArray:
        """χ² of (W, K+1+s) points, minimised over the nuisance amplitudes."""
        residual = x @ self.r.T
        residual -= self.y
        return np.einsum("wq,wq->w", residual, residual) + self.rho2

    def project(self, embed: FloatArray) -> Compressed:
        """The same likelihood on fewer nodes: `embed` (K+1, k+1) takes values at them to the full set."""
        pad = self.r.shape[1] - embed.shape[0]
        full = np.block([[embed, np.zeros((embed.shape[0], pad))], [np.zeros((pad, embed.shape[1])), np.eye(pad)]])
        q = full.shape[1]
        factor = stacked_qr([np.column_stack([self.r @ full, self.y])])
        leftover = factor[q:, -1]
        return Compressed(
            factor[:q, :-1], factor[:q, -1], self.rho2 + float(leftover @ leftover), self.log_norm,
            self.nuisance_r, self.nuisance_x @ full, self.nuisance_y,
        )  # fmt: skip


def stacked_qr(blocks: Iterable[FloatArray]) -> FloatArray:
    """R of the QR factorisation of blocks stacked on top of each other, one block at a time.

    Once R is square, a block is eliminated below it without touching the zeros of R (LAPACK's tpqrt).
    """
    from scipy.linalg import qr
    from scipy.linalg.lapack import dtpqrt

    r = None
    for block in blocks:
        if r is not None and len(r) == block.shape[1]:
            r = dtpqrt(0, min(_PANEL, len(r)), r, np.asfortranarray(block), overwrite_a=True, overwrite_b=True)[0]
            continue
        block = block if r is None else np.vstack([r, block])
        r = np.asfortranarray(qr(block, mode="r", overwrite_a=True, check_finite=False)[0][: block.shape[1]])
    if r is None:
        raise ValueError("no blocks to factor")
    return r


def _threads(n: int) -> AbstractContextManager[object]:
    """One BLAS thread where there are many rows."""
    from contextlib import nullcontext

    import scipy.linalg  # noqa: F401 - a library that is not loaded yet cannot be held to one thread
    from threadpoolctl import threadpool_limits

    return threadpool_limits(1) if n > _MANY else nullcontext()


def compress(design: Design, noise: Whitening | None = None, *, rotated: FloatArray | None = None) -> Compressed:
    """Factor the whitened design once.

    Parameters
    ----------
    design : Design
    noise : Noise, optional
        A covariance other than the design's own (same modes).
    rotated : (N, m) array, optional
        The design's columns in the basis in which `noise` is diagonal.

    Notes
    -----
    Cost O(N² m) for a dense covariance, O(N m²) for a diagonal one, m ≈ 260 + templates; memory of the latter O(m) rows.
    """
    return compress_many(design, design.data[None], noise, rotated=rotated)[0]


def compress_many(
    design: Design, data: FloatArray, noise: Whitening | None = None, *, rotated: FloatArray | None = None
) -> list[Compressed]:
    """Factor the whitened design once for M data vectors: each is one more column, not one more factorisation.

    Parameters
    ----------
    design : Design
        All but its data is used.
    data : (M, N) array
        What was observed instead, mag.
    noise : Noise, optional
        A covariance other than the design's own (same modes).
    rotated : (N, m + M) array, optional
        ``design.block(data=data)`` in the basis in which `noise` is diagonal.

    Returns
    -------
    list of M Compressed
        They share their matrices.
    """
    noise = design.noise if noise is None else noise
    n, k, p = design.n, design.gaussian.shape[1], design.flat.shape[1]
    m = k + p
    with _threads(n if noise.is_diagonal else 0):
        factor = stacked_qr(_whitened_blocks(design, noise, data, rotated))
    nuisance_r = factor[:m, :m].copy()
    pivots = np.log(np.abs(np.diag(nuisance_r)))
    log_norm = float(-0.5 * (n - p) * np.log(2 * np.pi) - 0.5 * noise.log_det - pivots.sum())
    q = factor.shape[1] - m - len(data)
    nuisance_x, nuisance_y = factor[:m, m : m + q].copy(), factor[:m, m + q :].T.copy()
    rest = factor[m:, m:]
    r, y = np.ascontiguousarray(rest[:q, :q]), rest[:q, q:].T.copy()
    rho2 = np.einsum("ij,ij->j", rest[q:, q:], rest[q:, q:])
    return [Compressed(r, y[i], float(rho2[i]), log_norm, nuisance_r, nuisance_x, nuisance_y[i]) for i in range(len(data))]


def _whitened_blocks(design: Design, noise: Whitening, data: FloatArray, rotated: FloatArray | None) -> Iterator[FloatArray]:
    """The prior rows of the Gaussian templates, then the whitened rows."""
    k = design.gaussian.shape[1]
    width = design.n_nuisance + design.grid.order + 1 + design.linear.shape[1] + len(data)
    if k:
        yield np.eye(k, width)
    if not noise.is_diagonal:
        yield noise.whiten(design.block(data=data))
        return
    for start in range(0, design.n, _ROWS):
        rows = slice(start, min(start + _ROWS, design.n))
        yield noise.whiten(design.block(rows, data) if rotated is None else rotated[rows], rows)
