"""Two data sets, one model: Gaussian toys with a known difference."""

from types import SimpleNamespace

import numpy as np
import pytest

from fitter import Sample, fit
from fitter.study.averaging import averaged, model_weights
from fitter.study.consistency import consistency, overlap
from fitter.study.entry import Entry


def entry_of(name, mean, covariance, seed, n=60_000, log_evidence=-10.0):
    draws = np.random.default_rng(seed).multivariate_normal(mean, covariance, size=n)
    names = ("omega_m", "w")[: len(mean)]
    chain = draws.reshape(4, n // 400, 100, len(mean))
    posterior = SimpleNamespace(names=names, chain=chain, kinds=dict.fromkeys(names, "sampled"), draws=lambda k: chain[..., names.index(k)])
    summary = {"information": {"log_evidence": log_evidence, "log_evidence_error": 0.0}, "sample": {"sha256": name}}
    return Entry(name, summary, posterior)


@pytest.mark.parametrize("sigma", [0.5, 1.5, 2.5])
def test_one_parameter(sigma):
    # Two Gaussians of width 0.03 and 0.04: the difference has width 0.05.
    first, second = entry_of("A", [0.30], [[0.03**2]], 1), entry_of("B", [0.30 + 0.05 * sigma], [[0.04**2]], 2)
    found = consistency(first, second, np.random.default_rng(3))
    assert found["sigma"] == pytest.approx(sigma, abs=0.1)
    assert found["sigma_gaussian"] == pytest.approx(sigma, abs=0.05)


def test_two_parameters_with_a_correlation():
    covariance = np.array([[0.03**2, -0.8 * 0.03 * 0.1], [-0.8 * 0.03 * 0.1, 0.1**2]])
    shift = np.linalg.cholesky(2 * covariance) @ np.array([2.0, 0.0])  # χ² = 4 with two degrees of freedom: p = exp(-2)
    found = consistency(entry_of("A", [0.3, -1], covariance, 1), entry_of("B", [0.3, -1] + shift, covariance, 2), np.random.default_rng(3))
    # The kernel widens the density by n^(-1/6) of its width, 5 % in variance: χ² is seen 5 % lower.
    assert found["p_value"] == pytest.approx(np.exp(-2), abs=0.025)
    assert found["parameters"] == ["omega_m", "w"]


def test_far_apart_is_a_limit_and_said_so():
    found = consistency(entry_of("A", [0.3], [[1e-4]], 1), entry_of("B", [0.6], [[1e-4]], 2), np.random.default_rng(3))
    assert found["sigma_is_limit"]
    assert "tension" in found["sentence"]
    assert "more than" in found["sentence"]


def samples():
    rng = np.random.default_rng(8)
    for offset in (0.0, 0.02):
        z = np.sort(rng.uniform(0.02, 1.0, 150))
        mu = 43.1 + offset + 5 * np.log10(z * (1 + 0.77 * z - 0.2 * z**2)) + rng.normal(0, 0.12, len(z))
        yield Sample.from_arrays(z, mu, sigma=0.12)


def test_evidence_ratio_against_a_direct_sum():
    entries = []
    for name, sample in zip("AB", samples(), strict=True):
        result = fit(sample=sample, model="flat_lcdm", sampling={"target_ess": 2000}, run_folder=False)
        entries.append(Entry(name, result.summary(), result.chains, result.log_posterior))
    assert overlap(*entries) == 0
    found = consistency(*entries, np.random.default_rng(1))
    grid = (np.arange(20_000) + 0.5)[:, None] / 20_000
    likelihood = [np.exp(e.log_posterior.log_likelihood(grid) - e.log_posterior.log_likelihood(grid).max()) for e in entries]
    expected = np.log((likelihood[0] * likelihood[1]).mean() / likelihood[0].mean() / likelihood[1].mean())
    assert found["log_r"][0] == pytest.approx(expected, abs=1e-3)
    assert "R grows with the width of the priors" in found["sentence"]


def test_shared_supernovae_are_counted():
    sample = next(samples())
    whole, half = (
        fit(sample=s, model="flat_lcdm", sampling={"target_ess": 500}, run_folder=False) for s in (sample, sample.select(slice(75)))
    )
    entries = [Entry(n, r.summary(), r.chains, r.log_posterior) for n, r in (("whole", whole), ("half", half))]
    assert overlap(*entries) == 75
    assert overlap(entries[0], Entry("absent", {}, None)) is None


def test_averages_are_those_of_the_mixture():
    # Weights 3/4 and 1/4 from evidences, whatever the lengths of the chains.
    first = entry_of("A", [0.30], [[0.01**2]], 1, n=40_000, log_evidence=np.log(3.0))
    second = entry_of("B", [0.40], [[0.02**2]], 2, n=80_000, log_evidence=0.0)
    assert model_weights([first, second]) == pytest.approx({"A": 0.75, "B": 0.25})
    facts = averaged([first, second])["parameters"]["omega_m"]
    assert facts["mean"] == pytest.approx(0.325, abs=3e-4)
    assert facts["sd"] == pytest.approx(np.sqrt(0.75 * 0.01**2 + 0.25 * 0.02**2 + 0.75 * 0.25 * 0.1**2), rel=0.01)
