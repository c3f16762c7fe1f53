"""Every figure of a run, by name: from its chain and its figures' data, without the sample or the model."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from fitter.errors import InputError
from fitter.report.comparison_figures import overlay_names
from fitter.report.figures.chains import chains_caption, chains_figure
from fitter.report.figures.corner import corner_caption, corner_figure, main_parameters
from fitter.report.figures.covariance import CorrelationData, budget_caption, correlation_caption, draw_budget, draw_correlation
from fitter.report.figures.data import DATA_FILE, FigureData, read_figure_data
from fitter.report.figures.history import draw_history, history_caption
from fitter.report.figures.hubble import draw_hubble, hubble_caption
from fitter.report.figures.planes import PLANES, plane_caption, plane_figure, planes_of
from fitter.report.figures.residuals import draw_residuals, residuals_caption
from fitter.report.figures.settings import FIGURES, FigureSettings
from fitter.report.figures.style import COLOURS, save_figure, styled
from fitter.report.page import Picture, picture_of

if TYPE_CHECKING:
    from fitter.inference.posterior import Posterior

__all__ = ["OVERLAID", "Drawable", "drawings", "overlays", "save_drawings"]

OVERLAID = ("corner", "planes", "history")  # figures that several runs can share


@dataclass(frozen=True)
class Drawable:
    """A run as far as figures need it.

    Parameters
    ----------
    posterior : Posterior
    data : FigureData, or Path
        What its figures show, or the run folder to read that from when a figure asks for it.
    """

    posterior: Posterior
    source: FigureData | Path

    @cached_property
    def data(self) -> FigureData:
        """What the figures of the data show."""
        return self.source if isinstance(self.source, FigureData) else read_figure_data(self.source / DATA_FILE)


@dataclass(frozen=True)
class Drawing:
    """A figure that can be made: the file's name without suffix, the figure by a function, its caption."""

    name: str
    make: Callable
    caption: str


def drawings(run: Drawable, only: Sequence[str] | None = None, how: FigureSettings | None = None, *, strict: bool = True) -> list[Drawing]:
    """Return the figures of one run.

    Parameters
    ----------
    run : Drawable
    only : sequence of str, optional
        Which figures (`FIGURES`); every one that the fit has by default.
    how : FigureSettings, optional
    strict : bool
        Refuse a figure that was asked for by name and that this fit does not have; else it is left out.

    Raises
    ------
    fitter.errors.InputError
        A name that is no figure, or a figure that this fit does not have.
    """
    how = how or FigureSettings()
    found = []
    for name in _known(only or FIGURES, FIGURES):
        several = _OF_ONE[name](run, how)
        if not several and only and strict:
            raise InputError(f"this fit has no figure `{name}`", value=name, cure=_WHY_NONE[name])
        found += several
    return found


def overlays(runs: Mapping[str, Drawable], only: Sequence[str] | None = None, how: FigureSettings | None = None) -> list[Drawing]:
    """Return the figures of several runs over each other; arguments as for :func:`drawings`."""
    how = how or FigureSettings()
    posteriors = {label: run.posterior for label, run in runs.items()}
    found = []
    for name in _known(only or OVERLAID, OVERLAID):
        if name == "corner":
            found.append(_corner(posteriors, how, how.parameters or overlay_names(posteriors)))
        elif name == "planes":
            found += _shared_planes(posteriors, how)
        else:
            histories = {label: run.data.history for label, run in runs.items() if run.data.history is not None}
            # Without being asked for, a figure that these runs cannot share is left out.
            if histories and (only or len({"expansion" in h.bands for h in histories.values()}) == 1):
                found.append(Drawing("history", lambda w, h=histories: draw_history(h, width=w or "double"), history_caption(histories)))
    if only and not found:
        raise InputError("these runs share no such figure", value=", ".join(only), cure="Draw them one by one.")
    return found


def _known(names: Sequence[str], known: Sequence[str]) -> list[str]:
    for name in names:
        if name not in known:
            one = name in FIGURES
            problem = f"`{name}` is a figure of one run, several cannot share it" if one else "there is no such figure"
            raise InputError(problem, value=name, cure=f"Choose any of {', '.join(known)}.")
    return list(dict.fromkeys(names))


def _corner(posteriors: Posterior | Mapping[str, Posterior], how: FigureSettings, names: Sequence[str] | None) -> Drawing:
    mark = how.mark or None
    return Drawing(
        "corner", lambda w: corner_figure(posteriors, names, width=w or "double", reference=mark), corner_caption(posteriors, names)
    )


def _plane(
    posteriors: Posterior | Mapping[str, Posterior], plane: str, how: FigureSettings, colours: Mapping[str, str] | None = None
) -> Drawing:
    chosen = PLANES[plane]
    mark = how.mark if {chosen.x, chosen.y} <= set(how.mark) else None
    labels = list(posteriors) if isinstance(posteriors, Mapping) else []
    return Drawing(
        f"plane_{plane}",
        lambda w: plane_figure(posteriors, plane, width=w or "single", reference=mark, colours=colours),
        plane_caption(plane, labels),
    )


def _shared_planes(posteriors: Mapping[str, Posterior], how: FigureSettings) -> list[Drawing]:
    """The planes that two runs or more have: one whose ordinate follows from the abscissa is a line, beside one that is not."""
    colours = dict(zip(posteriors, itertools.cycle(COLOURS), strict=False))
    found = []
    for plane, axes in PLANES.items():
        having = {label: p for label, p in posteriors.items() if {axes.x, axes.y} <= set(p.kinds)}
        if any(plane in planes_of(p) for p in having.values()) and (len(having) > 1 or len(posteriors) == 1):
            found.append(_plane(having, plane, how, {label: colours[label] for label in having}))
    return found


def _corners(run: Drawable, how: FigureSettings) -> list[Drawing]:
    names = how.parameters or main_parameters(run.posterior)
    return [_corner(run.posterior, how, names)] if names else []


def _planes(run: Drawable, how: FigureSettings) -> list[Drawing]:
    return [_plane(run.posterior, plane, how) for plane in planes_of(run.posterior)]


def _chains(run: Drawable, how: FigureSettings) -> list[Drawing]:
    draw = lambda w: chains_figure(run.posterior, how.parameters, width=w or "double")  # noqa: E731
    return [Drawing("chains", draw, chains_caption(run.posterior))]


def _of_data(field: str, name: str, draw: Callable, caption: Callable, width: str) -> Callable:
    """Return what makes the drawing of one part of the figures' data."""

    def made(run: Drawable, how: FigureSettings) -> list[Drawing]:
        data = getattr(run.data, field)
        options = {"references": how.models} if field == "hubble" else {}
        # Of uncorrelated errors there is no matrix to show.
        empty = data is None or (isinstance(data, CorrelationData) and not np.nan_to_num(data.matrix).any())
        return [] if empty else [Drawing(name, lambda w: draw(data, width=w or width, **options), caption(data))]

    return made


_OF_ONE: dict[str, Callable] = {
    "corner": _corners,
    "planes": _planes,
    "hubble": _of_data("hubble", "hubble_diagram", draw_hubble, hubble_caption, "double"),
    "residuals": _of_data("residuals", "residuals", draw_residuals, residuals_caption, "double"),
    "history": _of_data("history", "history", draw_history, history_caption, "double"),
    "correlation": _of_data("correlation", "correlation", draw_correlation, correlation_caption, "single"),
    "budget": _of_data("budget", "error_budget", draw_budget, budget_caption, "single"),
    "chains": _chains,
}
_NO_FLOW = "All of its supernovae are calibrators."
_WHY_NONE = dict.fromkeys(("hubble", "history", "budget"), _NO_FLOW) | {
    "corner": "None of its parameters varies.",
    "correlation": "Its errors are uncorrelated, or all of its supernovae are calibrators.",
    "planes": f"They need two of its parameters: {'; '.join(f'{p.x} and {p.y}' for p in PLANES.values())}.",
    "residuals": _NO_FLOW,
    "chains": "It has no sampled parameter.",
}


def save_drawings(
    found: Sequence[Drawing], folder: Path, how: FigureSettings, *, style: Path | None = None, pictures: dict[str, Picture] | None = None
) -> list[Path]:
    """Draw and write figures, each with its caption beside it.

    Parameters
    ----------
    found : sequence of Drawing
    folder : Path
        Made if it does not exist.
    how : FigureSettings
        Width and formats.
    style : Path, optional
        A style sheet; ``how.style`` is a path relative to the config, this one is as it is.
    pictures : dict, optional
        Takes up each figure as SVG with its caption, for the report page.

    Returns
    -------
    list of Path
        The files written.
    """
    written = []
    with styled(style):
        for one in found:
            figure = one.make(how.width)
            written += save_figure(figure, folder / one.name, one.caption, formats=how.formats)
            if pictures is not None:
                pictures[one.name] = picture_of(figure, one.caption)
    return written
