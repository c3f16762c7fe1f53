"""The command line: what it prints where, and its exit codes, in real processes."""

import json
import os
import subprocess
import sys

import pytest
from typer.testing import CliRunner

from fitter import cli
from fitter.errors import InputError, InputErrors

SAMPLING = "{replicas: 2, walkers: 32, target_ess: 300}"


def run(*arguments, cwd, code=None, **environment):
    """Run the command, or Python code, as a user would: no terminal."""
    command = [sys.executable, *(["-c", code] if code else ["-m", "fitter.cli"]), *map(str, arguments)]
    env = {**os.environ, "OPENBLAS_NUM_THREADS": "1", **environment}
    return subprocess.run(command, cwd=cwd, env=env, capture_output=True, text=True, encoding="utf-8", check=False)


@pytest.fixture(scope="module")
def project(tmp_path_factory, write_project):
    return write_project(tmp_path_factory.mktemp("cli") / "Übung mit Leerzeichen", SAMPLING)


@pytest.fixture(scope="module")
def fitted(project):
    return run("fit", "config.yaml", cwd=project)


@pytest.fixture
def scratch(tmp_path, write_project):
    return write_project(tmp_path / "project", SAMPLING)


def test_help_is_fast_because_nothing_heavy_is_loaded():
    code = (
        "import sys, fitter.cli\n"
        "from typer.testing import CliRunner\n"
        "assert CliRunner().invoke(fitter.cli.app, ['--help']).exit_code == 0\n"
        "print([m for m in ('numpy', 'scipy', 'pandas', 'matplotlib', 'h5py', 'emcee', 'pydantic', 'yaml') if m in sys.modules])"
    )
    assert run(code=code, cwd=".").stdout.strip() == "[]"


def test_help_and_version():
    shown = CliRunner().invoke(cli.app, ["--help"])
    assert shown.exit_code == 0
    for word in ("fit", "check", "schema", "explain", "0 fine, 1 not converged, 2 something in your input, 3 a fault of"):
        assert word in " ".join(shown.output.split())
    assert "..." not in shown.output.split("Commands:")[1]  # no command's line is cut short
    assert run("--version", cwd=".").stdout == "mufitter 0.1.0\n"


def test_a_fit_ends_with_0_its_summary_on_stdout_and_messages_on_stderr(fitted, project):
    assert fitted.returncode == 0, fitted.stderr
    assert "a small survey" in fitted.stdout
    assert "χ²/dof" in fitted.stdout
    assert "\x1b" not in fitted.stdout + fitted.stderr
    assert fitted.stderr.strip() == f"Written to {project / 'runs' / 'config'}; report.html there shows it all"
    assert (project / "runs" / "config" / "figures" / "corner.pdf").is_file()


def test_an_earlier_run_is_refused_with_2_and_stays(fitted, project):
    before = (project / "runs" / "config" / "summary.json").read_bytes()
    again = run("fit", "config.yaml", cwd=project)
    assert again.returncode == 2
    assert again.stdout == ""
    assert "a run is already there. Replace it with --replace" in again.stderr
    assert (project / "runs" / "config" / "summary.json").read_bytes() == before


def test_the_config_as_run_gives_the_same_numbers(fitted, project):
    again = run("fit", "runs/config/config.yaml", "--run-folder", "again", "--json", cwd=project)
    assert again.returncode == 0, again.stderr
    summary = json.loads(again.stdout)
    assert summary == json.loads((project / "again" / "summary.json").read_text(encoding="utf-8"))
    first = json.loads((project / "runs" / "config" / "summary.json").read_text(encoding="utf-8"))
    for key in ("parameters", "best_fit", "sample", "information", "warnings"):
        assert summary[key] == first[key]
    assert summary["provenance"]["config_sha256"] == first["provenance"]["config_sha256"]
    assert summary["provenance"]["command"].endswith("fit runs/config/config.yaml --run-folder again --json")


def test_quiet_seed_and_not_converged_ends_with_1(scratch):
    path = scratch / "config.yaml"
    path.write_text(path.read_text().replace("target_ess: 300", "target_ess: 1000000, max_steps: 20"))
    found = run("fit", "config.yaml", "--quiet", "--seed", "5", "--run-folder", "short", cwd=scratch)
    assert found.returncode == 1, found.stderr
    assert found.stdout == ""
    assert "mufitter: not converged. Raise sampling.max_steps" in found.stderr
    summary = json.loads((scratch / "short" / "summary.json").read_text(encoding="utf-8"))
    assert summary["sampling"]["seed"] == 5
    assert summary["sampling"]["converged"] is False


def test_a_check_says_what_will_be_fitted(project):
    found = run("check", "config.yaml", cwd=project)
    assert found.returncode == 0, found.stderr
    assert found.stderr.strip() == "Nothing is wrong."
    lines = [" ".join(line.split()) for line in found.stdout.splitlines()]
    assert lines[:4] == [
        "a small survey",
        "Data: 40 rows, distance modulus, distance scale absolute, 0.02 ≤ z ≤ 0.9",
        "near: 13 rows, 0.02 ≤ z ≤ 0.2908",
        "far: 27 rows, 0.3133 ≤ z ≤ 0.9",
    ]
    assert "sigma 0.1000 99.0 % (sigma)" in lines
    assert "calibration 0.0100 1.0 % (covariance)" in lines
    assert "together 0.1005" in lines
    assert "Model: flat_lcdm, no radiation" in lines
    assert any(line.startswith("omega_m uniform(0.05, 0.8)") for line in lines)
    assert any(line.startswith("H0 uniform(40, 100)") for line in lines)


def test_a_check_finds_the_problems_of_config_and_files_in_one_pass_and_ends_with_2(scratch):
    path = scratch / "config.yaml"
    path.write_text(path.read_text().replace("flat_lcdm", "flat_lcmd").replace("walkers: 32", "walkers: 31").replace("title:", "titel:"))
    table = (scratch / "survey.csv").read_text().splitlines()
    table[3] = table[3].replace(table[3].split(",")[1], "nan")
    (scratch / "survey.csv").write_text("\n".join(table) + "\n")
    found = run("check", "config.yaml", cwd=scratch)
    assert found.returncode == 2
    assert "Traceback" not in found.stderr
    for words in ("Did you mean `title`", "Did you mean `flat_lcdm`", "even", "survey.csv, row 4, column mu"):
        assert words in found.stderr
    assert found.stderr.startswith("mufitter: 4 problems\n")


def test_a_check_of_changed_inputs(scratch):
    with (scratch / "config.yaml").open("a") as file:
        file.write(f"inputs: {{survey.csv: {'a' * 64}}}\n")
    found = run("check", "config.yaml", cwd=scratch)
    assert found.returncode == 2
    assert "row 13, key inputs.survey.csv: the file has changed" in found.stderr


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["fit", "nowhere.yaml"], "nowhere.yaml: there is no such file"),
        (["check", "nowhere.yaml"], "nowhere.yaml: there is no such file"),
        (["fit", "config.yaml", "--replace", "--resume"], "choose one of them"),
        (["fit", "config.yaml", "--seed", "-1"], "--seed"),
        (["fit", "--nonsense"], "--nonsense"),
        (["fti"], "fti"),
        (["explain", "sampling.sede"], "Did you mean `sampling.seed`?"),
        (["explain", "xyzzy"], "The sections are title, sample, model"),
    ],
)
def test_mistakes_of_the_user_end_with_2(arguments, words, scratch, monkeypatch):
    monkeypatch.chdir(scratch)
    found = CliRunner().invoke(cli.app, arguments)
    assert found.exit_code == 2
    assert words in found.stderr
    assert found.stdout == ""
    assert "Traceback" not in found.stderr


def test_an_unknown_option_ends_with_2_in_a_real_process(scratch):
    assert run("fit", "config.yaml", "--nonsense", cwd=scratch).returncode == 2


def test_our_own_faults_end_with_3_and_a_traceback_in_a_file(scratch):
    code = (
        "import sys, fitter.checking\n"
        "def broken(path, **_): raise ZeroDivisionError('the inner works')\n"
        "fitter.checking.check = broken\n"
        "from fitter.cli import main\n"
        "sys.argv = ['mufitter', 'check', 'config.yaml']\n"
        "main()\n"
    )
    found = run(code=code, cwd=scratch, TMPDIR=str(scratch))
    assert found.returncode == 3
    assert "a fault of mufitter, not yours: ZeroDivisionError: the inner works" in found.stderr
    assert "Traceback" not in found.stderr
    (log,) = scratch.glob("mufitter-error-*.log")
    assert str(log) in found.stderr
    assert "in broken" in log.read_text()


def test_an_interruption_ends_with_130(scratch, monkeypatch):
    def interrupted(_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("fitter.checking.check", interrupted)
    found = CliRunner().invoke(cli.app, ["check", str(scratch / "config.yaml")])
    assert found.exit_code == 130
    assert found.stderr == "mufitter: interrupted\n"


def test_colour_only_for_a_terminal_that_wants_it(monkeypatch, capsys):
    def complaint():
        cli._complain(InputError("bad"))
        return capsys.readouterr().err

    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("TERM", "xterm")
    assert complaint() == "mufitter: bad\n"
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    assert complaint() == "\x1b[1;31mmufitter:\x1b[0m bad\n"
    monkeypatch.setenv("NO_COLOR", "1")
    assert complaint() == "mufitter: bad\n"


def test_several_problems_are_listed(capsys):
    cli._complain(InputErrors([InputError("one", cure="Mend it"), InputError("two", file="a.yaml", row=3)]))
    assert capsys.readouterr().err == "mufitter: 2 problems\n  - one. Mend it\n  - a.yaml, row 3: two\n"


def test_a_terminal_without_unicode_ends_no_command(project):
    found = run("explain", "omega_m", cwd=project, PYTHONIOENCODING="ascii")
    assert found.returncode == 0
    assert "omega_m (?m), a parameter" in found.stdout


def test_a_reader_that_leaves_early_is_no_error(project):
    command = f"{sys.executable} -m fitter.cli schema | true; exit ${{PIPESTATUS[0]}}"
    found = subprocess.run(["bash", "-c", command], cwd=project, capture_output=True, text=True, check=False)
    assert (found.returncode, found.stderr) == (0, "")


def test_the_schema_describes_the_config():
    schema = json.loads(CliRunner().invoke(cli.app, ["schema"]).stdout)
    assert schema["required"] == ["sample", "model"]
    assert set(schema["properties"]) == {
        "title",
        "sample",
        "model",
        "radiation",
        "parameters",
        "sampling",
        "run_folder",
        "inputs",
        "variants",
        "compare",
        "figures",
        "labels",
        "blind",
        "intervals",
    }
    assert "flat_w0wa" in schema["properties"]["model"]["anyOf"][0]["enum"]
    assert "uniform" in json.dumps(schema["properties"]["parameters"]["properties"]["H0"])
    assert schema["properties"]["sample"] == {
        "oneOf": [{"$ref": "#/$defs/SampleSettings"}, {"$ref": "#/$defs/CapsuleSettings"}],
        "title": "Sample",
        "description": schema["properties"]["sample"]["description"],
    }
    assert schema["additionalProperties"] is False


@pytest.mark.parametrize(
    ("key", "words"),
    [
        ("sampling.seed", ["sampling.seed", "default: 20261201"]),
        ("H0", ["H0, a parameter", "expansion rate today", "unit: km/s/Mpc", "{uniform: [40, 100]}"]),
        ("age_gyr", ["derived, it cannot be set", "unit: Gyr"]),
        ("w0", ["free in: flat_w0wa, curved_w0wa"]),
        ("curved_lcdm", ["curved_lcdm, a model", "cosmological constant.\n", "omega_lambda: {uniform: [-0.5, 2]}"]),
        ("z_acc", ["z_acceleration (z_acc), a parameter"]),
        ("Ω_m", ["omega_m (Ωm), a parameter"]),
        ("sample.columns", ["keys: redshift, redshift_helio, "]),
        ("truncated_normal", ["truncated_normal: [mean, sd, low, high]"]),
        ("distance_scale", ["sample.distance_scale", "one of: relative, absolute, calibrated", "default: relative"]),
        ("sigma", ["Column of the one-sigma errors", "zero point"]),
        ("not", ["sample.keep.COLUMN.not"]),
        ("table", ["required", "example: table: survey.csv"]),
    ],
)
def test_explanations(key, words):
    found = CliRunner().invoke(cli.app, ["explain", key])
    assert found.exit_code == 0
    for word in words:
        assert word in found.stdout


def test_what_there_is_to_explain():
    found = CliRunner().invoke(cli.app, ["explain"])
    assert found.exit_code == 0
    for word in ("Sections:   title, sample", "flat_lcdm", "omega_m", "log_uniform"):
        assert word in found.stdout
