"""Derived parameters: closed forms, and what does not exist stays NaN. Published values are in tests/outside."""

import numpy as np
import pytest

from fitter.constants import GYR_S, hubble_si
from fitter.cosmology import get_model
from fitter.cosmology.derived import age_gyr, deceleration, derived, derived_names


def one(name, *theta, h0=None):
    return {k: v[0] for k, v in derived(get_model(name), np.array([theta]), h0=None if h0 is None else np.array([h0])).items()}


def test_flat_lcdm_has_the_closed_forms():
    got = one("flat_lcdm", 0.3, h0=70.0)
    assert got["omega_lambda"] == pytest.approx(0.7)
    assert got["q0"] == pytest.approx(-0.55, abs=1e-14)
    assert got["z_acceleration"] == pytest.approx((2 * 0.7 / 0.3) ** (1 / 3) - 1, abs=1e-13)
    assert got["z_equality"] == pytest.approx((0.7 / 0.3) ** (1 / 3) - 1, abs=1e-13)
    closed = 2 / (3 * np.sqrt(0.7)) * np.arcsinh(np.sqrt(0.7 / 0.3)) / hubble_si(70.0) / GYR_S
    assert got["age_gyr"] == pytest.approx(closed, rel=1e-9)


@pytest.mark.parametrize(("omega_m", "omega_lambda", "h0_t0"), [(1.0, 0.0, 2 / 3), (1e-12, 0.0, 1.0)])
def test_ages_of_matter_only_and_empty_universes(omega_m, omega_lambda, h0_t0):
    age = age_gyr(get_model("curved_lcdm"), np.array([[omega_m, omega_lambda]]), np.array([70.0]))
    assert age[0] * hubble_si(70.0) * GYR_S == pytest.approx(h0_t0, rel=1e-6)


def test_constant_w_epochs_have_the_closed_forms():
    got = one("flat_wcdm", 0.264, -0.8)
    assert got["z_acceleration"] == pytest.approx((-(1 - 2.4) * 0.736 / 0.264) ** (1 / 2.4) - 1, abs=1e-10)
    assert got["z_equality"] == pytest.approx((0.736 / 0.264) ** (1 / 2.4) - 1, abs=1e-10)


def test_what_does_not_exist_is_nan():
    assert np.isnan(one("flat_lcdm", 1.0)["z_acceleration"])  # matter only never accelerates
    assert np.isnan(one("curved_lcdm", 0.1, 1.9, h0=70.0)["age_gyr"])  # no big bang
    assert np.isnan(one("flat_wcdm", 0.3, -0.2)["z_acceleration"])  # w above −1/3 does not accelerate


def test_epochs_before_a_bounce_are_nan():
    # E² < 0 between z = 0.63 and the past: both families say so, with radiation and without.
    assert np.isnan(one("curved_lcdm", 0.1, 1.7)["z_acceleration"])
    assert np.isnan(one("curved_lcdm", 0.1, 1.7)["z_equality"])
    assert np.isnan(one("curved_wcdm", 0.1, 1.7, -1.0001)["z_acceleration"])


def test_no_scale_gives_nothing_that_needs_one():
    assert "age_gyr" not in one("flat_lcdm", 0.3)
    assert set(one("curved_lcdm", 0.3, 0.7, h0=70.0)) == set(derived_names(get_model("curved_lcdm"), True))


def test_deceleration_is_the_logarithmic_slope_of_the_expansion():
    model, theta, z = get_model("curved_w0wa"), np.array([[0.3, 0.6, -0.8, 0.4]]), np.array([0.0, 0.5, 1.5])
    h = 1e-5
    up, down = (np.log(model.e_squared(np.expm1(np.log1p(z) + s), theta, 1e-4)) for s in (h, -h))
    np.testing.assert_allclose(deceleration(model, z, theta, 1e-4), -1 + (up - down) / (4 * h), atol=1e-8)
