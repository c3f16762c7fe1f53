"""The `model:` key: the name of a built-in model, or a file with one of the user's own, which runs only with leave."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path
from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, WithJsonSchema
from pydantic_core import PydanticKnownError

from fitter.config.yaml_file import Document
from fitter.cosmology import MODELS, Model, get_model
from fitter.errors import InputError

__all__ = ["ModelChoice", "OwnModel", "chosen_model", "model_source"]


def _known_model(name: str) -> str:
    if name not in MODELS:
        raise PydanticKnownError("literal_error", {"expected": ", ".join(f"'{m}'" for m in MODELS)})
    return name


class OwnModel(BaseModel):
    """A model from a Python file; needs --allow-code."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: str = Field(min_length=1, description="Python file with the model's class; its path is relative to the config.")
    name: str | None = Field(None, description="Name of the model; not needed where the file has only one.")


ModelName = Annotated[str, AfterValidator(_known_model), WithJsonSchema({"type": "string", "enum": list(MODELS)})]
ModelChoice = ModelName | OwnModel


def chosen_model(document: Document, folder: Path, allow_code: bool) -> tuple[Model | None, list[InputError]]:
    """Return the model that a document names, or None, and what is wrong where code is concerned.

    Parameters
    ----------
    document : Document
    folder : Path
        What the file's path is relative to.
    allow_code : bool
        Whether a file of code may be run.
    """
    given = document.data.get("model")
    if isinstance(given, str):
        return (get_model(given), []) if given in MODELS else (None, [])
    if not isinstance(given, dict) or not isinstance(given.get("file"), str) or not isinstance(given.get("name"), str | None):
        return None, []
    keys = ("model", "file")
    if not allow_code:
        cure = "Read the file; if you trust it, say --allow-code (in Python, allow_code=True)"
        return None, [document.error("this config wants to run code of its own", keys, value=given["file"], cure=cure)]
    from fitter.likelihood.own_model import load_model

    try:
        return load_model(folder / os.path.expanduser(given["file"]), given.get("name")), []
    except InputError as error:
        return None, [error]


def model_source(choice: str | OwnModel, folder: Path) -> dict[str, str]:
    """Return {path: SHA-256} of a model's own file, empty for a built-in one."""
    if isinstance(choice, str):
        return {}
    content = (folder / os.path.expanduser(choice.file)).read_bytes()
    return {choice.file: hashlib.sha256(content).hexdigest()}
