"""A free intrinsic scatter: the compressed likelihood on nodes in σ, interpolated, with the error measured.

χ²(σ) and ln det C(σ) at fixed f are analytic in σ; the nearest singularities are at σ = ±i √λ_min (λ: eigenvalues of
the fixed covariance). In t = asinh(σ/σ_c), σ_c² = λ_min, those are at ±iπ/2 for any covariance, so Chebyshev nodes in t converge fast.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.cosmology.grid import Grid
from fitter.errors import MufitterError
from fitter.likelihood.compression import Compressed, compress, compress_many
from fitter.likelihood.design import Design

__all__ = ["ScatterNodes", "scatter_nodes"]

_TOLERANCE = 1e-7  # in −2 ln L
_ORDERS = (16, 24, 36, 54, 80)


@dataclass(frozen=True)
class ScatterNodes:
    """Nodes in t = asinh(σ/σ_c), and the compressed likelihood at each."""

    scale: float
    grid: Grid
    compressed: tuple[Compressed, ...]
    error: float

    def with_data(self, design: Design, data: FloatArray) -> list[ScatterNodes]:
        """The same nodes for M other data vectors (M, N), all compressed together."""
        variance, rotated = _diagonal_basis(design, data)
        tables = [compress_many(design, data, Diagonal(variance + (self.scale * np.sinh(t)) ** 2), rotated=rotated) for t in self.grid.u]
        return [ScatterNodes(self.scale, self.grid, nodes, self.error) for nodes in zip(*tables, strict=True)]

    def weights(self, sigma: ArrayLike) -> FloatArray:
        """(W, m) interpolation weights for scatters `sigma`, (W,)."""
        return self.grid.interpolation(np.arcsinh(np.asarray(sigma) / self.scale))


def scatter_nodes(design: Design, sigma_max: float) -> ScatterNodes:
    """Compress at as many nodes in σ ∈ [0, sigma_max] as bring the interpolation error below 1e-7 in −2 ln L.

    Raises
    ------
    MufitterError
        If 80 nodes do not reach it.
    """
    variance, rotated = _diagonal_basis(design)
    smallest = max(float(variance.min()), (1e-3 * sigma_max) ** 2)
    scale = np.sqrt(smallest)
    for order in _ORDERS:
        # Grid's u plays the part of t here.
        grid = Grid(np.expm1(np.arcsinh(sigma_max / scale)), order)
        nodes = [_at(design, variance, rotated, scale * np.sinh(t)) for t in grid.u]
        middle = 0.5 * (grid.u[:-1] + grid.u[1:])
        probes = middle[[0, 1, order // 4, order // 2, -2, -1]]
        error = max(_error(grid, nodes, t, _at(design, variance, rotated, scale * np.sinh(t))) for t in probes)
        if error < _TOLERANCE:
            return ScatterNodes(float(scale), grid, tuple(nodes), error)
    raise MufitterError(f"the free intrinsic scatter could not be tabulated: error {error:.1e} in −2 ln L with {order} nodes")


def _diagonal_basis(design: Design, data: FloatArray | None = None) -> tuple[FloatArray, FloatArray | None]:
    """Variances, and the design's columns in the basis where the fixed covariance is diagonal."""
    noise = design.noise
    if noise.is_diagonal:
        return noise.variance, None
    from scipy.linalg import eigh

    noise = noise.inverted()
    fixed = np.array(noise.dense)
    fixed[np.diag_indices(noise.n)] += noise.variance
    variance, vectors = eigh(fixed, overwrite_a=True)
    return variance, vectors.T @ design.block(data=data)


def _at(design: Design, variance: FloatArray, rotated: FloatArray | None, sigma: float) -> Compressed:
    return compress(design, Diagonal(variance + sigma**2), rotated=rotated)


@dataclass(frozen=True)
class Diagonal:
    """The part of Noise that `compress` needs, for independent rows."""

    variance: FloatArray
    is_diagonal = True

    def whiten(self, x: FloatArray, rows: slice = slice(None)) -> FloatArray:
        return x / np.sqrt(self.variance[rows])[:, None]

    @property
    def log_det(self) -> float:
        return float(np.log(self.variance).sum())


def _error(grid: Grid, nodes: list[Compressed], t: float, truth: Compressed) -> float:
    """Error in −2 ln L at t for three shapes: the reference, a tilt and a bend of 0.2 mag."""
    x = np.zeros((3, truth.r.shape[1]))
    ramp = np.linspace(0, 0.2, x.shape[1])
    x[1], x[2] = ramp, ramp * (0.2 - ramp) * 20
    weights = grid.interpolation(np.array([t]))[0]
    table = np.array([node.chi2(x) - 2 * node.log_norm for node in nodes])
    return np.abs(weights @ table - (truth.chi2(x) - 2 * truth.log_norm)).max()
