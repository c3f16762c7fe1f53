"""Rehearsals: right errors pass, wrong ones are exposed; reproducible mock by mock; surveys to come."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.inference.settings import SamplingSettings
from fitter.sample.sample import Sample
from fitter.studies import MockOptions, Place, parse_truth
from fitter.studies import rehearse as rehearse_config
from fitter.study.calibration import binomial_p, calibrate, kolmogorov_p
from fitter.study.rehearse import Rehearsal, rehearse
from fitter.study.setup import FitSetup

SEED = np.random.SeedSequence(21)
N = 80


def a_setup(sigma=0.12, **more):
    z = np.linspace(0.03, 1.1, N)
    modes = 0.03 * np.column_stack([np.ones(N), z])
    sample = Sample.from_arrays(z, z + 40, sigma=sigma, modes=modes * sigma / 0.12, **more)
    return FitSetup(sample, "flat_lcdm", {"omega_m": {"uniform": [0, 1]}})


def rehearsed(fit, source=None, truth=None, mocks=200, **options):
    return rehearse(Rehearsal(fit, source or fit, truth, mocks, **options), seed=SEED, processes=1)


def test_a_right_fit_is_calibrated():
    found = rehearsed(a_setup())
    facts = found["parameters"]["omega_m"]
    for coverage in facts["coverage"].values():
        assert abs(coverage["share"] - coverage["nominal"]) < 4 * coverage["error"]
    assert facts["ranks"]["ks_p_value"] > 1e-3
    assert abs(facts["bias"]["in_sigma"]) < 4 * facts["bias"]["in_sigma_error"]
    assert abs(found["chi2"]["mean"] - found["chi2"]["dof"]) < 4 * found["chi2"]["error"]
    assert not found["alarms"] and found["verdict"][0].startswith("Coverage, ranks and χ² are as they should be")


def test_halved_errors_are_exposed():
    found = rehearsed(a_setup(0.06), source=a_setup(0.12), truth={"omega_m": 0.3})
    coverage = found["parameters"]["omega_m"]["coverage"]
    # Half the error holds erf(1/2√2) = 38.3 % where 68.3 % are claimed.
    assert coverage["68"]["share"] == pytest.approx(0.383, abs=4 * math.sqrt(0.383 * 0.617 / 200))
    assert found["parameters"]["omega_m"]["bias"]["pull_sd"] == pytest.approx(2, rel=4 / math.sqrt(400))
    assert found["chi2"]["mean"] == pytest.approx(4 * found["chi2"]["dof"], rel=0.1)
    assert {a["test"] for a in found["alarms"]} >= {"distribution", "coverage of the 68 % interval", "ranks"}
    assert "does not do what it claims" in found["verdict"][0]


def test_a_wrong_model_is_biased():
    source = FitSetup(a_setup().sample, "flat_wcdm", {"omega_m": {"uniform": [0, 1]}, "w": {"uniform": [-2, 0]}})
    found = rehearsed(a_setup(), source=source, truth={"omega_m": 0.3, "w": -0.5}, mocks=60)
    bias = found["parameters"]["omega_m"]["bias"]
    assert bias["mean"] > 5 * bias["error"]
    assert found["source_model"] == "flat_wcdm"


def test_free_scatter_and_scale_are_calibrated_too():
    setup = a_setup(intrinsic={"uniform": [0.0, 0.3]})
    found = rehearsed(setup, truth={"omega_m": 0.3, "intrinsic_scatter": 0.1}, mocks=30)
    for facts in found["parameters"].values():
        assert abs(facts["bias"]["in_sigma"]) < 5 * facts["bias"]["in_sigma_error"]


def test_every_mock_is_the_same_however_it_is_run():
    setup = a_setup()
    whole = rehearse(Rehearsal(setup, setup, None, 25), seed=SEED, processes=2)
    assert whole == rehearse(Rehearsal(setup, setup, None, 25), seed=SEED, processes=1)
    few = rehearse(Rehearsal(setup, setup, None, 10), seed=SEED, processes=1)
    for a, b in zip(few["fits"], whole["fits"], strict=False):
        # The same draws; a factorisation of other width may round differently.
        assert a["parameters"]["omega_m"]["truth"] == b["parameters"]["omega_m"]["truth"]
        assert a["chi2"] == pytest.approx(b["chi2"], abs=1e-6)
    assert [fit["mock"] for fit in whole["fits"]] == list(range(25))


def test_the_sampler_says_the_same_as_the_quick_way():
    setup = a_setup()
    sampling = SamplingSettings(replicas=2, walkers=16, target_ess=1000)
    quick = rehearsed(setup, truth={"omega_m": 0.3}, mocks=3)["fits"]
    slow = rehearsed(setup, truth={"omega_m": 0.3}, mocks=3, method="sampler", sampling=sampling)["fits"]
    for a, b in zip(quick, slow, strict=True):
        a, b = a["parameters"]["omega_m"], b["parameters"]["omega_m"]
        assert b["median"] == pytest.approx(a["median"], abs=5 * 1.25 * a["sd"] / math.sqrt(1000))


def test_truths_that_cannot_be():
    setup = a_setup()
    with pytest.raises(InputError, match="no value for omega_m"):
        rehearsed(setup, truth={})
    with pytest.raises(InputError, match="w is not sampled"):
        rehearsed(setup, truth={"omega_m": 0.3, "w": -1})
    with pytest.raises(InputError, match="outside the prior"):
        rehearsed(setup, truth={"omega_m": 1.3})
    other = replace(setup, sample=setup.sample.select(np.arange(N - 1)))
    with pytest.raises(InputError, match="must be the same ones"):
        rehearsed(setup, source=other)
    assert parse_truth("omega_m=0.3, H0=70") == {"omega_m": 0.3, "H0": 70.0}
    with pytest.raises(InputError, match="truth of the mocks"):
        parse_truth("omega_m=much")


PLANNED = """
title: a survey to come
sample:
  table: planned.csv
  columns: {redshift: z}
  uncertainty: [{sigma: error}]
model: flat_lcdm
sampling: {seed: 3}
"""


def test_a_survey_that_does_not_exist_yet(tmp_path):
    z = np.linspace(0.05, 1.5, 120)
    (tmp_path / "planned.csv").write_text("z,error\n" + "".join(f"{a},0.1\n" for a in z))
    config = tmp_path / "planned.yaml"
    config.write_text(PLANNED)
    study = rehearse_config(config, MockOptions(25, {"omega_m": 0.3}), Place(tmp_path / "out"), processes=1)
    # Fisher's information of Ω_m with the offset marginalised, from the derivative of the expected moduli.
    posterior = FitSetup(Sample.from_arrays(z, z + 40, sigma=0.1), "flat_lcdm", {}).posterior()
    low, high = posterior.distance_modulus(np.array([[0.299], [0.301]]), z)
    slope = (high - low) / 0.002
    fisher = ((slope - slope.mean()) ** 2).sum() / 0.1**2
    assert study.result["parameters"]["omega_m"]["precision"]["sigma"] == pytest.approx(fisher**-0.5, rel=0.1)
    assert "survey to come" in study.text and "scatter/σ their scatter" in study.text
    names = {p.name for p in (tmp_path / "out").rglob("*")}
    assert {"rehearsal.json", "rehearsal.md", "rehearsal.csv", "rehearsal.png", "rehearsal.pdf"} <= names
    assert json.loads((tmp_path / "out" / "rehearsal.json").read_text())["planned"] is True
    with pytest.raises(InputError, match="no best fit"):
        rehearse_config(config, MockOptions(5, "best"), Place(False))


def test_uniformity_tests_against_their_definition():
    rng = np.random.default_rng(4)
    p = np.array([kolmogorov_p(rng.random(50)) for _ in range(500)])
    assert abs((p < 0.1).sum() - 50) < 4 * math.sqrt(500 * 0.1 * 0.9)
    assert kolmogorov_p(0.5 + 0.5 * rng.random(100)) < 1e-10
    assert binomial_p(5, 10, 0.5) == 1
    assert binomial_p(0, 10, 0.5) == pytest.approx(2 * 0.5**10)
    assert binomial_p(10, 10, 0.5) == pytest.approx(2 * 0.5**10)


def test_the_figure_shows_the_ranks():
    from fitter.report.figures.rehearsal import rehearsal_caption, rehearsal_figure

    rng = np.random.default_rng(0)
    row = {"mean": 0.3, "sd": 0.1, "median": 0.3, "low68": 0.2, "high68": 0.4, "low95": 0.1, "high95": 0.5, "truth": 0.31}
    fits = [{"parameters": {"omega_m": {**row, "rank": float(rng.random())}}, "chi2": float(rng.chisquare(50))} for _ in range(100)]
    result = {"fits": fits, "mocks": 100, "truth": "prior", **calibrate(fits, ["omega_m"], 50)}
    figure = rehearsal_figure(result)
    ranks, chi2 = figure.axes
    assert ranks.patches[-1].get_data().values.tolist() == result["parameters"]["omega_m"]["ranks"]["counts"]
    assert sum(chi2.patches[0].get_data().values) == 100
    assert "drawn from the prior" in rehearsal_caption(result)
