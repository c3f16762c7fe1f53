"""Chebyshev nodes in u = ln(1+z): integration to every node, interpolation anywhere.

Source: Trefethen, L. N. 2013, Approximation Theory and Approximation Practice, SIAM (chapters 3, 5 and 19).
"""

from __future__ import annotations

from functools import cached_property

import numpy as np

from fitter.array_types import FloatArray

__all__ = ["Grid"]

N_TAIL = 3  # trailing coefficients that judge convergence; three, since a symmetric function skips every other one


class Grid:
    """Chebyshev–Lobatto nodes on [0, ln(1 + z_max)].

    Parameters
    ----------
    z_max : float
        Largest redshift that will be asked for.
    order : int
        K; there are K + 1 nodes, the first at z = 0, the last at z_max.
    """

    def __init__(self, z_max: float, order: int = 32) -> None:
        self.z_max, self.order = float(z_max), int(order)
        self.u_max = np.log1p(self.z_max)
        # x runs from −1 to 1; sin keeps the symmetric pairs exact.
        self.x = np.sin(0.5 * np.pi * np.arange(-order, order + 1, 2) / order)
        self.u = 0.5 * self.u_max * (1.0 + self.x)
        self.z = np.expm1(self.u)
        self.weights = np.where(np.arange(order + 1) % 2, -1.0, 1.0)  # barycentric
        self.weights[[0, -1]] *= 0.5

    @cached_property
    def to_coefficients(self) -> FloatArray:
        """(K+1, K+1): node values → Chebyshev coefficients."""
        j = np.arange(self.order + 1)
        # Node j stands at x = cos(π (K − j)/K).
        m = 2.0 / self.order * np.cos(np.pi * np.outer(j, self.order - j) / self.order)
        m[:, [0, -1]] *= 0.5
        m[[0, -1], :] *= 0.5
        return m

    @cached_property
    def tail(self) -> FloatArray:
        """(3, K+1): node values → the last three Chebyshev coefficients."""
        return np.ascontiguousarray(self.to_coefficients[-N_TAIL:])

    @cached_property
    def antiderivative(self) -> FloatArray:
        """(K+1, K+1): g at the nodes → ∫₀ᵘ g du′ at the nodes."""
        k = self.order
        # ∫T_n = T_{n+1}/(2(n+1)) − T_{n−1}/(2(n−1)); the constant makes the integral vanish at u = 0.
        raise_degree = np.zeros((k + 2, k + 1))
        raise_degree[1, 0] = 1.0
        raise_degree[2, 1] = 0.25
        for n in range(2, k + 1):
            raise_degree[n + 1, n] = 0.5 / (n + 1)
            raise_degree[n - 1, n] = -0.5 / (n - 1)
        values = np.polynomial.chebyshev.chebvander(self.x, k + 1)
        at_zero = (-1.0) ** np.arange(k + 2)
        return 0.5 * self.u_max * (values - at_zero) @ raise_degree @ self.to_coefficients

    @cached_property
    def mean_to_node(self) -> FloatArray:
        """(K+1, K+1): g at the nodes → (1/z) ∫₀ᵘ g du′, whose limit at z = 0 is g(0)."""
        m = self.antiderivative.copy()
        m[1:] /= self.z[1:, None]
        m[0] = 0.0
        m[0, 0] = 1.0
        return m

    def interpolation(self, u: FloatArray) -> FloatArray:
        """Return the (N, K+1) matrix that takes node values to values at `u`, (N,), by the barycentric formula."""
        x = 2.0 * np.asarray(u, float) / self.u_max - 1.0
        distance = x[:, None] - self.x
        row, column = np.nonzero(distance == 0.0)
        distance[row, column] = 1.0
        matrix = self.weights / distance
        matrix /= matrix.sum(axis=1, keepdims=True)
        matrix[row] = 0.0
        matrix[row, column] = 1.0
        return matrix
