"""The published releases load as they are, from a config alone: every number against readers that share no code with the package."""

import numpy as np
import pytest

from fitter import Sample, load_config

RELEASES = ("pantheon2018_binned", "union2.1", "dovekie2025_statonly", "dovekie2025_vpec")


@pytest.mark.parametrize("name", RELEASES)
def test_release_loads(name, release, release_config):
    config, expected = load_config(release_config(name)), release(name)
    sample = Sample.from_config(config.sample, config.folder)
    assert sample.n == len(expected.z)
    assert sample.data_kind == expected.kind and sample.distance_scale == "relative"
    np.testing.assert_array_equal(sample.redshift, expected.z)
    np.testing.assert_array_equal(sample.redshift_helio, expected.z_helio)
    np.testing.assert_array_equal(sample.data, expected.data)
    if expected.precision is not None:
        np.testing.assert_array_equal(sample.noise.precision, expected.precision)
    else:
        dense = 0.0 if sample.noise.dense is None else sample.noise.dense
        np.testing.assert_allclose(np.diag(sample.noise.variance) + dense, expected.covariance, rtol=0, atol=1e-18)
