import numpy as np
import pytest
from scipy import stats

from fitter.inference.intervals import equal_tailed, highest_density, interval_words, one_sided

RNG = np.random.default_rng(1)
N = 200_000
GAUSS = RNG.standard_normal((4, N // 8, 2))
GAMMA = RNG.gamma(2.0, size=N)


def error(density, p):
    """Standard error of a sample quantile where the density is known."""
    return np.sqrt(p * (1 - p) / N) / density


def test_equal_tailed():
    i = equal_tailed(GAMMA, 0.9)
    for value, p in ((i.low, 0.05), (i.high, 0.95)):
        exact = stats.gamma(2).ppf(p)
        assert value == pytest.approx(exact, abs=4 * error(stats.gamma(2).pdf(exact), p))
    assert i.label == "90 % equal-tailed"


def test_highest_density_has_equal_density_at_its_ends():
    i = highest_density(GAMMA, 0.6827)
    pdf = stats.gamma(2).pdf
    assert stats.gamma(2).cdf(i.high) - stats.gamma(2).cdf(i.low) == pytest.approx(0.6827, abs=0.005)
    # The ends of the shortest interval converge as n^(−1/3) only.
    assert pdf(i.low) == pytest.approx(pdf(i.high), rel=0.12)
    wide = equal_tailed(GAMMA, 0.6827)
    assert i.high - i.low < wide.high - wide.low
    assert "highest-density" in i.label


def test_fits_with_intervals_of_two_kinds_are_told_apart():
    assert interval_words({"a": "equal_tailed", "b": "equal_tailed"}) == "equal-tailed 68.3 % intervals"
    mixed = interval_words({"a": "equal_tailed", "b": "highest_density", "c": "equal_tailed"})
    assert mixed == "68.3 % intervals (equal-tailed of a, c; highest-density of b)"


def test_one_sided():
    up, down = one_sided(GAUSS, 0.95, side="upper"), one_sided(GAUSS, 0.95, side="lower")
    assert up.high == pytest.approx(1.6449, abs=4 * error(0.1031, 0.95)) and up.low == -np.inf
    assert down.low == pytest.approx(-1.6449, abs=4 * error(0.1031, 0.95)) and down.high == np.inf
    with pytest.raises(ValueError, match="side"):
        one_sided(GAUSS, side="left")


def test_undefined_draws_are_left_out():
    x = np.append(GAMMA, [np.nan, np.inf])
    assert equal_tailed(x) == equal_tailed(GAMMA)
