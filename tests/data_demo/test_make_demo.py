"""The invented survey: the committed files are what the script writes, and they hold what the README says."""

import gzip
import importlib.util
import re
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad

ROOT = Path(__file__).resolve().parents[2]
FOLDER = ROOT / "data_demo"


def _load():
    spec = importlib.util.spec_from_file_location("make_demo", FOLDER / "make_demo.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules["make_demo"] = module
    spec.loader.exec_module(module)
    return module


make_demo = _load()


@pytest.fixture(scope="module")
def demo():
    return make_demo.invent(make_demo.Truth())


def _content(path):
    """What a file holds, uncompressed: the bytes of a gzip stream depend on the compressor."""
    raw = path.read_bytes()
    return gzip.decompress(raw) if path.suffix == ".gz" else raw


def test_committed_files_are_a_fresh_run(tmp_path):
    assert make_demo.main(["--out", str(tmp_path)]) == 0
    fresh = sorted(p.name for p in tmp_path.iterdir())
    committed = sorted(p.name for p in FOLDER.iterdir() if p.suffix in {".csv", ".gz", ".npy", ".txt"})
    assert fresh == committed
    for name in fresh:
        assert _content(tmp_path / name) == _content(FOLDER / name), f"{name}: run data_demo/make_demo.py and commit what it writes"


def test_readme_states_the_truth():
    rows = dict(re.findall(r"^\| (\w+) \| (-?[\d.]+)", (FOLDER / "README.md").read_text(), flags=re.M))
    truth = make_demo.Truth()
    for name in ("omega_m", "w", "H0", "absolute_magnitude"):
        assert float(rows[name]) == getattr(truth, name)
    assert float(rows["omega_lambda"]) == pytest.approx(1 - truth.omega_m)
    assert int(rows["seed"]) == make_demo.SEED


def test_modes_reproduce_the_calibration_covariance_exactly():
    lines = gzip.decompress((FOLDER / "calibration.txt.gz").read_bytes()).split()
    n = int(lines[0])
    matrix = np.array(lines[1:], dtype=float).reshape(n, n)
    modes = np.loadtxt(FOLDER / "calibration_modes.csv", delimiter=",", skiprows=1)
    assert n == len(modes) == 700
    # The elements are whole multiples of 1e-8 mag²; only the last bit of a double may differ.
    np.testing.assert_allclose(matrix, modes @ modes.T, rtol=0, atol=1e-17)
    assert np.array_equal(matrix, matrix.T)


@pytest.mark.parametrize("w", [-0.5, -0.8, -1.0, -1.3])
def test_distances_against_quadrature(w):
    truth = make_demo.Truth(w=w)

    def integrand(z):
        return 1.0 / np.sqrt(truth.omega_m * (1 + z) ** 3 + (1 - truth.omega_m) * (1 + z) ** (3 * (1 + w)))

    for z in (0.01, 0.5, 1.6):
        expected = make_demo.C_KM_S / truth.H0 * quad(integrand, 0, z, epsabs=1e-14, epsrel=1e-13)[0]
        assert make_demo.comoving_distance(z, truth) == pytest.approx(expected, rel=1e-11)


def test_peculiar_velocity_is_the_derivative_of_the_modulus():
    truth, z, step = make_demo.Truth(), np.array([0.01, 0.1, 0.5]), 1e-6
    # Only the comoving distance answers to the cosmological redshift: z_helio stays.
    slope = (make_demo.distance_modulus(z + step, z, truth) - make_demo.distance_modulus(z - step, z, truth)) / (2 * step)
    expected = slope * (1 + z) * truth.peculiar_velocity / make_demo.C_KM_S
    np.testing.assert_allclose(make_demo.peculiar_velocity_sigma(z, truth), expected, rtol=1e-7)
    assert expected[0] == pytest.approx(0.181, abs=0.002)  # the usual form (5 / ln 10) σ_v / (c z)


def test_sizes_and_redshifts(demo):
    assert len(demo.survey) == 700 and len(demo.calibrated) == 720
    assert np.isfinite(demo.calibrated["host_modulus"]).sum() == 20
    z = demo.survey["z"]
    assert 0.01 < z.min() < 0.02 and 1.4 < z.max() < 1.6
    shift = np.abs((1 + demo.survey["z_helio"]) / (1 + z) - 1) * make_demo.C_KM_S
    assert 250 < shift.max() <= 312.5  # the observer's 312 km/s; redshifts are rounded to 1e-6
    assert len(set(demo.calibrated["name"])) == 720


def test_scatter_is_what_the_error_budget_says(demo):
    truth, table = make_demo.Truth(), demo.survey
    residual = table["modulus"] - make_demo.distance_modulus(table["z"], table["z_helio"], truth)
    units = sum(make_demo.covariance_of(m) for m in demo.survey_modes.values())
    covariance = units * 1e-8 + np.diag(table["sigma_all"] ** 2)
    chi2 = residual @ np.linalg.solve(covariance, residual)
    assert abs(chi2 - 700) < 3 * np.sqrt(2 * 700)


def test_calibrators_give_the_absolute_magnitude(demo):
    truth, table = make_demo.Truth(), demo.calibrated
    rows = np.isfinite(table["host_modulus"])
    found = (table["magnitude"] - table["host_modulus"])[rows]
    error = np.hypot(truth.anchor, np.sqrt(np.mean(table["sigma_all"][rows] ** 2) / rows.sum()))
    assert abs(found.mean() - truth.absolute_magnitude) < 3 * error


def test_planted_zero_point_moves_one_survey_only(demo):
    planted = make_demo.invent(make_demo.Truth(), planted={"ombrevale": 0.05})
    moved = planted.survey["modulus"] - demo.survey["modulus"]
    assert np.allclose(moved, np.where(demo.survey["survey"] == "ombrevale", 0.05, 0.0), atol=1e-9)
    assert np.array_equal(planted.survey["z"], demo.survey["z"])
    assert np.allclose(planted.calibrated["magnitude"][700:], demo.calibrated["magnitude"][700:])


def test_options_change_the_draw(demo):
    other = make_demo.invent(make_demo.Truth(), seed=7)
    assert not np.array_equal(other.survey["modulus"], demo.survey["modulus"])
    bent = make_demo.invent(make_demo.Truth(w=-0.8))
    assert np.median((bent.survey["modulus"] - demo.survey["modulus"])[-160:]) < -0.05


@pytest.mark.parametrize("wrong", [["--plant-zero-point", "nobody:0.1"], ["--plant-zero-point", "ombrevale:x"], ["--w", "0.5"]])
def test_wrong_options_exit_with_2(wrong, tmp_path):
    with pytest.raises(SystemExit) as stop:
        make_demo.main(["--out", str(tmp_path), *wrong])
    assert stop.value.code == 2 and not list(tmp_path.iterdir())
