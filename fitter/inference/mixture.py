"""A small mixture of multivariate Student-t components fitted to a cloud of points."""

from __future__ import annotations

from dataclasses import dataclass
from math import lgamma, log, pi

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray, IntArray

__all__ = ["StudentMixture", "blend", "fit_mixture"]


@dataclass(frozen=True)
class StudentMixture:
    """Density Σ_k weight_k · t_ν(x; mean_k, L_k L_kᵀ).

    Parameters
    ----------
    weights : (K,) ndarray
    means : (K, d) ndarray
    factors : (K, d, d) ndarray
        Lower Cholesky factors L_k of the scale matrices.
    inverses : (K, d, d) ndarray
        Their inverses.
    nu : float
        Degrees of freedom.
    """

    weights: FloatArray
    means: FloatArray
    factors: FloatArray
    inverses: FloatArray
    nu: float

    @classmethod
    def of_factors(cls, weights: FloatArray, means: FloatArray, factors: ArrayLike, nu: float) -> StudentMixture:
        """Make a mixture of its Cholesky factors, which are inverted here."""
        lower = np.asarray(factors, np.float64)
        return cls(weights, means, lower, np.asarray(np.linalg.inv(lower), np.float64), nu)

    def log_density(self, x: FloatArray) -> FloatArray:
        """Return the ln density, (M,), at the points `x`, (M, d)."""
        joint, _ = self._joint(x)
        top = joint.max(axis=0)
        return top + np.log(np.exp(joint - top).sum(axis=0))

    def draw(self, random: np.random.Generator | np.random.RandomState, size: int) -> FloatArray:
        """Return `size` independent draws, (size, d).

        Parameters
        ----------
        random : numpy.random.RandomState or Generator
        size : int
        """
        d = self.means.shape[1]
        which = np.searchsorted(np.cumsum(self.weights)[:-1], random.uniform(size=size), side="right")
        z = random.normal(size=(size, d)) * np.sqrt(self.nu / random.chisquare(self.nu, size=(size, 1)))
        return self.means[which] + (self.factors[which] @ z[:, :, None])[:, :, 0]

    def _joint(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """ln(weight × density) of every component, (K, M), and squared distances, (K, M)."""
        d = x.shape[1]
        white = (x - self.means[:, None, :]) @ self.inverses.transpose(0, 2, 1)
        distance = np.einsum("kni,kni->kn", white, white)
        log_det = np.log(np.einsum("kii->ki", self.inverses)).sum(axis=1)
        constant = lgamma((self.nu + d) / 2) - lgamma(self.nu / 2) - d / 2 * log(self.nu * pi)
        height = np.log(self.weights) + log_det + constant
        return height[:, None] - (self.nu + d) / 2 * np.log1p(distance / self.nu), distance


def blend(first: StudentMixture, second: StudentMixture, share: float) -> StudentMixture:
    """Return the mixture of two mixtures (of the same ν), the second with the weight `share`."""
    return StudentMixture(
        np.concatenate([(1 - share) * first.weights, share * second.weights]),
        np.concatenate([first.means, second.means]),
        np.concatenate([first.factors, second.factors]),
        np.concatenate([first.inverses, second.inverses]),
        first.nu,
    )


def fit_mixture(
    points: FloatArray,
    components: int,
    *,
    nu: float = 5.0,
    iterations: int = 3,
    broad: float = 0.0,
    ridge: float = 0.003,
    bisect: bool = False,
) -> StudentMixture:
    """Fit a mixture by expectation–maximisation from a fixed start.

    The start cuts the cloud into equal parts, so the result is a function of the points alone: into slices along
    its longest axis (of the correlation matrix), or by halving every part along its own longest axis, which follows curved sheets
    but needs more points. For a proposal the start itself will do (``iterations=0``): it need not be the best fit.

    Parameters
    ----------
    points : (M, d) ndarray
        May be degenerate, even M copies of one point.
    components : int
        A power of two if `bisect`.
    nu : float
        Degrees of freedom of every component.
    iterations : int
        EM steps after the start.
    broad : float
        Weight of one more component, with the mean and covariance of the whole cloud. It keeps the density from being
        far too low in the tails.
    ridge : float
        Share of the whole cloud's covariance added to every component, which keeps one from collapsing on few points. More of it makes
        the components too thick for posteriors that are thin curved sheets.
    bisect : bool
        The second kind of start.

    Returns
    -------
    StudentMixture

    Notes
    -----
    EM for Student-t components with fixed ν: Peel & McLachlan 2000, Statistics and Computing 10, 339.
    """
    m, d = points.shape
    centre = points.mean(axis=0)
    scale = points.std(axis=0)
    # A coordinate without spread gets a tiny one of its own size: its proposals then stay where it is.
    scale = np.where(scale > 0, scale, 1e-9 * (np.abs(centre) + 1.0))
    y = (points - centre) / scale
    whole = y.T @ y / m + 1e-9 * np.eye(d)
    part = _bisections(y, components) if bisect else _slices(y, components, whole)
    share = (part == np.arange(components)[:, None]).astype(float)
    pull = np.ones_like(share)
    for step in range(iterations + 1):
        fitted = _maximisation(y, share, pull, ridge * whole, nu)
        if step < iterations:
            joint, distance = fitted._joint(y)
            share = np.exp(joint - joint.max(axis=0))
            share /= share.sum(axis=0)
            pull = (nu + d) / (nu + distance)
    if broad > 0:
        fitted = _with_broad(fitted, whole, broad)
    grow = scale[:, None]
    return StudentMixture(fitted.weights, centre + fitted.means * scale, fitted.factors * grow, fitted.inverses / grow.T, nu)


def _slices(y: FloatArray, components: int, whole: FloatArray) -> IntArray:
    """Part of every point: slices of equal count along the longest axis."""
    axis = np.linalg.eigh(whole)[1][:, -1]
    rank = np.argsort(np.argsort(y @ axis, kind="stable"), kind="stable")
    return rank * components // len(y)


def _bisections(y: FloatArray, components: int) -> IntArray:
    """Part of every point: halves of halves, each cut across its own longest axis."""
    part = np.zeros(len(y), dtype=int)
    for _ in range(int(components).bit_length() - 1):
        finer = 2 * part
        for k in np.unique(part):
            rows = np.flatnonzero(part == k)
            off = y[rows] - y[rows].mean(axis=0)
            axis = np.linalg.eigh(off.T @ off)[1][:, -1]
            finer[rows[np.argsort(off @ axis, kind="stable")[len(rows) // 2 :]]] += 1
        part = finer
    return part


def _with_broad(fitted: StudentMixture, whole: FloatArray, weight: float) -> StudentMixture:
    broad = StudentMixture.of_factors(np.ones(1), np.zeros((1, len(whole))), np.linalg.cholesky(whole)[None], fitted.nu)
    return blend(fitted, broad, weight)


def _maximisation(y: FloatArray, share: FloatArray, pull: FloatArray, floor: FloatArray, nu: float) -> StudentMixture:
    """Weights, means and scale matrices from responsibilities, (K, M), and Student-t weights, (K, M)."""
    m, d = y.shape
    count = share.sum(axis=1) + 1e-6
    heavy = share * pull
    total = heavy.sum(axis=1) + 1e-9
    means = heavy @ y / total[:, None]
    from_mean = y - means[:, None, :]
    scatter = (heavy[:, :, None] * from_mean).transpose(0, 2, 1) @ from_mean / count[:, None, None]
    factors = np.linalg.cholesky(scatter + floor)
    weights = (count + 0.01 * m) / (count + 0.01 * m).sum()
    return StudentMixture.of_factors(weights, means, factors, nu)
