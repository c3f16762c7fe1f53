"""The shape f(u): its limits, what lies outside the prior, and the adaptive panels behind it."""

import numpy as np
import pytest

from fitter.cosmology import MODELS, get_model
from fitter.cosmology.adaptive import exact_log_distance
from fitter.cosmology.distances import curved_ratio, log_distance
from fitter.cosmology.grid import Grid
from fitter.errors import InputError

TYPICAL = {"omega_m": 0.3, "omega_lambda": 0.75, "omega_de": 0.65, "w": -0.9, "w0": -0.8, "wa": -0.7, "q0": -0.55, "j0": 1.0}


def typical(model):
    return np.array([[TYPICAL[p.name] for p in model.parameters]])


@pytest.mark.parametrize("name", MODELS)
def test_f_starts_at_zero_and_is_resolved_by_the_grid(name):
    model, grid = get_model(name), Grid(2.3, 32)
    f, tail, inside = log_distance(model, typical(model), grid)
    assert inside.all()
    assert f[0, 0] == pytest.approx(0.0, abs=1e-15)
    assert tail[0] < 1e-9


@pytest.mark.parametrize("name", MODELS)
def test_panels_agree_with_the_grid(name):
    model, grid = get_model(name), Grid(2.3, 64)
    u = np.log1p(np.geomspace(1e-4, 2.3, 80))
    f, _, _ = log_distance(model, typical(model), grid)
    exact = exact_log_distance(model, typical(model)[0], u)
    np.testing.assert_allclose(grid.interpolation(u) @ f[0], exact, atol=1e-12)


def test_the_curved_ratio_is_one_function_across_zero():
    x = np.array([-9.0, -2.0 - 1e-12, -2.0 + 1e-12, -1e-9, 0.0, 1e-9, 2.0 - 1e-12, 2.0 + 1e-12, 30.0])
    root = np.sqrt(np.abs(x))
    with np.errstate(invalid="ignore"):
        expected = np.where(x > 0, np.sinh(root), np.sin(root)) / root
    expected[4] = 1.0
    np.testing.assert_allclose(curved_ratio(x), expected, rtol=1e-14)


def test_no_big_bang_within_the_data_is_outside():
    model, grid = get_model("curved_lcdm"), Grid(2.0, 32)
    theta = np.array([[0.1, 1.9], [0.3, 0.7]])
    _, _, inside = log_distance(model, theta, grid)
    assert inside.tolist() == [False, True]
    assert exact_log_distance(model, theta[0], np.log1p(np.array([0.1, 2.0]))) is None


def test_an_antipode_within_the_data_is_outside():
    # Nearly empty of matter and loitering: closed, and the line of sight goes round.
    model, grid = get_model("curved_lcdm"), Grid(2.5, 64)
    theta = np.array([[0.02, 1.153]])
    u = np.log1p(np.linspace(0.1, 2.5, 30))
    exact = exact_log_distance(model, theta[0], u)
    _, tail, inside = log_distance(model, theta, grid)
    assert exact is None
    assert not inside[0] or tail[0] == np.inf


@pytest.mark.parametrize("below", [1e-3, 1e-6, 1e-9])
def test_panels_follow_a_model_that_loiters(below):
    """Just below the no-big-bang line for Ω_m = 0.3: against 20,000 Gauss–Legendre points on each of 40 geometric panels."""
    model = get_model("curved_lcdm")
    omega_m = 0.3
    border = 4 * omega_m * np.cosh(np.arccosh((1 - omega_m) / omega_m) / 3) ** 3
    theta = np.array([omega_m, border * (1 - below)])
    u = np.log1p(np.array([0.4, 0.9]))
    exact = exact_log_distance(model, theta, u)
    # Double root of E² at the border: dE²/dz = 0.
    roots = np.roots([omega_m, 1 - omega_m - theta[1], 0, theta[1]])
    dip = np.log(roots[np.abs(roots.imag) < 1e-1].real.max())
    node, weight = np.polynomial.legendre.leggauss(200)
    distance = []
    for end in u:
        edges = np.unique(
            np.clip(np.concatenate([dip - np.geomspace(1e-12, 2, 60), [dip], dip + np.geomspace(1e-12, 2, 60), [0, end]]), 0, end)
        )
        mid, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * np.diff(edges)
        points = mid[:, None] + half[:, None] * node
        e2 = model.e_squared(np.expm1(points.ravel()), theta[None])[0].reshape(points.shape)
        distance.append((half[:, None] * weight * np.exp(points) / np.sqrt(e2)).sum())
    distance = np.array(distance)
    x = model.omega_k(theta[None])[0] * distance**2
    np.testing.assert_allclose(exact, 5 * np.log10(distance / np.expm1(u) * curved_ratio(x)), atol=1e-9)


def test_an_unknown_model_is_named_with_the_known_ones():
    with pytest.raises(InputError, match="no such model.*flat_wcmd.*curved_lcdm"):
        get_model("flat_wcmd")
