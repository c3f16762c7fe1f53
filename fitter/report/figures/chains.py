"""The chains themselves: for those who want to see for themselves."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from fitter.errors import InputError
from fitter.report.facts import axis_label
from fitter.report.figures.style import COLOURS, in_style, new_figure

__all__ = ["chains_caption", "chains_figure"]

_STEPS_DRAWN = 600
_LENGTHS = 8
_DRAWS_A_LENGTH = 60_000


@in_style
def chains_figure(posterior, names: Sequence[str] | None = None, *, width: str | float = "double"):
    """Draw, for each parameter, the trace of every replica, its running mean, and R̂ against length.

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
        raise InputError("no such parameter in this fit", value=(unknown or [None])[0], cure=f"Known: {', '.join(posterior.kinds)}.")
    figure = new_figure(width, height=0.62 + 1.3 * len(names))
    inches, height = figure.get_size_inches()
    axes = figure.subplots(len(names), 3, sharex=True, squeeze=False, gridspec_kw={"wspace": 0.36, "hspace": 0.1})
    figure.subplots_adjust(left=0.68 / inches, right=1 - 0.12 / inches, bottom=0.42 / height, top=1 - 0.26 / height)
    for row, name in zip(axes, names, strict=True):
        draws = np.asarray(posterior.draws(name), dtype=float)
        _trace(row[0], draws)
        _running_mean(row[1], draws)
        _rhat(row[2], draws)
        row[0].set_ylabel(axis_label(name))
    for ax, title in zip(axes[0], ("One walker of each replica", "Running mean", r"$\hat{R} - 1$"), strict=True):
        ax.set_title(title)
    for ax in axes[-1]:
        ax.set_xlabel("Step")
    figure.align_ylabels(axes[:, 0])
    return figure


def _trace(ax, draws) -> None:
    stride = max(1, draws.shape[1] // _STEPS_DRAWN)
    steps = np.arange(0, draws.shape[1], stride)
    for i, replica in enumerate(draws):
        ax.plot(steps, replica[::stride, 0], color=COLOURS[i % len(COLOURS)], lw=0.5, alpha=0.8)


def _running_mean(ax, draws) -> None:
    """Mean of all walkers so far; undefined draws are left out."""
    stride = max(1, draws.shape[1] // _STEPS_DRAWN)
    steps = np.arange(0, draws.shape[1], stride)
    for i, replica in enumerate(draws):
        defined = np.isfinite(replica)
        total = np.cumsum(np.where(defined, replica, 0.0).sum(axis=1))
        count = np.maximum(np.cumsum(defined.sum(axis=1)), 1)
        ax.plot(steps, (total / count)[::stride], color=COLOURS[i % len(COLOURS)], lw=0.9)
    mean, sd = np.nanmean(draws), np.nanstd(draws)
    ax.axhline(mean, color="black", lw=0.6, ls=":")
    ax.set_ylim(mean - 0.6 * sd, mean + 0.6 * sd)


def _rhat(ax, draws) -> None:
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


def chains_caption(posterior) -> str:
    """Return the caption of the chains figure."""
    replicas, steps, walkers = posterior.log_posterior.shape
    return (
        f"The chains after burn-in: {replicas} independent replicas of {walkers} walkers, {steps} steps. Left: one walker of each replica. "
        "Middle: running mean of each replica, over 0.6 standard deviations about the mean (dotted). Right: rank-normalised split R-hat "
        "minus 1 against length; dotted: the limit, 0.01."
    )
