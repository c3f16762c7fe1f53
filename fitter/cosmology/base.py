"""What a cosmological model must say, and the little that all fluids share."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import ClassVar

import numpy as np

from fitter.constants import N_EFF, photon_density_h2
from fitter.parameters import Parameter

__all__ = ["FluidModel", "Model", "radiation_density"]


def radiation_density(h0):
    """Ω_r of photons and massless neutrinos for an expansion rate in km/s/Mpc.

    Each neutrino species adds 7/8 (4/11)^(4/3) of the photons' energy [1]_.

    References
    ----------
    .. [1] Weinberg, S. 2008, Cosmology, section 3.1.
    """
    per_neutrino = 7 / 8 * (4 / 11) ** (4 / 3)
    return photon_density_h2() * (1 + per_neutrino * N_EFF) / (np.asarray(h0, float) / 100) ** 2


class Model(ABC):
    """A homogeneous cosmology, vectorised over W parameter points.

    A new family says its `name`, its `parameters` and `e_squared`; a curved one also `omega_k`.
    A family that has no E(z), only a distance, overrides `log_distance` (see `cosmographic`).
    """

    name: ClassVar[str]
    parameters: ClassVar[tuple[Parameter, ...]]
    has_expansion_rate: ClassVar[bool] = True

    @abstractmethod
    def e_squared(self, z, theta, omega_r=0.0):
        """E² = (H/H0)².

        Parameters
        ----------
        z : (M,) array
            Redshift.
        theta : (W, p) array
            The model's own parameters, in the order of `parameters`.
        omega_r : float or (W,) array
            Radiation density today.

        Returns
        -------
        (W, M) array
            May be ≤ 0 where the model has no big bang; callers treat that as outside the prior.
        """

    def omega_k(self, theta, omega_r=0.0):
        """Curvature term today, (W,) array; zero for a flat model."""
        return np.zeros(len(theta))

    @property
    def is_flat(self) -> bool:
        """Whether space is flat for every value of the parameters."""
        return type(self).omega_k is Model.omega_k


class FluidModel(Model):
    """Matter, radiation, curvature and one dark-energy fluid.

    Flat families take the dark-energy density from the closure, curved ones sample it as their second parameter.
    Equation (Hogg 1999, eq. 14, with a general fluid)::

        E² = Ω_r (1+z)⁴ + Ω_m (1+z)³ + Ω_k (1+z)² + Ω_DE X(z)
    """

    curved: ClassVar[bool]

    @abstractmethod
    def dark_energy_growth(self, z, theta):
        """X(z), dark-energy density over its value today; (W, M) or broadcastable."""

    @abstractmethod
    def equation_of_state(self, z, theta):
        """w(z), (W, M) array."""

    def densities(self, theta, omega_r=0.0):
        """Ω_m, Ω_DE and Ω_k today, each a (W,) array."""
        omega_m = theta[:, 0]
        if self.curved:
            omega_de = theta[:, 1]
            return omega_m, omega_de, 1.0 - omega_m - omega_de - omega_r
        return omega_m, 1.0 - omega_m - omega_r, np.zeros(len(theta))

    def omega_k(self, theta, omega_r=0.0):
        return self.densities(theta, omega_r)[2]

    @property
    def is_flat(self) -> bool:
        return not self.curved

    def e_squared(self, z, theta, omega_r=0.0):
        omega_m, omega_de, omega_k = (x[:, None] for x in self.densities(theta, omega_r))
        a = 1.0 + np.asarray(z, float)
        e2 = omega_m * a**3
        e2 += omega_de * self.dark_energy_growth(z, theta)
        if self.curved:
            e2 += omega_k * a**2
        if np.ndim(omega_r) or omega_r:
            e2 += np.reshape(omega_r, (-1, 1)) * a**4
        return e2
