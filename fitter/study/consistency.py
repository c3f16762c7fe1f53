"""Do two data sets agree on one model? The difference of their parameters, and the evidence ratio.

References
----------
.. [1] Marshall, P., Rajguru, N. & Slosar, A. 2006, PRD 73, 067302: the evidence ratio R.
.. [2] Raveri, M. & Doux, C. 2021, PRD 104, 043504: the parameter difference from samples, without assuming Gaussians.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.target import Peak
from fitter.study.entry import Entry
from fitter.study.likelihood_ratio import sigma_of

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

__all__ = ["consistency", "overlap"]

_PAIRS = 40_000
_LOOKED_AT = 8_000
_CONSISTENT, _TENSION = 2.0, 3.0  # sigma
# What belongs to a data set and not to the universe.
_OWN = ("intrinsic_scatter", "covariance_scale", "absolute_magnitude")


def overlap(first: Entry, second: Entry) -> int | None:
    """Number of rows that two fits have in common; None where that is not known."""
    a, b = (e.log_posterior.sample if e.log_posterior is not None else None for e in (first, second))
    if a is None or b is None:
        return None
    return len(_rows(a) & _rows(b))


def _rows(sample: Sample) -> set[tuple[float, float]]:
    """What tells a supernova of one table from any other."""
    return set(zip(sample.redshift.tolist(), sample.data.tolist(), strict=True))


def consistency(first: Entry, second: Entry, rng: np.random.Generator) -> dict[str, Any] | None:
    """Compare what two independent data sets say of the parameters that both fits sample.

    Parameters
    ----------
    first, second : Entry
        Of the same model.
    rng : numpy.random.Generator

    Returns
    -------
    dict or None
        ``parameters``, ``p_value`` and ``sigma`` of the difference, ``sigma_gaussian``; ``log_r`` with its error, or None;
        ``sentence``. None where they share no parameter.
    """
    shared = [n for n in first.posterior.names if n in second.posterior.names and n not in _OWN]
    if not shared:
        return None
    difference = _differences(first, second, shared, rng)
    p_value, sigma, limit = _shift_significance(difference, rng)
    mean, covariance = difference.mean(axis=0), np.atleast_2d(np.cov(difference, rowvar=False))
    gaussian = _chi2_sigma(float(mean @ np.linalg.solve(covariance, mean)), len(shared))
    ratio = _evidence_ratio(first, second, shared)
    facts = {
        "between": [first.name, second.name],
        "parameters": shared,
        "p_value": p_value,
        "sigma": sigma,
        "sigma_is_limit": limit,
        "sigma_gaussian": gaussian,
        "log_r": ratio,
    }
    return facts | {"sentence": _sentence(facts)}


def _differences(first: Entry, second: Entry, shared: list[str], rng: np.random.Generator) -> FloatArray:
    """(M, d) differences of draws paired at random."""
    columns = [e.samples[:, [e.posterior.names.index(n) for n in shared]] for e in (first, second)]
    a, b = (c[rng.integers(len(c), size=_PAIRS)] for c in columns)
    return a - b


def _shift_significance(difference: FloatArray, rng: np.random.Generator) -> tuple[float, float, bool]:
    """p-value and σ of a difference of zero, and whether the draws only bound them."""
    m, d = difference.shape
    if d == 1:
        # One dimension needs no density: the mass beyond zero, both sides alike.
        beyond = min((difference > 0).mean(), (difference < 0).mean())
        p = min(2 * beyond, 1.0)
    else:
        from scipy.stats import gaussian_kde

        kernel = gaussian_kde(difference[rng.choice(m, size=min(m, _LOOKED_AT), replace=False)].T)
        at = difference[rng.choice(m, size=min(m, _LOOKED_AT), replace=False)].T
        p, m = float((kernel(at) <= kernel(np.zeros((d, 1)))[0]).mean()), at.shape[1]
    limit = p < 10 / m
    p = max(p, 10 / m)
    return float(p), sigma_of(math.log(p)), bool(limit)


def _chi2_sigma(value: float, dof: int) -> float:
    from scipy.stats import chi2

    return sigma_of(float(chi2.logsf(value, dof)))


class _Joint:
    """Both likelihoods at the same parameters, under the first fit's priors."""

    def __init__(self, first: LogPosterior, second: LogPosterior) -> None:
        self.names, self.priors, self._fits = first.names, first.priors, (first, second)
        self.order_in_second = [second.names.index(n) for n in self.names]
        self._order_for_second = [self.names.index(n) for n in second.names]

    @property
    def ndim(self) -> int:
        return len(self.names)

    def __call__(self, theta: FloatArray) -> FloatArray:
        theta = np.atleast_2d(np.asarray(theta, float))
        first, second = self._fits
        value = first(theta)
        inside = value > -np.inf
        value[inside] += second.log_likelihood(theta[inside][:, self._order_for_second])
        return value


def _evidence_ratio(first: Entry, second: Entry, shared: list[str]) -> list[float] | None:
    """ln R = ln Z_both − ln Z_first − ln Z_second with its error, where every sampled parameter and prior is shared."""
    from fitter.inference.quadrature import MAX_DIMENSIONS, integrate

    a, b = first.log_posterior, second.log_posterior
    if a is None or b is None or len(shared) > MAX_DIMENSIONS or set(a.names) != set(shared) or set(b.names) != set(shared):
        return None
    alike = all(a.priors[a.names.index(n)] == b.priors[b.names.index(n)] for n in shared) and a.fixed == b.fixed
    if not alike or first.log_evidence is None or second.log_evidence is None:
        return None
    joint = _Joint(a, b)
    grid = integrate(joint, _joint_start(first, second, joint))
    if grid is None:
        return None
    error = math.sqrt(grid.log_evidence_error**2 + first.log_evidence[1] ** 2 + second.log_evidence[1] ** 2)
    return [grid.log_evidence - first.log_evidence[0] - second.log_evidence[0], error]


def _joint_start(first: Entry, second: Entry, joint: _Joint) -> Peak:
    """The best of both chains' draws under both likelihoods, and the covariance of the product of two Gaussians."""
    samples = (first.samples, second.samples[:, joint.order_in_second])
    draws = np.concatenate([s[::37] for s in samples])
    one, other = (np.linalg.inv(np.atleast_2d(np.cov(s, rowvar=False))) for s in samples)
    return Peak(draws[joint(draws).argmax()], np.asarray(np.linalg.inv(one + other), np.float64))


def _sentence(facts: dict[str, Any]) -> str:
    from fitter.parameters import parameter

    first, second = facts["between"]
    symbols = ", ".join(parameter(n).plain for n in facts["parameters"])
    sigma = facts["sigma"]
    size = f"more than {sigma:.1f}σ" if facts["sigma_is_limit"] else f"{sigma:.1f}σ (p = {facts['p_value']:.2g})"
    word = "agree" if sigma < _CONSISTENT else "are in mild tension" if sigma < _TENSION else "are in tension"
    text = f"{first} and {second} {word} on {symbols}: they differ by {size}"
    if facts["log_r"] is None:
        return f"{text}. No evidence ratio: it needs the same sampled parameters and priors, four at most."
    log_r, error = facts["log_r"]
    size = f" ± {error:.1g}" if error >= 0.005 else ""
    said = "one set of parameters explains both" if log_r > 0 else "each wants parameters of its own"
    return (
        f"{text}; the evidence ratio is ln R = {log_r:.2f}{size}, {said}. R grows with the width of the priors (twice the width of "
        "one adds up to ln 2 = 0.69 to ln R), so that agreement by R alone says little under wide priors."
    )
