"""Every command and config of the README works as printed, from a folder with a blank and non-ASCII letters in its name."""

import os
import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import yaml
from typer.testing import CliRunner

from fitter import check, fit
from fitter.cli import app

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
CONFIGS = re.findall(r"```yaml\n(.*?)```", README, flags=re.S)
QUICK = {"replicas": 2, "walkers": 32, "target_ess": 400, "seed": 1}


def commands() -> list[list[str]]:
    """The README's own command lines, without comments."""
    lines = re.findall(r"^    (?:\.venv/bin/)?mufitter (.*)$", README, flags=re.M)
    return [shlex.split(line, comments=True) for line in lines]


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    """A folder as the README assumes it: a table and its covariance, configs, and a second fit to compare with."""
    folder = tmp_path_factory.mktemp("read me") / "Überschuß ω"
    folder.mkdir()
    z = np.linspace(0.02, 1.0, 40)
    mu = 43.2 + 5 * np.log10(z * (1 + 0.6 * z)) + 0.1 * np.random.default_rng(3).standard_normal(40)
    rows = [f"{a:.4f},{a:.4f},{m:.4f},0.15" for a, m in zip(z, mu, strict=True)]
    (folder / "my_table.csv").write_text("\n".join(["zcmb,zhel,mu,mu_error", *rows]) + "\n")
    matrix = 1e-4 * np.ones((40, 40)) + 1e-6 * np.eye(40)
    (folder / "systematics.txt").write_text("\n".join(["40", *map(str, matrix.ravel())]) + "\n")
    shutil.copytree(ROOT / "configs", folder / "configs")
    shutil.copytree(ROOT / "data_demo", folder / "data_demo")
    variants = folder / "configs/compare_variants.yaml"
    content = yaml.safe_load(variants.read_text(encoding="utf-8"))
    # Three of its variants are enough here, with the parameters that they have.
    content["sampling"], content["variants"] = QUICK, content["variants"][:3]
    content["parameters"] = {name: prior for name, prior in content["parameters"].items() if name not in ("w0", "wa")}
    variants.write_text(yaml.safe_dump(content, allow_unicode=True, sort_keys=False), encoding="utf-8")
    blinded = folder / "configs/blinded.yaml"
    blinded.write_text(re.sub(r"(?m)^sampling:.*$", f"sampling: {QUICK}", blinded.read_text(encoding="utf-8")), encoding="utf-8")
    marked = [
        "made by hand",
        "NAMES: ID z mu note",
        *(f"SN: 2031{chr(97 + i % 26)} {r.split(',')[0]} {r.split(',')[2]} x" for i, r in enumerate(rows[:26])),
    ]
    (folder / "marked.txt").write_text("\n".join([*marked, "END:"]) + "\n")
    np.savez(folder / "inverse.npz", inverse=np.eye(26) / 0.0225)
    return folder


def test_every_command(place, monkeypatch):
    monkeypatch.chdir(place)
    monkeypatch.setenv("NO_COLOR", "1")
    done = []
    for words in commands():
        result = CliRunner().invoke(app, words, prog_name="mufitter")
        assert result.exit_code == 0, f"mufitter {' '.join(words)}\n{result.output}\n{result.exception!r}"
        assert "\x1b[" not in result.output
        done.append(words[0])
        if words[0] == "start":
            # Then the reader writes a config; ours is short of breath.
            (place / "mine.yaml").write_text(CONFIGS[0] + f"sampling: {QUICK}\n", encoding="utf-8")
        if words[:2] == ["fit", "mine.yaml"]:
            fit("mine.yaml", model="flat_lcdm", parameters={}, title="flat ΛCDM", run_folder="runs/flat_lcdm")
            for name, run in (("a", "mine"), ("b", "flat_lcdm"), ("flat_wcdm", "mine")):
                shutil.copytree(place / "runs" / run, place / "runs" / name)
    assert {"start", "check", "fit", "compare", "figures", "tables", "export", "paper", "capsule", "rehearse", "stress", "unblind"} <= set(
        done
    )
    assert len(CONFIGS) == 4
    (place / "variants.yaml").write_text(CONFIGS[0] + CONFIGS[2], encoding="utf-8")
    assert check("variants.yaml").problems == ()
    for i, n in ((1, 24), (3, None)):
        (place / "again.yaml").write_text(CONFIGS[i], encoding="utf-8")
        assert check("again.yaml").problems == ()
        again = fit("again.yaml", run_folder=False, sampling=QUICK)
        assert again.converged and again.sample.n == (n or 40)
    files = [
        name for cell in re.findall(r"^\| ([\w./, ]+) \|", README, flags=re.M) for name in cell.split(", ") if re.search(r"\.\w+$|/$", name)
    ]
    assert len(files) > 8 and [name for name in files if not (place / "runs/mine" / name).exists()] == []


def test_the_python_block(place):
    (block,) = re.findall(r"```python\n(.*?)```", README, flags=re.S)
    table = np.loadtxt(place / "my_table.csv", delimiter=",", skiprows=1)
    known = {"z": table[:, 0], "mu": table[:, 2], "covariance": 0.0225 * np.eye(40)}
    exec(block, known)  # noqa: S102 - our own text
    assert known["result"].converged


def test_streams_and_exit_codes(place):
    """Data to stdout, messages to stderr, no colour, no display; what the README says of exit codes."""
    environment = {k: v for k, v in os.environ.items() if k not in ("DISPLAY", "MPLBACKEND")} | {"OPENBLAS_NUM_THREADS": "1"}

    def run(*words):
        command = [sys.executable, "-m", "fitter.cli", *words]
        return subprocess.run(command, cwd=place, env=environment, capture_output=True, text=True, encoding="utf-8")

    (place / "kurz ö.yaml").write_text(CONFIGS[0] + f"sampling: {QUICK}\n", encoding="utf-8")
    done = run("fit", "kurz ö.yaml", "--json", "--run-folder", "läufe/eins zwei")
    assert done.returncode == 0, done.stderr
    assert yaml.safe_load(done.stdout)["schema"] == "mufitter summary 1" and "Written to" in done.stderr
    short = CONFIGS[0] + "sampling: {replicas: 2, walkers: 32, target_ess: 100000, max_steps: 60}\n"
    (place / "short.yaml").write_text(short, encoding="utf-8")
    done = run("fit", "short.yaml", "-q")
    assert done.returncode == 1 and done.stdout == "" and "Not converged" in done.stderr
    (place / "wrong.yaml").write_text(CONFIGS[0].replace("mu_error", "mu_eror"), encoding="utf-8")
    done = run("check", "wrong.yaml")
    assert done.returncode == 2 and "mu_eror" in done.stderr and "Traceback" not in done.stderr and "\x1b[" not in done.stderr
    done = run("--version")
    assert re.fullmatch(r"mufitter \d+\.\d+\.\d+\n", done.stdout)


def test_shell_completion():
    """Completion offers the commands (the protocol of bash, spoken by hand)."""
    environment = {**os.environ, "_MUFITTER_COMPLETE": "complete_bash", "COMP_WORDS": "mufitter ca", "COMP_CWORD": "1"}
    done = subprocess.run([Path(sys.executable).parent / "mufitter"], env=environment, capture_output=True, text=True)
    assert "capsule" in done.stdout.split()


def test_links_point_to_files():
    for text in (README, (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8"), (ROOT / "docs/capsule.md").read_text(encoding="utf-8")):
        for target in re.findall(r"\]\(([^)#:]+)\)", text):
            assert (ROOT / target).exists(), target


def test_make_targets_exist():
    targets = set(re.findall(r"^(\w+):", (ROOT / "Makefile").read_text(), flags=re.M))
    for text in (README, (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")):
        assert set(re.findall(r"^    make (\w+)", text, flags=re.M)) <= targets


def test_the_schema_beside_the_configs_is_the_present_one():
    from fitter.config.schema import config_schema

    written = yaml.safe_load((ROOT / "configs/mufitter.schema.json").read_text(encoding="utf-8"))
    assert written == config_schema(), "write it again: mufitter schema > configs/mufitter.schema.json"
    for config in (ROOT / "configs").glob("*.yaml"):
        first = config.read_text(encoding="utf-8").splitlines()[0]
        assert first == "# yaml-language-server: $schema=mufitter.schema.json", config.name
