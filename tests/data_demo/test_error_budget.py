"""The uncertainty terms give back the errors that the invented survey was made with, one term at a time."""

from pathlib import Path

import numpy as np
import pytest

from fitter import Sample
from fitter.config.load import config_from_mapping

FOLDER = Path(__file__).resolve().parents[2] / "data_demo"
COLUMNS = {"redshift": "z", "redshift_helio": "z_helio", "group": "survey", "name": "name"}
TERMS = [{"sigma": "sigma"}, {"intrinsic": 0.09}, {"peculiar_velocity": 250}, {"lensing": 0.055}]


def _sample(table, uncertainty, **columns):
    scale = "calibrated" if "magnitude" in columns else "absolute"
    settings = {"table": table, "columns": {**COLUMNS, **columns}, "uncertainty": uncertainty, "distance_scale": scale}
    config = config_from_mapping({"sample": settings, "model": "flat_lcdm"}, folder=FOLDER)
    return Sample.from_config(config.sample, config.folder)


@pytest.mark.parametrize(
    "table, columns",
    [("survey.csv", {"distance_modulus": "modulus"}), ("calibrated.csv", {"magnitude": "magnitude", "calibrator_modulus": "host_modulus"})],
)
def test_separate_terms_add_up_to_the_total(table, columns):
    parts = np.sqrt(_sample(table, TERMS, **columns).noise.variance)
    whole = np.sqrt(_sample(table, [{"sigma": "sigma_all"}], **columns).noise.variance)
    # The velocity term takes Ω_m = 0.3, not the truth's 0.31; columns are rounded to 1e-4 mag.
    np.testing.assert_allclose(parts, whole, rtol=0, atol=1.2e-4)


def test_velocities_and_lensing_spare_calibrators():
    sample = _sample("calibrated.csv", TERMS, magnitude="magnitude", calibrator_modulus="host_modulus")
    by_label = {term.label: term.noise.variance for term in sample.terms}
    for label in ("peculiar_velocity", "lensing"):
        assert (by_label[label][sample.is_calibrator] == 0).all()
        assert (by_label[label][~sample.is_calibrator] > 0).all()


def test_covariances_equal_their_modes():
    as_matrix = _sample("survey.csv", [{"sigma": "sigma"}, {"covariance": "calibration.txt.gz"}], distance_modulus="modulus")
    as_modes = _sample("survey.csv", [{"sigma": "sigma"}, {"modes": "calibration_modes.csv"}], distance_modulus="modulus")
    # Whole multiples of 1e-8 mag² either way.
    np.testing.assert_allclose(as_matrix.noise.dense, as_modes.noise.modes @ as_modes.noise.modes.T, rtol=0, atol=1e-17)
