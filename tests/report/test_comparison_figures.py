"""Figures of a comparison: what is drawn, where, and in whose colour."""

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg

from fitter.inference.posterior import Posterior
from fitter.report.comparison_figures import draw_comparison, overlay_names
from fitter.report.figures.corner import corner_figure
from fitter.report.figures.forest import forest_figure, forest_names
from fitter.report.figures.planes import plane_figure
from fitter.report.figures.style import COLOURS


def posterior(seed, n=20_000, **columns):
    """Invented draws: a (mean, sd) for each sampled parameter; a function of them for each derived one."""
    rng = np.random.default_rng(seed)
    draws = {k: rng.normal(*v, n) for k, v in columns.items() if not callable(v)}
    kinds = dict.fromkeys(draws, "sampled") | {k: "derived" for k, v in columns.items() if callable(v)}
    draws |= {k: v(draws) for k, v in columns.items() if callable(v)}
    names = tuple(k for k in kinds if kinds[k] == "sampled")
    chain = np.stack([draws[k].reshape(4, -1, 50) for k in names], axis=-1)
    extra = {k: draws[k].reshape(4, -1, 50) for k in kinds if k not in names}
    return Posterior(names, chain, np.zeros(chain.shape[:3]), extra, kinds, {})


@pytest.fixture
def runs():
    return {
        "flat": posterior(1, omega_m=(0.3, 0.02), omega_lambda=lambda d: 1 - d["omega_m"]),
        "curved": posterior(2, n=60_000, omega_m=(0.35, 0.05), omega_lambda=(0.75, 0.1)),
        "free w": posterior(3, omega_m=(0.28, 0.06), w=(-0.9, 0.2)),
    }


def facts(mean, sd, kind="sampled"):
    named = {"low95": -2, "low68": -1, "median": 0, "high68": 1, "high95": 2}
    return {"kind": kind, "mean": mean, "sd": sd, "mcse": None, "best": mean} | {k: mean + n * sd for k, n in named.items()}


@pytest.fixture
def report():
    variants = [
        {"name": "flat", "parameters": {"omega_m": facts(0.3, 0.02)}, "fixed": {"w": -1.0}, "delta": {}},
        {"name": "free w", "parameters": {"omega_m": facts(0.28, 0.06), "w": facts(-0.9, 0.2)}, "fixed": {}, "delta": {}},
        {"name": "more", "parameters": {"omega_m": facts(0.31, 0.03), "w": facts(-1.0, 0.1)}, "fixed": {}, "delta": None},
    ]
    return {"variants": variants, "reference": "flat"}


def test_every_pair_of_the_corner_plot_is_in_some_fit(runs):
    names = overlay_names(runs)
    assert names[0] == "omega_m"
    for i, a in enumerate(names):
        assert all(any({a, b} <= set(p.kinds) for p in runs.values()) for b in names[:i])


def test_forest_shows_medians_intervals_and_fixed_values(report):
    assert forest_names(report) == ["omega_m", "w"]
    figure = forest_figure(report)
    left, right = figure.axes
    assert [t.get_text() for t in left.get_yticklabels()] == ["flat", "free w", "more"]
    assert left.get_xlabel() == r"$\Omega_m$"
    marks = {(line.get_marker(), *np.round(line.get_xydata()[0], 6)) for line in right.lines if line.get_marker() != "None"}
    assert marks == {("D", -1.0, 0), ("o", -0.9, 1), ("o", -1.0, 2)}
    bars = sorted(tuple(np.round(line.get_xdata(), 6)) for line in left.lines if line.get_marker() == "None")
    assert bars == sorted([(0.26, 0.34), (0.28, 0.32), (0.16, 0.40), (0.22, 0.34), (0.25, 0.37), (0.28, 0.34)])
    assert left.get_ylim()[0] > left.get_ylim()[1]  # the first fit on top


def test_labels_of_the_forest_stay_inside_the_figure(report):
    report["variants"][0]["name"] = report["reference"] = "a very long name of a fit, which no column could hold: the end counts"
    figure = forest_figure(report)
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    renderer = canvas.get_renderer()
    boxes = [t.get_window_extent(renderer) for t in figure.axes[0].get_yticklabels()]
    assert min(b.x0 for b in boxes) >= 0
    assert figure.axes[0].get_yticklabels()[0].get_text().endswith("the end counts")
    for upper, lower in zip(boxes, boxes[1:], strict=False):
        assert upper.y0 >= lower.y1


def test_a_parameter_that_follows_from_another_is_a_line(runs):
    figure = corner_figure({k: runs[k] for k in ("flat", "curved")}, ["omega_m", "omega_lambda"])
    panel = next(ax for ax in figure.axes if ax.get_xlabel() == r"$\Omega_m$" and ax.get_ylabel() == r"$\Omega_\Lambda$")
    segments = [line.get_xydata() for line in panel.lines if line.get_color() == COLOURS[0]]
    assert len(segments) == 2
    for ends in segments:
        np.testing.assert_allclose(ends.sum(axis=1), 1.0, atol=1e-9)
    wide, narrow = sorted((np.ptp(ends[:, 0]) for ends in segments), reverse=True)
    assert wide == pytest.approx(4 * 0.02, rel=0.03)
    assert narrow == pytest.approx(2 * 0.02, rel=0.03)


def test_runs_of_different_lengths_have_the_same_peak(runs):
    figure = corner_figure({k: runs[k] for k in ("flat", "curved")}, ["omega_m"])
    peaks = [line.get_ydata().max() for line in figure.axes[0].lines if len(line.get_ydata()) > 50]
    assert peaks == pytest.approx([1.0, 1.0])
    assert figure.axes[0].get_ylim() == (0, 1.12)


def test_narrow_contours_are_not_smeared_by_a_wide_companion():
    # The 95.4 % region of a Gaussian in two dimensions reaches 2.48 sigma; the smoothing of the run's own bins adds about a tenth.
    narrow = posterior(1, n=100_000, omega_m=(0.3, 0.01), w=(-1.0, 0.05))
    wide = posterior(2, n=100_000, omega_m=(0.3, 0.2), w=(-1.0, 1.0))
    figure = corner_figure({"narrow": narrow, "wide": wide}, ["omega_m", "w"])
    panel = next(ax for ax in figure.axes if ax.get_xlabel() == r"$\Omega_m$" and ax.get_ylabel() == "$w$")
    lines = [c for c in panel.collections if not c.filled]
    widths = [np.ptp(v[:, 0]) for c in lines for p in c.get_paths() for v in p.to_polygons() if len(v) > 8]
    outer = max(w for w in widths if w < 0.2)
    assert outer == pytest.approx(2 * 2.48 * 0.01, rel=0.15)


def test_a_run_keeps_its_colour_in_a_plane(runs):
    figure = plane_figure({"curved": runs["curved"], "flat": runs["flat"]}, "densities", colours={"flat": COLOURS[0], "curved": COLOURS[1]})
    (legend,) = figure.legends
    drawn = dict(zip([t.get_text() for t in legend.get_texts()], [h.get_color() for h in legend.legend_handles], strict=True))
    assert drawn == {"curved": COLOURS[1], "flat": COLOURS[0]}


def test_everything_is_written_with_captions(runs, report, tmp_path):
    report["variants"] = [{**v, "name": n} for v, n in zip(report["variants"], runs, strict=True)]
    draw_comparison(report, runs, tmp_path)
    stems = {"corner", "forest", "plane_densities", "plane_w"}
    assert {p.name for p in tmp_path.iterdir()} == {f"{s}.{k}" for s in stems for k in ("pdf", "png", "txt")}
    assert "Other data than flat: free w" in (tmp_path / "corner.txt").read_text()
    assert "Other data" not in (tmp_path / "plane_densities.txt").read_text()
