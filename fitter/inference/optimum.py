"""The maximum of the posterior, from several starts, and the errors its curvature gives."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.inference.maximise import maximise, quadratic_model
from fitter.inference.seeds import child_seed

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["Optimum", "find_optimum", "hessian_covariance", "prior_draws"]

_SCREENED = 4096
_STARTS = 8


@dataclass(frozen=True)
class Optimum:
    """Where the posterior density is highest.

    Parameters
    ----------
    theta : (n,) ndarray
        The sampled parameters there.
    log_posterior : float
    chi2 : float
        Minimised over the marginalised parameters.
    covariance : (n, n) ndarray
        Inverse of the negative Hessian, regularised: positive definite whatever the posterior looks like.
    values : dict of float
        Best value of every sampled and marginalised parameter.
    starts : int
        Local maximisations made, and `agreeing` of them ended within 1e-4 of the highest ln density.
    agreeing : int
    at_edge : tuple of str
        Parameters whose best value is a bound of the prior.
    """

    theta: FloatArray
    log_posterior: float
    chi2: float
    covariance: FloatArray
    values: dict[str, float]
    starts: int = 1
    agreeing: int = 1
    at_edge: tuple[str, ...] = field(default=())

    @property
    def errors(self) -> FloatArray:
        """(n,) standard deviations from the Hessian."""
        return np.sqrt(np.diag(self.covariance))


def find_optimum(log_posterior: LogPosterior, seed: np.random.SeedSequence) -> Optimum:
    """Maximise the posterior density.

    Prior draws are screened in one call; local climbs start from the best of them and from good ones far
    apart, all in the same function calls.

    Parameters
    ----------
    log_posterior : LogPosterior
    seed : SeedSequence

    Returns
    -------
    Optimum

    Raises
    ------
    InputError
        If no prior draw has a finite posterior density.
    """
    from threadpoolctl import threadpool_limits

    rng = np.random.default_rng(child_seed(seed, 0))
    low = np.array([p.low for p in log_posterior.priors], dtype=float)
    high = np.array([p.high for p in log_posterior.priors], dtype=float)
    with threadpool_limits(1):
        draws, values = prior_draws(log_posterior, rng, _SCREENED)
        starts, scale = _choose_starts(draws, values)
        points, heights = maximise(log_posterior, starts, scale, low, high)
        best = int(np.argmax(heights))
        width = draws.std(axis=0)
        covariance = hessian_covariance(log_posterior, points[best], width, low, high)
        # Once more from the top, with widths that fit: the last digits along a narrow ridge.
        polished, height = maximise(log_posterior, points[best : best + 1], np.sqrt(np.diag(covariance)), low, high)
        theta, heights[best] = polished[0], height[0]
        covariance = hessian_covariance(log_posterior, theta, width, low, high)
        marginalised = {k: float(v[0]) for k, v in log_posterior.best_marginalised(theta[None]).items()}
        chi2 = float(log_posterior.chi2(theta[None])[0])
    edges = tuple(n for n, t, a, b in zip(log_posterior.names, theta, low, high, strict=True) if t in (a, b))
    return Optimum(
        theta=theta,
        log_posterior=float(heights[best]),
        chi2=chi2,
        covariance=covariance,
        values=dict(zip(log_posterior.names, map(float, theta), strict=True)) | marginalised,
        starts=len(starts),
        agreeing=int(np.sum(heights > heights[best] - 1e-4)),
        at_edge=edges,
    )


def prior_draws(log_posterior: LogPosterior, rng: np.random.Generator, size: int) -> tuple[FloatArray, FloatArray]:
    """Draw from the prior until at least a few draws have a finite posterior density.

    Parameters
    ----------
    log_posterior : LogPosterior
    rng : numpy.random.Generator
    size : int
        Draws of one attempt; up to 32 attempts are made.

    Returns
    -------
    draws : (m, n) ndarray
        Those with a finite density.
    values : (m,) ndarray

    Raises
    ------
    InputError
        If there is none.
    """
    kept, heights, n = [], [], 0
    for _ in range(32):
        theta = np.column_stack([p.sample(rng, size) for p in log_posterior.priors])
        value = np.asarray(log_posterior(theta))
        finite = np.isfinite(value)
        kept.append(theta[finite])
        heights.append(value[finite])
        n += int(finite.sum())
        if n >= min(size, 256):
            break
    if n == 0:
        raise InputError(
            f"not one of {32 * size} draws from the priors is a possible model",
            key="parameters",
            cure="Widen the priors of " + ", ".join(log_posterior.names),
        )
    return np.concatenate(kept), np.concatenate(heights)


def _choose_starts(draws: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The best draw, then draws of the best twentieth as far as possible from those already chosen."""
    order = np.argsort(-values, kind="stable")
    top = order[: max(_STARTS, len(order) // 20)]
    spread = draws.std(axis=0)
    spread = np.where(spread > 0, spread, 1.0)
    u = draws[top] / spread
    chosen = [0]
    distance = np.full(len(top), np.inf)
    while len(chosen) < min(_STARTS, len(top)):
        distance = np.minimum(distance, np.sum((u - u[chosen[-1]]) ** 2, axis=1))
        chosen.append(int(np.argmax(distance)))
    scale = draws[top].std(axis=0)
    return draws[top[chosen]], np.where(scale > 0, scale, spread)


def hessian_covariance(
    function: Callable[[FloatArray], FloatArray], theta: FloatArray, width: FloatArray, low: FloatArray, high: FloatArray
) -> FloatArray:
    """Covariance from the curvature at `theta`.

    The stencil is scaled to about half a conditional standard deviation, shifted inwards at a bound, and
    shrunk where it meets −inf. Directions without a usable curvature get `width`.

    Parameters
    ----------
    function : callable
        ln density, (M, n) → (M,).
    theta : (n,) ndarray
    width : (n,) ndarray
        Largest sensible standard deviations, e.g. those of the prior.
    low, high : (n,) ndarray
        Bounds.

    Returns
    -------
    (n, n) ndarray
        Symmetric, positive definite.
    """
    width = np.where(np.isfinite(width) & (width > 0), width, 1.0)
    room = np.where(np.isfinite(high - low), (high - low) / 4, np.inf)
    h = np.minimum(0.05 * width, room)
    curvature = np.zeros((len(theta), len(theta)))
    for _ in range(30):
        _, trial, good = quadratic_model(function, theta, h, low, high)
        if not good:
            h = h * 0.5
            continue
        curvature = trial
        diagonal = np.diag(curvature)
        wanted = np.where(diagonal > 0, 0.3 / np.sqrt(np.abs(diagonal) + 1e-300), 2 * h)
        wanted = np.minimum(np.clip(wanted, 0.1 * h, 10 * h), np.minimum(room, width))
        if np.all(np.abs(wanted / h - 1) < 0.3):
            break
        h = wanted
    scaled = curvature * width[:, None] * width[None, :]
    w, v = np.linalg.eigh((scaled + scaled.T) / 2)
    inverse = (v / np.maximum(w, 1.0)) @ v.T
    return inverse * width[:, None] * width[None, :]
