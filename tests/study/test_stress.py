"""Stress: a planted error is found and a sound survey is left in peace; the numbers against refits, row by row."""

import importlib.util
import json
import math
import shutil
import sys
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.likelihood.posterior import LogPosterior
from fitter.sample.sample import Sample
from fitter.studies import Place, stress
from fitter.study.goodness import anderson_darling, goodness
from fitter.study.influence import shifts
from fitter.study.refit import refit, resample
from fitter.study.scenarios import changed, scenarios
from fitter.study.setup import FitSetup
from fitter.study.stress import FLAG
from fitter.study.stress import stress as run_stress

ROOT = Path(__file__).parents[2]
SEED = np.random.SeedSequence(11)


def survey(folder, planted=None):
    spec = importlib.util.spec_from_file_location("make_demo", ROOT / "data_demo" / "make_demo.py")
    script = importlib.util.module_from_spec(spec)
    sys.modules["make_demo"] = script  # its dataclasses look themselves up
    spec.loader.exec_module(script)
    script.write(script.invent(script.Truth(), planted=planted), folder / "data_demo")
    (folder / "configs").mkdir()
    return Path(shutil.copy(ROOT / "configs" / "flat_lcdm.yaml", folder / "configs"))


def a_setup(n=160, seed=4, noise=0.1, planted=0.0, **more):
    rng = np.random.default_rng(seed)
    z = np.sort(rng.uniform(0.02, 1.2, n))
    group = np.where(np.arange(n) % 3 == 0, "east", "west")
    setup = FitSetup(Sample.from_arrays(z, z + 40, sigma=0.1, group=group, **more), "flat_lcdm", {"omega_m": {"uniform": [0, 1]}})
    posterior = setup.posterior()
    mu = posterior.expected(np.array([[0.3]]))[0] + noise * rng.standard_normal(n) + planted * (group == "east")
    return FitSetup(Sample.from_arrays(z, mu, sigma=0.1, group=group, **more), "flat_lcdm", setup.parameters)


def test_a_planted_zero_point_is_found_and_its_survey_named(tmp_path):
    found = stress(survey(tmp_path, {"ombrevale": 0.08}), Place(False), processes=1).result
    assert found["tests"]["flagged"] > 5
    assert found["tests"]["worst"]["p_global"] < 1e-3
    trends = {t["label"]: t for t in found["goodness"]["trends"]}
    worst = max(trends.values(), key=lambda t: abs(t["significance"]))
    assert worst["label"] == "offset of ombrevale"
    # The planted 0.08 mag, within 3 of its own errors.
    assert worst["amplitude"] == pytest.approx(0.08, abs=3 * worst["error"])
    assert "offset of ombrevale" in found["verdict"][1]


def test_the_sound_survey_is_left_in_peace_and_everything_is_written(tmp_path):
    folder = tmp_path / "out"
    study = stress(survey(tmp_path), Place(folder), processes=1)
    assert study.result["tests"]["flagged"] == 0
    assert "survives" in study.text and "shift/expected: over" in study.text
    page = (folder / "stress.md").read_text()
    assert all(f"\n## {heading}" in page for heading in ("Ωm", "Error budget", "Single supernovae", "Residuals"))
    assert {p.name for p in folder.iterdir()} >= {"stress.json", "stress.md", "stress.csv", "config.yaml", "figures"}
    written = json.loads((folder / "stress.json").read_text())
    assert written["variants"] == study.result["variants"]
    assert not (folder / "tasks.jsonl").exists()
    with pytest.raises(InputError, match="already there"):
        stress(tmp_path / "configs" / "flat_lcdm.yaml", Place(folder))
    kinds = {row["kind"] for row in written["variants"]}
    assert kinds == {"subsample", "cut", "offset", "term", "mode", "prior", "model"}
    assert list(written["error_budget"]) == ["without calibration", "without dust", "statistical only"]
    for facts in written["error_budget"].values():
        assert 0 < facts["omega_m"]["share"] < 1


def test_every_change_does_what_it_says():
    setup = a_setup(modes=0.02 * np.ones((160, 1)))
    sample = setup.sample
    by_key = {s.key: changed(setup, s) for s in scenarios(setup, {"omega_m": 0.3})}
    east = sample.group == "east"
    assert by_key["without east"].sample.n == (~east).sum() and by_key["only east"].sample.n == east.sum()
    for key, fit in by_key.items():
        if key.startswith("z >"):
            assert fit.sample.redshift.min() > float(key[4:])
        elif key.startswith("z ≤"):
            assert fit.sample.redshift.max() <= float(key[4:])
    np.testing.assert_allclose(by_key["mode 0 −"].sample.data, sample.data - 0.02)
    assert by_key["prior omega_m halved"].parameters["omega_m"]["uniform"] == pytest.approx([0.05, 0.55])
    assert by_key["prior omega_m doubled"].parameters["omega_m"] == {"uniform": [0.0, 2.0]}
    assert by_key["radiation"].radiation is True
    assert "covariance_scale" in by_key["scale"].posterior().names and "intrinsic_scatter" in by_key["scatter"].posterior().names
    assert by_key["no modes"].sample.labels == ("sigma",)
    # A free offset of 1 mag a priori: the fit no longer knows the group's zero point.
    shifted = by_key["offset east"].sample
    moved = FitSetup(
        Sample.from_arrays(sample.redshift, sample.data + 0.5 * east, sigma=0.1, group=sample.group), "flat_lcdm", setup.parameters
    )
    a, b = (LogPosterior.build(s, "flat_lcdm").chi2(np.array([[0.2], [0.4]])) for s in (shifted, _offset(moved).sample))
    assert np.diff(a) == pytest.approx(np.diff(b), rel=1e-3)


def _offset(setup):
    return next(changed(setup, s) for s in scenarios(setup, {"omega_m": 0.3}) if s.key == "offset east")


def test_shifts_are_those_of_refits_and_judged_by_the_nested_scatter():
    setup = a_setup()
    found = run_stress(setup, seed=SEED, processes=1)
    row = next(r for r in found["variants"] if r["key"] == "without east")["parameters"]["omega_m"]
    alone = refit(setup.with_sample(setup.sample.select(setup.sample.group == "west")).posterior(), SEED).facts()["parameters"]["omega_m"]
    whole = refit(setup.posterior(), SEED).facts()["parameters"]["omega_m"]
    assert row["shift"] == pytest.approx(alone["median"] - whole["median"], abs=1e-6)
    sigma = [0.5 * (f["high68"] - f["low68"]) for f in (alone, whole)]
    assert row["expected"] == pytest.approx(math.sqrt(sigma[0] ** 2 - sigma[1] ** 2), rel=1e-5)
    assert row["flagged"] == (abs(row["shift"]) > FLAG * row["expected"])


def test_nested_shifts_scatter_as_expected():
    """Over many mocks the shift over its expected scatter has unit variance (Gratton & Challinor 2020)."""
    setup = a_setup(n=120)
    posterior = setup.posterior()
    east = setup.sample.group == "west"
    part = setup.with_sample(setup.sample.select(east)).posterior()
    mocks = posterior.simulate(np.full((80, 1), 0.3), np.random.default_rng(1))
    ratio = []
    for whole, some in zip(posterior.with_data(mocks), part.with_data(mocks[:, east]), strict=True):
        a, b = (refit(p, SEED).marginals for p in (whole, some))
        ratio.append((b.mean("omega_m") - a.mean("omega_m")) / math.sqrt(b.sd("omega_m") ** 2 - a.sd("omega_m") ** 2))
    # χ² of 80 degrees of freedom: 4 standard deviations of its mean per degree.
    assert np.mean(np.square(ratio)) == pytest.approx(1, abs=4 * math.sqrt(2 / 80))


@pytest.mark.parametrize("kind", ["diagonal", "dense", "precision", "modes"])
def test_leaving_one_out_equals_the_fit_without_it(kind):
    n = 40
    rng = np.random.default_rng(6)
    root = 0.02 * rng.standard_normal((n, n))
    noise = {
        "diagonal": {"sigma": 0.1},
        "dense": {"covariance": root @ root.T + 0.01 * np.eye(n)},
        "precision": {"precision": np.linalg.inv(root @ root.T + 0.01 * np.eye(n))},
        "modes": {"sigma": 0.1, "modes": 0.05 * rng.standard_normal((n, 2))},
    }[kind]
    z = np.sort(rng.uniform(0.05, 1.0, n))
    mu = 5 * np.log10(z * (1 + 0.6 * z)) + 43 + 0.1 * rng.standard_normal(n)
    mu[17] += 0.4
    setup = FitSetup(Sample.from_arrays(z, mu, **noise), "flat_lcdm", {"omega_m": {"uniform": [0, 1]}})
    fitted = refit(setup.posterior(), SEED)
    got, effective = shifts(setup.posterior(), resample(fitted.marginals, 20_000, SEED), fitted.optimum.values)
    for i in (0, 17, n - 1):
        without = refit(setup.with_sample(setup.sample.select(np.arange(n) != i)).posterior(), SEED)
        wanted = without.marginals.mean("omega_m") - fitted.marginals.mean("omega_m")
        # Systematic resampling of one dimension: far better than 1/√20000.
        assert got[i, 0] == pytest.approx(wanted, abs=0.01 * fitted.marginals.sd("omega_m"))
    assert effective[17] < effective[0] <= 1


def test_residual_tests_see_what_is_there():
    quiet = a_setup()
    facts = goodness(quiet.posterior(), refit(quiet.posterior(), SEED).optimum)
    assert 0.01 < facts["p_two_sided"] < 1 and not facts["outliers"]
    assert all(abs(t["significance"]) < 3 for t in facts["trends"])
    planted = a_setup(planted=0.1)
    facts = goodness(planted.posterior(), refit(planted.posterior(), SEED).optimum)
    offset = next(t for t in facts["trends"] if t["label"] == "offset of east")
    assert offset["amplitude"] == pytest.approx(0.1, abs=3 * offset["error"]) and offset["significance"] > 4
    data = np.array(quiet.sample.data)
    data[50] += 0.9
    spoilt = FitSetup(Sample.from_arrays(quiet.sample.redshift, data, sigma=0.1), "flat_lcdm", quiet.parameters)
    facts = goodness(spoilt.posterior(), refit(spoilt.posterior(), SEED).optimum)
    assert [o["row"] for o in facts["outliers"]] == [51]
    assert facts["anderson_darling"]["p_value"] < facts["p_two_sided"] or facts["kurtosis"]["value"] > 3 * facts["kurtosis"]["error"]
    wide = a_setup(noise=0.2)
    assert goodness(wide.posterior(), refit(wide.posterior(), SEED).optimum)["p_two_sided"] < 1e-6


def test_score_of_an_offset_is_the_gain_in_chi2():
    setup = a_setup(planted=0.05)
    optimum = refit(setup.posterior(), SEED).optimum
    score = next(t for t in goodness(setup.posterior(), optimum)["trends"] if t["label"] == "offset of east")["significance"]
    gain = optimum.chi2 - refit(_offset(setup).posterior(), SEED).optimum.chi2
    # The score is exact for a linear model; the prior of 1 mag costs (0.05/1)² at most.
    assert score**2 == pytest.approx(gain, rel=0.02, abs=0.01)


def test_anderson_darling_is_uniform_for_gaussians_and_small_for_others():
    rng = np.random.default_rng(0)
    p = np.array([anderson_darling(rng.standard_normal(200))[1] for _ in range(400)])
    # Binomial: 400 × 0.05 ± 4.4 each side of 20, at 4 sigma; the published formula is good to a few per cent.
    assert abs((p < 0.05).sum() - 20) < 18
    assert abs((p < 0.5).sum() - 200) < 45
    assert anderson_darling(rng.standard_t(2, size=400))[1] < 1e-6


def test_a_blinded_study_says_differences_only(tmp_path):
    setup = a_setup()
    open_, hidden = (run_stress(setup, seed=SEED, processes=1, blind=blind) for blind in ((), ("omega_m",)))
    assert hidden["baseline"]["parameters"]["omega_m"]["median"] == pytest.approx(0, abs=1e-12)
    for a, b in zip(open_["variants"], hidden["variants"], strict=True):
        assert a["parameters"]["omega_m"]["shift"] == pytest.approx(b["parameters"]["omega_m"]["shift"], abs=1e-12)
    value = open_["baseline"]["parameters"]["omega_m"]["median"]
    assert f"{value:.3f}"[1:] not in json.dumps(hidden)


def test_an_interrupted_study_resumes_to_the_same(tmp_path):
    config = survey(tmp_path)
    whole = stress(config, Place(False), processes=1).result

    def stop(done, total):
        if done == 5:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        stress(config, Place(tmp_path / "run"), processes=1, progress=stop)
    started = []
    resumed = stress(config, Place(tmp_path / "run", resume=True), processes=1, progress=lambda done, total: started.append(done))
    assert started[0] == 5
    assert {k: v for k, v in resumed.result.items() if k in whole} == whole


def test_a_cluster_gives_the_same_to_the_bit():
    distributed = pytest.importorskip("distributed", reason="the extra mufitter[cluster] is not installed")
    setup = a_setup(n=60)
    options = {"threads_per_worker": 1, "processes": True, "dashboard_address": None, "worker_dashboard_address": None}
    with distributed.LocalCluster(2, **options) as cluster:
        far = run_stress(setup, seed=SEED, scheduler=cluster.scheduler_address)
    assert far == run_stress(setup, seed=SEED, processes=1)


def test_the_forest_plot_shows_the_table():
    from fitter.report.figures.stress import stress_caption, stress_figure

    found = run_stress(a_setup(planted=0.15), seed=SEED, processes=1)
    axes = stress_figure(found, "omega_m").axes[0]
    texts = [t.get_text() for t in axes.texts]
    low, high = axes.get_xlim()
    points = [float(line.get_xdata()[0]) for line in axes.lines if line.get_marker() == "o"]
    for row in found["variants"]:
        facts = row["parameters"]["omega_m"]
        assert row["label"].replace("_", " ") in texts
        if low < facts["median"] < high:
            assert facts["median"] in points
    facts = [row["parameters"]["omega_m"] for row in found["variants"]]
    arrows = sum((f["low68"] < low) + (f["high68"] > high) if low < f["median"] < high else 1 for f in facts)
    assert found["tests"]["flagged"] and arrows > 0
    assert sum(line.get_marker() in "<>" for line in axes.lines) == arrows
    header = next(text for text in axes.texts if text.get_text() == "shift / expected").get_window_extent()
    assert header.y1 < axes.figure.bbox.y1 and header.x1 < axes.figure.bbox.x1
    assert "equal-tailed 68.3 %" in stress_caption(found, "omega_m")


def test_what_the_prior_decides_is_not_judged():
    narrow = a_setup(n=60).with_prior("omega_m", {"uniform": [0.28, 0.32]})
    found = run_stress(narrow, seed=SEED, processes=1)
    assert all(row["parameters"]["omega_m"]["significance"] is None for row in found["variants"])
    assert found["tests"]["n"] == len(found["goodness"]["trends"])
