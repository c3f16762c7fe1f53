"""Figures: axes, labels, the data drawn, levels, nothing clipped, files with embedded fonts."""

import importlib.util
from dataclasses import replace
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from scipy.stats import norm

from fitter.errors import InputError
from fitter.report.facts import axis_label
from fitter.report.figures.binned import binned_means, redshift_edges
from fitter.report.figures.corner import corner_caption, corner_figure, inner_ticks, main_parameters
from fitter.report.figures.groups import group_colour
from fitter.report.figures.hubble import beyond_panel, hubble_caption, hubble_data, hubble_figure, reference_distance
from fitter.report.figures.panels import contours, density, plot_range, thinned
from fitter.report.figures.style import COLOURS, DOUBLE, LEVELS, SINGLE, new_figure, save_figure, styled, width_inches
from fitter.report.prose import plain

_spec = importlib.util.spec_from_file_location("looks", Path(__file__).with_name("looks.py"))
looks = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(looks)


def assert_inside_canvas(figure):
    """Every text that is drawn lies inside the canvas."""
    figure.canvas.draw()
    canvas = figure.bbox
    idle = undrawn_tick_labels(figure)
    texts = [t for t in figure.findobj(matplotlib.text.Text) if t.get_visible() and t.get_text().strip() and id(t) not in idle]
    assert texts
    for text in texts:
        box = text.get_window_extent()
        assert canvas.x0 <= box.x0 and box.x1 <= canvas.x1 and canvas.y0 <= box.y0 and box.y1 <= canvas.y1, (text.get_text(), box)


def undrawn_tick_labels(figure):
    """Ids of tick labels that exist but stand beyond the axis limits."""
    idle = set()
    for axis in (axis for ax in figure.axes for axis in (ax.xaxis, ax.yaxis)):
        low, high = sorted(axis.get_view_interval())
        for tick in axis.get_major_ticks() + axis.get_minor_ticks():
            if not low <= tick.get_loc() <= high:
                idle |= {id(tick.label1), id(tick.label2)}
    return idle


def vertices(ax):
    return [p.vertices for c in ax.collections for p in c.get_paths() if len(p.vertices)]


# --------------------------------------------------------------------------- style and saving


def test_widths():
    assert (width_inches("single"), width_inches("double"), width_inches(5)) == (SINGLE, DOUBLE, 5.0)
    for bad in ("triple", 0.1, 99):
        with pytest.raises(InputError):
            width_inches(bad)


# What colours look like without one kind of cone, in linear RGB (Machado, Oliveira & Fernandes 2009, severity 1).
SIGHTS = {
    "full": np.eye(3),
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}
SRGB_TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def cielab(colours, sight):
    """CIE 1976 L*a*b* of sRGB colours as someone sees them."""
    rgb = np.array([matplotlib.colors.to_rgb(c) for c in colours])
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    xyz = np.clip(linear @ np.array(sight).T, 0, 1) @ SRGB_TO_XYZ.T / (0.9505, 1.0, 1.0890)
    f = np.where(xyz > 0.008856, np.cbrt(xyz), 7.787 * xyz + 16 / 116)
    return np.stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])], axis=1)


@pytest.mark.parametrize("kind", list(SIGHTS))
def test_any_two_runs_can_be_told_apart(kind):
    lab = cielab(COLOURS, SIGHTS[kind])
    apart = np.linalg.norm(lab[:, None] - lab, axis=2)[np.triu_indices(len(COLOURS), 1)]
    assert apart.min() > 25  # 2.3 is just noticeable side by side; thin lines far apart need ten times that
    assert lab[:, 0].max() < 75  # a line on white paper


def test_saved_files_embed_fonts_repeat_bit_for_bit_and_leave_nothing_behind(fit, tmp_path):
    figure = corner_figure(fit.posterior, ["omega_m", "H0"], width="single")
    written = save_figure(figure, tmp_path / "figures" / "corner", "A caption.")
    assert [p.name for p in written] == ["corner.pdf", "corner.png", "corner.txt"]
    assert sorted(p.name for p in (tmp_path / "figures").iterdir()) == ["corner.pdf", "corner.png", "corner.txt"]
    pdf = written[0].read_bytes()
    assert b"/FontFile2" in pdf and b"/Type3" not in pdf and b"/Subtype /Type3" not in pdf
    save_figure(figure, tmp_path / "again", formats=("pdf",))
    assert (tmp_path / "again.pdf").read_bytes() == pdf
    assert not (tmp_path / "again.txt").exists()
    assert written[2].read_text() == "A caption.\n"


def test_a_failed_write_keeps_what_was_there(fit, tmp_path):
    (tmp_path / "f.pdf").write_text("old")

    class Broken:
        def savefig(self, *args, **options):
            raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        save_figure(Broken(), tmp_path / "f")
    assert [p.name for p in tmp_path.iterdir()] == ["f.pdf"]
    assert (tmp_path / "f.pdf").read_text() == "old"


def test_style_is_ours_the_users_and_gone_afterwards(tmp_path):
    before = matplotlib.rcParams["font.size"]
    with styled():
        assert matplotlib.rcParams["font.size"] == 9 and matplotlib.rcParams["pdf.fonttype"] == 42
    sheet = tmp_path / "mine.mplstyle"
    sheet.write_text("font.size: 11\n")
    with styled(sheet):
        assert matplotlib.rcParams["font.size"] == 11 and matplotlib.rcParams["pdf.fonttype"] == 42
    with styled({"font.size": 7}):
        assert matplotlib.rcParams["font.size"] == 7
    assert matplotlib.rcParams["font.size"] == before
    for bad in (tmp_path / "missing.mplstyle", {"font.sizes": 3}, {"font.size": "huge!"}):
        with pytest.raises(InputError, match="style"), styled(bad):
            pass


def test_figures_outside_a_style_are_in_the_house_style_all_the_same(fit):
    figure = corner_figure(fit.posterior, ["omega_m", "H0"])
    assert figure.axes[-1].xaxis.label.get_size() == 9
    assert figure.axes[-1].xaxis.label.get_fontfamily() == ["STIXGeneral"]


# --------------------------------------------------------------------------- corner


def test_main_parameters_leave_out_what_is_constant_or_follows(fit, build):
    assert main_parameters(fit.posterior) == ["omega_m", "omega_lambda", "H0", "omega_k"]
    flat = build.fit()
    flat.posterior.extra["omega_k"][:] = 1e-17
    assert main_parameters(flat.posterior) == ["omega_m", "omega_lambda", "H0"]


def test_main_parameters_say_nothing_twice(build):
    flat = build.fit()
    flat.posterior.extra["omega_k"][:] = 1 - flat.posterior.draws("omega_m")
    assert main_parameters(flat.posterior) == ["omega_m", "omega_lambda", "H0"]


def test_corner_has_a_lower_triangle_with_symbols_and_titles(fit):
    figure = corner_figure(fit.posterior)
    assert len(figure.axes) == 10
    assert figure.get_figwidth() == pytest.approx(DOUBLE)
    bottom = [ax for ax in figure.axes if ax.get_xlabel()]
    assert [ax.get_xlabel() for ax in bottom] == [axis_label(n) for n in ("omega_m", "omega_lambda", "H0", "omega_k")]
    titles = [ax.get_title() for ax in figure.axes if ax.get_title()]
    assert titles[0] == r"$\Omega_m = 0.300 \pm 0.030$"
    assert len(titles) == 4


@pytest.mark.parametrize(
    "names", [["omega_m"], ["H0", "omega_m"], None, ["lambda_si", "z_acceleration", "omega_m", "omega_lambda", "H0", "omega_k"]]
)
@pytest.mark.parametrize("width", ["single", "double"])
def test_corner_text_is_inside_the_canvas(fit, names, width):
    assert_inside_canvas(corner_figure(fit.posterior, names, width=width))


def test_one_parameter_fills_the_figure_and_has_no_contours_to_speak_of(fit):
    figure = corner_figure(fit.posterior, ["omega_m"])
    (ax,) = figure.axes
    assert figure.get_figwidth() == pytest.approx(SINGLE)
    box = ax.get_position()
    assert box.x0 == pytest.approx(1 - box.x1) and box.width > 0.9 and box.height > 0.7
    text = plain(corner_caption(fit.posterior, ["omega_m"]))
    assert text.startswith("Marginal posterior of Ωm.") and "contours" not in text and "each" not in text


@pytest.mark.parametrize("width", ["single", "double"])
@pytest.mark.parametrize("names", [["omega_m"], ["omega_m", "H0"], None, ["omega_m", "omega_lambda", "H0", "omega_k", "lambda_si"]])
def test_no_text_of_a_corner_plot_is_too_small_or_far_from_its_numbers(fit, names, width):
    figure = corner_figure(fit.posterior, names, width=width)
    texts = looks.drawn_texts(figure)
    assert min(text.get_fontsize() for text, _ in texts) >= 8
    assert sum("=" in text.get_text() for text, _ in texts) == len(names or main_parameters(fit.posterior))
    looks.assert_nothing_overlaps(figure)
    for ax in figure.axes:
        numbers = [t.label1.get_window_extent() for t in ax.xaxis.get_major_ticks() if t.label1.get_visible() and t.label1.get_text()]
        if ax.get_xlabel():
            gap = min(box.y0 for box in numbers) - ax.xaxis.label.get_window_extent().y1
            assert 0 <= gap / figure.dpi < 0.15  # inches


def test_long_names_of_runs_stay_off_the_panels(fit):
    runs = {"an exceedingly long description of the first of two fits": fit.posterior, "another one": fit.posterior}
    for names in (["omega_m"], ["omega_m", "H0"], None):
        figure = corner_figure(runs, names)
        assert_inside_canvas(figure)
        (legend,) = figure.legends
        assert not any(legend.get_window_extent().overlaps(ax.get_window_extent()) for ax in figure.axes)


def test_a_small_parameter_gets_its_power_of_ten(fit):
    figure = corner_figure(fit.posterior, ["lambda_si"])
    (ax,) = figure.axes
    assert ax.get_xlabel() == r"$\Lambda\ [10^{-52}\,\mathrm{m^{-2}}]$"
    assert ax.get_title().startswith(r"$10^{52}\,\Lambda = 1.08")
    low, high = ax.get_xlim()
    assert 0.5 < low < 1.085 < high < 2


def test_contours_hold_what_they_say():
    rng = np.random.default_rng(3)
    x, y = rng.normal(size=(2, 200_000))
    ax = new_figure("single").add_subplot()
    contours(ax, x, y, ((-4, 4), (-4, 4)), "black", fill=False)
    # Of a two-dimensional Gaussian the radius that holds p is √(−2 ln(1 − p)); the histogram's smoothing widens it by 1 to 4 %.
    for level, ring in zip(sorted(LEVELS, reverse=True), vertices(ax), strict=True):
        radius = np.hypot(*ring.T)
        assert radius.mean() == pytest.approx(np.sqrt(-2 * np.log(1 - level)), rel=0.04)
        assert np.mean(np.hypot(x, y) < radius.mean()) == pytest.approx(level, abs=0.02)
    assert LEVELS == (0.683, 0.954)


def test_levels_and_intervals_are_said_in_the_caption(fit):
    text = plain(corner_caption(fit.posterior))
    assert "68.3 %" in text and "95.4 %" in text and "Ωm, ΩΛ, H0" in text
    assert "Overlaid: a, b" in corner_caption({"a": fit.posterior, "b": fit.posterior})


def test_a_second_run_changes_neither_curve_nor_height_of_the_first(fit, build):
    short = build.fit(shape=(2, 30, 16), mean=(0.33, 0.7, 70.5)).posterior
    figure = corner_figure({"long": fit.posterior, "short": short}, ["omega_m", "H0"])
    first, second = figure.axes[0].get_lines()[:2]
    assert first.get_ydata().max() == pytest.approx(1.0) and second.get_ydata().max() == pytest.approx(1.0)
    low, high = figure.axes[0].get_xlim()
    for posterior in (fit.posterior, short):
        inside = np.mean((posterior.draws("omega_m") > low) & (posterior.draws("omega_m") < high))
        assert inside > 0.998
    (legend,) = figure.legends
    assert [t.get_text() for t in legend.get_texts()] == ["long", "short"]
    assert_inside_canvas(figure)


def test_reference_lines_and_own_labels(fit):
    figure = corner_figure(fit.posterior, ["omega_m", "H0"], reference={"omega_m": 0.31}, labels={"H0": "my H"})
    marked = [line for ax in figure.axes for line in ax.get_lines() if line.get_linestyle() == ":"]
    assert len(marked) == 2 and all(line.get_xdata()[0] == 0.31 for line in marked)
    assert "my H" in [ax.get_xlabel() for ax in figure.axes]


def test_an_undefined_parameter_does_not_cut_the_others(build):
    posterior = build.fit(mean=(0.3, 0.6, 70.0)).posterior
    figure = corner_figure(posterior, ["omega_lambda", "z_acceleration"])
    low, high = figure.axes[0].get_xlim()
    assert low < 0.5 and high > 0.7  # z_acceleration exists only above 0.6


def test_an_unknown_parameter_is_told(fit):
    with pytest.raises(InputError, match="omega_m"):
        corner_figure(fit.posterior, ["omega_x"])


def test_range_stops_at_a_prior_edge_and_only_there():
    rng = np.random.default_rng(6)
    half = np.abs(rng.normal(size=20_000))
    low, high = plot_range([half])
    assert low == half.min() and 3.0 < high < 4.5
    steep = -rng.lognormal(0, 0.5, 20_000)
    assert plot_range([steep])[1] > steep.max()
    assert plot_range([np.ones(10)]) == (0.5, 1.5)


def test_density_is_smooth_and_true():
    draws = np.random.default_rng(8).normal(size=100_000)
    x, y = density(draws, (-4, 4))
    assert np.abs(y - norm.pdf(x) / norm.pdf(0)).max() < 0.04


def test_thinning_keeps_walkers_and_replicas(fit):
    assert thinned(fit.posterior, "H0").size == 16_000
    few = thinned(fit.posterior, "H0", most=1000)
    assert few.size == 4 * 16 * 16
    assert set(few) <= set(fit.posterior.draws("H0").ravel())


def test_ticks_are_round_and_off_the_corners():
    ticks = inner_ticks((0.19, 0.41))
    assert len(ticks) >= 2 and all(0.2 < t < 0.4 for t in ticks)


# --------------------------------------------------------------------------- Hubble diagram


def test_bin_means_are_the_generalised_least_squares_ones(build):
    sample = build.sample(n=60)
    residual = np.random.default_rng(1).normal(size=60)
    edges = redshift_edges(sample.redshift, 5)
    means = binned_means(sample.noise, residual, sample.redshift, edges, scale=1.5)
    index = np.digitize(sample.redshift, edges) - 1
    X = (index[:, None] == np.unique(index)).astype(float)
    inverse = np.linalg.inv(sample.noise.covariance())
    covariance = np.linalg.inv(X.T @ inverse @ X)
    np.testing.assert_allclose(means.mean, covariance @ X.T @ inverse @ residual, rtol=1e-9)
    np.testing.assert_allclose(means.covariance, 1.5**2 * covariance, rtol=1e-9)
    np.testing.assert_allclose(means.error, np.sqrt(np.diag(1.5**2 * covariance)), rtol=1e-9)
    assert means.count.sum() == 60
    dense = build.dense(sample)
    np.testing.assert_allclose(binned_means(dense.noise, residual, sample.redshift, edges).mean, means.mean, rtol=1e-8)


def test_rows_apart_enter_no_bin(build):
    sample = build.sample(n=60)
    apart = np.arange(60) < 10
    means = binned_means(sample.noise, np.zeros(60), sample.redshift, redshift_edges(sample.redshift, 4), apart=apart)
    assert means.count.sum() == 50


def test_hubble_diagram_draws_data_bins_and_best_fit(fit):
    data = hubble_data(fit.log_posterior, fit.optimum, fit.posterior)
    figure = hubble_figure(fit.log_posterior, fit.optimum, fit.posterior)
    upper, lower = figure.axes
    assert upper.get_xscale() == "log" and lower.get_xlabel() == "Redshift  $z$" and lower.get_ylabel() == "Residual  [mag]"
    assert upper.get_ylabel() == r"Distance modulus  $\mu$  [mag]"
    np.testing.assert_array_equal(upper.get_lines()[0].get_xdata(), fit.sample.redshift)
    np.testing.assert_array_equal(upper.get_lines()[0].get_ydata(), fit.sample.data)
    np.testing.assert_array_equal(lower.get_lines()[0].get_ydata(), fit.log_posterior.residuals(fit.optimum.theta))
    bars = lower.containers[0]
    np.testing.assert_allclose(bars[0].get_ydata(), data.bins.mean)
    lengths = np.array([np.ptp(segment[:, 1]) for segment in bars[2][0].get_segments()]) / 2
    np.testing.assert_allclose(lengths, data.bins.error)
    assert (data.band[1] > data.band[0]).all()
    assert_inside_canvas(figure)


@pytest.mark.parametrize("width", ["single", "double"])
@pytest.mark.parametrize("scale", ["relative", "absolute", "calibrated"])
def test_hubble_text_is_inside_the_canvas(build, scale, width):
    group = np.repeat(["near", "far", "middle"], 100)
    fit = build.fit(build.sample(distance_scale=scale, n_calibrators=10, group=group))
    figure = hubble_figure(
        fit.log_posterior, fit.optimum, fit.posterior, width=width, references=("no_dark_energy", "empty", "matter_only")
    )
    assert_inside_canvas(figure)
    upper = figure.axes[0]
    for legend in upper.findobj(matplotlib.legend.Legend):
        box, frame = legend.get_window_extent(), upper.get_window_extent()
        assert frame.x0 <= box.x0 and box.x1 <= frame.x1 and frame.y0 <= box.y0
    labels = [t.get_text() for legend in upper.findobj(matplotlib.legend.Legend) for t in legend.get_texts()]
    assert {"near", "far", "middle", "best fit", "binned", "empty", "posterior, 95.4 %"} <= set(labels)


def test_residuals_beyond_the_panel_are_marked_and_counted(build):
    far = {17: 3.0, 60: -2.0, 200: 5.0}
    shift = np.zeros(300)
    shift[list(far)] = list(far.values())
    sample = build.sample()
    fit = build.fit(replace(sample, data=sample.data + shift))
    data = hubble_data(fit.log_posterior, fit.optimum)
    lower = hubble_figure(fit.log_posterior, fit.optimum).axes[1]
    top = lower.get_ylim()[1]
    assert set(np.flatnonzero(beyond_panel(data))) == set(far)
    up, down = ([line for line in lower.get_lines() if line.get_marker() == marker] for marker in "^v")
    np.testing.assert_array_equal(up[0].get_xdata(), data.redshift[[17, 200]])
    np.testing.assert_array_equal(down[0].get_xdata(), data.redshift[[60]])
    assert 0.9 * top < up[0].get_ydata().min() and up[0].get_ydata().max() < top
    assert "3 single supernovae lie beyond the lower panel" in hubble_caption(data)
    few = build.fit(build.sample(n=40))
    assert "beyond" not in hubble_caption(hubble_data(few.log_posterior, few.optimum))


def test_surveys_have_the_colours_of_the_other_figures(build):
    fit = build.fit(build.sample(group=np.repeat(["few", "most", "some"], [50, 150, 100])))
    upper = hubble_figure(fit.log_posterior, fit.optimum).axes[0]
    colours = {line.get_label(): line.get_color() for line in upper.get_lines()}
    assert [colours[name] for name in ("most", "some", "few")] == [group_colour(i) for i in range(3)]


def test_ticks_keep_off_the_seam_of_the_panels(build):
    for shift in np.linspace(0, 2, 9):
        sample = build.sample()
        fit = build.fit(replace(sample, data=sample.data + shift))
        for ax in hubble_figure(fit.log_posterior, fit.optimum).axes:
            low, high = ax.get_ylim()
            assert len(ax.get_yticks()) >= 3
            assert all(low + 0.05 * (high - low) < t < high - 0.05 * (high - low) for t in ax.get_yticks())


def test_relative_scale_is_aligned_and_says_so(build):
    fit = build.fit(build.sample(distance_scale="relative"))
    data = hubble_data(fit.log_posterior, fit.optimum)
    assert data.label == r"Distance modulus  $\mu$ + constant  [mag]"
    expected = data.shown - np.interp(np.log(data.redshift), np.log(data.curve_redshift), data.curve)
    np.testing.assert_allclose(data.residual, expected, atol=2e-3)
    assert "best offset" in hubble_caption(data)
    assert not data.band.any()


def test_calibrators_are_left_out_and_said_to_be(build):
    fit = build.fit(build.sample(distance_scale="calibrated", n_calibrators=12))
    data = hubble_data(fit.log_posterior, fit.optimum)
    assert len(data.redshift) == 288 and data.bins.count.sum() == 288
    assert data.label == r"Distance modulus  $\mu = m - M$  [mag]"
    np.testing.assert_allclose(data.shown, fit.sample.data[12:] + 19.3)
    assert "12 calibrators" in hubble_caption(data)


def test_few_data_carry_their_own_errors(build):
    fit = build.fit(build.sample(n=40))
    data = hubble_data(fit.log_posterior, fit.optimum)
    assert data.bins is None
    np.testing.assert_allclose(data.error, np.sqrt(np.diag(fit.sample.noise.covariance())))
    figure = hubble_figure(fit.log_posterior, fit.optimum)
    assert_inside_canvas(figure)
    assert figure.axes[1].get_ylim()[1] > np.max(np.abs(data.residual) + data.error)


def test_a_fitted_scale_and_scatter_widen_the_errors(build):
    fit = build.fit(build.sample(n=40))
    fit.optimum.values.update(covariance_scale=2.0, intrinsic_scatter=0.3)
    data = hubble_data(fit.log_posterior, fit.optimum)
    np.testing.assert_allclose(data.error, 2 * np.sqrt(np.diag(fit.sample.noise.covariance()) + 0.09))


def test_reference_distances_against_their_closed_forms():
    """Einstein–de Sitter, Milne, and open with Ω_m = 0.3: μ(z) tables for H0 = 70 (closed forms; Mattig 1958), 1e-6 mag."""
    z = np.array([0.1, 0.5, 1.0, 2.0])
    offset = 5 * np.log10(299792.458 / 70) + 25
    expected = {
        ("matter_only", None): [38.209738, 41.862440, 43.502460, 45.179273],
        ("empty", None): [38.264560, 42.138013, 44.039070, 46.168913],
        ("no_dark_energy", 0.3): [38.247690, 42.045594, 43.844039, 45.767952],
    }
    for (name, omega_m), moduli in expected.items():
        np.testing.assert_allclose(5 * np.log10(reference_distance(name, z, omega_m)) + offset, moduli, atol=1e-6)


def test_unknown_reference(fit):
    with pytest.raises(InputError, match="empty"):
        hubble_figure(fit.log_posterior, fit.optimum, references=("steady_state",))


def test_thousands_of_points_become_an_image_and_only_they(build):
    fit = build.fit(build.sample(n=2500, diagonal=True))
    figure = hubble_figure(fit.log_posterior, fit.optimum)
    rasterised = [line for ax in figure.axes for line in ax.get_lines() if line.get_rasterized()]
    assert len(rasterised) == 2
