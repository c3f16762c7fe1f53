"""The Savage–Dickey ratio on Gaussian toys whose evidences are known in closed form."""

from dataclasses import dataclass, field
from types import SimpleNamespace

import numpy as np
import pytest

from fitter.inference.quadrature import integrate
from fitter.likelihood.priors import Normal, Prior, Uniform
from fitter.study.density_ratio import density_ratio, ratio_along
from fitter.study.nested import Nesting

MEAN, SD, CORRELATION = np.array([0.3, -1.2]), np.array([0.05, 0.2]), -0.8
COVARIANCE = np.array([[SD[0] ** 2, CORRELATION * SD.prod()], [CORRELATION * SD.prod(), SD[1] ** 2]])


@dataclass(frozen=True)
class Toy:
    """A Gaussian likelihood of (a, b), or of a alone where b is held at a value or at a function of a."""

    names: tuple[str, ...]
    priors: tuple[Prior, ...]
    b_of_a: object = None
    fixed: dict = field(default_factory=dict)
    radiation = False

    @property
    def ndim(self):
        return len(self.names)

    def log_likelihood(self, theta):
        b = theta[:, 1] if self.b_of_a is None else np.broadcast_to(self.b_of_a(theta[:, 0]), len(theta))
        off = np.stack([theta[:, 0], b], axis=1) - MEAN
        return -0.5 * np.einsum("wi,ij,wj->w", off, np.linalg.inv(COVARIANCE), off)

    def log_prior(self, theta):
        return sum(p.log_density(theta[:, i]) for i, p in enumerate(self.priors))

    def __call__(self, theta):
        theta = np.atleast_2d(theta)
        return self.log_prior(theta) + self.log_likelihood(theta)


def chain_of(toy, n=160_000, seed=3):
    """Exact draws: Gaussian, those outside the prior drawn again."""
    rng = np.random.default_rng(seed)
    prior_precision = np.diag([1 / p.sd**2 if isinstance(p, Normal) else 0.0 for p in toy.priors])
    prior_mean = np.array([p.mean if isinstance(p, Normal) else 0.0 for p in toy.priors])
    precision = np.linalg.inv(COVARIANCE) + prior_precision
    mean = np.linalg.solve(precision, np.linalg.inv(COVARIANCE) @ MEAN + prior_precision @ prior_mean)
    draws = rng.multivariate_normal(mean, np.linalg.inv(precision), size=2 * n)
    draws = draws[np.isfinite(toy.log_prior(draws))][:n]
    chain = draws.reshape(4, n // (4 * 64), 64, 2)
    return SimpleNamespace(chain=chain, log_posterior=toy(draws).reshape(chain.shape[:-1]))


def evidence(toy):
    """ln Z by quadrature on a fine grid of its own."""
    axes = [np.linspace(max(p.low, m - 9 * s), min(p.high, m + 9 * s), 2001) for p, m, s in zip(toy.priors, MEAN, SD, strict=False)]
    mesh = np.stack([g.ravel() for g in np.meshgrid(*axes, indexing="ij")], axis=1)
    return np.log(np.exp(toy(mesh)).sum() * np.prod([a[1] - a[0] for a in axes]))


FLAT = (Uniform(0, 1), Uniform(-3, 1))
CASES = {
    "near the peak": (FLAT, (Uniform(0, 1),), -1.0),
    "in the tail": (FLAT, (Uniform(0, 1),), -0.75),
    "another prior on what is shared": (FLAT, (Normal(0.32, 0.04),), -1.0),
    "an informative prior": ((Uniform(0, 1), Normal(-1, 0.15)), (Uniform(0, 1),), -1.0),
    "the edge of the prior": ((Uniform(0, 1), Uniform(-3, -1)), (Uniform(0, 1),), -1.0),
}


@pytest.mark.parametrize("case", CASES)
def test_ratio_is_that_of_the_evidences(case):
    priors, small_priors, at = CASES[case]
    large = Toy(("a", "b"), priors)
    small = Toy(("a",), small_priors, lambda a: at)
    nest = Nesting(("b",), {"a": "a", "b": float(at)}, small, large)
    found = density_ratio(chain_of(large), nest)
    expected = evidence(small) - evidence(large)
    assert found["error"] < 0.06
    assert found["log_ratio"] == pytest.approx(expected, abs=4 * found["error"])


def test_nested_on_a_curve():
    # As flat space in the plane of the densities: b = -1 - a, a function of what is shared.
    large = Toy(("a", "b"), FLAT)
    small = Toy(("a",), (Uniform(0, 1),), lambda a: -1.0 - a)
    nest = Nesting(("b",), {"a": "a", "b": lambda given: -1.0 - given["a"]}, small, large)
    found = density_ratio(chain_of(large), nest)
    assert found["log_ratio"] == pytest.approx(evidence(small) - evidence(large), abs=4 * found["error"])


def test_agrees_with_the_quadrature_of_the_package():
    large, small = Toy(("a", "b"), FLAT), Toy(("a",), (Uniform(0, 1),), lambda a: -1.0)
    start = {2: (MEAN, COVARIANCE), 1: (MEAN[:1], COVARIANCE[:1, :1])}
    z = {t.ndim: integrate(t, SimpleNamespace(theta=start[t.ndim][0], covariance=start[t.ndim][1])) for t in (large, small)}
    found = density_ratio(chain_of(large), Nesting(("b",), {"a": "a", "b": -1.0}, small, large))
    allowed = 4 * np.hypot(found["error"], z[1].log_evidence_error + z[2].log_evidence_error)
    assert found["log_ratio"] == pytest.approx(z[1].log_evidence - z[2].log_evidence, abs=allowed)


def test_too_far_out_there_is_no_ratio():
    large, small = Toy(("a", "b"), FLAT), Toy(("a",), (Uniform(0, 1),), lambda a: 0.9)
    assert density_ratio(chain_of(large), Nesting(("b",), {"a": "a", "b": 0.9}, small, large)) is None


def test_far_out_importance_sampling_takes_over():
    # Nine standard deviations from the posterior, where no chain comes.
    at, wide = 0.6, Uniform(-1, 1)
    large, small = Toy(("a", "b"), (wide, FLAT[1])), Toy(("a",), (wide,), lambda a: at)
    conditional = MEAN[0] + CORRELATION * SD[0] / SD[1] * (at - MEAN[1]), SD[0] * np.sqrt(1 - CORRELATION**2)
    along = SimpleNamespace(chain=np.random.default_rng(1).normal(*conditional, (4, 20, 100, 1)))
    nest = Nesting(("b",), {"a": "a", "b": at}, small, large)
    assert density_ratio(chain_of(large), nest) is None
    found = ratio_along(along, chain_of(large), nest, np.random.SeedSequence(2))
    # The marginal of b is a Gaussian; over its prior density, 1/4.
    expected = -0.5 * 9**2 - 0.5 * np.log(2 * np.pi) - np.log(SD[1]) + np.log(4)
    assert found["log_ratio"] == pytest.approx(expected, abs=4 * found["error"])
    assert found["error"] < 0.02
