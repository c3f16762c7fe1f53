"""What optimisation, sampling and integration need of a posterior density, and no more."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, NamedTuple, Protocol

from fitter.array_types import FloatArray

if TYPE_CHECKING:
    from fitter.likelihood.priors import Prior

__all__ = ["Peak", "Place", "Target"]


class Target(Protocol):
    """A ln density over a box of priors."""

    @property
    def names(self) -> tuple[str, ...]:
        """The parameters, in the order of the columns of theta."""

    @property
    def priors(self) -> Sequence[Prior]:
        """In the same order."""

    @property
    def ndim(self) -> int:
        """Number of parameters."""

    def __call__(self, theta: FloatArray) -> FloatArray:
        """ln density, (W,), at (W, n) points; −inf outside, never NaN."""


class Place(Protocol):
    """Where a density is high, and how wide it is there; an `Optimum`, or a guess."""

    @property
    def theta(self) -> FloatArray:
        """(n,) array."""

    @property
    def covariance(self) -> FloatArray:
        """(n, n) array, positive definite."""


class Peak(NamedTuple):
    """The plainest `Place`."""

    theta: FloatArray
    covariance: FloatArray
