"""Where the walkers begin."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray, IntArray
from fitter.errors import InputError
from fitter.inference.optimum import prior_draws

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["starting_walkers"]

_SCREENED = 2048


def starting_walkers(
    log_posterior: LogPosterior, optimum: Optimum, walkers: int, seed: np.random.SeedSequence
) -> tuple[FloatArray, FloatArray]:
    """Draw the first positions of one ensemble, wider than the posterior.

    Half of them come from a Student-t of twice the Hessian's width around the optimum, from a centre of this
    replica's own; half from the prior, weighted by a flattened posterior, so that a second mode or a curved tail that the Hessian
    knows nothing of has walkers too.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    walkers : int
    seed : SeedSequence

    Returns
    -------
    positions : (W, n) ndarray
        Inside the prior.
    values : (W,) ndarray
        Finite ln posterior densities.

    Raises
    ------
    InputError
        If not enough distinct points of finite density are found.
    """
    rng = np.random.default_rng(seed)
    spread, heights = prior_draws(log_posterior, rng, max(_SCREENED, 4 * walkers))
    near, near_heights = _around(log_posterior, optimum, walkers, rng)
    if len(spread) + len(near) < walkers:
        raise InputError(
            f"only {len(spread) + len(near)} possible starting points were found for {walkers} walkers",
            key="parameters",
            cure="Almost all of the prior is excluded: narrow the priors to the possible models, or use fewer walkers",
        )
    n_near = min(len(near), max(walkers // 2, walkers - len(spread)))
    picked = _tempered_choice(heights, walkers - n_near, rng)
    positions = np.concatenate([near[:n_near], spread[picked]])
    values = np.concatenate([near_heights[:n_near], heights[picked]])
    return positions, values


def _around(log_posterior: LogPosterior, optimum: Optimum, walkers: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Over-dispersed draws around the optimum that have a finite density, at most `walkers`."""
    n = len(optimum.theta)
    factor = np.linalg.cholesky(optimum.covariance)
    centre = optimum.theta + factor @ rng.standard_normal(n)
    low = np.array([p.low for p in log_posterior.priors])
    high = np.array([p.high for p in log_posterior.priors])
    centre = np.clip(centre, low, high)
    heavy = np.sqrt(5 / rng.chisquare(5, size=(8 * walkers, 1)))
    trial = centre + 2 * heavy * (rng.standard_normal((8 * walkers, n)) @ factor.T)
    values = np.asarray(log_posterior(trial))
    good = np.flatnonzero(np.isfinite(values))[:walkers]
    return trial[good], values[good]


def _tempered_choice(heights: FloatArray, size: int, rng: np.random.Generator) -> IntArray:
    """Choose `size` different draws with probability density^(1/T), T the smallest that leaves enough to choose from."""
    if size == 0:
        return np.array([], dtype=int)
    shifted = heights - heights.max()
    temperature = 1.0
    while np.exp(shifted / temperature).sum() < 2 * size and temperature < 1e6:
        temperature *= 1.5
    # Gumbel keys: the largest `size` of them are a weighted choice without replacement.
    keys = shifted / temperature + rng.gumbel(size=len(heights))
    return np.argsort(-keys, kind="stable")[:size]
