"""The evidence ratio of nested fits from the chain of the larger one alone: the Savage–Dickey density ratio.

References
----------
.. [1] Dickey, J. M. 1971, Ann. Math. Stat. 42, 204.
.. [2] Verdinelli, I. & Wasserman, L. 1995, JASA 90, 614: where the priors of the shared parameters differ.
.. [3] Chen, M.-H. 1994, JASA 89, 818: the marginal density at a point from draws and the unnormalised posterior.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import BoolArray, FloatArray
from fitter.inference.importance import importance
from fitter.inference.seeds import child_seed
from fitter.study.entry import batch_error
from fitter.study.nested import Nesting

if TYPE_CHECKING:
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.priors import Prior

__all__ = ["density_ratio", "ratio_along"]

_NEAREST = 4000  # draws that set the width of the window: their number limits the error to about 2 %
_WIDEST = 1.5  # conditional standard deviations; with the nested value farther out there are too few draws near
_TOO_FEW = 100
# Draws that rarely come so far make a mean that a few of them rule: its own error is then too small to be believed.
_TRUSTED = 0.12


def density_ratio(posterior: Posterior, nest: Nesting) -> dict[str, Any] | None:
    """Evidence of the simpler fit over that of the larger one.

    Parameters
    ----------
    posterior : Posterior
        The larger fit's chain.
    nest : Nesting

    Returns
    -------
    dict or None
        ``log_ratio``, ``error``, ``draws``, how many there were near the nested values, and ``method``; None where they were too few to
        tell.

    Notes
    -----
    With s the shared and φ the extra parameters, e(s) the nested values and w(φ|s) any normalised density,

        Z_small / Z_large = E[ w(φ|s) L(s, e(s)) π_small(s) / (L(s, φ) π_large(s, φ)) ]

    over the posterior of the larger fit. Where the priors factorise this is the posterior over the prior density of φ at e.
    Here w is constant in a window around e(s), cut off at the ends of the prior: the likelihood ratio corrects for what the
    density does inside, so the width costs no exactness. It is kept narrow, for
    draws whose density is far below that at e(s) would rule the mean.
    """
    theta = posterior.chain.reshape(-1, posterior.chain.shape[-1])
    small = theta[:, [_column(nest, name) for name in nest.small.names]]
    nested = nest.points(small)
    extra = [nest.large.names.index(n) for n in nest.extra]
    spread = _conditional_spread(theta, extra)
    distance = (np.abs(theta[:, extra] - nested[:, extra]) / spread).max(axis=1)
    # The draw that sets the width is itself left out: with it the density would come out too high by one part in their number.
    width = min(np.partition(distance, min(_NEAREST, len(distance) - 1))[min(_NEAREST, len(distance) - 1)], _WIDEST)
    volume, near = _window(theta, nested, extra, width * spread, nest.large.priors)
    if near.sum() < _TOO_FEW:
        return None
    log_term = nest.large.log_likelihood(nested[near]) + nest.small.log_prior(small[near])
    log_term -= posterior.log_posterior.ravel()[near] + np.log(volume[near])
    top = log_term.max()
    if not np.isfinite(top):
        return None
    terms = np.zeros(len(theta))
    terms[near] = np.exp(log_term - top)
    mean, error = batch_error(terms.reshape(posterior.log_posterior.shape))
    if error > _TRUSTED * mean:
        return None
    return {
        "log_ratio": float(np.log(mean) + top),
        "error": error / mean,
        "draws": int(near.sum()),
        "method": "draws near the nested values",
    }


class _Along:
    """The larger fit's likelihood along the nested values, under the simpler fit's priors."""

    def __init__(self, nest: Nesting) -> None:
        self.names, self.priors, self.ndim, self._nest = nest.small.names, nest.small.priors, len(nest.small.names), nest

    def __call__(self, theta: FloatArray) -> FloatArray:
        value = self._nest.small.log_prior(theta)
        inside = value > -np.inf
        value[inside] += self._nest.large.log_likelihood(self._nest.points(theta[inside]))
        return value


def ratio_along(small_posterior: Posterior, large_posterior: Posterior, nest: Nesting, seed: np.random.SeedSequence) -> dict[str, Any]:
    """The same ratio where the posterior of the larger fit hardly reaches the nested values.

    Its density is integrated along them, and over everything, by importance sampling: weighted draws instead of the chain's.

    Parameters
    ----------
    small_posterior, large_posterior : Posterior
        Chains that say where to propose.
    nest : Nesting
    seed : SeedSequence

    Returns
    -------
    dict
        ``log_ratio``, ``error``, ``draws`` (how many good ones they are worth) and ``method``.
    """
    along = importance(_Along(nest), small_posterior, seed=child_seed(seed, 0))
    whole = importance(nest.large, large_posterior, seed=child_seed(seed, 1))
    return {
        "log_ratio": along.log_evidence - whole.log_evidence,
        "error": float(np.hypot(along.log_evidence_error, whole.log_evidence_error)),
        "draws": int(min(along.effective, whole.effective)),
        "method": "importance sampling along the nested values",
    }


def _column(nest: Nesting, small_name: str) -> int:
    return next(i for i, name in enumerate(nest.large.names) if nest.shared.get(name) == small_name)


def _conditional_spread(theta: FloatArray, extra: list[int]) -> FloatArray:
    """Standard deviation of each extra parameter given all others, from the covariance of the draws."""
    covariance = np.atleast_2d(np.cov(theta, rowvar=False))
    return 1.0 / np.sqrt(np.diag(np.linalg.pinv(covariance, hermitian=True))[extra])


def _window(
    theta: FloatArray, nested: FloatArray, extra: list[int], half: FloatArray, priors: Sequence[Prior]
) -> tuple[FloatArray, BoolArray]:
    """Volume of the window around each nested point, within the prior, and which draws are in theirs."""
    volume, near = np.ones(len(theta)), np.ones(len(theta), dtype=bool)
    for h, i in zip(half, extra, strict=True):
        low, high = np.maximum(nested[:, i] - h, priors[i].low), np.minimum(nested[:, i] + h, priors[i].high)
        volume *= np.maximum(high - low, 0.0)
        near &= np.abs(theta[:, i] - nested[:, i]) < h
    return volume, near & (volume > 0)
