"""Settings for the whole suite, and the small project that tests of the config and of the command line share."""

import numpy as np
import pytest
from hypothesis import settings

# Timings on a shared machine say nothing about correctness, so no example has a deadline.
# `make test` draws the same examples every time, so that a change is judged by what it changed; `make fuzz` and `make soak` draw new ones.
settings.register_profile("quick", deadline=None, derandomize=True)
settings.register_profile("soak", deadline=None, derandomize=False, max_examples=5000)
settings.load_profile("quick")

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
"""


@pytest.fixture(scope="session")
def write_project():
    """A function that fills a folder with config.yaml, survey.csv and systematics.npy."""

    def write(folder, sampling):
        rng = np.random.default_rng(4)
        z = np.linspace(0.02, 0.9, 40)
        mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.16 + 0.1 * rng.standard_normal(40)
        rows = [f"{a:.5f},{b:.4f},0.1,{'near' if a < 0.3 else 'far'}" for a, b in zip(z, mu, strict=True)]
        folder.mkdir(exist_ok=True)
        (folder / "survey.csv").write_text("z,mu,sigma,survey\n" + "\n".join(rows) + "\n")
        np.save(folder / "systematics.npy", np.full((40, 40), 0.01**2))
        (folder / "config.yaml").write_text(f"{CONFIG}sampling: {sampling}\n")
        return folder

    return write
