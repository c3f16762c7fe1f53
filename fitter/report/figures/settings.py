"""Settings of the figures: what the ``figures:`` section of a config may hold."""

from __future__ import annotations

import math
from typing import Annotated, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, field_validator

__all__ = ["FIGURES", "FORMATS", "FigureSettings", "Labels", "label_problem"]

FIGURES = ("corner", "planes", "hubble", "residuals", "history", "correlation", "budget", "chains")
FORMATS = ("pdf", "png", "svg", "eps")
FigureName = Literal["corner", "planes", "hubble", "residuals", "history", "correlation", "budget", "chains"]


class FigureSettings(BaseModel):
    """How figures are drawn, and which of them a fit draws by itself; `mufitter figures` draws the others from the run folder."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    only: list[FigureName] = Field(default=["corner", "hubble"], description="Which figures a fit draws; all with their captions.")
    width: Literal["single", "double"] | float | None = Field(
        default=None, description="One or two journal columns (3.5, 7.1 inches) or a number of inches; each figure has its own default."
    )
    formats: list[Literal["pdf", "png", "svg", "eps"]] = Field(default=["pdf", "png"], min_length=1, description="Files of each figure.")
    style: str | None = Field(default=None, min_length=1, description="A matplotlib style sheet laid over ours, relative to the config.")
    parameters: list[str] | None = Field(
        default=None, min_length=1, description="Parameters of the corner plot and the chains, in this order; the main ones by default."
    )
    mark: dict[str, float] = Field(
        default_factory=dict, description="Values marked by lines in corner plot and planes, e.g. a known truth."
    )
    models: list[Literal["no_dark_energy", "empty", "matter_only"]] = Field(
        default=["no_dark_energy", "empty", "matter_only"], description="Models drawn beside the best fit in the Hubble diagram."
    )

    @field_validator("only", "formats", "parameters", "models", mode="before")
    @classmethod
    def _one_is_a_list(cls, value: object) -> object:
        return [value] if isinstance(value, str) else value

    @field_validator("width")
    @classmethod
    def _printable(cls, value: str | float | None) -> str | float | None:
        if isinstance(value, float) and not 1 <= value <= 30:
            raise ValueError("a width must lie between 1 and 30 inches")
        return value

    @field_validator("mark")
    @classmethod
    def _finite(cls, value: dict[str, float]) -> dict[str, float]:
        for name, number in value.items():
            if not math.isfinite(number):
                raise ValueError(f"the value of {name} must be a finite number")
        return value


def label_problem(symbol: str) -> str | None:
    """Return what is wrong with a LaTeX symbol given by a user, as far as it shows without setting it."""
    if not symbol.strip():
        return "a symbol cannot be empty"
    if "$" in symbol.replace(r"\$", ""):
        return "a symbol is written without dollar signs"
    depth = 0
    for c in symbol.replace(r"\{", "").replace(r"\}", ""):
        depth += (c == "{") - (c == "}")
        if depth < 0:
            break
    return "the braces of this symbol do not match" if depth else None


def _checked(labels: dict[str, str]) -> dict[str, str]:
    for name, symbol in labels.items():
        if problem := label_problem(symbol):
            raise ValueError(f"{name}: {problem}")
    return labels


Labels = Annotated[dict[str, str], AfterValidator(_checked)]
