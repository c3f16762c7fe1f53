"""The `variants:` of a comparison: each is the base config with a few keys changed."""

from __future__ import annotations

import re
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field, field_validator

from fitter.config.model_choice import ModelChoice

__all__ = ["CompareSettings", "VariantSettings", "folder_name"]


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class VariantSettings(_Section):
    """What one variant changes."""

    name: str = Field(min_length=1, description="What the variant is called in tables and figures.")
    model: ModelChoice | None = Field(None, description="Another model.")
    radiation: bool | None = Field(None, description="With or without radiation.")
    parameters: dict[str, Any] = Field(
        default_factory=dict, description="Priors and fixed values that replace those of the base; the base's others stay."
    )
    keep: dict[str, Any] | None = Field(None, description="Cuts that replace those of the base with the same key, or add to them.")
    uncertainty: list[Any] | None = Field(None, description="Another list of uncertainty terms.")
    without: list[str] = Field(default_factory=list, description="Labels of uncertainty terms to leave out.")
    sampling: dict[str, Any] = Field(default_factory=dict, description="Sampling settings that replace those of the base.")


class CompareSettings(_Section):
    """How variants are weighed."""

    reference: str | None = Field(None, description="The variant that differences are taken from; the first by default.")
    scale: Literal["kass_raftery", "jeffreys"] = Field("kass_raftery", description="Whose words are used for odds.")
    average: bool = Field(False, description="Add constraints averaged over the variants, weighted by their evidence.")

    @field_validator("scale", mode="before")
    @classmethod
    def _plain(cls, value: object) -> object:
        return value.lower().replace("-", "_").replace(" ", "_") if isinstance(value, str) else value


def folder_name(position: int, name: str) -> str:
    """Return a variant's folder: its number and what is left of its name without special characters."""
    plain = re.sub(r"[^A-Za-z0-9.]+", "_", name).strip("_.")
    return f"{position + 1}_{plain}" if plain else str(position + 1)
