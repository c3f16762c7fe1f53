"""Scatter left after standardisation: a number, or a prior to fit it."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import Field

from fitter.sample.uncertainty.base import FreeOrFixed, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["Intrinsic"]


class Intrinsic(TermSettings):
    """The same variance for every supernova; with a prior it is a parameter and adds nothing here."""

    kind: ClassVar[str] = "intrinsic"
    example: ClassVar[str] = "{intrinsic: 0.1} or {intrinsic: {uniform: [0, 0.5]}}"

    intrinsic: FreeOrFixed = Field(description="Intrinsic scatter, mag; or a prior, and it is fitted.")

    def build(self, rows: Rows) -> Term | None:
        if isinstance(self.intrinsic, dict):
            return None
        return self.term(rows.noise(np.full(rows.n, self.intrinsic**2)))
