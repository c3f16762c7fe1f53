"""Scatter of the magnitudes by gravitational lensing along the line of sight."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import Field

from fitter.sample.uncertainty.base import Positive, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["Lensing"]


class Lensing(TermSettings):
    """σ_μ = ``lensing`` × z; 0.055 mag per unit redshift is usual (Jönsson et al. 2010)."""

    kind: ClassVar[str] = "lensing"
    example: ClassVar[str] = "{lensing: 0.055}"

    lensing: Positive = Field(description="Scatter by lensing, mag per unit redshift.")

    def build(self, rows: Rows) -> Term:
        return self.term(rows.noise((self.lensing * np.nan_to_num(rows.redshift)) ** 2))
