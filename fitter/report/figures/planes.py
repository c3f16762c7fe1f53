"""Two parameters against each other, with the lines that give the plane its meaning."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.report.facts import axis_label
from fitter.report.figures.panels import contours, legend_layout, plot_range, run_legend, runs_of, thinned
from fitter.report.figures.style import COLOURS, GREY, LEVELS, in_style, new_figure, width_inches
from fitter.report.prose import cite, symbol

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from numpy.typing import ArrayLike

    from fitter.inference.posterior import Posterior

__all__ = ["PLANES", "no_big_bang", "plane_caption", "plane_figure", "planes_of", "recollapse"]

_COVERED = 1e-3  # share of the draws that a label may cover: beyond the contours there are always some
_PLACES = np.linspace(0.05, 0.95, 37)  # of a label, along the visible part of its line


def no_big_bang(omega_m: ArrayLike) -> np.ndarray:
    """Ω_Λ at and above which there was no big bang (Carroll, Press & Turner 1992, eq. 11).

    Parameters
    ----------
    omega_m : array_like
        Matter density, ≥ 0.
    """
    m = np.asarray(omega_m, dtype=float)
    with np.errstate(invalid="ignore", divide="ignore"):
        x = (1 - m) / m
        # cosh below Ω_m = ½, cos above; at Ω_m = 0 the limit is 1.
        root = np.where(m < 0.5, np.cosh(np.arccosh(np.maximum(x, 1)) / 3), np.cos(np.arccos(np.clip(x, -1, 1)) / 3))
        return np.where(m > 0, 4 * m * root**3, 1.0)


def recollapse(omega_m: ArrayLike) -> np.ndarray:
    """Ω_Λ below which the expansion ends in a recollapse (Carroll, Press & Turner 1992, eq. 12)."""
    m = np.asarray(omega_m, dtype=float)
    with np.errstate(invalid="ignore", divide="ignore"):
        angle = np.arccos(np.clip((1 - m) / m, -1, 1)) / 3 + 4 * np.pi / 3
    return np.where(m > 1, 4 * m * np.cos(angle) ** 3, 0.0)


@dataclass(frozen=True)
class Line:
    """A labelled line y(x) of a plane; or x = const where ``at`` is given. ``where``: how far along the visible
    part its label stands, above or below it."""

    label: str
    y: Callable | None = None
    at: float | None = None
    dashes: tuple = (5, 2)
    where: float = 0.8
    below: bool = False


@dataclass(frozen=True)
class Plane:
    """Names of the axes, the least range each shows, and the lines."""

    x: str
    y: str
    show: tuple[tuple[float, float], tuple[float, float]]
    lines: tuple[Line, ...]
    shade: Callable | None = None  # above this the plane is forbidden
    shade_label: str = ""


PLANES = {
    "densities": Plane(
        "omega_m",
        "omega_lambda",
        ((0.0, 1.0), (-0.2, 1.8)),
        (
            Line("flat", lambda m: 1 - m, where=0.85),
            Line("$q_0 = 0$, accelerating above", lambda m: m / 2, dashes=(1, 1.5), where=0.3),
            Line("recollapses", recollapse, dashes=(5, 2, 1, 2), where=0.25, below=True),
        ),
        no_big_bang,
        "no big bang",
    ),
    "w": Plane("omega_m", "w", ((0.1, 0.5), (-1.2, -0.8)), (Line("cosmological constant", lambda m: -1 + 0 * m, where=0.22),)),
    "w0wa": Plane(
        "w0",
        "wa",
        ((-1.1, -0.9), (-0.2, 0.2)),
        (
            Line("", lambda w: 0 * w),
            Line("", at=-1.0),
            Line("$w_0 + w_a = 0$", lambda w: -w, dashes=(1, 1.5), where=0.12),
        ),
    ),
}


def planes_of(posterior: Posterior) -> list[str]:
    """Names of the planes that a fit can be drawn in."""
    return [name for name, plane in PLANES.items() if {plane.x, plane.y} <= set(posterior.kinds) and posterior.kinds[plane.y] == "sampled"]


@in_style
def plane_figure(
    posteriors: Posterior | Mapping[str, Posterior],
    plane: str,
    *,
    width: str | float = "single",
    reference: Mapping[str, float] | None = None,
    colours: Mapping[str, str] | None = None,
) -> Figure:
    """Draw 68.3 and 95.4 % contours in one of the planes.

    Parameters
    ----------
    posteriors : Posterior or mapping of str to Posterior
        Several are overlaid with a legend.
    plane : {"densities", "w", "w0wa"}
    width : {"single", "double"} or float
    reference : mapping, optional
        A point to mark, e.g. the truth of a simulation.
    colours : mapping, optional
        Of each run, where it should keep the colour it has in another figure.

    Returns
    -------
    matplotlib.figure.Figure
    """
    if plane not in PLANES:
        raise InputError("unknown plane", value=plane, cure=f"Use one of {', '.join(PLANES)}.")
    chosen, runs = PLANES[plane], runs_of(posteriors)
    missing = [n for n in (chosen.x, chosen.y) if any(n not in p.kinds for p in runs.values())]
    if missing:
        raise InputError(f"the {plane} plane needs {chosen.x} and {chosen.y}", value=missing[0], cure="Fit a model that has both.")
    tables = [(thinned(p, chosen.x), thinned(p, chosen.y)) for p in runs.values()]
    colours = colours or {label: COLOURS[i % len(COLOURS)] for i, label in enumerate(runs)}
    limits = tuple(_limits([t[i] for t in tables], chosen.show[i]) for i in (0, 1))
    inches = width_inches(width)
    above = legend_layout(list(runs), inches)[2] if len(runs) > 1 else 0.0
    height = 0.9 * inches + above
    figure = new_figure(inches, height=height)
    ax = figure.add_axes((0.52 / inches, 0.42 / height, 1 - 0.70 / inches, 1 - (0.54 + above) / height))
    for label, (x, y) in zip(runs, tables, strict=True):
        contours(ax, x, y, tuple(plot_range([c]) for c in (x, y)), colours[label], bins=60)
    ax.set_xlim(*limits[0])
    ax.set_ylim(*limits[1])
    ax.set_xlabel(axis_label(chosen.x))
    ax.set_ylabel(axis_label(chosen.y))
    _draw_lines(ax, chosen, limits, np.concatenate([np.stack(t) for t in tables], axis=1))
    if reference:
        ax.plot(reference[chosen.x], reference[chosen.y], marker="+", color="black", ms=7, mew=1.2, zorder=6)
    if len(runs) > 1:
        run_legend(figure, {label: colours[label] for label in runs}, inches)
    return figure


def _limits(columns: Sequence[FloatArray], show: tuple[float, float]) -> tuple[float, float]:
    low, high = plot_range(columns)  # with a margin, unless a prior's edge is there: that stands on the frame
    return min(low, show[0]), max(high, show[1])


def _draw_lines(ax: Axes, plane: Plane, limits: Sequence[tuple[float, float]], draws: FloatArray) -> None:
    x = np.linspace(limits[0][0], limits[0][1], 400)
    if plane.shade is not None:
        edge = plane.shade(x)
        top = limits[1][1]
        ax.fill_between(x, edge, max(top, edge.max()), color=GREY, alpha=0.3, lw=0, zorder=0)
        ax.plot(x, edge, color=GREY, lw=0.8, zorder=0)
        if edge[0] < top:
            ax.text(0.03, 0.965, plane.shade_label, transform=ax.transAxes, ha="left", va="top", fontsize=8)
    for line in plane.lines:
        style: dict[str, Any] = {"color": "black", "lw": 0.8, "dashes": line.dashes, "zorder": 4}
        if line.at is not None:
            ax.axvline(line.at, **style)
        if line.y is not None:
            y = line.y(x)
            ax.plot(x, y, **style)
            _label_along(ax, line, x, y, limits, draws)


def _label_along(ax: Axes, line: Line, x: FloatArray, y: FloatArray, limits: Sequence[tuple[float, float]], draws: FloatArray) -> None:
    """Write the label along the visible part of its line, turned with it, where it covers least of the posterior."""
    from matplotlib.patheffects import withStroke

    visible = np.flatnonzero((y >= limits[1][0]) & (y <= limits[1][1]))
    if not line.label or len(visible) < 20:
        return
    halo = [withStroke(linewidth=1.6, foreground="white")]  # legible where contours run beneath
    style: dict[str, Any] = {"rotation_mode": "anchor", "ha": "center", "va": "top" if line.below else "bottom", "fontsize": 8, "zorder": 5}
    label = ax.annotate(line.label, (0, 0), xytext=(0, -2 if line.below else 2), textcoords="offset points", path_effects=halo, **style)
    points = ax.transData.transform(draws[:, np.isfinite(draws).all(axis=0)].T)
    frame = ax.get_window_extent()

    def put(where: float) -> None:
        i = visible[int(where * (len(visible) - 1))]
        j = min(i + 5, len(x) - 1)
        (x0, y0), (x1, y1) = ax.transData.transform([(x[i], y[i]), (x[j], y[j])])
        label.xy = x[i], y[i]
        label.set_rotation(float(np.degrees(np.arctan2(y1 - y0, x1 - x0))))

    def cost(where: float) -> tuple[float, float]:
        put(where)
        box = label.get_window_extent()
        if not (frame.x0 < box.x0 and box.x1 < frame.x1 and frame.y0 < box.y0 and box.y1 < frame.y1):
            return np.inf, 0.0
        covered = float(((points > box.min) & (points < box.max)).all(axis=1).mean())
        return (covered if covered > _COVERED else 0.0), abs(where - line.where)

    put(min((line.where, *_PLACES), key=cost))


def plane_caption(plane: str, labels: Sequence[str] = ()) -> str:
    """Return the caption of a plane."""
    chosen = PLANES[plane]
    text = f"{symbol(chosen.y)} against {symbol(chosen.x)}. The contours are the smallest regions that hold {100 * LEVELS[0]:.1f} % and "
    text += f"{100 * LEVELS[1]:.1f} % of the probability."
    if plane == "densities":
        text += (
            f" Lines: flat space; {symbol('q0')} = 0 (no acceleration today below it); recollapse; grey: no big bang {cite('Carroll1992')}."
        )
    elif plane == "w":
        text += f" Dashed: a cosmological constant, {symbol('w')} = −1."
    else:
        w0, wa = symbol("w0"), symbol("wa")
        text += (
            f" Dashed: {w0} = −1 and {wa} = 0, a cosmological constant where they cross; dotted: {w0} + {wa} = 0, above which dark energy "
        )
        text += "grows faster than matter towards the past."
    return f"{text} Runs: {', '.join(labels)}." if labels else text
