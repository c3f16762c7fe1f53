"""What a cosmological model must say, and the little that all fluids share."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import ClassVar, NoReturn

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.constants import MAG_PER_LN, N_EFF, photon_density_h2
from fitter.errors import InputError
from fitter.parameters import Parameter

__all__ = ["DistanceModel", "FluidModel", "Model", "Within", "flatness", "radiation_density"]


def radiation_density(h0: ArrayLike) -> FloatArray:
    """Ω_r of photons and massless neutrinos for an expansion rate in km/s/Mpc.

    Each neutrino species adds 7/8 (4/11)^(4/3) of the photons' energy [1]_.

    References
    ----------
    .. [1] Weinberg, S. 2008, Cosmology, section 3.1.
    """
    per_neutrino = 7 / 8 * (4 / 11) ** (4 / 3)
    return photon_density_h2() * (1 + per_neutrino * N_EFF) / (np.asarray(h0, float) / 100) ** 2


@dataclass(frozen=True)
class Within:
    """A simpler model that a family becomes at certain values of its parameters.

    Parameters
    ----------
    model : str
        Name of the simpler model.
    at : mapping
        Parameter of the family → the number it is held at; or the name the simpler model has for it; or a function of
        the simpler model's parameters (and ``omega_r``), a mapping of name to array. Those not named are shared as they are.
    """

    model: str
    at: Mapping[str, float | str | Callable[[Mapping[str, float | FloatArray]], float | FloatArray]]


def flatness(values: Mapping[str, float | FloatArray]) -> float | FloatArray:
    """Dark-energy density of flat space, given the simpler model's values."""
    return 1.0 - values["omega_m"] - values["omega_r"]


class Model(ABC):
    """A homogeneous cosmology, vectorised over W parameter points.

    A new family says its `name`, its `parameters` and `e_squared`; a curved one also `omega_k`.
    A family that has no E(z), only a distance, is a `DistanceModel`.
    """

    name: ClassVar[str]
    parameters: ClassVar[tuple[Parameter, ...]]
    has_expansion_rate: ClassVar[bool] = True
    contains: ClassVar[tuple[Within, ...]] = ()
    """Simpler models nested in this one, for likelihood-ratio tests and density ratios; theirs need not be repeated."""

    @abstractmethod
    def e_squared(self, z: FloatArray, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
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

    def omega_k(self, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
        """Curvature term today, (W,) array; zero for a flat model."""
        return np.zeros(len(theta))

    @property
    def is_flat(self) -> bool:
        """Whether space is flat for every value of the parameters."""
        return type(self).omega_k is Model.omega_k

    def advice(self, redshift_max: float) -> tuple[str, ...]:
        """What a practitioner would warn of when the data reach that redshift."""
        return ()


class DistanceModel(Model):
    """A family known by its distance alone.

    Radiation and curvature are whatever the distance holds: no density is added to it.
    """

    has_expansion_rate = False

    @abstractmethod
    def distance_over_z(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        """Transverse comoving distance D_M in units of c z / H0.

        Parameters
        ----------
        z : (M,) array
            Redshift, 0 included, where the ratio is 1.
        theta : (W, p) array

        Returns
        -------
        (W, M) array
            Not positive, or NaN, where the model has no distance: outside the prior.
        """

    def log_distance(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        """5 log10[D_M H0 / (c z)], mag, (W, M); NaN outside the model's range."""
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            ratio = np.asarray(self.distance_over_z(z, theta), float)
            return MAG_PER_LN * np.log(np.where(ratio > 0, ratio, np.nan))

    def e_squared(self, z: FloatArray, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> NoReturn:
        raise InputError(f"{self.name} gives distances, not an expansion rate")


class FluidModel(Model):
    """Matter, radiation, curvature and one dark-energy fluid.

    Flat families take the dark-energy density from the closure, curved ones sample it as their second parameter.
    Equation (Hogg 1999, eq. 14, with a general fluid)::

        E² = Ω_r (1+z)⁴ + Ω_m (1+z)³ + Ω_k (1+z)² + Ω_DE X(z)
    """

    curved: ClassVar[bool]

    @abstractmethod
    def dark_energy_growth(self, z: FloatArray, theta: FloatArray) -> float | FloatArray:
        """X(z), dark-energy density over its value today; (W, M) or broadcastable."""

    @abstractmethod
    def equation_of_state(self, z: FloatArray, theta: FloatArray) -> FloatArray:
        """w(z), (W, M) array."""

    def densities(self, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Ω_m, Ω_DE and Ω_k today, each a (W,) array."""
        omega_m = theta[:, 0]
        if self.curved:
            omega_de = theta[:, 1]
            return omega_m, omega_de, 1.0 - omega_m - omega_de - omega_r
        return omega_m, 1.0 - omega_m - omega_r, np.zeros(len(theta))

    def omega_k(self, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
        return self.densities(theta, omega_r)[2]

    @property
    def is_flat(self) -> bool:
        return not self.curved

    def e_squared(self, z: FloatArray, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
        omega_m, omega_de, omega_k = (x[:, None] for x in self.densities(theta, omega_r))
        a = 1.0 + np.asarray(z, float)
        e2 = omega_m * a**3
        e2 += omega_de * self.dark_energy_growth(z, theta)
        if self.curved:
            e2 += omega_k * a**2
        if np.ndim(omega_r) or omega_r:
            e2 += np.reshape(omega_r, (-1, 1)) * a**4
        return e2
