"""Matter and dark energy whose equation of state changes linearly with the scale factor."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology.base import FluidModel, Within, flatness
from fitter.parameters import PARAMETERS, Parameter

__all__ = ["CurvedW0WA", "FlatW0WA"]


class FlatW0WA(FluidModel):
    """Flat space, w(a) = w0 + wa (1 − a): theta = (Ω_m, w0, wa).

    X = (1+z)^{3(1+w0+wa)} exp(−3 wa z/(1+z)) [1]_ [2]_.

    References
    ----------
    .. [1] Chevallier, M. & Polarski, D. 2001, IJMPD 10, 213.
    .. [2] Linder, E. V. 2003, PRL 90, 091301.
    """

    name = "flat_w0wa"
    parameters: ClassVar[tuple[Parameter, ...]] = (PARAMETERS["omega_m"], PARAMETERS["w0"], PARAMETERS["wa"])
    curved = False
    contains: ClassVar[tuple[Within, ...]] = (Within("flat_wcdm", {"w0": "w", "wa": 0.0}),)

    def dark_energy_growth(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        z = np.asarray(z, float)
        w0, wa = theta[:, -2:-1], theta[:, -1:]
        return np.exp(3.0 * ((1.0 + w0 + wa) * np.log1p(z) - wa * (z / (1.0 + z))))

    def equation_of_state(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        z = np.asarray(z, float)
        return theta[:, -2:-1] + theta[:, -1:] * (z / (1.0 + z))


class CurvedW0WA(FlatW0WA):
    """Curved space, w(a) = w0 + wa (1 − a): theta = (Ω_m, Ω_DE, w0, wa)."""

    name = "curved_w0wa"
    parameters = (
        PARAMETERS["omega_m"].with_prior(uniform=[0, 1.5]),
        PARAMETERS["omega_de"],
        PARAMETERS["w0"],
        PARAMETERS["wa"],
    )
    curved = True
    contains = (Within("flat_w0wa", {"omega_de": flatness}), Within("curved_wcdm", {"w0": "w", "wa": 0.0}))
