"""The proof that goes with every fit: each marginal checked, and the evidence had, by means independent of the chain."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.importance import KOLMOGOROV, WeightedPosterior, importance
from fitter.inference.quadrature import GridPosterior, integrate
from fitter.inference.without_h0 import GridWithH0, WithoutH0, integrate_without_h0

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["Proof", "cross_check", "prove"]

# Quadrature whose own error is larger than this proves nothing: importance sampling takes its place.
_USABLE_ERROR = 0.02
_SIGMAS = 4.0
# Points of the chain, and as many of the importance sample, that the cells of the quadrature must know of.
_KNOWN = 3000
# A distribution function is compared in the tails too, where the Kolmogorov bound is blind, at these probabilities
# and to this many of its own standard errors √(F (1 − F) / ESS).
_TAILS = (0.002, 0.01, 0.05, 0.95, 0.99, 0.998)
_TAIL_SIGMAS = 4.0


@dataclass(frozen=True)
class Proof:
    """What is known of the posterior without its chain.

    Attributes
    ----------
    cross_check : dict
        ``method``, ``max_cdf_difference``, ``tolerance``, ``agrees``, ``worst``.
    evidence : dict
        ``log_evidence``, ``log_evidence_error``, ``method``; ``quadrature`` and ``importance``: each [ln Z, error] or None;
        ``methods_agree``: None where only one ran.
    grid : GridPosterior, GridWithH0 or None
    weighted : WeightedPosterior
    """

    cross_check: dict[str, Any]
    evidence: dict[str, Any]
    grid: GridPosterior | GridWithH0 | None
    weighted: WeightedPosterior


def prove(
    log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum, ess: dict[str, float], *, seed: np.random.SeedSequence
) -> Proof:
    """Check a chain and compute its evidence.

    Parameters
    ----------
    log_posterior : LogPosterior
    posterior : Posterior
    optimum : Optimum
    ess : dict
        Effective sample size of each sampled parameter.
    seed : SeedSequence
    """
    weighted = importance(log_posterior, posterior, seed=seed)
    chain = posterior.chain.reshape(-1, posterior.chain.shape[-1])
    known = np.concatenate([chain[:: len(chain) // _KNOWN + 1], weighted.points(_KNOWN)])
    if WithoutH0.applies(log_posterior):
        grid: GridPosterior | GridWithH0 | None = integrate_without_h0(log_posterior, optimum, known)
    else:
        grid = integrate(log_posterior, optimum, known=known)
    if grid is not None and grid.log_evidence_error > _USABLE_ERROR:
        grid = None
    best = weighted if grid is None else grid
    agree = None
    if grid is not None:
        allowed = grid.log_evidence_error + _SIGMAS * weighted.log_evidence_error
        agree = bool(abs(grid.log_evidence - weighted.log_evidence) <= allowed)
    evidence = {
        "log_evidence": best.log_evidence,
        "log_evidence_error": best.log_evidence_error,
        "method": best.method,
        "quadrature": None if grid is None else [grid.log_evidence, grid.log_evidence_error],
        "importance": [weighted.log_evidence, weighted.log_evidence_error],
        "methods_agree": agree,
    }
    return Proof(cross_check(best, posterior, ess), evidence, grid, weighted)


def cross_check(other: GridPosterior | GridWithH0 | WeightedPosterior, posterior: Posterior, ess: dict[str, float]) -> dict[str, Any]:
    """Compare every marginal of a chain with another account of the posterior.

    Parameters
    ----------
    other : GridPosterior, GridWithH0 or WeightedPosterior
        Anything with ``names``, ``cdf``, ``cdf_error`` and ``method``.
    posterior : Posterior
    ess : dict
        Effective sample size of each sampled parameter: what its ESS allows is the tolerance.

    Returns
    -------
    dict
        The parameter that is worst against its tolerance, under the keys of summary.json.
    """
    differences = (
        (difference, allowed, name)
        for name in other.names
        for difference, allowed in _differences(other, posterior.draws(name), name, max(ess[name], 1.0))
    )
    difference, allowed, worst = max(differences, key=lambda one: one[0] / one[1])
    return {
        "method": other.method,
        "max_cdf_difference": difference,
        "tolerance": allowed,
        "agrees": bool(difference <= allowed),
        "worst": worst,
    }


def _differences(
    other: GridPosterior | GridWithH0 | WeightedPosterior, draws: FloatArray, name: str, ess: float
) -> Iterator[tuple[float, float]]:
    """Yield pairs (difference of the two distribution functions, what chance allows): over the whole range, then in each tail."""
    flat = np.sort(draws, axis=None)
    at = flat[np.linspace(0, len(flat) - 1, 513).astype(int)[1:-1]]
    cdf = other.cdf(name, at)
    empirical = np.searchsorted(flat, at, side="right") / len(flat)
    yield float(np.abs(cdf - empirical).max()), float(KOLMOGOROV / np.sqrt(ess) + other.cdf_error)
    # The points come from the other account: a chain that never reached a tail has no quantile there.
    below, order = np.maximum.accumulate(cdf), np.asarray(_TAILS)
    points = np.interp(order, below, at, left=at[0], right=at[-1])
    for x, f in zip(points, other.cdf(name, points), strict=True):
        share = np.searchsorted(flat, x, side="right") / len(flat)
        # Not the ESS of the tail itself: where that is lower, the tail is what has not been sampled.
        yield float(abs(f - share)), float(_TAIL_SIGMAS * np.sqrt(max(f * (1 - f), 1e-6) / ess) + other.cdf_error)
