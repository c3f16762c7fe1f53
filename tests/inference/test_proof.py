"""Quadrature and importance sampling against posteriors known in closed form; broken chains are caught."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import stats

from fitter.inference.importance import importance
from fitter.inference.optimum import Optimum
from fitter.inference.posterior import Posterior
from fitter.inference.proof import cross_check, prove
from fitter.inference.quadrature import integrate
from fitter.likelihood.priors import Normal, Uniform


@dataclass
class Toy:
    """A normalised ln likelihood times a prior, under the names a LogPosterior has."""

    priors: tuple
    log_likelihood: object

    @property
    def names(self):
        return tuple(f"p{i}" for i in range(self.ndim))

    @property
    def ndim(self):
        return len(self.priors)

    def __call__(self, theta):
        theta = np.atleast_2d(theta)
        prior = sum(p.log_density(theta[:, i]) for i, p in enumerate(self.priors))
        with np.errstate(invalid="ignore"):
            return np.where(prior > -np.inf, prior + self.log_likelihood(theta), -np.inf)


def gaussian(d, correlation=0.8, centre=0.3):
    covariance = 0.05**2 * ((1 - correlation) * np.eye(d) + correlation)
    target = stats.multivariate_normal(np.full(d, centre), covariance)
    return Toy((Uniform(0, 1),) * d, lambda x: np.atleast_1d(target.logpdf(x))), target, covariance


def optimum(toy, theta, covariance):
    theta = np.asarray(theta, float)
    return Optimum(theta, float(toy(theta)[0]), 0.0, np.asarray(covariance), {})


def chain_of(draws, names):
    """A Posterior of independent draws, 4 replicas."""
    shaped = draws[: len(draws) // 400 * 400].reshape(4, -1, 100, draws.shape[-1])
    return Posterior(tuple(names), shaped, np.zeros(shaped.shape[:-1]), {}, {n: "sampled" for n in names}, {})


@pytest.mark.parametrize("d", [1, 2, 3, 4])
def test_a_gaussian_inside_the_prior(d):
    toy, target, covariance = gaussian(d)
    grid = integrate(toy, optimum(toy, target.mean if d > 1 else [0.3], covariance))
    # The prior holds all but 2e-9 of each tail; its density is 1.
    tolerance = max(grid.log_evidence_error, 1e-7)
    assert grid.log_evidence == pytest.approx(0.0, abs=tolerance)
    assert grid.mean("p0") == pytest.approx(0.3, abs=0.05 * tolerance)
    assert grid.sd("p0") == pytest.approx(0.05, rel=2 * tolerance)
    x = np.linspace(0.1, 0.5, 41)
    np.testing.assert_allclose(grid.cdf("p0", x), stats.norm.cdf(x, 0.3, 0.05), atol=max(grid.cdf_error, 1e-5))
    np.testing.assert_allclose(grid.quantile("p0", [0.16, 0.5, 0.84]), stats.norm.ppf([0.16, 0.5, 0.84], 0.3, 0.05), atol=0.05 * 1e-2)


def test_a_gaussian_cut_by_a_prior_edge():
    toy, _, covariance = gaussian(2, correlation=0.0, centre=0.0)
    grid = integrate(toy, optimum(toy, [0.0, 0.0], covariance))
    assert grid.log_evidence == pytest.approx(np.log(0.25), abs=max(grid.log_evidence_error, 1e-7))
    assert grid.mean("p1") == pytest.approx(0.05 * np.sqrt(2 / np.pi), rel=1e-4)


def test_a_prior_without_ends():
    toy = Toy((Normal(0, 2),), lambda x: stats.norm.logpdf(x[:, 0], 1.0, 0.5))
    grid = integrate(toy, optimum(toy, [1.0 * 4 / 4.25], [[0.25]]))
    assert grid.log_evidence == pytest.approx(stats.norm.logpdf(1.0, 0, np.sqrt(4.25)), abs=1e-6)


def test_a_banana_has_its_evidence_and_its_skew():
    """y | x ~ N(x², 0.02²), x ~ N(0, 0.3²): evidence and marginals in closed form."""

    def log_likelihood(t):
        return stats.norm.logpdf(t[:, 0], 0, 0.3) + stats.norm.logpdf(t[:, 1], t[:, 0] ** 2, 0.02)

    toy = Toy((Uniform(-2, 2), Uniform(-1, 4)), log_likelihood)
    grid = integrate(toy, optimum(toy, [0.0, 0.0], np.diag([0.09, 4e-4])))
    assert grid.converged
    assert grid.log_evidence == pytest.approx(-np.log(20), abs=grid.log_evidence_error)
    assert grid.mean("p1") == pytest.approx(0.09, rel=5 * grid.log_evidence_error)
    assert grid.sd("p1") == pytest.approx(np.sqrt(2 * 0.09**2 + 0.02**2), rel=5 * grid.log_evidence_error)


def test_importance_sampling_gives_the_same_evidence_from_the_chain():
    toy, target, _ = gaussian(3)
    rng = np.random.default_rng(0)
    posterior = chain_of(target.rvs(20000, random_state=rng), toy.names)
    weighted = importance(toy, posterior, seed=np.random.SeedSequence(1))
    assert weighted.log_evidence == pytest.approx(0.0, abs=4.5 * weighted.log_evidence_error)
    assert weighted.effective > 0.5 * weighted.evaluations
    x = np.linspace(0.15, 0.45, 21)
    np.testing.assert_allclose(weighted.cdf("p1", x), stats.norm.cdf(x, 0.3, 0.05), atol=weighted.cdf_error)


def test_importance_sampling_does_not_inherit_a_wrong_chain():
    toy, target, covariance = gaussian(2)
    wrong = stats.multivariate_normal(target.mean + 0.02, 1.5 * covariance)
    posterior = chain_of(wrong.rvs(20000, random_state=np.random.default_rng(3)), toy.names)
    weighted = importance(toy, posterior, seed=np.random.SeedSequence(1))
    assert weighted.log_evidence == pytest.approx(0.0, abs=4.5 * weighted.log_evidence_error)
    assert not cross_check(weighted, posterior, {n: 20000.0 for n in toy.names})["agrees"]


def test_a_good_chain_agrees_and_both_evidences_do():
    toy, target, covariance = gaussian(2)
    posterior = chain_of(target.rvs(40000, random_state=np.random.default_rng(4)), toy.names)
    proof = prove(toy, posterior, optimum(toy, target.mean, covariance), {n: 40000.0 for n in toy.names}, seed=np.random.SeedSequence(2))
    assert proof.cross_check["agrees"] is True
    assert 0 < proof.cross_check["max_cdf_difference"] < proof.cross_check["tolerance"] < 0.02
    assert proof.evidence["methods_agree"] is True


@pytest.mark.parametrize("fault", ["shifted", "too wide", "lost a tail"])
def test_a_broken_chain_is_caught(fault):
    toy, target, covariance = gaussian(2)
    draws = target.rvs(40000, random_state=np.random.default_rng(5))
    if fault == "shifted":
        draws = draws + [0.005, 0.0]  # a tenth of a sigma
    elif fault == "too wide":
        draws = target.mean + 1.15 * (draws - target.mean)
    else:
        draws = draws[draws[:, 1] < 0.38]  # the upper 5 %
    grid = integrate(toy, optimum(toy, target.mean, covariance))
    check = cross_check(grid, chain_of(draws, toy.names), {n: float(len(draws)) for n in toy.names})
    assert check["agrees"] is False
    assert check["worst"] == ("p1" if fault == "lost a tail" else check["worst"])


def test_five_parameters_fall_back_on_importance_sampling():
    toy, target, covariance = gaussian(5)
    posterior = chain_of(target.rvs(40000, random_state=np.random.default_rng(6)), toy.names)
    proof = prove(toy, posterior, optimum(toy, target.mean, covariance), {n: 40000.0 for n in toy.names}, seed=np.random.SeedSequence(2))
    assert proof.grid is None
    assert "importance" in proof.cross_check["method"]
    assert proof.cross_check["agrees"] is True
    assert proof.evidence["methods_agree"] is None


def test_a_chain_that_hardly_reaches_a_tail_is_caught():
    """Three quarters of the lowest half per cent are missing: far below what a plain Kolmogorov bound sees."""
    toy, target, covariance = gaussian(2)
    draws = target.rvs(60000, random_state=np.random.default_rng(8))
    low = np.flatnonzero(draws[:, 0] < 0.3 - 2.576 * 0.05)
    draws = np.delete(draws, low[: 3 * len(low) // 4], axis=0)
    grid = integrate(toy, optimum(toy, target.mean, covariance))
    check = cross_check(grid, chain_of(draws, toy.names), {n: 20000.0 for n in toy.names})
    assert check["agrees"] is False
    assert check["worst"] == "p0"


@pytest.mark.parametrize("seed", range(8))
def test_independent_draws_raise_no_false_alarm(seed):
    toy, target, covariance = gaussian(3)
    grid = integrate(toy, optimum(toy, target.mean, covariance))
    draws = target.rvs(12000, random_state=np.random.default_rng(seed))
    assert cross_check(grid, chain_of(draws, toy.names), {n: 12000.0 for n in toy.names})["agrees"] is True


def test_a_ridge_that_leaves_the_first_cells_between_their_nodes_is_followed():
    """A narrow peak, and from it a thin curved ridge with a tenth of the mass that leads far away, both of known mass."""

    def along(x):
        peak = stats.norm.pdf(x, 0.3, 0.01)
        return 0.9 * peak + 0.1 * np.where((x > 0.3) & (x < 0.9), 1 / 0.6, 0.0)

    def log_likelihood(t):
        x, y, z = t.T
        with np.errstate(divide="ignore"):
            return (
                np.log(along(x))
                + stats.norm.logpdf(y, 0.2 + 0.9 * (x - 0.3) ** 2, 0.005)
                + stats.norm.logpdf(z, 0.8 - 0.7 * (x - 0.3), 0.005)
            )

    toy = Toy((Uniform(0, 1),) * 3, log_likelihood)
    grid = integrate(toy, optimum(toy, [0.3, 0.2, 0.8], np.diag([0.01, 0.005, 0.005]) ** 2))
    assert grid.log_evidence == pytest.approx(0.0, abs=3 * grid.log_evidence_error)
    assert grid.log_evidence_error < 0.02
    # Half of the ridge lies beyond 0.6.
    assert 1 - grid.cdf("p0", 0.6)[0] == pytest.approx(0.05, abs=0.003)


def test_points_that_matter_are_looked_at():
    """A second peak far from the first, which no face leads to, is found once something there is named."""
    narrow = [stats.multivariate_normal(np.full(3, c), 0.004**2 * np.eye(3)) for c in (0.2, 0.83)]
    toy = Toy((Uniform(0, 1),) * 3, lambda t: np.log(0.5 * sum(peak.pdf(t) for peak in narrow) + 1e-300))
    start = optimum(toy, np.full(3, 0.2), 0.004**2 * np.eye(3))
    assert integrate(toy, start).log_evidence == pytest.approx(np.log(0.5), abs=0.01)  # as nobody told it
    found = integrate(toy, start, known=np.full((1, 3), 0.832))
    assert found.log_evidence == pytest.approx(0.0, abs=max(found.log_evidence_error, 1e-4))
