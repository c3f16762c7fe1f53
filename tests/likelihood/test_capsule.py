"""A capsule is the likelihood of its data: the same χ², the same evidence scale, the same summary, with or without mufitter."""

import json
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from fitter import InputError, Sample, fit
from fitter.cosmology.distances import log_distance
from fitter.likelihood.capsule import CapsulePosterior
from fitter.likelihood.posterior import LogPosterior
from fitter.sample.capsule import CapsuleSample, read_capsule
from fitter.sharing import capsule_of_sample, capsules_of_run

DOC = Path(__file__).resolve().parents[2] / "docs" / "capsule.md"
SAMPLING = {"replicas": 2, "walkers": 32, "target_ess": 400}
FACTOR = {"log_uniform": [0.5, 2]}
GAUSSIAN = {"absolute_magnitude": {"normal": [-19.3, 0.05]}}


def _sample(n=300, z_max=1.6, *, calibrators=0, groups=False, **options):
    rng = np.random.default_rng(5)
    z = np.sort(rng.uniform(0.015, z_max, n))
    mu = 5 * np.log10(z * (1 + 0.7 * z)) + 43.2
    host = np.full(n, np.nan)
    if calibrators:
        host[:calibrators] = mu[:calibrators] + 0.05 * rng.standard_normal(calibrators)
    if options.get("data_kind") == "magnitude":
        mu = mu - 19.3
    shared = 0.02 * np.outer(np.sin(3 * z), np.sin(3 * z)) + 0.01 * np.exp(-np.abs(z[:, None] - z))
    modes = 0.03 * np.stack([np.cos(z), z], axis=1) if groups else None
    data = mu + 0.12 * rng.standard_normal(n)
    return Sample.from_arrays(
        z, data, covariance=shared + 0.0144 * np.eye(n), modes=modes, z_helio=z + 1e-3,
        calibrator_modulus=host if calibrators else None, **options,
    )  # fmt: skip


CASES = {
    "relative": (_sample(), "flat_w0wa", {}),
    "absolute": (_sample(distance_scale="absolute", groups=True), "curved_lcdm", {}),
    "calibrated": (_sample(distance_scale="calibrated", data_kind="magnitude", calibrators=12), "flat_wcdm", {}),
    "magnitude's prior": (_sample(distance_scale="calibrated", data_kind="magnitude", calibrators=12), "flat_wcdm", GAUSSIAN),
    "magnitude sampled": (
        _sample(distance_scale="calibrated", data_kind="magnitude", calibrators=12, covariance_scale=FACTOR), "flat_lcdm", GAUSSIAN,
    ),
    "scaled": (_sample(covariance_scale=FACTOR), "curved_wcdm", {}),
    "fewer data than nodes": (_sample(n=12), "flat_wcdm", {}),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_the_same_density_as_the_data(case):
    sample, model, parameters = CASES[case]
    data = LogPosterior.build(sample, model, parameters)
    capsule = LogPosterior.build(CapsuleSample.of(capsule_of_sample(sample)), model, parameters)
    assert isinstance(capsule, CapsulePosterior)
    assert (capsule.names, capsule.marginalised, capsule.n_data) == (data.names, data.marginalised, data.n_data)
    assert capsule.n_parameters == data.n_parameters
    rng = np.random.default_rng(3)
    theta = np.column_stack([prior.sample(rng, 1000) for prior in data.priors])
    expected, found = data.chi2(theta), capsule.chi2(theta)
    # What the coarser grid of the data's own likelihood may be off by, and rounding.
    ingredients, level = data._ingredients(theta), data.kernel.levels[0]
    _, tail, inside = log_distance(data.model, ingredients[0], level.grid, ingredients[1])
    smooth = inside & (tail < 1e-9) & np.isfinite(expected)
    assert smooth.sum() > 100
    size = np.sqrt(expected[smooth])
    assert np.all(np.abs(found[smooth] - expected[smooth]) < 1e-9 + 1e-12 * size**2 + 16 * size * level.norm * tail[smooth])
    resolved = smooth & (tail < 1e-14) & (expected < 1e3)
    assert resolved.sum() > 10 and np.abs(found[resolved] - expected[resolved]).max() < 1e-9
    assert np.all(np.isfinite(found) == np.isfinite(expected))
    near = smooth & (tail < 1e-12) & (expected < 1e4)
    assert np.abs(capsule(theta[near]) - data(theta[near])).max() < 1e-8
    best, theirs = data.best_marginalised(theta[near]), capsule.best_marginalised(theta[near])
    for name in data.marginalised:
        assert np.allclose(theirs[name], best[name], atol=1e-9)


def test_amplitudes_that_are_reported_stay_in_the_capsule(tmp_path):
    """Zero points of the groups have a posterior with the data, so they have one without."""
    z = np.linspace(0.02, 1.0, 80)
    rows = [f"{a:.4f},{43.2 + 5 * np.log10(a * (1 + 0.7 * a)) + 0.05 * (i % 2):.5f},0.1,{'AB'[i % 2]}" for i, a in enumerate(z)]
    (tmp_path / "t.csv").write_text("\n".join(["z,mu,e,g", *rows]) + "\n")
    settings = {
        "table": "t.csv", "columns": {"redshift": "z", "distance_modulus": "mu", "group": "g"},
        "uncertainty": [{"sigma": "e"}, {"zero_point": "group", "sigma": 0.05}],
    }  # fmt: skip
    from fitter.sample.settings import SampleSettings

    sample = Sample.from_config(SampleSettings.model_validate(settings), tmp_path)
    data = LogPosterior.build(sample, "flat_lcdm")
    capsule = LogPosterior.build(CapsuleSample.of(capsule_of_sample(sample)), "flat_lcdm")
    theta = np.linspace(0.1, 0.6, 20)[:, None]
    assert data.marginalised == capsule.marginalised == ("zero_point:A", "zero_point:B")
    assert np.abs(data(theta) - capsule(theta)).max() < 1e-9
    for name, values in data.best_marginalised(theta).items():
        assert np.allclose(capsule.best_marginalised(theta)[name], values, atol=1e-10)
    draws = [p.draw_marginalised(np.repeat(theta, 2000, axis=0), np.random.default_rng(1))["zero_point:A"] for p in (data, capsule)]
    assert np.std(draws[1]) == pytest.approx(np.std(draws[0]), rel=0.03)


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    """A fit of the invented survey, its capsule, and the fit of that."""
    root = DOC.parents[1]
    folder = tmp_path_factory.mktemp("capsule")
    config = (root / "configs/calibrated_h0.yaml").read_text().replace("../data_demo", str(root / "data_demo"))
    (folder / "config.yaml").write_text(config)
    first = fit(folder / "config.yaml", sampling={**SAMPLING, "seed": 1}, run_folder=folder / "data")
    written = subprocess.run(
        [sys.executable, "-m", "fitter.cli", "capsule", str(folder / "data"), "--without", "dust"],
        capture_output=True,
        text=True,
        check=True,
    )
    assert [Path(line).name for line in written.stdout.split()] == ["capsule.json", "capsule_without_dust.json"]
    given = {"capsule": "data/capsule.json"}
    (folder / "again.yaml").write_text(
        json.dumps({"sample": given, "model": "flat_lcdm", "parameters": first.config.parameters, "sampling": {**SAMPLING, "seed": 1}})
    )
    return folder, first, fit(folder / "again.yaml", run_folder=folder / "again")


def test_a_fit_of_the_capsule_is_a_fit_of_the_data(run):
    folder, first, again = run
    assert (folder / "data/capsule.json").stat().st_size < 17_000
    one, two = first.summary(), again.summary()
    for key in ("n", "n_calibrators", "redshift_min", "redshift_max", "sha256", "distance_scale", "terms", "groups"):
        assert two["sample"][key] == one["sample"][key], key
    assert two["best_fit"]["chi2"] == pytest.approx(one["best_fit"]["chi2"], abs=1e-7)  # both minimised to that
    assert two["best_fit"]["dof"] == one["best_fit"]["dof"]
    assert two["information"]["log_evidence"] == pytest.approx(one["information"]["log_evidence"], abs=0.01)
    for name, facts in one["parameters"].items():
        mine, error = two["parameters"][name], np.hypot(facts["mcse"], two["parameters"][name]["mcse"])
        assert abs(mine["mean"] - facts["mean"]) < 4 * error + 1e-9 * abs(facts["mean"])
    assert two["capsule"]["beyond"] == 0 and two["capsule"]["worst"] < 1e-6
    assert not (folder / "again/figures/hubble_diagram.pdf").exists() and (folder / "again/figures/corner.pdf").exists()


def test_the_example_in_the_documentation(run):
    """It needs numpy alone and gives χ² of the data."""
    folder, first, _ = run
    text = DOC.read_text(encoding="utf-8")
    (code,) = re.findall(r"```python\n(.*?)```", text, flags=re.S)
    assert "fitter" not in code and len(code.splitlines()) < 45
    (folder / "example.py").write_text(code)
    out = subprocess.run(
        [sys.executable, "-I", "-W", "error", str(folder / "example.py"), str(folder / "data/capsule.json")], capture_output=True, text=True
    )
    assert out.returncode == 0, out.stderr
    values = np.array([line.split() for line in out.stdout.splitlines()], float)
    posterior = first.log_posterior
    assert posterior.names[0] == "omega_m"
    from scipy.optimize import minimize_scalar

    for omega_m, chi2 in values:
        # The example also frees H0; there, the data's χ² is the smallest over it.
        best = minimize_scalar(
            lambda h, o=omega_m: posterior.chi2([[o, h]])[0], bounds=(50, 95), options={"xatol": 1e-10}, method="bounded"
        )
        assert chi2 == pytest.approx(best.fun, abs=2e-8)


def test_switching_an_uncertainty_off(run):
    folder, first, _ = run
    less = CapsuleSample.from_file(folder / "data/capsule_without_dust.json")
    expected = LogPosterior.build(first.sample.without("dust"), "flat_lcdm")
    theta = np.column_stack([np.linspace(0.2, 0.4, 5), np.linspace(68, 72, 5)])
    assert less.capsule.without == ("dust",)
    assert np.allclose(LogPosterior.build(less, "flat_lcdm").chi2(theta), expected.chi2(theta), rtol=0, atol=1e-9)
    assert len(capsules_of_run(folder / "data", each=True)) > 2
    with pytest.raises(InputError, match="no uncertainty term has this label"):
        capsules_of_run(folder / "data", ["nonsense"])


def test_a_capsule_too_coarse_says_so():
    """Order 8 cannot hold the shape: the warning comes, and the bound it quotes is one."""
    sample = _sample()
    data = LogPosterior.build(sample, "flat_lcdm")
    capsule = LogPosterior.build(CapsuleSample.of(capsule_of_sample(sample, order=8)), "flat_lcdm")
    theta = np.linspace(0.2, 0.5, 200)[:, None]
    found = capsule.accuracy(theta)
    wrong = np.abs(capsule.chi2(theta) - data.chi2(theta)).max()
    assert found["beyond"] > 0.9 and 1e-6 < wrong < found["worst"]
    from fitter.report.warnings import _capsule

    assert "order 8 is too low" in _capsule({"capsule": found})[0]
    assert _capsule({"capsule": found | {"beyond": 1e-4}}) == [] == _capsule({})


def test_damage_is_noticed(tmp_path):
    good = capsule_of_sample(_sample(n=40))
    path = tmp_path / "c.json"
    flipped = json.loads(good.text())
    flipped["y"] = ("B" if flipped["y"][0] == "A" else "A") + flipped["y"][1:]
    lacking = {k: v for k, v in json.loads(good.text()).items() if k != "rho2"}
    cases = [
        (json.dumps(flipped), "checksum"),
        (json.dumps(lacking), "rho2"),
        (good.text()[:500], "not JSON"),
        ('{"schema": "other"}', "format"),
        (json.dumps(json.loads(good.text()) | {"rho2": good.rho2 + 1e-9}), "checksum"),
        (json.dumps(json.loads(good.text()) | {"order": 32}), "damaged"),
    ]
    for content, words in cases:
        path.write_text(content)
        with pytest.raises(InputError, match=words):
            read_capsule(path)
    path.write_text(good.text())
    assert read_capsule(path) == good
    with pytest.raises(InputError, match="no such file"):
        read_capsule(tmp_path / "absent.json")


def test_what_a_capsule_cannot_do(tmp_path):
    sample = CapsuleSample.of(capsule_of_sample(_sample(n=40)))
    posterior = LogPosterior.build(sample, "flat_lcdm")
    theta, rng = np.array([[0.3]]), np.random.default_rng(0)
    for attempt in (
        lambda: sample.select([0]), lambda: sample.without("covariance"), lambda: posterior.residuals(theta),
        lambda: posterior.simulate(theta, rng), lambda: capsule_of_sample(sample),
        lambda: capsule_of_sample(_sample(n=40, intrinsic={"uniform": [0, 0.5]})),
    ):  # fmt: skip
        with pytest.raises(InputError):
            attempt()


def test_config_errors_name_the_capsule(tmp_path):
    from fitter import check

    (tmp_path / "c.json").write_text(capsule_of_sample(_sample(n=40)).text())
    for sample, extra, words in (
        ("{capsule: missing.json}", "", "no such file"), ("{capsule: c.json, table: t.csv}", "", "no key `table`"),
        ("{capsule: c.json}", "parameters: {H0: {uniform: [50, 90]}}\n", "relative"),
    ):  # fmt: skip
        (tmp_path / "x.yaml").write_text(f"sample: {sample}\nmodel: flat_lcdm\n{extra}")
        found = check(tmp_path / "x.yaml")
        assert words in " ".join(str(p) for p in found.problems)
    (tmp_path / "x.yaml").write_text("sample: {capsule: c.json}\nmodel: flat_lcdm\n")
    found = check(tmp_path / "x.yaml")
    assert found.ok and "the likelihood of 40 supernovae" in str(found)
