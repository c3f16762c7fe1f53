"""Rank histograms of a rehearsal, and its χ² against expectation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitter.report.facts import parameter
from fitter.report.figures.style import COLOURS, GREY, in_style, new_figure
from fitter.study.calibration import BINS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["rehearsal_caption", "rehearsal_figure"]

_ACROSS = 3
_BANDS = ((0.683, 0.35), (0.954, 0.18))  # probability and opacity


@in_style
def rehearsal_figure(result: dict) -> Figure:
    """Return one rank histogram a parameter, and the distribution of χ².

    Parameters
    ----------
    result : dict
        As `fitter.study.rehearse.rehearse` makes it.
    """
    names = [name for name, facts in result["parameters"].items() if facts["ranks"]]
    with_chi2 = result["chi2"]["ks_p_value"] is not None
    panels = len(names) + with_chi2
    across = 2 if panels == 4 else max(min(panels, _ACROSS), 1)
    down = max(-(-panels // across), 1)
    figure = new_figure("double" if across > 1 else "single", height=2.2 * down)
    grid = figure.subplots(down, across, squeeze=False, gridspec_kw=_margins(across, down)).ravel()
    for axes, name in zip(grid, names, strict=False):
        _ranks(axes, result["parameters"][name]["ranks"], result["mocks"], name)
    if with_chi2:
        _chi2(grid[len(names)], np.array([fit["chi2"] for fit in result["fits"]]), result["chi2"]["dof"])
    for axes in grid[panels:]:
        axes.set_axis_off()
    return figure


def rehearsal_caption(result: dict) -> str:
    """Return what a reader of the figure must know."""
    truths = "drawn from the prior" if result["truth"] == "prior" else "fixed"
    return (
        f"Rank of the true value (the posterior probability below it) in {result['mocks']} mock fits, truths {truths}; uniform where the "
        f"fit does what it claims. A dome: errors too large; a bowl: too small; a slope: bias. Bands: 68.3 and 95.4 % of what "
        f"{result['mocks']} uniform ranks give in {BINS} bins. Last panel: χ² of the best fits, and the expected distribution with "
        f"{result['chi2']['dof']} degrees of freedom."
    )


def _margins(across: int, down: int) -> dict:
    return {
        "left": 0.075 if across > 1 else 0.15, "right": 0.985, "bottom": 0.19 / down, "top": 1 - 0.03 / down,
        "wspace": 0.28, "hspace": 0.32,
    }  # fmt: skip


def _ranks(axes: Axes, ranks: dict, mocks: int, name: str) -> None:
    from scipy.special import bdtrik

    edges = np.linspace(0, 1, BINS + 1)
    for level, opacity in _BANDS:
        low, high = (float(np.ceil(bdtrik(0.5 * (1 + sign * level), mocks, 1 / BINS))) for sign in (-1, 1))
        axes.axhspan(low, high, color=GREY, alpha=opacity, linewidth=0)
    axes.stairs(ranks["counts"], edges, color=COLOURS[0])
    top = max(*ranks["counts"], mocks / BINS)
    axes.set(xlim=(0, 1), ylim=(0, 1.45 * top), xlabel=f"rank of the true ${parameter(name).latex}$", ylabel="mocks in bin")
    axes.text(0.05, 0.93, f"$p$ = {ranks['ks_p_value']:.2g}", transform=axes.transAxes, va="top", fontsize=8)


def _chi2(axes: Axes, chi2: np.ndarray, dof: int) -> None:
    from scipy.special import gammaln

    spread = 4 * np.sqrt(2 * dof)
    edges = np.linspace(min(dof - spread, chi2.min()), max(dof + spread, chi2.max()), 31)
    edges = np.maximum(edges, 1e-6)
    counts = np.histogram(chi2, edges)[0]
    axes.stairs(counts, edges, color=COLOURS[0], label="mocks")
    x = np.linspace(edges[0], edges[-1], 400)
    density = np.exp((0.5 * dof - 1) * np.log(x) - 0.5 * x - 0.5 * dof * np.log(2) - gammaln(0.5 * dof))
    axes.plot(x, density * len(chi2) * (edges[1] - edges[0]), color=COLOURS[1], label="expected")
    axes.set(xlim=(edges[0], edges[-1]), ylim=(0, 1.45 * max(counts.max(), 1)), xlabel=r"$\chi^2$ of the best fit", ylabel="mocks in bin")
    axes.legend(loc="upper left")
