"""The config as run: every default written out, paths that still lead to the inputs, and their hashes."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import yaml

from fitter.config.settings import Config
from fitter.config.yaml_file import _Loader
from fitter.errors import InputError

if TYPE_CHECKING:
    from fitter.sample.sample import Sample

__all__ = ["as_run", "config_hash", "config_text", "differences", "input_problems"]

_PATH_KEYS = ("table", "capsule", "covariance", "precision", "modes")
# What may change between an interrupted run and its continuation.
_FREE_TO_CHANGE = ("title", "run_folder", "intervals", "sampling.max_steps", "sampling.target_ess")


def as_run(config: Config, sample: Sample, target: Path) -> dict[str, Any]:
    """Return the complete settings of a run.

    Parameters
    ----------
    config : Config
    sample : Sample
        Gives the hashes of the inputs and what the table holds.
    target : Path
        The run folder, which the paths of inputs become relative to.
    """

    def moved(path: str) -> str:
        return _from_run_folder(config.folder / os.path.expanduser(path), target)

    described = {}
    if config.sample is not None:
        described["sample"] = _with_paths(config.sample.model_dump(mode="json", by_alias=True, exclude_none=True), moved)
    return {
        "title": config.title,
        **described,
        "model": _model(config, moved),
        "radiation": config.radiation,
        "parameters": config.complete_parameters(sample),
        "sampling": config.sampling.model_dump(mode="json", by_alias=True, exclude_none=True),
        **({"blind": config.blind} if config.blind else {}),
        "run_folder": str(config.default_run_folder()),
        "intervals": config.intervals,
        **_looks(config, moved),
        "inputs": {moved(path): sha for path, sha in {**sample.sources, **config.model_sources}.items()},
    }


def _looks(config: Config, moved: Callable[[str], str]) -> dict[str, Any]:
    """How figures and tables look."""
    figures = config.figures.model_dump(mode="json", exclude_none=True)
    if config.figures.style is not None:
        figures["style"] = moved(config.figures.style)
    return {"figures": figures, **({"labels": dict(config.labels)} if config.labels else {})}


def _model(config: Config, moved: Callable[[str], str]) -> str | dict[str, str]:
    return config.model if isinstance(config.model, str) else {"file": moved(config.model.file), "name": config.cosmology.name}


def _from_run_folder(path: Path, target: Path) -> str:
    """Relative where input and run lie under the working directory, so that the project can be moved; else absolute."""
    here, path, target = Path.cwd().resolve(), path.resolve(), target.resolve()
    if path.is_relative_to(here) and target.is_relative_to(here):
        return Path(os.path.relpath(path, target)).as_posix()
    return str(path)


def _with_paths(sample: dict, change: Callable[[str], str]) -> dict:
    changed = {k: change(v) if k in _PATH_KEYS and isinstance(v, str) else v for k, v in sample.items()}
    if isinstance(changed.get("uncertainty"), list):
        changed["uncertainty"] = [_with_paths(term, change) if isinstance(term, dict) else term for term in changed["uncertainty"]]
    return changed


class _Dumper(yaml.SafeDumper):
    """Quotes whatever YAML 1.1 or our YAML 1.2 scalars would read as something else than text."""


_Dumper.yaml_implicit_resolvers = {
    first: [*yaml.SafeDumper.yaml_implicit_resolvers.get(first, ()), *_Loader.yaml_implicit_resolvers.get(first, ())]
    for first in {*yaml.SafeDumper.yaml_implicit_resolvers, *_Loader.yaml_implicit_resolvers}
}


class _Block(dict):
    """A section with one line for each key."""


class _Line(dict):
    """A section on one line, in braces."""


_Dumper.add_representer(_Block, lambda dumper, data: dumper.represent_mapping("tag:yaml.org,2002:map", data, flow_style=False))
_Dumper.add_representer(_Line, lambda dumper, data: dumper.represent_mapping("tag:yaml.org,2002:map", data, flow_style=True))


def config_text(settings: dict[str, Any], header: list[str]) -> str:
    """Return settings as YAML with a few lines of comment before them."""
    # Through JSON: no anchors for shared lists, no types that YAML would need a tag for.
    plain = json.loads(json.dumps(settings))
    for section in ("parameters", "inputs"):
        if plain.get(section):
            plain[section] = _Block({k: _Line(v) if isinstance(v, dict) else v for k, v in plain[section].items()})
    body = yaml.dump(plain, Dumper=_Dumper, sort_keys=False, allow_unicode=True, default_flow_style=None, width=140)
    return "".join(f"# {line}\n" for line in header) + body


def config_hash(settings: dict[str, Any]) -> str:
    """Return the SHA-256 of what decides the result: the settings as run, with the hashes of the inputs instead of their paths."""
    return hashlib.sha256(json.dumps(_deciding(settings), sort_keys=True).encode()).hexdigest()


def differences(before: dict[str, Any], now: dict[str, Any]) -> list[str]:
    """Return what keeps two runs from being the same, as ``key: before → now``."""
    old, new = _deciding(before), _deciding(now)
    keys = [*old, *(k for k in new if k not in old)]
    return [f"{k}: {old.get(k, 'absent')} → {new.get(k, 'absent')}" for k in keys if old.get(k) != new.get(k)]


def _deciding(settings: dict[str, Any]) -> dict[str, Any]:
    settings = json.loads(json.dumps(settings))
    hashes = settings.pop("inputs", {})
    for looks in ("figures", "labels"):
        settings.pop(looks, None)
    if "sample" in settings:
        settings["sample"] = _with_paths(settings["sample"], lambda path: hashes.get(path, path))
    if isinstance(settings.get("model"), dict):
        settings["model"]["file"] = hashes.get(settings["model"]["file"], settings["model"]["file"])
    flat: dict[str, Any] = {}
    _flatten(settings, "", flat)
    return {k: v for k, v in flat.items() if k not in _FREE_TO_CHANGE}


def _flatten(value: object, key: str, flat: dict[str, Any]) -> None:
    if isinstance(value, dict):
        for name, inner in value.items():
            _flatten(inner, f"{key}.{name}" if key else name, flat)
    else:
        flat[key] = value


def input_problems(config: Config, sample: Sample) -> list[InputError]:
    """Return which inputs are no longer the files that `inputs:` recorded."""
    found = {_resolved(config, path): sha for path, sha in {**sample.sources, **config.model_sources}.items()}
    problems = []
    for path, recorded in config.inputs.items():
        now = found.get(_resolved(config, path))
        keys = ("inputs", path)
        if now is None:
            problems.append(config.document.error("this fit does not read this file", keys, cure="Remove the line"))
        elif now != recorded.lower():
            cure = "Restore the file; or remove the line to fit what the file holds now"
            problems.append(config.document.error(f"the file has changed: its SHA-256 is now {now}", keys, value=recorded, cure=cure))
    return problems


def _resolved(config: Config, path: str) -> Path:
    return (config.folder / os.path.expanduser(path)).resolve()
