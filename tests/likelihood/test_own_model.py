"""Models from a file: loaded and tried out, and every way they can be wrong."""

import pickle
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from fitter import check, fit, load_config
from fitter.errors import InputError
from fitter.likelihood.own_model import load_model
from fitter.parameters import PARAMETERS, parameter
from fitter.report.run_folder import read_run

CONFIGS = Path(__file__).resolve().parents[2] / "configs"
HEAD = """
import numpy as np
from fitter.cosmology import DistanceModel, FluidModel, Model
from fitter.parameters import PARAMETERS, Parameter
SLOPE = Parameter("slope", r"\\\\beta", "β", "", "a slope of no meaning", {"uniform": [0, 1]})
"""
GOOD = (
    HEAD
    + """
class Straight(DistanceModel):
    name = "straight"
    parameters = (SLOPE,)
    def distance_over_z(self, z, theta):
        return 1 / (1 + theta[:, :1] * z)
"""
)


def write(tmp_path, text, name="own.py"):
    (tmp_path / name).write_text(text.replace("\\\\\\\\", "\\\\"))
    return tmp_path / name


def test_a_distance_is_enough(tmp_path):
    model = load_model(write(tmp_path, GOOD))
    assert model.name == "straight"
    z = np.array([0.0, 1.0])
    np.testing.assert_allclose(model.log_distance(z, np.array([[0.5]])), [[0.0, -5 * np.log10(1.5)]], atol=1e-14)
    assert parameter("slope").meaning == "a slope of no meaning"


def test_the_examples_load():
    assert load_model(CONFIGS / "own_models/thawing.py", "thawing").parameters[1].name == "w_today"
    assert load_model(CONFIGS / "own_models/transition.py").parameters[1].latex == r"\Delta_\mathrm{DE}"


def test_the_thawing_example_is_flat_lcdm_at_minus_one():
    from fitter.cosmology import get_model

    z, thawing = np.linspace(0, 2, 9), load_model(CONFIGS / "own_models/thawing.py")
    np.testing.assert_allclose(thawing.e_squared(z, np.array([[0.3, -1.0]])), get_model("flat_lcdm").e_squared(z, np.array([[0.3]])))
    # dlnX/dln(1+z) = 3 (1 + w): the density and the equation of state that the example declares belong together.
    theta, step = np.array([[0.3, -0.6]]), 1e-5
    up, down = (np.log(thawing.dark_energy_growth(np.expm1(np.log1p(z) + s), theta)) for s in (step, -step))
    np.testing.assert_allclose((up - down) / (2 * step), 3 * (1 + thawing.equation_of_state(z, theta)), atol=1e-8)


def test_another_process_finds_the_model_again(tmp_path):
    model = load_model(write(tmp_path, GOOD))
    path = tmp_path / "model.pickle"
    path.write_bytes(pickle.dumps(model))
    code = f"import pickle; m = pickle.load(open({str(path)!r}, 'rb')); print(m.name, m.parameters[0].meaning)"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "straight a slope of no meaning"


WRONG = {
    "no such file": (None, "cannot be read"),
    "syntax": ("class Broken(:\n", "SyntaxError"),
    "an exception": (HEAD + "1 / 0\n", "ZeroDivisionError"),
    "no model": (HEAD, "no model in this file"),
    "two models": (
        GOOD + GOOD.split("SLOPE = ")[1].split("\n", 1)[1].replace("Straight", "Other").replace("straight", "other"),
        "several models",
    ),
    "a built-in name": (GOOD.replace('"straight"', '"flat_lcdm"'), "built in"),
    "no parameters": (GOOD.replace("(SLOPE,)", "()"), "tuple of Parameter"),
    "parameters that are none": (GOOD.replace("(SLOPE,)", "('slope',)"), "tuple of Parameter"),
    "H0": (GOOD.replace("(SLOPE,)", "(PARAMETERS['H0'],)"), "not a name for a model's parameter"),
    "no prior": (GOOD.replace(', {"uniform": [0, 1]})', ")"), "needs a default prior"),
    "a bad prior": (GOOD.replace("[0, 1]", "[1, 0]"), "default prior of slope"),
    "twice": (GOOD.replace("(SLOPE,)", "(SLOPE, SLOPE)"), "same name"),
    "another symbol for ours": (GOOD.replace('Parameter("slope"', 'Parameter("omega_m"'), "declared already"),
    "an exception inside": (GOOD.replace("theta[:, :1] * z", "theta[:, 7:8].sum() * undefined"), "NameError"),
    "a wrong shape": (GOOD.replace("theta[:, :1] * z", "theta[:, 0].mean() * z"), "shape"),
    "not vectorised": (GOOD.replace("theta[:, :1] * z", "theta.mean() * z + 0 * theta[:, :1]"), "another value when it comes with others"),
    "wrong today": (GOOD.replace("return 1 /", "return 2 /"), "near z = 0"),
}


@pytest.mark.parametrize("case", WRONG)
def test_what_is_wrong_is_said(case, tmp_path):
    text, words = WRONG[case]
    path = tmp_path / "absent.py" if text is None else write(tmp_path, text)
    with pytest.raises(InputError) as error:
        load_model(path)
    assert words in str(error.value)
    assert str(path) in str(error.value) or case == "another symbol for ours"


def test_the_line_of_a_failure_is_named(tmp_path):
    path = write(tmp_path, HEAD + "\n\nprint(nonsense)\n")
    with pytest.raises(InputError, match="row 8"):
        load_model(path)


def test_code_runs_only_with_leave():
    path = CONFIGS / "own_thawing.yaml"
    with pytest.raises(InputError, match="--allow-code"):
        load_config(path)
    assert "--allow-code" in str(check(path).problems[0])
    assert check(path, allow_code=True).ok
    assert load_config(path, allow_code=True).cosmology.name == "thawing"


def test_a_run_is_read_without_the_file(tmp_path, monkeypatch):
    folder = tmp_path / "run"
    fit(CONFIGS / "own_thawing.yaml", allow_code=True, run_folder=folder, sampling={"target_ess": 500})
    summary = read_run(folder).summary
    assert summary["model"] == "thawing"
    assert summary["cross_check"]["agrees"]
    assert summary["declared"]["w_today"]["latex"] == r"w_\mathrm{today}"
    assert any("thawing.py" in path for path in summary["provenance"]["inputs"]) or "thawing.py" in (folder / "config.yaml").read_text()
    monkeypatch.setattr("fitter.parameters._OWN", {})
    with pytest.raises(KeyError):
        parameter("w_today")
    assert read_run(folder).posterior.draws("w_today").size > 1000
    assert parameter("w_today").latex == r"w_\mathrm{today}"
    assert "w_today" not in PARAMETERS
