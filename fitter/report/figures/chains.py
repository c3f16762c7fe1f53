"""The chains themselves: for those who want to see for themselves."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray, ObjectArray
from fitter.errors import InputError
from fitter.report.facts import axis_label
from fitter.report.figures.style import COLOURS, in_style, new_figure, width_inches

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.inference.posterior import Posterior

__all__ = ["chains_caption", "chains_figure"]

_STEPS_DRAWN = 600
_LENGTHS = 8
_DRAWS_A_LENGTH = 60_000
_WALKERS = 64  # of each replica, for the autocorrelation


@in_style
def chains_figure(posterior: Posterior, names: Sequence[str] | None = None, *, width: str | float = "double") -> Figure:
    """Draw, for each parameter, the trace of every replica, its running mean and autocorrelation, and R̂ against length.

    Parameters
    ----------
    posterior : Posterior
    names : sequence of str, optional
        The sampled parameters by default.
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    names = list(names) if names is not None else list(posterior.names)
    unknown = [n for n in names if n not in posterior.kinds]
    if unknown or not names:
        raise InputError(
            "no such parameter in this fit", value=unknown[0] if unknown else None, cure=f"Known: {', '.join(posterior.kinds)}."
        )
    wide = width_inches(width) > 5
    columns, rows = (4, len(names)) if wide else (2, 2 * len(names))
    figure = new_figure(width, height=0.62 + (1.3 if wide else 1.25) * rows)
    inches, height = figure.get_size_inches()
    axes = figure.subplots(rows, columns, squeeze=False, gridspec_kw={"wspace": 0.42, "hspace": 0.12 if wide else 0.42})
    figure.subplots_adjust(left=0.62 / inches, right=1 - 0.08 / inches, bottom=0.42 / height, top=1 - 0.26 / height)
    for row, name in zip(axes.reshape(len(names), 4), names, strict=True):
        draws = np.asarray(posterior.draws(name), dtype=float)
        _trace(row[0], draws)
        _running_mean(row[1], draws)
        _autocorrelation(row[2], draws)
        _rhat(row[3], draws)
        row[0].set_ylabel(axis_label(name))
    _dress(axes.reshape(len(names), 4), wide)
    return figure


_TITLES = ("One walker each", "Running mean", "Autocorrelation", r"$\hat{R} - 1$")


def _dress(axes: ObjectArray, wide: bool) -> None:
    """Titles over the columns, or over each panel where they stand in pairs; numbers only where they are not repeated."""
    for row in axes if not wide else axes[:1]:
        for ax, title in zip(row, _TITLES, strict=True):
            ax.set_title(title, pad=4)
    reach = max(ax.get_xlim()[1] for ax in axes[:, 2])
    for ax in axes[:, 2]:
        ax.set_xlim(0, reach)
    for row in axes[:-1] if wide else ():
        for ax in row:
            ax.tick_params(labelbottom=False)
    for ax, name in zip(axes[-1], ("Step", "Step", "Lag  [steps]", "Step"), strict=True):
        if wide or ax in axes[-1][2:]:
            ax.set_xlabel(name)
    axes[0, 0].figure.align_ylabels(axes[:, 0])


def _trace(ax: Axes, draws: FloatArray) -> None:
    stride = max(1, draws.shape[1] // _STEPS_DRAWN)
    steps = np.arange(0, draws.shape[1], stride)
    for i, replica in enumerate(draws):
        ax.plot(steps, replica[::stride, 0], color=COLOURS[i % len(COLOURS)], lw=0.5, alpha=0.8)


def _running_mean(ax: Axes, draws: FloatArray) -> None:
    """Mean of all walkers so far; undefined draws are left out."""
    stride = max(1, draws.shape[1] // _STEPS_DRAWN)
    steps = np.arange(0, draws.shape[1], stride)
    for i, replica in enumerate(draws):
        defined = np.isfinite(replica)
        total = np.cumsum(np.where(defined, replica, 0.0).sum(axis=1))
        count = np.maximum(np.cumsum(defined.sum(axis=1)), 1)
        ax.plot(steps, (total / count)[::stride], color=COLOURS[i % len(COLOURS)], lw=0.9)
    mean, sd = float(np.nanmean(draws)), float(np.nanstd(draws))
    ax.axhline(mean, color="black", lw=0.6, ls=":")
    ax.set_ylim(mean - 0.6 * sd, mean + 0.6 * sd)


def _autocorrelation(ax: Axes, draws: FloatArray) -> None:
    """Autocorrelation of each replica, averaged over its walkers, well beyond the lag where it has died away."""
    middle = np.nanmedian(draws)
    curves = [autocorrelation(np.where(np.isfinite(replica), replica, middle)[:, :_WALKERS]) for replica in draws]
    small = np.flatnonzero(np.mean(curves, axis=0) < 0.05)
    half = max(len(curves[0]) // 2, 2)
    reach = int(np.clip(1.6 * small[0] if len(small) else half, min(15, half), half))
    for i, curve in enumerate(curves):
        ax.plot(np.arange(half), curve[:half], color=COLOURS[i % len(COLOURS)], lw=0.9)
    ax.axhline(0, color="black", lw=0.6, ls=":")
    ax.set_xlim(0, reach)
    ax.set_ylim(-0.15, 1.05)


def autocorrelation(walkers: np.ndarray) -> np.ndarray:
    """Return the autocorrelation at each lag, averaged over walkers, about their common mean.

    Parameters
    ----------
    walkers : (S, W) float

    Returns
    -------
    (S,) float
        1 at lag 0; zeros beyond it where nothing ever moved.
    """
    steps = len(walkers)
    x = walkers - walkers.mean()
    power = np.abs(np.fft.rfft(x, 2 * steps, axis=0)) ** 2
    covariance = np.fft.irfft(power.sum(axis=1), 2 * steps)[:steps] / np.arange(steps, 0, -1)
    return covariance / covariance[0] if covariance[0] > 0 else np.eye(1, steps)[0]


def _rhat(ax: Axes, draws: FloatArray) -> None:
    from fitter.inference.diagnostics import split_rhat

    lengths = np.unique(np.linspace(draws.shape[1] / _LENGTHS, draws.shape[1], _LENGTHS).astype(int))
    lengths = lengths[lengths >= 4]
    values = []
    for length in lengths:
        part = draws[:, :length]
        part = part[:, :: max(1, part.size // _DRAWS_A_LENGTH)]
        values.append(split_rhat(np.where(np.isfinite(part), part, np.nanmax(part, initial=0.0, where=np.isfinite(part)) + 1.0)))
    ax.plot(lengths, np.maximum(np.array(values) - 1, 1e-5), color="black", marker="o", ms=3, lw=0.8)
    ax.axhline(0.01, color="black", lw=0.6, ls=":")
    ax.set_yscale("log")
    ax.set_ylim(5e-6, max(0.05, 2 * max(values, default=1.0) - 2))


def chains_caption(posterior: Posterior) -> str:
    """Return the caption of the chains figure."""
    replicas, steps, walkers = posterior.log_posterior.shape
    return (
        f"The chains after burn-in: {replicas} independent replicas of {walkers} walkers, {steps} steps. For each parameter: one walker of "
        "each replica; the running mean of each replica, within 0.6 standard deviations of the mean (dotted); the autocorrelation of each "
        "replica, averaged over walkers; rank-normalised split R-hat minus 1 against length (dotted: the limit, 0.01)."
    )
