"""Fits from Python: the objects, the run folder, and continuing a run."""

import csv
import html
import json
import logging
import re
import sys

import numpy as np
import pytest

import fitter
from fitter import InputError, Sample, fit
from fitter.api import TooShort, load_run
from fitter.report.run_folder import read_run

SAMPLING = {"replicas": 2, "walkers": 32, "target_ess": 400}


@pytest.fixture(scope="module")
def sample():
    rng = np.random.default_rng(11)
    z = np.linspace(0.02, 0.9, 60)
    mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.16 + 0.1 * rng.standard_normal(60)
    return Sample.from_arrays(z, mu, sigma=0.1, distance_scale="absolute")


@pytest.fixture(scope="module")
def result(sample, tmp_path_factory):
    folder = tmp_path_factory.mktemp("api") / "run"
    return fit(title="sixty", sample=sample, model="flat_lcdm", sampling=SAMPLING, run_folder=folder)


def test_public_names_exist():
    for name in fitter.__all__:
        assert getattr(fitter, name) is not None
    assert set(fitter.__all__) <= set(dir(fitter))
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        _ = fitter.nonsense


def test_a_fit_is_an_object(result, sample):
    assert result.converged
    assert result.sample is sample
    table = result.posterior
    assert set(result.summary()["parameters"]) | {"log_posterior", "replica", "step", "walker"} == set(table.columns)
    assert len(table) == result.chains.n_draws
    assert sorted(table["replica"].unique()) == [0, 1]
    first = table[(table["replica"] == 1) & (table["step"] == 3) & (table["walker"] == 5)]
    assert first["H0"].item() == result.chains.draws("H0")[1, 3, 5]
    assert table["omega_m"].mean() == pytest.approx(result.summary()["parameters"]["omega_m"]["mean"], rel=1e-12)
    assert result.best_fit["omega_m"] == pytest.approx(result.optimum.theta[0])
    assert "sixty" in str(result)
    assert re.fullmatch(r"Fit\(flat_lcdm, 60 supernovae: Ωm 0\.\d+ .*; H0 \d+.*\)", repr(result))
    shown = result._repr_html_()
    assert "sixty" in shown and "Sound." in shown and "Ω<sub>m</sub>" in shown and shown.count("<div>") == shown.count("</div>")
    assert all(html.escape(text) in shown for text in result.warnings)


def test_shortest_intervals_on_request(result, sample):
    settings = {"title": "sixty", "sample": sample, "model": "flat_lcdm", "sampling": SAMPLING}
    again = fit(**settings, intervals="highest_density")
    np.testing.assert_array_equal(again.chains.chain, result.chains.chain)
    assert "68 % highest-density" in str(again) and "highest-density" not in str(result)
    for name, facts in again.summary()["parameters"].items():
        x = np.sort(again.posterior[name])
        for share, held in (("68", 0.6827), ("95", 0.95)):
            low, high = facts[f"low{share}"], facts[f"high{share}"]
            inside = np.searchsorted(x, high, "right") - np.searchsorted(x, low)
            assert inside == np.ceil(held * len(x))
            other = result.summary()["parameters"][name]
            assert high - low <= other[f"high{share}"] - other[f"low{share}"]
        assert facts["median"] == result.summary()["parameters"][name]["median"]


def test_profile_intervals_are_where_chi2_has_risen(result):
    """Against a plain scalar minimisation of χ² over the other parameter."""
    from scipy.optimize import minimize_scalar

    chi2 = lambda omega_m, H0: float(result.log_posterior.chi2(np.array([[omega_m, H0]]))[0])  # noqa: E731
    profile, lowest = result.summary()["profile"], result.summary()["best_fit"]["chi2"]
    for delta in (1, 4):
        for side in ("low", "high"):
            end = profile["omega_m"][f"delta{delta}"][side]
            assert minimize_scalar(lambda H0, m=end: chi2(m, H0), bounds=(60, 80), method="bounded").fun - lowest == pytest.approx(
                delta, abs=1e-4
            )
            end = profile["H0"][f"delta{delta}"][side]
            assert minimize_scalar(lambda m, H0=end: chi2(m, H0), bounds=(0, 1), method="bounded").fun - lowest == pytest.approx(
                delta, abs=1e-4
            )
    assert "Profile likelihood, Δχ² = 1" in str(result)
    rows = list(csv.DictReader((result.run_folder / "summary.csv").open(encoding="utf-8")))
    assert float(rows[0]["profile_high_delta4"]) == profile["omega_m"]["delta4"]["high"]
    assert float(rows[0]["hessian_error"]) == result.summary()["best_fit"]["errors"]["omega_m"]
    assert "profile, Δχ² = 4" in (result.run_folder / "report.html").read_text(encoding="utf-8")


def test_draws_for_arviz(result, monkeypatch):
    arviz = pytest.importorskip("arviz", reason="ArviZ is an extra: pip install 'mufitter[arviz]'")
    data = result.to_arviz()
    draws = np.asarray(data["posterior"]["omega_m"])
    replicas, steps, walkers = result.chains.log_posterior.shape
    assert draws.shape == (replicas, walkers * steps)
    np.testing.assert_array_equal(draws[1, 2 * steps : 3 * steps], result.chains.draws("omega_m")[1, :, 2])
    told, ours = arviz.summary(data, round_to="none"), result.summary()["parameters"]
    for name in ("omega_m", "H0"):
        assert told.loc[name, "mean"] == pytest.approx(ours[name]["mean"], rel=1e-9)
        assert told.loc[name, "r_hat"] == pytest.approx(ours[name]["rhat"], abs=0.01)
        # Both estimate the same number; ours is the smaller of two estimates, one of which sees how walkers move together.
        assert 0.5 < ours[name]["ess"] / told.loc[name, "ess_bulk"] < 1.3


def test_without_arviz(result, monkeypatch):
    monkeypatch.setitem(sys.modules, "arviz", None)
    with pytest.raises(InputError, match=r"mufitter\[arviz\]"):
        result.to_arviz()


def test_figures_can_be_had(result):
    assert len(result.corner().axes) >= 3
    assert len(result.hubble_diagram().axes) == 2


def test_the_run_folder_holds_everything(result):
    names = {p.name for p in result.run_folder.iterdir()}
    assert {"config.yaml", "summary.json", "summary.md", "summary.csv", "chain.h5", "run.log", "figures"} <= names
    assert "checkpoint" not in names
    figures = {p.name for p in (result.run_folder / "figures").iterdir()}
    assert {"corner.pdf", "corner.png", "hubble_diagram.pdf", "hubble_diagram.png"} <= figures
    run, config = load_run(result.run_folder)
    assert run.summary == json.loads(json.dumps(result.summary()))
    assert config.model == "flat_lcdm"
    assert config.parameters["H0"] == {"uniform": [40, 100]}
    np.testing.assert_array_equal(run.posterior.chain, result.chains.chain)
    assert "optimum: chi2" in (result.run_folder / "run.log").read_text()
    origin = run.summary["provenance"]
    assert origin["seed"] == config.sampling.seed
    assert origin["versions"]["numpy"] == np.__version__
    assert len(origin["config_sha256"]) == 64


def test_logging_is_left_as_it_was(result):
    log = logging.getLogger("fitter")
    assert log.handlers == []
    assert log.propagate


def test_the_seed_decides_every_bit(result, sample):
    again = fit(title="sixty", sample=sample, model="flat_lcdm", sampling=SAMPLING)
    assert again.run_folder is None
    np.testing.assert_array_equal(again.chains.chain, result.chains.chain)
    assert again.summary()["parameters"] == result.summary()["parameters"]


def test_without_leave_nothing_is_replaced(result, sample):
    with pytest.raises(InputError, match="a run is already there"):
        fit(sample=sample, model="flat_lcdm", run_folder=result.run_folder)
    assert read_run(result.run_folder).summary["title"] == "sixty"


def test_resuming_a_finished_run_returns_it(result, sample):
    settings = {"title": "sixty", "sample": sample, "model": "flat_lcdm", "run_folder": result.run_folder, "resume": True}
    before = (result.run_folder / "summary.json").stat().st_mtime_ns
    again = fit(**settings, sampling=SAMPLING)
    assert (result.run_folder / "summary.json").stat().st_mtime_ns == before
    np.testing.assert_array_equal(again.chains.chain, result.chains.chain)
    with pytest.raises(InputError, match="ended with a target_ess of 400.*--replace"):
        fit(**settings, sampling={**SAMPLING, "target_ess": 10**6})
    with pytest.raises(InputError, match="ended with equal-tailed intervals.*--replace"):
        fit(**settings, sampling=SAMPLING, intervals="highest_density")
    with pytest.raises(InputError, match="of other settings or data: sampling.seed: 20261201 → 3"):
        fit(**settings, sampling={**SAMPLING, "seed": 3})
    assert not result.run_folder.with_name("run.unfinished").exists()


def test_a_run_that_stopped_at_its_limit_continues_to_the_same_chain(sample, tmp_path, monkeypatch):
    monkeypatch.setattr("fitter.api._draw", lambda *_: {})
    long = {**SAMPLING, "target_ess": 3_000}
    settings = {"sample": sample, "model": "flat_lcdm"}
    stopped = fit(**settings, sampling={**long, "max_steps": 40}, run_folder=tmp_path / "a")
    assert not stopped.converged
    assert (stopped.run_folder / "checkpoint").is_dir()
    resumed = fit(**settings, sampling=long, run_folder=tmp_path / "a", resume=True)
    straight = fit(**settings, sampling=long)
    assert resumed.converged
    np.testing.assert_array_equal(resumed.chains.chain, straight.chains.chain)
    assert not (resumed.run_folder / "checkpoint").exists()
    assert [p.name for p in tmp_path.iterdir()] == ["a"]


def test_a_failure_leaves_nothing_behind(sample, tmp_path, monkeypatch):
    def broken(*_, **__):
        raise RuntimeError("boom")

    monkeypatch.setattr("fitter.inference.sampling.sample_posterior", broken)
    with pytest.raises(RuntimeError, match="boom"):
        fit(sample=sample, model="flat_lcdm", run_folder=tmp_path / "run")
    assert list(tmp_path.iterdir()) == []
    assert logging.getLogger("fitter").handlers == []


def test_bad_keywords_have_the_messages_of_a_config(sample):
    with pytest.raises(InputError, match="Did you mean `flat_lcdm`"):
        fit(sample=sample, model="flat_lcmd")
    with pytest.raises(InputError, match="no key `modle` here. Did you mean `model`"):
        fit(sample=sample, modle="flat_lcdm", model="flat_lcdm")
    with pytest.raises(InputError, match="flat_lcdm has no parameter w"):
        fit(sample=sample, model="flat_lcdm", parameters={"w": -1})
    with pytest.raises(InputError, match="the key `sample` is missing"):
        fit(model="flat_lcdm")


def test_a_config_of_arrays_alone_is_refused(result):
    from fitter.studies import stress

    _, config = load_run(result.run_folder)
    with pytest.raises(InputError, match="came as arrays"):
        fit(config, run_folder=False)
    with pytest.raises(InputError, match="came as arrays"):
        stress(config)


def test_an_interruption_too_early_to_summarise_keeps_the_checkpoint(sample, tmp_path, monkeypatch):
    from dataclasses import replace

    import fitter.inference.sampling as sampling

    genuine = sampling.sample_posterior

    def cut_short(*arguments, **options):
        chains = genuine(*arguments, **options)
        return replace(chains, chain=chains.chain[:, :3], log_posterior=chains.log_posterior[:, :3])

    monkeypatch.setattr(sampling, "sample_posterior", cut_short)
    with pytest.raises(TooShort, match="stopped after 3 steps.*Continue with --resume") as caught:
        fit(sample=sample, model="flat_lcdm", sampling=SAMPLING, run_folder=tmp_path / "run")
    assert caught.value.exit_code == 1
    assert (tmp_path / "run.unfinished" / "checkpoint").is_dir()
    assert not (tmp_path / "run").exists()
