"""ln p against brute force: dense covariances, quadrature distances, marginals by explicit integration."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import multivariate_normal

from fitter.errors import InputError, InputErrors
from fitter.likelihood.posterior import LogPosterior
from fitter.sample.noise import Noise
from fitter.sample.sample import Sample

N, N_CAL = 60, 8
C_KM_S = 299792.458


def distance_modulus(z, omega_m, omega_lambda, h0, w=-1.0):
    """Independent of the package: adaptive quadrature for each redshift."""

    def inverse_e(x):
        a = 1 + x
        return (omega_m * a**3 + (1 - omega_m - omega_lambda) * a**2 + omega_lambda * a ** (3 * (1 + w))) ** -0.5

    d = np.array([quad(inverse_e, 0, x, epsabs=1e-13, epsrel=1e-13)[0] for x in z])
    k = 1 - omega_m - omega_lambda
    if abs(k) > 1e-12:
        root = np.sqrt(abs(k))
        d = (np.sinh if k > 0 else np.sin)(root * d) / root
    return 5 * np.log10((1 + z) * d * C_KM_S / h0) + 25


@pytest.fixture(scope="module")
def survey():
    rng = np.random.default_rng(5)
    z = np.concatenate([rng.uniform(0.01, 0.1, 20), rng.uniform(0.1, 1.5, N - 20)])
    a = rng.standard_normal((N, N)) * 0.02
    covariance = a @ a.T + np.diag(rng.uniform(0.1, 0.2, N) ** 2)
    mu = distance_modulus(z, 0.3, 0.7, 70.0) + np.linalg.cholesky(covariance) @ rng.standard_normal(N)
    return z, mu, covariance


def dense_log_likelihood(residual, covariance):
    return multivariate_normal.logpdf(residual, cov=covariance)


POINTS = np.array([[0.3, 0.7, 70.0], [0.25, 0.9, 68.0], [0.6, 0.1, 75.0]])


def test_absolute_scale_is_the_plain_gaussian(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance, distance_scale="absolute"), "curved_lcdm")
    assert lp.names == ("omega_m", "omega_lambda", "H0")
    assert lp.n_parameters == 3
    expected = [dense_log_likelihood(mu - distance_modulus(z, *p), covariance) for p in POINTS]
    np.testing.assert_allclose(lp.log_likelihood(POINTS), expected, atol=1e-7)
    log_prior = -np.log(1.5 * 2.5 * 60)
    np.testing.assert_allclose(lp(POINTS), np.array(expected) + log_prior, atol=1e-7)


def test_relative_scale_is_the_integral_over_the_offset(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance), "curved_lcdm")
    assert lp.names == ("omega_m", "omega_lambda")
    assert lp.n_parameters == 3  # the offset is counted
    for m, de, h0 in POINTS:
        residual = mu - distance_modulus(z, m, de, h0)
        best = -2 * dense_log_likelihood(residual, covariance)

        def density(offset, residual=residual, best=best):
            return np.exp(dense_log_likelihood(residual - offset, covariance) + 0.5 * best)

        total, _ = quad(density, -1, 1, epsabs=0, epsrel=1e-10, limit=300)
        assert lp.log_likelihood([[m, de]])[0] == pytest.approx(np.log(total) - 0.5 * best, abs=1e-7)


def test_precision_and_covariance_say_the_same(survey):
    z, mu, covariance = survey
    by_c = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance), "flat_lcdm")
    by_p = LogPosterior.build(Sample.from_arrays(z, mu, precision=np.linalg.inv(covariance)), "flat_lcdm")
    theta = np.array([[0.2], [0.5]])
    np.testing.assert_allclose(by_c.log_likelihood(theta), by_p.log_likelihood(theta), atol=1e-7)


def test_modes_are_a_covariance(survey):
    z, mu, covariance = survey
    modes = np.random.default_rng(2).standard_normal((N, 3)) * 0.05
    structured = Sample.from_arrays(z, mu, covariance=covariance, modes=modes, distance_scale="absolute")
    dense = Sample.from_arrays(z, mu, covariance=covariance + modes @ modes.T, distance_scale="absolute")
    a, b = (LogPosterior.build(s, "curved_lcdm") for s in (structured, dense))
    np.testing.assert_allclose(a.log_likelihood(POINTS), b.log_likelihood(POINTS), atol=1e-7)
    np.testing.assert_allclose(a.chi2(POINTS), b.chi2(POINTS), atol=1e-7)


@pytest.fixture(scope="module")
def calibrated(survey):
    """Magnitudes; the first rows are calibrators with a modulus of their own."""
    z, mu, covariance = survey
    known = np.full(N, np.nan)
    known[:N_CAL] = mu[:N_CAL] + np.linspace(-0.1, 0.1, N_CAL)
    arguments = {"covariance": covariance, "data_kind": "magnitude", "calibrator_modulus": known, "distance_scale": "calibrated"}
    return Sample.from_arrays(z, mu - 19.3, **arguments), known, covariance


def calibrated_residual(sample, known, point, magnitude):
    model = distance_modulus(sample.redshift, *point)
    return sample.data - np.where(np.isnan(known), model, known) - magnitude


def test_calibrators_fix_the_magnitude_not_the_expansion(calibrated):
    sample, known, covariance = calibrated
    lp = LogPosterior.build(sample, "curved_lcdm", {"absolute_magnitude": {"uniform": [-21, -17]}})
    assert lp.names == ("omega_m", "omega_lambda", "H0", "absolute_magnitude")
    theta = np.column_stack([POINTS, [-19.3, -19.25, -19.4]])
    expected = [dense_log_likelihood(calibrated_residual(sample, known, p[:3], p[3]), covariance) for p in theta]
    np.testing.assert_allclose(lp.log_likelihood(theta), expected, atol=1e-7)


def test_the_marginalised_magnitude_is_the_integral_and_can_be_drawn(calibrated):
    sample, known, covariance = calibrated
    sampled = LogPosterior.build(sample, "curved_lcdm", {"absolute_magnitude": {"uniform": [-21, -17]}})
    lp = LogPosterior.build(sample, "curved_lcdm")
    assert lp.marginalised == ("absolute_magnitude",)
    magnitude = np.linspace(-19.6, -19.0, 2001)
    grid = np.column_stack([np.tile(POINTS[0], (len(magnitude), 1)), magnitude])
    density = np.exp(sampled.log_likelihood(grid) - sampled.log_likelihood(grid).max())
    total = np.trapezoid(density, magnitude)
    assert lp.log_likelihood(POINTS[:1])[0] == pytest.approx(np.log(total) + sampled.log_likelihood(grid).max(), abs=1e-6)
    mean = np.trapezoid(density * magnitude, magnitude) / total
    sd = np.sqrt(np.trapezoid(density * (magnitude - mean) ** 2, magnitude) / total)
    assert lp.best_marginalised(POINTS[:1])["absolute_magnitude"][0] == pytest.approx(mean, abs=1e-6)
    draws = lp.draw_marginalised(np.tile(POINTS[0], (20000, 1)), np.random.default_rng(0))["absolute_magnitude"]
    assert draws.mean() == pytest.approx(mean, abs=5 * sd / np.sqrt(20000))
    assert draws.std() == pytest.approx(sd, rel=5 / np.sqrt(2 * 20000))


def test_a_gaussian_prior_on_the_magnitude_is_one_more_datum(calibrated):
    sample, known, covariance = calibrated
    mean, sd = -19.25, 0.03
    lp = LogPosterior.build(sample, "curved_lcdm", {"absolute_magnitude": {"normal": [mean, sd]}})
    ones = np.ones((N, N))
    expected = [dense_log_likelihood(calibrated_residual(sample, known, p, mean), covariance + sd**2 * ones) for p in POINTS]
    np.testing.assert_allclose(lp.log_likelihood(POINTS), expected, atol=1e-7)
    assert lp.marginalised == ("absolute_magnitude",)


def test_covariance_scale_multiplies_everything(survey):
    z, mu, covariance = survey
    base = {"covariance": covariance, "distance_scale": "absolute", "modes": np.full((N, 1), 0.03)}
    lp = LogPosterior.build(Sample.from_arrays(z, mu, **base, covariance_scale={"log_uniform": [0.5, 2]}), "curved_lcdm")
    assert lp.names[-1] == "covariance_scale"
    full = covariance + 0.03**2
    for s in (0.6, 1.0, 1.7):
        expected = [dense_log_likelihood(mu - distance_modulus(z, *p), s**2 * full) for p in POINTS]
        np.testing.assert_allclose(lp.log_likelihood(np.column_stack([POINTS, np.full(3, s)])), expected, atol=1e-7)


@pytest.mark.parametrize("scale", ["relative", "absolute"])
def test_free_scatter_is_the_covariance_with_it_added(survey, scale):
    """Agreement with a direct evaluation to 1e-6 in −2 ln L."""
    z, mu, covariance = survey
    lp = LogPosterior.build(
        Sample.from_arrays(z, mu, covariance=covariance, intrinsic={"uniform": [0, 0.5]}, distance_scale=scale), "curved_lcdm"
    )
    rng = np.random.default_rng(3)
    points = POINTS if scale == "absolute" else POINTS[:, :2]
    for sigma in np.concatenate([[0.0, 0.5], rng.uniform(0, 0.5, 12)]):
        added = Sample.from_arrays(z, mu, covariance=covariance + sigma**2 * np.eye(N), distance_scale=scale)
        expected = LogPosterior.build(added, "curved_lcdm").log_likelihood(points)
        got = lp.log_likelihood(np.column_stack([points, np.full(3, sigma)]))
        np.testing.assert_allclose(-2 * got, -2 * expected, atol=1e-6)


def test_structured_noise_and_free_scatter(survey):
    z, mu, _ = survey
    sigma = np.full(N, 0.12)
    modes = np.outer(np.linspace(-1, 1, N), [0.05, 0.02])
    lp = LogPosterior.build(Sample.from_arrays(z, mu, sigma=sigma, modes=modes, intrinsic={"uniform": [0, 0.3]}), "flat_lcdm")
    full = np.diag(sigma**2 + 0.2**2) + modes @ modes.T
    expected = LogPosterior.build(Sample.from_arrays(z, mu, covariance=full), "flat_lcdm").log_likelihood([[0.3]])
    np.testing.assert_allclose(lp.log_likelihood([[0.3, 0.2]]), expected, atol=5e-7)


def test_a_scatter_held_at_a_number_is_in_the_covariance(survey):
    z, mu, covariance = survey
    sample = Sample.from_arrays(z, mu, covariance=covariance, intrinsic={"uniform": [0, 0.5]})
    held = LogPosterior.build(sample, "flat_lcdm", {"intrinsic_scatter": 0.2})
    free = LogPosterior.build(sample, "flat_lcdm")
    assert held.names == ("omega_m",)
    np.testing.assert_allclose(held.log_likelihood([[0.3]]), free.log_likelihood([[0.3, 0.2]]), atol=5e-7)


def test_a_prior_that_reaches_below_zero_is_cut_and_normalised_again(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance, intrinsic={"normal": [0, 0.1]}), "flat_lcdm")
    assert lp.priors[1].low == 0.0
    total, _ = quad(lambda s: np.exp(lp.log_prior([[0.3, s]])[0]), 0, 1, epsabs=1e-10)
    assert total == pytest.approx(1.0, abs=1e-8)


def test_degrees_of_freedom_count_what_the_data_alone_decide(calibrated):
    sample, _, _ = calibrated
    assert LogPosterior.build(sample, "flat_lcdm").n_parameters == 3  # Ω_m, H0, and M with a flat prior
    gaussian = LogPosterior.build(sample, "flat_lcdm", {"absolute_magnitude": {"normal": [-19.3, 0.1]}})
    assert gaussian.n_parameters == 2  # the prior on M is a datum that M uses up


@pytest.mark.parametrize("sigma", [0.003, 0.11, 0.37])
def test_amplitudes_under_a_free_scatter_are_those_of_the_scatter_held(survey, sigma):
    z, mu, _ = survey
    errors = np.where(np.arange(N) % 2, 0.05, 0.15)
    noise = Noise(errors**2, modes=0.2 * (np.arange(N) < 20)[:, None], mode_names=("zero_point:low",))
    base = Sample.from_arrays(z, mu + 0.3 * (np.arange(N) < 20), sigma=errors, intrinsic={"uniform": [0, 0.5]})
    sample = Sample(**{k: getattr(base, k) for k in base.__dataclass_fields__} | {"noise": noise})
    free = LogPosterior.build(sample, "flat_lcdm")
    held = LogPosterior.build(sample, "flat_lcdm", {"intrinsic_scatter": sigma})
    name, theta = "zero_point:low", np.full((20000, 1), 0.3)
    assert free.best_marginalised([[0.3, sigma]])[name][0] == pytest.approx(held.best_marginalised([[0.3]])[name][0], abs=1e-7)
    both = np.column_stack([theta, np.full(20000, sigma)])
    draws = [lp.draw_marginalised(t, np.random.default_rng(1))[name] for lp, t in ((free, both), (held, theta))]
    assert draws[0].std() == pytest.approx(draws[1].std(), rel=5 / np.sqrt(2 * 20000))
    assert draws[0].mean() == pytest.approx(draws[1].mean(), abs=5 * draws[1].std() / np.sqrt(20000))


def test_amplitudes_outside_the_model_are_nan(survey):
    z, mu, covariance = survey
    sample = Sample.from_arrays(z, mu - 19.3, covariance=covariance, data_kind="magnitude", distance_scale="absolute")
    lp = LogPosterior.build(sample, "curved_lcdm", {"absolute_magnitude": {"normal": [-19.3, 0.1]}})
    assert np.isnan(lp.best_marginalised([[0.05, 1.9, 70.0]])["absolute_magnitude"][0])


def test_zero_points_get_a_posterior(survey):
    z, mu, _ = survey
    noise = Noise(np.full(N, 0.1**2), modes=0.05 * (np.arange(N) < 20)[:, None], mode_names=("zero_point:low",))
    base = Sample.from_arrays(z, mu + 0.3 * (np.arange(N) < 20), sigma=np.full(N, 0.1), distance_scale="absolute")
    sample = Sample(**{k: getattr(base, k) for k in base.__dataclass_fields__} | {"noise": noise})
    lp = LogPosterior.build(sample, "flat_lcdm", {"H0": 70.0})
    assert lp.marginalised == ("zero_point:low",)
    # One Gaussian datum: shift ~ N(0, 0.05²) and 20 residuals of error 0.1.
    residual = (sample.data - distance_modulus(z, 0.3, 0.7, 70.0))[:20]
    weight = 20 / 0.1**2
    expected = residual.mean() * weight / (weight + 1 / 0.05**2)
    assert lp.best_marginalised([[0.3]])["zero_point:low"][0] == pytest.approx(expected, abs=1e-8)
    draws = lp.draw_marginalised(np.full((20000, 1), 0.3), np.random.default_rng(1))["zero_point:low"]
    assert draws.std() == pytest.approx((weight + 1 / 0.05**2) ** -0.5, rel=5 / np.sqrt(40000))


def test_never_nan_and_excluded_models_are_minus_infinity(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance), "curved_lcdm")
    theta = np.array([[0.3, 0.7], [np.nan, 0.7], [0.05, 1.9], [5.0, 0.7], [np.inf, -np.inf]])
    value = lp(theta)
    assert np.isfinite(value[0])
    assert (value[1:] == -np.inf).all()
    assert lp.counts["excluded"] == 1
    assert (lp(theta[2:3]) == -np.inf).all()  # nothing usable in the batch


def test_fixed_parameters_are_held(survey):
    z, mu, covariance = survey
    sample = Sample.from_arrays(z, mu, covariance=covariance, distance_scale="absolute")
    free = LogPosterior.build(sample, "curved_wcdm")
    held = LogPosterior.build(sample, "curved_wcdm", {"w": -1, "H0": 70})
    assert held.names == ("omega_m", "omega_de")
    np.testing.assert_allclose(held.chi2([[0.3, 0.6]]), free.chi2([[0.3, 0.6, -1.0, 70.0]]), rtol=1e-12)


def test_radiation_changes_the_distances_by_what_it_weighs(survey):
    z, mu, covariance = survey
    sample = Sample.from_arrays(z, mu, covariance=covariance, distance_scale="absolute")
    without, with_ = (LogPosterior.build(sample, "flat_lcdm", radiation=r) for r in (False, True))
    difference = with_.distance_modulus([[0.3, 70.0]], z) - without.distance_modulus([[0.3, 70.0]], z)
    assert 1e-6 < np.abs(difference).max() < 1e-3


@pytest.mark.parametrize(
    ("scale", "model", "parameters", "words"),
    [
        ("relative", "flat_lcdm", {"H0": {"uniform": [50, 90]}}, "cannot be measured on a relative distance scale"),
        ("absolute", "flat_lcdm", {"omega_lambda": {"uniform": [0, 1]}}, "no free parameter omega_lambda"),
        ("absolute", "flat_lcdm", {"omega_x": 1}, "no such parameter"),
        ("absolute", "flat_lcdm", {"intrinsic_scatter": {"uniform": [0, 1]}}, "not part of this fit"),
        ("absolute", "flat_lcdm", {"omega_m": 0.3, "H0": 70}, "every parameter is held fixed"),
    ],
)
def test_what_cannot_be_fitted_is_refused_with_the_reason(survey, scale, model, parameters, words):
    z, mu, covariance = survey
    with pytest.raises(InputError, match=words):
        LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance, distance_scale=scale), model, parameters)


def test_all_refusals_come_at_once(survey):
    z, mu, covariance = survey
    with pytest.raises(InputErrors) as caught:
        LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance), "flat_lcdm", {"H0": 70, "w": -1})
    assert len(caught.value.errors) == 2


def test_residuals_of_the_truth_are_the_noise(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance, distance_scale="absolute"), "curved_lcdm")
    np.testing.assert_allclose(lp.residuals([0.3, 0.7, 70.0]), mu - distance_modulus(z, 0.3, 0.7, 70.0), atol=1e-9)


def test_residuals_on_a_relative_scale_have_the_best_offset_off(survey):
    z, mu, covariance = survey
    lp = LogPosterior.build(Sample.from_arrays(z, mu, covariance=covariance), "flat_lcdm")
    residual = lp.residuals([0.3])
    inverse = np.linalg.inv(covariance)
    assert inverse.sum(axis=0) @ residual == pytest.approx(0.0, abs=1e-6)
    assert residual @ inverse @ residual == pytest.approx(lp.chi2([[0.3]])[0], abs=1e-7)


MATTER = 0.3
BOUNCE = 1.0  # the redshift where E² vanishes
_A = 1 + BOUNCE
LAMBDA = (MATTER * _A**3 + (1 - MATTER) * _A**2) / (_A**2 - 1)  # above the line of no big bang: 1.733
BOUNCED = np.array([[MATTER, LAMBDA, 70.0]])


def posterior_up_to(z_max):
    z = np.linspace(0.05, z_max, 20)
    return LogPosterior.build(Sample.from_arrays(z, 40 + z, sigma=np.full(20, 0.1), distance_scale="absolute"), "curved_lcdm")


def test_distances_up_to_a_bounce():
    z = np.array([0.1, 0.5, 0.9, BOUNCE - 1e-6])
    expected = distance_modulus(z, MATTER, LAMBDA, 70.0)
    # The integrand rises like 1/√(1 − z): a fixed grid of 256 nodes is off by 0.02 mag.
    np.testing.assert_allclose(posterior_up_to(z[-1]).distance_modulus(BOUNCED, z)[0], expected, rtol=0, atol=1e-8)


def test_distances_end_at_a_bounce():
    z = np.array([0.1, 0.9, 1.1])
    assert np.isnan(posterior_up_to(1.5).distance_modulus(BOUNCED, z)).all()  # the prior of such data excludes the point
    mu = posterior_up_to(0.95).distance_modulus(BOUNCED, z)[0]
    # Data that end before it allow the point: it has distances up to their last redshift.
    np.testing.assert_allclose(mu[:2], distance_modulus(z[:2], MATTER, LAMBDA, 70.0), rtol=0, atol=1e-8)
    assert np.isnan(mu[2])
