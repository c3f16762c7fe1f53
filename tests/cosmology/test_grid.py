"""The Chebyshev grid: exact for polynomials, spectral for smooth functions."""

import numpy as np
import pytest

from fitter.cosmology.grid import Grid


@pytest.fixture
def grid():
    return Grid(1.7, 16)


def test_nodes_run_from_today_to_the_largest_redshift(grid):
    assert grid.z[0] == 0.0
    assert grid.z[-1] == pytest.approx(1.7, rel=1e-15)
    assert (np.diff(grid.u) > 0).all()


def test_polynomials_up_to_the_order_are_integrated_and_interpolated_exactly(grid):
    u = np.linspace(0, grid.u_max, 57)
    for degree in range(grid.order + 1):
        values = (grid.u / grid.u_max) ** degree
        antiderivative = grid.u_max / (degree + 1) * (grid.u / grid.u_max) ** (degree + 1)
        np.testing.assert_allclose(grid.antiderivative @ values, antiderivative, atol=1e-14)
        np.testing.assert_allclose(grid.interpolation(u) @ values, (u / grid.u_max) ** degree, atol=2e-14)


def test_interpolation_at_a_node_returns_the_node(grid):
    np.testing.assert_allclose(grid.interpolation(grid.u), np.eye(grid.order + 1), atol=1e-14)


def test_interpolation_reproduces_constants(grid):
    u = np.random.default_rng(0).uniform(0, grid.u_max, 200)
    np.testing.assert_allclose(grid.interpolation(u).sum(axis=1), 1.0, atol=1e-15 * grid.order)


def test_mean_to_node_has_the_limit_of_the_integrand_at_zero(grid):
    g = np.cos(grid.u)
    mean = grid.mean_to_node @ g
    assert mean[0] == g[0]
    np.testing.assert_allclose(mean[1:], np.sin(grid.u[1:]) / grid.z[1:], rtol=1e-14)


def test_the_tail_sees_what_the_grid_cannot_represent(grid):
    smooth, sharp = np.exp(-grid.u), 1.0 / (1e-3 + (grid.u - 0.4) ** 2)
    assert np.abs(grid.tail @ smooth).max() < 1e-14
    assert np.abs(grid.tail @ sharp).max() > 1.0


def test_coefficients_are_those_of_the_chebyshev_series(grid):
    coefficients = np.zeros(grid.order + 1)
    coefficients[[0, 3, grid.order]] = 1.0, -2.0, 0.5
    values = np.polynomial.chebyshev.chebval(grid.x, coefficients)
    np.testing.assert_allclose(grid.to_coefficients @ values, coefficients, atol=1e-14)
