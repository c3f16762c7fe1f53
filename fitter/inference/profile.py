"""Profile-likelihood intervals: how far one parameter can go while all others adapt."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.inference.maximise import maximise

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["ProfileInterval", "profile_intervals", "profile_likelihood"]


_NO_LIMIT = 1e3  # standard deviations from the best value
_CLIMBS = 4  # peaks, each higher than the one before, that the search may come upon


@dataclass(frozen=True)
class ProfileInterval:
    """Where −2 ln L, minimised over all other parameters, is `delta` above its minimum.

    Parameters
    ----------
    name : str
    delta : float
        Δχ²: 1 for 68.27 %, 4 for 95.45 % of a Gaussian likelihood.
    best : float
        Maximum-likelihood value within the prior.
    low, high : float
        The interval; a bound of the prior where it is reached first, infinite where the likelihood sets no limit (a thousand
        standard deviations away Δχ² is still below `delta`).
    low_at_edge, high_at_edge : bool
        Whether it is a bound of the prior.
    """

    name: str
    delta: float
    best: float
    low: float
    high: float
    low_at_edge: bool
    high_at_edge: bool


def profile_likelihood(log_posterior: LogPosterior, optimum: Optimum, name: str, values: ArrayLike) -> FloatArray:
    """−2 ln L, minimised over the other parameters, at fixed values of one.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
        Starting point of the minimisations.
    name : str
        A sampled parameter.
    values : (V,) array
        Inside the prior.

    Returns
    -------
    (V,) ndarray
        +inf where no model is possible.
    """
    profile = _Profile(log_posterior, optimum)
    i = log_posterior.names.index(name)
    at = np.asarray(values, dtype=float)
    return profile.at(np.full(len(at), i), at)[1]


def profile_intervals(
    log_posterior: LogPosterior, optimum: Optimum, deltas: tuple[float, float] = (1.0, 4.0)
) -> tuple[ProfileInterval, ...]:
    """Profile-likelihood intervals of every sampled parameter.

    The priors of the sampled parameters only give the bounds: the likelihood is profiled, not the posterior. What is
    marginalised analytically (systematic shifts, an absolute magnitude with a normal prior) is part of the likelihood and keeps its own.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    deltas : sequence of float

    Returns
    -------
    tuple of ProfileInterval
        For each parameter one of each delta, in order.
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(1):
        profile = _Profile(log_posterior, optimum)
        n = len(log_posterior.names)
        sides = [(i, delta, side) for i in range(n) for delta in deltas for side in (-1, 1)]
        for _ in range(_CLIMBS):
            height = profile.height
            ends, edges = _crossings(profile, sides)
            if profile.height <= height + 1e-6:
                break
            # A higher peak was met on the way, which moves every end.
            profile.climb()
    out = []
    for k in range(0, len(sides), 2):
        i, delta, _ = sides[k]
        low, high = float(ends[k]), float(ends[k + 1])
        best = float(profile.best[i])
        out.append(ProfileInterval(log_posterior.names[i], delta, best, low, high, bool(edges[k]), bool(edges[k + 1])))
    return tuple(out)


class _Profile:
    """Constrained maxima of the likelihood, many at a time, started from the nearest ones already known."""

    def __init__(self, log_posterior: LogPosterior, optimum: Optimum) -> None:
        self.low = np.array([p.low for p in log_posterior.priors], dtype=float)
        self.high = np.array([p.high for p in log_posterior.priors], dtype=float)
        self.function = _InsidePrior(log_posterior, self.low, self.high)
        self.scale = np.sqrt(np.diag(optimum.covariance))
        self.covariance = optimum.covariance
        self.best, self.known = optimum.theta, np.empty((0, len(optimum.theta)))
        self.climb()

    def climb(self) -> None:
        """Climb from the best known point to the top of its peak."""
        best, height = maximise(self.function, self.best[None], self.scale, self.low, self.high)
        self.best, self.height = best[0], float(height[0])
        self.known = np.concatenate([self.known, best])

    def at(self, index: IntArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Maximise with parameter ``index[k]`` held at ``values[k]``: points (V, n) and −2 ln L (V,)."""
        rows = np.arange(len(values))
        starts = self._starts(index, values)
        flat = starts.reshape(-1, starts.shape[-1])
        heights = self.function(flat).reshape(starts.shape[:2])
        start = starts[rows, np.argmax(heights, axis=1)]
        possible = np.isfinite(heights.max(axis=1))
        points, value = start.copy(), np.full(len(values), -np.inf)
        if possible.any():
            free = np.ones(start.shape, dtype=bool)
            free[rows, index] = False
            points[possible], value[possible] = maximise(self.function, start[possible], self.scale, self.low, self.high, free[possible])
            self.known = np.concatenate([self.known, points[possible]])
            if value.max() > self.height:
                self.height, self.best = float(value.max()), points[int(np.argmax(value))]
        return points, -2 * value

    def _starts(self, index: IntArray, values: FloatArray) -> FloatArray:
        """For each value: the known points nearest to it, and the Gaussian ridge from the best one."""
        n = len(self.best)
        starts = []
        for i, value in zip(index, values, strict=True):
            near = self.known[np.argsort(np.abs(self.known[:, i] - value), kind="stable")[:4]]
            near = np.concatenate([near, np.repeat(self.best[None], 5 - len(near), axis=0)])
            ridge = near[:2] + (value - near[:2, i : i + 1]) * self.covariance[i] / self.covariance[i, i]
            guess = np.clip(np.concatenate([near, ridge]), self.low, self.high)
            guess[:, i] = value
            starts.append(guess)
        return np.array(starts).reshape(len(values), -1, n)


class _InsidePrior:
    """ln likelihood, −inf where the prior is zero."""

    def __init__(self, log_posterior: LogPosterior, low: FloatArray, high: FloatArray) -> None:
        self.log_posterior, self.low, self.high = log_posterior, low, high

    def __call__(self, theta: FloatArray) -> FloatArray:
        value = np.full(len(theta), -np.inf)
        inside = np.isfinite(self.log_posterior.log_prior(theta))
        if inside.any():
            value[inside] = self.log_posterior.log_likelihood(theta[inside])
        return value


class _Bracket:
    """The end of every interval of `sides`, (index, Δ, −1 or 1), between a value inside and one outside."""

    def __init__(self, profile: _Profile, sides: list[tuple[int, float, int]]) -> None:
        self.profile = profile
        self.index = np.array([s[0] for s in sides])
        self.delta = np.array([s[1] for s in sides], dtype=float)
        self.sign = np.array([s[2] for s in sides])
        self.bound = np.where(self.sign < 0, profile.low[self.index], profile.high[self.index])
        self.inner = profile.best[self.index].astype(float)
        self.f_inner = -self.delta
        self.outer, self.f_outer = np.full((2, len(sides)), np.nan)
        self.scale = profile.scale[self.index]
        self.step = self.scale * np.sqrt(self.delta)
        self.at_edge = self.inner == self.bound
        self.active = ~self.at_edge
        self.doubted = np.zeros(len(sides), dtype=int)

    def trial(self, k: IntArray, turn: int) -> FloatArray:
        """Next values to try: outwards until something outside is found, then inside the bracket."""
        outwards = self.inner[k] + self.sign[k] * self.step[k]
        between = _inside(self.inner[k], self.f_inner[k], self.outer[k], self.f_outer[k], self.delta[k], turn)
        trial = np.where(np.isfinite(self.outer[k]), between, outwards)
        self.step[k] *= 1.6
        return np.where(self.sign[k] < 0, np.maximum(trial, self.bound[k]), np.minimum(trial, self.bound[k]))

    def take(self, k: IntArray, trial: FloatArray, f: FloatArray) -> None:
        """Narrow the brackets by Δχ² − Δ at the trial values."""
        outside = f > 0
        self.outer[k[outside]], self.f_outer[k[outside]] = trial[outside], f[outside]
        within = k[~outside]
        self.inner[within], self.f_inner[within] = trial[~outside], f[~outside]
        self.at_edge[within] |= self.inner[within] == self.bound[within]
        endless = within[np.abs(self.inner[within] - self.profile.best[self.index[within]]) > _NO_LIMIT * self.scale[within]]
        endless = endless[~np.isfinite(self.bound[endless])]
        self.inner[endless] = self.bound[endless]
        done = np.abs(f) < 1e-6 * self.delta[k]
        self.inner[k[done]] = trial[done]
        self.active[k] = ~(done | self.at_edge[k] | np.isinf(self.inner[k]))
        self._doubt(k)

    def _doubt(self, k: IntArray) -> None:
        """A jump in the profile may be a minimisation that failed: look outwards again, a few times, before believing it."""
        shut = k[self.active[k] & (np.abs(self.outer[k] - self.inner[k]) < 1e-5 * self.scale[k])]
        self.doubted[shut] += 1
        again = shut[self.doubted[shut] <= 5]
        self.outer[again] = self.f_outer[again] = np.nan
        self.step[again] = 0.1 * 2.0 ** self.doubted[again] * self.scale[again]
        self.active[shut[self.doubted[shut] > 5]] = False


def _crossings(profile: _Profile, sides: list[tuple[int, float, int]], turns: int = 200) -> tuple[FloatArray, BoolArray]:
    """Ends of the intervals, and whether each is a bound of the prior."""
    bracket = _Bracket(profile, sides)
    for turn in range(turns):
        k = np.flatnonzero(bracket.active)
        if k.size == 0:
            break
        trial = bracket.trial(k, turn)
        f = profile.at(bracket.index[k], trial)[1] + 2 * profile.height - bracket.delta[k]
        bracket.take(k, trial, f)
    return bracket.inner, bracket.at_edge


def _inside(a: FloatArray, fa: FloatArray, b: FloatArray, fb: FloatArray, delta: FloatArray, turn: int) -> FloatArray:
    """Next trial in the bracket (a, b): a secant in √Δχ², in which profiles are nearly straight; every third time the middle."""
    root_a, root_b = np.sqrt(np.maximum(fa + delta, 0)), np.sqrt(np.maximum(fb + delta, 0))
    share = np.full(len(a), 0.5)
    straight = np.isfinite(fb) & (root_b > root_a) & (turn % 3 != 2)
    share[straight] = ((np.sqrt(delta) - root_a) / (root_b - root_a))[straight]
    return a + np.clip(share, 0.001, 0.999) * (b - a)
