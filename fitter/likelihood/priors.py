"""Priors: normalised densities with their support, one class each, and how a config writes them."""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.errors import InputError

__all__ = ["PRIORS", "LogUniform", "Normal", "Prior", "TruncatedNormal", "Uniform", "parse_prior"]


class Prior(ABC):
    """A one-dimensional prior density, normalised, so that evidences mean something.

    Every prior is given by its quantile function: draws and medians follow from it.
    """

    keyword: ClassVar[str]
    fields: ClassVar[tuple[str, ...]]
    low: float
    high: float

    @abstractmethod
    def log_density(self, x: ArrayLike) -> FloatArray:
        """ln p(x) for an array; −inf outside the support and for NaN."""

    @abstractmethod
    def quantile(self, p: ArrayLike) -> FloatArray:
        """Inverse cumulative distribution, for p in [0, 1]."""

    def sample(self, rng: np.random.Generator, size: int | None = None) -> FloatArray:
        """Independent draws."""
        return self.quantile(rng.random(size))

    @property
    def width(self) -> float:
        """Length of the support; infinite where it has no end."""
        return self.high - self.low

    def spec(self) -> dict:
        """The prior as a config writes it."""
        return {self.keyword: [float(getattr(self, f)) for f in self.fields]}

    def describe(self) -> str:
        """The prior in a few characters for people."""
        numbers = ", ".join(f"{getattr(self, f):g}" for f in self.fields)
        return f"{self.keyword.replace('_', '-')}({numbers})"


def _inside(x: FloatArray, low: float, high: float, value: float | FloatArray) -> FloatArray:
    with np.errstate(invalid="ignore"):
        return np.where((x >= low) & (x <= high), value, -np.inf)


def _require(ok: bool, problem: str) -> None:
    if not ok:
        raise InputError(problem)


@dataclass(frozen=True)
class Uniform(Prior):
    """Constant between `low` and `high`."""

    low: float
    high: float
    keyword = "uniform"
    fields = ("low", "high")

    def __post_init__(self) -> None:
        _require(self.low < self.high, "uniform: [low, high] needs low < high")

    def log_density(self, x: ArrayLike) -> FloatArray:
        return _inside(np.asarray(x, float), self.low, self.high, -math.log(self.high - self.low))

    def quantile(self, p: ArrayLike) -> FloatArray:
        return self.low + (self.high - self.low) * np.asarray(p)


@dataclass(frozen=True)
class LogUniform(Prior):
    """Constant in ln x between `low` > 0 and `high`."""

    low: float
    high: float
    keyword = "log_uniform"
    fields = ("low", "high")

    def __post_init__(self) -> None:
        _require(0 < self.low < self.high, "log_uniform: [low, high] needs 0 < low < high")

    def log_density(self, x: ArrayLike) -> FloatArray:
        x = np.asarray(x, float)
        with np.errstate(invalid="ignore", divide="ignore"):
            return _inside(x, self.low, self.high, -np.log(x) - math.log(math.log(self.high / self.low)))

    def quantile(self, p: ArrayLike) -> FloatArray:
        return np.exp(math.log(self.low) + math.log(self.high / self.low) * np.asarray(p))


@dataclass(frozen=True)
class TruncatedNormal(Prior):
    """A Gaussian cut off at `low` and `high`, normalised on what is left."""

    mean: float
    sd: float
    low: float
    high: float
    keyword = "truncated_normal"
    fields = ("mean", "sd", "low", "high")

    def __post_init__(self) -> None:
        _require(self.sd > 0, "truncated_normal: [mean, sd, low, high] needs sd > 0")
        _require(self.low < self.high, "truncated_normal: [mean, sd, low, high] needs low < high")
        _require(self._cdf_limits()[1] > self._cdf_limits()[0], "truncated_normal: nothing of the Gaussian is left between low and high")

    def _cdf_limits(self) -> tuple[float, float]:
        from scipy.special import ndtr

        return ndtr((self.low - self.mean) / self.sd), ndtr((self.high - self.mean) / self.sd)

    def log_density(self, x: ArrayLike) -> FloatArray:
        x = np.asarray(x, float)
        below, above = self._cdf_limits()
        log_norm = math.log(self.sd * math.sqrt(2 * math.pi) * (above - below))
        return _inside(x, self.low, self.high, -0.5 * ((x - self.mean) / self.sd) ** 2 - log_norm)

    def quantile(self, p: ArrayLike) -> FloatArray:
        from scipy.special import ndtri

        below, above = self._cdf_limits()
        return np.clip(self.mean + self.sd * ndtri(below + (above - below) * np.asarray(p)), self.low, self.high)


@dataclass(frozen=True)
class Normal(Prior):
    """A Gaussian."""

    mean: float
    sd: float
    keyword = "normal"
    fields = ("mean", "sd")
    low = -math.inf
    high = math.inf

    def __post_init__(self) -> None:
        _require(self.sd > 0, "normal: [mean, sd] needs sd > 0")

    def log_density(self, x: ArrayLike) -> FloatArray:
        x = np.asarray(x, float)
        return _inside(x, self.low, self.high, -0.5 * ((x - self.mean) / self.sd) ** 2 - math.log(self.sd * math.sqrt(2 * math.pi)))

    def quantile(self, p: ArrayLike) -> FloatArray:
        from scipy.special import ndtri

        return self.mean + self.sd * ndtri(np.asarray(p))


PRIORS: dict[str, type[Prior]] = {p.keyword: p for p in (Uniform, Normal, TruncatedNormal, LogUniform)}


def parse_prior(spec: object, *, key: str | None = None) -> Prior:
    """Make a prior from what a config says, e.g. ``{"uniform": [0, 1]}``.

    Parameters
    ----------
    spec : dict or Prior
        One key, the kind, with the list of its numbers.
    key : str, optional
        The config key, for the message.

    Raises
    ------
    InputError
        Unknown kind, wrong number of values, or values that make no density.
    """
    if isinstance(spec, Prior):
        return spec
    grammar = "; ".join(f"{k}: [{', '.join(p.fields)}]" for k, p in PRIORS.items())
    if not isinstance(spec, dict) or len(spec) != 1 or next(iter(spec)) not in PRIORS:
        raise InputError("this is no prior", key=key, value=spec, cure=f"Write one of {grammar}; or a number to hold it fixed.")
    ((keyword, numbers),) = spec.items()
    kind = PRIORS[keyword]
    numeric = isinstance(numbers, (list, tuple)) and all(isinstance(n, (int, float)) and not isinstance(n, bool) for n in numbers)
    if not numeric or len(numbers) != len(kind.fields) or not all(map(math.isfinite, numbers)):
        cure = f"Write {keyword}: [{', '.join(kind.fields)}] with finite numbers."
        raise InputError(f"{keyword} takes {len(kind.fields)} numbers", key=key, value=numbers, cure=cure)
    try:
        return kind(*map(float, numbers))
    except InputError as error:
        raise InputError(error.problem, key=key, value=numbers, cure="Correct the numbers.") from None
