"""Posteriors of the published releases against reference_posteriors.json.

The reference (D) is a quadrature on a grid by independent code: offset marginalised with a flat prior, no radiation, grid error
below 0.001 in means, 0.02 for wa.
"""

import numpy as np
import pytest

from fitter import fit

RELEASES = ("pantheon2018_binned", "union2.1", "dovekie2025_statonly", "dovekie2025_vpec")
MODELS = ("flat_lcdm", "curved_lcdm", "flat_wcdm", "flat_w0wa")
GRID_ERROR = {"wa": 0.02}


def _check_minimum(result, expected, direct):
    """χ² at the optimum: within 0.005 of the reference, or lower with proof.

    The reference's is the smallest on a grid, which lies above the true minimum: in three parameters a grid of six million
    points (125 × 160 × 300 over the priors) still misses 0.016 on the VPEC release. So there a lower value is allowed, and
    a direct sum at the optimum shows for every case that the χ² is really attained.
    """
    names = result.log_posterior.names
    found = result.best_fit
    chi2 = result.summary()["best_fit"]["chi2"]
    assert chi2 < expected["chi2_min"] + 0.005
    assert chi2 > expected["chi2_min"] - (0.02 if len(names) == 3 else 0.005)
    assert chi2 == pytest.approx(direct(result.config.model, [found[n] for n in names]), abs=1e-6)


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("name", RELEASES)
def test_posterior(name, model, release, release_config, reference, direct_sum):
    expected = reference[name][model]
    parameters = {k: {"uniform": v} for k, v in expected["priors"].items()}
    result = fit(release_config(name), model=model, parameters=parameters, run_folder=False)
    summary = result.summary()
    assert result.converged
    assert summary["cross_check"]["agrees"], summary["cross_check"]
    assert summary["evidence"]["methods_agree"], summary["evidence"]
    _check_minimum(result, expected, direct_sum(release(name)))
    for key in expected["priors"]:
        found, wanted = summary["parameters"][key], expected[key]
        tolerance = 4 * found["mcse"] + GRID_ERROR.get(key, 0.001)
        assert found["mean"] == pytest.approx(wanted["mean"], abs=tolerance), key
        assert found["sd"] == pytest.approx(wanted["std"], rel=0.03), key
        # 4 sigma of a quantile at this many independent draws, p (1 − p) / (ess density²) with a Gaussian density at ±2 sigma.
        for level, q in (("low95", "q2.5"), ("high95", "q97.5")):
            error = np.sqrt(0.025 * 0.975 / found["ess"]) / 0.0540 * wanted["std"]
            assert found[level] == pytest.approx(wanted[q], abs=4 * error + GRID_ERROR.get(key, 0.001) + 0.02 * wanted["std"]), key


def test_four_nonlinear_parameters_prove_themselves(release_config):
    result = fit(release_config("pantheon2018_binned"), model="curved_w0wa", sampling={"target_ess": 3000}, run_folder=False)
    summary = result.summary()
    assert len(result.chains.names) == 4 and result.converged
    assert summary["cross_check"]["agrees"], summary["cross_check"]


def test_one_parameter_against_quadrature(release_config):
    # The whole distribution, not only its moments: the share of draws below each of 19 quantiles of a fine quadrature.
    result = fit(release_config("union2.1"), model="flat_lcdm", parameters={"omega_m": {"uniform": [0, 1]}}, run_folder=False)
    grid = np.linspace(0.0, 1.0, 4001)
    log_density = result.log_posterior(grid[:, None])
    density = np.exp(log_density - log_density.max())
    cumulative = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]))])
    cumulative /= cumulative[-1]
    draws = np.asarray(result.posterior["omega_m"])
    levels = np.linspace(0.05, 0.95, 19)
    shares = np.array([(draws <= np.interp(p, cumulative, grid)).mean() for p in levels])
    ess = result.summary()["parameters"]["omega_m"]["ess"]
    assert (np.abs(shares - levels) < 4 * np.sqrt(levels * (1 - levels) / ess) + 1e-4).all()
