"""Residuals and pulls: do the data scatter as their covariance says?"""

from __future__ import annotations

import numpy as np

from fitter.report.figures.panels import redshift_ticks
from fitter.report.figures.style import COLOURS, in_style, new_figure, width_inches
from fitter.report.information import fitted_noise, noise_scale

__all__ = ["decorrelated", "residuals_caption", "residuals_figure"]

_MOST_GROUPS = 6
_MOST_POINTS = 20_000


def decorrelated(noise, residual: np.ndarray, scale: float = 1.0) -> np.ndarray:
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
    z = (1 + V Vᵀ)^(−1/2) L⁻¹ r with V = L⁻¹U: no N × N array for a diagonal L.
    """
    white = noise.whiten(residual[:, None])[:, 0]
    if noise.modes.shape[1]:
        basis, size, _ = np.linalg.svd(noise.whiten(noise.modes), full_matrices=False)
        white = white + basis @ ((1 / np.sqrt(1 + size**2) - 1) * (basis.T @ white))
    return white / scale


@in_style
def residuals_figure(log_posterior, optimum, *, width: str | float = "double"):
    """Draw the pulls against redshift, and the decorrelated residuals against the normal they should follow.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    sample = log_posterior.sample
    noise, scale = fitted_noise(log_posterior, optimum.values), noise_scale(log_posterior, optimum.values)
    residual = log_posterior.residuals(np.asarray(optimum.theta, dtype=float))
    pulls = residual / (scale * np.sqrt(noise.total_variance))
    independent = decorrelated(noise, residual, scale)
    wide = width_inches(width) > 5
    figure = new_figure(width, 0.72 if wide else 2.5)
    inches, height = figure.get_size_inches()
    axes = figure.subplots(*((2, 2) if wide else (4, 1)), gridspec_kw={"wspace": 0.26, "hspace": 0.36}).ravel()
    figure.subplots_adjust(left=0.48 / inches, right=1 - 0.1 / inches, bottom=0.42 / height, top=1 - 0.1 / height)
    _against_redshift(axes[0], sample, pulls)
    _by_group(axes[1], sample, pulls)
    _histogram(axes[2], independent)
    _quantiles(axes[3], independent)
    return figure


def _groups(sample) -> dict[str, np.ndarray]:
    if sample.group is None:
        return {"all": np.ones(sample.n, dtype=bool)}
    names, counts = np.unique(np.asarray(sample.group).astype(str), return_counts=True)
    largest = names[np.argsort(-counts, kind="stable")][:_MOST_GROUPS]
    groups = {str(n): np.asarray(sample.group).astype(str) == n for n in largest}
    if len(names) > _MOST_GROUPS:
        groups["others"] = ~np.any(list(groups.values()), axis=0)
    return groups


def _against_redshift(ax, sample, pulls) -> None:
    for i, members in enumerate(_groups(sample).values()):
        rows = np.flatnonzero(members)
        rows = rows[:: max(1, len(rows) // _MOST_POINTS)]
        style = {"ls": "", "marker": "o", "ms": 1.8, "mew": 0, "alpha": 0.6, "rasterized": sample.n > 2000}
        ax.plot(sample.redshift[rows], pulls[rows], color=COLOURS[i % len(COLOURS)] if i < _MOST_GROUPS else "#555555", **style)
    ax.set_xscale("log")
    for level in (-2, 0, 2):
        ax.axhline(level, color="black", lw=0.6, ls="-" if level == 0 else ":")
    redshift_ticks(ax)
    ax.set_xlabel("Redshift  $z$")
    ax.set_ylabel(r"Pull  $r/\sigma$")


def _by_group(ax, sample, pulls) -> None:
    groups = _groups(sample)
    for i, (_name, members) in enumerate(groups.items()):
        low, median, high = np.quantile(pulls[members], [0.1587, 0.5, 0.8413])
        colour = COLOURS[i % len(COLOURS)] if i < _MOST_GROUPS else "#555555"
        ax.errorbar(median, i, xerr=[[median - low], [high - median]], fmt="s", color=colour, ms=4, lw=1.2, capsize=2)
    ax.axvline(0, color="black", lw=0.6)
    for edge in (-1, 1):
        ax.axvline(edge, color="black", lw=0.6, ls=":")
    short = [name if len(name) <= 14 else name[:13] + "…" for name in groups]
    # Names stand inside the panel: their length must not decide the layout.
    for i, (name, members) in enumerate(zip(short, groups.values(), strict=True)):
        ax.text(-2.9, i, f"{name} ({members.sum()})", va="center", ha="left", fontsize=8)
    ax.set_xlim(-3.0, 1.9)
    ax.set_ylim(len(groups) - 0.5, -0.5)
    ax.set_yticks([])
    ax.set_xlabel(r"Pull  $r/\sigma$: median and central 68.3 %")


def _histogram(ax, independent) -> None:
    reach = float(np.clip(np.abs(independent).max() * 1.05, 3.5, 6))
    bins = int(np.clip(len(independent) ** 0.5, 8, 50))
    ax.hist(independent, bins=bins, range=(-reach, reach), density=True, color=COLOURS[0], alpha=0.35)
    x = np.linspace(-reach, reach, 300)
    ax.plot(x, np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi), color="black", lw=0.9)
    ax.set_xlim(-reach, reach)
    ax.set_xlabel(r"Decorrelated residual  $L^{-1}r$")
    ax.set_ylabel("Density")


def _quantiles(ax, independent) -> None:
    from scipy.special import betaincinv, ndtri

    n = len(independent)
    keep = np.unique(np.r_[np.arange(min(n, 300)), np.linspace(0, n - 1, min(n, 2000)).astype(int), np.arange(max(0, n - 300), n)])
    rank = keep + 1
    expected, ordered = ndtri((rank - 0.375) / (n + 0.25)), np.sort(independent)[keep]
    # An order statistic of n uniform numbers has a beta distribution: its central 95.4 %.
    low, high = (ndtri(betaincinv(rank, n - rank + 1, p)) for p in (0.023, 0.977))
    ax.fill_between(expected, low, high, color="black", alpha=0.15, lw=0)
    ax.plot(expected, ordered, ls="", marker="o", ms=1.8, mew=0, color=COLOURS[0])
    reach = float(np.abs(expected).max() * 1.1)
    ax.plot([-reach, reach], [-reach, reach], color="black", lw=0.8)
    ax.set_xlim(-reach, reach)
    ax.set_xlabel("Expected normal quantile")
    ax.set_ylabel(r"Quantile of  $L^{-1}r$")


def residuals_caption(log_posterior) -> str:
    """Return the caption of the residuals figure."""
    return (
        "Top: pulls, residuals from the best fit over the square root of the covariance's diagonal, against redshift and by survey "
        "(median and central 68.3 %; number of supernovae in brackets). Pulls share the correlated part of the errors, so they "
        "mislead where that is large. Bottom: decorrelated residuals, which should be independent and of unit variance, with the normal "
        f"distribution, and their quantiles with the 95.4 % band expected of {log_posterior.sample.n} independent normal numbers."
    )
