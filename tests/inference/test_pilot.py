import numpy as np
import pytest

from fitter.inference.optimum import find_optimum
from fitter.inference.pilot import pilot_mixture

SEED = np.random.SeedSequence(4)


def importance(target, mixture, n=100_000):
    """ln of the integral of the target and its error, and the share of effective draws."""
    x = mixture.draw(np.random.RandomState(0), n)
    log_w = target(x) - mixture.log_density(x)
    w = np.exp(log_w - log_w.max())
    mean = w.mean()
    return np.log(mean) + log_w.max(), w.std() / mean / np.sqrt(n), w.sum() ** 2 / (w**2).sum() / n


@pytest.mark.parametrize(
    "name, log_integral",
    [
        ("banana", np.log(2 * np.pi * 0.5)),
        ("two_modes", np.log(2 * np.pi * 1.5)),
        ("hard_edges", np.log(-np.expm1(-2) / 2 * -np.expm1(-0.5))),
    ],
)
def test_pilot_covers_the_whole_posterior(doubles, name, log_integral):
    target = getattr(doubles, name)()
    mixture = pilot_mixture(target, find_optimum(target, SEED), SEED)
    found, error, efficiency = importance(target, mixture)
    box = sum(np.log(p.width) for p in target.priors)
    assert found + box == pytest.approx(log_integral, abs=4.5 * error)
    assert efficiency > 0.3


def test_repeats_itself(doubles):
    target = doubles.banana()
    optimum = find_optimum(target, SEED)
    a, b = (pilot_mixture(target, optimum, np.random.SeedSequence(4)) for _ in range(2))
    np.testing.assert_array_equal(a.factors, b.factors)


def test_narrow_posterior_in_a_wide_prior(doubles):
    target = doubles.Double(lambda t: -0.5 * (((t - 3) / 1e-4) ** 2).sum(axis=1), [(-1000, 1000)] * 3)
    mixture = pilot_mixture(target, find_optimum(target, SEED), SEED)
    assert importance(target, mixture)[2] > 0.3
