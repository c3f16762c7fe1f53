"""A posterior with H0 integrated out at each point of the other parameters, for a quadrature with one dimension less.

H0 enters distances only through the zero point, o = 5 log10 H0, and ln L is a parabola in that: three evaluations tell it, and the integral
over the prior of H0 is one smooth integral under a Gaussian.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.inference.quadrature import GridPosterior, integrate
from fitter.inference.resampling import systematic
from fitter.inference.target import Peak, Place
from fitter.likelihood.priors import Normal, TruncatedNormal

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior
    from fitter.likelihood.priors import Prior

__all__ = ["GridWithH0", "WithoutH0", "integrate_without_h0"]

_STEP = 0.05  # mag, between the evaluations that tell the parabola
_REACH = 9.0  # standard deviations from the peak that its integral extends to
_NODE, _WEIGHT = legendre.leggauss(40)
_POINTS, _SUPPORT, _BLOCK = 20_000, 801, 1000


class WithoutH0:
    """The density of the other parameters, ∫ p(θ, H0) dH0.

    Parameters
    ----------
    log_posterior : LogPosterior
    h0 : float
        A value near the optimum, in km/s/Mpc.
    """

    def __init__(self, log_posterior: LogPosterior, h0: float) -> None:
        self.of, self.column, self.zero = log_posterior, log_posterior.names.index("H0"), 5 * np.log10(h0)
        self.names = tuple(n for n in log_posterior.names if n != "H0")
        self.priors: tuple[Prior, ...] = tuple(np.delete(np.array(log_posterior.priors, dtype=object), self.column))
        self.h0_prior = log_posterior.priors[self.column]

    @staticmethod
    def applies(log_posterior: LogPosterior) -> bool:
        """Whether H0 is sampled beside others and is nothing but a zero point; with radiation it sets Ω_r too."""
        if "H0" not in log_posterior.names or len(log_posterior.names) < 2:
            return False
        return not log_posterior.radiation and "H0" not in [p.name for p in log_posterior.model.parameters]

    @property
    def ndim(self) -> int:
        """Number of parameters without H0."""
        return len(self.names)

    def __call__(self, theta: FloatArray) -> FloatArray:
        """ln density, (W,); −inf outside."""
        theta = np.atleast_2d(theta)
        value = sum(prior.log_density(theta[:, i]) for i, prior in enumerate(self.priors)) + np.zeros(len(theta))
        inside = value > -np.inf
        if inside.any():
            top, centre, width = self.parabola(theta[inside])
            value[inside] += top + self.log_mass(centre, width)
        return value

    def parabola(self, theta: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """ln L at its highest over H0, and where and how wide it is in o, in mag; (W,) each. −inf where there is no model."""
        low, middle, high = (self._log_likelihood(theta, self.zero + shift) for shift in (-_STEP, 0.0, _STEP))
        with np.errstate(invalid="ignore"):
            curvature = (2 * middle - low - high) / _STEP**2
            shift = 0.5 * (high - low) / (_STEP * curvature)
            top = middle + 0.5 * curvature * shift**2
        good = np.isfinite(top) & (curvature > 0)
        width = 1 / np.sqrt(np.where(good, curvature, 1.0))
        return np.where(good, top, -np.inf), self.zero + np.where(good, shift, 0.0), width

    def _log_likelihood(self, theta: FloatArray, o: float) -> FloatArray:
        return self.of.log_likelihood(np.insert(theta, self.column, 10 ** (0.2 * o), axis=1))

    def log_mass(self, centre: FloatArray, width: FloatArray) -> FloatArray:
        """ln ∫ π(H0) exp(−(o − centre)² / 2 width²) dH0, (W,)."""
        low, high = self.where_it_counts(centre, width)
        o = low[:, None] + 0.5 * (high - low)[:, None] * (1 + _NODE)
        height = self.log_height(o, centre[:, None], width[:, None])
        top = height.max(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            mass = np.exp(height - top[:, None]) @ _WEIGHT * 0.5 * (high - low)
            return np.where(high > low, np.log(mass) + top, -np.inf)

    def where_it_counts(self, centre: FloatArray, width: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Ends in o, beyond which the integrand is below e^−40 of its height: around the peak, or at the edge of the prior next to it."""
        prior = self.h0_prior
        if isinstance(prior, Normal | TruncatedNormal) and prior.mean > 0:
            weights = width**-2, (0.2 * np.log(10) * prior.mean / prior.sd) ** 2
            centre = (weights[0] * centre + weights[1] * 5 * np.log10(prior.mean)) / sum(weights)
            width = sum(weights) ** -0.5
        with np.errstate(divide="ignore"):
            ends = 5 * np.log10([max(prior.low, 0.0), prior.high])
        off = centre - np.clip(centre, *ends)
        reach = np.sqrt(off**2 + (_REACH * width) ** 2)
        return np.clip(centre - reach, *ends), np.clip(centre + reach, *ends)

    def log_height(self, o: FloatArray, centre: FloatArray, width: FloatArray) -> FloatArray:
        """ln of the integrand over o."""
        h0 = np.clip(10 ** (0.2 * o), self.h0_prior.low, self.h0_prior.high)  # rounding must not leave the prior
        return self.h0_prior.log_density(h0) + np.log(0.2 * np.log(10) * h0) - 0.5 * ((o - centre) / width) ** 2


@dataclass(frozen=True)
class GridWithH0:
    """A posterior on the cells of the other parameters, and H0 given those.

    Attributes
    ----------
    names : tuple of str
    grid : GridPosterior
        Of the other parameters.
    """

    names: tuple[str, ...]
    grid: GridPosterior
    _h0: FloatArray  # (K,), rising
    _below: FloatArray  # (K,), probability
    method = "adaptive Gauss–Legendre quadrature, H0 integrated out exactly"

    @property
    def log_evidence(self) -> float:
        """ln Z."""
        return self.grid.log_evidence

    @property
    def log_evidence_error(self) -> float:
        """Its error, as the grid estimates it of itself."""
        return self.grid.log_evidence_error

    @property
    def evaluations(self) -> int:
        """Of the likelihood."""
        return 3 * self.grid.evaluations

    @property
    def cdf_error(self) -> float:
        """Bound on the error of `cdf`."""
        return self.grid.cdf_error

    def cdf(self, name: str, x: ArrayLike) -> FloatArray:
        """Marginal cumulative distribution at x, (M,)."""
        return np.interp(np.atleast_1d(x), self._h0, self._below) if name == "H0" else self.grid.cdf(name, x)


def integrate_without_h0(log_posterior: LogPosterior, optimum: Place, known: FloatArray | None = None) -> GridWithH0 | None:
    """Integrate a posterior whose H0 is a zero point; arguments as for `integrate`.

    Returns
    -------
    GridWithH0 or None
        None where even the other parameters are too many.
    """
    column = log_posterior.names.index("H0")
    without = WithoutH0(log_posterior, float(optimum.theta[column]))
    place = Peak(np.delete(optimum.theta, column), np.delete(np.delete(optimum.covariance, column, 0), column, 1))
    grid = integrate(without, place, known=None if known is None else np.delete(known, column, axis=1))
    if grid is None:
        return None
    return GridWithH0(log_posterior.names, grid, *_h0_below(without, grid))


def _h0_below(without: WithoutH0, grid: GridPosterior) -> tuple[FloatArray, FloatArray]:
    """Cumulative distribution of H0: its conditional ones, averaged over the other parameters."""
    theta, share = grid.points()
    if len(share) > _POINTS:
        # Systematic resampling: of so many nodes in order, its error is far below that of any chain.
        theta = theta[systematic(share, _POINTS)]
        share = np.full(_POINTS, 1 / _POINTS)
    top, centre, width = without.parabola(theta)
    kept = (top > -np.inf) & (share > 0)
    centre, width = centre[kept], width[kept]
    mass = without.log_mass(centre, width) - np.log(share[kept])
    low, high = without.where_it_counts(centre, width)
    o = np.linspace(low.min(), high.max(), _SUPPORT)
    density = np.zeros(_SUPPORT)
    for start in range(0, len(centre), _BLOCK):
        i = slice(start, start + _BLOCK)
        density += np.exp(without.log_height(o, centre[i, None], width[i, None]) - mass[i, None]).sum(axis=0)
    below = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]))])
    return 10 ** (0.2 * o), below / below[-1]
