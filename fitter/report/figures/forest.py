"""The forest plot: one parameter after the other, across the fits of a comparison."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from fitter.inference.intervals import interval_words
from fitter.report.comparison_table import main_names
from fitter.report.facts import axis_label
from fitter.report.figures.corner import inner_ticks
from fitter.report.figures.style import COLOURS, GREY, in_style, new_figure, width_inches
from fitter.report.prose import listed, symbol

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["forest_caption", "forest_figure", "forest_names"]

_MOST_PANELS = 5
_ROW, _TALL_ROW, _BOTTOM, _TOP, _RIGHT, _GAP = 0.24, 0.36, 0.46, 0.12, 0.12, 0.1  # inches
_CHARACTER = 0.068  # inches that a letter of a fit's name takes
_LONGEST_NAME = 26


def forest_names(report: Mapping) -> list[str]:
    """Parameters that two fits or more have with a posterior of some width; of derived ones only q0 and the curvature."""

    def drawn(name: str) -> list[dict]:
        facts = [v["parameters"].get(name) for v in report["variants"]]
        return [f for f in facts if f and f["sd"] and (f["kind"] != "derived" or name in ("q0", "omega_k"))]

    names = [n for n in main_names(report) if len(drawn(n)) > 1]
    return (names or [n for n in main_names(report) if drawn(n)])[:_MOST_PANELS]


@in_style
def forest_figure(report: dict, names: Sequence[str] | None = None, *, width: str | float = "double") -> Figure:
    """Draw medians with 68.3 and 95 % intervals, a row for each fit and a panel for each parameter.

    Parameters
    ----------
    report : dict
        As `fitter.study.comparison.compare_entries` makes it.
    names : sequence of str, optional
        `forest_names` by default.
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    variants, names = report["variants"], list(names or forest_names(report))
    labels = [_two_lines(v["name"]) for v in variants]
    left = 0.15 + _CHARACTER * max(len(line) for text in labels for line in text.split("\n"))
    inches = min(width_inches(width), left + _RIGHT + 2.6 * len(names)) if isinstance(width, str) else width_inches(width)
    row = _TALL_ROW if any("\n" in text for text in labels) else _ROW
    panel, rows = (inches - left - _RIGHT - _GAP * (len(names) - 1)) / len(names), row * len(variants) + 0.1
    height = _BOTTOM + rows + _TOP
    figure = new_figure(inches, height=height)
    for i, name in enumerate(names):
        box = ((left + i * (panel + _GAP)) / inches, _BOTTOM / height, panel / inches, rows / height)
        ax = figure.add_axes(box)
        _draw_panel(ax, report, name)
        ax.set_yticks(range(len(variants)), labels if i == 0 else [""] * len(variants), linespacing=1.0)
        ax.tick_params(axis="y", length=0)
        ax.set_ylim(len(variants) - 0.45, -0.55)
        ax.set_xlabel(axis_label(name))
    return figure


def _two_lines(name: str) -> str:
    """A name in two lines at most; of a longer one the end is kept, which is where names of one family differ."""
    lines = textwrap.wrap(name, _LONGEST_NAME)
    return "\n".join(lines if len(lines) <= 2 else ["… " + lines[-2], lines[-1]])


def _draw_panel(ax: Axes, report: dict, name: str) -> None:
    ends = []
    for row, variant in enumerate(report["variants"]):
        colour = COLOURS[row % len(COLOURS)]
        facts, fixed = variant["parameters"].get(name), variant["fixed"].get(name)
        if facts is not None and facts["median"] is not None:
            ax.plot([facts["low95"], facts["high95"]], [row, row], color=colour, lw=1.0)
            ax.plot([facts["low68"], facts["high68"]], [row, row], color=colour, lw=3.0, solid_capstyle="butt")
            ax.plot(facts["median"], row, "o", color="white", mec=colour, ms=4.5, mew=1.1, zorder=4)
            ends += [facts["low95"], facts["high95"]]
        elif fixed is not None:
            ax.plot(fixed, row, "D", color="white", mec=colour, ms=4.0, mew=1.1, zorder=4)
            ends.append(fixed)
        if variant["name"] == report["reference"] and facts is not None and facts["median"] is not None:
            ax.axvspan(facts["low68"], facts["high68"], color=GREY, alpha=0.18, lw=0)
    low, high = (float(f(ends)) for f in (np.min, np.max))
    margin = 0.08 * (high - low) or 0.5
    ax.set_xlim(low - margin, high + margin)
    ax.set_xticks(inner_ticks((low - margin, high + margin)))


def forest_caption(report: Mapping, names: Sequence[str] | None = None) -> str:
    """Return the caption of the forest plot."""
    names = names or forest_names(report)
    kinds = interval_words({v["name"]: v.get("intervals", "equal_tailed") for v in report["variants"]})
    return (
        f"{listed(symbol(n) for n in names)} in each fit: median (circle), {kinds} (thick) and those of 95 % (thin). "
        f"Diamonds: held fixed. Grey: the 68.3 % interval of {report['reference']}."
    )
