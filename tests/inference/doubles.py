"""Posteriors with known answers, with the interface of LogPosterior."""

from __future__ import annotations

import numpy as np

from fitter.likelihood.priors import Uniform


class Double:
    """A posterior double: a ln density inside a box of uniform priors."""

    marginalised = ()
    derived_names = ()

    def __init__(self, function, box):
        self.function = function
        self.priors = tuple(Uniform(a, b) for a, b in box)
        self.names = tuple(f"x{i}" for i in range(len(box)))
        self.counts = {"evaluations": 0}
        self._low, self._high = np.array(box, dtype=float).T

    def log_prior(self, theta):
        inside = ((theta >= self._low) & (theta <= self._high)).all(axis=1)
        return np.where(inside, -np.log(self._high - self._low).sum(), -np.inf)

    def log_likelihood(self, theta):
        self.counts["evaluations"] += len(theta)
        return self.function(theta)

    def __call__(self, theta):
        value = self.log_prior(theta)
        inside = np.isfinite(value)
        value[inside] += self.log_likelihood(theta[inside])
        return value

    def chi2(self, theta):
        return -2 * self.function(theta)

    def best_marginalised(self, theta):
        return {}

    def draw_marginalised(self, theta, rng):
        return {}

    def derived(self, theta):
        return {}


class WithExtras(Double):
    """A double with a marginalised parameter, x0 + a unit Gaussian, and a derived one, x0²."""

    marginalised = ("offset",)
    derived_names = ("square",)

    def best_marginalised(self, theta):
        return {"offset": theta[:, 0]}

    def draw_marginalised(self, theta, rng):
        return {"offset": theta[:, 0] + rng.standard_normal(len(theta))}

    def derived(self, theta):
        return {"square": theta[:, 0] ** 2}


class Quadratic:
    """ln of a Gaussian of unit variances and one correlation."""

    def __init__(self, d, rho):
        self.precision = np.linalg.inv(np.full((d, d), rho) + (1 - rho) * np.eye(d))

    def __call__(self, theta):
        return -0.5 * np.einsum("wi,ij,wj->w", theta, self.precision, theta)


def gaussian(d=3, rho=0.9, kind=Double):
    return kind(Quadratic(d, rho), [(-20, 20)] * d)


def _banana(t):
    return -0.5 * (t[:, 0] ** 2 + ((t[:, 1] - t[:, 0] ** 2) / 0.5) ** 2)


def banana():
    """x0 ~ N(0, 1), x1 ~ N(x0², 0.5): mean of x1 1, variance 2.25."""
    return Double(_banana, [(-10, 10), (-10, 60)])


def _two_modes(t):
    return np.logaddexp(-0.5 * ((t - 3) ** 2).sum(axis=1), np.log(2) - 2 * ((t + 3) ** 2).sum(axis=1))


def two_modes():
    """Weight 2/3 in a unit circle at (3, 3), 1/3 in one of half the width at (−3, −3)."""
    return Double(_two_modes, [(-20, 20)] * 2)


def _falling(t):
    return -2 * t[:, 0] - t[:, 1]


def hard_edges():
    """Exponentials cut by the prior: x0 at rate 2 on [0, 1], x1 at rate 1 on [0, 0.5]."""
    return Double(_falling, [(0, 1), (0, 0.5)])


def _walled(t):
    return np.where(t.sum(axis=1) < 1, -((t - 0.6) ** 2).sum(axis=1) / 0.18, -np.inf)


def walled():
    """A Gaussian at (0.6, 0.6) of which only x0 + x1 < 1 is possible: the maximum is at (0.5, 0.5), on no prior bound."""
    return Double(_walled, [(-2, 2)] * 2)
