"""Matter and dark energy with a constant equation of state."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology.base import FluidModel, Within, flatness
from fitter.parameters import PARAMETERS, Parameter

__all__ = ["CurvedWCDM", "FlatWCDM"]


class FlatWCDM(FluidModel):
    """Flat space, constant w: theta = (Ω_m, w). X = (1+z)^{3(1+w)}."""

    name = "flat_wcdm"
    parameters: ClassVar[tuple[Parameter, ...]] = (PARAMETERS["omega_m"], PARAMETERS["w"])
    curved = False
    contains: ClassVar[tuple[Within, ...]] = (Within("flat_lcdm", {"w": -1.0}),)

    def dark_energy_growth(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        return np.exp(3.0 * (1.0 + theta[:, -1:]) * np.log1p(z))

    def equation_of_state(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        return theta[:, -1:] + np.zeros_like(np.asarray(z, float))  # z may be (M,) or (W, 1)


class CurvedWCDM(FlatWCDM):
    """Curved space, constant w: theta = (Ω_m, Ω_DE, w)."""

    name = "curved_wcdm"
    parameters = (PARAMETERS["omega_m"].with_prior(uniform=[0, 1.5]), PARAMETERS["omega_de"], PARAMETERS["w"])
    curved = True
    contains = (Within("flat_wcdm", {"omega_de": flatness}), Within("curved_lcdm", {"omega_de": "omega_lambda", "w": -1.0}))
