"""The corner plot: every pair of parameters, and each alone."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray, ObjectArray
from fitter.errors import InputError
from fitter.report.digits import figures_for
from fitter.report.facts import axis_label, parameter
from fitter.report.figures.panels import (
    LINE,
    common_exponent,
    contours,
    draw_density,
    legend_layout,
    plot_range,
    run_legend,
    runs_of,
    thinned,
)
from fitter.report.figures.style import COLOURS, LEVELS, SINGLE, in_style, new_figure, width_inches
from fitter.report.prose import listed, symbol, with_unit

if TYPE_CHECKING:
    from matplotlib.axis import XAxis, YAxis
    from matplotlib.figure import Figure

    from fitter.inference.posterior import Posterior

__all__ = ["corner_caption", "corner_figure", "main_parameters"]

# Of the derived parameters, those that say something beside the sampled ones; the rest follow from them.
_MAIN_DERIVED = ("omega_k", "omega_lambda", "q0")
_MOST_PANELS = 7
_SMALL_PANEL, _TURNED = 0.95, 1.1  # inches: smaller panels get labels without units, and tick labels aslant
_LEFT, _BOTTOM, _TOP, _RIGHT, _GAP = 0.62, 0.62, 0.27, 0.1, 0.05  # inches, until the labels are measured
_PAD, _EDGE = 0.04, 0.05  # inches between numbers and label, and around everything
_LONE_RATIO = 0.62  # height over width of a panel that stands alone
_TITLE_SIZES = (9, 8)
_LISTED_SIZE, _LISTED_LINE = 8, 0.165  # points, inches


def main_parameters(posterior: Posterior) -> list[str]:
    """Names for the corner plot: sampled, marginalised, and the main derived ones.

    Left out: what hardly varies, and a derived parameter that repeats another of them (in flat space Ω_Λ is 1 − Ω_m: its panel
    would be a line).
    """
    names = [n for n, kind in posterior.kinds.items() if kind == "sampled" and _varies(posterior, n)]
    names += [n for n, kind in posterior.kinds.items() if kind == "marginalised" and _varies(posterior, n)]
    for name in _MAIN_DERIVED:
        if posterior.kinds.get(name) == "derived" and _varies(posterior, name) and not any(_repeats(posterior, name, n) for n in names):
            names.append(name)
    return names[:_MOST_PANELS]


def _repeats(posterior: Posterior, name: str, other: str) -> bool:
    """Whether one parameter is a linear function of another."""
    a, b = (thinned(posterior, n, most=5000) for n in (name, other))
    both = np.isfinite(a) & np.isfinite(b)
    return both.sum() > 2 and abs(np.corrcoef(a[both], b[both])[0, 1]) > LINE


def _varies(posterior: Posterior, name: str) -> bool:
    draws = posterior.draws(name)
    draws = draws[np.isfinite(draws)]
    return draws.size > 1 and float(np.ptp(draws)) > 1e-10 * max(1e-300, float(np.abs(draws).max()))


@in_style
def corner_figure(
    posteriors: Posterior | Mapping[str, Posterior],
    names: Sequence[str] | None = None,
    *,
    width: str | float = "double",
    reference: Mapping[str, float] | None = None,
    labels: Mapping[str, str] | None = None,
) -> Figure:
    """Draw the corner plot of one fit, or of several over each other.

    Parameters
    ----------
    posteriors : Posterior or mapping of str to Posterior
        Several are overlaid with a legend; each run is normalised by itself, whatever its length.
    names : sequence of str, optional
        Any subset in any order; :func:`main_parameters` of the first by default.
    width : {"single", "double"} or float
    reference : mapping, optional
        Values marked by lines, e.g. the truth of a simulation.
    labels : mapping, optional
        Axis labels that replace the declared symbols.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    fitter.errors.InputError
        For a name that none of the fits has.
    """
    runs = runs_of(posteriors)
    names = list(names) if names is not None else main_parameters(next(iter(runs.values())))
    _check(names, runs)
    tables = {label: _columns(posterior, names) for label, posterior in runs.items()}
    limits = {n: plot_range([t[n] for t in tables.values() if n in t]) for n in names}
    scale = {n: 10.0 ** -common_exponent(limits[n]) for n in names}
    figure, axes = _grid(len(names), width)
    for index, table in enumerate(tables.values()):
        _draw_run(axes, names, table, limits, scale, COLOURS[index % len(COLOURS)], alone=len(runs) == 1)
    _dress(axes, names, limits, scale, labels or {})
    _mark(axes, names, reference or {}, scale)
    if len(runs) == 1:
        _draw_intervals(axes, names, next(iter(runs.values())), scale)
        _say_intervals(figure, axes, _interval_texts(names, next(iter(runs.values())), labels or {}))
    else:
        _legend(figure, axes, list(runs))
    return figure


def corner_caption(posteriors: Posterior | Mapping[str, Posterior], names: Sequence[str] | None = None) -> str:
    """Return the caption of the corner plot."""
    runs = runs_of(posteriors)
    names = list(names) if names is not None else main_parameters(next(iter(runs.values())))
    first, second = (f"{100 * level:.1f}" for level in LEVELS)
    text = f"Marginal posterior{'s' if len(names) > 1 else ''} of {listed(symbol(name) for name in names)}."
    if len(names) > 1:
        text += (
            f" The contours are the smallest regions that hold {first} % and {second} % of the probability of each pair "
            "(not the 39.3 % and 86.5 % inside one and two standard deviations of a two-dimensional Gaussian)."
        )
    units = [f"{symbol(name)} is in {with_unit(name).strip()}" for name in names if parameter(name).unit]
    text += f" {listed(units)}." if units else ""
    if len(runs) == 1:
        kind = next(iter(runs.values())).intervals.replace("_", "-")
        return f"{text} Numbers and dashed lines: median and {kind} 68.3 % interval{' of each parameter' if len(names) > 1 else ''}."
    return f"{text} Overlaid: {', '.join(runs)}; each density is scaled to its own peak."


def _check(names: Sequence[str], runs: Mapping) -> None:
    known = list(dict.fromkeys(n for p in runs.values() for n in p.kinds))
    for name in names:
        if name not in known:
            raise InputError("no such parameter in this fit", key="figures", value=name, cure=f"Known: {', '.join(known)}.")
    if not names:
        raise InputError("a corner plot needs a parameter that varies")


def _columns(posterior: Posterior, names: Sequence[str]) -> dict[str, np.ndarray]:
    present = [n for n in names if n in posterior.kinds and _varies(posterior, n)]
    return {n: thinned(posterior, n) for n in present}


def _grid(k: int, width: str | float) -> tuple[Figure, ObjectArray]:
    """Make only the panels of the lower triangle."""
    inches = width_inches(width)
    most = SINGLE if k == 1 else _LEFT + _RIGHT + 1.9 * k
    figure = new_figure(min(inches, most) if isinstance(width, str) else inches)
    axes = np.full((k, k), None, dtype=object)
    for row in range(k):
        for column in range(row + 1):
            axes[row, column] = figure.add_axes((0, 0, 1, 1))
    _place(figure, axes, _LEFT if k > 1 else _RIGHT, _BOTTOM, _TOP)
    return figure, axes


def _place(figure: Figure, axes: ObjectArray, left: float, bottom: float, top: float) -> None:
    """Give the panels the room that these margins (inches) leave of the figure's width; the height follows."""
    k, inches = len(axes), figure.get_figwidth()
    panel = (inches - left - _RIGHT - _GAP * (k - 1)) / k
    tall = panel if k > 1 else _LONE_RATIO * panel
    height = bottom + top + tall * k + _GAP * (k - 1)
    figure.set_figheight(height)
    for row in range(k):
        for column in range(row + 1):
            x, y = left + column * (panel + _GAP), bottom + (k - 1 - row) * (tall + _GAP)
            axes[row, column].set_position((x / inches, y / height, panel / inches, tall / height))


def _panel_inches(axes: ObjectArray) -> float:
    return float(axes[0, 0].get_position().width * axes[0, 0].figure.get_figwidth())


def _draw_run(
    axes: ObjectArray,
    names: Sequence[str],
    table: Mapping[str, FloatArray],
    limits: Mapping[str, tuple[float, float]],
    scale: Mapping[str, float],
    colour: str,
    *,
    alone: bool,
) -> None:
    scaled = {n: (limits[n][0] * scale[n], limits[n][1] * scale[n]) for n in names}
    for row, y in enumerate(names):
        if y not in table:
            continue
        draws = table[y] * scale[y]
        draw_density(axes[row, row], draws, scaled[y], colour, fill=alone)
        for column, x in enumerate(names[:row]):
            if x in table:
                # Bins follow the run's own range: in that of the widest run a narrow one would be smeared.
                own = tuple(plot_range([c]) for c in (table[x] * scale[x], draws))
                contours(axes[row, column], table[x] * scale[x], draws, own, colour)


def _dress(
    axes: ObjectArray,
    names: Sequence[str],
    limits: Mapping[str, tuple[float, float]],
    scale: Mapping[str, float],
    labels: Mapping[str, str],
) -> None:
    """Limits, ticks and labels; numbers only along the left and the bottom."""
    k = len(names)
    small, turn = _panel_inches(axes) < _SMALL_PANEL, 45 if _panel_inches(axes) < _TURNED else 0
    for row in range(k):
        for column in range(row + 1):
            ax = axes[row, column]
            x, y = names[column], names[row]
            ax.set_xlim(*(v * scale[x] for v in limits[x]))
            ax.set_xticks(inner_ticks(limits[x], scale[x], 2 if small else 4))
            ax.tick_params(axis="x", labelrotation=turn, labelbottom=row == k - 1)
            if row == column:
                ax.set_ylim(0, 1.12)
                ax.set_yticks([])
            else:
                ax.set_ylim(*(v * scale[y] for v in limits[y]))
                ax.set_yticks(inner_ticks(limits[y], scale[y], 2 if small else 4))
                ax.tick_params(axis="y", labelrotation=turn, labelleft=column == 0)
            if row == k - 1:
                ax.set_xlabel(labels.get(x, _label(x, limits[x], small)))
            if column == 0 and row > 0:
                ax.set_ylabel(labels.get(y, _label(y, limits[y], small)))
    _align(axes)


def _label(name: str, limits: tuple[float, float], small: bool) -> str:
    """Label of an axis; beside a small panel there is no room for a unit, which the caption gives."""
    exponent = common_exponent(limits)
    if not small:
        return axis_label(name, exponent)
    power = rf"10^{{{-exponent}}}\," if exponent else ""
    return f"${power}{parameter(name).latex}$"


def inner_ticks(limits: tuple[float, float], scale: float = 1.0, wanted: int = 4) -> list[float]:
    """Return round values well inside the limits: one at a corner would run into the next panel's."""
    from matplotlib.ticker import MaxNLocator

    low, high = (v * scale for v in limits)
    margin = 0.08 * (high - low)
    for intervals in range(wanted, 7):
        ticks = [t for t in MaxNLocator(intervals, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high) if low + margin < t < high - margin]
        if len(ticks) >= 2:
            break
    return ticks


def _align(axes: ObjectArray) -> None:
    """Put the labels of a row or column on one line just beyond the longest number, and the margins where that needs them."""
    from matplotlib.transforms import ScaledTranslation

    k, figure = len(axes), axes[0, 0].figure
    figure.draw_without_rendering()
    below = _reach([ax.xaxis for ax in axes[k - 1]], figure) + _PAD
    beside = _reach([ax.yaxis for ax in axes[1:, 0]], figure) + _PAD
    for i in range(k):
        bottom, left = axes[k - 1, i], axes[i, 0]
        down = bottom.transAxes + ScaledTranslation(0, -below, figure.dpi_scale_trans)
        bottom.xaxis.set_label_coords(0.5, 0, transform=down)
        if i > 0:
            aside = left.transAxes + ScaledTranslation(-beside, 0, figure.dpi_scale_trans)
            left.yaxis.set_label_coords(0, 0.5, transform=aside)
    deep = max(ax.xaxis.label.get_window_extent().height for ax in axes[k - 1]) / figure.dpi
    wide = max([ax.yaxis.label.get_window_extent().width for ax in axes[1:, 0]], default=0.0) / figure.dpi
    _place(figure, axes, beside + wide + _EDGE if k > 1 else _RIGHT, below + deep + _EDGE, _TOP)


def _reach(axis_of: Sequence[XAxis | YAxis], figure: Figure) -> float:
    """How far tick labels stretch out from their axes, inches."""
    reach = [0.0]
    for axis in axis_of:
        frame = axis.axes.get_window_extent()
        for tick in axis.get_major_ticks():
            if tick.label1.get_text() and tick.label1.get_visible():
                box = tick.label1.get_window_extent()
                reach.append(frame.y0 - box.y0 if axis.axis_name == "x" else frame.x0 - box.x0)
    return max(reach) / float(figure.dpi)


def _draw_intervals(axes: ObjectArray, names: Sequence[str], posterior: Posterior, scale: Mapping[str, float]) -> None:
    for i, name in enumerate(names):
        interval = posterior.interval(name)
        for x in (interval.low, np.nanmedian(posterior.draws(name)), interval.high):
            axes[i, i].axvline(x * scale[name], color=COLOURS[0], ls=(0, (4, 3)), lw=0.6)


def _interval_texts(names: Sequence[str], posterior: Posterior, labels: Mapping[str, str]) -> list[str]:
    """Median and 68 % of each parameter, in the digits its width deserves."""
    texts = []
    for name in names:
        interval = posterior.interval(name)
        figures = figures_for(float(np.nanmedian(posterior.draws(name))), interval.low, interval.high)
        # A power of ten goes before the symbol: 10⁵² Λ = 1.09 ± 0.05 is shorter, and as true.
        power = f"10^{{{-figures.exponent}}}\\," if figures.exponent else ""
        value = replace(figures, exponent=0).latex()
        texts.append(f"${power}{parameter(name).latex} = {value}$" if name not in labels else f"{labels[name]} $= {value}$")
    return texts


def _say_intervals(figure: Figure, axes: ObjectArray, texts: Sequence[str]) -> None:
    """Write the intervals over their panels, or all of them into the empty corner where a panel is too narrow."""
    k, room = len(texts), (_panel_inches(axes) + _GAP) * figure.dpi
    for size in _TITLE_SIZES:
        titles = [axes[i, i].set_title(text, fontsize=size, pad=4) for i, text in enumerate(texts)]
        if all(title.get_window_extent().width <= room for title in titles):
            return
    if k < 3:  # there is no empty corner to speak of
        return
    for title in titles:
        title.set_text("")
    position, height, inches = axes[-1, 0].get_position(), figure.get_figheight(), figure.get_figwidth()
    _place(figure, axes, position.x0 * inches, position.y0 * height, _EDGE)
    for i, text in enumerate(texts):
        # On the baseline: the height of a text depends on its errors.
        y = 1 - (_EDGE + _LISTED_LINE * (i + 0.75)) / figure.get_figheight()
        figure.text(1 - _RIGHT / inches, y, text, ha="right", va="baseline", fontsize=_LISTED_SIZE)


def _legend(figure: Figure, axes: ObjectArray, labels: Sequence[str]) -> None:
    """Write the legend into the empty corner, or along the top of a panel that stands alone."""
    colours = {label: COLOURS[i % len(COLOURS)] for i, label in enumerate(labels)}
    k, inches = len(axes), figure.get_figwidth()
    if k == 1:
        *_, height = legend_layout(labels, inches)
        position = axes[0, 0].get_position()
        _place(figure, axes, _RIGHT, position.y0 * figure.get_figheight(), height)
        run_legend(figure, colours, inches)
        return
    room = (k - 1) * (_panel_inches(axes) + _GAP) - 2 * _EDGE
    run_legend(figure, colours, min(room, 3.0), loc="upper right", bbox_to_anchor=(1.0, 1.0))


def _mark(axes: ObjectArray, names: Sequence[str], reference: Mapping[str, float], scale: Mapping[str, float]) -> None:
    for row, y in enumerate(names):
        for column, x in enumerate(names[: row + 1]):
            ax = axes[row, column]
            style = {"color": "black", "lw": 0.7, "ls": ":"}
            if x in reference:
                ax.axvline(reference[x] * scale[x], **style)
            if y in reference and row != column:
                ax.axhline(reference[y] * scale[y], **style)
