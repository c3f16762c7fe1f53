"""Chains against a posterior that is known in closed form: an exact Gaussian, reached through the whole likelihood.

With Ω_m held fixed, calibrated magnitudes are linear in M and h = 5 log10 H0:

    m − μ_host = M            (calibrators)
    m − μ(z; H0 = 1) = M − h  (the others)

A prior uniform in H0 has density ∝ exp(h ln 10 / 5) in h, so the posterior of (M, h) is Gaussian, its mean shifted by the covariance
times (0, ln 10 / 5). Distances come from the hypergeometric form (C).
"""

import numpy as np
import pytest
from scipy.special import hyp2f1

from fitter import Sample, fit

OMEGA_M = 0.3


def _modulus_at_unit_h0(z):
    """5 log10 of D_L in Mpc for H0 = 1 km/s/Mpc, plus 25."""
    x = (1 - OMEGA_M) / OMEGA_M

    def antiderivative(y):
        return hyp2f1(1 / 6, 1 / 2, 7 / 6, -y)

    distance = 2 / np.sqrt(OMEGA_M) * (antiderivative(x) - (1 + z) ** -0.5 * antiderivative(x / (1 + z) ** 3))
    return 5 * np.log10(299792.458 * (1 + z) * distance) + 25


@pytest.fixture(scope="module")
def case():
    """A sample with correlated errors, and mean and covariance of (M, h)."""
    rng = np.random.default_rng(8)
    n, calibrators = 50, 12
    z = np.sort(rng.uniform(0.02, 0.8, n))
    is_calibrator = np.arange(n) < calibrators
    base = np.where(is_calibrator, 31.5, _modulus_at_unit_h0(z))
    mixing = rng.normal(size=(n, n))
    covariance = 0.01 * np.eye(n) + 2e-4 * mixing @ mixing.T
    truth = np.where(is_calibrator, 0.0, -5 * np.log10(71.0)) - 19.3
    magnitude = base + truth + np.linalg.cholesky(covariance) @ rng.normal(size=n)
    design = np.column_stack([np.ones(n), np.where(is_calibrator, 0.0, -1.0)])
    weight = np.linalg.inv(covariance)
    spread = np.linalg.inv(design.T @ weight @ design)
    mean = spread @ (design.T @ weight @ (magnitude - base)) + spread @ [0.0, np.log(10) / 5]
    sample = Sample.from_arrays(
        z,
        magnitude,
        covariance=covariance,
        data_kind="magnitude",
        distance_scale="calibrated",
        calibrator_modulus=np.where(is_calibrator, 31.5, np.nan),
    )
    return sample, mean, spread


@pytest.mark.parametrize("magnitude", [{}, {"absolute_magnitude": {"uniform": [-22, -17]}}], ids=["marginalised", "sampled"])
def test_exact_gaussian(case, magnitude):
    sample, mean, spread = case
    parameters = {"omega_m": OMEGA_M, "H0": {"uniform": [20, 200]}, **magnitude}
    result = fit(sample=sample, model="flat_lcdm", parameters=parameters, run_folder=False)
    assert result.converged
    draws = np.column_stack([result.posterior["absolute_magnitude"], 5 * np.log10(result.posterior["H0"])])
    ess = min(result.summary()["parameters"][name]["ess"] for name in ("absolute_magnitude", "H0"))
    sd = np.sqrt(np.diag(spread))
    assert ess >= 10_000 * 0.9
    # Four Monte Carlo errors of a mean, a standard deviation and a correlation of Gaussian draws.
    np.testing.assert_allclose((draws.mean(axis=0) - mean) / sd, 0.0, rtol=0, atol=4 / np.sqrt(ess))
    np.testing.assert_allclose(draws.std(axis=0) / sd, 1.0, rtol=0, atol=4 / np.sqrt(2 * ess))
    r = spread[0, 1] / sd.prod()
    assert np.corrcoef(draws.T)[0, 1] == pytest.approx(r, abs=4 * (1 - r**2) / np.sqrt(ess))
