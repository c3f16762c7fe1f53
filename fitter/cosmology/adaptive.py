"""Distances for models that a fixed grid cannot follow: adaptive panels, one parameter point at a time.

Close to the no-big-bang line E² dips towards zero and 1/E has a sharp peak. Panels are halved until a Chebyshev
series of 1/E converges on each; a panel that never does hides a zero of E², and the point is outside the prior.
"""

from __future__ import annotations

import numpy as np

from fitter.constants import MAG_PER_LN
from fitter.cosmology.distances import ANTIPODE, curved_ratio
from fitter.cosmology.grid import Grid

__all__ = ["exact_log_distance"]

_ORDER = 24
_DEEPEST = 45  # halvings; the panel is then 3e-14 of the range
_RELATIVE_TAIL = 1e-14
_UNIT = Grid(np.expm1(2.0), _ORDER)  # only its matrices on x are used


def exact_log_distance(model, theta, u, omega_r=0.0):
    """f at any u = ln(1+z) for one parameter point, without an interpolation error worth naming.

    Parameters
    ----------
    model : Model
    theta : (p,) array
    u : (N,) array, positive
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
    return MAG_PER_LN * np.log(distance / np.expm1(u) * curved_ratio(x))


def _panels(model, theta, u_max, omega_r):
    """Panel edges, the Chebyshev coefficients of the integral on each, and the integral before each."""
    todo, done = [(0.0, u_max, 0)], []
    while todo:
        low, high, depth = todo.pop()
        u = low + 0.5 * (high - low) * (1.0 + _UNIT.x)
        e2 = model.e_squared(np.expm1(u), theta, omega_r)[0]
        if not e2.min() > 0.0 or not np.isfinite(e2).all():
            return None
        coefficients = _UNIT.to_coefficients @ (np.exp(u) / np.sqrt(e2))
        if np.abs(coefficients[-3:]).max() <= _RELATIVE_TAIL * np.abs(coefficients).max() * _ORDER:
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


def _integral_at(u, edges, series, before):
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
