"""Every config in configs/ is right as it stands, and the fits find the truth again."""

import json
from pathlib import Path

import numpy as np
import pytest

from fitter import Sample, check, fit, load_config
from fitter.api import unblind
from fitter.studies import MockOptions, Place, rehearse

FOLDER = Path(__file__).resolve().parents[1] / "configs"
CONFIGS = sorted(FOLDER.glob("*.yaml"))
JOBS = {"curved_lcdm", "flat_lcdm", "flat_wcdm", "flat_w0wa", "calibrated_h0"}
# All supernovae, no calibrators, except in these.
SIZES = {"calibrated_h0": (720, 20), "cosmographic": (337, 0)}
PLANNED = {"planned_survey"}  # without data
TRUTH = {"omega_m": 0.31, "omega_lambda": 0.69, "H0": 70.5, "w": -1.0, "w0": -1.0, "wa": 0.0, "absolute_magnitude": -19.27}


def test_there_is_one_for_each_job():
    assert {p.stem for p in CONFIGS} >= JOBS


@pytest.mark.parametrize("path", CONFIGS, ids=lambda p: p.stem)
def test_config_passes_check(path):
    report = check(path, allow_code=True)
    assert report.problems == ()
    assert report.planned == (path.stem in PLANNED)


@pytest.mark.parametrize("path", [p for p in CONFIGS if p.stem not in PLANNED], ids=lambda p: p.stem)
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


def test_the_planned_survey_is_rehearsed():
    """The precision that mocks show is the scatter of their best values: within the error of a standard deviation from 40 of them."""
    options = MockOptions(40, {"omega_m": 0.31, "w": -1.0})
    study = rehearse(FOLDER / "planned_survey.yaml", options, Place(False), processes=1)
    assert study.result["planned"] and study.result["n"] == 300 and not study.result["alarms"]
    for facts in study.result["parameters"].values():
        assert abs(facts["bias"]["pull_sd"] - 1) < 4 / np.sqrt(2 * 40)


def test_the_blinded_fit_hides_its_values_until_it_is_unblinded(tmp_path):
    path = FOLDER / "blinded.yaml"
    open_fit = fit(path, run_folder=False, blind=False, sampling={"target_ess": 1000})
    fit(path, run_folder=tmp_path / "run", sampling={"target_ess": 1000})
    blinded, true = json.loads((tmp_path / "run/summary.json").read_text()), open_fit.summary()
    assert blinded["blinded"] == ["omega_m", "w"]
    for name in ("omega_m", "w"):
        assert abs(blinded["parameters"][name]["median"] - true["parameters"][name]["median"]) > 1e-3
        assert blinded["parameters"][name]["sd"] == pytest.approx(true["parameters"][name]["sd"], rel=1e-9)
    assert unblind(tmp_path / "run").summary()["parameters"]["w"]["median"] == pytest.approx(true["parameters"]["w"]["median"], abs=1e-9)
