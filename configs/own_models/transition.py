"""A transition with no theory behind it: the dark-energy density had another value in the past.

    E² = Ω_m (1+z)³ + (1 - Ω_m) [1 + step S(z)]
    S(z) = [tanh((z - z_step) / width) + tanh(z_step / width)] / [1 + tanh(z_step / width)]

S runs from 0 today to 1 long before the transition at z_step: ``step`` is the relative excess of the density then.

With step = 0 this is flat ΛCDM whatever z_step is. A parameter that means nothing in the simpler model breaks the
likelihood-ratio test, so none is declared (no `contains`); the evidence needs no such thing.
"""

import numpy as np

from fitter.cosmology import Model
from fitter.parameters import PARAMETERS, Parameter

WIDTH = 0.1


class Transition(Model):
    """Flat space, a step in the dark-energy density: theta = (Ω_m, step, z_step)."""

    name = "transition"
    parameters = (
        PARAMETERS["omega_m"],
        Parameter(
            "step", r"\Delta_\mathrm{DE}", "Δ_DE", "", "relative excess of the dark-energy density before the step", {"uniform": [-1, 1]}
        ),
        Parameter("z_step", r"z_\mathrm{step}", "z_step", "", "redshift of the step", {"uniform": [0.1, 1]}),
    )

    def e_squared(self, z, theta, omega_r=0.0):
        z = np.asarray(z, float)
        omega_m, step, z_step = theta[:, 0:1], theta[:, 1:2], theta[:, 2:3]
        omega_r = np.reshape(omega_r, (-1, 1))
        share = (np.tanh((z - z_step) / WIDTH) + np.tanh(z_step / WIDTH)) / (1.0 + np.tanh(z_step / WIDTH))
        return omega_m * (1 + z) ** 3 + omega_r * (1 + z) ** 4 + (1.0 - omega_m - omega_r) * (1.0 + step * share)
