"""From a file or a mapping to a validated `Config`, with every problem found in one pass."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import TypeAdapter, ValidationError

from fitter.config.model_choice import chosen_model
from fitter.config.parameters import parameter_problems
from fitter.config.problems import problems_of
from fitter.config.settings import Config, SampleSettings
from fitter.config.yaml_file import Document, read_yaml
from fitter.cosmology import Model
from fitter.errors import InputError, InputErrors
from fitter.sample.capsule import AnySample, CapsuleSettings, read_capsule

__all__ = ["config_from_mapping", "load_config", "described", "raise_all", "valid", "validate"]


def load_config(path: str | Path, *, allow_code: bool = False) -> Config:
    """Read and validate a config file.

    Parameters
    ----------
    path : path-like
        A YAML file; the paths of inputs in it are relative to its folder.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Returns
    -------
    Config

    Raises
    ------
    InputError
        One problem: file, row, key, value and cure.
    InputErrors
        Several, in the order of the file.
    """
    document = read_yaml(path)
    config, _, problems = validate(document, Path(path).parent, allow_code=allow_code)
    return valid(config, problems)


def config_from_mapping(data: Mapping[str, Any], *, folder: str | Path = ".", sample=None, allow_code: bool = False) -> Config:
    """Validate settings given in Python.

    Parameters
    ----------
    data : mapping
        The keys of a config file.
    folder : path-like
        What the paths of inputs are relative to.
    sample : Sample, optional
        The data, where there is no ``sample`` section to read them from.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Returns
    -------
    Config
    """
    config, _, problems = validate(Document(dict(data)), Path(folder), sample, allow_code=allow_code)
    return valid(config, problems)


def valid(config: Config | None, problems: list[InputError]) -> Config:
    """Return a config that has no problems; raise them if it has."""
    raise_all(problems)
    if config is None:
        raise InputError("this config cannot be read")
    return config


def raise_all(problems: list[InputError]) -> None:
    """Raise what there is to raise: nothing, the one problem, or all of them together."""
    if len(problems) == 1:
        raise problems[0]
    if problems:
        raise InputErrors(problems)


def validate(
    document: Document, folder: Path, arrays=None, *, allow_code: bool = False
) -> tuple[Config | None, SampleSettings | CapsuleSettings | None, list[InputError]]:
    """Validate a document.

    Parameters
    ----------
    document : Document
    folder : Path
        What the paths of inputs are relative to.
    arrays : Sample, optional
        Data that stand in for the ``sample`` section.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Returns
    -------
    config : Config or None
        None when anything is wrong.
    sample : SampleSettings or None
        The settings of the sample where at least those are right, so that its files can be checked too.
    problems : list of InputError
        In the order of the file.
    """
    config, problems = None, []
    model, refused = chosen_model(document, folder, allow_code)
    try:
        config = Config.model_validate(document.data)
        config._document, config._folder, config._cosmology, config._allow_code = document, folder, model, allow_code
    except ValidationError as error:
        problems = problems_of(error, Config, document)
    except InputError as error:
        problems = [_placed(error, document)]
    if arrays is None and document.data.get("sample") is None:
        cure = "It says what was observed: `sample: {table: …, columns: {…}, uncertainty: […]}`"
        problems.insert(0, document.error("the key `sample` is missing", cure=cure))
    sample = config.sample if config is not None else _sample_settings(document)
    problems += refused + _parameter_problems(document, model, described(sample, folder) if arrays is None else arrays)
    problems.sort(key=lambda p: p.row or 0)
    return (None if problems else config), sample, problems


def _sample_settings(document: Document) -> SampleSettings | CapsuleSettings | None:
    try:
        adapter: TypeAdapter[SampleSettings | CapsuleSettings] = TypeAdapter(AnySample)
        return adapter.validate_python(document.data.get("sample"))
    except (ValidationError, InputError):
        return None


def described(sample, folder: Path):
    """What says which kind of data a sample holds: its settings, or the contents of a capsule; None where that cannot be read."""
    if not isinstance(sample, CapsuleSettings):
        return sample
    try:
        return read_capsule(folder / os.path.expanduser(sample.capsule))
    except InputError:
        return None  # said again, with its place, when the sample is read


def _parameter_problems(document: Document, model: Model | None, sample: SampleSettings | None) -> list[InputError]:
    given = document.data.get("parameters") or {}
    # The parameters of a base are checked with each variant, whose model may be another.
    if not isinstance(given, dict) or model is None or sample is None or document.data.get("variants"):
        return []
    return parameter_problems(given, model, sample.distance_scale, document, _data_kind(sample))


def _data_kind(sample) -> str:
    if hasattr(sample, "data_kind"):
        return sample.data_kind
    return "magnitude" if getattr(sample.columns, "magnitude", None) is not None else "distance_modulus"


def _placed(error: InputError, document: Document) -> InputError:
    """Give an error from inside a section the file and row of the key that it names."""
    if error.file is not None:
        return error
    keys = tuple(int(k) if k.isdigit() else k for k in str(error.column).split(".")) if error.column else ()
    return document.error(error.problem, keys, value=error.value, cure=error.cure)
