"""A factor on all errors: published covariances have been argued to be too large."""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field

from fitter.sample.uncertainty.base import FreeOrFixed, Rows, TermSettings

__all__ = ["CovarianceScale"]


class CovarianceScale(TermSettings):
    """The whole covariance is multiplied by s²; the likelihood does it, nothing is added here."""

    kind: ClassVar[str] = "covariance_scale"
    example: ClassVar[str] = "{covariance_scale: {log_uniform: [0.5, 2]}}"

    covariance_scale: FreeOrFixed = Field(description="Factor s on all errors, or its prior: the covariance is multiplied by s².")

    def build(self, rows: Rows) -> None:
        return None
