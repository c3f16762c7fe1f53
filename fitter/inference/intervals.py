"""Credible intervals from draws; every label is made from the computation it names."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

__all__ = ["Interval", "edge_leaning", "equal_tailed", "highest_density", "one_sided"]


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


def _finite(draws):
    draws = np.asarray(draws, dtype=float).ravel()
    return draws[np.isfinite(draws)]


def equal_tailed(draws, share: float = 0.6827) -> Interval:
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


def highest_density(draws, share: float = 0.6827) -> Interval:
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


def one_sided(draws, share: float = 0.95, *, side: str) -> Interval:
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


def edge_leaning(draws, low: float, high: float) -> dict[str, float]:
    """How high the posterior density is at the bounds of the prior, as a share of its peak.

    The density is counted in cells of a third of the standard deviation (or a thirtieth of the support, where that is
    less); at a bound it is extrapolated linearly from the two nearest cells.

    Parameters
    ----------
    draws : array
    low, high : float
        Bounds of the prior; infinite ones are never leant on.

    Returns
    -------
    dict
        ``{"low": share, "high": share}``, 0 … 1. A Gaussian whose mean is two standard deviations off the bound has 0.14, one
        that is cut at its mean 1, a flat posterior 1 at both.
    """
    x = _finite(draws)
    out = {"low": 0.0, "high": 0.0}
    spread = x.std()
    if len(x) < 50 or spread == 0:
        return out
    first, last = (low if np.isfinite(low) else x.min()), (high if np.isfinite(high) else x.max())
    width = min(spread / 3, (last - first) / 30)
    cells = int(np.clip(round((last - first) / width), 30, 100_000))
    density = np.histogram(x, bins=cells, range=(first, last))[0].astype(float)
    # Three cells together, so that the peak is not the luckiest of many.
    smooth = np.convolve(density, [1 / 3, 1 / 3, 1 / 3], mode="valid")
    peak = max(smooth.max(), 1.5 * density[0] - 0.5 * density[1], 1.5 * density[-1] - 0.5 * density[-2])
    for side, bound, (a, b) in (("low", low, density[:2]), ("high", high, density[:-3:-1])):
        if np.isfinite(bound):
            out[side] = float(np.clip((1.5 * a - 0.5 * b) / peak, 0.0, 1.0))
    return out
