"""The likelihood of a cosmological shape, vectorised over walkers, refined where the fixed grid is not enough."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import BoolArray, FloatArray
from fitter.cosmology.distances import log_distance
from fitter.cosmology.grid import Grid
from fitter.likelihood.compression import Compressed, compress, compress_many
from fitter.likelihood.design import FINEST_ORDER, Design
from fitter.likelihood.direct import Direct

if TYPE_CHECKING:
    from fitter.cosmology.base import Model
    from fitter.likelihood.scatter import ScatterNodes


__all__ = ["CHI2_TOLERANCE", "ORDERS", "TAIL_TOLERANCE", "Kernel", "Level"]

ORDERS = (32, 64, 128, FINEST_ORDER)
# The tail of f tracks its interpolation error within a factor of about 3–8; this keeps that under 1e-8 mag …
TAIL_TOLERANCE = 1e-9
# … and this keeps the error of χ², however far from the data the model is; a tail of 1e-13 is rounding.
CHI2_TOLERANCE = 1e-7
_ROUNDING = 1e-13


@dataclass(frozen=True)
class Level:
    """The compressed likelihood on one grid, at every node in the scatter (one node where it is fixed)."""

    grid: Grid
    reference: FloatArray
    r: FloatArray  # (m q, K+1+s)
    y: FloatArray  # (m q,)
    rho2: FloatArray  # (m,)
    norm: float  # of R at the first node in the scatter, where it is largest
    nodes: tuple[Compressed, ...]

    @classmethod
    def build(cls, design: Design, finest: tuple[Compressed, ...], order: int) -> Level:
        grid = Grid(design.grid.z_max, order)
        if order == FINEST_ORDER:
            nodes, reference = tuple(finest), design.reference
        else:
            embed = grid.interpolation(design.grid.u)
            nodes = tuple(c.project(embed) for c in finest)
            reference = design.reference[:: FINEST_ORDER // order]  # the orders divide the finest: nodes are nested
        r, y = np.vstack([c.r for c in nodes]), np.concatenate([c.y for c in nodes])
        return cls(grid, reference, r, y, np.array([c.rho2 for c in nodes]), float(np.linalg.norm(nodes[0].r)), nodes)

    def point(self, f: FloatArray, offset: FloatArray, linear: FloatArray) -> FloatArray:
        """x of the compressed least squares, (W, K+1+s)."""
        x = f - self.reference
        x += offset[:, None]
        return np.hstack([x, linear]) if linear.shape[1] else x

    def chi2(self, x: FloatArray) -> FloatArray:
        """χ², (W, m)."""
        residual = x @ self.r.T
        residual -= self.y
        residual *= residual
        m = len(self.rho2)
        return residual.reshape(len(x), m, len(self.y) // m).sum(axis=2) + self.rho2

    def converged(self, chi2: FloatArray, tail: FloatArray) -> BoolArray:
        """Whether the interpolation error is below tolerance: |Δχ²| ≤ 2 √χ² ‖R‖ |Δf|, (W,) bool."""
        return tail <= np.maximum(CHI2_TOLERANCE / (2 * self.norm * np.sqrt(np.maximum(chi2, 1.0))), _ROUNDING)


class Kernel:
    """χ² and its normalisation for W points of one model; N has gone into the compression.

    Parameters
    ----------
    design : Design
    model : Model
    scatter : ScatterNodes, optional
        Where the intrinsic scatter is free.
    compressed : Compressed, optional
        The compression of the design, where it is known already.
    """

    def __init__(self, design: Design, model: Model, scatter: ScatterNodes | None = None, compressed: Compressed | None = None) -> None:
        self.design, self.model, self.scatter = design, model, scatter
        finest = scatter.compressed if scatter else (compressed or compress(design),)
        self.levels = tuple(Level.build(design, finest, order) for order in ORDERS)
        self.log_norms = np.array([c.log_norm for c in finest])
        self.counts = {"evaluations": 0, "refined": 0, "direct": 0, "excluded": 0}
        self._direct = Direct(design, design.noise)

    def with_data(self, data: FloatArray) -> Iterator[Kernel]:
        """The same likelihood for each of M other data vectors (M, N): the covariance is factored once for all."""
        designs = (replace(self.design, data=row) for row in data)
        if self.scatter:
            nodes = self.scatter.with_data(self.design, data)
            yield from (Kernel(design, self.model, scatter) for design, scatter in zip(designs, nodes, strict=True))
        else:
            tables = compress_many(self.design, data)
            yield from (Kernel(design, self.model, compressed=table) for design, table in zip(designs, tables, strict=True))

    def __call__(
        self, theta: FloatArray, omega_r: FloatArray, offset: FloatArray, linear: FloatArray, sigma: FloatArray | None = None
    ) -> tuple[FloatArray, float | FloatArray]:
        """Evaluate W points.

        Parameters
        ----------
        theta : (W, p) array
            The model's parameters.
        omega_r, offset : (W,) arrays
            Radiation density; 5 log10(c/H0) + 25 in mag, zero where it is marginalised.
        linear : (W, s) array
            Sampled linear parameters.
        sigma : (W,) array, optional
            Free intrinsic scatter, mag.

        Returns
        -------
        chi2, log_norm : (W,) arrays
            χ² minimised over the nuisance amplitudes (+inf outside the prior); ln L = log_norm − χ²/2.
        """
        weights = self.scatter.weights(sigma) if self.scatter and sigma is not None else None
        chi2 = np.full(len(theta), np.inf)
        todo = np.arange(len(theta))
        for level in self.levels:
            f, tail, inside = log_distance(self.model, theta[todo], level.grid, omega_r[todo])
            usable = inside & (tail <= TAIL_TOLERANCE)
            rows = todo[usable]
            table = level.chi2(level.point(f[usable], offset[rows], linear[rows]))
            chi2[rows] = table[:, 0] if weights is None else (table * weights[rows]).sum(axis=1)
            usable[usable] = level.converged(chi2[rows], tail[usable])
            todo = todo[inside & ~usable]
            if not len(todo):
                break
            self.counts["refined"] += len(todo) if level is self.levels[0] else 0
        for i in todo:
            chi2[i] = self._exactly(theta[i], omega_r[i], offset[i], linear[i], None if sigma is None else sigma[i])
        self.counts["evaluations"] += len(theta)
        self.counts["direct"] += len(todo)
        self.counts["excluded"] += int(np.isinf(chi2).sum())
        return chi2, self.log_norms[0] if weights is None else weights @ self.log_norms

    def _exactly(self, theta: FloatArray, omega_r: float, offset: float, linear: FloatArray, sigma: float | None) -> float:
        direct = self._direct if sigma is None else Direct(self.design, self.design.noise.plus_variance(sigma**2))
        return direct.chi2_of_model(self.model, theta, omega_r, offset, linear)

    def nuisance(
        self,
        theta: FloatArray,
        omega_r: FloatArray,
        offset: FloatArray,
        linear: FloatArray,
        sigma: FloatArray | None = None,
        noise: FloatArray | None = None,
    ) -> FloatArray:
        """Nuisance amplitudes given the rest, (W, m): the conditional mean, plus `noise` (W, m) of unit Gaussians where given.

        With a free scatter, mean and spread at the nodes in σ are interpolated like χ². NaN where the model is outside its range.
        """
        level, finest = self.levels[1], self.levels[-1]
        f, tail, _ = log_distance(self.model, theta, level.grid, omega_r)
        x = level.point(f, offset, linear)
        rough = tail > TAIL_TOLERANCE
        if rough.any():
            f, _, _ = log_distance(self.model, theta[rough], finest.grid, omega_r[rough])
            on_finest = finest.point(f, offset[rough], linear[rough])
        out = np.zeros((len(theta), self.design.n_nuisance))
        weights = self.scatter.weights(sigma) if self.scatter and sigma is not None else np.ones((len(theta), 1))
        for node, weight in enumerate(weights.T):
            mean = _amplitudes(level.nodes[node], x, noise)
            if rough.any():
                mean[rough] = _amplitudes(finest.nodes[node], on_finest, None if noise is None else noise[rough])
            out += weight[:, None] * mean
        return out


def _amplitudes(node: Compressed, x: FloatArray, noise: FloatArray | None) -> FloatArray:
    """Solve for the nuisance amplitudes of one compressed likelihood, (W, m)."""
    from scipy.linalg import solve_triangular

    # The signs of R's rows are arbitrary: with a positive diagonal the spread is a smooth function of σ.
    sign = np.sign(np.diag(node.nuisance_r))
    right = sign * (node.nuisance_y - x @ node.nuisance_x.T)
    right = right if noise is None else right + noise
    return solve_triangular(sign[:, None] * node.nuisance_r, right.T, check_finite=False).T
