"""Fits without a chain: quadrature and adaptive importance sampling agree with each other and with exact results."""

import numpy as np
import pytest

from fitter.inference.quadrature import integrate
from fitter.likelihood.posterior import LogPosterior
from fitter.sample.sample import Sample
from fitter.study import refit as module
from fitter.study.refit import WeightedDraws, refit, resample

SEED = np.random.SeedSequence(3)


@pytest.fixture(scope="module")
def posterior():
    rng = np.random.default_rng(8)
    z = np.sort(rng.uniform(0.02, 1.3, 300))
    truth = LogPosterior.build(Sample.from_arrays(z, z + 40, sigma=0.12), "flat_wcdm")
    mu = truth.simulate(np.array([[0.3, -1.0]]), rng)[0]
    return LogPosterior.build(Sample.from_arrays(z, mu, sigma=0.12), "flat_wcdm")


def test_importance_agrees_with_quadrature(posterior, monkeypatch):
    by_grid = refit(posterior, SEED)
    monkeypatch.setattr(module, "_ON_GRID", 0)
    by_draws = refit(posterior, SEED)
    assert "quadrature" in by_grid.marginals.method and "importance" in by_draws.marginals.method
    assert by_draws.marginals.effective > 20_000
    for name in posterior.names:
        a, b = by_grid.facts()["parameters"][name], by_draws.facts()["parameters"][name]
        # A quantile's standard error is √(p(1−p)/n) / density: at 2.5 % about 2.7 sd / √n.
        for key, width in {"mean": 1, "median": 1.3, "low68": 1.6, "high68": 1.6, "low95": 2.7, "high95": 2.7}.items():
            assert b[key] == pytest.approx(a[key], abs=4 * width * a["sd"] / np.sqrt(by_draws.marginals.effective)), (name, key)


def test_nodes_and_resampled_points_have_the_moments(posterior):
    fitted = refit(posterior, SEED)
    theta, weight = fitted.marginals.points()
    points = resample(fitted.marginals, 4000, SEED)
    for i, name in enumerate(posterior.names):
        assert weight @ theta[:, i] == pytest.approx(fitted.marginals.mean(name), abs=1e-10)
        assert points[:, i].mean() == pytest.approx(fitted.marginals.mean(name), abs=4 * fitted.marginals.sd(name) / np.sqrt(4000))


def test_weighted_draws_of_a_known_gaussian():
    x = np.linspace(-6, 6, 20_001)[:, None]
    weight = np.exp(-0.5 * x[:, 0] ** 2)
    draws = WeightedDraws(("a",), x, weight / weight.sum())
    np.testing.assert_allclose(draws.quantile("a", [0.1587, 0.5, 0.8413]), [-1, 0, 1], atol=2e-3)
    assert draws.sd("a") == pytest.approx(1, abs=1e-3)
    np.testing.assert_allclose(draws.cdf("a", [-9, 0, 9]), [0, 0.5, 1], atol=1e-3)


def test_hidden_offsets_move_locations_only(posterior):
    fitted = refit(posterior, SEED)
    open_, hidden = fitted.facts(), fitted.facts({"w": 0.4})
    assert hidden["parameters"]["omega_m"] == open_["parameters"]["omega_m"]
    for key, value in open_["parameters"]["w"].items():
        assert hidden["parameters"]["w"][key] == pytest.approx(value + (0 if key == "sd" else 0.4))


def test_the_points_of_a_grid_integrate_to_one(posterior):
    grid = integrate(posterior, refit(posterior, SEED).optimum)
    assert grid.points()[1].sum() == pytest.approx(1)
