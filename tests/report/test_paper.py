"""Tables and manuscripts: values, captions, sound LaTeX, edits kept, nothing overwritten; and set by a real LaTeX where there is one."""

import csv
import importlib.util
import io
import json
import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.report.export import densities_table, export, posterior_table
from fitter.report.facts import relabelled
from fitter.report.figures.data import collect
from fitter.report.figures.draw import Drawable
from fitter.report.paper import PaperRun, run_labels, table_files, write_paper
from fitter.report.prose import plain
from fitter.report.summary import Extras, summarise
from fitter.report.tables import caption_text, fit_table, latex_float, parameter_table

_spec = importlib.util.spec_from_file_location("latex_check", Path(__file__).with_name("latex_check.py"))
latex_check = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(latex_check)


def paper_run(fit, title, folder):
    more = {"provenance": {"versions": {"mufitter": "1.0", "numpy": "2.0"}}}
    summary = summarise(
        fit.log_posterior, fit.posterior, fit.optimum, Extras(title, None, {"log_evidence": 1.0, "log_evidence_error": 0.01}, more)
    )
    return PaperRun(Path(folder), summary, {}, Drawable(fit.posterior, collect(fit.log_posterior, fit.optimum, fit.posterior)))


@pytest.fixture(scope="module")
def runs(real, build):
    other = build.real("curved_lcdm", build.sample(group=np.repeat(["A & B_1", "50 % ±"], 150)))
    return [paper_run(real, "Wahrheit & Co. 100 %, ΩΛ", "runs/one"), paper_run(other, "other_title", "runs/two")]


# ------------------------------------------------------------------------------------- tables


def test_runs_are_called_by_what_tells_them_apart(runs):
    assert [plain(label) for label in run_labels(runs)] == ["flat wCDM", "curved ΛCDM"]
    assert run_labels([runs[0]] + [PaperRun(Path("b/x"), {**runs[0].summary, "title": "Other"})]) == [runs[0].summary["title"], "Other"]
    same = [PaperRun(Path(f), runs[0].summary) for f in ("a/x", "b/y")]
    assert run_labels(same) == ["x", "y"]
    assert run_labels([PaperRun(Path(f), runs[0].summary) for f in ("a/x", "b/x")]) == ["a/x", "b/x"]
    assert run_labels([PaperRun(Path("a/x"), runs[0].summary)] * 2) == ["1: x", "2: x"]


@pytest.mark.parametrize("number", [1, 2])
def test_latex_tables_are_sound_and_carry_their_captions(runs, number):
    files = table_files(runs[:number])
    assert set(files) == {f"{n}{end}" for n in ("parameters", "fits") for end in (".tex", "_plain.tex", ".csv", ".md")}
    for name in files:
        if name.endswith(".tex"):
            latex_check.check(files[name], name)
            assert (r"\toprule" in files[name]) != ("plain" in name) and (r"\hline" in files[name]) == ("plain" in name)
    text = files["parameters.tex"]
    for part in (
        r"equal-tailed 68.3 \% intervals",
        "300 supernovae",
        r"$\Omega_m$ uniform(0, 1)",
        "relative distance scale",
        "no radiation",
    ):
        assert part in text
    facts = runs[0].summary["parameters"]["w"]
    assert f"{facts['median']:.3f}"[:5] in text
    assert ("absolute distance scale" in text) == (number == 2)


def test_a_limit_stands_as_a_limit_and_errors_are_asymmetric(build):
    fit = build.real("flat_wcdm", sd={**build.spread, "w": 0.3}, truth={**build.truth, "omega_m": 0.0, "w": -1.0})
    run = PaperRun(Path("x"), summarise(fit.log_posterior, fit.posterior, fit.optimum))
    assert run.summary["parameters"]["omega_m"]["limit"]["side"] == "upper"
    files = table_files([run])
    row = next(line for line in files["parameters.tex"].splitlines() if line.startswith(r"$\Omega_m$"))
    assert re.match(r"\$\\Omega_m\$ & \$< 0\.0\d+\$ & ", row), row
    assert r"limits are one-sided, 95 \%" in files["parameters.tex"]
    w = next(line for line in files["parameters.tex"].splitlines() if line.startswith("$w$"))
    facts = run.summary["parameters"]["w"]
    plus, minus = facts["high68"] - facts["median"], facts["median"] - facts["low68"]
    found = re.search(r"\^\{\+([\d.]+)\}_\{-([\d.]+)\}|\\pm ([\d.]+)", w)
    assert float(found[1] or found[3]) == pytest.approx(plus, abs=0.006) and float(found[2] or found[3]) == pytest.approx(minus, abs=0.006)
    assert "limits are" not in plain(caption_text([{**run.summary, "parameters": {"w": facts}}]))


def test_a_caption_says_what_is_undefined_and_held(runs, build):
    spread = {**build.spread, "omega_lambda": 0.1}
    fit = build.real("curved_lcdm", build.sample(), {**build.truth, "omega_lambda": 0.15}, spread, H0=70.0)
    summary = summarise(fit.log_posterior, fit.posterior, fit.optimum)
    share = summary["parameters"]["z_acceleration"]["undefined_fraction"]
    text = plain(caption_text([summary]))
    assert f"z_acc in {100 * share:.2g} %" in text and "Held: H0 = 70." in text
    both = plain(caption_text([r.summary for r in runs], [run_labels(runs)[0], "mine"]))
    assert "Flat wCDM: 300 supernovae" in both and "Mine: curved ΛCDM, 300 supernovae" in both


def test_fit_table_in_every_form(runs):
    named = [{**run.summary, "title": title} for run, title in zip(runs, ('a, "b"', "c|d"), strict=True)]
    rows = list(csv.reader(io.StringIO(fit_table(named, "csv"))))
    assert rows[0] == ["Fit", "N", "χ²", "d.o.f.", "p", "k", "AIC", "AICc", "BIC", "DIC", "ln Z"]
    fit, information = runs[0].summary["best_fit"], runs[0].summary["information"]
    assert rows[1][:4] == ['a, "b"', "300", f"{fit['chi2']:.2f}", str(fit["dof"])] and rows[1][6] == f"{information['aic']:.2f}"
    assert rows[1][-1] == "1.00"
    markdown = fit_table(named, "markdown").splitlines()
    assert len({len(re.findall(r"(?<!\\)\|", line)) for line in markdown}) == 1
    none = {**named[0], "information": {**information, "dic": None, "log_evidence": None}}
    assert fit_table([none], "latex").splitlines()[4].endswith(r"& -- & -- \\")
    latex_check.check(latex_float(fit_table([none], "booktabs"), "x", "y", wide=True))


def test_parameters_by_name_and_symbols_of_ones_own(runs):
    with relabelled({"w": r"w_\mathrm{DE}"}):
        text = table_files(runs[:1], ["booktabs"], ["w", "omega_m"])["parameters.tex"]
    assert re.findall(r"(?m)^(\$\S+?\$) &", text) == [r"$w_\mathrm{DE}$", r"$\Omega_m$"]
    with pytest.raises(InputError, match="no such parameter.*moon"):
        table_files(runs, ["csv"], ["moon"])
    with pytest.raises(InputError, match="unknown table format.*'word'"):
        table_files(runs, ["word"])
    assert "flat wCDM" in parameter_table([{**r.summary, "title": label} for r, label in zip(runs, run_labels(runs), strict=True)], "csv")


# --------------------------------------------------------------------------------- manuscript


@pytest.fixture(scope="module", params=[slice(0, 2), slice(1, 2)], ids=["two runs", "one run"])
def paper(request, runs, tmp_path_factory):
    folder = tmp_path_factory.mktemp("papers") / "paper"
    folder.mkdir()
    return folder, write_paper(runs[request.param], folder)


def test_a_manuscript_holds_all_figures_and_tables(paper):
    folder, written = paper
    two = "wCDM" in (folder / "tables" / "fits.md").read_text()
    figures = [
        "corner",
        *(["plane_w"] if two else []),
        "plane_densities",
        "hubble_diagram",
        "residuals",
        "history",
        "correlation",
        "error_budget",
        "chains",
    ]
    text = (folder / "manuscript.tex").read_text()
    assert sorted(re.findall(r"includegraphics\{figures/(\w+)\.pdf\}", text)) == sorted(figures)
    assert re.findall(r"\\input\{([^}]*)\}", text) == ["methods.tex", "tables/parameters.tex", "tables/fits.tex"]
    latex_check.check_folder(folder)
    assert all(path.is_file() for path in written)
    assert (r"\title{Wahrheit \& Co. 100 \%, $\Omega$$\Lambda$}" if two else r"\title{other\_title}") in text


@pytest.mark.skipif(
    not (shutil.which("pdflatex") and shutil.which("bibtex")), reason="no LaTeX on this machine: the strict reader stands in"
)
def test_a_real_latex_sets_the_manuscript(paper, tmp_path):
    folder = shutil.copytree(paper[0], tmp_path / "p")
    for command in (["pdflatex", "-halt-on-error"], ["bibtex"], ["pdflatex", "-halt-on-error"], ["pdflatex", "-halt-on-error"]):
        options = ["-interaction=nonstopmode"] if command[0] == "pdflatex" else []
        done = subprocess.run([*command, *options, "manuscript"], cwd=folder, capture_output=True, text=True, errors="replace")
        assert done.returncode == 0, done.stdout[-2000:]
    log = (folder / "manuscript.log").read_text(errors="replace")
    assert "undefined" not in log and "Missing character" not in log
    too_wide = [float(x) for x in re.findall(r"Overfull \\hbox \(([\d.]+)pt", log)]
    assert max(too_wide, default=0) < 10, log  # 10 pt: a seventh of an inch
    for table in ("parameters_plain", "fits_plain"):
        alone = rf"\documentclass{{article}}\begin{{document}}\input{{tables/{table}}}\end{{document}}"
        (folder / "alone.tex").write_text(alone)
        assert subprocess.run(["pdflatex", "-halt-on-error", "alone"], cwd=folder, capture_output=True).returncode == 0


def test_an_edited_manuscript_is_kept_and_the_rest_made_anew(runs, tmp_path):
    write_paper(runs[:1], tmp_path)
    manuscript, table = tmp_path / "manuscript.tex", tmp_path / "tables" / "fits.tex"
    again = write_paper(runs[:1], tmp_path)
    assert manuscript in again
    manuscript.write_text("mine")
    table.write_text("old")
    again = write_paper(runs[:1], tmp_path)
    assert manuscript.read_text() == "mine" and manuscript not in again and "toprule" in table.read_text()
    assert json.loads((tmp_path / ".mufitter-paper.json").read_text())["format"] == "mufitter paper 1"


@pytest.mark.parametrize("name", ["manuscript.tex", "figures/corner.pdf", "tables/fits.csv"])
def test_a_strange_file_is_left_alone_and_nothing_written(runs, tmp_path, name):
    (tmp_path / name).parent.mkdir(exist_ok=True)
    (tmp_path / name).write_text("mine")
    with pytest.raises(InputError, match="in the way"):
        write_paper(runs[:1], tmp_path)
    assert [p.name for p in tmp_path.rglob("*") if p.is_file()] == [Path(name).name]
    assert (tmp_path / name).read_text() == "mine"


# ------------------------------------------------------------------------------------- export


def test_exported_draws_are_draws_of_the_chain(real):
    table = posterior_table(real.posterior, 50)
    assert list(table) == [*real.posterior.kinds, "log_posterior"] and len(table) == 50
    every = np.column_stack([real.posterior.draws("w").ravel(), real.posterior.log_posterior.ravel()])
    assert {tuple(row) for row in table[["w", "log_posterior"]].to_numpy()} <= {tuple(row) for row in every}
    assert len(posterior_table(real.posterior)) == 5432  # the effective sample size of the run
    assert len(posterior_table(real.posterior, 10**9)) == real.posterior.n_draws
    with pytest.raises(InputError, match="one draw"):
        posterior_table(real.posterior, 0)


def test_densities_are_normalised_and_have_the_moments(real):
    table = densities_table(real.posterior)
    for name, part in table.groupby("parameter"):
        step = part["value"].diff().median()
        assert part["density"].sum() * step == pytest.approx(1, abs=1e-9), name
    w, draws = table[table["parameter"] == "w"], real.posterior.draws("w")
    mean = np.average(w["value"], weights=w["density"])
    sd = np.sqrt(np.average((w["value"] - mean) ** 2, weights=w["density"]))
    # Scott's bandwidth adds its square to the variance: (6400^(-1/5))² = 3 %.
    assert mean == pytest.approx(draws.mean(), abs=0.02 * draws.std()) and sd == pytest.approx(draws.std(), rel=0.04)


def test_export_as_csv_comes_back(real, tmp_path):
    import pandas as pd

    posterior, densities = export(real.posterior, tmp_path, "csv", 100)
    back = pd.read_csv(posterior)
    np.testing.assert_allclose(back["w"], posterior_table(real.posterior, 100)["w"], rtol=1e-9)
    assert list(pd.read_csv(densities)) == ["parameter", "value", "density"]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["densities.csv", "posterior.csv"]
    with pytest.raises(InputError, match="csv or parquet"):
        export(real.posterior, tmp_path, "xls")


def test_parquet_without_its_library_says_so(real, tmp_path, monkeypatch):
    import pandas as pd

    def absent(*args, **options):
        raise ImportError("no engine")

    monkeypatch.setattr(pd.DataFrame, "to_parquet", absent)
    with pytest.raises(InputError, match="pyarrow.*csv"):
        export(real.posterior, tmp_path, "parquet")
    assert list(tmp_path.iterdir()) == []


def test_parquet_comes_back(real, tmp_path):
    pytest.importorskip("pyarrow", reason="no library that reads Parquet is installed")
    import pandas as pd

    posterior, _ = export(real.posterior, tmp_path, "parquet", 100)
    np.testing.assert_array_equal(pd.read_parquet(posterior)["w"], posterior_table(real.posterior, 100)["w"])
