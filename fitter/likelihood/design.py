"""The linear least-squares problem behind the likelihood: data, interpolation matrix, nuisance templates.

A row is a supernova. Its datum, less what depends on the data only, is::

    d = B f(θ) + x·(sampled linear parameters) + T·λ (flat) + U·a (unit Gaussian) + noise

Calibrators, whose distance is known, have a zero row in B.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology import get_model
from fitter.cosmology.distances import data_term, log_distance
from fitter.cosmology.grid import Grid

if TYPE_CHECKING:
    from fitter.sample.noise import Noise

__all__ = ["FINEST_ORDER", "REFERENCE", "Design"]

FINEST_ORDER = 256
REFERENCE = np.array([[0.3]])  # flat ΛCDM; χ² is then made of small numbers, whatever the true model


@dataclass(frozen=True)
class Design:
    """Everything linear about a sample, with rows made on demand so that N × K is never held at once.

    Parameters
    ----------
    redshift, redshift_helio, data : (N,) arrays
    calibrator_modulus : (N,) array
        NaN where the row is no calibrator.
    noise : Noise
        The covariance; its modes become U.
    flat : (N, p) array
        Templates T with a flat prior.
    gaussian : (N, k) array
        Templates U with a unit Gaussian prior: the modes of the noise, and priors of linear parameters.
    linear : (N, s) array
        Columns of linear parameters that are sampled.
    shift : float
        Constant taken off the data (the mean of a Gaussian prior on the magnitude).
    """

    redshift: FloatArray
    redshift_helio: FloatArray
    data: FloatArray
    calibrator_modulus: FloatArray
    noise: Noise
    flat: FloatArray
    gaussian: FloatArray
    linear: FloatArray
    shift: float = 0.0
    grid: Grid = field(init=False)
    reference: np.ndarray = field(init=False)

    def __post_init__(self) -> None:
        free = np.isnan(self.calibrator_modulus)
        z_max = self.redshift[free].max() if free.any() else 1.0
        grid = Grid(z_max, FINEST_ORDER)
        object.__setattr__(self, "grid", grid)
        object.__setattr__(self, "reference", log_distance(get_model("flat_lcdm"), REFERENCE, grid)[0][0])

    @property
    def n(self) -> int:
        return len(self.data)

    @property
    def n_nuisance(self) -> int:
        """Number of nuisance templates, Gaussian ones first."""
        return self.gaussian.shape[1] + self.flat.shape[1]

    def interpolation(self, rows: slice = slice(None)) -> FloatArray:
        """B for those rows, (n, K+1)."""
        free = np.isnan(self.calibrator_modulus[rows])
        matrix = np.zeros((len(free), self.grid.order + 1))
        matrix[free] = self.grid.interpolation(np.log1p(self.redshift[rows][free]))
        return matrix

    def known(self, rows: slice = slice(None)) -> FloatArray:
        """What the data alone say of each modulus, (n,): the calibrator's own, or 5 log10[z (1 + z_hel)]."""
        calibrator = self.calibrator_modulus[rows]
        term = data_term(self.redshift[rows], self.redshift_helio[rows])
        return np.where(np.isnan(calibrator), term, calibrator) + self.shift

    def block(self, rows: slice = slice(None), data: FloatArray | None = None) -> FloatArray:
        """Columns [U, T, B, x, d − B f_ref] for those rows; `data` (M, N) in place of the design's own makes M last columns."""
        b = self.interpolation(rows)
        data = self.data[None] if data is None else np.asarray(data)
        d = data[:, rows] - self.known(rows) - b @ self.reference
        return np.column_stack([self.gaussian[rows], self.flat[rows], b, self.linear[rows], d.T])
