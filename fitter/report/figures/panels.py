"""Pieces that several figures share: thinned draws, ranges, smooth densities, contours."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from fitter.array_types import FloatArray
from fitter.report.figures.style import LEVELS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.inference.posterior import Posterior

__all__ = [
    "common_exponent",
    "contours",
    "density",
    "draw_density",
    "legend_layout",
    "plot_range",
    "redshift_ticks",
    "run_legend",
    "runs_of",
    "thinned",
]

_MOST_DRAWS = 150_000  # more make a slower figure, not a better one
_BINS = 44
_SMOOTHING = 1.3  # bins
LINE = 0.9999  # correlation of two parameters of which one says all
_HANDLE, _LETTER, _LINE_HEIGHT = 0.5, 0.062, 0.16  # inches of a legend: its line with its gaps, a letter, a row
_REDSHIFTS = (0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5)


Run = TypeVar("Run")


def runs_of(posteriors: Run | Mapping[str, Run]) -> dict[str, Run]:
    """Return {label: run} from one run or a mapping of several; a run is a posterior, or what a figure shows of one."""
    return dict(posteriors) if isinstance(posteriors, Mapping) else {"": posteriors}


def thinned(posterior: Posterior, name: str, most: int = _MOST_DRAWS) -> np.ndarray:
    """Return one parameter's draws, evenly thinned, the same ones for every parameter.

    Parameters
    ----------
    posterior : Posterior
    name : str
    most : int
        Draws at most (about).

    Returns
    -------
    (n,) float
        NaN where the parameter is undefined.
    """
    draws = posterior.draws(name)
    # Whole steps are skipped: neighbours in a chain repeat each other, walkers do not.
    stride = min(max(1, -(-draws.size // most)), max(1, draws.shape[1]))
    return draws[:, ::stride, :].reshape(-1)


def plot_range(columns: Iterable[FloatArray], share: float = 0.9985) -> tuple[float, float]:
    """Range that shows the given share of every run's draws of one parameter, with a margin.

    A posterior cut by its prior is drawn with its edge on the frame.
    """
    tail = 0.5 * (1 - share)
    columns = [c[np.isfinite(c)] for c in columns]
    lows, highs = zip(*(np.quantile(c, [tail, 1 - tail]) for c in columns), strict=True)
    low, high = min(lows), max(highs)
    if not high > low:
        pad = 0.5 * abs(low) or 0.5
        return low - pad, low + pad
    margin = 0.08 * (high - low)
    bottom, top = low - margin, high + margin
    if all(_is_cut(-c) for c in columns if c.min() < low + margin):
        bottom = max(bottom, min(c.min() for c in columns))
    if all(_is_cut(c) for c in columns if c.max() > high - margin):
        top = min(top, max(c.max() for c in columns))
    return float(bottom), float(top)


def _is_cut(draws: np.ndarray) -> bool:
    """Whether a distribution ends abruptly at its upper end, as a prior's edge cuts it.

    Beyond the 99.9 % point a cut one has a ninth of the way from 99 to 99.9 % left, a Gaussian nearly twice that way.
    """
    near, nearer = np.quantile(draws, [0.99, 0.999])
    return bool(draws.max() - nearer < 0.3 * (nearer - near))


def common_exponent(limits: tuple[float, float]) -> int:
    """Power of ten to take out of an axis's numbers, 0 where they are readable as they are."""
    size = max(abs(limits[0]), abs(limits[1]))
    power = int(np.floor(np.log10(size))) if size > 0 else 0
    return power if power < -4 or power > 5 else 0


def density(draws: np.ndarray, limits: tuple[float, float], bins: int = 120) -> tuple[np.ndarray, np.ndarray]:
    """Smooth one-dimensional density with reflection at the ends, peak 1.

    Returns
    -------
    x, y : (bins,) float
    """
    from scipy.ndimage import gaussian_filter1d

    counts, edges = np.histogram(draws, bins=bins, range=limits)
    # Scott's rule, widened since draws of a chain are not independent: still narrow beside the posterior's own width.
    inside = draws[(draws >= limits[0]) & (draws <= limits[1])]
    bandwidth = 1.6 * inside.std() * max(inside.size, 2) ** -0.2 if inside.size else 0.0
    smooth = gaussian_filter1d(counts.astype(float), max(bandwidth / (edges[1] - edges[0]), 1.0), mode="reflect")
    return 0.5 * (edges[1:] + edges[:-1]), smooth / max(smooth.max(), 1e-300)


def draw_density(ax: Axes, draws: FloatArray, limits: tuple[float, float], colour: str, *, fill: bool = False) -> None:
    """Draw a marginal density."""
    x, y = density(draws, limits)
    ax.plot(x, y, color=colour)
    if fill:
        ax.fill_between(x, y, color=colour, alpha=0.12, linewidth=0)


def contours(
    ax: Axes, x: FloatArray, y: FloatArray, limits: Sequence[tuple[float, float]], colour: str, *, fill: bool = True, bins: int = _BINS
) -> None:
    """Draw the smallest regions that hold 68.3 and 95.4 % of the draws.

    Parameters
    ----------
    ax : Axes
    x, y : (n,) float
    limits : ((low, high), (low, high))
        Of x and y.
    colour : str
    fill : bool
        Shade the regions, darker inside.
    """
    import corner
    from matplotlib.colors import to_rgba
    from matplotlib.patches import Rectangle

    defined = np.isfinite(x) & np.isfinite(y)
    if not defined.all():
        x, y = x[defined], y[defined]
    if _on_a_line(x, y):
        _segment(ax, x, y, colour)
        return
    shades = [to_rgba(colour, 0.0), to_rgba(colour, 0.28), to_rgba(colour, 0.62)]
    before = len(ax.collections)
    # corner warns about thin samples through logging; a report's own warnings say so already.
    corner.hist2d(
        x,
        y,
        ax=ax,
        bins=bins,
        range=limits,
        levels=LEVELS,
        smooth=_SMOOTHING,
        color=colour,
        quiet=True,
        plot_datapoints=False,
        plot_density=False,
        no_fill_contours=True,
        fill_contours=fill,
        contourf_kwargs={"colors": shades, "antialiased": True},
        contour_kwargs={"linewidths": 0.9},
        new_fig=False,
        force_range=True,
    )
    # corner closes contours beyond the range, where a prior allows nothing.
    inside = Rectangle((limits[0][0], limits[1][0]), np.ptp(limits[0]), np.ptp(limits[1]), transform=ax.transData)
    for drawn in ax.collections[before:]:
        drawn.set_clip_path(inside)


def _on_a_line(x: FloatArray, y: FloatArray) -> bool:
    """Whether one parameter follows from the other, as Ω_Λ from Ω_m in flat space: there is no region to draw."""
    return x.size > 2 and x.std() > 0 and y.std() > 0 and abs(np.corrcoef(x, y)[0, 1]) > LINE


def _segment(ax: Axes, x: FloatArray, y: FloatArray, colour: str) -> None:
    """Draw the pieces of the line that hold 68.3 and 95.4 % of the draws, as wide as the one is likelier than the other."""
    slope, offset = np.polyfit(x, y, 1)
    for level, width in zip(LEVELS[::-1], (1.4, 3.2), strict=True):
        ends = np.quantile(x, [0.5 - level / 2, 0.5 + level / 2])
        ax.plot(ends, offset + slope * ends, color=colour, lw=width, alpha=0.75, solid_capstyle="butt", zorder=3)


def redshift_ticks(ax: Axes) -> None:
    """Put plain numbers (1, 2, 5 in each decade) on a logarithmic redshift axis whose limits are set."""
    from matplotlib.ticker import FuncFormatter, NullFormatter

    low, high = ax.get_xlim()
    ticks = [z for z in _REDSHIFTS if low <= z <= high]
    # Over many decades not all of them fit.
    ax.set_xticks([z for z in ticks if f"{z:e}"[0] == "1"] if len(ticks) > 8 else ticks)
    ax.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    ax.xaxis.set_minor_formatter(NullFormatter())


def legend_layout(labels: Sequence[str], inches: float) -> tuple[list[str], int, float]:
    """Return how a legend of runs fits into a width: the labels, broken where they are too long, columns, and height in inches."""
    labels = [textwrap.fill(label, max(int((inches - _HANDLE) / _LETTER), 8)) for label in labels]
    longest = max(len(line) for label in labels for line in label.split("\n"))
    columns = int(np.clip(inches / (_HANDLE + _LETTER * longest), 1, len(labels)))
    filled = np.array_split(labels, columns)  # matplotlib fills column by column
    lines = max(sum(1 + label.count("\n") for label in column) for column in filled)
    return labels, columns, 0.14 + _LINE_HEIGHT * lines


def run_legend(figure: Figure, colours: Mapping[str, str], inches: float, **where: Any) -> None:
    """Draw the legend of several runs, by default along the top of the figure, in the room that :func:`legend_layout` gives.

    Parameters
    ----------
    figure : Figure
    colours : mapping
        Label of each run → its colour.
    inches : float
        Width that it may take.
    **where
        As matplotlib places a legend.
    """
    from matplotlib.lines import Line2D

    labels, columns, _ = legend_layout(list(colours), inches)
    handles = [Line2D([], [], color=colour, lw=2, label=label) for label, colour in zip(labels, colours.values(), strict=True)]
    place = {"loc": "upper center", "bbox_to_anchor": (0.5, 1.0), "columnspacing": 1.0, "borderaxespad": 0.3, "labelspacing": 0.35, **where}
    figure.legend(handles=handles, ncols=columns, **place)
