"""Which model contains which, and where."""

import numpy as np
import pytest

from fitter import Sample
from fitter.cosmology import MODELS, get_model
from fitter.cosmology.distances import log_distance
from fitter.cosmology.grid import Grid
from fitter.likelihood.posterior import LogPosterior
from fitter.study.nested import expressions, nesting

PAIRS = [(a, b) for b in MODELS for a in MODELS if a != b and expressions(get_model(b), a) is not None]


@pytest.fixture(scope="module")
def sample():
    z = np.geomspace(0.02, 1.2, 40)
    return Sample.from_arrays(z, 43 + 5 * np.log10(z) + z, sigma=0.1, distance_scale="absolute")


def build(sample, model, **parameters):
    return LogPosterior.build(sample, model, parameters, radiation=True)


def test_the_families_are_nested_as_they_should_be():
    simple = {b: {a for a, other in PAIRS if other == b} for b in MODELS}
    assert simple["flat_lcdm"] == set() == simple["cosmographic"]
    assert simple["curved_lcdm"] == simple["flat_wcdm"] == {"flat_lcdm"}
    assert simple["curved_wcdm"] == {"flat_lcdm", "curved_lcdm", "flat_wcdm"}
    assert simple["flat_w0wa"] == {"flat_lcdm", "flat_wcdm"}
    assert simple["curved_w0wa"] == set(MODELS) - {"curved_w0wa", "cosmographic"}


@pytest.mark.parametrize(("small", "large"), PAIRS)
def test_at_the_nested_values_the_distances_are_the_same(small, large, sample):
    nest = nesting(build(sample, small), build(sample, large))
    rng = np.random.default_rng(1)
    ranges = {"omega_m": (0.2, 0.4), "omega_lambda": (0.5, 0.8), "omega_de": (0.5, 0.8), "H0": (65, 75)}
    ranges |= {"w": (-1.3, -0.7), "w0": (-1.2, -0.8), "wa": (-0.5, 0.5)}
    theta = np.column_stack([rng.uniform(*ranges[n], 20) for n in nest.small.names])
    points = nest.points(theta)
    np.testing.assert_allclose(nest.large.log_likelihood(points), nest.small.log_likelihood(theta), atol=1e-6)
    assert len(nest.extra) == len(nest.large.names) - len(nest.small.names)


def test_a_parameter_held_fixed_nests_a_model_in_itself(sample):
    nest = nesting(build(sample, "flat_wcdm", w=-0.8), build(sample, "flat_wcdm"))
    assert nest.describe() == {"w": -0.8}
    assert nesting(build(sample, "flat_wcdm"), build(sample, "flat_wcdm", w=-0.8)) is None


def test_fixed_values_decide(sample):
    # wCDM with w = -0.8 is no cosmological constant: flat ΛCDM does not stand in it.
    assert nesting(build(sample, "flat_lcdm"), build(sample, "curved_wcdm", w=-0.8)) is None
    assert nesting(build(sample, "flat_lcdm"), build(sample, "curved_wcdm", w=-1.0)).describe() == {"omega_de": "flat"}
    assert nesting(build(sample, "flat_lcdm", H0=70.0), build(sample, "flat_wcdm")).extra == ("w", "H0")


def test_a_fitted_scatter_contains_none():
    z = np.geomspace(0.02, 1.2, 40)
    plain, free = (Sample.from_arrays(z, 43 + 5 * np.log10(z) + z, sigma=0.1, intrinsic=i) for i in (None, {"uniform": [0, 0.5]}))
    nest = nesting(LogPosterior.build(plain, "flat_lcdm"), LogPosterior.build(free, "flat_lcdm"))
    assert nest.describe() == {"intrinsic_scatter": 0.0}
    assert nest.at_edge() == ("intrinsic_scatter",)


def test_same_fit_or_other_data_is_not_nested(sample):
    other = Sample.from_arrays(sample.redshift, sample.data + 0.01, sigma=0.1, distance_scale="absolute")
    assert nesting(build(sample, "flat_lcdm"), build(sample, "flat_lcdm")) is None
    assert nesting(build(other, "flat_lcdm"), build(sample, "flat_wcdm")) is None


def test_flatness_counts_radiation():
    # The nested value of Ω_Λ is 1 - Ω_m - Ω_r, so that Ω_k is exactly zero.
    model, omega_r = get_model("curved_lcdm"), np.array([9e-5])
    value = expressions(model, "flat_lcdm")["omega_lambda"]({"omega_m": np.array([0.3]), "omega_r": omega_r})
    assert model.omega_k(np.array([[0.3, value[0]]]), omega_r) == pytest.approx(0.0, abs=1e-16)
    f, _, _ = log_distance(model, np.array([[0.3, value[0]]]), Grid(1.0, 32), omega_r)
    flat, _, _ = log_distance(get_model("flat_lcdm"), np.array([[0.3]]), Grid(1.0, 32), omega_r)
    np.testing.assert_allclose(f, flat, atol=1e-12)
