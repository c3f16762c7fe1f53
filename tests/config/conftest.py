"""A small table and its config, to be broken in one place."""

import pytest


@pytest.fixture
def project(tmp_path, write_project):
    """A folder with config.yaml, survey.csv and systematics.npy."""
    return write_project(tmp_path, "{walkers: 32, target_ess: 500}")
