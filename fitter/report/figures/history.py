"""The history of the expansion: what the posterior says of H(z), q(z), w(z) and the distances."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology import get_model
from fitter.cosmology.adaptive import log_distance_at
from fitter.errors import InputError
from fitter.report.figures.panels import legend_layout, run_legend, runs_of
from fitter.report.figures.style import COLOURS, in_style, new_figure, width_inches

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.cosmology import Model
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["HistoryData", "draw_history", "history_caption", "history_data"]

PROBABILITIES = (0.023, 0.15865, 0.5, 0.84135, 0.977)  # ends of 95.4 and 68.3 %, and the median
REFERENCE_OMEGA_M = 0.3
_DRAWS = 3000
_POINTS = 121
_STEP = 1e-4  # in ln(1+z), for the derivative of E²: an error of about 1e-8
_LAMBDA_MODELS = ("flat_lcdm", "curved_lcdm")
_LABELS = {
    "expansion": r"$H(z)/(1+z)\ \ [\mathrm{km\,s^{-1}\,Mpc^{-1}}]$",
    "relative_expansion": r"$H(z)/[H_0\,(1+z)]$",
    "deceleration": "$q(z)$",
    "equation_of_state": "$w(z)$",
    "distance": r"$\mu - \mu_{\Lambda\mathrm{CDM}}\ [\mathrm{mag}]$",
}


@dataclass(frozen=True)
class HistoryData:
    """Quantiles of the posterior at each redshift.

    Parameters
    ----------
    redshift : (m,) float
    bands : dict of (5, m) float
        By name: ``expansion`` (H, km/s/Mpc) or ``relative_expansion`` (H/H0), ``deceleration``,
        ``equation_of_state``, ``distance`` (mag, for the same H0); rows are the quantiles of `PROBABILITIES`.
    z_acceleration : (3,) float or None
        Ends of the 68.3 % interval and median (low, median, high) of the redshift where acceleration began.
    undefined : float
        Share of the posterior that has no such redshift.
    """

    redshift: np.ndarray
    bands: dict[str, np.ndarray] = field(default_factory=dict)
    z_acceleration: np.ndarray | None = None
    undefined: float = 0.0


def history_data(log_posterior: LogPosterior, posterior: Posterior) -> HistoryData:
    """Work out the history of the expansion over the redshifts of the data.

    Parameters
    ----------
    log_posterior : LogPosterior
    posterior : Posterior

    Returns
    -------
    HistoryData
        A family that gives distances alone has no expansion rate; a cosmological constant has no w(z) to show.
    """
    sample = log_posterior.sample
    flow = ~np.asarray(sample.is_calibrator)
    z = np.linspace(0.0, float(sample.redshift[flow].max()), _POINTS)
    flat = posterior.chain.reshape(-1, posterior.chain.shape[-1])
    theta = flat[np.linspace(0, len(flat) - 1, min(_DRAWS, len(flat))).astype(int)]
    own, omega_r, h0 = log_posterior.cosmology(theta)
    model, bands = log_posterior.model, {"distance": _distance(log_posterior, own, omega_r, z)}
    if model.has_expansion_rate:
        e2, q = expansion(model, z, own, omega_r)
        bands["relative_expansion" if h0 is None else "expansion"] = np.sqrt(e2) * (1.0 if h0 is None else h0[:, None])
        bands["deceleration"] = q
    if hasattr(model, "equation_of_state") and model.name not in _LAMBDA_MODELS:
        bands["equation_of_state"] = np.broadcast_to(model.equation_of_state(z, own), (len(own), len(z)))
    order = [name for name in _LABELS if name in bands]
    began, undefined = _began(posterior)
    return HistoryData(z, {name: np.nanquantile(bands[name], PROBABILITIES, axis=0) for name in order}, began, undefined)


def expansion(model: Model, z: FloatArray, own: FloatArray, omega_r: float | FloatArray) -> tuple[FloatArray, FloatArray]:
    """E² and q = −1 + ½ d ln E² / d ln(1+z) of a model, (W, m) each.

    Parameters
    ----------
    model : Model
    z : (m,) float
    own : (W, p) float
        The model's own parameters.
    omega_r : (W,) float
    """
    up, down = ((1 + z) * np.exp(step) - 1 for step in (_STEP, -_STEP))
    e2 = model.e_squared(z, own, omega_r)
    slope = (model.e_squared(up, own, omega_r) - model.e_squared(down, own, omega_r)) / (2 * _STEP)
    return e2, -1 + 0.5 * slope / e2


def _distance(log_posterior: LogPosterior, own: FloatArray, omega_r: float | FloatArray, z: FloatArray) -> np.ndarray:
    """Distance moduli minus those of flat ΛCDM with the same H0, (W, m)."""
    reference = log_distance_at(get_model("flat_lcdm"), np.array([[REFERENCE_OMEGA_M]]), z, float(np.mean(omega_r)))
    return log_distance_at(log_posterior.model, own, z, omega_r) - reference


def _began(posterior: Posterior) -> tuple[np.ndarray | None, float]:
    if "z_acceleration" not in posterior.kinds:
        return None, 0.0
    draws = np.asarray(posterior.draws("z_acceleration"), dtype=float)
    defined = np.isfinite(draws)
    if not defined.any():
        return None, 1.0
    return np.quantile(draws[defined], [0.1587, 0.5, 0.8413]), float(1 - defined.mean())


@in_style
def draw_history(histories: HistoryData | Mapping[str, HistoryData], *, width: str | float = "double") -> Figure:
    """Draw the bands of one fit, or of several over each other.

    Parameters
    ----------
    histories : HistoryData or mapping of str to HistoryData
    width : {"single", "double"} or float

    Returns
    -------
    matplotlib.figure.Figure
    """
    runs = runs_of(histories)
    names = [name for name in _LABELS if any(name in run.bands for run in runs.values())]
    if len({"expansion", "relative_expansion"} & set(names)) == 2:
        raise InputError("fits on a relative and on an absolute distance scale share no axis for H(z)", cure="Draw them apart.")
    wide = width_inches(width) > 5
    columns = {1: 1, 2: 2, 3: 3}.get(len(names), 2) if wide else 1
    rows = -(-len(names) // columns)
    legend = legend_layout(list(runs), width_inches(width))[2] if len(runs) > 1 else 0.0
    # One panel as wide as two columns would be a strip.
    figure = new_figure(4.6 if width == "double" and len(names) == 1 else width, height=0.5 + legend + (2.0 if wide else 1.7) * rows)
    inches, height = figure.get_size_inches()
    axes = figure.subplots(
        rows, columns, sharex=True, squeeze=False, gridspec_kw={"wspace": 0.45 if columns == 3 else 0.28, "hspace": 0.08}
    )
    figure.subplots_adjust(left=0.58 / inches, right=1 - 0.1 / inches, bottom=0.42 / height, top=1 - (0.1 + legend) / height)
    for ax, name in zip(axes.ravel(), names, strict=False):
        _panel(ax, name, runs)
    for ax in axes.ravel()[len(names) :]:
        ax.remove()
    for ax in axes.ravel()[: len(names)][-columns:]:
        ax.tick_params(labelbottom=True)
        ax.set_xlabel("Redshift  $z$")
    for first in range(columns):
        figure.align_ylabels(axes.ravel()[: len(names)][first::columns])
    if len(runs) > 1:
        run_legend(figure, {label: COLOURS[i % len(COLOURS)] for i, label in enumerate(runs)}, inches)
    return figure


def _panel(ax: Axes, name: str, runs: Mapping[str, HistoryData]) -> None:
    from matplotlib.ticker import MaxNLocator

    ends = []
    for i, run in enumerate(runs.values()):
        if name not in run.bands:
            continue
        z, colour = run.redshift, COLOURS[i % len(COLOURS)]
        low2, low, median, high, high2 = run.bands[name] / ((1 + z) if "expansion" in name else 1.0)
        ax.fill_between(z, low2, high2, color=colour, alpha=0.18, lw=0)
        ax.fill_between(z, low, high, color=colour, alpha=0.38, lw=0)
        ax.plot(z, median, color=colour, lw=1.0)
        ends += [low2.min(), high2.max()]
        if name == "deceleration" and run.z_acceleration is not None:
            start, middle, stop = run.z_acceleration
            if middle < z[-1]:
                ax.errorbar(middle, 0, xerr=[[middle - start], [stop - middle]], fmt="o", color=colour, ms=3.5, capsize=2, lw=1, zorder=5)
    level = {"deceleration": 0.0, "equation_of_state": -1.0, "distance": 0.0}.get(name)
    if level is not None:
        ax.axhline(level, color="black", lw=0.6, ls=":")
        ends += [level]
    margin = 0.07 * (max(ends) - min(ends))
    ax.set_ylim(min(ends) - margin, max(ends) + margin)
    ax.set_xlim(0, max(run.redshift[-1] for run in runs.values()))
    ax.xaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5, 10]))
    ax.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10], prune="both"))
    ax.set_ylabel(_LABELS[name])


def history_caption(histories: HistoryData | Mapping[str, HistoryData]) -> str:
    """Return the caption of the history figure."""
    runs = runs_of(histories)
    names = {name for run in runs.values() for name in run.bands}
    text = "History of the expansion: posterior median (line), central 68.3 % (dark) and 95.4 % (light) at each redshift. "
    if names & {"expansion", "relative_expansion"}:
        text += "H(z)/(1+z) rises towards the present where the expansion accelerates. "
    if "deceleration" in names and any(r.z_acceleration is not None and r.z_acceleration[1] < r.redshift[-1] for r in runs.values()):
        text += "Point on q = 0: the redshift where acceleration began, median and 68.3 %. "
        share = max(r.undefined for r in runs.values())
        text += f"{100 * share:.2g} % of the posterior has no such redshift and is left out of it. " if share > 0 else ""
    if "equation_of_state" in names:
        text += "Dotted in w(z): a cosmological constant. "
    text += f"Distances are compared with flat ΛCDM of matter density {REFERENCE_OMEGA_M} and the same expansion rate today."
    return text + (f" Runs: {', '.join(runs)}." if len(runs) > 1 else "")
