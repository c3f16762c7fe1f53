"""From a model to distances on a grid of nodes: the shape f(u), its error, and what is outside the prior.

With D_M the transverse comoving distance [1]_::

    f(u) = 5 log10[D_M H0 / (c z)],   f(0) = 0 where E(0) = 1
    μ    = f + 5 log10[z (1 + z_hel)] + 5 log10(c / H0 / Mpc) + 25

References
----------
.. [1] Hogg, D. W. 1999, astro-ph/9905116.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import BoolArray, FloatArray
from fitter.constants import C_KM_S, MAG_PER_LN
from fitter.cosmology.base import Model
from fitter.cosmology.grid import Grid

__all__ = ["curved_ratio", "data_term", "hubble_term", "log_distance"]

ANTIPODE = np.pi**2
_SERIES_BELOW = 2.0
# sinh(√x)/√x = Σ xⁿ/(2n+1)!; ten terms leave 2e-17 at |x| = 2.
_SERIES = 1.0 / np.cumprod([1.0] + [2 * n * (2 * n + 1) for n in range(1, 11)])


def curved_ratio(x: FloatArray) -> FloatArray:
    """sinh(√x)/√x for x > 0, sin(√−x)/√−x for x < 0: transverse over line-of-sight distance, x = Ω_k (D_C H0/c)².

    One series serves both signs, so no digit is lost as x → 0. NaN stays NaN.
    """
    ratio = np.full_like(x, _SERIES[-1])
    for coefficient in _SERIES[-2::-1]:
        ratio *= x
        ratio += coefficient
    far = np.abs(x) > _SERIES_BELOW
    if far.any():
        root = np.sqrt(np.abs(x[far]))
        ratio[far] = np.where(x[far] > 0, np.sinh(root), np.sin(root)) / root
    return ratio


def data_term(z: FloatArray, z_helio: FloatArray) -> FloatArray:
    """5 log10[z (1 + z_hel)], mag: the part of μ that depends on the data only."""
    return MAG_PER_LN * np.log(z * (1.0 + z_helio))


def hubble_term(h0: ArrayLike) -> FloatArray:
    """5 log10(c / H0 / Mpc) + 25, mag, for H0 in km/s/Mpc."""
    return MAG_PER_LN * np.log(C_KM_S / np.asarray(h0, float)) + 25.0


def log_distance(
    model: Model, theta: FloatArray, grid: Grid, omega_r: float | FloatArray = 0.0
) -> tuple[FloatArray, FloatArray, BoolArray]:
    """f at the nodes for W parameter points, with its convergence.

    Parameters
    ----------
    model : Model
    theta : (W, p) array
    grid : Grid
    omega_r : float or (W,) array

    Returns
    -------
    f : (W, K+1) array
        mag; rows outside the prior hold anything.
    tail : (W,) array
        Largest of the last three Chebyshev coefficients of f, mag; it tracks the interpolation error.
    inside : (W,) bool array
        False where E² ≤ 0 at a node, or where the antipode of a closed space lies within the grid.
    """
    custom = getattr(model, "log_distance", None)
    if custom is not None:
        f = custom(grid.z, theta)
        inside = np.isfinite(f).all(axis=1)
        return f, _tail(f, grid), inside
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        e2 = model.e_squared(grid.z, theta, omega_r)
        inside = e2.min(axis=1) > 0.0
        mean = ((1.0 + grid.z) / np.sqrt(e2)) @ grid.mean_to_node.T
        if model.is_flat:
            ratio = mean
        else:
            x = model.omega_k(theta, omega_r)[:, None] * (grid.z * mean) ** 2
            open_sky = x.min(axis=1) > -ANTIPODE
            ratio = mean * curved_ratio(x)
        f = MAG_PER_LN * np.log(ratio)
        tail = _tail(f, grid)
    if not model.is_flat and not open_sky.all():
        # An antipode found on an unconverged grid is a suspicion only: let the next level decide.
        sure = _tail(mean, grid) < 1e-6
        tail = np.where(open_sky, tail, np.where(sure, 0.0, np.inf))
        inside &= open_sky | ~sure
    # E² > 0 at the nodes and still no number: overflow, or a dip between nodes.
    tail[np.isnan(tail)] = np.inf
    return f, tail, inside


def _tail(values: FloatArray, grid: Grid) -> FloatArray:
    return np.abs(values @ grid.tail.T).max(axis=1)
