"""χ² from distances at every supernova: the last resort of the error control, and the reference for it."""

from __future__ import annotations

from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.cosmology.adaptive import exact_log_distance

if TYPE_CHECKING:
    from fitter.cosmology.base import Model
    from fitter.likelihood.design import Design
    from fitter.sample.noise import Noise

__all__ = ["Direct"]


class Direct:
    """χ² with nothing interpolated; cost O(N²) for a dense covariance, O(N k) for a structured one.

    Parameters
    ----------
    design : Design
    noise : Noise
        Covariance without the modes (those are in the design).
    """

    def __init__(self, design: Design, noise: Noise) -> None:
        self.design, self.noise = design, noise
        self.free = np.isnan(design.calibrator_modulus)

    @cached_property
    def _nuisance_basis(self) -> FloatArray:
        """Orthonormal basis of the whitened nuisance templates, without the prior rows, (N, m)."""
        design = self.design
        k = design.gaussian.shape[1]
        whitened = self.noise.whiten(np.column_stack([design.gaussian, design.flat]))
        q, _ = np.linalg.qr(np.vstack([np.eye(k, design.n_nuisance), whitened]))
        return q[k:]

    def chi2(self, f: FloatArray, offset: float = 0.0, linear: ArrayLike = ()) -> float:
        """χ² of f at the supernovae that are no calibrators, minimised over the nuisance amplitudes."""
        design = self.design
        residual = design.data - design.known()
        residual[self.free] -= f + offset
        if design.linear.shape[1]:
            residual -= design.linear @ np.asarray(linear, float)
        whitened = self.noise.whiten(residual[:, None])[:, 0]
        explained = self._nuisance_basis.T @ whitened if design.n_nuisance else np.zeros(0)
        return float(whitened @ whitened - explained @ explained)

    def chi2_of_model(self, model: Model, theta: FloatArray, omega_r: float = 0.0, offset: float = 0.0, linear: ArrayLike = ()) -> float:
        """χ² of one parameter point; +inf where the model is outside the prior."""
        if not self.free.any():
            return self.chi2(np.zeros(0), offset, linear)
        f = exact_log_distance(model, theta, np.log1p(self.design.redshift[self.free]), omega_r)
        return np.inf if f is None else self.chi2(f, offset, linear)
