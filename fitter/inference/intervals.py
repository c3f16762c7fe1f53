"""Credible intervals from draws; every label is made from the computation it names."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from fitter.array_types import FloatArray

__all__ = ["INTERVALS", "SHARES", "Interval", "equal_tailed", "highest_density", "interval_words", "one_sided"]

#: Posterior probability in the intervals of a summary, by the names of their ends.
SHARES = {"68": 0.6827, "95": 0.95}


@dataclass(frozen=True)
class Interval:
    """An interval that holds a share of the posterior.

    Parameters
    ----------
    low, high : float
        Infinite on the open side of a limit.
    share : float
        Posterior probability inside.
    kind : str
        How it was made.
    """

    low: float
    high: float
    share: float
    kind: str

    @property
    def label(self) -> str:
        """The interval in words, e.g. ``"68.3 % equal-tailed"``."""
        return f"{100 * self.share:.3g} % {self.kind}"


def _finite(draws: FloatArray) -> FloatArray:
    draws = np.asarray(draws, dtype=float).ravel()
    return draws[np.isfinite(draws)]


def equal_tailed(draws: FloatArray, share: float = 0.6827) -> Interval:
    """Interval with the same probability below as above it.

    Parameters
    ----------
    draws : array
        Any shape; those that are not finite are left out.
    share : float

    Returns
    -------
    Interval
    """
    low, high = np.quantile(_finite(draws), [(1 - share) / 2, (1 + share) / 2])
    return Interval(float(low), float(high), share, "equal-tailed")


def highest_density(draws: FloatArray, share: float = 0.6827) -> Interval:
    """Shortest interval that holds `share` of the draws; for one peak the interval of highest density.

    Parameters
    ----------
    draws : array
    share : float

    Returns
    -------
    Interval
    """
    x = np.sort(_finite(draws))
    held = max(int(np.ceil(share * len(x))), 1)
    widths = x[held - 1 :] - x[: len(x) - held + 1]
    first = int(np.argmin(widths))
    return Interval(float(x[first]), float(x[first + held - 1]), share, "highest-density")


def one_sided(draws: FloatArray, share: float = 0.95, *, side: str) -> Interval:
    """Limit with `share` of the posterior on one side.

    Parameters
    ----------
    draws : array
    share : float
    side : {"upper", "lower"}
        ``upper`` is a limit from above (the parameter is smaller), ``lower`` one from below.

    Returns
    -------
    Interval

    Raises
    ------
    ValueError
        If `side` is neither.
    """
    x = _finite(draws)
    if side == "upper":
        return Interval(float("-inf"), float(np.quantile(x, share)), share, "upper limit")
    if side == "lower":
        return Interval(float(np.quantile(x, 1 - share)), float("inf"), share, "lower limit")
    raise ValueError(f"side is 'upper' or 'lower', not {side!r}")


#: How the intervals of a fit can be made: the words of a config's ``intervals``, and the function of each.
INTERVALS: dict[str, Callable[..., Interval]] = {"equal_tailed": equal_tailed, "highest_density": highest_density}


def interval_words(kinds: Mapping[str, str]) -> str:
    """Name the intervals of one fit or several, e.g. ``"equal-tailed 68.3 % intervals"``.

    Parameters
    ----------
    kinds : mapping
        Name of a fit → a key of `INTERVALS`.
    """
    share = f"{100 * SHARES['68']:.1f} % intervals"
    said = {kind: kind.replace("_", "-") for kind in kinds.values()}
    if len(said) == 1:
        return f"{next(iter(said.values()))} {share}"
    of = [f"{words} of {', '.join(name for name, k in kinds.items() if k == kind)}" for kind, words in said.items()]
    return f"{share} ({'; '.join(of)})"
