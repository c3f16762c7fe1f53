"""Words for odds, and the likelihood-ratio test."""

import math

import pytest

from fitter.study.likelihood_ratio import likelihood_ratio, sigma_of
from fitter.study.odds import odds_sentence, strength, verdict


@pytest.mark.parametrize(
    ("two_log", "words"),
    [(1.9, "not worth more than a bare mention"), (2.1, "positive"), (6.1, "strong"), (10.1, "very strong"), (-10.1, "very strong")],
)
def test_kass_and_raftery(two_log, words):
    # Kass & Raftery 1995, 2 ln B: 0-2, 2-6, 6-10, > 10.
    assert strength(two_log / 2) == words


@pytest.mark.parametrize(
    ("odds", "words"),
    [(3.1, "not worth more than a bare mention"), (3.2, "substantial"), (10.1, "strong"), (31.7, "very strong"), (101, "decisive")],
)
def test_jeffreys(odds, words):
    # Jeffreys, B: 10^(1/2), 10, 10^(3/2), 100.
    assert strength(math.log(odds), "jeffreys") == words


def test_who_is_favoured():
    assert verdict(0.5) == (0, "not worth more than a bare mention")
    assert verdict(-2.0) == (-1, "positive")
    assert odds_sentence(-math.log(20), "wCDM", "ΛCDM") == "20 : 1 for ΛCDM, positive"
    assert odds_sentence(math.log(20), "wCDM", "ΛCDM") == "20 : 1 for wCDM, positive"
    assert odds_sentence(50 * math.log(10), "A", "B").startswith("10^50 : 1 for A")


@pytest.mark.parametrize(("delta", "dof", "sigma"), [(1, 1, 1), (4, 1, 2), (9, 1, 3), (2.2957, 2, 1), (6.1801, 2, 2), (11.8292, 2, 3)])
def test_sigma_of_a_likelihood_ratio(delta, dof, sigma):
    # Δχ² for 68.27, 95.45 and 99.73 %: 1, 4, 9 for one degree of freedom; 2.296, 6.180, 11.829 for two.
    found = likelihood_ratio(delta, dof)
    assert found["sigma"] == pytest.approx(sigma, abs=2e-4)
    assert found["p_value"] == pytest.approx([0.3173105, 0.0455003, 0.0026998][sigma - 1], rel=1e-3)
    assert found["boundary"] is None


def test_at_a_boundary_p_is_halved():
    free, edge = likelihood_ratio(4.0, 1), likelihood_ratio(4.0, 1, at_edge=1)
    assert edge["p_value"] == pytest.approx(free["p_value"] / 2)
    assert "half" in edge["boundary"]
    assert likelihood_ratio(0.0, 1, at_edge=1)["p_value"] == 1.0
    assert "too large" in likelihood_ratio(4.0, 2, at_edge=1)["boundary"]


def test_no_improvement_is_no_evidence():
    found = likelihood_ratio(-1e-9, 2)
    assert (found["statistic"], found["p_value"], found["sigma"]) == (0.0, 1.0, 0.0)


def test_sigma_beyond_the_smallest_number():
    # p = exp(-2000) is no double, its sigma is known all the same: ln [2 φ(s)/s] = -2000 at s = 63.176.
    assert sigma_of(-2000.0) == pytest.approx(63.1764, abs=1e-3)
