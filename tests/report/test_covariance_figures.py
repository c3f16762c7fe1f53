"""Correlations and shares of the variance: against brute force, and as they are drawn."""

import importlib.util
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from fitter.report.figures.covariance import (
    budget_caption,
    budget_data,
    correlation_caption,
    correlation_data,
    draw_budget,
    draw_correlation,
)
from fitter.report.figures.groups import group_codes
from fitter.sample.sample import Sample

_spec = importlib.util.spec_from_file_location("looks", Path(__file__).with_name("looks.py"))
looks = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(looks)

GROUPS = np.repeat(["near", "far", "middle"], [150, 100, 50])


def brute_force(sample, data, cell):
    """Mean of the correlation matrix over pairs of different supernovae."""
    covariance = sample.noise.covariance()
    sigma = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(sigma, sigma)
    np.fill_diagonal(correlation, np.nan)
    b = len(data.group)
    return np.array([[np.nanmean(correlation[np.ix_(cell == i, cell == j)]) for j in range(b)] for i in range(b)])


def cells(sample, data):
    """Cell of each row, from the redshift ranges that the figure gives: they do not overlap within a survey."""
    group = np.full(sample.n, "all") if sample.group is None else np.asarray(sample.group).astype(str)
    cell = np.full(sample.n, -1)
    for i, (name, low, high) in enumerate(zip(data.group, data.low, data.high, strict=True)):
        cell[(group == name) & (sample.redshift >= low) & (sample.redshift <= high) & ~sample.is_calibrator] = i
    return cell


@pytest.mark.parametrize("form", ["modes", "dense", "precision"])
def test_correlations_against_the_whole_matrix(build, form):
    sample = build.sample(group=GROUPS)
    if form != "modes":
        given = sample.noise.covariance() if form == "dense" else np.linalg.inv(sample.noise.covariance())
        kind = "covariance" if form == "dense" else "precision"
        sample = Sample.from_arrays(sample.redshift, sample.data, group=GROUPS, **{kind: given})
    data = correlation_data(sample)
    cell = cells(sample, data)
    np.testing.assert_array_equal(np.bincount(cell), data.count)
    assert data.count.sum() == 300 and list(dict.fromkeys(data.group.tolist())) == ["near", "far", "middle"]
    np.testing.assert_allclose(data.matrix, brute_force(sample, data, cell), atol=1e-9)


def test_few_supernovae_are_cells_of_their_own(build):
    sample = build.sample(n=20)
    data = correlation_data(sample)
    assert data.matrix.shape == (20, 20) and np.isnan(np.diag(data.matrix)).all()
    covariance = sample.noise.covariance()
    sigma = np.sqrt(np.diag(covariance))
    expected = covariance / np.outer(sigma, sigma)
    off = ~np.eye(20, dtype=bool)
    np.testing.assert_allclose(data.matrix[off], expected[off], atol=1e-12)
    assert "every supernova with every other" in correlation_caption(data)


def test_calibrators_are_left_out(build):
    data = correlation_data(build.sample(distance_scale="calibrated", n_calibrators=30))
    assert data.count.sum() == 270


def test_uncorrelated_data_show_an_empty_matrix(build):
    data = correlation_data(build.sample(diagonal=True))
    np.testing.assert_allclose(data.matrix, 0, atol=1e-15)
    looks.assert_inside_canvas(draw_correlation(data))


@pytest.mark.parametrize("width", ["single", "double"])
@pytest.mark.parametrize(
    "group",
    [
        None,
        GROUPS,
        np.repeat([f"s{i}" for i in range(8)], [230, 20, 15, 12, 9, 7, 4, 3]),
        np.array([f"survey_{i % 9}" for i in range(300)]),
        np.repeat(["a name too long for its margin", "b"], [297, 3]),
    ],
)
def test_correlation_figure(build, width, group):
    sample = build.sample(group=group) if group is not None else build.sample()
    data = correlation_data(sample)
    figure = draw_correlation(data, width=width)
    ax, bar = figure.axes
    np.testing.assert_array_equal(ax.images[0].get_array().filled(np.nan), data.matrix)
    low, high = ax.images[0].get_clim()
    assert high == pytest.approx(np.nanmax(np.abs(data.matrix))) and low in (0, -high)
    assert bar.get_ylabel() == "Mean correlation"
    names, code = group_codes(group, 300)
    assert len(ax.texts) == len(names)
    for text, name, count in zip(ax.texts, names, np.bincount(code), strict=True):
        assert text.get_text().startswith(name[:12]) and count
    looks.assert_inside_canvas(figure)
    looks.assert_nothing_overlaps(figure)


def test_groups_beyond_six_become_others():
    names, code = group_codes(np.repeat(list("abcdefgh"), [1, 2, 3, 4, 5, 6, 7, 8]), 36)
    assert names == ["h", "g", "f", "e", "d", "c", "others"]
    assert np.bincount(code).tolist() == [8, 7, 6, 5, 4, 3, 3]


def test_budget_adds_up_to_the_variance(build):
    fit = build.real("flat_lcdm", build.sample(distance_scale="relative"))
    data = budget_data(fit.log_posterior, fit.optimum.values)
    z, variance = fit.sample.redshift, fit.sample.noise.total_variance
    index = np.searchsorted(data.edges, z, side="right") - 1
    for i in range(len(data.redshift)):
        members = index == i
        assert data.redshift[i] == pytest.approx(np.exp(np.log(z[members]).mean()))
        assert data.variance[:, i].sum() == pytest.approx(1 / np.mean(1 / variance[members]))
    assert data.labels == [term.label for term in fit.sample.terms]


def test_fitted_scatter_is_a_term_and_fitted_scale_multiplies_all(build):
    prior = {"uniform": [0, 0.5]}
    plain = build.real("flat_lcdm", build.sample(distance_scale="relative"))
    scatter = build.real("flat_lcdm", build.sample(distance_scale="relative", intrinsic=prior))
    scaled = build.real("flat_lcdm", build.sample(distance_scale="relative", covariance_scale={"uniform": [0.5, 2]}))
    first, second, third = (budget_data(f.log_posterior, f.optimum.values) for f in (plain, scatter, scaled))
    assert second.labels == [*first.labels, "intrinsic scatter"]
    np.testing.assert_allclose(second.variance[-1], 0.1**2)
    np.testing.assert_allclose(third.variance, 1.1**2 * first.variance)


@pytest.mark.parametrize("width", ["single", "double"])
@pytest.mark.parametrize("terms", [2, 3, 12])
def test_budget_figure(build, width, terms):
    fit = build.real("flat_lcdm", build.sample(distance_scale="relative"))
    data = budget_data(fit.log_posterior, fit.optimum.values)
    labels = [f"term number {i}" for i in range(terms)]
    data = replace(data, labels=labels, variance=np.outer(np.arange(1, terms + 1), data.variance[0]))
    figure = draw_budget(data, width=width)
    upper, lower = figure.axes
    tops = [patch.get_data().values for patch in lower.patches]
    np.testing.assert_allclose(tops[-1], 1)
    np.testing.assert_allclose(tops[0], data.variance[0] / data.variance.sum(axis=0))
    np.testing.assert_allclose(upper.patches[0].get_data().values, np.sqrt(data.variance.sum(axis=0)))
    assert [t.get_text() for t in figure.legends[0].get_texts()] == labels
    looks.assert_inside_canvas(figure)
    looks.assert_nothing_overlaps(figure)
    assert all(label in budget_caption(data) for label in labels)


def test_a_single_term_has_no_shares(build):
    fit = build.real("flat_lcdm", build.sample(distance_scale="relative"))
    data = budget_data(fit.log_posterior, fit.optimum.values)
    data = replace(data, labels=["all"], variance=np.full((1, len(data.redshift)), 0.04))
    (ax,) = draw_budget(data).axes
    np.testing.assert_allclose(ax.patches[0].get_data().values, 0.2)
    assert "one term, all" in budget_caption(data)


def test_errors_that_say_nothing_do_not_hide_the_others(build):
    """Some releases give a doubtful supernova an error of a hundred magnitudes instead of leaving it out."""
    sample = build.sample(diagonal=True)
    sigma = np.sqrt(sample.noise.variance)
    sigma[::7] = 100.0
    doubtful = Sample.from_arrays(sample.redshift, sample.data, sigma=sigma)
    fit = build.real("flat_lcdm", doubtful)
    assert np.sqrt(budget_data(fit.log_posterior, fit.optimum.values).variance.sum(axis=0)).max() < 0.25


def test_names_of_narrow_surveys_stay_apart_beside_the_matrix():
    from fitter.report.figures.covariance import _apart

    placed = _apart(np.array([0.9, 1.86, 1.87, 1.88, 1.89]), 0.1, 2.0)
    assert (np.diff(placed) > 0.28).all() and placed[-1] == 2.0
    np.testing.assert_array_equal(_apart(np.array([0.3, 1.2]), 0.1, 2.0), [0.3, 1.2])


def test_many_terms_are_summed_up(build):
    from fitter.report.figures.covariance import _largest

    variance = np.arange(1, 13)[:, None] * np.ones((12, 2))
    labels, kept = _largest([str(i) for i in range(12)], variance)
    assert labels == ["5", "6", "7", "8", "9", "10", "11", "5 others"]
    np.testing.assert_array_equal(kept.sum(axis=0), variance.sum(axis=0))


def test_the_pictures_are_as_they_were(build):
    fit = build.real("flat_lcdm", build.sample(distance_scale="relative", group=GROUPS))
    correlation, budget = correlation_data(fit.sample), budget_data(fit.log_posterior, fit.optimum.values)
    assert looks.difference_from_baseline(draw_correlation(correlation), "correlation") < 0.02
    assert looks.difference_from_baseline(draw_budget(budget), "error_budget") < 0.02
    swapped = replace(correlation, matrix=correlation.matrix[::-1])
    assert looks.difference_from_baseline(draw_correlation(swapped), "correlation", store=False) > 0.03
