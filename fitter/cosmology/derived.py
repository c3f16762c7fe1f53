"""What follows from the parameters of a model: deceleration, age, epochs, the cosmological constant in SI.

Sources: Weinberg 2008, Cosmology, chapter 1 (q, age, epochs); Carroll, Press & Turner 1992, ARA&A 30, 499 (Λ, closed forms).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.constants import C_M_S, GYR_S, critical_density, hubble_si
from fitter.cosmology.base import FluidModel
from fitter.cosmology.lcdm import FlatLCDM

if TYPE_CHECKING:
    from fitter.cosmology.base import Model

__all__ = ["age_gyr", "deceleration", "derived", "derived_names", "vacuum"]

_Z_SEARCH = np.expm1(np.linspace(0.0, np.log(51.0), 241))  # epochs are looked for up to z = 50
_CHUNK = 20_000


def derived_names(model: Model, has_h0: bool) -> tuple[str, ...]:
    """Names of what `derived` returns, in reporting order."""
    if not isinstance(model, FluidModel):
        own = [p.name for p in model.parameters]
        return ("q0",) if model.has_expansion_rate and "q0" not in own else ()
    is_lambda = isinstance(model, FlatLCDM)
    names = [] if model.is_flat else ["omega_k"]
    if model.is_flat:
        names.append("omega_lambda" if is_lambda else "omega_de")
    names += ["q0", "z_acceleration", "z_equality"]
    if has_h0:
        names.append("age_gyr")
        names += ["lambda_si", "vacuum_energy_density"] if is_lambda else []
    return tuple(names)


def derived(model: Model, theta: FloatArray, omega_r: float | FloatArray = 0.0, h0: FloatArray | None = None) -> dict[str, FloatArray]:
    """Derived quantities of W parameter points.

    Parameters
    ----------
    model : Model
    theta : (W, p) array
    omega_r : float or (W,) array
    h0 : (W,) array, optional
        km/s/Mpc; without it nothing that needs a scale is returned.

    Returns
    -------
    dict of (W,) arrays
        NaN where a quantity does not exist (a universe that never accelerates has no z_acceleration).
    """
    omega_r = np.broadcast_to(np.asarray(omega_r, float), (len(theta),))
    names = derived_names(model, h0 is not None)
    if not isinstance(model, FluidModel):
        return {"q0": deceleration(model, np.zeros(1), theta, omega_r)[:, 0]} if names else {}
    omega_m, omega_de, omega_k = model.densities(theta, omega_r)
    has = {"omega_k": omega_k, "omega_lambda": omega_de, "omega_de": omega_de}
    has["q0"] = deceleration(model, np.zeros(1), theta, omega_r)[:, 0]
    for name, epoch in (("z_acceleration", _z_acceleration), ("z_equality", _z_equality)):
        z = epoch(model, theta, omega_r)
        has[name] = z if model.is_flat else np.where(_expands_since(model, theta, omega_r, z), z, np.nan)
    if h0 is not None:
        has["age_gyr"] = age_gyr(model, theta, h0, omega_r)
        has["lambda_si"], has["vacuum_energy_density"] = vacuum(omega_de, h0)
    return {name: has[name] for name in names}


def deceleration(model: Model, z: FloatArray, theta: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
    """q(z) = −1 + dlnE/dln(1+z), (W, M): for fluids the sum over densities, otherwise a central difference."""
    z = np.asarray(z, float)
    if isinstance(model, FluidModel):
        omega_m, omega_de, _ = (x[:, None] for x in model.densities(theta, omega_r))
        omega_r = np.broadcast_to(np.asarray(omega_r, float), (len(theta),))[:, None]
        a = 1.0 + z
        source = 0.5 * omega_m * a**3 + omega_r * a**4
        source = source + 0.5 * omega_de * model.dark_energy_growth(z, theta) * (1 + 3 * model.equation_of_state(z, theta))
        with np.errstate(invalid="ignore", divide="ignore"):
            return source / model.e_squared(z, theta, omega_r[:, 0])
    step = 1e-4
    up, down = (model.e_squared(np.expm1(np.log1p(z) + s), theta, omega_r) for s in (step, -step))
    return -1.0 + (np.log(up) - np.log(down)) / (4 * step)


def age_gyr(model: Model, theta: FloatArray, h0: FloatArray, omega_r: float | FloatArray = 0.0) -> FloatArray:
    """Age ∫ da / (a H) in Gyr, (W,); NaN where there was no big bang.

    With a = x² the integrand 2/(x E) is smooth at the big bang of a universe of matter or radiation;
    96 Gauss–Legendre points leave less than 1e-9.
    """
    node, weight = np.polynomial.legendre.leggauss(96)
    x, weight = 0.5 * (node + 1.0), 0.5 * weight
    omega_r = np.broadcast_to(np.asarray(omega_r, float), (len(theta),))
    out = np.empty(len(theta))
    for start in range(0, len(theta), _CHUNK):
        rows = slice(start, start + _CHUNK)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            e2 = model.e_squared(x**-2 - 1.0, theta[rows], omega_r[rows])
            # Bouncing models pass E² < 0 on the way back.
            out[rows] = np.where(e2.min(axis=1) > 0, (2.0 / (x * np.sqrt(e2))) @ weight, np.nan)
    return out / hubble_si(np.asarray(h0, float)) / GYR_S


def vacuum(omega_lambda: FloatArray, h0: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Λ = 3 Ω_Λ H0²/c² in m⁻² and its energy density Ω_Λ ρ_c c² in J/m³."""
    h0 = np.asarray(h0, float)
    return 3 * omega_lambda * (hubble_si(h0) / C_M_S) ** 2, omega_lambda * critical_density(h0) * C_M_S**2


def _z_acceleration(model: FluidModel, theta: FloatArray, omega_r: FloatArray) -> FloatArray:
    """Redshift since which the expansion has been accelerating; NaN where it is not accelerating today."""
    if isinstance(model, FlatLCDM) and not np.any(omega_r):
        omega_m, omega_de, _ = model.densities(theta)
        with np.errstate(invalid="ignore", divide="ignore"):
            z = np.cbrt(2 * omega_de / omega_m) - 1.0
        return np.where((z > 0) & np.isfinite(z), z, np.nan)
    return _first_crossing(lambda z, rows: deceleration(model, z, theta[rows], omega_r[rows]), len(theta))


def _z_equality(model: FluidModel, theta: FloatArray, omega_r: FloatArray) -> FloatArray:
    """Redshift at which matter and dark energy were equally dense; NaN where there was none since."""

    def excess(z: FloatArray, rows: IntArray) -> FloatArray:
        omega_m, omega_de, _ = (x[:, None] for x in model.densities(theta[rows], omega_r[rows]))
        return omega_m * (1.0 + z) ** 3 - omega_de * model.dark_energy_growth(z, theta[rows])

    if isinstance(model, FlatLCDM):
        omega_m, omega_de, _ = model.densities(theta, omega_r)
        with np.errstate(invalid="ignore", divide="ignore"):
            z = np.cbrt(omega_de / omega_m) - 1.0
        return np.where((z > 0) & np.isfinite(z), z, np.nan)
    return _first_crossing(excess, len(theta))


def _expands_since(model: Model, theta: FloatArray, omega_r: FloatArray, z: FloatArray) -> BoolArray:
    """Whether E² stays positive from z to today, (W,): beyond a bounce there was no such epoch."""
    # A little beyond z too: where E² passes zero q changes sign, and that is no epoch.
    share = np.append(np.linspace(0.0, 1.0, 33), 1.0 + 1e-6)
    out = np.zeros(len(theta), dtype=bool)
    for start in range(0, len(theta), _CHUNK):
        rows = slice(start, start + _CHUNK)
        with np.errstate(invalid="ignore"):
            out[rows] = model.e_squared(share * z[rows, None], theta[rows], omega_r[rows]).min(axis=1) > 0
    return out


def _first_crossing(function: Callable[[FloatArray, IntArray], FloatArray], n: int) -> FloatArray:
    """Lowest z at which a function (z (M,) or (W, 1), rows) → (W, M), negative at z = 0, turns positive; NaN where it does not."""
    out = np.full(n, np.nan)
    for start in range(0, n, _CHUNK):
        rows = np.arange(start, min(start + _CHUNK, n))
        positive = function(_Z_SEARCH, rows) >= 0
        first = positive.argmax(axis=1)
        rows, first = rows[first > 0], first[first > 0]  # 0: positive already today, or never
        if not len(rows):
            continue
        low, high = _Z_SEARCH[first - 1], _Z_SEARCH[first]
        for _ in range(40):
            middle = 0.5 * (low + high)
            above = function(middle[:, None], rows)[:, 0] >= 0
            low, high = np.where(above, low, middle), np.where(above, middle, high)
        out[rows] = 0.5 * (low + high)
    return out
