"""A sample at one noise level, whitened once, with the nuisance templates projected out: what residual tests are made of.

With L Lᵀ = C and an orthonormal basis Q of the whitened templates (their prior rows included), the precision of the data once the
nuisance amplitudes are marginalised is P = L⁻ᵀ (1 − Q Qᵀ) L⁻¹.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray

if TYPE_CHECKING:
    from fitter.likelihood.design import Design
    from fitter.sample.noise import Noise

__all__ = ["Whitened"]

_LARGEST = 20_000  # rows of a correlated sample whose L⁻¹ is formed


@dataclass(frozen=True, eq=False)
class Whitened:
    """The whitened frame of a design.

    Parameters
    ----------
    design : Design
    noise : Noise
        Its covariance, a fitted scatter added.
    extra : (N, m) array
        Further templates to project out, e.g. the derivatives by the fitted parameters.
    """

    design: Design
    noise: Noise
    extra: FloatArray

    @cached_property
    def basis(self) -> FloatArray:
        """Q, whitened rows only, (N, m)."""
        k = self.design.gaussian.shape[1]
        whitened = self.noise.whiten(np.column_stack([self.design.gaussian, self.design.flat, self.extra]))
        if not whitened.shape[1]:
            return whitened
        stacked = np.vstack([np.eye(k, whitened.shape[1]), whitened])
        # Templates that say the same thing twice must not enter twice.
        u, s, _ = np.linalg.svd(stacked / np.linalg.norm(stacked, axis=0), full_matrices=False)
        return u[k:, s > 1e-10 * s[0]]

    def residuals(self, r: FloatArray) -> FloatArray:
        """(1 − Q Qᵀ) L⁻¹ r for (N,) or (N, W) residuals in mag: unit normal but for what was fitted."""
        white = self.noise.whiten(r)
        return white - self.basis @ (self.basis.T @ white)

    def back(self, white: FloatArray) -> FloatArray:
        """L⁻ᵀ of (N, W) whitened columns."""
        if self.noise.is_diagonal:
            return white / np.sqrt(self.noise.variance)[:, None]
        return self._inverse_factor.T @ white

    @cached_property
    def diagonal(self) -> FloatArray:
        """Diagonal of P, (N,), mag⁻²: one over the variance of each datum given all others."""
        if self.noise.is_diagonal:
            return (1.0 - np.einsum("ij,ij->i", self.basis, self.basis)) / self.noise.variance
        inverse = self._inverse_factor
        projected = self.basis.T @ inverse
        return np.einsum("ij,ij->j", inverse, inverse) - np.einsum("ij,ij->j", projected, projected)

    @property
    def possible(self) -> bool:
        """Whether the sample is small enough for `back` and `diagonal`."""
        return self.noise.is_diagonal or self.design.n <= _LARGEST

    @cached_property
    def _inverse_factor(self) -> FloatArray:
        return self.noise.whiten(np.eye(self.design.n))
