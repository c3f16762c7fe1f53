"""χ² of the compressed likelihood against a direct sum over all supernovae, with distances by Gauss–Legendre panels.

The direct sum (in conftest.py) shares nothing with the package: no Chebyshev nodes, no QR, matrices read by the test's own readers.
"""

import numpy as np
import pytest

from fitter.likelihood.posterior import LogPosterior
from fitter.sample.sample import Sample

DRAWS = 500
TOLERANCE = 1e-6  # in χ²; distances right to 1e-8 mag leave far less (5e-9 was measured, with χ² up to 57,000)
PRIORS = {
    "flat_lcdm": {"omega_m": [0, 1]},
    "curved_lcdm": {"omega_m": [0, 1.5], "omega_lambda": [-0.5, 2]},
    "flat_wcdm": {"omega_m": [0, 1], "w": [-3, 0]},
    "curved_wcdm": {"omega_m": [0, 1.5], "omega_de": [0, 2], "w": [-3, 0]},
    "flat_w0wa": {"omega_m": [0, 1], "w0": [-3, 1], "wa": [-20, 10]},
}
RELEASES = ("pantheon2018_binned", "union2.1", "dovekie2025_statonly", "dovekie2025_vpec")


@pytest.fixture(scope="module", params=RELEASES)
def case(request, release, direct_sum):
    found = release(request.param)
    sample = Sample.from_arrays(
        found.z, found.data, z_helio=found.z_helio, data_kind=found.kind, covariance=found.covariance, precision=found.precision
    )
    return sample, direct_sum(found)


def _compare(posterior, direct, name, theta):
    found = posterior.chi2(theta)
    expected = np.array([direct(name, point) for point in theta])
    assert not np.isnan(found).any()
    assert np.array_equal(np.isinf(found), np.isinf(expected))
    finite = np.isfinite(expected)
    assert np.abs(found[finite] - expected[finite]).max() < TOLERANCE
    return expected


@pytest.mark.parametrize("name", PRIORS)
def test_wide_prior_draws(case, name):
    sample, direct = case
    posterior = LogPosterior.build(sample, name, {k: {"uniform": v} for k, v in PRIORS[name].items()})
    low, high = np.array(list(PRIORS[name].values()), dtype=float).T
    theta = np.random.default_rng(11).uniform(low, high, (DRAWS, len(low)))
    expected = _compare(posterior, direct, name, theta)
    assert np.isfinite(expected).mean() > 0.5


def test_near_the_no_big_bang_line(case):
    # Border: Carroll, Press & Turner 1992 (M), for Ω_m < ½. The nearer, the deeper E² dips between the supernovae.
    sample, direct = case
    posterior = LogPosterior.build(sample, "curved_lcdm", {k: {"uniform": v} for k, v in PRIORS["curved_lcdm"].items()})
    omega_m = np.repeat(np.linspace(0.01, 0.45, 12), 6)
    below = np.tile(np.geomspace(1e-4, 0.3, 6), 12)
    border = 4 * omega_m * np.cosh(np.arccosh((1 - omega_m) / omega_m) / 3) ** 3
    theta = np.column_stack([omega_m, border - below])
    theta = theta[theta[:, 1] < 2.0]
    expected = _compare(posterior, direct, "curved_lcdm", theta)
    assert np.isfinite(expected).sum() >= 10
    assert posterior.counts["refined"] > 0
