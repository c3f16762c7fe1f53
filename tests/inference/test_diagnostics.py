import numpy as np
import pytest
from emcee.autocorr import integrated_time

from fitter.inference import diagnostics as d

RNG = np.random.default_rng(20)


def ar1(rho, r=4, s=2000, w=16, seed=0):
    """Independent AR(1) chains of unit variance, (R, S, W): τ = (1 + ρ) / (1 − ρ)."""
    rng = np.random.default_rng(seed)
    x = np.empty((r, s, w))
    x[:, 0] = rng.standard_normal((r, w))
    for t in range(1, s):
        x[:, t] = rho * x[:, t - 1] + np.sqrt(1 - rho**2) * rng.standard_normal((r, w))
    return x


def test_tau_is_emcees():
    x = ar1(0.8)
    expected = integrated_time(x.transpose(1, 0, 2).reshape(2000, -1))[0]
    assert d.autocorrelation_time(x) == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("rho", [0.0, 0.5, 0.9])
def test_tau_of_ar1(rho):
    # Its variance: 2 (2 M + 1) / N τ² with the window M = 5 τ (Sokal 1997).
    tau = (1 + rho) / (1 - rho)
    error = tau * np.sqrt(2 * (10 * tau + 1) / (4 * 2000 * 16))
    assert d.autocorrelation_time(ar1(rho)) == pytest.approx(tau, abs=4 * error + 0.02 * tau)


def test_walkers_that_never_moved():
    assert np.isnan(d.autocorrelation_time(np.ones((2, 50, 4))))
    half_stuck = ar1(0.0, s=400)
    half_stuck[:, :, ::2] = half_stuck[:, :1, ::2]
    assert d.autocorrelation_time(half_stuck) > 50


@pytest.mark.parametrize("rho", [0.0, 0.6, 0.9])
def test_ess_of_ar1(rho):
    # The ensemble means alone give the smaller of the two estimates a scatter of about 10 %, and pull it down.
    x = ar1(rho)
    exact = x.size * (1 - rho) / (1 + rho)
    for ess in (d.ess_bulk(x), d.ess_mean(x)):
        assert 0.55 * exact < ess < 1.15 * exact


def test_walkers_that_move_together_are_not_independent():
    one = ar1(0.5, w=1)
    x = np.repeat(one, 32, axis=2) + 1e-3 * RNG.standard_normal((4, 2000, 32))
    exact = one.size / 3
    assert 0.5 * exact < d.ess_bulk(x) < 1.4 * exact
    assert d.ess_tail(x) < 3 * exact


def test_ess_of_the_standard_deviation_counts_gaussian_draws():
    x = ar1(0.0, s=4000)
    assert 0.6 * x.size < d.ess_sd(x) < 1.15 * x.size
    # Kurtosis κ: relative variance of the variance (κ − 1) / n, for the Laplace distribution (κ = 6) 5 / n.
    laplace = RNG.laplace(size=(4, 4000, 16))
    assert 0.55 * laplace.size * 2 / 5 < d.ess_sd(laplace) < 1.25 * laplace.size * 2 / 5


def test_mcse_of_the_mean_is_the_scatter_of_means():
    runs = [ar1(0.7, r=2, s=400, w=8, seed=k) for k in range(60)]
    scatter = np.std([x.mean() for x in runs])
    claimed = np.mean([d.mcse_mean(x) for x in runs])
    # 60 runs know their scatter to 9 %; claiming too much is safe, by at most half.
    assert 0.8 * scatter < claimed < 1.6 * scatter


def test_mcse_of_a_quantile_is_the_scatter_of_quantiles():
    runs = [ar1(0.5, r=2, s=400, w=8, seed=k) for k in range(60)]
    scatter = np.std([np.quantile(x, 0.95) for x in runs])
    claimed = np.mean([d.mcse_quantile(x, 0.95) for x in runs])
    assert 0.75 * scatter < claimed < 1.7 * scatter


def test_rhat_of_good_chains():
    assert 0.999 < d.split_rhat(ar1(0.3)) < 1.002


def test_rhat_sees_a_shifted_a_wider_and_a_drifting_replica():
    shifted = ar1(0.3)
    shifted[0] += 0.5
    wider = ar1(0.3)
    wider[0] *= 2
    drifting = ar1(0.3) + np.linspace(-1, 1, 2000)[None, :, None]
    for x in (shifted, wider, drifting):
        assert d.split_rhat(x) > 1.01


def test_rhat_of_two_plain_values():
    # Chains of means 0 and δ, unit variance, halves alike: B/N = var(0, 0, δ, δ) = δ² / 3.
    n, delta = 40_000, 1.0
    z = RNG.standard_normal((2, n, 1))
    z[1] += delta
    assert d._rhat(z) == pytest.approx(np.sqrt(1 + delta**2 / 3), rel=0.01)


def test_rank_normalised_is_monotone_and_ties_agree():
    x = np.array([3.0, 1.0, 2.0, 2.0, 10.0]).reshape(1, 5, 1)
    z = d.rank_normalised(x).ravel()
    assert z[2] == z[3] and z[1] < z[2] < z[0] < z[4]
    assert z[1] == pytest.approx(-z[4])
    wild = RNG.standard_cauchy((2, 500, 3))
    np.testing.assert_allclose(d.rank_normalised(wild), d.rank_normalised(np.arctan(wild)))
