"""Many data vectors on one factorisation, and mock data that have the covariance they should."""

import numpy as np
import pytest

from fitter.likelihood.posterior import LogPosterior
from fitter.sample.sample import Sample

N = 60


def a_sample(kind, **more):
    rng = np.random.default_rng(5)
    z = np.sort(rng.uniform(0.02, 1.2, N))
    mu = 5 * np.log10(z * (1 + z)) + 43.2 + 0.1 * rng.standard_normal(N)
    sigma = rng.uniform(0.08, 0.15, N)
    root = 0.02 * rng.standard_normal((N, N))
    noise = {
        "diagonal": {"sigma": sigma},
        "dense": {"covariance": root @ root.T, "sigma": sigma},
        "precision": {"precision": np.linalg.inv(root @ root.T + np.diag(sigma**2))},
        "modes": {"sigma": sigma, "modes": 0.02 * np.column_stack([np.ones(N), z])},
    }[kind]
    return Sample.from_arrays(z, mu, **noise, **more)


CASES = [
    ("diagonal", {}),
    ("dense", {}),
    ("precision", {}),
    ("modes", {"distance_scale": "absolute"}),
    ("dense", {"intrinsic": {"uniform": [0, 0.3]}}),
    ("modes", {"covariance_scale": {"log_uniform": [0.5, 2]}}),
]


@pytest.mark.parametrize(("kind", "more"), CASES)
def test_other_data_as_if_built_anew(kind, more):
    posterior = LogPosterior.build(a_sample(kind, **more), "curved_lcdm")
    rng = np.random.default_rng(1)
    data = posterior.sample.data + 0.3 * rng.standard_normal((3, N))
    theta = np.column_stack([p.sample(rng, 20) for p in posterior.priors])
    for row, other in zip(data, posterior.with_data(data), strict=True):
        anew = LogPosterior(other.sample, posterior.model, dict(zip(posterior.names, posterior.priors, strict=True)), posterior.fixed)
        assert np.array_equal(other.sample.data, row)
        # The tolerance of the error control in χ²; 2e-7 where the scatter is interpolated as well.
        np.testing.assert_allclose(other(theta), anew(theta), rtol=1e-11, atol=2e-7)
        inside = theta[np.isfinite(other(theta))]
        given, wanted = (p.kernel.nuisance(*p._ingredients(inside)) for p in (other, anew))
        np.testing.assert_allclose(given, wanted, atol=1e-8)


@pytest.mark.parametrize("kind", ["dense", "precision", "modes"])
def test_mocks_have_the_covariance_of_the_sample(kind):
    posterior = LogPosterior.build(a_sample(kind, covariance_scale={"log_uniform": [0.5, 2]}), "flat_lcdm")
    theta = np.tile([0.3, 1.5], (4000, 1))
    mocks = posterior.simulate(theta, np.random.default_rng(2))
    truth = 1.5**2 * posterior.sample.noise.covariance()
    # The variance of a sample covariance of Gaussians is (C_ii C_jj + C_ij²) / n: 5 sigma for the worst of 1,830 elements.
    error = np.sqrt((np.outer(np.diag(truth), np.diag(truth)) + truth**2) / len(mocks))
    assert np.abs((np.cov(mocks.T) - truth) / error).max() < 5
    assert np.abs((mocks.mean(axis=0) - posterior.expected(theta[:1])[0]) / np.sqrt(np.diag(truth) / len(mocks))).max() < 4.5


def test_expected_data_leave_no_residual_of_their_own():
    for kind, more in CASES[:4]:
        posterior = LogPosterior.build(a_sample(kind, **more), "flat_lcdm")
        theta = np.array([[0.3] + [70.0] * (posterior.ndim - 1)])
        np.testing.assert_allclose(posterior.sample.data - posterior.expected(theta)[0], posterior.residuals(theta), atol=1e-10)


def test_magnitudes_with_a_prior_scatter_by_it():
    rng = np.random.default_rng(3)
    z = np.linspace(0.01, 0.8, N)
    host = np.where(np.arange(N) < 8, 32.0, np.nan)
    sample = Sample.from_arrays(
        z, 24 + 5 * np.log10(z) + 0.1 * rng.standard_normal(N), sigma=0.1, data_kind="magnitude", calibrator_modulus=host,
        distance_scale="calibrated",
    )  # fmt: skip
    posterior = LogPosterior.build(sample, "flat_lcdm", {"absolute_magnitude": {"normal": [-19.3, 0.5]}})
    mocks = posterior.simulate(np.tile([0.3, 70.0], (2000, 1)), rng)
    common = mocks[:, :8].mean(axis=1) - 32.0
    assert common.mean() == pytest.approx(-19.3, abs=4 * 0.5 / np.sqrt(2000))
    assert common.std() == pytest.approx(np.hypot(0.5, 0.1 / np.sqrt(8)), rel=4 / np.sqrt(2 * 2000))
