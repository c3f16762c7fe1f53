"""Warnings a practitioner would want, each on a made example and silent on a clean one."""

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.sample.advice import scatter_about_curve
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings

N = 60
RNG = np.random.default_rng(11)
Z = np.sort(RNG.uniform(0.02, 1.2, N))
SMOOTH = 43.2 + 5 * np.log10(Z * (1 + 0.7 * Z))
MU = SMOOTH + RNG.normal(0, 0.15, N)


def sample(mu=MU, z=Z, **terms):
    return Sample.from_arrays(z, mu, **({"sigma": 0.15} | terms))


def test_a_clean_sample_has_no_warnings():
    assert sample().warnings == ()
    assert sample(covariance=np.full((N, N), 1e-4)).warnings == ()
    assert sample(sigma=None, covariance=0.15**2 * np.eye(N)).warnings == ()


def only(warnings):
    (text,) = warnings
    return text


def test_redshifts_that_are_velocities():
    with pytest.raises(InputError, match="this is no redshift, here and in 59 more rows .*look like velocities"):
        sample(z=Z * 299792.458)


def test_data_of_the_wrong_kind():
    text = only(sample(mu=MU - 25).warnings)
    assert "20 to 50 mag" in text and "`magnitude`" in text and "row 1" in text
    assert "5 to 35 mag" in only(sample(data_kind="magnitude").warnings)


def test_sigma_counted_twice():
    text = only(sample(covariance=np.diag(np.full(N, 0.15**2)) + 1e-4).warnings)
    assert "counted twice" in text and "100 % of the rows" in text and "remove the sigma term" in text


def test_systematics_only():
    text = only(sample(sigma=None, covariance=np.diag(np.full(N, 0.02**2)) + 1e-4).warnings)
    assert "systematic only" in text and "{sigma: COLUMN}" in text


def test_scatter_about_a_curve_is_the_scatter():
    """The robust scatter of N numbers is good to about 1.17/√(2N)·√(2.7); five of those."""
    z = np.linspace(0.02, 1.2, 4000)
    data = 43.2 + 5 * np.log10(z * (1 + 0.7 * z)) + np.random.default_rng(0).normal(0, 0.15, len(z))
    pull, scatter = scatter_about_curve(z, data, np.full(len(z), 0.1))
    assert scatter == pytest.approx(0.15, rel=5 * 1.17 / np.sqrt(4000)) and pull == pytest.approx(1.5, rel=0.1)


@pytest.fixture
def load(tmp_path):
    def _load(terms, sigma=0.15, name="zcmb", **columns):
        rows = zip(Z, MU, np.broadcast_to(sigma, N), strict=True)
        (tmp_path / "t.txt").write_text(f"{name} mu e\n" + "".join(f"{a} {b} {c}\n" for a, b, c in rows))
        mapped = {"redshift": name, "distance_modulus": "mu"} | columns
        given = {"table": "t.txt", "columns": mapped, "uncertainty": [{"sigma": "e"}, *terms]}
        return Sample.from_config(SampleSettings.model_validate(given), tmp_path)

    return _load


@pytest.mark.parametrize("term", [{"peculiar_velocity": 250}, {"lensing": 0.055}])
def test_released_errors_that_hold_a_term_already(term, load):
    text = only(load([term], sigma=0.2).warnings)
    assert text.startswith(next(iter(term))) and "looks included already" in text and "remove the term" in text


def test_errors_too_small_to_hold_it(load):
    assert load([{"peculiar_velocity": 250}, {"lensing": 0.055}], sigma=0.03).warnings == ()


def test_errors_to_which_intrinsic_scatter_is_added_are_of_the_measurement(load):
    assert load([{"peculiar_velocity": 250}, {"intrinsic": 0.1}]).warnings == ()
    assert load([{"lensing": 0.055}, {"intrinsic": {"uniform": [0, 0.5]}}]).warnings == ()


def test_heliocentric_column(load):
    text = only(load([], name="zHEL").warnings)
    assert "'zHEL' looks heliocentric" in text and "redshift_helio" in text


def test_redshifts_of_two_frames_far_apart():
    text = only(Sample.from_arrays(Z, MU, sigma=0.15, z_helio=Z + np.where(np.arange(N) == 4, 0.02, 0)).warnings)
    assert "In 1 rows" in text and "row 5" in text


def test_calibrators_inside_a_relative_fit():
    host = np.full(N, np.nan)
    host[:3] = 31.0
    text = only(Sample.from_arrays(Z, MU, sigma=0.15, calibrator_modulus=host).warnings)
    assert "3 calibrator rows" in text and "keep: {calibrators: drop}" in text


def test_errors_of_another_size():
    text = only(sample(sigma=0.15**2).warnings)
    assert "look too small" in text and "Are they variances" in text and "{intrinsic:" in text
    assert "look too large" in only(sample(sigma=0.9).warnings)
    assert sample(sigma=0.15**2, intrinsic={"uniform": [0, 0.5]}).warnings == ()
    assert sample(modes=np.full((N, 1), 0.5)).warnings == ()


@pytest.fixture
def with_matrix(tmp_path):
    """A table with a column of errors (0.15 mag, called `mu_err`) that the config does not use, beside a matrix."""

    def load(matrix, sigma=0.15, kind="covariance", name="mu_err"):
        rows = zip(Z, MU, np.broadcast_to(sigma, N), strict=True)
        (tmp_path / "t.csv").write_text(f"z,mu,{name}\n" + "".join(f"{a},{b},{c}\n" for a, b, c in rows))
        np.save(tmp_path / "c.npy", matrix)
        columns = {"redshift": "z", "distance_modulus": "mu"}
        return Sample.from_config(
            SampleSettings.model_validate({"table": "t.csv", "columns": columns, "uncertainty": [{kind: "c.npy"}]}), tmp_path
        )

    return load


FULL = np.diag(np.full(N, 0.15**2)) + 1e-4


def test_column_and_diagonal_that_agree(with_matrix):
    assert with_matrix(FULL).warnings == ()
    assert with_matrix(np.linalg.inv(FULL), kind="precision").warnings == ()
    assert with_matrix(FULL, sigma=0.05, name="something").warnings == ()


def test_column_far_above_the_diagonal(with_matrix):
    text = with_matrix(np.diag(np.full(N, 0.05**2))).warnings[-1]
    assert "median ratio of the errors is 0.333" in text and "systematics only: then add {sigma: mu_err}" in text
    assert "The matrix alone is used" in text


def test_column_far_below_the_diagonal(with_matrix):
    text = only(with_matrix(FULL, sigma=0.05).warnings)
    assert "mu_err is probably the error of the measurement alone" in text


def test_one_row_where_they_disagree(with_matrix):
    sigma = np.full(N, 0.15)
    sigma[11] = 0.6
    text = only(with_matrix(FULL, sigma=sigma).warnings)
    assert "in 1 rows they differ otherwise, most in row 13" in text and "same table?" in text
