"""Does a grid of cells miss anything? Points where the density is known, held against what the cells make of them.

A cell whose nodes all lie beside a thin ridge believes itself empty, and so does its own error estimate. A ridge does not end at a
face, though: just across the faces of every cell stand points, where that cell is highest, and whoever calls may add points of its own,
such as the draws of a chain.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.polynomial import legendre

from fitter.array_types import FloatArray, IntArray

__all__ = ["Probes", "across_the_faces"]

_NEGLIGIBLE = 1e-9  # of the highest density
_MISSED = 0.5  # of the density at the points of a cell: an interpolant that is further off knows nothing of them
_BLOCK = 2048


@dataclass
class Probes:
    """Points, the density there, the cell that each is in, and how far off that cell's interpolant is.

    Parameters
    ----------
    density : callable
        (M, d) points → (M,) density over its maximum.
    to_coefficients : (n, n) array
        Node values → Legendre coefficients, along one axis.
    """

    density: Callable[[FloatArray], FloatArray]
    to_coefficients: FloatArray
    points: FloatArray = field(init=False)
    value: FloatArray = field(init=False)
    owner: IntArray = field(init=False)
    off: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        self.value, self.off, self.owner = np.empty(0), np.empty(0), np.empty(0, dtype=int)

    def add(self, points: FloatArray, low: FloatArray, high: FloatArray, value: FloatArray) -> None:
        """Take up points, (M, d), of cells with bounds (C, d) and node values (C, n, …, n)."""
        found = self.density(points)
        points, found = points[found > _NEGLIGIBLE], found[found > _NEGLIGIBLE]
        owner = _owners(points, low, high)
        points, found, owner = points[owner >= 0], found[owner >= 0], owner[owner >= 0]
        self.points = points if not len(self.value) else np.concatenate([self.points, points])
        self.value = np.concatenate([self.value, found])
        self.owner = np.concatenate([self.owner, owner])
        self.off = np.concatenate([self.off, np.zeros(len(points))])
        self._judge(np.arange(len(self.value) - len(points), len(self.value)), low, high, value)

    def follow(self, cut: IntArray, kept: IntArray, low: FloatArray, high: FloatArray, value: FloatArray) -> None:
        """Move the points of cells that were cut: cell ``cut[i]`` became those in rows len(kept) + i and len(kept) + len(cut) + i."""
        count = len(kept) + len(cut)
        row = np.empty(count, dtype=int)
        row[kept], row[cut] = np.arange(len(kept)), len(kept) + np.arange(len(cut))
        moved = np.isin(self.owner, cut)
        self.owner = row[self.owner]
        m = np.flatnonzero(moved)
        above = (self.points[m] > high[self.owner[m]]).any(axis=1)
        self.owner[m] += len(cut) * above
        self._judge(m, low, high, value)

    def _judge(self, which: IntArray, low: FloatArray, high: FloatArray, value: FloatArray) -> None:
        """Compare the density at some of the points with the interpolant of their cell."""
        n, d = value.shape[1], value.ndim - 1
        for start in range(0, len(which), _BLOCK):
            m = which[start : start + _BLOCK]
            c = self.owner[m]
            x = 2 * (self.points[m] - low[c]) / (high[c] - low[c]) - 1
            found = value[c]
            for axis in range(d):
                basis = legendre.legvander(x[:, axis], n - 1) @ self.to_coefficients  # (M, n): weights of the nodes at x
                found = np.einsum("mi,mi...->m...", basis, found)
            self.off[m] = np.abs(found - self.value[m])

    def missed(self, volume: FloatArray) -> FloatArray:
        """Mass, (C,), that cells of a volume, (C,), may have overlooked: none, or of the order of what its points tell."""
        count = np.bincount(self.owner, minlength=len(volume))
        total, off = (np.bincount(self.owner, weights=w, minlength=len(volume)) for w in (self.value, self.off))
        return np.where(off > _MISSED * total, volume * total / np.maximum(count, 1), 0.0)


def _owners(points: FloatArray, low: FloatArray, high: FloatArray) -> IntArray:
    """The cell that each point is in, (M,); −1 for none."""
    owner = np.full(len(points), -1)
    for start in range(0, len(points), _BLOCK):
        p = points[start : start + _BLOCK]
        inside = np.ones((len(p), len(low)), dtype=bool)
        for axis in range(points.shape[1]):
            inside &= (p[:, axis, None] >= low[:, axis]) & (p[:, axis, None] <= high[:, axis])
        owner[start : start + _BLOCK] = np.where(inside.any(axis=1), inside.argmax(axis=1), -1)
    return owner


def across_the_faces(low: FloatArray, high: FloatArray, value: FloatArray, node: FloatArray) -> FloatArray:
    """Points just outside each face of each cell, beside the highest node along it: (2 C d, d).

    Parameters
    ----------
    low, high : (C, d) array
    value : (C, n, …, n) array
        Density at the nodes.
    node : (n,) array
        Of one axis, in −1 … 1, rising.
    """
    cells, d = low.shape
    out = []
    for axis in range(d):
        for layer, sign in ((0, -1.0), (-1, 1.0)):
            along = np.take(value, layer, axis=axis + 1)
            best = np.unravel_index(along.reshape(cells, -1).argmax(axis=1), along.shape[1:]) if d > 1 else ()
            x = np.insert(node[np.stack(best, axis=1)] if d > 1 else np.empty((cells, 0)), axis, sign * (2.0 - node[-1]), axis=1)
            out.append(low + 0.5 * (high - low) * (1.0 + x))
    return np.concatenate(out)
