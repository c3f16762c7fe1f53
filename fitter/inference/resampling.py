"""Draws with weights → draws without."""

from __future__ import annotations

import numpy as np

from fitter.array_types import FloatArray, IntArray

__all__ = ["systematic"]


def systematic(weight: FloatArray, size: int, offset: float = 0.5) -> IntArray:
    """Rows, (size,), that stand for weighted ones, each about as often as its weight says: systematic resampling.

    Parameters
    ----------
    weight : (M,) array
        Sum 1.
    size : int
    offset : float
        0 … 1, the place of the first rung of the ladder; a random number makes the result unbiased.
    """
    return np.minimum(np.searchsorted(np.cumsum(weight), (np.arange(size) + offset) / size), len(weight) - 1)
