"""Residuals and pulls: do the data scatter as their covariance says?"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import IntArray
from fitter.report.figures.groups import group_codes, group_colour, short_name
from fitter.report.figures.panels import redshift_ticks
from fitter.report.figures.style import COLOURS, in_style, new_figure, width_inches
from fitter.report.information import fitted_noise, noise_scale

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.noise import Noise

__all__ = ["ResidualData", "decorrelated", "draw_residuals", "residual_data", "residuals_caption", "residuals_figure"]

_MOST_POINTS = 20_000


def decorrelated(noise: Noise, residual: np.ndarray, scale: float = 1.0) -> np.ndarray:
    """Return residuals made independent and of unit variance: z with |z|² = rᵀC⁻¹r.

    Parameters
    ----------
    noise : Noise
        C = L Lᵀ + U Uᵀ, with its systematic modes U.
    residual : (N,) float
        mag.
    scale : float
        Factor on all errors.

    Notes
    -----
    z = (1 + V Vᵀ)^(−1/2) L⁻¹ r with V = L⁻¹U. With VᵀV = Q Λ Qᵀ that is L⁻¹r − V Q f(Λ) Qᵀ Vᵀ L⁻¹r, where
    f(λ) = [1 − (1+λ)^(−1/2)] / λ: no N × N array for a diagonal L, and no decomposition of a tall one.
    """
    white = noise.whiten(residual[:, None])[:, 0]
    if noise.modes.shape[1]:
        shifts = noise.whiten(noise.modes)
        size, basis = np.linalg.eigh(shifts.T @ shifts)
        root = np.sqrt(1 + np.maximum(size, 0))
        # f without cancellation as λ → 0
        white = white - shifts @ (basis @ ((basis.T @ (shifts.T @ white)) / (root * (1 + root))))
    return white / scale


@dataclass(frozen=True)
class ResidualData:
    """What the figure shows, as arrays.

    Parameters
    ----------
    n : int
        Data, more than there are points below where they are very many.
    redshift, pull : (p,) float
        Single data, and the survey of each: ``code`` (p,) int, a position in ``names``.
    names : (g,) str
        The surveys, and how many data each has: ``counts`` (g,) int.
    quantiles : (g, 3) float
        Of the pulls of each survey: 15.87, 50 and 84.13 %.
    rank, ordered : (q,) int, (q,) float
        Decorrelated residuals in order, the chosen ranks of n.
    density, edges : (h,), (h + 1,) float
        Histogram of the decorrelated residuals.
    """

    n: int
    redshift: np.ndarray
    pull: np.ndarray
    code: np.ndarray
    names: np.ndarray
    counts: np.ndarray
    quantiles: np.ndarray
    rank: np.ndarray
    ordered: np.ndarray
    density: np.ndarray
    edges: np.ndarray


def residual_data(log_posterior: LogPosterior, optimum: Optimum) -> ResidualData:
    """Work out pulls and decorrelated residuals at the best fit.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    """
    sample = log_posterior.sample
    noise, scale = fitted_noise(log_posterior, optimum.values), noise_scale(log_posterior, optimum.values)
    residual = log_posterior.residuals(np.asarray(optimum.theta, dtype=float))
    pull = residual / (scale * np.sqrt(noise.total_variance))
    names, code = group_codes(sample.group, sample.n)
    independent = np.sort(decorrelated(noise, residual, scale))
    reach = float(np.clip(np.abs(independent).max() * 1.05, 3.5, 6))
    bins = int(np.clip(sample.n**0.5, 8, 50))
    density, edges = np.histogram(independent, bins=bins, range=(-reach, reach))
    n, ends = sample.n, min(sample.n, 300)
    keep = np.unique(np.r_[np.arange(ends), np.linspace(0, n - 1, min(n, 2000)).astype(int), np.arange(n - ends, n)])
    chosen = _evenly(code, len(names))
    return ResidualData(
        n=n,
        redshift=sample.redshift[chosen],
        pull=pull[chosen],
        code=code[chosen],
        names=np.array(names),
        counts=np.bincount(code, minlength=len(names)),
        quantiles=np.array([np.quantile(pull[code == i], [0.1587, 0.5, 0.8413]) for i in range(len(names))]),
        rank=keep + 1,
        ordered=independent[keep],
        density=density / (n * np.diff(edges)),
        edges=edges,
    )


def _evenly(code: IntArray, groups: int) -> np.ndarray:
    """Rows to draw: all, or of each group an even share."""
    rows = [np.flatnonzero(code == i) for i in range(groups)]
    stride = max(1, -(-len(code) // _MOST_POINTS))
    return np.concatenate([r[::stride] for r in rows])


def residuals_figure(log_posterior: LogPosterior, optimum: Optimum, *, width: str | float = "double") -> Figure:
    """Draw the residuals of a fit: :func:`draw_residuals` of :func:`residual_data`."""
    return draw_residuals(residual_data(log_posterior, optimum), width=width)


@in_style
def draw_residuals(data: ResidualData, *, width: str | float = "double") -> Figure:
    """Draw the pulls against redshift, and the decorrelated residuals against the normal they should follow.

    Parameters
    ----------
    data : ResidualData
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    wide = width_inches(width) > 5
    figure = new_figure(width, 0.72 if wide else 2.5)
    inches, height = figure.get_size_inches()
    axes = figure.subplots(*((2, 2) if wide else (4, 1)), gridspec_kw={"wspace": 0.26, "hspace": 0.36}).ravel()
    figure.subplots_adjust(left=0.48 / inches, right=1 - 0.1 / inches, bottom=0.42 / height, top=1 - 0.1 / height)
    _against_redshift(axes[0], data)
    _by_group(axes[1], data)
    _histogram(axes[2], data)
    _quantiles(axes[3], data)
    return figure


def _against_redshift(ax: Axes, data: ResidualData) -> None:
    for i in range(len(data.names)):
        rows = data.code == i
        style: dict[str, Any] = {"ls": "", "marker": "o", "ms": 1.8, "mew": 0, "alpha": 0.6, "rasterized": data.n > 2000}
        ax.plot(data.redshift[rows], data.pull[rows], color=group_colour(i), **style)
    ax.set_xscale("log")
    for level in (-2, 0, 2):
        ax.axhline(level, color="black", lw=0.6, ls="-" if level == 0 else ":")
    redshift_ticks(ax)
    ax.set_xlabel("Redshift  $z$")
    ax.set_ylabel(r"Pull  $r/\sigma$")


def _by_group(ax: Axes, data: ResidualData) -> None:
    for i, (low, median, high) in enumerate(data.quantiles):
        ax.errorbar(median, i, xerr=[[median - low], [high - median]], fmt="s", color=group_colour(i), ms=4, lw=1.2, capsize=2)
        # Names stand inside the panel: their length must not decide the layout.
        ax.text(-2.9, i, f"{short_name(str(data.names[i]))} ({data.counts[i]})", va="center", ha="left", fontsize=8)
    ax.axvline(0, color="black", lw=0.6)
    for edge in (-1, 1):
        ax.axvline(edge, color="black", lw=0.6, ls=":")
    ax.set_xlim(-3.0, 1.9)
    ax.set_ylim(len(data.names) - 0.5, -0.5)
    ax.set_yticks([])
    ax.set_xlabel(r"Pull  $r/\sigma$: median and central 68.3 %")


def _histogram(ax: Axes, data: ResidualData) -> None:
    ax.bar(data.edges[:-1], data.density, np.diff(data.edges), align="edge", color=COLOURS[0], alpha=0.35)
    x = np.linspace(data.edges[0], data.edges[-1], 300)
    ax.plot(x, np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi), color="black", lw=0.9)
    ax.set_xlim(data.edges[0], data.edges[-1])
    ax.set_xlabel(r"Decorrelated residual  $L^{-1}r$")
    ax.set_ylabel("Density")


def _quantiles(ax: Axes, data: ResidualData) -> None:
    from scipy.special import betaincinv, ndtri

    n, rank = data.n, data.rank
    expected = ndtri((rank - 0.375) / (n + 0.25))
    # An order statistic of n uniform numbers has a beta distribution: its central 95.4 %.
    low, high = (ndtri(betaincinv(rank, n - rank + 1, p)) for p in (0.023, 0.977))
    ax.fill_between(expected, low, high, color="black", alpha=0.15, lw=0)
    ax.plot(expected, data.ordered, ls="", marker="o", ms=1.8, mew=0, color=COLOURS[0])
    reach = float(np.abs(expected).max() * 1.1)
    ax.plot([-reach, reach], [-reach, reach], color="black", lw=0.8)
    ax.set_xlim(-reach, reach)
    ax.set_xlabel("Expected normal quantile")
    ax.set_ylabel(r"Quantile of  $L^{-1}r$")


def residuals_caption(data: ResidualData) -> str:
    """Return the caption of the residuals figure."""
    return (
        "Top: pulls, residuals from the best fit over the square root of the covariance's diagonal, against redshift and by survey "
        "(median and central 68.3 %; number of supernovae in brackets). Pulls share the correlated part of the errors, so they "
        "mislead where that is large. Bottom: decorrelated residuals, which should be independent and of unit variance, with the normal "
        f"distribution, and their quantiles with the 95.4 % band expected of {data.n} independent normal numbers."
    )
