"""The covariance of the data as pictures: who shares errors with whom, and what the errors are made of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray, IntArray
from fitter.report.figures.binned import redshift_edges
from fitter.report.figures.groups import group_codes, short_name
from fitter.report.figures.panels import redshift_ticks
from fitter.report.figures.style import COLOURS, in_style, new_figure, width_inches
from fitter.report.information import noise_parameter, noise_scale

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.noise import Noise
    from fitter.sample.sample import Sample

__all__ = [
    "BudgetData",
    "CorrelationData",
    "budget_caption",
    "budget_data",
    "correlation_caption",
    "correlation_data",
    "draw_budget",
    "draw_correlation",
]

_CELLS = 36  # about so many rows and columns of cells
_FEW = 60  # up to so many supernovae each is a cell of its own
_MOST_TERMS = 8
_LARGEST = 20_000  # rows of a dense matrix that are looked at
_BLOCK = 2_000
_NAME_HEIGHT = 0.29  # inches that a survey's two lines need
_BELOW = 0.44  # inches under the matrix of correlations


@dataclass(frozen=True)
class CorrelationData:
    """Mean correlation of the errors within and between cells of one survey and a range of redshift.

    Parameters
    ----------
    matrix : (b, b) float
        A supernova's correlation with itself is left out; NaN where a cell of one meets itself.
    group : (b,) str
        The survey of each cell.
    low, high : (b,) float
        The redshifts of its members.
    count : (b,) int
    """

    matrix: np.ndarray
    group: np.ndarray
    low: np.ndarray
    high: np.ndarray
    count: np.ndarray


def correlation_data(sample: Sample, noise: Noise | None = None) -> CorrelationData:
    """Work out the mean correlations, survey by survey, each in order of redshift.

    Parameters
    ----------
    sample : Sample
        Calibrators are left out.
    noise : Noise, optional
        The covariance as fitted, the sample's own by default. A factor on all errors changes no correlation.

    Notes
    -----
    No N × N array is made of a diagonal covariance with modes.
    """
    noise = sample.noise if noise is None else noise
    cell, names, b = _cells(sample)
    flow = np.flatnonzero(cell >= 0)
    noise = noise.inverted() if noise.precision is not None else noise
    sigma = np.sqrt(noise.total_variance)
    total = np.zeros((b, b))
    members = cell[flow]
    # Mode by mode: a second N × k array of a million supernovae is a gigabyte.
    shifts = np.array([np.bincount(members, weights=mode[flow] / sigma[flow], minlength=b) for mode in noise.modes.T]).reshape(-1, b).T
    total += shifts @ shifts.T
    own = np.einsum("ij,ij->i", noise.modes, noise.modes) / sigma**2
    if noise.dense is not None:
        total += _dense_sums(noise.dense, sigma, cell, b)
        own = own + np.diagonal(noise.dense) / sigma**2
    # What is left of each datum's correlation with itself after the uncorrelated part, which was never added.
    total[np.diag_indices(b)] -= np.bincount(cell[flow], weights=own[flow], minlength=b)
    count = np.bincount(cell[flow], minlength=b)
    pairs = np.outer(count, count) - np.diag(count)
    with np.errstate(invalid="ignore", divide="ignore"):
        matrix = np.where(pairs > 0, total / pairs, np.nan)
    low, high = (np.array([f(sample.redshift[cell == i]) for i in range(b)]) for f in (np.min, np.max))
    return CorrelationData(matrix, np.array(names), low, high, count)


def _cells(sample: Sample) -> tuple[np.ndarray, list[str], int]:
    """Cell of each row (−1 for calibrators), the survey of each cell, and their number."""
    flow = np.flatnonzero(~np.asarray(sample.is_calibrator))
    group = None if sample.group is None else np.asarray(sample.group)[flow]
    names, code = group_codes(group, len(flow))
    cell = np.full(sample.n, -1)
    of_cell: list[str] = []
    for i, name in enumerate(names):
        rows = flow[code == i]
        rows = rows[np.argsort(sample.redshift[rows], kind="stable")]
        share = len(rows) if len(flow) <= _FEW else max(2, round(_CELLS * len(rows) / len(flow)))
        for part in np.array_split(rows, min(share, len(rows))):
            cell[part] = len(of_cell)
            of_cell.append(name)
    return cell, of_cell, len(of_cell)


def _dense_sums(dense: FloatArray, sigma: FloatArray, cell: IntArray, b: int) -> np.ndarray:
    """Sum of dense_ij / (σi σj) over the members of every two cells, in blocks of rows."""
    members = np.zeros((len(cell), b))
    members[np.flatnonzero(cell >= 0), cell[cell >= 0]] = 1.0
    members /= sigma[:, None]
    total = np.zeros((b, b))
    for start in range(0, len(cell), _BLOCK):
        rows = slice(start, start + _BLOCK)
        total += members[rows].T @ (dense[rows] @ members)
    return total


@in_style
def draw_correlation(data: CorrelationData, *, width: str | float = "single") -> Figure:
    """Draw the matrix of mean correlations, with the surveys named along it.

    Parameters
    ----------
    data : CorrelationData
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib import colormaps
    from matplotlib.colors import ListedColormap
    from matplotlib.ticker import MaxNLocator

    inches = min(width_inches(width), 5.2) if isinstance(width, str) else width_inches(width)
    left, right, below, above = 0.95, 0.68, _BELOW, 0.08
    side = inches - left - right
    height = side + below + above
    figure = new_figure(inches, height=height)
    ax = figure.add_axes((left / inches, below / height, side / inches, side / height))
    finite = np.abs(data.matrix[np.isfinite(data.matrix)])
    reach = float(finite.max()) if finite.size and finite.max() > 0 else 1.0
    lowest = -reach if np.nanmin(data.matrix, initial=0.0) < -0.02 * reach else 0.0
    # White is zero, red positive, blue negative, whatever the range.
    half = ListedColormap(colormaps["RdBu_r"](np.linspace(0.5 if lowest == 0 else 0.0, 1.0, 256)))
    image = ax.imshow(data.matrix, cmap=half, vmin=lowest, vmax=reach, interpolation="nearest", origin="upper")
    bar = figure.colorbar(image, cax=figure.add_axes(((left + side + 0.07) / inches, below / height, 0.1 / inches, side / height)))
    bar.set_label("Mean correlation", labelpad=2)
    bar.ax.yaxis.set_major_locator(MaxNLocator(5))
    _name_surveys(ax, data, side)
    return figure


def _name_surveys(ax: Axes, data: CorrelationData, side: float) -> None:
    b = len(data.group)
    starts = np.flatnonzero(np.r_[True, data.group[1:] != data.group[:-1]])
    stops = [*starts[1:].tolist(), b]
    for edge in starts[1:] - 0.5:
        ax.axhline(edge, color="black", lw=0.6)
        ax.axvline(edge, color="black", lw=0.6)
    ax.set_xticks([])
    ax.set_yticks([])
    wanted = np.array([side * 0.5 * (start + stop) / b for start, stop in zip(starts.tolist(), stops, strict=True)])
    for i, position in enumerate(_apart(wanted, 0.5 * _NAME_HEIGHT, side + _BELOW - 0.5 * _NAME_HEIGHT - 0.02)):
        place: dict[str, Any] = {"transform": ax.transAxes, "ha": "right", "va": "center", "fontsize": 8, "linespacing": 1.0}
        ax.text(-0.05, 1 - position / side, _survey_text(data, int(starts[i]), stops[i]), **place)
        ends = [-0.04, -0.01], [1 - position / side, 1 - wanted[i] / side]
        ax.plot(*ends, transform=ax.transAxes, color="black", lw=0.4, clip_on=False)
    several = len(starts) > 1
    ax.set_xlabel("Surveys in the same order,\nredshift rising in each" if several else "Redshift, rising", labelpad=4)


def _apart(wanted: np.ndarray, low: float, high: float) -> np.ndarray:
    """Move the positions of names, in rising order, so far that they do not meet, and keep them between two ends where that can be."""
    placed = wanted.copy()
    for i in range(len(placed)):
        placed[i] = max(placed[i], low if i == 0 else placed[i - 1] + _NAME_HEIGHT)
    for i in reversed(range(len(placed))):
        placed[i] = min(placed[i], high if i == len(placed) - 1 else placed[i + 1] - _NAME_HEIGHT)
    return placed


def _survey_text(data: CorrelationData, start: int, stop: int) -> str:
    name = short_name(str(data.group[start]), 13)
    return f"{name}\n{data.low[start]:.2g}–{data.high[stop - 1]:.2g}"


def correlation_caption(data: CorrelationData) -> str:
    """Return the caption of the correlation figure."""
    groups = list(dict.fromkeys(data.group.tolist()))
    single = bool((data.count == 1).all())
    text = "Correlation of the errors of the data as fitted, "
    text += "every supernova with every other, " if single else f"averaged over the pairs of supernovae of {len(data.group)} cells, "
    text += "in order of redshift" + (
        f" within each survey ({', '.join(groups)}; their redshifts beside the names)" if len(groups) > 1 else ""
    )
    return text + ". A supernova's correlation with itself is left out."


# ---------------------------------------------------------------------- share of the variance


@dataclass(frozen=True)
class BudgetData:
    """Variance of each uncertainty term in redshift bins, averaged with inverse-variance weights.

    Parameters
    ----------
    redshift : (b,) float
        Geometric mean of the members.
    edges : (b + 1,) float
    labels : list of str
    variance : (t, b) float
        mag².
    """

    redshift: np.ndarray
    edges: np.ndarray
    labels: list[str]
    variance: np.ndarray


def budget_data(log_posterior: LogPosterior, values: Mapping[str, float]) -> BudgetData:
    """Work out what the variance of the data is made of, bin by bin.

    Parameters
    ----------
    log_posterior : LogPosterior
    values : mapping
        Of the parameters at the best fit: a fitted scatter is a term of its own, a fitted scale multiplies all.
    """
    sample = log_posterior.sample
    flow = ~np.asarray(sample.is_calibrator)
    z = sample.redshift[flow]
    scale2 = noise_scale(log_posterior, values) ** 2
    terms = [(term.label, np.asarray(term.variance)[flow]) for term in sample.terms]
    scatter = noise_parameter(log_posterior, values, "intrinsic_scatter", 0.0)
    if scatter:
        terms.append(("intrinsic scatter", np.full(len(z), scatter**2)))
    edges = redshift_edges(z, int(np.clip(len(z) // 20, 3, 16)))
    index = np.searchsorted(edges, z, side="right") - 1
    present = np.unique(index)
    count = np.bincount(index, minlength=len(edges) - 1)[present]
    mean = lambda x: np.bincount(index, weights=x, minlength=len(edges) - 1)[present] / count  # noqa: E731
    # Weighted as a fit weighs them: a supernova with an error of a hundred magnitudes says nothing, in this figure as well.
    weight = 1.0 / np.sum([v for _, v in terms], axis=0)
    variance = scale2 * np.array([mean(weight * v) for _, v in terms]) / mean(weight)
    labels, variance = _largest([label.replace("_", " ") for label, _ in terms], variance)
    # An empty bin gives its room to the neighbours.
    borders = np.r_[edges[0], np.sqrt(edges[present[:-1] + 1] * edges[present[1:]]), edges[-1]]
    return BudgetData(np.exp(mean(np.log(z))), borders, labels, variance)


def _largest(labels: list[str], variance: np.ndarray) -> tuple[list[str], np.ndarray]:
    """Keep the terms that matter most, in their order, and sum up the rest."""
    if len(labels) <= _MOST_TERMS:
        return labels, variance
    order = np.argsort(-variance.mean(axis=1), kind="stable")
    kept, rest = np.sort(order[: _MOST_TERMS - 1]), order[_MOST_TERMS - 1 :]
    return [*(labels[i] for i in kept), f"{len(rest)} others"], np.vstack([variance[kept], variance[rest].sum(axis=0)])


@in_style
def draw_budget(data: BudgetData, *, width: str | float = "single") -> Figure:
    """Draw the share of each term against redshift, and above it the whole standard deviation.

    Parameters
    ----------
    data : BudgetData
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.ticker import MaxNLocator

    inches = width_inches(width)
    if len(data.labels) == 1:
        return _draw_sigma(data, inches)
    columns = 2 if inches < 5 else 4
    legend = 0.05 + 0.15 * -(-len(data.labels) // columns)
    height = 0.5 + legend + (2.6 if inches < 5 else 3.2)
    figure = new_figure(inches, height=height)
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=[1, 2.2], gridspec_kw={"hspace": 0.06})
    figure.subplots_adjust(left=0.56 / inches, right=1 - 0.12 / inches, bottom=0.42 / height, top=1 - (0.04 + legend) / height)
    total = data.variance.sum(axis=0)
    _sigma_panel(upper, data)
    upper.yaxis.set_major_locator(MaxNLocator(3, prune="lower"))
    below, patches = np.zeros(len(total)), []
    for i, share in enumerate(data.variance / total):
        shade = {"color": COLOURS[i % len(COLOURS)], "alpha": 0.85 if i < len(COLOURS) else 0.4, "lw": 0}
        patches.append(lower.stairs(below + share, data.edges, baseline=below, fill=True, label=short_name(data.labels[i], 24), **shade))
        below = below + share
    lower.set_ylim(0, 1)
    lower.set_ylabel("Share of the variance")
    _redshift_axis(lower, data)
    upper.tick_params(labelbottom=False, which="both")
    figure.align_ylabels([upper, lower])
    tight = {"handlelength": 1.0, "columnspacing": 1.0, "handletextpad": 0.4, "borderaxespad": 0.2, "labelspacing": 0.25}
    figure.legend(handles=patches, loc="upper center", bbox_to_anchor=(0.5, 1.0), ncols=columns, **tight)
    return figure


def _sigma_panel(ax: Axes, data: BudgetData) -> None:
    sigma = np.sqrt(data.variance.sum(axis=0))
    ax.stairs(sigma, data.edges, color="black", lw=1.0, baseline=None)
    ax.set_ylim(0, 1.15 * float(sigma.max()))
    ax.set_ylabel(r"$\sigma$  [mag]")


def _redshift_axis(ax: Axes, data: BudgetData) -> None:
    ax.set_xlabel("Redshift  $z$")
    ax.set_xscale("log")
    ax.set_xlim(data.edges[0], data.edges[-1])
    redshift_ticks(ax)


def _draw_sigma(data: BudgetData, inches: float) -> Figure:
    """The standard deviation alone: of one term there are no shares."""
    figure = new_figure(inches, height=0.5 + (1.5 if inches < 5 else 1.9))
    height = figure.get_figheight()
    ax = figure.add_axes((0.56 / inches, 0.42 / height, 1 - 0.68 / inches, 1 - 0.52 / height))
    _sigma_panel(ax, data)
    _redshift_axis(ax, data)
    return figure


def budget_caption(data: BudgetData) -> str:
    """Return the caption of the budget figure."""
    if len(data.labels) == 1:
        return (
            f"Standard deviation of a supernova in {data.variance.shape[1]} redshift bins: root of the inverse mean of the inverse "
            f"variances. There is one term, {data.labels[0]}."
        )
    return (
        f"What the variance of the data is made of, in {data.variance.shape[1]} redshift bins: {', '.join(data.labels)}. Means over the "
        "supernovae of a bin are weighted by their inverse variances. Bottom: each term's mean variance over the sum; top: square root of "
        "the sum. Correlations between supernovae, which the share does not show, make the systematic terms weigh more in the parameters "
        "than here."
    )
