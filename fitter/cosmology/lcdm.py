"""Matter and a cosmological constant."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology.base import FluidModel, Within, flatness
from fitter.parameters import PARAMETERS, Parameter

__all__ = ["CurvedLCDM", "FlatLCDM"]


class FlatLCDM(FluidModel):
    """Flat space, cosmological constant: theta = (Ω_m,)."""

    name = "flat_lcdm"
    parameters: ClassVar[tuple[Parameter, ...]] = (PARAMETERS["omega_m"],)
    curved = False

    def dark_energy_growth(self, z: FloatArray, theta: FloatArray) -> float:
        return 1.0

    def equation_of_state(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        return np.full(np.broadcast_shapes((len(theta), 1), np.shape(z)), -1.0)


class CurvedLCDM(FlatLCDM):
    """Curved space, cosmological constant: theta = (Ω_m, Ω_Λ)."""

    name = "curved_lcdm"
    parameters = (PARAMETERS["omega_m"].with_prior(uniform=[0, 1.5]), PARAMETERS["omega_lambda"])
    curved = True
    contains = (Within("flat_lcdm", {"omega_lambda": flatness}),)
