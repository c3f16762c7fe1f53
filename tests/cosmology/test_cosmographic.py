"""The cosmographic series: its coefficients, how far it holds, and what it warns of."""

import numpy as np
import pytest

from fitter.cosmology import get_model
from fitter.cosmology.adaptive import exact_log_distance
from fitter.cosmology.cosmographic import REACH
from fitter.errors import InputError

MODEL = get_model("cosmographic")


def cosmographic_of(omega_m, w):
    """q0 and j0 of flat wCDM: q0 = Ω_m/2 + (1 + 3w) Ω_DE/2, j0 = 1 + 9/2 w (1 + w) Ω_DE."""
    omega_de = 1 - omega_m
    return np.array([0.5 * omega_m + 0.5 * (1 + 3 * w) * omega_de, 1 + 4.5 * w * (1 + w) * omega_de])


def test_luminosity_distance_to_third_order():
    # Visser 2004: D_L H0 / c = z + (1 - q0) z²/2 - (1 - q0 - 3 q0² + j0) z³/6, here q0 = -0.55, j0 = 1: 0.775 and -0.273750.
    z = np.array([0.1, 0.3])
    d_l = 10 ** (MODEL.log_distance(z, np.array([[-0.55, 1.0]]))[0] / 5) * z * (1 + z)
    np.testing.assert_allclose(d_l, z + 0.775 * z**2 - 1.6425 / 6 * z**3, rtol=1e-14)


@pytest.mark.parametrize(("omega_m", "w"), [(0.3, -1.0), (0.31, -0.8), (0.25, -1.1)])
def test_it_holds_as_far_as_it_says(omega_m, w):
    z = np.linspace(0.01, REACH, 40)
    exact = exact_log_distance(get_model("flat_wcdm"), np.array([omega_m, w]), np.log1p(z))
    error = np.abs(MODEL.log_distance(z, cosmographic_of(omega_m, w)[None])[0] - exact)
    assert error.max() < 0.01
    assert np.all(error[z < 0.1] < 2e-4)


def test_the_error_is_of_the_fourth_order():
    z = np.array([0.01, 0.02])
    exact = exact_log_distance(get_model("flat_wcdm"), np.array([0.3, -0.8]), np.log1p(z))
    error = MODEL.log_distance(z, cosmographic_of(0.3, -0.8)[None])[0] - exact
    # Relative to z the distance is wrong by z³: eight times for twice the redshift.
    assert error[1] / error[0] == pytest.approx(8.0, rel=0.1)


def test_warns_beyond_its_reach():
    assert MODEL.advice(REACH) == ()
    (text,) = MODEL.advice(1.1)
    assert "1.1" in text
    assert "keep" in text


def test_without_a_distance_there_is_no_model():
    z = np.array([0.0, 0.5, 1.0])
    f = MODEL.log_distance(z, np.array([[-0.5, 1.0], [2.0, 20.0]]))
    assert np.isfinite(f[0]).all()
    assert np.isnan(f[1]).any()


def test_it_has_no_expansion_rate():
    with pytest.raises(InputError, match="not an expansion rate"):
        MODEL.e_squared(np.array([0.1]), np.array([[-0.5, 1.0]]))
