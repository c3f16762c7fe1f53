"""An inverse covariance matrix from a file."""

from __future__ import annotations

from dataclasses import replace
from typing import ClassVar

import numpy as np
from pydantic import Field

from fitter.sample.noise import Noise
from fitter.sample.uncertainty.base import PathText, Rows
from fitter.sample.uncertainty.covariance import MatrixSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["Precision"]


class Precision(MatrixSettings):
    """An N×N inverse covariance, mag⁻², in a file: the inverse of the whole covariance, so it stands alone."""

    kind: ClassVar[str] = "precision"
    example: ClassVar[str] = "{precision: inverse.npz}"

    precision: PathText = Field(description="File of an N × N inverse covariance, mag⁻²; it stands alone.")

    def build(self, rows: Rows) -> Term:
        matrix, in_file = self.read(rows)
        noise = Noise(np.zeros(len(matrix)), precision=matrix, source=self.precision)
        if len(matrix) == rows.n and not rows.keep.all():
            # Rows are taken out of the covariance; taking them out of its inverse would hold them fixed instead.
            noise = noise.select(rows.keep)
        return self.term(replace(noise, source_rows=in_file))
