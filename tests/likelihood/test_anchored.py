"""Calibrated scale, free scatter, a factor on the errors and zero points: closed forms, and the invented survey through configs."""

from pathlib import Path

import numpy as np
import pytest

from fitter import Sample, fit
from fitter.api import load_config
from fitter.config.load import config_from_mapping
from fitter.inference.optimum import find_optimum
from fitter.likelihood.posterior import LogPosterior

ROOT = Path(__file__).resolve().parents[2]
DEMO = ROOT / "data_demo"
SEED = np.random.SeedSequence(3)


# ---------------------------------------------------------------- closed forms


@pytest.fixture(scope="module")
def ladder():
    """Six calibrators and thirty supernovae in the Hubble flow; H0 and M are the only free parameters."""
    rng = np.random.default_rng(6)
    z = np.concatenate([np.full(6, 0.004), np.linspace(0.02, 0.3, 30)])
    host = np.concatenate([rng.uniform(29, 32, 6), np.full(30, np.nan)])
    sigma = rng.uniform(0.08, 0.2, 36)
    flow = LogPosterior.build(Sample.from_arrays(z[6:], np.zeros(30), sigma=1.0, distance_scale="absolute"), "flat_lcdm", {"omega_m": 0.3})
    mu = np.concatenate([host[:6], flow.distance_modulus([[72.0]], z[6:])[0]])
    sample = Sample.from_arrays(
        z, mu - 19.3 + sigma * rng.standard_normal(36), sigma=sigma, calibrator_modulus=host, data_kind="magnitude",
        distance_scale="calibrated",
    )  # fmt: skip
    posterior = LogPosterior.build(sample, "flat_lcdm", {"omega_m": 0.3, "H0": {"uniform": [40, 110]}})
    return sample, posterior, flow


def _sides(sample, flow):
    """M from calibrators alone, and m − μ(H0 = 70) of the flow: weighted means and their weights."""
    weight = 1 / sample.noise.variance
    c = sample.is_calibrator
    m = sample.data - np.where(c, np.nan_to_num(sample.calibrator_modulus), 0)
    m[~c] -= flow.distance_modulus([[70.0]], sample.redshift[~c])[0]
    return [(np.average(m[side], weights=weight[side]), weight[side].sum()) for side in (c, ~c)]


def test_h0_is_the_difference_of_calibrators_and_flow(ladder):
    """Over x = 5 log10(H0/70) the posterior is Gaussian: mean M_cal − (m − μ_70), variance 1/W_cal + 1/W_flow; exact."""
    sample, posterior, flow = ladder
    (m_cal, w_cal), (m_flow, w_flow) = _sides(sample, flow)
    h0 = np.linspace(60, 85, 30)
    x = 5 * np.log10(h0 / 70)
    expected = -0.5 * (x - (m_cal - m_flow)) ** 2 / (1 / w_cal + 1 / w_flow)
    found = posterior(h0[:, None])
    np.testing.assert_allclose(found - found[0], expected - expected[0], rtol=0, atol=1e-7)


def test_magnitude_is_that_of_calibrators_alone(ladder):
    """H0 takes whatever the flow says, so M knows the calibrators only: mean and variance 1/W_cal, within 4 Monte Carlo errors."""
    sample, posterior, flow = ladder
    (m_cal, w_cal), (m_flow, w_flow) = _sides(sample, flow)
    rng = np.random.default_rng(2)
    n = 40_000
    # A prior flat in x instead of H0 makes M's posterior exactly that of the calibrators.
    x = m_cal - m_flow + rng.standard_normal(n) * np.sqrt(1 / w_cal + 1 / w_flow)
    m = posterior.draw_marginalised((70 * 10 ** (x / 5))[:, None], rng)["absolute_magnitude"]
    sd = w_cal**-0.5
    assert m.mean() == pytest.approx(m_cal, abs=4 * sd / np.sqrt(n))
    assert m.std() == pytest.approx(sd, rel=4 / np.sqrt(2 * n))


def test_magnitude_sampled_or_marginalised_says_the_same_of_h0(ladder):
    sample, posterior, _ = ladder
    both = LogPosterior.build(
        sample, "flat_lcdm", {"omega_m": 0.3, "H0": {"uniform": [40, 110]}, "absolute_magnitude": {"uniform": [-21, -17]}}
    )
    m = np.linspace(-19.8, -18.8, 801)
    h0 = np.array([68.0, 72.0, 76.0])
    grid = np.array([[h, v] if both.names[0] == "H0" else [v, h] for h in h0 for v in m])
    density = np.exp(both(grid).reshape(3, -1)).sum(axis=1) * (m[1] - m[0])
    found = np.log(density) - posterior(h0[:, None])
    # The uniform prior on M, 1/4 per mag, is all that is left: trapezoids converge exponentially on a Gaussian.
    np.testing.assert_allclose(found, -np.log(4), rtol=0, atol=1e-6)


# ---------------------------------------------------------------- the invented survey, through configs


def optimum_of(given):
    config = config_from_mapping(given, folder=DEMO)
    posterior = LogPosterior.build(Sample.from_config(config.sample, config.folder), config.cosmology, dict(config.parameters))
    found = find_optimum(posterior, SEED)
    return found, dict(zip(posterior.names, np.sqrt(np.diag(found.covariance)), strict=True)), posterior


SURVEY = {
    "table": "survey.csv",
    "columns": {"redshift": "z", "redshift_helio": "z_helio", "distance_modulus": "modulus", "group": "survey", "name": "name"},
    "uncertainty": [{"sigma": "sigma_all"}, {"modes": "calibration_modes.csv"}, {"covariance": "dust.npy.gz"}],
}


def test_true_values_of_the_calibrated_survey():
    """Within 3 standard deviations of what was put in; M may be marginalised or sampled, with the same answer."""
    config = load_config(ROOT / "configs" / "calibrated_h0.yaml")
    sample = Sample.from_config(config.sample, config.folder)
    found = {}
    for how, more in (("marginalised", {}), ("sampled", {"absolute_magnitude": {"uniform": [-21, -17]}})):
        posterior = LogPosterior.build(sample, "flat_lcdm", {"H0": {"uniform": [50, 90]}} | more)
        found[how] = find_optimum(posterior, SEED)
        sd = dict(zip(posterior.names, np.sqrt(np.diag(found[how].covariance)), strict=True))
        assert abs(found[how].values["H0"] - 70.5) < 3 * sd["H0"]
        assert abs(found[how].values["omega_m"] - 0.31) < 3 * sd["omega_m"]
    assert abs(found["sampled"].values["absolute_magnitude"] + 19.27) < 3 * sd["absolute_magnitude"]
    for name in ("H0", "absolute_magnitude"):
        # Both maximise the same function; the optimum is good to a hundredth of the error.
        assert found["sampled"].values[name] == pytest.approx(found["marginalised"].values[name], abs=0.02 * sd[name])


def test_free_scatter_finds_what_was_put_in():
    terms = [
        {"sigma": "sigma"},
        {"peculiar_velocity": 250},
        {"lensing": 0.055},
        {"intrinsic": {"uniform": [0, 0.5]}},
        *SURVEY["uncertainty"][1:],
    ]
    found, sd, _ = optimum_of({"sample": {**SURVEY, "uncertainty": terms}, "model": "flat_lcdm"})
    assert abs(found.values["intrinsic_scatter"] - 0.09) < 3 * sd["intrinsic_scatter"]
    # N independent residuals fix a scatter to about σ_tot² / (σ_int √(2N)), here 0.0057.
    assert sd["intrinsic_scatter"] == pytest.approx(0.0057, rel=0.3)


def test_scale_of_the_covariance_is_one_and_as_uncertain_as_it_must_be():
    """s of N residuals has the standard deviation 1/√(2N)."""
    given = {**SURVEY, "uncertainty": [*SURVEY["uncertainty"], {"covariance_scale": {"log_uniform": [0.5, 2]}}]}
    found, sd, posterior = optimum_of({"sample": given, "model": "flat_lcdm"})
    assert sd["covariance_scale"] == pytest.approx(1 / np.sqrt(2 * 700), rel=0.05)
    assert abs(found.values["covariance_scale"] - 1) < 4 * sd["covariance_scale"]
    assert posterior.chi2(found.theta[None])[0] == pytest.approx(700, rel=0.01)


def test_planted_zero_point_is_found():
    """The offset of all is free, so only differences of zero points count; their prior of 0.1 mag pulls them in by a few per cent."""
    sample = Sample.from_config(config_from_mapping({"sample": SURVEY, "model": "flat_lcdm"}, folder=DEMO).sample, DEMO)
    groups = ["fennelwick", "kestrithal", "ombrevale"]
    modes = np.column_stack([(sample.group == g) * 0.1 for g in groups])
    given = {"z_helio": sample.redshift_helio, "sigma": np.sqrt(sample.noise.variance), "modes": modes}
    shifts = []
    for planted in (0.06, 0.0):
        data = sample.data + np.where(sample.group == "ombrevale", planted, 0.0)
        posterior = LogPosterior.build(Sample.from_arrays(sample.redshift, data, **given), "flat_lcdm")
        shifts.append(0.1 * posterior.kernel.nuisance(*posterior._ingredients(np.array([[0.31]])))[0, :3])
    near, far, middle = shifts[0] - shifts[1]
    assert middle - near == pytest.approx(0.06, rel=0.05) and middle - far == pytest.approx(0.06, rel=0.05)


def test_fits_from_a_config_report_scatter_scale_and_cuts(tmp_path):
    terms = [{"sigma": "sigma"}, {"peculiar_velocity": 250}, {"intrinsic": {"uniform": [0, 0.5]}}, {"zero_point": "group", "sigma": 0.02}]
    keep = {"redshift": [0.02, 1], "one_per": "name"}
    sampling = {"walkers": 32, "replicas": 2, "target_ess": 300, "seed": 2}
    given = {"sample": {**SURVEY, "uncertainty": terms, "keep": keep}, "model": "flat_lcdm", "sampling": sampling}
    result = fit(config_from_mapping(given, folder=DEMO))
    summary = result.summary()
    assert summary["parameters"]["intrinsic_scatter"]["kind"] == "sampled"
    assert summary["parameters"]["intrinsic_scatter"]["mean"] == pytest.approx(0.09, abs=0.03)
    assert summary["parameters"]["zero_point:kestrithal"]["kind"] == "marginalised"
    removed = summary["sample"]["removed"]
    assert removed["one_per name"] == 0 and removed["redshift"] == 700 - summary["sample"]["n"] > 0
