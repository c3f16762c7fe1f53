"""History of the expansion: bands against closed forms and outside values, panels, overlays."""

import importlib.util
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.report.figures.history import PROBABILITIES, draw_history, history_caption, history_data
from fitter.sample.sample import Sample

_spec = importlib.util.spec_from_file_location("looks", Path(__file__).with_name("looks.py"))
looks = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(looks)


def at_truth(build, model, truth=None, distance_scale="absolute"):
    """A fit whose every draw is the same point, over redshifts from 0 to exactly 2."""
    redshift = np.linspace(0.02, 2.0, 50)
    sample = Sample.from_arrays(redshift, build.modulus(redshift), sigma=0.1, distance_scale=distance_scale)
    return build.real(model, sample, {**build.truth, **(truth or {})}, dict.fromkeys(build.spread, 0.0), (2, 5, 8))


def test_flat_lcdm_has_the_closed_forms(build):
    fit = at_truth(build, "flat_lcdm")
    data = history_data(fit.log_posterior, fit.posterior)
    z, m = data.redshift, 0.3
    e2 = m * (1 + z) ** 3 + 1 - m
    np.testing.assert_allclose(data.bands["expansion"], np.broadcast_to(70 * np.sqrt(e2), (5, len(z))), rtol=1e-12)
    # Central differences with a step of 1e-4 in ln(1+z): the error is about (3e-4)²/6.
    np.testing.assert_allclose(data.bands["deceleration"][2], (0.5 * m * (1 + z) ** 3 - (1 - m)) / e2, atol=5e-8)
    # Distances are compared with this very model.
    np.testing.assert_allclose(data.bands["distance"], 0, atol=1e-9)
    assert set(data.bands) == {"expansion", "deceleration", "distance"}
    np.testing.assert_allclose(data.z_acceleration, 0.6711, atol=5e-5)  # (2 × 0.7 / 0.3)^(1/3) − 1
    crossing = np.interp(0, data.bands["deceleration"][2], z)
    assert crossing == pytest.approx(0.6711, abs=1e-3)


def test_distances_against_printed_moduli(build):
    """μ at H0 = 70 of flat Ω_m = 0.3 with w = −0.8 and with a cosmological constant (closed forms and quadrature, six decimals)."""
    fit = at_truth(build, "flat_wcdm", {"w": -0.8}, "relative")
    data = history_data(fit.log_posterior, fit.posterior)
    differences = [42.190278 - 42.261185, 44.007634 - 44.100238, 45.861680 - 45.957197]
    np.testing.assert_allclose(data.bands["distance"][2][[30, 60, 120]], differences, atol=2e-6)
    np.testing.assert_array_equal(data.bands["equation_of_state"], -0.8)
    # A relative scale has no H0.
    assert "expansion" not in data.bands and data.bands["relative_expansion"][2][0] == pytest.approx(1)


def test_w0wa_follows_its_definition(build):
    fit = at_truth(build, "flat_w0wa", {"w0": -0.9, "wa": -0.5}, "relative")
    data = history_data(fit.log_posterior, fit.posterior)
    np.testing.assert_allclose(data.bands["equation_of_state"][2], -0.9 - 0.5 * data.redshift / (1 + data.redshift), atol=1e-12)
    # flat, w0 = −0.9, wa = −0.5 against flat ΛCDM at z = 0.5, 1, 2
    differences = [42.247093 - 42.261185, 44.095555 - 44.100238, 45.963061 - 45.957197]
    np.testing.assert_allclose(data.bands["distance"][2][[30, 60, 120]], differences, atol=2e-6)


def test_bands_are_the_quantiles_of_the_draws(real):
    data = history_data(real.log_posterior, real.posterior)
    w = real.posterior.draws("w").ravel()
    # 3000 of 6400 draws: within four standard errors of a quantile.
    expected = np.quantile(w, PROBABILITIES)
    np.testing.assert_allclose(data.bands["equation_of_state"][:, -1], expected, atol=4 * w.std() / np.sqrt(3000 * 0.05))
    assert (np.diff(data.bands["deceleration"], axis=0) >= 0).all()


def test_a_series_of_the_distance_has_distances_alone(build):
    fit = at_truth(build, "cosmographic", distance_scale="relative")
    data = history_data(fit.log_posterior, fit.posterior)
    assert list(data.bands) == ["distance"] and data.z_acceleration is None
    figure = draw_history(data)
    assert len(figure.axes) == 1
    looks.assert_inside_canvas(figure)
    assert "accelerates" not in history_caption(data) and "acceleration began" not in history_caption(data)


@pytest.mark.parametrize("width", ["single", "double"])
def test_panels_show_the_bands(real, width):
    data = history_data(real.log_posterior, real.posterior)
    figure = draw_history(data, width=width)
    labels = [ax.get_ylabel() for ax in figure.axes]
    assert labels == ["$H(z)/[H_0\\,(1+z)]$", "$q(z)$", "$w(z)$", labels[3]] and "mu" in labels[3]
    expansion, deceleration, equation, _ = figure.axes
    np.testing.assert_allclose(expansion.get_lines()[0].get_ydata(), data.bands["relative_expansion"][2] / (1 + data.redshift))
    np.testing.assert_allclose(deceleration.get_lines()[0].get_ydata(), data.bands["deceleration"][2])
    assert equation.get_lines()[-1].get_ydata()[0] == -1
    point = next(c for c in deceleration.containers if len(c) == 3)
    assert point[0].get_xdata()[0] == pytest.approx(data.z_acceleration[1]) and point[0].get_ydata()[0] == 0
    outer = deceleration.collections[0].get_paths()[0].vertices
    assert outer[:, 1].min() == pytest.approx(data.bands["deceleration"][0].min())
    looks.assert_inside_canvas(figure)
    looks.assert_nothing_overlaps(figure)
    text = history_caption(data)
    assert "68.3 %" in text and "95.4 %" in text


def test_runs_over_each_other(build, real):
    first, second = (history_data(f.log_posterior, f.posterior) for f in (real, at_truth(build, "flat_lcdm", distance_scale="relative")))
    alone, both = draw_history(first), draw_history({"one": first, "two": second})
    np.testing.assert_array_equal(alone.axes[1].get_lines()[0].get_ydata(), both.axes[1].get_lines()[0].get_ydata())
    assert [t.get_text() for t in both.legends[0].get_texts()] == ["one", "two"]
    assert len([line for line in both.axes[2].get_lines() if len(line.get_xdata()) > 2]) == 1  # ΛCDM has no w(z) to show
    looks.assert_inside_canvas(both)
    absolute = at_truth(build, "flat_lcdm")
    with pytest.raises(InputError, match="share no axis"):
        draw_history({"one": first, "three": history_data(absolute.log_posterior, absolute.posterior)})


def test_a_share_that_never_accelerates_is_said(build):
    fit = build.real("curved_lcdm", truth={**build.truth, "omega_lambda": 0.15}, sd={**build.spread, "omega_lambda": 0.1})
    data = history_data(fit.log_posterior, fit.posterior)
    assert 0.05 < data.undefined < 0.95
    assert f"{100 * data.undefined:.2g} % of the posterior" in history_caption(data) or data.z_acceleration[1] > data.redshift[-1]


def test_the_picture_is_as_it_was(real):
    data = history_data(real.log_posterior, real.posterior)
    assert looks.difference_from_baseline(draw_history(data), "history") < 0.02
    # The same with wider bands is another picture: the comparison can fail.
    wider = {name: band[2] + 2 * (band - band[2]) for name, band in data.bands.items()}
    assert looks.difference_from_baseline(draw_history(replace(data, bands=wider)), "history", store=False) > 0.04
