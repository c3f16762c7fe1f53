"""Scatter of the redshifts by the supernovae's own velocities."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import Field

from fitter.array_types import FloatArray
from fitter.constants import C_KM_S, MAG_PER_LN
from fitter.sample.uncertainty.base import Positive, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["FIDUCIAL_OMEGA_M", "PeculiarVelocity", "modulus_slope"]

FIDUCIAL_OMEGA_M = 0.3
_NODES = 24


class PeculiarVelocity(TermSettings):
    """Line-of-sight velocities with a dispersion of ``peculiar_velocity`` km/s.

    Notes
    -----
    A velocity v moves the cosmological redshift by (1 + z) v/c, and the heliocentric one is as measured, so

        σ_μ = (5/ln 10) (1 + z) |d ln D_M / dz| σ_v / c

    with D_M of flat ΛCDM, Ω_m = 0.3 (any model in use gives the same within 1 % of this term below z = 0.1, above which the term is below
    0.02 mag). Its limit at low redshift is the usual (5/ln 10) σ_v / (c z).
    """

    kind: ClassVar[str] = "peculiar_velocity"
    example: ClassVar[str] = "{peculiar_velocity: 250}"

    peculiar_velocity: Positive = Field(description="Dispersion of the line-of-sight peculiar velocities, km/s.")

    def build(self, rows: Rows) -> Term:
        z = rows.redshift
        usable = rows.keep & (z > 0)
        sigma = np.zeros(rows.n)
        sigma[usable] = modulus_slope(z[usable]) * (1 + z[usable]) * self.peculiar_velocity / C_KM_S
        return self.term(rows.noise(sigma**2))


def modulus_slope(z: FloatArray) -> FloatArray:
    """dμ/dz at a fixed heliocentric redshift, mag, in the fiducial model; z of shape (N,), above 0."""
    u = np.log1p(z)
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    distance = np.zeros_like(u)
    for x, weight in zip(nodes, weights, strict=True):
        v = 0.5 * u * (x + 1)
        distance += weight * np.exp(v) / _expansion(np.exp(v))
    return MAG_PER_LN / (_expansion(1 + z) * 0.5 * u * distance)


def _expansion(one_plus_z: FloatArray) -> FloatArray:
    return np.sqrt(FIDUCIAL_OMEGA_M * one_plus_z**3 + 1 - FIDUCIAL_OMEGA_M)
