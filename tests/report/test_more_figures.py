"""Planes, residuals and chains: lines at their values, data as computed, nothing clipped."""

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.report.figures.chains import chains_caption, chains_figure
from fitter.report.figures.planes import PLANES, no_big_bang, plane_caption, plane_figure, planes_of, recollapse
from fitter.report.figures.residuals import decorrelated, residual_data, residuals_caption, residuals_figure


def _load(name):
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f"{name}.py"))
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


assert_inside_canvas = _load("test_figures").assert_inside_canvas


def test_borders_of_the_density_plane():
    """Carroll, Press & Turner 1992: values from the roots of the cubic, verified independently, to the digits given."""
    omega_m = [0.1, 0.3, 0.5, 1.0, 2.0]
    np.testing.assert_allclose(no_big_bang(omega_m), [1.3500, 1.71346, 2.0, 2.59808, 3.59627], atol=6e-6)
    assert no_big_bang(0.0) == 1.0
    np.testing.assert_allclose(recollapse([0.1, 0.3, 0.5, 1.0, 1.5, 2.0]), [0, 0, 0, 0, 0.008666, 0.041889], atol=6e-7)


def test_density_plane_has_its_lines_and_labels(fit):
    assert planes_of(fit.posterior) == ["densities"]
    figure = plane_figure(fit.posterior, "densities", reference={"omega_m": 0.3, "omega_lambda": 0.7})
    (ax,) = figure.axes
    assert (ax.get_xlabel(), ax.get_ylabel()) == (r"$\Omega_m$", r"$\Omega_\Lambda$")
    flat, q0, collapse = ax.get_lines()[1:4]
    np.testing.assert_allclose(flat.get_ydata(), 1 - flat.get_xdata())
    np.testing.assert_allclose(q0.get_ydata(), q0.get_xdata() / 2)
    np.testing.assert_allclose(collapse.get_ydata(), recollapse(collapse.get_xdata()))
    assert {t.get_text() for t in ax.texts} == {"flat", "$q_0 = 0$, accelerating above", "recollapses", "no big bang"}
    label = next(t for t in ax.texts if t.get_text() == "flat")
    (x0, y0), (x1, y1) = ax.transData.transform([(0.2, 0.8), (0.8, 0.2)])
    assert label.get_rotation() % 360 == pytest.approx(np.degrees(np.arctan2(y1 - y0, x1 - x0)) % 360, abs=0.5)
    assert_inside_canvas(figure)
    assert "68.3 %" in plane_caption("densities") and "Carroll" in plane_caption("densities")


@pytest.mark.parametrize("plane", ["w", "w0wa"])
def test_dark_energy_planes(build, plane):
    names = {"w": ("omega_m", "w", "H0"), "w0wa": ("w0", "wa", "H0")}[plane]
    fit = build.fit(
        names=names,
        mean=(0.3 if plane == "w" else -1.0, -1.0 if plane == "w" else 0.2, 70.0),
        sd=(0.03, 0.1, 0.5),
        priors=(build.uniform(-5, 5), build.uniform(-5, 5), build.uniform(40, 100)),
        transform=lambda chain: chain,
    )
    assert planes_of(fit.posterior) == [plane]
    figure = plane_figure({"one": fit.posterior, "two": fit.posterior}, plane, width="double")
    (ax,) = figure.axes
    assert [t.get_text() for t in figure.legends[0].get_texts()] == ["one", "two"]
    if plane == "w":
        assert any(np.all(line.get_ydata() == -1) for line in ax.get_lines())
    else:
        assert any(np.all(np.asarray(line.get_xdata()) == -1) for line in ax.get_lines())
        assert any(np.allclose(line.get_ydata(), -np.asarray(line.get_xdata())) for line in ax.get_lines() if len(line.get_xdata()) > 2)
    assert_inside_canvas(figure)


def test_a_plane_that_a_fit_does_not_have(fit):
    with pytest.raises(InputError, match="needs w0 and wa"):
        plane_figure(fit.posterior, "w0wa")
    with pytest.raises(InputError, match=", ".join(PLANES)):
        plane_figure(fit.posterior, "moon")


@pytest.mark.parametrize("dense", [False, True])
def test_decorrelated_residuals_have_the_whole_chi2_and_unit_variance(build, dense):
    sample = build.sample(n=50)
    sample = build.dense(sample) if dense else sample
    residual = np.random.default_rng(3).normal(size=50)
    expected = residual @ np.linalg.solve(sample.noise.covariance(), residual)
    assert decorrelated(sample.noise, residual) @ decorrelated(sample.noise, residual) == pytest.approx(expected, rel=1e-9)
    assert decorrelated(sample.noise, residual, 2.0) == pytest.approx(decorrelated(sample.noise, residual) / 2)
    # C → W C Wᵀ is the unit matrix, with W the linear map column by column.
    W = np.column_stack([decorrelated(sample.noise, e) for e in np.eye(50)])
    np.testing.assert_allclose(W @ sample.noise.covariance() @ W.T, np.eye(50), atol=1e-9)


@pytest.mark.parametrize("width", ["single", "double"])
def test_residuals_figure(build, width):
    fit = build.fit(build.sample(group=np.repeat(["near", "far", "middle"], 100)))
    figure = residuals_figure(fit.log_posterior, fit.optimum, width=width)
    by_redshift, by_group, histogram, quantiles = figure.axes
    pulls = np.concatenate([line.get_ydata() for line in by_redshift.get_lines()[:3]])
    expected = fit.log_posterior.residuals(fit.optimum.theta) / np.sqrt(np.diag(fit.sample.noise.covariance()))
    np.testing.assert_allclose(np.sort(pulls), np.sort(expected))
    assert [t.get_text() for t in by_group.texts] == ["far (100)", "middle (100)", "near (100)"]
    assert sum(p.get_height() * p.get_width() for p in histogram.patches) == pytest.approx(1.0)
    drawn = quantiles.get_lines()[0].get_ydata()
    np.testing.assert_allclose(drawn, np.sort(decorrelated(fit.sample.noise, fit.log_posterior.residuals(fit.optimum.theta))))
    assert_inside_canvas(figure)
    assert "decorrelated" in residuals_caption(residual_data(fit.log_posterior, fit.optimum))


def test_chains_figure(fit):
    figure = chains_figure(fit.posterior)
    assert len(figure.axes) == 12
    trace, running, correlation, rhat = figure.axes[:4]
    np.testing.assert_array_equal(trace.get_lines()[0].get_ydata(), fit.posterior.draws("omega_m")[0, :, 0])
    assert running.get_lines()[0].get_ydata()[-1] == pytest.approx(fit.posterior.draws("omega_m")[0].mean())
    # Independent draws: no autocorrelation beyond lag 0, to four times 1/√(250 steps × 16 walkers).
    assert correlation.get_lines()[0].get_ydata()[0] == 1
    np.testing.assert_allclose(correlation.get_lines()[0].get_ydata()[1:10], 0, atol=4 / np.sqrt(250 * 16))
    assert rhat.get_yscale() == "log" and (rhat.get_lines()[0].get_ydata() < 0.01).all()
    assert_inside_canvas(figure)
    assert "4 independent replicas" in chains_caption(fit.posterior)
    with pytest.raises(InputError, match="omega_m"):
        chains_figure(fit.posterior, ["nothing"])


def test_chains_of_a_parameter_that_is_not_always_defined(fit):
    assert_inside_canvas(chains_figure(fit.posterior, ["z_acceleration"], width="single"))
