"""Forest plot of a stress study: one parameter under every change."""

from __future__ import annotations

from typing import TYPE_CHECKING

from fitter.report.facts import axis_label, parameter
from fitter.report.figures.style import COLOURS, in_style, new_figure
from fitter.study.scenarios import KINDS
from fitter.study.stress import FLAG

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["stress_caption", "stress_figure"]

_ROW = 0.158  # inches
_FAINT = "#6b6b6b"
_WIDEST = 8.0  # of the fit's own errors: what moves further is drawn as an arrow


@in_style
def stress_figure(result: dict, name: str) -> Figure:
    """Return the forest plot of one parameter.

    Parameters
    ----------
    result : dict
        As `fitter.study.stress.stress` makes it.
    name : str
        A sampled parameter.

    Returns
    -------
    matplotlib.figure.Figure
    """
    rows = _rows(result, name)
    figure = new_figure("double", height=_ROW * len(rows) + 0.85)
    axes = figure.add_axes((0.30, 0.48 / figure.get_figheight(), 0.56, 1 - 0.66 / figure.get_figheight()))
    base = result["baseline"]["parameters"][name]
    axes.axvspan(base["low68"], base["high68"], color=COLOURS[0], alpha=0.13, linewidth=0)
    axes.axvline(base["median"], color=COLOURS[0], linewidth=0.8)
    low, high = _limits(base, rows)
    for i, row in enumerate(rows):
        _draw_row(axes, -i, row, low, high)
    axes.set(xlim=(low, high), ylim=(-len(rows) + 0.4, 0.6), yticks=[], xlabel=_label(result, name))
    axes.text(1.02, 0.75, "shift / expected", transform=axes.get_yaxis_transform(), fontsize=8, color="black", va="bottom")
    return figure


def stress_caption(result: dict, name: str) -> str:
    """Return what a reader of the plot must know."""
    blinded = " Values are differences from this fit: the parameter is blinded." if name in result["blinded"] else ""
    return (
        f"{parameter(name).meaning[:1].upper()}{parameter(name).meaning[1:]} under every change of the fit: medians with "
        "equal-tailed 68.3 % intervals. Line and band: the fit itself. Right: shift of the median over the scatter expected of it, "
        f"√|σ² − σ²(all)| (Gratton & Challinor "
        f"2020), where less information went in; orange beyond {FLAG}; in brackets the shift over the fit's own error, where no scatter "
        f"is expected. Open and filled: a mode shifted by −1σ and +1σ. Arrows: it goes on beyond the frame.{blinded}"
    )


def _rows(result: dict, name: str) -> list[dict]:
    """Headings and changes in reporting order; the two signs of a mode share a row."""
    rows: list[dict] = []
    for kind, heading in KINDS.items():
        inside = [r for r in result["variants"] if r["kind"] == kind and name in r["parameters"]]
        if not inside:
            continue
        rows.append({"heading": heading})
        if kind == "mode":
            pairs = zip(inside[::2], inside[1::2], strict=True)
            rows += [{"label": plus["label"].removesuffix(" +1σ"), "facts": [plus["parameters"][name], minus["parameters"][name]]}
                     for plus, minus in pairs]  # fmt: skip
        else:
            rows += [{"label": r["label"], "facts": [r["parameters"][name]]} for r in inside]
    return rows


def _limits(base: dict, rows: list[dict]) -> tuple[float, float]:
    sigma = 0.5 * (base["high68"] - base["low68"])
    reach = max([abs(f["shift"]) for row in rows for f in row.get("facts", [])], default=0.0) + 2 * sigma
    reach = min(max(reach, 4 * sigma), _WIDEST * sigma)
    return base["median"] - reach, base["median"] + reach


def _draw_row(axes: Axes, y: float, row: dict, low: float, high: float) -> None:
    from matplotlib.transforms import blended_transform_factory

    if "heading" in row:
        across = blended_transform_factory(axes.figure.transFigure, axes.transData)
        axes.text(0.01, y, row["heading"], transform=across, va="center", fontsize=8, fontweight="bold")
        return
    axes.text(-0.02, y, _short(row["label"]), transform=axes.get_yaxis_transform(), va="center", ha="right", fontsize=8)
    for facts, filled in zip(row["facts"], (True, False), strict=False):
        colour = COLOURS[1] if facts["flagged"] else "black"
        offset = 0.0 if len(row["facts"]) == 1 else (0.14 if filled else -0.14)
        if low < facts["median"] < high:
            ends = max(facts["low68"], low), min(facts["high68"], high)
            axes.plot(ends, [y + offset] * 2, color=colour, linewidth=0.9, solid_capstyle="butt")
            for beyond, edge, marker in ((facts["low68"] < low, low, "<"), (facts["high68"] > high, high, ">")):
                if beyond:
                    axes.plot(edge + (0.008 if marker == "<" else -0.008) * (high - low), y + offset, marker, color=colour, markersize=3.0)
            axes.plot(facts["median"], y + offset, "o", color=colour, markersize=2.8, markerfacecolor=colour if filled else "white")
        else:
            above = facts["median"] >= high
            edge = low + (0.988 if above else 0.012) * (high - low)
            axes.plot(edge, y + offset, ">" if above else "<", color=colour, markersize=3.5)
    facts = row["facts"][0]
    judged = facts["significance"] is not None
    # Adding zero turns −0.0 into 0.0.
    text = f"{round(facts['significance'], 1) + 0.0:+.1f}" if judged else f"({round(facts['shift_in_sigma'], 1) + 0.0:+.1f})"
    axes.text(
        1.02, y, text.replace("-", "−"), transform=axes.get_yaxis_transform(), va="center", fontsize=8,
        color=COLOURS[1] if facts["flagged"] else "black" if judged else _FAINT,
    )  # fmt: skip


def _short(label: str, longest: int = 34) -> str:
    label = label.replace("_", " ")
    return label if len(label) <= longest else label[: longest - 1] + "…"


def _label(result: dict, name: str) -> str:
    label = axis_label(name)
    return f"{label}, difference from this fit" if name in result["blinded"] else label
