"""The settings of a fit, validated."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, PrivateAttr, WithJsonSchema

from fitter.config.model_choice import ModelChoice, model_source
from fitter.config.parameters import complete_parameters
from fitter.config.variants import CompareSettings, VariantSettings
from fitter.config.yaml_file import Document
from fitter.cosmology import Model, get_model
from fitter.inference.settings import SamplingSettings
from fitter.parameters import PARAMETERS
from fitter.report.figures.settings import FigureSettings, Labels
from fitter.sample.capsule import AnySample
from fitter.sample.settings import SampleSettings

if TYPE_CHECKING:
    from fitter.sample.sample import Sample

__all__ = ["Config", "SampleSettings"]


def _empty_is_default(value: object) -> object:
    return {} if value is None else value


def _parameters_schema() -> dict:
    numbers = {"type": "array", "items": {"type": "number"}}
    priors = {"uniform": 2, "normal": 2, "truncated_normal": 4, "log_uniform": 2}
    prior = {
        "type": "object",
        "properties": {k: {**numbers, "minItems": n, "maxItems": n} for k, n in priors.items()},
        "additionalProperties": False,
        "minProperties": 1,
        "maxProperties": 1,
    }
    settable = [p for p in PARAMETERS.values() if p.default_prior]
    return {
        "type": "object",
        "properties": {
            p.name: {"description": f"{p.meaning}{f' ({p.unit})' if p.unit else ''}", "anyOf": [{"type": "number"}, prior]}
            for p in settable
        },
        "additionalProperties": False,
    }


Parameters = Annotated[dict[str, Any], BeforeValidator(_empty_is_default), WithJsonSchema(_parameters_schema())]
Sampling = Annotated[SamplingSettings, BeforeValidator(_empty_is_default)]


class Config(BaseModel):
    """Everything a fit is told: what was observed, the model, the priors, how to sample.

    Made by `load_config` from a file or by `config_from_mapping` from Python; both check names and values beyond
    what the types say (`fitter.config.parameters`). ``sample`` is None only where the data came as arrays.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    title: str = Field("", description="Free text, printed with the results.")
    sample: AnySample | None = Field(None, description="What was observed: the table, its columns, cuts and uncertainties.")
    model: ModelChoice = Field(description="The cosmological model: a name, or {file, name} of one of your own.")
    radiation: bool = Field(False, description="Count photons (2.7255 K) and 3.046 massless neutrinos in the expansion rate.")
    parameters: Parameters = Field(
        default_factory=dict, description="For each parameter a prior, or a number to hold it fixed; those left out have their default."
    )
    sampling: Sampling = Field(default_factory=SamplingSettings, description="How long and from which seed to sample.")
    run_folder: str | None = Field(
        None, description="Where the results go, relative to the working directory; the default is runs/ and the config's name."
    )
    variants: tuple[VariantSettings, ...] = Field(
        (), description="What `mufitter compare` fits side by side: each changes a few keys of this config, which is the base."
    )
    compare: Annotated[CompareSettings, BeforeValidator(_empty_is_default)] = Field(
        default_factory=CompareSettings, description="How `mufitter compare` weighs the variants."
    )
    intervals: Literal["equal_tailed", "highest_density"] = Field(
        "equal_tailed",
        description="How the 68.3 % and 95 % intervals are made: the same probability below as above, or the shortest that holds it.",
    )
    figures: Annotated[FigureSettings, BeforeValidator(_empty_is_default)] = Field(
        default_factory=FigureSettings, description="Which figures a fit draws, how wide, in which formats and style."
    )
    labels: Annotated[Labels, BeforeValidator(_empty_is_default)] = Field(
        default_factory=dict, description="For a parameter another LaTeX symbol, without dollar signs; figures, tables and text follow."
    )
    blind: bool | list[str] = Field(
        False, description="Hide central values until `mufitter unblind`: of every cosmological parameter (true), or of a list of them."
    )
    inputs: dict[str, str] = Field(
        default_factory=dict,
        description="SHA-256 of input files by path, as a run folder records them; a file that has changed since is refused.",
    )

    _document: Document = PrivateAttr(default_factory=lambda: Document({}))
    _folder: Path = PrivateAttr(default_factory=Path.cwd)
    _cosmology: Model | None = PrivateAttr(None)
    _allow_code: bool = PrivateAttr(False)

    @property
    def path(self) -> Path | None:
        """The file the settings came from, or None."""
        return self._document.path

    @property
    def folder(self) -> Path:
        """What the paths of inputs are relative to."""
        return self._folder

    @property
    def style_file(self) -> Path | None:
        """The style sheet of the figures."""
        return None if self.figures.style is None else self.folder / os.path.expanduser(self.figures.style)

    @property
    def document(self) -> Document:
        """The settings as given, with the row of each key."""
        return self._document

    @property
    def cosmology(self) -> Model:
        """The model itself, built in or from a file."""
        return get_model(str(self.model)) if self._cosmology is None else self._cosmology

    @property
    def model_sources(self) -> dict[str, str]:
        """Path → SHA-256 of the file of a model of one's own; empty for a built-in model."""
        return model_source(self.model, self.folder)

    def complete_parameters(self, sample: Sample) -> dict[str, dict | float]:
        """Return every parameter of the fit of a `Sample` with its prior or fixed value."""
        return complete_parameters(self.parameters, self.cosmology, sample.distance_scale, sample.data_kind)

    def default_run_folder(self) -> Path:
        """Return the folder for the results, relative to the working directory."""
        if self.run_folder:
            return Path(os.path.expanduser(self.run_folder))
        return Path("runs") / (self.path.stem if self.path is not None else self.cosmology.name)

    def changed(self, changes: Mapping[str, Any]) -> Config:
        """Return the same settings with sections, or single keys such as ``sampling.seed``, replaced; validated again."""
        from fitter.config.load import valid, validate

        data = dict(self.document.data)
        for key, value in changes.items():
            section, _, name = key.partition(".")
            data[section] = {**(data.get(section) or {}), name: value} if name else value
        config, _, problems = validate(Document(data, self.document.lines, self.path), self.folder, allow_code=self._allow_code)
        return valid(config, problems)
