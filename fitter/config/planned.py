"""The config of a survey that does not exist yet: a table of redshifts and errors without moduli, for `mufitter rehearse`."""

from __future__ import annotations

from dataclasses import replace

from fitter.config.yaml_file import Document
from fitter.sample.settings import Columns

__all__ = ["with_stand_in"]

_DATA = ("distance_modulus", "magnitude")


def with_stand_in(document: Document) -> Document | None:
    """Return the settings with the redshift in place of the moduli, or None where there are data.

    Any number will do, since every mock brings its own. A key of ``columns`` that is none may be a misspelt one of the data: then it is for
    the usual checks.
    """
    sample = document.data.get("sample")
    columns = sample.get("columns") if isinstance(sample, dict) else None
    if (
        not isinstance(sample, dict)
        or not isinstance(columns, dict)
        or "redshift" not in columns
        or set(_DATA) & set(columns)
        or set(columns) - set(Columns.model_fields)
    ):
        return None
    role = "magnitude" if "calibrator_modulus" in columns else "distance_modulus"
    return replace(document, data={**document.data, "sample": {**sample, "columns": {**columns, role: columns["redshift"]}}})
