"""Every config in configs/ is right as it stands, and the fits find the truth again."""

from pathlib import Path

import pytest

from fitter import Sample, check, fit, load_config

FOLDER = Path(__file__).resolve().parents[1] / "configs"
CONFIGS = sorted(FOLDER.glob("*.yaml"))
JOBS = {"curved_lcdm", "flat_lcdm", "flat_wcdm", "flat_w0wa", "calibrated_h0"}
# All supernovae, no calibrators, except in these.
SIZES = {"calibrated_h0": (720, 20), "cosmographic": (337, 0)}
TRUTH = {"omega_m": 0.31, "omega_lambda": 0.69, "H0": 70.5, "w": -1.0, "w0": -1.0, "wa": 0.0, "absolute_magnitude": -19.27}


def test_there_is_one_for_each_job():
    assert {p.stem for p in CONFIGS} >= JOBS


@pytest.mark.parametrize("path", CONFIGS, ids=lambda p: p.stem)
def test_config_passes_check(path):
    report = check(path, allow_code=True)
    assert report.problems == ()


@pytest.mark.parametrize("path", CONFIGS, ids=lambda p: p.stem)
def test_config_loads_the_survey(path):
    config = load_config(path, allow_code=True)
    sample = Sample.from_config(config.sample, config.folder)
    assert (sample.n, sample.n_calibrators) == SIZES.get(path.stem, (700, 0))
    assert set(sample.labels) >= {"calibration", "dust"}
    assert not sample.warnings
    assert config.default_run_folder() == Path("runs") / path.stem


@pytest.mark.parametrize("path", [p for p in CONFIGS if p.stem in JOBS], ids=lambda p: p.stem)
def test_truth_is_found_again(path):
    # One draw of a survey: each true value within 3 sigma (for five fits, about one chance in thirty that any is outside by luck;
    # the seed is fixed, so it was lucky once and stays so).
    result = fit(path, run_folder=False, sampling={"target_ess": 2000})
    summary = result.summary()
    found = {k: v for k, v in summary["parameters"].items() if k in TRUTH}
    assert {"omega_m"} <= set(found)
    for name, values in found.items():
        assert abs(values["median"] - TRUTH[name]) < 3 * values["sd"], name
    assert summary["best_fit"]["p_value"] > 0.001
