"""Which figures a comparison gets, and writing them."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

__all__ = ["draw_comparison", "overlay_names"]

_MOST_RUNS = 6  # as many as there are colours
_MOST_NAMES = 5


def overlay_names(posteriors: dict) -> list[str]:
    """Parameters for the overlaid corner plot: those that the most fits have, each pair together in one fit at least."""
    counts: dict[str, int] = {}
    for posterior in posteriors.values():
        for name, kind in posterior.kinds.items():
            if kind != "derived" or name == "q0":
                counts[name] = counts.get(name, 0) + 1
    # Sampled parameters first; q0, which nearly all models have, makes up the number.
    order = sorted(counts, key=lambda n: (n == "q0", -counts[n]))
    chosen: list[str] = []
    for name in order:
        together = all(any({name, other} <= set(p.kinds) for p in posteriors.values()) for other in chosen)
        if together and len(chosen) < _MOST_NAMES:
            chosen.append(name)
    return chosen


def draw_comparison(report: dict, posteriors: dict, folder: Path) -> list[Path]:
    """Draw the overlaid corner plot, the planes that two fits or more can be drawn in, and the forest plot.

    Parameters
    ----------
    report : dict
        As `fitter.study.comparison.compare_entries` makes it.
    posteriors : dict
        Name of each fit → Posterior.
    folder : Path

    Returns
    -------
    list of Path
        The files written.
    """
    from fitter.report.figures.corner import corner_caption, corner_figure
    from fitter.report.figures.forest import forest_caption, forest_figure
    from fitter.report.figures.planes import PLANES, plane_caption, plane_figure, planes_of
    from fitter.report.figures.style import COLOURS, save_figure, styled

    shown = dict(list(posteriors.items())[:_MOST_RUNS])
    left_out = f" Not drawn, for want of colours: {', '.join(list(posteriors)[_MOST_RUNS:])}." if len(posteriors) > _MOST_RUNS else ""

    def note(drawn: Iterable[str]) -> str:
        other = [v["name"] for v in report["variants"] if v["delta"] is None and v["name"] in drawn]
        return left_out + (f" Other data than {report['reference']}: {', '.join(other)}." if other else "")

    names, colours = overlay_names(shown), dict(zip(shown, COLOURS, strict=False))
    written = []
    with styled():
        having = {label: p for label, p in shown.items() if set(names) & set(p.kinds)}
        if names:
            written += save_figure(corner_figure(having, names), folder / "corner", corner_caption(having, names) + note(having))
        # A plane's own lines would show where a hidden value is.
        for plane in () if report.get("blinded") else PLANES:
            axes = {PLANES[plane].x, PLANES[plane].y}
            fits = {label: p for label, p in shown.items() if axes <= set(p.kinds)}
            # A fit whose ordinate follows from the abscissa is a line in the plane: worth it beside one that is not.
            if any(plane in planes_of(p) for p in fits.values()):
                written += save_figure(
                    plane_figure(fits, plane, colours=colours), folder / f"plane_{plane}", plane_caption(plane, list(fits)) + note(fits)
                )
        written += save_figure(forest_figure(report), folder / "forest", forest_caption(report))
    return written
