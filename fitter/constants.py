"""Physical constants, SI unless a name says otherwise.

Exact by definition (SI 2019, IAU 2012/2015) or CODATA 2022.
"""

import math
from typing import TypeVar

from fitter.array_types import FloatArray

__all__ = [
    "BOLTZMANN",
    "C_KM_S",
    "C_M_S",
    "GRAVITY",
    "GYR_S",
    "HBAR",
    "MAG_PER_LN",
    "MPC_M",
    "N_EFF",
    "T_CMB",
    "critical_density",
    "hubble_si",
    "photon_density_h2",
]

C_M_S = 299_792_458.0
C_KM_S = C_M_S / 1e3
GRAVITY = 6.67430e-11  # m³ kg⁻¹ s⁻²
BOLTZMANN = 1.380649e-23  # J/K
HBAR = 6.62607015e-34 / (2 * math.pi)  # J s
MPC_M = 3.0856775814913673e22
GYR_S = 1e9 * 365.25 * 86400.0
T_CMB = 2.7255  # K, Fixsen 2009, ApJ 707, 916
N_EFF = 3.046  # effective number of massless neutrinos, Mangano et al. 2005
MAG_PER_LN = 5.0 / math.log(10.0)  # magnitudes per unit of ln(distance)

_Rate = TypeVar("_Rate", float, FloatArray)


def hubble_si(h0: _Rate) -> _Rate:
    """Expansion rate in 1/s from km/s/Mpc."""
    return h0 * 1e3 / MPC_M


def critical_density(h0: _Rate) -> _Rate:
    """Critical density, kg/m³, for an expansion rate in km/s/Mpc."""
    return 3 * hubble_si(h0) ** 2 / (8 * math.pi * GRAVITY)


def photon_density_h2(temperature: float = T_CMB) -> float:
    """Photon density Ω_γ h² of a black body at `temperature` (K)."""
    energy = math.pi**2 / 15 * (BOLTZMANN * temperature) ** 4 / (HBAR * C_M_S) ** 3
    return energy / C_M_S**2 / critical_density(100.0)
