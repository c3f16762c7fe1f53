"""H0 integrated out exactly, against a quadrature that keeps it as a dimension, and against closed forms."""

import numpy as np
import pytest
from scipy.integrate import quad

from fitter import Sample, fit
from fitter.inference.optimum import find_optimum
from fitter.inference.quadrature import integrate
from fitter.inference.without_h0 import WithoutH0, integrate_without_h0
from fitter.likelihood.posterior import LogPosterior

SEED = np.random.SeedSequence(4)
PRIORS = {
    "uniform": {"uniform": [40, 100]},
    "uniform, cut at the peak": {"uniform": [70, 71.3]},
    "normal": {"normal": [70, 2]},
    "truncated": {"truncated_normal": [70, 2, 69, 72]},
    "log-uniform": {"log_uniform": [10, 300]},
    "normal and far away": {"normal": [80, 0.5]},
    "uniform and far away": {"uniform": [20, 30]},
}


@pytest.fixture(scope="module")
def sample():
    rng = np.random.default_rng(9)
    z = np.sort(rng.uniform(0.02, 1.1, 150))
    mu = 5 * np.log10(z * (1 + 0.775 * z - 0.1 * z**2)) + 43.14 + 0.12 * rng.standard_normal(150)
    return Sample.from_arrays(z, mu, sigma=0.12, distance_scale="absolute")


@pytest.mark.parametrize("prior", PRIORS)
def test_the_density_is_the_integral_over_h0(sample, prior):
    posterior = LogPosterior.build(sample, "flat_wcdm", {"H0": PRIORS[prior]})
    without = WithoutH0(posterior, 70.5)
    assert without.names == ("omega_m", "w")
    for point in ([0.3, -1.0], [0.45, -1.3], [0.05, -0.6]):
        whole = without(np.array([point]))[0]
        centre = 10 ** (0.2 * without.parabola(np.array([point]))[1][0])
        density = lambda h, p=point, w=whole: np.exp(posterior(np.array([[*p, h]]))[0] - w)  # noqa: E731
        # The prior may end far from the likelihood's peak: then all is next to that end.
        low, high = max(posterior.priors[-1].low, 20), min(posterior.priors[-1].high, 120)
        inside = np.unique(np.clip([centre, centre - 1, centre + 1, 80, low + 0.01, high - 0.01, low + 0.1, high - 0.1], low, high))
        assert quad(density, low, high, points=inside, epsabs=1e-11, limit=400)[0] == pytest.approx(1, abs=1e-7)


@pytest.mark.parametrize("prior", PRIORS)
def test_same_posterior_as_with_h0_as_a_dimension(sample, prior):
    posterior = LogPosterior.build(sample, "flat_wcdm", {"H0": PRIORS[prior]})
    best = find_optimum(posterior, SEED)
    with_h0, without = integrate(posterior, best), integrate_without_h0(posterior, best)
    error = with_h0.log_evidence_error + without.log_evidence_error
    assert without.log_evidence == pytest.approx(with_h0.log_evidence, abs=error)
    for name in posterior.names:
        x = with_h0.quantile(name, np.linspace(0.01, 0.99, 30))
        # 3e-4: resampling of the nodes and the trapezoids under the distribution of H0.
        np.testing.assert_allclose(without.cdf(name, x), with_h0.cdf(name, x), atol=error + 3e-4)


def test_calibrators_and_a_fitted_scale_of_the_covariance():
    rng = np.random.default_rng(3)
    z = np.sort(rng.uniform(0.02, 0.8, 80))
    mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.14
    host = np.where(np.arange(80) < 10, mu, np.nan)
    sample = Sample.from_arrays(
        z, mu - 19.3 + 0.1 * rng.standard_normal(80), sigma=0.1, data_kind="magnitude", distance_scale="calibrated",
        calibrator_modulus=host, covariance_scale={"log_uniform": [0.5, 2]},
    )  # fmt: skip
    posterior = LogPosterior.build(sample, "flat_lcdm")
    best = find_optimum(posterior, SEED)
    with_h0, without = integrate(posterior, best), integrate_without_h0(posterior, best)
    error = with_h0.log_evidence_error + without.log_evidence_error
    assert without.log_evidence == pytest.approx(with_h0.log_evidence, abs=error)


def test_where_h0_is_more_than_a_zero_point_it_stays_a_dimension(sample):
    assert WithoutH0.applies(LogPosterior.build(sample, "flat_lcdm"))
    assert not WithoutH0.applies(LogPosterior.build(sample, "flat_lcdm", radiation=True))
    assert not WithoutH0.applies(LogPosterior.build(sample, "flat_lcdm", {"omega_m": 0.3}))


def test_three_parameters_and_h0_are_checked_by_quadrature(sample):
    summary = fit(sample=sample, model="curved_wcdm", run_folder=False).summary()
    assert "quadrature" in summary["cross_check"]["method"]
    assert summary["cross_check"]["agrees"] and summary["evidence"]["methods_agree"]
