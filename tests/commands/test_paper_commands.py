"""`figures`, `tables`, `export` and `paper` on finished runs whose inputs are gone."""

import re
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from fitter import cli
from fitter.api import fit
from fitter.config.load import load_config

CONFIG = """\
title: a small survey
sample:
  table: survey.csv
  columns: {{redshift: z, distance_modulus: mu, group: survey}}
  keep: {{redshift: [0.03, 2]}}
  uncertainty: [{{sigma: sigma}}, {{lensing: 0.055}}]
model: {model}
parameters: {{omega_m: {{uniform: [0.05, 0.8]}}}}
sampling: {{replicas: 2, walkers: 16, target_ess: 200}}
figures: {{only: [history, planes], formats: [pdf], style: mine.mplstyle, width: single}}
labels: {{w: 'w_\\mathrm{{DE}}'}}
{more}
"""


def write_project(folder: Path) -> Path:
    rng = np.random.default_rng(4)
    z = np.linspace(0.02, 0.9, 100)
    mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.16 + 0.1 * rng.standard_normal(100)
    rows = [f"{a:.5f},{b:.4f},0.1,{'near' if a < 0.3 else 'far'}" for a, b in zip(z, mu, strict=True)]
    (folder / "survey.csv").write_text("z,mu,sigma,survey\n" + "\n".join(rows) + "\n")
    (folder / "mine.mplstyle").write_text("axes.linewidth: 1.5\n")
    return folder


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    folder = write_project(tmp_path_factory.mktemp("paper"))
    for model in ("flat_wcdm", "flat_lcdm"):
        (folder / f"{model}.yaml").write_text(CONFIG.format(model=model, more=""))
        fit(load_config(folder / f"{model}.yaml"), run_folder=folder / model)
    (folder / "hidden.yaml").write_text(CONFIG.format(model="flat_wcdm", more="blind: true"))
    fit(load_config(folder / "hidden.yaml"), run_folder=folder / "hidden")
    for gone in ("survey.csv", "flat_wcdm.yaml", "flat_lcdm.yaml", "hidden.yaml"):
        (folder / gone).unlink()
    return folder


def call(*arguments):
    done = CliRunner().invoke(cli.app, [str(a) for a in arguments])
    return done.exit_code, done.stdout, done.stderr


def names(folder):
    return sorted(p.name for p in folder.iterdir())


def test_a_fit_draws_what_its_config_says_and_tells_its_methods(runs):
    run = runs / "flat_wcdm"
    assert names(run / "figures") == ["history.pdf", "history.txt", "plane_w.pdf", "plane_w.txt"]
    # A figure that a model does not have is left out: nobody need write another config for it.
    assert names(runs / "flat_lcdm" / "figures") == ["history.pdf", "history.txt"]
    assert {"methods.md", "methods.tex", "references.bib", "figures_data.h5"} <= set(names(run))
    methods = (run / "methods.md").read_text()
    assert "98 supernovae" in methods and "removed 2 rows by the cut on redshift" in methods and "lensing of 0.055 mag" in methods
    assert r"w_\mathrm{DE}" in (run / "methods.tex").read_text()
    assert "68 of far and 30 of near" in methods


def test_steps_in_the_methods_are_those_of_the_chain(runs):
    from fitter.report.run_folder import read_run

    read = read_run(runs / "flat_wcdm")
    steps, dropped = map(
        int, re.search(r"Each took (\d+) steps, of which the first (\d+)", (read.folder / "methods.md").read_text()).groups()
    )
    assert read.posterior.chain.shape[1] == steps - dropped


def test_redrawing_reads_the_run_folder_alone(runs):
    code, out, err = call("figures", runs / "flat_wcdm", "--format", "png,pdf", "--width", "double")
    assert (code, err) == (0, "")
    # Errors without correlation have no correlation matrix.
    drawn = ["chains", "corner", "error_budget", "history", "hubble_diagram", "plane_w", "residuals"]
    assert names(runs / "flat_wcdm" / "figures") == sorted(f"{n}.{kind}" for n in drawn for kind in ("pdf", "png", "txt"))
    assert out.splitlines()[0].endswith("corner.png") and len(out.splitlines()) == 14
    # What a run folder grew by is its own: the run can still be replaced.
    from fitter.report.run_folder import RunFolder

    assert call("tables", runs / "flat_wcdm")[0] == call("export", runs / "flat_wcdm")[0] == 0
    RunFolder(runs / "flat_wcdm", replace=True).check_target()


def test_one_figure_elsewhere_and_no_overwriting(runs, tmp_path):
    options = ["--only", "hubble", "--format", "svg", "--models", "empty", "--to", tmp_path / "new"]
    assert call("figures", runs / "flat_wcdm", *options)[0] == 0
    assert names(tmp_path / "new") == ["hubble_diagram.svg", "hubble_diagram.txt"]
    code, _, err = call("figures", runs / "flat_wcdm", *options)
    assert code == 2 and "exists" in err and "--replace" in err
    assert call("figures", runs / "flat_wcdm", *options, "--replace")[0] == 0


def test_several_runs_are_laid_over_each_other(runs, tmp_path):
    code, _, err = call("figures", runs / "flat_wcdm", runs / "flat_lcdm")
    assert code == 2 and "--to" in err
    assert call("figures", runs / "flat_wcdm", runs / "flat_lcdm", "--to", tmp_path)[0] == 0
    assert names(tmp_path) == ["corner.pdf", "corner.txt", "history.pdf", "history.txt"]
    assert "Overlaid: flat wCDM, flat ΛCDM" in (tmp_path / "corner.txt").read_text()


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--only", "moon"], "corner, planes"),
        (["--width", "triple"], "single, double"),
        (["--width", "99"], "30 inches"),
        (["--format", "gif"], "--format.*gif"),
        (["--parameters", "moon"], "no such parameter.*moon"),
        (["--mark", "w"], "NAME=VALUE"),
        (["--style", "nowhere.mplstyle"], "nowhere.mplstyle"),
        (["--models", "moon"], "--models.*moon"),
    ],
)
def test_mistakes_are_told_and_nothing_written(runs, tmp_path, options, said):
    code, out, err = call("figures", runs / "flat_wcdm", *options, "--to", tmp_path / "out")
    assert code == 2 and out == "" and re.search(said, err.replace("\n", " ")), err
    assert not list(tmp_path.rglob("*.pdf"))


@pytest.mark.parametrize("command", ["figures", "tables", "export", "paper"])
def test_what_is_no_run(tmp_path, command):
    code, _, err = call(command, tmp_path)
    assert code == 2 and "no finished run" in err


def test_an_older_run_without_data_for_its_figures(runs, tmp_path):
    import shutil

    run = shutil.copytree(runs / "flat_lcdm", tmp_path / "run")
    (run / "figures_data.h5").unlink()
    code, _, err = call("figures", run, "--only", "hubble")
    assert code == 2 and "holds no data for its figures" in err
    assert call("figures", run, "--only", "corner,chains")[0] == 0


def test_tables_beside_each_other(runs, tmp_path):
    assert (
        call("tables", runs / "flat_wcdm", runs / "flat_lcdm", "--to", tmp_path, "--format", "booktabs,csv", "--parameters", "w,omega_m")[0]
        == 0
    )
    assert names(tmp_path) == ["fits.csv", "fits.tex", "parameters.csv", "parameters.tex"]
    text = (tmp_path / "parameters.tex").read_text()
    assert re.findall(r"(?m)^(\$\S+\$) &", text) == [r"$w_\mathrm{DE}$", r"$\Omega_m$"]
    code, _, err = call("tables", runs / "flat_wcdm", "--format", "word")
    assert code == 2 and "booktabs" in err


def test_exported_posterior(runs, tmp_path):
    import pandas as pd

    assert call("export", runs / "flat_wcdm", "--draws", "60", "--to", tmp_path)[0] == 0
    table = pd.read_csv(tmp_path / "posterior.csv")
    assert len(table) == 60 and {"omega_m", "w", "q0", "log_posterior"} <= set(table)
    assert names(tmp_path) == ["densities.csv", "posterior.csv"]
    assert call("export", runs / "flat_wcdm", "--format", "xls")[0] == 2


def test_a_paper_and_its_edited_manuscript(runs, tmp_path):
    code, out, err = call("paper", runs / "flat_wcdm", runs / "flat_lcdm", "--to", tmp_path / "paper")
    assert (code, err) == (0, "") and "manuscript.tex" in out
    assert r"w_\mathrm{DE}" in (tmp_path / "paper" / "tables" / "parameters.tex").read_text()
    (tmp_path / "paper" / "manuscript.tex").write_text("mine")
    code, out, err = call("paper", runs / "flat_wcdm", "--to", tmp_path / "paper")
    assert code == 0 and "left as it is" in err and "manuscript.tex" not in out


def test_hidden_values_stay_hidden(runs, tmp_path):
    run = runs / "hidden"
    assert not (run / "methods.md").exists() and not (run / "figures_data.h5").exists()
    for command in ("tables", "export", "paper"):
        code, _, err = call(command, run)
        assert code == 2 and "mufitter unblind" in err
    code, _, err = call("figures", run, "--only", "planes", "--to", tmp_path)
    assert code == 2 and "hidden" in err
    assert call("figures", run, "--to", tmp_path / "f", "--parameters", "w,q0", "--mark", "w=-1")[0] == 0
    assert names(tmp_path / "f") == ["chains.pdf", "chains.txt", "corner.pdf", "corner.txt"]
    caption = (tmp_path / "f" / "corner.txt").read_text()
    assert "Marginal posterior of w." in caption
