"""A small table and its config, to be broken in one place."""

import numpy as np
import pytest

CONFIG = """\
title: a small survey
sample:
  table: survey.csv
  columns: {redshift: z, distance_modulus: mu, group: survey}
  uncertainty:
    - {sigma: sigma}
    - {covariance: systematics.npy, label: calibration}
  distance_scale: absolute
model: flat_lcdm
parameters:
  omega_m: {uniform: [0.05, 0.8]}
sampling: {walkers: 32, target_ess: 500}
"""


@pytest.fixture
def project(tmp_path):
    """A folder with config.yaml, survey.csv and systematics.npy."""
    rng = np.random.default_rng(4)
    z = np.linspace(0.02, 0.9, 40)
    mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.16 + 0.1 * rng.standard_normal(40)
    rows = [f"{a:.5f},{b:.4f},0.1,{'near' if a < 0.3 else 'far'}" for a, b in zip(z, mu, strict=True)]
    (tmp_path / "survey.csv").write_text("z,mu,sigma,survey\n" + "\n".join(rows) + "\n")
    np.save(tmp_path / "systematics.npy", np.full((40, 40), 0.01**2))
    (tmp_path / "config.yaml").write_text(CONFIG)
    return tmp_path
