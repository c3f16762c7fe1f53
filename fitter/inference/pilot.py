"""A mixture that looks like the posterior, tails included, found before any chain begins."""

from __future__ import annotations

from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.mixture import StudentMixture, blend, fit_mixture
from fitter.inference.optimum import prior_draws
from fitter.inference.resampling import systematic

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["pilot_mixture"]

# Draws of the last rounds, at most; the first ones, which only find the place, take a quarter of them.
_DRAWS = 16384
_FEWEST_ROUNDS, _MOST_ROUNDS = 7, 14
_SMALL_ROUNDS = 4
# Efficiency as an importance density for the posterior that makes further rounds pointless.
_GOOD = 0.45
# One half of the mixture is fitted to the posterior density to the first of these powers, which is a little wider than the
# posterior, the other to the second one, for tails that are thin and long; then the share of the other in the proposals.
_FLATTENED = (0.6, 0.15)
_TAIL_SHARE = 0.3
# Fewer effective draws than this, and a round aims at a flatter target still.
_FEWEST = 300


def pilot_mixture(log_posterior: LogPosterior, optimum: Optimum, seed: np.random.SeedSequence) -> StudentMixture:
    """Fit a Student-t mixture to a flattened posterior by repeated importance sampling.

    The first draws come from the prior and from a wide Student-t around the optimum; each round weights its draws by
    density^β / q, fits mixtures to resamples of them for two powers β, and draws the next ones from these.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    seed : SeedSequence

    Returns
    -------
    StudentMixture
        Used as a proposal, whose errors cost acceptance and never bias the chain.

    Notes
    -----
    Population Monte Carlo: Cappé, Guillin, Marin & Robert 2004, J. Comput. Graph. Stat. 13, 907.
    """
    rng = np.random.default_rng(seed)
    n = len(optimum.theta)
    draws = min(2048 * 2**n, _DRAWS)
    points, log_q = _first_draws(log_posterior, optimum, draws // 2, rng)
    components = 2 ** min(2 + n, 6)
    fitted = partial(fit_mixture, iterations=5, broad=0.05, ridge=1e-4, bisect=True)
    mixture = None
    for turn in range(_MOST_ROUNDS):
        values = np.asarray(log_posterior(points))
        if np.isfinite(values).sum() < 4 * components:
            break
        if turn >= _FEWEST_ROUNDS and _efficiency(values - log_q) > _GOOD:
            break
        chosen = (systematic(_weights(values, log_q, power), len(points) // 2, rng.random()) for power in _FLATTENED)
        body, tails = (fitted(points[rows], components) for rows in chosen)
        mixture = blend(body, tails, _TAIL_SHARE)
        points = mixture.draw(rng, draws // 4 if turn < _SMALL_ROUNDS else draws)
        log_q = mixture.log_density(points)
    return _around(optimum) if mixture is None else mixture


def _around(optimum: Optimum) -> StudentMixture:
    return StudentMixture.of_factors(np.ones(1), optimum.theta[None], 2 * np.linalg.cholesky(optimum.covariance)[None], 5.0)


def _first_draws(log_posterior: LogPosterior, optimum: Optimum, size: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Possible points of the prior and draws around the optimum, with the ln density of the two together."""
    spread, _ = prior_draws(log_posterior, rng, size)
    local = _around(optimum)
    points = np.concatenate([spread, local.draw(rng, size // 2)])
    share = len(spread) / len(points)
    with np.errstate(divide="ignore"):
        log_q = np.logaddexp(np.log(share) + log_posterior.log_prior(points), np.log(1 - share) + local.log_density(points))
    return points, log_q


def _efficiency(log_w: FloatArray) -> float:
    w = np.exp(log_w - log_w.max())
    return w.sum() ** 2 / (w**2).sum() / len(w)


def _weights(values: FloatArray, log_q: FloatArray, power: float) -> FloatArray:
    """density^β / q, normalised, with the largest β up to `power` that leaves enough effective draws."""
    while True:
        log_w = power * values - log_q
        w = np.exp(log_w - log_w.max())
        w /= w.sum()
        if 1 / (w**2).sum() >= _FEWEST or power < 1e-3:
            return w
        power *= 0.7
