"""The Hubble diagram: distances against redshift, and what the best fit leaves over."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import BoolArray, FloatArray
from fitter.errors import InputError
from fitter.report.figures.binned import BinnedMeans, binned_means, redshift_edges
from fitter.report.figures.groups import MOST_GROUPS, group_codes, group_colour, short_name
from fitter.report.figures.panels import redshift_ticks
from fitter.report.figures.style import COLOURS, GREY, in_style, new_figure, width_inches
from fitter.report.information import fitted_noise, noise_scale

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

__all__ = ["REFERENCES", "HubbleData", "draw_hubble", "hubble_caption", "hubble_data", "hubble_figure"]

_FEW = 80  # up to so many points each is drawn with its error instead of bins
_MOST_POINTS = 20_000
_BAND_DRAWS = 200
_LOW = 1e-6  # a redshift at which every distance is cz/H0
REFERENCES = {"no_dark_energy": r"$\Omega_m$ as fitted, no dark energy", "empty": "empty", "matter_only": r"$\Omega_m = 1$, matter only"}


@dataclass(frozen=True)
class HubbleData:
    """What the diagram shows, as arrays (calibrators left out: their redshift is not used).

    Parameters
    ----------
    redshift, residual, error : (n,) float
        Single supernovae: residual and its total standard deviation (None where bins are drawn), mag.
    shown : (n,) float
        Value on the upper axis.
    group : (n,) str or None
    bins : BinnedMeans or None
        None where single points carry their errors.
    curve_redshift, curve, band : (m,), (m,), (2, m) float
        Best fit on the upper axis; the central 95.4 % of the posterior about it (zeros if it was not asked for).
    intercept : float
        Limit of the curve minus 5 log10 z at z → 0, mag.
    omega_m : float or None
        At the best fit, for the reference without dark energy.
    label : str
        Of the upper axis.
    n_calibrators : int
    n : int
        Supernovae, more than there are single points where they are very many.
    """

    redshift: np.ndarray
    residual: np.ndarray
    error: np.ndarray | None
    shown: np.ndarray
    group: np.ndarray | None
    bins: BinnedMeans | None
    curve_redshift: np.ndarray
    curve: np.ndarray
    band: np.ndarray
    intercept: float
    omega_m: float | None
    label: str
    n_calibrators: int
    n: int


def hubble_data(
    log_posterior: LogPosterior, optimum: Optimum, posterior: Posterior | None = None, *, bins: int | None = None
) -> HubbleData:
    """Work out what the Hubble diagram shows.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    posterior : Posterior, optional
        For the band around the best fit.
    bins : int, optional
        Number of redshift bins; chosen by the number of supernovae otherwise.
    """
    sample, theta = log_posterior.sample, np.asarray(optimum.theta, dtype=float)
    flow = ~np.asarray(sample.is_calibrator)
    if not flow.any():
        raise InputError("a Hubble diagram needs supernovae that are no calibrators")
    residual = log_posterior.residuals(theta)
    noise, scale = fitted_noise(log_posterior, optimum.values), noise_scale(log_posterior, optimum.values)
    z = sample.redshift[flow]
    label, shift = _axis(sample, log_posterior.zero_point(theta))
    single = bins is None and flow.sum() <= _FEW
    means = None if single else binned_means(noise, residual, sample.redshift, redshift_edges(z, bins), scale=scale, apart=~flow)
    points = np.unique(np.linspace(0, len(z) - 1, min(len(z), _MOST_POINTS)).astype(int))
    rows = np.flatnonzero(flow)[points]
    curve_z = np.exp(np.linspace(np.log(z.min() * 0.94), np.log(z.max() * 1.06), 160))
    return HubbleData(
        redshift=z[points],
        residual=residual[rows],
        error=scale * np.sqrt(noise.total_variance[rows]) if single else None,
        shown=sample.data[rows] - shift,
        group=None if sample.group is None else np.asarray(sample.group)[rows].astype(str),
        bins=means,
        curve_redshift=curve_z,
        curve=_predicted(log_posterior, theta, curve_z) - shift,
        band=_band(log_posterior, posterior, theta, curve_z),
        intercept=float(_predicted(log_posterior, theta, np.array([_LOW]))[0] - shift - 5 * np.log10(_LOW)),
        omega_m={**log_posterior.fixed, **optimum.values}.get("omega_m"),
        label=label,
        n_calibrators=int(sample.n_calibrators),
        n=int(flow.sum()),
    )


def _axis(sample: Sample, zero_point: float) -> tuple[str, float]:
    """Label of the upper axis, and what is taken off the data to get there."""
    if sample.distance_scale == "relative":
        if sample.data_kind == "magnitude":
            return "Standardised magnitude  $m$  [mag]", 0.0
        return r"Distance modulus  $\mu$ + constant  [mag]", 0.0
    if sample.data_kind == "magnitude":
        return r"Distance modulus  $\mu = m - M$  [mag]", zero_point
    return r"Distance modulus  $\mu$  [mag]", zero_point


def _predicted(log_posterior: LogPosterior, theta: FloatArray, z: FloatArray) -> np.ndarray:
    """What the data would be at these redshifts without noise, mag."""
    return log_posterior.distance_modulus(theta[None], z)[0] + log_posterior.zero_point(theta)


def _band(log_posterior: LogPosterior, posterior: Posterior | None, theta: FloatArray, z: FloatArray) -> np.ndarray:
    """Central 95.4 % of the predictions of posterior draws, minus the best fit, (2, m)."""
    if posterior is None:
        return np.zeros((2, len(z)))
    flat = posterior.chain.reshape(-1, posterior.chain.shape[-1])
    draws = flat[np.linspace(0, len(flat) - 1, min(_BAND_DRAWS, len(flat))).astype(int)]
    moduli = log_posterior.distance_modulus(draws, z)
    predicted = moduli + np.array([log_posterior.zero_point(row) for row in draws])[:, None]
    low, high = np.nanquantile(predicted, [0.023, 0.977], axis=0)
    return np.stack([low, high]) - _predicted(log_posterior, theta, z)


def hubble_figure(
    log_posterior: LogPosterior, optimum: Optimum, posterior: Posterior | None = None, *, bins: int | None = None, **how: Any
) -> Figure:
    """Draw the Hubble diagram of a fit with residuals from the best fit.

    Parameters
    ----------
    log_posterior, optimum, posterior, bins
        As for :func:`hubble_data`.
    **how
        As for :func:`draw_hubble`.

    Returns
    -------
    matplotlib.figure.Figure
    """
    return draw_hubble(hubble_data(log_posterior, optimum, posterior, bins=bins), **how)


@in_style
def draw_hubble(
    data: HubbleData, *, width: str | float = "double", references: Sequence[str] = ("no_dark_energy", "matter_only")
) -> Figure:
    """Draw a Hubble diagram from what :func:`hubble_data` worked out.

    Parameters
    ----------
    data : HubbleData
    width : {"single", "double"} or float
    references : sequence of {"no_dark_energy", "empty", "matter_only"}
        Models drawn beside the best fit, equal to it at z → 0.

    Returns
    -------
    matplotlib.figure.Figure
    """
    unknown = [name for name in references if name not in REFERENCES]
    if unknown:
        raise InputError("unknown reference model", value=unknown[0], cure=f"Use any of {', '.join(REFERENCES)}.")
    inches = width_inches(width)
    figure = new_figure(inches, 0.68 if inches > 5 else 1.05)
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=[1.75, 1], gridspec_kw={"hspace": 0.0})
    _draw_points(upper, lower, data)
    _draw_model(upper, lower, data)
    _draw_bins(upper, lower, data)
    lines = _draw_references(upper, lower, data, references)
    _dress(figure, upper, lower, data)
    _mark_beyond(lower, data)
    main = upper.legend(handles=[h for h in upper.get_legend_handles_labels()[0] if h not in lines], loc="lower right", markerscale=1.5)
    if lines:
        upper.legend(handles=lines, loc="upper left", handlelength=2.6)
        upper.add_artist(main)
    return figure


def _draw_points(upper: Axes, lower: Axes, data: HubbleData) -> None:
    if data.error is not None:
        style: dict[str, Any] = {"fmt": "o", "ms": 2.6, "lw": 0.8, "color": COLOURS[0], "zorder": 4}
        upper.errorbar(data.redshift, data.shown, data.error, label="data", **style)
        lower.errorbar(data.redshift, data.residual, data.error, **style)
        return
    n = data.n
    size = 2.2 if n < 3000 else 1.2
    for label, colour, members in _groups(data):
        # Thousands of vector dots make a PDF that takes seconds to open: they alone become an image.
        style = {"ls": "", "marker": "o", "ms": size, "mew": 0, "color": colour, "alpha": 0.45, "rasterized": n > 2000, "zorder": 1}
        upper.plot(data.redshift[members], data.shown[members], label=label, **style)
        lower.plot(data.redshift[members], data.residual[members], **style)


def _groups(data: HubbleData) -> Iterator[tuple[str, str, BoolArray]]:
    """Yield label, colour and members: by survey where there are a few of them, coloured as in the other figures."""
    names, code = group_codes(data.group, len(data.redshift))
    if not 2 <= len(names) <= MOST_GROUPS:
        yield "single supernovae", GREY, np.ones(len(data.redshift), dtype=bool)
        return
    for i, name in enumerate(names):
        yield short_name(name), group_colour(i), code == i


def _draw_model(upper: Axes, lower: Axes, data: HubbleData) -> None:
    upper.plot(data.curve_redshift, data.curve, color="black", lw=0.9, zorder=3, label="best fit")
    lower.axhline(0.0, color="black", lw=0.9, zorder=3)
    if data.band.any():
        shade: dict[str, Any] = {"color": "black", "alpha": 0.16, "lw": 0, "zorder": 2}
        lower.fill_between(data.curve_redshift, *data.band, **shade)
        upper.fill_between([], [], [], label="posterior, 95.4 %", **shade)  # it would be thinner than the line here: the legend needs it


def _draw_bins(upper: Axes, lower: Axes, data: HubbleData) -> None:
    if data.bins is None:
        return
    bins = data.bins
    at_model = np.interp(np.log(bins.redshift), np.log(data.curve_redshift), data.curve)
    style: dict[str, Any] = {"fmt": "s", "ms": 3.4, "lw": 1.0, "color": "black", "mec": "white", "mew": 0.4, "zorder": 5}
    upper.errorbar(bins.redshift, at_model + bins.mean, bins.error, label="binned", **style)
    lower.errorbar(bins.redshift, bins.mean, bins.error, **style)


def reference_distance(name: str, z: np.ndarray, omega_m: float | None) -> np.ndarray:
    """Luminosity distance in units of c/H0 of a universe of matter alone (Mattig 1958, in the form without cancellation)."""
    q = {"empty": 0.0, "matter_only": 0.5}.get(name, 0.5 * (omega_m or 0.0))
    return z * (1 + z * (1 - q) / (np.sqrt(1 + 2 * q * z) + 1 + q * z))


def _draw_references(upper: Axes, lower: Axes, data: HubbleData, references: Sequence[str]) -> list:
    """Draw the reference models in both panels; return the lines of the upper one for the legend."""
    z, lines = data.curve_redshift, []
    for name, dashes in zip(references, ((5, 2), (1, 1.5), (5, 2, 1, 2)), strict=False):
        if name == "no_dark_energy" and data.omega_m is None:
            continue
        modulus = 5 * np.log10(reference_distance(name, z, data.omega_m)) + data.intercept
        style: dict[str, Any] = {"color": "black", "lw": 0.8, "dashes": dashes, "zorder": 2, "label": REFERENCES[name]}
        lines += upper.plot(z, modulus, **style)
        lower.plot(z, modulus - data.curve, **style)
    return lines


def _reach(data: HubbleData) -> float:
    """Half the height of the residual panel: every error bar, and nearly all of the single points."""
    if data.error is not None:
        return 1.06 * float(np.max(np.abs(data.residual) + data.error))
    spread = 1.4826 * float(np.median(np.abs(data.residual - np.median(data.residual))))
    of_bins = 0.0 if data.bins is None else 1.1 * float(np.max(np.abs(data.bins.mean) + data.bins.error))
    return max(4.0 * spread, of_bins, 1e-3)


def beyond_panel(data: HubbleData) -> np.ndarray:
    """Return which of the single points lie outside the residual panel, (n,) bool."""
    return np.abs(data.residual) > _reach(data)


def _mark_beyond(lower: Axes, data: HubbleData) -> None:
    """Mark residuals outside the panel by triangles at its edge."""
    beyond, edge = beyond_panel(data), 0.965 * _reach(data)
    for _, colour, members in _groups(data):
        for side, marker in ((1, "^"), (-1, "v")):
            z = data.redshift[members & beyond & (np.sign(data.residual) == side)]
            if z.size:
                lower.plot(z, np.full(z.size, side * edge), ls="", marker=marker, ms=3.0, mew=0, color=colour, zorder=3)


def _off_the_seam(limits: tuple[float, float], wanted: int) -> list[float]:
    """Return three round values or more: one at the seam of the panels would meet the other's, or be hidden by the frame."""
    from matplotlib.ticker import MaxNLocator

    low, high = limits
    margin = 0.06 * (high - low)
    ticks: list[float] = []
    for most in range(wanted, 12):
        values = MaxNLocator(most, steps=[1, 2, 5, 10]).tick_values(low, high)
        ticks = [float(t) for t in values if low + margin < t < high - margin]
        if len(ticks) >= 3:
            break
    return ticks


def _dress(figure: Figure, upper: Axes, lower: Axes, data: HubbleData) -> None:
    upper.set_xscale("log")
    lower.set_xlim(data.curve_redshift[0], data.curve_redshift[-1])
    reach = _reach(data)
    lower.set_ylim(-reach, reach)
    margin = 0.04 * float(np.ptp(data.curve))
    upper.set_ylim(min(data.curve.min(), data.shown.min()) - margin, max(data.curve.max(), data.shown.max()) + margin)
    for ax, wanted in ((upper, 7), (lower, 4)):
        ax.set_yticks(_off_the_seam(ax.get_ylim(), wanted))
    upper.set_ylabel(data.label)
    lower.set_ylabel("Residual  [mag]")
    lower.set_xlabel("Redshift  $z$")
    upper.tick_params(labelbottom=False, which="both")
    redshift_ticks(lower)
    width, height = figure.get_size_inches()
    figure.subplots_adjust(left=0.56 / width, right=1 - 0.1 / width, bottom=0.42 / height, top=1 - 0.1 / height)
    figure.align_ylabels([upper, lower])


def _beyond_text(data: HubbleData) -> str:
    n = int(beyond_panel(data).sum())
    if n == 0:
        return ""
    which = "single supernova lies" if n == 1 else "single supernovae lie"
    drawn = " of those drawn" if data.n > len(data.redshift) else ""
    return f"{n} {which}{drawn} beyond the lower panel ({'a triangle at its edge' if n == 1 else 'triangles at its edges'}). "


def hubble_caption(data: HubbleData) -> str:
    """Return the caption of the Hubble diagram."""
    text = "Hubble diagram with the best fit (line), and residuals from it. "
    if data.bins is None:
        text += "Error bars: square root of the whole covariance's diagonal. "
    else:
        text += (
            f"Small points: {data.n} single supernovae. Squares: means in {len(data.bins.mean)} redshift bins by generalised "
            "least squares with the whole covariance; their errors, which the bins partly share, come from the diagonal "
            "of the covariance of the means. "
        )
    text += _beyond_text(data)
    if data.band.any():
        text += "Shaded: the central 95.4 % of the posterior's predictions. "
    if "constant" in data.label or "Standardised" in data.label:
        text += "The distance scale is relative: the best fit is shifted by its best offset. "
    if data.n_calibrators:
        text += f"{data.n_calibrators} calibrators, whose redshifts are not used, are not shown. "
    if data.n > len(data.redshift) and data.bins is not None:
        text += f"Only {len(data.redshift)} of the single points are drawn; the bins use all. "
    return text.strip()
