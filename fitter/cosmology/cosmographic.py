"""Cosmography: the expansion written as a series, with no assumption on what drives it."""

from __future__ import annotations

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology.base import DistanceModel
from fitter.parameters import PARAMETERS

__all__ = ["REACH", "Cosmographic"]

REACH = 0.4
"""Redshift up to which the series is within 0.01 mag of the models it stands for."""


class Cosmographic(DistanceModel):
    """Deceleration and jerk today: theta = (q0, j0).

    The luminosity distance to third order in the redshift, in flat space [1]_::

        D_L = (c z / H0) [1 + (1 − q0) z / 2 − (1 − q0 − 3 q0² + j0) z² / 6 + O(z³)]

    Notes
    -----
    What is left out grows fast. Against the exact distances of flat ΛCDM (Ω_m = 0.3) and of w = −0.8, in mag:

    ========================  ======  ======  ======  ======
    series, to third order    z = 0.1  0.3     0.5     1
    ========================  ======  ======  ======  ======
    in z (this one)           0.0001  0.003   0.013   0.09
    in y = z / (1 + z)        0.004   0.06    0.16    0.50
    ========================  ======  ======  ======  ======

    The series in y converges at every redshift [2]_, the one in z below about 1, but with as few terms as two parameters allow
    the one in z is the better by a factor of six and more wherever either is of use. Data beyond `REACH` are warned of.

    References
    ----------
    .. [1] Visser, M. 2004, Class. Quantum Grav. 21, 2603, eq. 46, in flat space.
    .. [2] Cattoën, C. & Visser, M. 2007, Class. Quantum Grav. 24, 5985.
    """

    name = "cosmographic"
    parameters = (PARAMETERS["q0"], PARAMETERS["j0"])

    def distance_over_z(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        z = np.asarray(z, float)
        q0, j0 = theta[:, :1], theta[:, 1:2]
        return (1.0 + z * ((1.0 - q0) / 2.0 - (1.0 - q0 - 3.0 * q0**2 + j0) / 6.0 * z)) / (1.0 + z)

    def advice(self, redshift_max: float) -> tuple[str, ...]:
        if redshift_max <= REACH:
            return ()
        return (
            f"The cosmographic series to third order holds to about 0.01 mag up to z = {REACH:g}; these data reach z = {redshift_max:.3g}, "
            f"where q0 and j0 are biased by more than their errors say. Cut the sample with `keep: {{redshift: [0, {REACH:g}]}}`.",
        )
