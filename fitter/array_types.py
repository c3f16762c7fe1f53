"""Names for the arrays that signatures speak of; shapes stand in the docstrings."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["BoolArray", "FloatArray", "IntArray", "ObjectArray"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
ObjectArray = NDArray[np.object_]  # a grid of panels
