"""The posterior by importance sampling from a mixture fitted to the chain: evidence and marginals in any dimension.

The mixture only proposes; each draw is weighted by posterior over proposal, so a chain that sampled the wrong density cannot
pass its error on. It must only have found the right region.

References
----------
.. [1] Owen, A. B. 2013, Monte Carlo theory, methods and examples, chapter 9.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.inference.mixture import fit_mixture
from fitter.inference.resampling import systematic
from fitter.inference.target import Target

if TYPE_CHECKING:
    from fitter.inference.posterior import Posterior

__all__ = ["KOLMOGOROV", "WeightedPosterior", "importance"]

_COMPONENTS = 8
_FITTED = 6000  # draws of the chain that the mixture is fitted to
_BATCH = 16_384
# Kolmogorov: P(√n D > 2.2) = 2 exp(−2 · 2.2²) = 1.3e-4, so false alarms are rare even with several parameters.
KOLMOGOROV = 2.2


@dataclass(frozen=True)
class WeightedPosterior:
    """Independent draws with weights.

    Attributes
    ----------
    names : tuple of str
    log_evidence, log_evidence_error : float
        ln Z and its standard error.
    effective : float
        Number of equally weighted draws that would be as good (Kish).
    """

    names: tuple[str, ...]
    log_evidence: float
    log_evidence_error: float
    evaluations: int
    effective: float
    _draws: FloatArray  # (M, d)
    _weights: FloatArray  # (M,), sum 1
    method = "importance sampling from a fitted mixture"

    def points(self, size: int) -> FloatArray:
        """About equally likely points, (size, d): the draws, resampled systematically by their weights."""
        return self._draws[systematic(self._weights, size)]

    @property
    def cdf_error(self) -> float:
        """Error of `cdf` that chance exceeds once in 10,000 times."""
        return KOLMOGOROV / np.sqrt(self.effective)

    def cdf(self, name: str, x: ArrayLike) -> FloatArray:
        """Marginal cumulative distribution at x, (M,)."""
        values = self._draws[:, self.names.index(name)]
        order = np.argsort(values)
        below = np.concatenate([[0.0], np.cumsum(self._weights[order])])
        return below[np.searchsorted(values[order], np.atleast_1d(x), side="right")]


def importance(log_posterior: Target, posterior: Posterior, *, seed: np.random.SeedSequence, draws: int = 131_072) -> WeightedPosterior:
    """Weight independent draws from a mixture fitted to the chain.

    Parameters
    ----------
    log_posterior : LogPosterior
    posterior : Posterior
        Tells where to propose.
    seed : SeedSequence
    draws : int

    Raises
    ------
    FloatingPointError
        If no draw has any posterior density.
    """
    rng = np.random.default_rng(seed)
    chain = posterior.chain.reshape(-1, log_posterior.ndim)
    picked = rng.choice(len(chain), size=min(_FITTED, len(chain)), replace=False)
    mixture = fit_mixture(chain[picked], _COMPONENTS, iterations=30)
    theta = mixture.draw(rng, draws)
    log_weight = np.concatenate([log_posterior(theta[i : i + _BATCH]) for i in range(0, draws, _BATCH)])
    inside = log_weight > -np.inf
    if not inside.any():
        raise FloatingPointError("importance sampling found no posterior density near the chain")
    log_weight[inside] -= mixture.log_density(theta[inside])
    top = log_weight.max()
    weight = np.exp(log_weight - top)
    mean = weight.mean()
    error = weight.std() / mean / np.sqrt(draws)
    effective = weight.sum() ** 2 / (weight**2).sum()
    return WeightedPosterior(
        log_posterior.names, float(np.log(mean) + top), float(error), draws, float(effective), theta, weight / weight.sum()
    )  # fmt: skip
