import numpy as np
import pytest

from fitter.errors import InputError
from fitter.inference.optimum import find_optimum
from fitter.inference.profile import profile_intervals, profile_likelihood
from fitter.likelihood.priors import Normal

SEED = np.random.SeedSequence(7)


def test_gaussian(doubles):
    target = doubles.gaussian(3, 0.9)
    found = find_optimum(target, SEED)
    np.testing.assert_allclose(found.theta, 0, atol=1e-7)
    assert found.chi2 < 1e-12
    # Differences of a quadratic are exact up to rounding.
    np.testing.assert_allclose(found.covariance, np.linalg.inv(target.function.precision), rtol=1e-6)
    assert found.agreeing == found.starts
    assert found.values == dict(zip(target.names, found.theta, strict=True))


def test_banana_chi2_to_1e_6(doubles):
    assert find_optimum(doubles.banana(), SEED).chi2 < 1e-6


def test_higher_of_two_modes(doubles):
    # ln density 0 at (3, 3), ln 2 at (−3, −3).
    found = find_optimum(doubles.two_modes(), SEED)
    np.testing.assert_allclose(found.theta, -3, atol=1e-6)
    assert found.agreeing < found.starts


def test_maximum_in_a_corner_of_the_prior(doubles):
    found = find_optimum(doubles.hard_edges(), SEED)
    np.testing.assert_array_equal(found.theta, [0, 0])
    assert found.at_edge == ("x0", "x1")
    assert np.all(np.linalg.eigvalsh(found.covariance) > 0)
    assert np.all(found.errors <= [1 / np.sqrt(12) * 1.05, 0.5 / np.sqrt(12) * 1.05])


def test_maximum_beside_an_excluded_region(doubles):
    found = find_optimum(doubles.walled(), SEED)
    assert found.chi2 == pytest.approx(2 * 0.01 / 0.09, abs=1e-4)
    np.testing.assert_allclose(found.theta, 0.5, atol=0.01)


def test_deterministic(doubles):
    a, b = (find_optimum(doubles.banana(), np.random.SeedSequence(3)) for _ in range(2))
    np.testing.assert_array_equal(a.theta, b.theta)
    np.testing.assert_array_equal(a.covariance, b.covariance)


def test_impossible_prior(doubles):
    target = doubles.Double(lambda t: np.full(len(t), -np.inf), [(0, 1)])
    with pytest.raises(InputError, match="possible model"):
        find_optimum(target, SEED)


def test_profile_of_a_gaussian(doubles):
    target = doubles.gaussian(3, 0.9)
    optimum = find_optimum(target, SEED)
    for interval in profile_intervals(target, optimum):
        # Unit marginal variances: profile and marginal widths agree.
        half = np.sqrt(interval.delta)
        assert interval.low == pytest.approx(-half, abs=1e-5)
        assert interval.high == pytest.approx(half, abs=1e-5)
    np.testing.assert_allclose(profile_likelihood(target, optimum, "x1", [0.5, -3]), [0.25, 9], rtol=1e-6)


def test_profile_of_a_banana(doubles):
    target = doubles.banana()
    one = {(i.name, i.delta): i for i in profile_intervals(target, find_optimum(target, SEED))}
    assert one["x0", 1].high == pytest.approx(1, abs=1e-5)
    # x1 below 0: x0 = 0, (x1 / 0.5)² = Δ. Above: min over x0 of x0² + 4 (x1 − x0²)² = x1 − 1/16 for x1 > 1/8.
    assert one["x1", 4].low == pytest.approx(-1, abs=1e-5)
    assert one["x1", 1].high == pytest.approx(1 + 1 / 16, abs=1e-5)
    assert one["x1", 4].high == pytest.approx(4 + 1 / 16, abs=1e-5)


def test_profile_without_a_limit(doubles):
    # The likelihood knows nothing of x1, whose normal prior has no end, and limits x0 from above only.
    target = doubles.Double(lambda t: -0.5 * np.maximum(t[:, 0], 0) ** 2, [(-np.inf, np.inf)] * 2)
    target.priors = (Normal(0.5, 2.0), Normal(3.0, 1.0))
    target.log_prior = lambda t: target.priors[0].log_density(t[:, 0]) + target.priors[1].log_density(t[:, 1])
    x0, x1 = (i for i in profile_intervals(target, find_optimum(target, SEED)) if i.delta == 1)
    assert x0.low == -np.inf and x0.high == pytest.approx(1, abs=1e-5)
    assert (x1.low, x1.high, x1.low_at_edge, x1.high_at_edge) == (-np.inf, np.inf, False, False)


def test_profile_of_a_higher_peak_that_the_prior_disfavours(doubles):
    # Likelihood peaks at 0 and, e² times as high, at 4; the prior has the posterior's maximum at the lower one.
    target = doubles.Double(lambda t: np.logaddexp(-0.5 * t[:, 0] ** 2, 2 - 0.5 * (t[:, 0] - 4) ** 2), [(-np.inf, np.inf)])
    target.priors = (Normal(0.0, 0.7),)
    target.log_prior = lambda t: target.priors[0].log_density(t[:, 0])
    optimum = find_optimum(target, SEED)
    assert abs(optimum.theta[0]) < 1
    for interval in profile_intervals(target, optimum):
        top = target.function(np.array([[interval.best]]))[0]
        ends = target.function(np.array([[interval.low], [interval.high]]))
        assert interval.best == pytest.approx(4, abs=0.01)
        np.testing.assert_allclose(2 * (top - ends), interval.delta, rtol=1e-5)


def test_profile_stops_at_the_prior(doubles):
    target = doubles.hard_edges()
    wide = [i for i in profile_intervals(target, find_optimum(target, SEED)) if i.delta == 4]
    assert (wide[0].low, wide[0].low_at_edge) == (0, True)
    # −2 ln L rises by 4 x0 and 2 x1: 4 is reached at the upper bound of x0 and beyond that of x1.
    assert wide[1].high == 0.5 and wide[1].high_at_edge
