"""From a file or a mapping to a validated `Config`, with every problem found in one pass."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

from pydantic import TypeAdapter, ValidationError

from fitter.config.model_choice import chosen_model
from fitter.config.parameters import loose_problems, parameter_problems, term_prior_problems
from fitter.config.repair import Reading, read_through
from fitter.config.settings import Config, SampleSettings
from fitter.config.yaml_file import Document, read_yaml
from fitter.cosmology import Model
from fitter.errors import InputError, InputErrors
from fitter.sample.capsule import AnySample, Capsule, CapsuleSettings, read_capsule
from fitter.sample.glance import glance

if TYPE_CHECKING:
    from fitter.sample.sample import Sample

__all__ = [
    "SaidOfData",
    "config_from_mapping",
    "load_config",
    "described",
    "files_at_a_glance",
    "mended_config",
    "placing",
    "raise_all",
    "valid",
    "validate",
]


class KindOfData(Protocol):
    """Whatever says which kind of data a sample holds: the sample itself, its settings, a capsule."""

    @property
    def distance_scale(self) -> str: ...

    @property
    def data_kind(self) -> str: ...


@dataclass(frozen=True)
class SaidOfData:
    """The kind of data, where nothing else of a sample is at hand."""

    distance_scale: str
    data_kind: str


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


def config_from_mapping(
    data: Mapping[str, Any], *, folder: str | Path = ".", sample: Sample | None = None, allow_code: bool = False
) -> Config:
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
    document: Document, folder: Path, arrays: KindOfData | None = None, *, allow_code: bool = False
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
    model, refused = chosen_model(document, folder, allow_code)
    reading = read_through(document)
    config, problems = reading.config, reading.problems
    if config is not None:
        _told(config, document, folder, model, allow_code)
    if arrays is None and document.data.get("sample") is None:
        cure = "It says what was observed: `sample: {table: …, columns: {…}, uncertainty: […]}`"
        problems.insert(0, document.error("the key `sample` is missing", cure=cure))
    sample = config.sample if config is not None else _sample_settings(reading)
    known = arrays if arrays is not None else described(sample, folder) or _said_of_data(reading)
    problems += refused + term_prior_problems(document.data.get("sample"), document) + _parameter_problems(reading.document, model, known)
    problems.sort(key=lambda p: p.row or 0)
    return (None if problems else config), sample, problems


def files_at_a_glance(document: Document, folder: Path) -> list[InputError]:
    """Return which files and columns are missing, for a config whose ``sample`` is not right as a whole."""
    return glance(read_through(document).document.data.get("sample"), folder)


def mended_config(document: Document, folder: Path, *, allow_code: bool = False) -> Config | None:
    """Return a config with misspelt keys read as what they most likely stand for, to look for more problems with; None if that fails."""
    reading = read_through(document)
    if reading.mended is None or not reading.is_whole("sample"):
        return None
    model, _ = chosen_model(reading.document, folder, allow_code)
    return _told(reading.mended, reading.document, folder, model, allow_code)


def _told(config: Config, document: Document, folder: Path, model: Model | None, allow_code: bool) -> Config:
    """A config that knows where it came from."""
    config._document, config._folder, config._cosmology, config._allow_code = document, folder, model, allow_code
    return config


def _sample_settings(reading: Reading) -> SampleSettings | CapsuleSettings | None:
    """The settings of the sample, misspelt keys read as what they most likely stand for; None where something had to be left out."""
    if not reading.is_whole("sample"):
        return None
    try:
        adapter: TypeAdapter[SampleSettings | CapsuleSettings] = TypeAdapter(AnySample)
        return adapter.validate_python(reading.document.data.get("sample"))
    except ValidationError:
        return None


def _said_of_data(reading: Reading) -> SaidOfData | None:
    """Distance scale and kind of data of a sample that is not right as a whole; None where these are in doubt themselves."""
    sample = reading.document.data.get("sample")
    if not isinstance(sample, dict) or not isinstance(sample.get("columns"), dict) or "capsule" in sample:
        return None
    if not (reading.is_whole("sample", "distance_scale") and reading.is_whole("sample", "columns")):
        return None
    kind = "magnitude" if "magnitude" in sample["columns"] else "distance_modulus"
    return SaidOfData(sample.get("distance_scale", "relative"), kind)


def described(sample: SampleSettings | CapsuleSettings | None, folder: Path) -> SampleSettings | Capsule | None:
    """What says which kind of data a sample holds: its settings, or the contents of a capsule; None where that cannot be read."""
    if not isinstance(sample, CapsuleSettings):
        return sample
    try:
        return read_capsule(folder / os.path.expanduser(sample.capsule))
    except InputError:
        return None  # said again, with its place, when the sample is read


def _parameter_problems(document: Document, model: Model | None, sample: KindOfData | None) -> list[InputError]:
    given, variants = document.data.get("parameters") or {}, document.data.get("variants")
    if not isinstance(given, dict):
        return []
    models = [document.data.get("model"), *(v.get("model") for v in variants or () if isinstance(v, dict))]
    # The parameters of a base are checked with each variant, whose model may be another.
    if model is None or sample is None or variants:
        return [] if any(isinstance(m, dict) for m in models) else loose_problems(given, document)
    return parameter_problems(given, model, sample.distance_scale, document, sample.data_kind)


@contextmanager
def placing(document: Document) -> Iterator[None]:
    """Give errors that name a key, and no file, the file and the row of that key."""
    try:
        yield
    except InputErrors as several:
        raise InputErrors([_placed(error, document) for error in several.errors]) from None
    except InputError as error:
        placed = _placed(error, document)
        if placed is error:
            raise
        raise placed from None


def _placed(error: InputError, document: Document) -> InputError:
    if error.file is not None or error.key is None:
        return error
    keys = tuple(int(k) if k.isdigit() else k for k in error.key.split("."))
    return document.error(error.problem, keys, value=error.value, cure=error.cure)
