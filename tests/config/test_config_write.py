"""The config as run: complete, readable again, and comparable."""

from types import SimpleNamespace

import pytest

from fitter.config.load import config_from_mapping, load_config
from fitter.config.write import as_run, config_hash, config_text, differences, input_problems
from fitter.config.yaml_file import parse_yaml


def sample_of(config):
    """Stand-in for the sample that a config leads to."""
    sources = {str(config.folder / "survey.csv"): "a" * 64, str(config.folder / "systematics.npy"): "b" * 64}
    return SimpleNamespace(distance_scale="absolute", data_kind="distance_modulus", sources=sources)


@pytest.fixture
def config(project):
    return load_config(project / "config.yaml")


def test_every_default_is_written_out(config, project):
    settings = as_run(config, sample_of(config), project / "run")
    assert settings["parameters"] == {"omega_m": {"uniform": [0.05, 0.8]}, "H0": {"uniform": [40, 100]}}
    assert settings["sampling"]["walkers"] == 32
    assert settings["sampling"]["replicas"] == 4
    assert settings["radiation"] is False
    assert settings["sample"]["missing"] == "refuse"
    assert settings["sample"]["uncertainty"][1]["label"] == "calibration"
    assert list(settings["inputs"].values()) == ["a" * 64, "b" * 64]


@pytest.mark.parametrize("inside", [True, False])
def test_the_config_as_run_leads_to_the_same_inputs_and_settings(config, project, monkeypatch, inside):
    monkeypatch.chdir(project if inside else project.parent.parent.parent)
    target = project / "runs" / "one" if inside else project.parent / "elsewhere"
    target.mkdir(parents=True)
    settings = as_run(config, sample_of(config), target)
    (target / "config.yaml").write_text(config_text(settings, ["as run"]))
    again = load_config(target / "config.yaml")
    assert (target / again.sample.table).resolve() == (project / "survey.csv").resolve()
    assert (target / again.sample.uncertainty[1].covariance).resolve() == (project / "systematics.npy").resolve()
    sample = sample_of(config)
    assert differences(settings, as_run(again, sample, project / "another")) == []
    assert config_hash(settings) == config_hash(as_run(again, sample, project / "another"))
    assert input_problems(again, sample) == []


def test_paths_are_relative_inside_the_working_directory_and_absolute_outside(config, project, monkeypatch):
    monkeypatch.chdir(project)
    assert as_run(config, sample_of(config), project / "runs" / "one")["sample"]["table"] == "../../survey.csv"
    monkeypatch.chdir(project.parent)
    assert as_run(config, sample_of(config), project.parent.parent / "one")["sample"]["table"] == str((project / "survey.csv").resolve())


def test_text_that_looks_like_something_else_stays_text():
    for word in ("1e-3", "1E5", "no", "on", "0o17", "2026-12-01", "~", "true", "12:30", "1_000", "", "a: b", "# no comment", "Ωm", "é\n"):
        assert parse_yaml(config_text({"title": word}, [])).data == {"title": word}
    shared = [0, 1]
    assert "&" not in config_text({"a": shared, "b": shared}, [])


def test_what_decides_the_result_is_compared(config, project):
    sample = sample_of(config)
    before = as_run(config, sample, project / "run")

    def difference(**changes):
        return differences(before, as_run(config.changed(changes), sample, project / "run"))

    assert difference(title="another", run_folder="elsewhere") == []
    assert difference(**{"sampling.max_steps": 50_000, "sampling.target_ess": 20_000}) == []
    assert difference(**{"sampling.seed": 5}) == ["sampling.seed: 20261201 → 5"]
    assert difference(parameters={"omega_m": {"uniform": [0, 0.8]}}) == ["parameters.omega_m.uniform: [0.05, 0.8] → [0, 0.8]"]
    assert difference(model="flat_wcdm") == ["model: flat_lcdm → flat_wcdm", "parameters.w.uniform: absent → [-3, 0]"]
    sample.sources[next(iter(sample.sources))] = "c" * 64
    assert difference() == [f"sample.table: {'a' * 64} → {'c' * 64}"]


def test_inputs_that_changed_are_refused(config, project):
    sample = sample_of(config)
    recorded = {"survey.csv": "a" * 64, "systematics.npy": "e" * 64, "other.csv": "f" * 64}
    changed, other = input_problems(config.changed({"inputs": recorded}), sample)
    assert "the file has changed: its SHA-256 is now bbbb" in str(changed)
    assert "remove the line to fit what the file holds now" in str(changed)
    assert "this fit does not read this file" in str(other)


def test_arrays_have_no_sample_section(project):
    sample = SimpleNamespace(distance_scale="relative", data_kind="distance_modulus", sources={})
    config = config_from_mapping({"model": "flat_lcdm"}, sample=sample)
    settings = as_run(config, sample, project)
    assert "sample" not in settings
    assert settings["parameters"] == {"omega_m": {"uniform": [0, 1]}}
    assert len(config_hash(settings)) == 64
