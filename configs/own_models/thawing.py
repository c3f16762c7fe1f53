"""A thawing dark energy: it stood still for long, like a cosmological constant, and has begun to move.

A scalar field on a gentle slope is held by the expansion at first. When it leaves its rest in a universe of matter, the
departure of its equation of state from -1 grows with the volume, as a³. Extended to today::

    w(a) = -1 + (1 + w_today) a³
    X(a) = exp[(1 + w_today) (1 - a³)]      dark-energy density over its value today

The form is an illustration: the exponent 3 is right while the field has hardly moved.
"""

import numpy as np

from fitter.cosmology import FluidModel, Within
from fitter.parameters import PARAMETERS, Parameter

POWER = 3.0


class Thawing(FluidModel):
    """Flat space, w = -1 long ago and w_today now: theta = (Ω_m, w_today)."""

    name = "thawing"
    parameters = (
        PARAMETERS["omega_m"],
        #         key in configs, LaTeX,           terminal,  unit, meaning,                             default prior
        Parameter("w_today", r"w_\mathrm{today}", "w_today", "", "equation of state of dark energy now", {"uniform": [-3, 0]}),
    )
    curved = False
    # What it becomes, and where: for the likelihood-ratio test and the density ratio of `mufitter compare`.
    contains = (Within("flat_lcdm", {"w_today": -1.0}),)

    def dark_energy_growth(self, z, theta):
        # z is (M,) or (W, 1), theta (W, 2); the result (W, M).
        scale_factor = 1.0 / (1.0 + np.asarray(z, float))
        return np.exp(3.0 / POWER * (1.0 + theta[:, 1:2]) * (1.0 - scale_factor**POWER))

    def equation_of_state(self, z, theta):
        scale_factor = 1.0 / (1.0 + np.asarray(z, float))
        return -1.0 + (1.0 + theta[:, 1:2]) * scale_factor**POWER
