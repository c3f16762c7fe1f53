"""Comparisons from end to end: a config with variants, and finished runs."""

import csv
import io
import json
import re

import numpy as np
import pytest
import yaml
from typer.testing import CliRunner

from fitter import Sample, cli, compare, fit
from fitter.comparing import Comparison
from fitter.errors import InputError
from fitter.report.run_folder import read_run


def table(path, seed, n=160, offset=0.0):
    """Write an invented table of a flat universe with a cosmological constant, q0 = -0.54."""
    rng = np.random.default_rng(seed)
    z = np.sort(rng.uniform(0.02, 1.0, n))
    mu = 43.15 + offset + 5 * np.log10(z * (1 + 0.77 * z - 0.2 * z**2)) + rng.normal(0, 0.12, n)
    rows = "\n".join(f"S{i},{a:.6f},{b:.5f},0.12" for i, (a, b) in enumerate(zip(z, mu, strict=True)))
    path.write_text(f"name,z,mu,err\n{rows}\n")


CONFIG = {
    "title": "toy",
    "sample": {
        "table": "table.csv",
        "columns": {"redshift": "z", "distance_modulus": "mu", "name": "name"},
        "uncertainty": [{"sigma": "err"}, {"lensing": 0.05}],
    },
    "model": "flat_lcdm",
    "parameters": {"omega_m": {"uniform": [0, 1]}, "w": {"uniform": [-3, 0]}},
    "sampling": {"target_ess": 1500, "seed": 11},
    "variants": [
        {"name": "Λ"},
        {"name": "curved", "model": "curved_lcdm"},
        {"name": "free w", "model": "flat_wcdm"},
        {"name": "no lensing", "without": ["lensing"]},
    ],
    "compare": {"average": True},
}


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("comparing")
    table(folder / "table.csv", 1)
    (folder / "config.yaml").write_text(yaml.safe_dump(CONFIG, sort_keys=False, allow_unicode=True))
    return folder


@pytest.fixture(scope="module")
def comparison(folder):
    return compare(folder / "config.yaml", run_folder=folder / "out")


def test_everything_is_written(comparison, folder):
    assert isinstance(comparison, Comparison)
    assert comparison.converged
    names = {p.name for p in (folder / "out").iterdir()}
    assert names >= {"comparison.json", "comparison.md", "comparison.csv", "comparison.tex", "figures", "variants"}
    drawn = {p.name for p in (folder / "out/figures").iterdir()}
    assert drawn >= {f"{stem}.{kind}" for stem in ("corner", "forest", "plane_densities", "plane_w") for kind in ("pdf", "png", "txt")}
    assert json.loads((folder / "out/comparison.json").read_text()) == comparison.report
    assert not (folder / "out.unfinished").exists()


def test_differences_are_of_the_summaries(comparison, folder):
    runs = {v.name.split("_", 1)[1] if "_" in v.name else "": read_run(v).summary for v in sorted((folder / "out/variants").iterdir())}
    free, plain = runs["free_w"], read_run(folder / "out/variants/1").summary
    delta = next(v["delta"] for v in comparison.report["variants"] if v["name"] == "free w")
    for key in ("aic", "aicc", "bic", "dic", "log_evidence"):
        assert delta[key] == pytest.approx(free["information"][key] - plain["information"][key], abs=1e-12)
    assert delta["chi2"] == pytest.approx(free["best_fit"]["chi2"] - plain["best_fit"]["chi2"], abs=1e-12)
    assert delta["chi2"] < 0.0 < delta["bic"]


def test_other_data_get_no_criteria(comparison):
    other = next(v for v in comparison.report["variants"] if v["name"] == "no lensing")
    assert other["delta"] is None
    assert any("no lensing" in text and "no difference of χ²" in text for text in comparison.warnings)
    assert "no lensing" not in comparison.report["average"]["weights"]


def test_savage_dickey_agrees_with_the_evidences(comparison):
    pairs = {(p["simpler"], p["larger"]): p for p in comparison.report["nested"]}
    assert set(pairs) == {("Λ", "curved"), ("Λ", "free w")}
    for pair in pairs.values():
        assert pair["agrees"]
        error = np.hypot(pair["savage_dickey"]["error"], pair["delta_log_evidence"][1])
        assert pair["savage_dickey"]["log_ratio"] == pytest.approx(pair["delta_log_evidence"][0], abs=4 * error)
        assert pair["likelihood_ratio"]["dof"] == 1


def test_halved_and_doubled_priors(comparison):
    rows = {(r["variant"], r["parameter"], r["factor"]): r for r in comparison.report["prior_widths"]}
    before = next(v["delta"]["log_evidence"] for v in comparison.report["variants"] if v["name"] == "free w")
    # The posterior of w is well inside its prior: half the width doubles the density.
    assert rows["free w", "w", 0.5]["delta_log_evidence"] == pytest.approx(before + np.log(2), abs=0.1)
    assert set(rows) >= {("curved", n, f) for n in ("omega_m", "omega_lambda") for f in (0.5, 2.0)}
    changed = [r for r in rows.values() if r["changes"]]
    assert bool(changed) == any("depends on the widths of the priors" in text for text in comparison.warnings)


def test_each_variant_is_a_run_that_can_be_repeated(comparison, folder):
    run = folder / "out/variants/4_no_lensing"
    again = fit(run / "config.yaml", run_folder=False)
    before = read_run(run).summary
    assert again.sample.sha256 == before["sample"]["sha256"]
    assert again.summary()["parameters"]["omega_m"]["mean"] == before["parameters"]["omega_m"]["mean"]
    assert "unfinished" not in (run / "config.yaml").read_text()


def test_the_same_seed_gives_the_same_numbers(comparison, folder):
    again = compare(folder / "config.yaml", run_folder=folder / "again")
    assert again.report == comparison.report


def test_runs_are_compared_like_variants(comparison, folder):
    runs = [folder / "out/variants" / name for name in ("1", "2_curved", "3_free_w")]
    found = compare(runs, run_folder=False)
    assert [v["name"] for v in found.report["variants"]] == ["Λ", "curved", "free w"]
    for ours, theirs in zip(found.report["variants"], comparison.report["variants"], strict=False):
        assert ours["delta"] == theirs["delta"]
    assert found.report["nested"] == comparison.report["nested"]
    with pytest.raises(InputError, match="given twice"):
        compare([runs[0], runs[0]], run_folder=False)


def test_fits_are_compared_as_they_are(folder, tmp_path, monkeypatch):
    """Fits in memory need no folder, and get none."""
    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(4)
    z = np.sort(rng.uniform(0.02, 1.0, 60))
    sample = Sample.from_arrays(z, 43.15 + 5 * np.log10(z * (1 + 0.77 * z - 0.2 * z**2)) + rng.normal(0, 0.12, 60), sigma=0.12)
    settings = {"sample": sample, "sampling": {"target_ess": 500, "replicas": 2}}
    flat, curved = fit(model="flat_lcdm", **settings), fit(model="curved_lcdm", title="curved", **settings)
    found = compare([flat, curved])
    assert found.run_folder is None and not list(tmp_path.iterdir())
    assert repr(found) == "Comparison(flat_lcdm, curved)" and "curved" in found._repr_html_()
    chi2 = [one.summary()["best_fit"]["chi2"] for one in (flat, curved)]
    assert found.report["variants"][1]["delta"]["chi2"] == pytest.approx(chi2[1] - chi2[0])
    assert found.report["nested"]  # the likelihood is at hand
    with pytest.raises(InputError, match="the same name"):
        compare([flat, flat])
    assert [v["name"] for v in compare([flat, flat], names=["a", "b"]).report["variants"]] == ["a", "b"]


def test_two_data_sets(comparison, folder, tmp_path):
    table(tmp_path / "table.csv", 2, offset=0.4)
    single = {k: v for k, v in CONFIG.items() if k not in ("variants", "compare")} | {"title": "another sky"}
    single["parameters"] = {"omega_m": {"uniform": [0, 1]}}
    (tmp_path / "config.yaml").write_text(yaml.safe_dump(single))
    fit(tmp_path / "config.yaml", run_folder=tmp_path / "run")
    found = compare([folder / "out/variants/1", tmp_path / "run"], run_folder=False)
    (result,) = found.report["consistency"]
    assert result["parameters"] == ["omega_m"]
    assert result["sigma"] < 3.5
    assert result["log_r"] is not None
    assert result["sentence"] in found.table("markdown")


def test_runs_whose_data_are_gone(comparison, folder, tmp_path):
    import shutil

    for name in ("1", "3_free_w"):
        shutil.copytree(folder / "out/variants" / name, tmp_path / name)
    for name in ("1", "3_free_w"):
        text = (tmp_path / name / "config.yaml").read_text()
        (tmp_path / name / "config.yaml").write_text(re.sub(r"(table: ).*", r"\1nowhere.csv", text))
    found = compare([tmp_path / "1", tmp_path / "3_free_w"], run_folder=False)
    assert found.report["variants"][1]["delta"]["aic"] is not None
    assert found.report["nested"] == []
    assert any("not at hand" in text for text in found.warnings)


def test_tables(comparison):
    text = comparison.table()
    for words in ("Δ ln Z", "ΔAICc", "Kass & Raftery 1995", "Savage–Dickey", "σ)", "Averaged over the models"):
        assert words in text, words
    assert max(len(line) for line in text.splitlines()) <= 100
    markdown = comparison.table("markdown").splitlines()
    width = {line.count("|") for line in markdown if line.startswith("|")}
    assert width == {len(CONFIG["variants"]) + 2}
    rows = list(csv.DictReader(io.StringIO(comparison.table("csv"))))
    assert [r["name"] for r in rows] == [v["name"] for v in CONFIG["variants"]]
    assert float(rows[2]["delta_bic"]) == comparison.report["variants"][2]["delta"]["bic"]
    assert rows[3]["delta_bic"] == ""
    latex = comparison.table("latex")
    body = [line for line in latex.splitlines() if line.endswith(r"\\")]
    assert {line.count("&") for line in body} == {len(CONFIG["variants"])}
    assert not set(latex) & set("χΔ²−Λ") - set(latex.split(r"\begin{tabular}")[0])
    with pytest.raises(InputError, match="table format"):
        comparison.table("word")


def test_command_line(comparison, folder, monkeypatch):
    monkeypatch.chdir(folder)
    runs = ["out/variants/1", "out/variants/3_free_w"]
    found = CliRunner().invoke(cli.app, ["compare", *runs, "--scale", "jeffreys", "--reference", "free w", "--json", "--run-folder", "cli"])
    assert found.exit_code == 0, found.stderr
    report = json.loads(found.stdout)
    assert report["reference"] == "free w"
    assert report["scale"] == "Jeffreys 1961"
    assert report["average"] is None
    assert (folder / "cli/comparison.md").is_file()
    refused = CliRunner().invoke(cli.app, ["compare", *runs, "--run-folder", "cli"])
    assert refused.exit_code == 2
    assert "--replace" in refused.stderr
    assert CliRunner().invoke(cli.app, ["compare", "out/variants/1"]).exit_code == 2
    assert CliRunner().invoke(cli.app, ["compare", *runs, "--scale", "fisher", "--run-folder", "x"]).exit_code == 2
    assert CliRunner().invoke(cli.app, ["fit", "config.yaml"]).exit_code == 2


def test_what_is_wrong_is_told_before_anything_is_fitted(folder, tmp_path):
    config = {**CONFIG, "variants": [{"name": "a"}, {"name": "b", "keep": {"redshift": [5, 6]}}]}
    config["parameters"] = {"omega_m": {"uniform": [0, 1]}}
    config["sample"] = {**CONFIG["sample"], "table": str(folder / "table.csv")}
    (tmp_path / "config.yaml").write_text(yaml.safe_dump(config))
    with pytest.raises(InputError, match="leave none"):
        compare(tmp_path / "config.yaml", run_folder=tmp_path / "out")
    assert not list(tmp_path.glob("out*"))


def test_an_interrupted_comparison_goes_on(comparison, folder, tmp_path, monkeypatch):
    """What was finished is kept as it is, the rest is fitted, and the outcome is that of a comparison without a break."""
    from fitter import comparing

    monkeypatch.setattr(comparing, "available_cores", lambda: 1)
    fit_one, fitted = comparing._fit_one, []

    def breaking(i):
        if i == 2 and len(fitted) < 3:
            fitted.append("break")
            raise KeyboardInterrupt
        fitted.append(i)
        return fit_one(i)

    monkeypatch.setattr(comparing, "_fit_one", breaking)
    with pytest.raises(KeyboardInterrupt):
        compare(folder / "config.yaml", run_folder=tmp_path / "out")
    kept = tmp_path / "out.unfinished/variants"
    assert {p.name for p in kept.iterdir()} == {"1", "2_curved"}
    before = {p: p.stat().st_mtime_ns for p in kept.glob("*/chain.h5")}
    with pytest.raises(InputError, match="Continue it with --resume"):
        compare(folder / "config.yaml", run_folder=tmp_path / "out")
    said = []
    found = compare(folder / "config.yaml", run_folder=tmp_path / "out", resume=True, tell=said.append)
    assert [line.split(",")[0] for line in said] == ["Λ was done", "curved was done", "free w is done", "no lensing is done"]
    out = tmp_path / "out/variants"
    assert {out / p.relative_to(kept): t for p, t in before.items()} == {p: p.stat().st_mtime_ns for p in out.glob("[12]*/chain.h5")}
    assert found.report == comparison.report
    with pytest.raises(InputError, match="the comparison there is finished"):
        compare(folder / "config.yaml", run_folder=tmp_path / "out", resume=True)


def test_a_comparison_of_other_settings_is_not_continued(folder, tmp_path, monkeypatch):
    from fitter import comparing

    def stopped(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(comparing, "available_cores", lambda: 1)
    monkeypatch.setattr(comparing, "_write", stopped)
    base = CONFIG | {"sampling": {"target_ess": 200, "walkers": 16, "replicas": 2, "seed": 1}, "variants": CONFIG["variants"][:2]}
    config = tmp_path / "config.yaml"
    base |= {"sample": CONFIG["sample"] | {"table": str(folder / "table.csv")}, "parameters": {"omega_m": {"uniform": [0, 1]}}}
    config.write_text(yaml.safe_dump(base, allow_unicode=True))
    with pytest.raises(KeyboardInterrupt):
        compare(config, run_folder=tmp_path / "out")
    config.write_text(yaml.safe_dump(base | {"parameters": {"omega_m": {"uniform": [0.1, 1]}}}, allow_unicode=True))
    with pytest.raises(InputError, match="the earlier run is of other settings or data"):
        compare(config, run_folder=tmp_path / "out", resume=True)
    # What is finished stays as it is: nothing else may be fitted before that is told.
    config.write_text(yaml.safe_dump(base | {"intervals": "highest_density"}, allow_unicode=True))
    monkeypatch.setattr(comparing, "_fit_one", None)
    with pytest.raises(InputError, match="ended with equal-tailed intervals"):
        compare(config, run_folder=tmp_path / "out", resume=True)
    others = [base["variants"][0], {"name": "bent", "model": "curved_lcdm"}]
    config.write_text(yaml.safe_dump(base | {"variants": others}, allow_unicode=True))
    with pytest.raises(InputError, match="variants that the config does not have: 2_curved"):
        compare(config, run_folder=tmp_path / "out", resume=True)
    assert (tmp_path / "out.unfinished/variants/2_curved/chain.h5").exists()
    both = CliRunner().invoke(cli.app, ["compare", str(config), "--replace", "--resume"])
    assert both.exit_code == 2 and "choose one" in both.stderr
    runs = CliRunner().invoke(cli.app, ["compare", str(tmp_path), str(tmp_path), "--resume"])
    assert runs.exit_code == 2 and "nothing to continue" in runs.stderr
