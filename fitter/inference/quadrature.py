"""The posterior by quadrature: adaptive cells over the prior, with an error of its own.

The prior box is cut around the optimum; each cell holds a tensor Gauss–Legendre rule, and the decay of its Legendre coefficients says
where, and along which axis, to cut again. Points beside the cells, and others of which the caller knows, tell where a cell has overlooked
something (`fitter.inference.probes`); they only add cells, so that a wrong chain that names them cannot pass its error on.

References
----------
.. [1] Davis, P. J. & Rabinowitz, P., Methods of Numerical Integration, section 5.9 (adaptive cubature).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray, IntArray
from fitter.inference.probes import Probes, across_the_faces
from fitter.inference.target import Place, Target

__all__ = ["MAX_DIMENSIONS", "GridPosterior", "integrate"]

MAX_DIMENSIONS = 4
_POINTS = {1: 16, 2: 10, 3: 7, 4: 5}  # Gauss–Legendre points along each axis of a cell
_BATCH = 65_536
_TAIL_PROBABILITY = 1e-12  # where a prior without an end is cut off
_CUTS = (2.0, 7.0)  # first cuts, in Hessian errors from the optimum
_BUDGET = {1: 1_000_000, 2: 1_000_000, 3: 3_000_000, 4: 500_000}


@dataclass(frozen=True)
class _Cells:
    """C cells of a d-dimensional box, and the density at their nodes."""

    low: FloatArray  # (C, d)
    high: FloatArray  # (C, d)
    value: FloatArray  # (C, n, …, n), density over its maximum
    mass: FloatArray  # (C,)
    tail: FloatArray  # (C, d), mass that the trailing coefficients along each axis stand for

    @property
    def volume(self) -> FloatArray:
        """(C,)."""
        return np.prod(self.high - self.low, axis=1)

    @property
    def error(self) -> FloatArray:
        """(C,) error of each cell's mass.

        A rule of n points integrates up to degree 2n − 1. Where coefficients fall geometrically, what it misses is to the last
        coefficient as that is to the first; where they do not fall at all, it is the coefficient itself.
        """
        worst = self.tail.max(axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            falling = np.where(self.mass > 0, np.minimum(worst / self.mass, 1.0), 1.0)
        return worst * falling

    def join(self, other: _Cells, keep: IntArray) -> _Cells:
        fields = (f for f in self.__dataclass_fields__)
        return _Cells(*(np.concatenate([getattr(self, f)[keep], getattr(other, f)]) for f in fields))


class _Rule:
    """A tensor Gauss–Legendre rule with n points on each of d axes."""

    def __init__(self, dimensions: int) -> None:
        self.d, self.n = dimensions, _POINTS[dimensions]
        self.node, self.weight = legendre.leggauss(self.n)
        k = np.arange(self.n)
        # Node values → Legendre coefficients, along one axis.
        self.transform = legendre.legvander(self.node, self.n - 1).T * self.weight * (k[:, None] + 0.5)
        # Node values → ∫ from −1 up to x, through the same coefficients: see `below`.
        self._mesh = np.stack(np.meshgrid(*[self.node] * self.d, indexing="ij"), axis=-1).reshape(-1, self.d)

    def evaluate(self, density: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray) -> _Cells:
        points = low[:, None] + 0.5 * (high - low)[:, None] * (1.0 + self._mesh)
        value = density(points.reshape(-1, self.d)).reshape((len(low),) + (self.n,) * self.d)
        volume = np.prod(0.5 * (high - low), axis=1)
        mass = volume * self._contract(value, keep=None)
        tail = np.stack([volume * self._tail(value, axis) for axis in range(self.d)], axis=1)
        return _Cells(low, high, value, mass, tail)

    def _contract(self, value: FloatArray, keep: int | None) -> FloatArray:
        """Integrate over all axes but `keep`, on [−1, 1]."""
        for axis in reversed(range(self.d)):
            if axis != keep:
                value = np.tensordot(value, self.weight, axes=(axis + 1, 0))
        return value

    def marginal(self, cells: _Cells, axis: int) -> FloatArray:
        """(C, n) integrals over the other axes at each node of one axis."""
        others = np.prod(np.delete(0.5 * (cells.high - cells.low), axis, axis=1), axis=1)
        return self._contract(cells.value, axis) * others[:, None]

    def _tail(self, value: FloatArray, axis: int) -> FloatArray:
        """Mass that the last two coefficients along an axis stand for."""
        last = np.tensordot(value, self.transform[-2:], axes=(axis + 1, 1))
        return self._contract_abs(np.abs(last).max(axis=-1))

    def _contract_abs(self, value: FloatArray) -> FloatArray:
        for _ in range(self.d - 1):
            value = value @ self.weight
        return 2.0 * value

    def below(self, marginal: FloatArray, x: FloatArray) -> FloatArray:
        """(C,) or (C, M) integral of node values (C, n) from −1 to x ∈ [−1, 1], (C, M)."""
        coefficients = marginal @ self.transform.T
        values = legendre.legvander(x, self.n)  # (C, M, n+1)
        k = np.arange(1, self.n)
        rising = np.empty(x.shape + (self.n,))
        rising[..., 0] = x + 1.0
        # ∫ P_k = (P_{k+1} − P_{k−1}) / (2k + 1), zero at −1.
        rising[..., 1:] = (values[..., 2:] - values[..., :-2]) / (2 * k + 1)
        return np.einsum("cmk,ck->cm", rising, coefficients)


@dataclass(frozen=True)
class GridPosterior:
    """A normalised posterior on adaptive cells.

    Attributes
    ----------
    names : tuple of str
    log_evidence, log_evidence_error : float
        ln Z, and the error that the rule estimates of itself.
    evaluations : int
    converged : bool
        Whether the error came below the tolerance within the allowed evaluations.
    """

    names: tuple[str, ...]
    log_evidence: float
    log_evidence_error: float
    evaluations: int
    converged: bool
    _cells: _Cells
    _rule: _Rule
    method = "adaptive Gauss–Legendre quadrature"

    @property
    def cdf_error(self) -> float:
        """Bound on the error of `cdf`: the relative error of the whole mass."""
        return self.log_evidence_error

    def cdf(self, name: str, x: ArrayLike) -> FloatArray:
        """Marginal cumulative distribution at x, (M,)."""
        x = np.atleast_1d(np.asarray(x, float))
        low, high, marginal = self._strips(self.names.index(name))
        local = np.clip(2 * (x - low) / (high - low) - 1, -1, 1)
        return (self._rule.below(marginal, local) * 0.5 * (high - low)).sum(axis=0) / self._cells.mass.sum()

    def _strips(self, axis: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Cells with the same interval along an axis, added up: ends (S, 1), marginal node values (S, n)."""
        ends = np.stack([self._cells.low[:, axis], self._cells.high[:, axis]], axis=1)
        strip, which = np.unique(ends, axis=0, return_inverse=True)
        marginal = np.zeros((len(strip), self._rule.n))
        np.add.at(marginal, which.ravel(), self._rule.marginal(self._cells, axis))
        return strip[:, :1], strip[:, 1:], marginal

    def points(self) -> tuple[FloatArray, FloatArray]:
        """The nodes, (M, d), and the share of the posterior that each stands for, (M,)."""
        cells, rule = self._cells, self._rule
        theta = cells.low[:, None] + 0.5 * (cells.high - cells.low)[:, None] * (1.0 + rule._mesh)
        weight = rule.weight
        for _ in range(rule.d - 1):
            weight = np.multiply.outer(weight, rule.weight)
        volume = np.prod(0.5 * (cells.high - cells.low), axis=1)
        share = volume[:, None] * cells.value.reshape(len(volume), -1) * weight.ravel()
        return theta.reshape(-1, rule.d), share.ravel() / share.sum()

    def moment(self, name: str, power: int = 1, about: float = 0.0) -> float:
        """Marginal moment about a value."""
        low, high, marginal = self._strips(self.names.index(name))
        x = low + 0.5 * (high - low) * (1 + self._rule.node)
        weight = marginal * self._rule.weight * 0.5 * (high - low)
        return float((weight * (x - about) ** power).sum() / weight.sum())

    def mean(self, name: str) -> float:
        """Marginal mean."""
        return self.moment(name)

    def sd(self, name: str) -> float:
        """Marginal standard deviation."""
        return float(np.sqrt(self.moment(name, 2, self.mean(name))))

    def quantile(self, name: str, p: ArrayLike) -> FloatArray:
        """Marginal quantiles, by inverting the cumulative distribution; (M,)."""
        axis = self.names.index(name)
        x = np.linspace(self._cells.low[:, axis].min(), self._cells.high[:, axis].max(), 4001)
        for _ in range(2):  # the second pass looks only where the mass is
            cdf = self.cdf(name, x)
            inside = np.flatnonzero((cdf > 1e-6) & (cdf < 1 - 1e-6))
            x = np.linspace(x[max(inside[0] - 1, 0)], x[min(inside[-1] + 1, len(x) - 1)], 4001) if len(inside) else x
        return np.interp(np.atleast_1d(p), self.cdf(name, x), x)


def integrate(
    log_posterior: Target,
    optimum: Place,
    *,
    tolerance: float = 3e-3,
    max_evaluations: int | None = None,
    known: FloatArray | None = None,
) -> GridPosterior | None:
    """Integrate the posterior over its prior.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
        Where to begin; its Hessian errors set the first cuts.
    tolerance : float
        Relative error of the evidence, by the rule's own estimate.
    max_evaluations : int, optional
        Stop there, converged or not; a few seconds by default.
    known : (M, d) array, optional
        Points that matter, e.g. draws: a cell that knows nothing of those in it is cut.

    Returns
    -------
    GridPosterior or None
        None beyond four dimensions.
    """
    d = log_posterior.ndim
    if d > MAX_DIMENSIONS:
        return None
    rule, peak = _Rule(d), float(log_posterior(optimum.theta)[0])
    max_evaluations = _BUDGET[d] if max_evaluations is None else max_evaluations

    def density(points: FloatArray) -> FloatArray:
        return np.concatenate([np.exp(log_posterior(points[i : i + _BATCH]) - peak) for i in range(0, len(points), _BATCH)])

    cells = rule.evaluate(density, *_first_cells(log_posterior, optimum))
    probes = Probes(density, rule.transform)
    probes.add(_outside(cells, rule, known), cells.low, cells.high, cells.value)
    scale = np.sqrt(np.diag(optimum.covariance))
    evaluations = len(cells.mass) * rule.n**d
    while True:
        total, missed = cells.mass.sum(), probes.missed(cells.volume)
        worst = cells.error + missed
        converged = worst.sum() <= tolerance * total
        # Cells that hold an even share of the allowed error are good enough.
        chosen = np.flatnonzero(worst > 0.5 * tolerance * total / len(worst))
        room = max(int((max_evaluations - evaluations) / (2 * rule.n**d)), 0)
        if converged or not len(chosen) or not room:
            break
        chosen = chosen[np.argsort(worst[chosen])[::-1][:room]]
        axis = np.where(missed > cells.error, ((cells.high - cells.low) / scale).argmax(axis=1), cells.tail.argmax(axis=1))
        new = rule.evaluate(density, *_halves(cells, chosen, axis[chosen]))
        evaluations += len(new.mass) * rule.n**d
        kept = np.setdiff1d(np.arange(len(worst)), chosen)
        cells = cells.join(new, kept)
        probes.follow(chosen, kept, cells.low, cells.high, cells.value)
        probes.add(_outside(new, rule), cells.low, cells.high, cells.value)
    error = float(worst.sum() / total)
    return GridPosterior(log_posterior.names, float(np.log(total) + peak), error, evaluations, bool(converged), cells, rule)


def _outside(cells: _Cells, rule: _Rule, known: FloatArray | None = None) -> FloatArray:
    """Points to hold against the cells: beside them, and those known."""
    beside = across_the_faces(cells.low, cells.high, cells.value, rule.node)
    return beside if known is None else np.concatenate([known, beside])


def _first_cells(log_posterior: Target, optimum: Place) -> tuple[FloatArray, FloatArray]:
    """Cut the prior box around the optimum, so that a narrow peak is not overlooked."""
    errors = np.sqrt(np.diag(optimum.covariance))
    edges = []
    for prior, centre, error in zip(log_posterior.priors, optimum.theta, errors, strict=True):
        low = prior.low if np.isfinite(prior.low) else float(prior.quantile(_TAIL_PROBABILITY))
        high = prior.high if np.isfinite(prior.high) else float(prior.quantile(1 - _TAIL_PROBABILITY))
        cuts = np.array([s * error for c in _CUTS for s in (-c, c)]) + centre
        # A cut that nearly touches an edge would leave a sliver.
        margin = 1e-3 * (high - low)
        edges.append(np.array([low, *sorted(c for c in cuts if low + margin < c < high - margin), high]))
    lows = np.meshgrid(*[e[:-1] for e in edges], indexing="ij")
    highs = np.meshgrid(*[e[1:] for e in edges], indexing="ij")
    bottom, top = (np.stack([m.ravel() for m in side], axis=1) for side in (lows, highs))
    return bottom, top


def _halves(cells: _Cells, chosen: IntArray, axis: IntArray) -> tuple[FloatArray, FloatArray]:
    """Cut the chosen cells in two, each along its axis: first the lower halves, then the upper ones."""
    low, high = cells.low[chosen], cells.high[chosen]
    row = np.arange(len(chosen))
    middle = 0.5 * (low[row, axis] + high[row, axis])
    upper_low, lower_high = low.copy(), high.copy()
    upper_low[row, axis] = lower_high[row, axis] = middle
    return np.concatenate([low, upper_low]), np.concatenate([lower_high, high])
