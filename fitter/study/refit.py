"""One fit among many: its marginals in a second or less, without a chain.

By quadrature up to three sampled parameters, beyond by adaptive importance sampling [1]_: a Student-t mixture is fitted to weighted draws
from the one before it, a few times over.

References
----------
.. [1] Cappé, O. et al. 2008, Statistics and Computing 18, 447 (population Monte Carlo with mixtures).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.inference.mixture import StudentMixture, fit_mixture
from fitter.inference.optimum import Optimum, find_optimum
from fitter.inference.quadrature import GridPosterior, integrate
from fitter.inference.resampling import systematic
from fitter.inference.seeds import child_seed

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["LEVELS", "Refit", "WeightedDraws", "refit", "resample"]

LEVELS = {"low95": 0.025, "low68": 0.1587, "median": 0.5, "high68": 0.8413, "high95": 0.975}
_ON_GRID = 3  # sampled parameters up to which a grid is the faster way
_TOLERANCE = 0.01  # relative error of the whole mass
_USABLE = 0.03
_ROUNDS, _DRAWS, _LAST, _COMPONENTS = 6, 12_000, 60_000, 8
_ENOUGH, _REPEATS = 8_000, 4  # effective draws wanted, and the most sets to get them
_BATCH = 16_384


@dataclass(frozen=True)
class WeightedDraws:
    """Independent draws with weights; answers what `GridPosterior` answers.

    Attributes
    ----------
    names : tuple of str
    theta : (M, d) array
    weight : (M,) array
        Sum 1.
    """

    names: tuple[str, ...]
    theta: FloatArray
    weight: FloatArray
    method = "adaptive importance sampling"

    @property
    def effective(self) -> float:
        """Number of equally weighted draws that would be as good (Kish)."""
        return float(1.0 / (self.weight @ self.weight))

    def points(self) -> tuple[FloatArray, FloatArray]:
        """The draws and their weights."""
        return self.theta, self.weight

    def cdf(self, name: str, x: ArrayLike) -> FloatArray:
        """Marginal cumulative distribution at x, (M,)."""
        value, below = self._sorted(name)
        return np.interp(np.atleast_1d(x), value, below, left=0.0, right=1.0)

    def quantile(self, name: str, p: ArrayLike) -> FloatArray:
        """Marginal quantiles, (M,)."""
        value, below = self._sorted(name)
        return np.interp(np.atleast_1d(p), below, value)

    def mean(self, name: str) -> float:
        """Marginal mean."""
        return float(self.weight @ self.theta[:, self.names.index(name)])

    def sd(self, name: str) -> float:
        """Marginal standard deviation."""
        return float(np.sqrt(self.weight @ (self.theta[:, self.names.index(name)] - self.mean(name)) ** 2))

    def _sorted(self, name: str) -> tuple[FloatArray, FloatArray]:
        value = self.theta[:, self.names.index(name)]
        order = np.argsort(value, kind="stable")
        weight = self.weight[order]
        return value[order], np.cumsum(weight) - 0.5 * weight


@dataclass(frozen=True)
class Refit:
    """A fit without a chain.

    Attributes
    ----------
    optimum : Optimum
    marginals : GridPosterior or WeightedDraws
    error : float
        Relative error of the marginals, as the method estimates it of itself.
    """

    optimum: Optimum
    marginals: GridPosterior | WeightedDraws
    error: float

    def facts(self, hidden: dict[str, float] | None = None) -> dict:
        """Return the fit in numbers that JSON can hold; `hidden` offsets are added to every location.

        Returns
        -------
        dict
            ``parameters`` {NAME: {mean, sd, median, low68, high68, low95, high95, best}}, ``chi2``, ``method``, ``error``.
        """
        hidden, m, parameters = hidden or {}, self.marginals, {}
        for name in m.names:
            shift = hidden.get(name, 0.0)
            located = {"mean": m.mean(name), "best": self.optimum.values[name]}
            located |= dict(zip(LEVELS, m.quantile(name, list(LEVELS.values())).tolist(), strict=True))
            parameters[name] = {k: v + shift for k, v in located.items()} | {"sd": m.sd(name)}
        return {"parameters": parameters, "chi2": float(self.optimum.chi2), "method": m.method, "error": self.error}


def refit(log_posterior: LogPosterior, seed: np.random.SeedSequence) -> Refit:
    """Fit without a chain.

    Parameters
    ----------
    log_posterior : LogPosterior
    seed : SeedSequence
    """
    optimum = find_optimum(log_posterior, child_seed(seed, 0))
    if log_posterior.ndim <= _ON_GRID:
        grid = integrate(log_posterior, optimum, tolerance=_TOLERANCE)
        if grid is not None and grid.log_evidence_error <= _USABLE:
            return Refit(optimum, grid, grid.log_evidence_error)
    draws = _adaptive(log_posterior, optimum, np.random.default_rng(child_seed(seed, 1)))
    return Refit(optimum, draws, float(1.0 / np.sqrt(draws.effective)))


def resample(marginals: GridPosterior | WeightedDraws, size: int, seed: np.random.SeedSequence) -> FloatArray:
    """Return about equally likely points of a posterior, (size, d), by systematic resampling of its nodes or draws."""
    theta, weight = marginals.points()
    return theta[systematic(weight, size, np.random.default_rng(seed).random())]


def _adaptive(log_posterior: LogPosterior, optimum: Optimum, rng: np.random.Generator) -> WeightedDraws:
    """Draw, fit a mixture to what the weights leave, draw again; the last and largest set again where too few of it count."""
    factor = np.linalg.cholesky(1.5 * optimum.covariance)
    mixture = StudentMixture.of_factors(np.ones(1), optimum.theta[None], factor[None], 4.0)

    def draw(size: int) -> WeightedDraws:
        theta = mixture.draw(rng, size)
        return WeightedDraws(log_posterior.names, theta, _weights(log_posterior, theta, mixture))

    def refitted(draws: WeightedDraws, components: int) -> StudentMixture:
        chosen = draws.theta[systematic(draws.weight, _DRAWS, rng.random())]
        return fit_mixture(chosen, components, iterations=10)

    for turn in range(_ROUNDS):
        mixture = refitted(draw(_DRAWS), 1 if turn == 0 else _COMPONENTS)
    best = draws = draw(_LAST)
    for _ in range(_REPEATS - 1):
        if best.effective > _ENOUGH:
            break
        mixture = refitted(draws, _COMPONENTS)
        draws = draw(_LAST)
        best = draws if draws.effective > best.effective else best
    return best


def _weights(log_posterior: LogPosterior, theta: FloatArray, mixture: StudentMixture) -> FloatArray:
    log_weight = np.concatenate([log_posterior(theta[i : i + _BATCH]) for i in range(0, len(theta), _BATCH)])
    log_weight = log_weight - mixture.log_density(theta)
    weight = np.exp(log_weight - log_weight.max())
    return weight / weight.sum()
