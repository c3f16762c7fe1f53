"""Distances for models that a fixed grid cannot follow: adaptive panels, one parameter point at a time.

Close to the no-big-bang line E² dips towards zero and 1/E has a sharp peak. Panels are halved until a Chebyshev
series of 1/E converges on each; a panel that never does hides a zero of E², and the point is outside the prior.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.constants import MAG_PER_LN
from fitter.cosmology.distances import ANTIPODE, curved_ratio, log_distance
from fitter.cosmology.grid import Grid

if TYPE_CHECKING:
    from fitter.cosmology.base import Model

__all__ = ["exact_log_distance", "log_distance_at"]

_FIXED_ORDER = 256
_TAIL = 1e-9  # mag, of the fixed grid: its interpolation error is a few times that
_BLOCK = 16_384
_ORDER = 24
_DEEPEST = 45  # halvings; the panel is then 3e-14 of the range
_RELATIVE_TAIL = 1e-14
_NEGLIGIBLE = 1e-12  # of the whole integral: where E² nearly vanishes, its rounding alone keeps a panel from converging
_UNIT = Grid(np.expm1(2.0), _ORDER)  # only its matrices on x are used


def log_distance_at(
    model: Model, theta: FloatArray, z: FloatArray, omega_r: float | FloatArray = 0.0, *, within: float | None = None
) -> FloatArray:
    """f at any redshifts for W parameter points: a fixed grid where it has converged, adaptive panels for the other points.

    Parameters
    ----------
    model : Model
    theta : (W, p) array
    z : (M,) array, not negative
    omega_r : float or (W,) array
    within : float, optional
        A model without a distance at the largest z is tried again up to this redshift; its f is NaN beyond.

    Returns
    -------
    (W, M) array
        mag, good to 1e-8; NaN where the model has no distance.
    """
    theta, u = np.asarray(theta, float), np.log1p(np.asarray(z, float))
    omega_r = np.broadcast_to(omega_r, len(theta))
    grid = Grid(np.max(z), _FIXED_ORDER)
    nodes, tail, inside = log_distance(model, theta, grid, omega_r)
    f = np.empty((len(theta), len(u)))
    for start in range(0, len(u), _BLOCK):  # the interpolation matrix of a million redshifts would take 2 GB
        rows = slice(start, start + _BLOCK)
        f[:, rows] = nodes @ grid.interpolation(u[rows]).T
    for i in np.flatnonzero(~(inside & (tail <= _TAIL))):
        f[i] = _as_far_as_it_goes(model, theta[i], u, omega_r[i], within)
    return f


def _as_far_as_it_goes(model: Model, theta: FloatArray, u: FloatArray, omega_r: float, within: float | None) -> FloatArray:
    f = exact_log_distance(model, theta, u, omega_r)
    if f is not None:
        return f
    f = np.full(len(u), np.nan)
    near = np.zeros(len(u), dtype=bool) if within is None else u <= np.log1p(within)
    if near.any() and not near.all():
        found = exact_log_distance(model, theta, u[near], omega_r)
        f[near] = np.nan if found is None else found
    return f


def exact_log_distance(model: Model, theta: FloatArray, u: FloatArray, omega_r: float = 0.0) -> FloatArray | None:
    """f at any u = ln(1+z) for one parameter point, without an interpolation error worth naming.

    Parameters
    ----------
    model : Model
    theta : (p,) array
    u : (N,) array, not negative
    omega_r : float

    Returns
    -------
    (N,) array or None
        f in mag; None where the model is outside the prior within the range of `u`.
    """
    theta, u = np.asarray(theta, float)[None, :], np.asarray(u, float)
    if hasattr(model, "log_distance"):
        f = model.log_distance(np.expm1(u), theta)[0]
        return f if np.isfinite(f).all() else None
    panels = _panels(model, theta, u.max(), omega_r)
    if panels is None:
        return None
    edges, series, before = panels
    distance = _integral_at(u, edges, series, before)
    x = model.omega_k(theta, omega_r)[0] * distance**2
    if x.min() <= -ANTIPODE:
        return None
    at_zero = u == 0.0  # where D/z → 1/E(0)
    mean = np.where(at_zero, model.e_squared(np.zeros(1), theta, omega_r)[0] ** -0.5, distance / np.where(at_zero, 1.0, np.expm1(u)))
    return MAG_PER_LN * np.log(mean * curved_ratio(x))


def _panels(model: Model, theta: FloatArray, u_max: float, omega_r: float) -> tuple[FloatArray, list[FloatArray], FloatArray] | None:
    """Panel edges, the Chebyshev coefficients of the integral on each, and the integral before each."""
    todo, done, size = [(0.0, u_max, 0)], [], None
    while todo:
        low, high, depth = todo.pop()
        u = low + 0.5 * (high - low) * (1.0 + _UNIT.x)
        e2 = model.e_squared(np.expm1(u), theta, omega_r)[0]
        if not e2.min() > 0.0 or not np.isfinite(e2).all():
            return None
        coefficients = _UNIT.to_coefficients @ (np.exp(u) / np.sqrt(e2))
        size = coefficients[0] * u_max if size is None else size
        tail = np.abs(coefficients[-3:]).max()
        if tail <= _RELATIVE_TAIL * np.abs(coefficients).max() * _ORDER or tail * (high - low) <= _NEGLIGIBLE * size:
            done.append((low, high, coefficients))
        elif depth == _DEEPEST:
            return None
        else:
            middle = 0.5 * (low + high)
            todo += [(middle, high, depth + 1), (low, middle, depth + 1)]
    edges = np.array([d[0] for d in done] + [u_max])
    series = [np.polynomial.chebyshev.chebint(c, lbnd=-1.0, scl=0.5 * (high - low)) for low, high, c in done]
    whole = [np.polynomial.chebyshev.chebval(1.0, s) for s in series]
    return edges, series, np.concatenate([[0.0], np.cumsum(whole)])


def _integral_at(u: FloatArray, edges: FloatArray, series: list[FloatArray], before: FloatArray) -> FloatArray:
    panel = np.clip(np.searchsorted(edges, u, side="right") - 1, 0, len(series) - 1)
    order = np.argsort(panel, kind="stable")
    starts = np.searchsorted(panel[order], np.arange(len(series) + 1))
    integral = np.empty_like(u)
    for i, s in enumerate(series):
        here = order[starts[i] : starts[i + 1]]
        if len(here):
            x = 2.0 * (u[here] - edges[i]) / (edges[i + 1] - edges[i]) - 1.0
            integral[here] = before[i] + np.polynomial.chebyshev.chebval(x, s)
    return integral
