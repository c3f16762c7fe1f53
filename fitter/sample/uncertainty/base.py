"""The common interface of the uncertainty terms.

A term is one file: its settings (a pydantic model, one item of the ``uncertainty:`` list) with a method ``build`` that turns them and the
table's rows into a `Term`. A new one is listed in ``uncertainty/__init__.py``; nothing else needs to know it.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, ClassVar

import numpy as np
from pydantic import AfterValidator, BaseModel, ConfigDict, Field

from fitter.array_types import FloatArray, IntArray
from fitter.sample.noise import Noise
from fitter.sample.uncertainty.term import Term

__all__ = ["ColumnRef", "FreeOrFixed", "PathText", "Positive", "Prior", "Rows", "TermSettings", "is_free"]


def _one_prior(value: dict) -> dict:
    if len(value) != 1:
        raise ValueError("a prior is one name and its numbers, e.g. {uniform: [0, 0.5]}")
    return value


ColumnRef = Annotated[int, Field(strict=True, ge=0)] | Annotated[str, Field(strict=True, min_length=1)]
PathText = Annotated[str, Field(strict=True, min_length=1)]
Positive = Annotated[float, Field(strict=True, gt=0, allow_inf_nan=False)]
Prior = Annotated[dict[str, list[Annotated[float, Field(strict=True, allow_inf_nan=False)]]], AfterValidator(_one_prior)]
FreeOrFixed = Positive | Prior


def is_free(value: object) -> bool:
    """Whether a setting is a prior, so that it is fitted, and not a number."""
    return isinstance(value, Mapping)


@dataclass(frozen=True)
class Rows:
    """What a term may build on: the rows of the table before any cut.

    Parameters
    ----------
    n : int
        Number of rows, N.
    redshift : (N,) array
        Cosmological redshift; NaN for calibrators, and maybe in rows that are cut later.
    numbers : callable
        Column reference → (N,) array of its numbers.
    texts : callable
        Column or role reference → (N,) array of its words.
    lines : (N,) array of int
        Line of the table that each row stands in.
    keep : (N,) bool array
        The rows that the cuts leave.
    folder : Path
        Paths of matrices are relative to it.
    table : str
        The table's path, for messages.
    sources : dict
        Path → SHA-256; a term adds the files that it reads.
    notes : list
        Warnings; a term adds its own.
    names : (N,) array of str or None
        Names of the supernovae.
    bordered : bool
        Whether the table is the border of a matrix.
    """

    n: int
    redshift: np.ndarray
    numbers: Callable[[Any], np.ndarray]
    texts: Callable[[Any], np.ndarray]
    lines: np.ndarray
    keep: np.ndarray
    folder: Path
    table: str
    sources: dict[str, str] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)
    names: np.ndarray | None = None
    bordered: bool = False

    def path(self, given: str) -> Path:
        """Return where a file of the config lies."""
        return self.folder / os.path.expanduser(given)

    def noise(self, variance: FloatArray | None = None, rows: IntArray | None = None, **parts: Any) -> Noise:
        """Return the share of a term, for the rows that are kept; ``variance`` is given for all rows."""
        kept = np.zeros(int(self.keep.sum())) if variance is None else np.asarray(variance, dtype=float)[self.keep]
        parts.setdefault("source", self.table)
        return Noise(kept, source_rows=self.lines[self.keep] if rows is None else rows, **parts)


class TermSettings(BaseModel):
    """One item of ``uncertainty:``; subclasses add the key that names the term."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    kind: ClassVar[str]
    example: ClassVar[str]

    label: str | None = Field(None, min_length=1, description="What this term is called in results and studies.")

    def columns(self) -> dict[str, list]:
        """References to columns of the table that the term needs, under "numbers" and "texts"."""
        return {}

    def files(self) -> list[str]:
        """Paths, as given, of the files that the term reads."""
        return []

    def build(self, rows: Rows) -> Term | None:
        """Return the term for the rows that are kept; None where it is a free parameter and adds nothing fixed.

        Raises
        ------
        InputError
            Something that the term reads is wrong.
        """
        raise NotImplementedError

    def default_label(self) -> str:
        """Return the label used where none is given."""
        return self.kind

    def term(self, noise: Noise) -> Term:
        """Return a share of the covariance under this term's label."""
        return Term(self.label or self.default_label(), self.kind, noise)
