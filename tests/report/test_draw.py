"""Every figure from the run folder alone: the data come back as they were, and only what a run has is drawn."""

import importlib.util
from dataclasses import fields, is_dataclass, replace
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.report.facts import relabelled
from fitter.report.figures.data import FigureData, collect, read_figure_data, write_figure_data
from fitter.report.figures.draw import Drawable, drawings, overlays, save_drawings
from fitter.report.figures.settings import FIGURES, FigureSettings

_spec = importlib.util.spec_from_file_location("looks", Path(__file__).with_name("looks.py"))
looks = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(looks)


def assert_same(one, other):
    """Dataclasses, dicts, arrays and plain values, all the way down."""
    assert type(one) is type(other) or isinstance(one, np.ndarray | float)
    if is_dataclass(one):
        for field in fields(one):
            assert_same(getattr(one, field.name), getattr(other, field.name))
    elif isinstance(one, dict):
        assert list(sorted(one)) == list(sorted(other))
        for key in one:
            assert_same(one[key], other[key])
    elif one is None:
        assert other is None
    else:
        np.testing.assert_array_equal(one, other)


@pytest.fixture(scope="module")
def run(real):
    return Drawable(real.posterior, collect(real.log_posterior, real.optimum, real.posterior))


def test_data_come_back_as_they_were(run, tmp_path):
    write_figure_data(tmp_path / "figures_data.h5", run.data)
    assert_same(run.data, read_figure_data(tmp_path / "figures_data.h5"))
    assert [p.name for p in tmp_path.iterdir()] == ["figures_data.h5"]


def test_calibrators_alone_have_residuals_only(build, tmp_path):
    sample = build.sample(distance_scale="calibrated", n_calibrators=150)
    sample = sample.select(sample.is_calibrator)  # nothing else makes such a sample any more
    fit = build.real("flat_lcdm", sample, omega_m=0.3, H0=70.0, absolute_magnitude={"uniform": [-20, -19]})
    data = collect(fit.log_posterior, fit.optimum, fit.posterior)
    assert data.hubble is data.history is data.correlation is data.budget is None
    write_figure_data(tmp_path / "d.h5", data)
    assert_same(data, read_figure_data(tmp_path / "d.h5"))
    assert [d.name for d in drawings(Drawable(fit.posterior, data))] == ["corner", "residuals", "chains"]
    with pytest.raises(InputError, match="no figure `history`"):
        drawings(Drawable(fit.posterior, data), ["history"])


def test_a_missing_damaged_or_strange_file(run, tmp_path):
    path = tmp_path / "figures_data.h5"
    with pytest.raises(InputError, match="holds no data for its figures"):
        read_figure_data(path)
    write_figure_data(path, run.data)
    content = path.read_bytes()
    for damaged in (content[: len(content) // 2], b"no HDF5 at all", b""):
        path.write_bytes(damaged)
        with pytest.raises(InputError, match="damaged"):
            read_figure_data(path)
    import h5py

    with h5py.File(path, "w") as file:
        file.attrs["format"] = "another"
    with pytest.raises(InputError, match="Another version"):
        read_figure_data(path)


def test_a_large_sample_stays_small(build, tmp_path):
    fit = build.real("flat_lcdm", build.sample(n=200_000, distance_scale="relative", group=np.tile(["a", "b"], 100_000)))
    data = collect(fit.log_posterior, fit.optimum, fit.posterior)
    assert len(data.hubble.redshift) <= 20_000 and data.hubble.n == 200_000
    assert len(data.residuals.redshift) <= 20_001 and data.residuals.counts.tolist() == [100_000, 100_000]
    # The bins use all, the points are a sample.
    assert data.hubble.bins.count.sum() == 200_000
    write_figure_data(tmp_path / "d.h5", data)
    assert (tmp_path / "d.h5").stat().st_size < 2_000_000
    looks.assert_inside_canvas(drawings(Drawable(fit.posterior, data), ["residuals"])[0].make("double"))


def test_all_figures_of_a_run_with_embedded_fonts_and_captions(run, tmp_path):
    found = drawings(run)
    names = ["corner", "plane_w", "hubble_diagram", "residuals", "history", "correlation", "error_budget", "chains"]
    assert [one.name for one in found] == names
    written = save_drawings(found, tmp_path, FigureSettings())
    assert sorted(p.name for p in written) == sorted(f"{name}.{kind}" for name in names for kind in ("pdf", "png", "txt"))
    for name in names:
        pdf = (tmp_path / f"{name}.pdf").read_bytes()
        assert b"/FontFile2" in pdf and b"/Type3" not in pdf, name
        caption = (tmp_path / f"{name}.txt").read_text()
        assert len(caption) > 60 and not any("\ue000" <= c <= "\ue0ff" for c in caption), name


@pytest.mark.parametrize("width", ["single", "double"])
def test_nothing_is_clipped_at_either_width(run, width):
    for one in drawings(run):
        looks.assert_inside_canvas(one.make(width))


@pytest.mark.parametrize("name", FIGURES)
def test_only_what_was_asked_for(run, name):
    (one,) = drawings(run, [name])
    assert one.name.startswith(name.rstrip("s")[:5]) or name == "budget" and one.name == "error_budget"


def test_a_figure_that_is_none(run, build):
    with pytest.raises(InputError, match="no such figure.*'moon'.*corner, planes"):
        drawings(run, ["moon"])
    flat = build.real("flat_lcdm", build.sample(distance_scale="relative"))
    flat = Drawable(flat.posterior, collect(flat.log_posterior, flat.optimum, flat.posterior))
    with pytest.raises(InputError, match="no figure `planes`.*omega_m and w"):
        drawings(flat, ["planes"])
    assert drawings(flat, ["planes"], strict=False) == []


def test_parameters_marks_and_models_are_heeded(run):
    how = FigureSettings(parameters=["w", "omega_m"], mark={"w": -1.0, "omega_m": 0.3}, models=["empty"])
    corner, plane, hubble = (one.make(None) for one in drawings(run, ["corner", "planes", "hubble"], how))
    assert [ax.get_xlabel() for ax in corner.axes if ax.get_xlabel()] == ["$w$", r"$\Omega_m$"]
    assert any(list(line.get_xdata()) == [0.3] and list(line.get_ydata()) == [-1.0] for line in plane.axes[0].get_lines())
    assert "empty" in [t.get_text() for legend in hubble.axes[0].findobj(type(hubble.axes[0].get_legend())) for t in legend.get_texts()]
    with pytest.raises(InputError, match="moon"):
        drawings(run, ["corner"], FigureSettings(parameters=["moon"]))[0].make(None)


def test_symbols_of_ones_own_are_everywhere(run):
    with relabelled({"w": r"w_\mathrm{DE}"}):
        found = {one.name: one for one in drawings(run, ["corner", "planes", "chains"])}
        figures = {name: one.make("double") for name, one in found.items()}
    assert figures["plane_w"].axes[0].get_ylabel() == r"$w_\mathrm{DE}$"
    for figure in figures.values():
        labels = {ax.get_ylabel() for ax in figure.axes} | {ax.get_xlabel() for ax in figure.axes}
        assert r"$w_\mathrm{DE}$" in labels and "$w$" not in labels
    assert r"w_\mathrm{DE}" in found["corner"].caption


def test_a_style_sheet_of_ones_own(run, tmp_path):
    sheet = tmp_path / "mine.mplstyle"
    sheet.write_text("axes.linewidth: 3.5\nfont.size: 11\n")
    from fitter.report.figures.style import styled

    with styled(sheet):
        assert drawings(run, ["history"])[0].make(None).axes[0].spines["left"].get_linewidth() == 3.5
    plain, mine = (save_drawings(drawings(run, ["history"]), tmp_path / n, FigureSettings(formats=["png"]), style=s)[0].read_bytes()
                   for n, s in (("a", None), ("b", sheet)))  # fmt: skip
    assert plain != mine


def test_runs_of_unequal_length_over_each_other(real, build, run):
    """The first run's curves and contours are the same whether or not a shorter one with other centre is laid over it."""
    short = build.real(sample=real.sample, shape=(2, 40, 8), truth={**build.truth, "w": -1.05}, seed=9)
    other = Drawable(short.posterior, collect(short.log_posterior, short.optimum, short.posterior))
    alone, both = (overlays(runs) for runs in ({"long": run}, {"long": run, "short": other}))
    assert [one.name for one in both] == ["corner", "plane_w", "history"]
    for one, two in zip(alone, both, strict=True):
        first, second = one.make("double"), two.make("double")
        looks.assert_inside_canvas(second)
        if one.name == "history":
            for ax, wide in zip(first.axes, second.axes, strict=True):
                np.testing.assert_array_equal(ax.get_lines()[0].get_ydata(), wide.get_lines()[0].get_ydata())
                (low, high), (lower, higher) = ax.get_ylim(), wide.get_ylim()
                assert lower <= low + 0.2 * (high - low) and higher >= high - 0.2 * (high - low)  # nothing of it is cropped
    legend = both[0].make("double").legends[0]
    assert [t.get_text() for t in legend.get_texts()] == ["long", "short"]


def test_a_plane_is_drawn_for_the_runs_that_have_it(build):
    """Flat space is a line in the plane of the densities, a model without Ω_Λ is not in it; each keeps its colour."""
    fits = {model: build.real(model, shape=(2, 40, 8)) for model in ("flat_wcdm", "flat_lcdm", "curved_lcdm")}
    runs = {model: Drawable(fit.posterior, collect(fit.log_posterior, fit.optimum, fit.posterior)) for model, fit in fits.items()}
    (plane,) = overlays(runs, ["planes"])
    assert plane.name == "plane_densities" and "Runs: flat_lcdm, curved_lcdm." in plane.caption
    drawn, corner = plane.make("single").legends[0], overlays(runs, ["corner"])[0].make("double").legends[0]
    pairs = [dict(zip(one.get_texts(), one.get_lines(), strict=True)) for one in (drawn, corner)]
    colours = [{text.get_text(): line.get_color() for text, line in one.items()} for one in pairs]
    assert colours[0] == {label: colours[1][label] for label in ("flat_lcdm", "curved_lcdm")}


def test_figures_of_one_run_are_not_laid_over_each_other(run):
    with pytest.raises(InputError, match="`hubble` is a figure of one run"):
        overlays({"a": run, "b": run}, ["hubble"])
    with pytest.raises(InputError, match="share no such figure"):
        flat = Drawable(run.posterior, replace(run.data, history=None))
        overlays({"a": flat}, ["history"])


def test_the_pictures_are_as_they_were(run):
    for one in drawings(run, ["planes", "residuals", "hubble"]):
        assert looks.difference_from_baseline(one.make(None), one.name) < 0.02
    assert isinstance(run.data, FigureData)


@pytest.mark.parametrize(
    ("given", "said"),
    [
        ({"width": "triple"}, "single"),
        ({"width": 0.2}, "between 1 and 30"),
        ({"formats": ["gif"]}, "eps"),
        ({"formats": []}, "at least 1"),
        ({"only": ["moon"]}, "corner"),
        ({"mark": {"w": float("nan")}}, "finite"),
        ({"moon": 1}, "moon"),
    ],
)
def test_settings_that_cannot_be(given, said):
    with pytest.raises(ValueError, match=said):
        FigureSettings(**given)


@pytest.mark.parametrize("width", ["single", "double"])
def test_labels_of_a_corner_plot_do_not_meet(build, width):
    fit = build.real("curved_lcdm", build.sample())
    names = ["omega_m", "omega_lambda", "H0", "omega_k", "q0", "lambda_si"]
    (one,) = drawings(Drawable(fit.posterior, None), ["corner"], FigureSettings(parameters=names))
    figure = one.make(width)
    looks.assert_inside_canvas(figure)
    canvas = figure.canvas
    canvas.draw()
    for side in ("xaxis", "yaxis"):
        boxes = [getattr(ax, side).label.get_window_extent() for ax in figure.axes if getattr(ax, side).label.get_text()]
        assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[i + 1 :])
    # What a small panel has no room for stands in the caption.
    from fitter.report.prose import plain

    assert "H0 is in km/s/Mpc and Λ is in m⁻²." in plain(one.caption)
