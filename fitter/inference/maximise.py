"""Many bounded maximisations at once, for functions that are cheap in batches and −inf in places."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from fitter.array_types import BoolArray, FloatArray

Density = Callable[[FloatArray], FloatArray]

__all__ = ["maximise", "quadratic_model"]

# Damping of the Newton step, in units of the mean curvature: all are tried in one call, the best is kept.
_DAMPING = np.concatenate([[0.0], np.logspace(-4, 5, 14)])
# Stencil half-width in units of the conditional standard deviation: coarse to get there, fine for the last digits.
_WIDTHS = ((0.3, 1e-3, 100), (0.02, 1e-11, 150))


def maximise(
    function: Density,
    starts: FloatArray,
    scale: FloatArray,
    low: FloatArray,
    high: FloatArray,
    free: BoolArray | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Climb from every start to a local maximum, all starts in the same function calls.

    Each iteration fits a quadratic model by finite differences, then tries Newton steps with a range
    of dampings, clipped to the bounds, and moves to the best point seen: values of −inf are
    never chosen, and the value never falls.

    Parameters
    ----------
    function : callable
        (M, n) array → (M,) values; may be −inf, not NaN.
    starts : (B, n) ndarray
        Starting points, inside the bounds, with finite values.
    scale : (n,) or (B, n) ndarray
        First guess of the width of the maximum in each coordinate.
    low, high : (n,) ndarray
        Bounds, may be infinite.
    free : (B, n) bool ndarray, optional
        Coordinates that may move; all by default.

    Returns
    -------
    points : (B, n) ndarray
    values : (B,) ndarray
    """
    x = np.clip(np.array(starts, dtype=float), low, high)
    free = np.ones(x.shape, bool) if free is None else np.broadcast_to(free, x.shape)
    values = np.asarray(function(x), dtype=float)
    room = np.where(np.isfinite(high - low), (high - low) / 4, np.inf)
    h = np.minimum(np.broadcast_to(np.asarray(scale, dtype=float), x.shape) * _WIDTHS[0][0], room)
    for width, tolerance, limit in _WIDTHS:
        stalled = np.zeros(len(x))
        for turn in range(limit):
            todo = np.flatnonzero(stalled < 3)
            if todo.size == 0:
                break
            best, value, step, good = _iterate(function, x[todo], values[todo], h[todo], low, high, free[todo], width, turn)
            gain = value - values[todo]
            x[todo], values[todo], h[todo] = best, value, np.minimum(step, room)
            # Beside a region of −inf only chance directions are left: more patience.
            stalled[todo] = np.where(gain > tolerance, 0.0, stalled[todo] + np.where(good, 1.0, 0.2))
    return x, values


def _iterate(
    function: Density,
    x: FloatArray,
    values: FloatArray,
    h: FloatArray,
    low: FloatArray,
    high: FloatArray,
    free: BoolArray,
    width: float,
    turn: int,
) -> tuple[FloatArray, FloatArray, FloatArray, BoolArray]:
    """One stencil and one set of damped steps for every problem; returns points, values, new stencil widths, stencil finite."""
    centre, stencil, f, gradient, curvature, good = _stencil(function, x, h, low, high, free)
    gradient, curvature = gradient * h, curvature * h[:, :, None] * h[:, None, :]
    # A bound holds a coordinate where the gradient pushes against it.
    held = ~free | ((x <= low) & (gradient < 0)) | ((x >= high) & (gradient > 0))
    gradient = np.where(held, 0.0, gradient)
    curvature = np.where(held[:, :, None] | held[:, None, :], 0.0, curvature)
    curvature = curvature + np.einsum("bi,ij->bij", held.astype(float), np.eye(x.shape[1]))
    steps = _damped_steps(gradient, curvature) * h[:, None, :]
    start = np.where(held, x, centre)
    trial = np.clip(start[:, None, :] + steps, low, high)
    if not good.all():
        trial[~good] = _chance_steps(x[~good], np.where(free, h, 0.0)[~good], low, high, turn)
    tried = np.asarray(function(trial.reshape(-1, x.shape[1]))).reshape(trial.shape[:2])
    points = np.concatenate([x[:, None], trial, stencil], axis=1)
    scores = np.concatenate([values[:, None], tried, f], axis=1)
    pick = np.argmax(scores, axis=1)
    rows = np.arange(len(x))
    diagonal = np.where(held, 1.0, np.einsum("bii->bi", curvature))
    with np.errstate(divide="ignore", invalid="ignore"):
        factor = np.where(diagonal > 0, width / np.sqrt(np.abs(diagonal)), 2.0)
    shrink = np.where(scores[rows, pick] > values, 1.2, 0.6)
    factor = np.where(good[:, None], np.clip(factor, 0.1, 10.0), shrink[:, None])
    factor = np.where(held & good[:, None], 1.0, factor)
    return points[rows, pick], scores[rows, pick], h * factor, good


def _damped_steps(gradient: FloatArray, curvature: FloatArray) -> FloatArray:
    """(B, n) gradient, (B, n, n) negative Hessian → (B, L, n) Newton steps, negative curvature turned positive."""
    w, v = np.linalg.eigh(curvature)
    w = np.abs(w)
    floor = 1e-10 * w.max(axis=1, keepdims=True) + 1e-300
    mean = w.mean(axis=1, keepdims=True)
    along = np.einsum("bij,bi->bj", v, gradient)
    damped = along[:, None, :] / (np.maximum(w, floor)[:, None, :] + _DAMPING[None, :, None] * mean[:, None, :])
    return np.einsum("bij,blj->bli", v, np.nan_to_num(damped, posinf=0.0, neginf=0.0))


def _chance_steps(x: FloatArray, h: FloatArray, low: FloatArray, high: FloatArray, turn: int) -> FloatArray:
    """Steps of about `h` in directions that change from turn to turn, always the same ones in the same turn."""
    directions = np.random.default_rng(turn).standard_normal((len(_DAMPING), x.shape[1]))
    return np.clip(x[:, None, :] + directions * h[:, None, :], low, high)


def quadratic_model(
    function: Density, x: FloatArray, h: FloatArray, low: FloatArray, high: FloatArray
) -> tuple[FloatArray, FloatArray, bool]:
    """Gradient and negative Hessian near one point by finite differences.

    Within `h` of a bound the stencil is shifted inwards, which makes the differences one-sided.

    Parameters
    ----------
    function : callable
        (M, n) → (M,).
    x, h, low, high : (n,) ndarray
        Point, half-widths of the stencil, bounds.

    Returns
    -------
    gradient : (n,) ndarray
    curvature : (n, n) ndarray
        Minus the matrix of second derivatives.
    good : bool
        False where the stencil met −inf.
    """
    x, h = np.atleast_2d(x), np.atleast_2d(h)
    _, _, _, gradient, curvature, good = _stencil(function, x, h, low, high, np.ones(x.shape, bool))
    return gradient[0], curvature[0], bool(good[0])


def _stencil(
    function: Density, x: FloatArray, h: FloatArray, low: FloatArray, high: FloatArray, free: BoolArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, BoolArray]:
    """Second-order central differences, the centre kept `h` inside the bounds."""
    n = x.shape[1]
    h = np.where(free, h, 0.0)
    centre = np.where(free, np.clip(x, low + h, high - h), x)
    offsets, pairs = _offsets(n)
    points = centre[:, None, :] + offsets[None] * h[:, None, :]
    f = np.asarray(function(points.reshape(-1, n)), dtype=float).reshape(points.shape[:2])
    good: BoolArray = np.isfinite(f).all(axis=1)
    g = np.where(good[:, None], f, 0.0)
    middle, plus, minus = g[:, :1], g[:, 1 : n + 1], g[:, n + 1 : 2 * n + 1]
    safe = np.where(free, h, 1.0)
    gradient = np.where(free, (plus - minus) / (2 * safe), 0.0)
    curvature = np.zeros((len(x), n, n))
    i = np.arange(n)
    curvature[:, i, i] = np.where(free, -(plus - 2 * middle + minus) / safe**2, 0.0)
    for k, (a, b) in enumerate(pairs):
        both, none = g[:, 2 * n + 1 + 2 * k], g[:, 2 * n + 2 + 2 * k]
        cross = both - plus[:, a] - plus[:, b] + 2 * middle[:, 0] - minus[:, a] - minus[:, b] + none
        value = np.where(free[:, a] & free[:, b], -cross / (2 * safe[:, a] * safe[:, b]), 0.0)
        curvature[:, a, b] = curvature[:, b, a] = value
    return centre, points, f, gradient, curvature, good


def _offsets(n: int) -> tuple[FloatArray, list[tuple[int, int]]]:
    """Unit offsets of the stencil: centre, +e_i, −e_i, then ±(e_a + e_b) for every pair."""
    unit = np.eye(n)
    pairs = [(a, b) for a in range(n) for b in range(a)]
    both = [sign * (unit[a] + unit[b]) for a, b in pairs for sign in (1, -1)]
    return np.vstack([np.zeros((1, n)), unit, -unit, *[row[None] for row in both]]), pairs
