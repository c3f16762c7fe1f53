"""A covariance matrix from a file."""

from __future__ import annotations

from pathlib import Path
from typing import ClassVar

import numpy as np
from pydantic import Field

from fitter.array_types import FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.uncertainty.base import PathText, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["Covariance", "MatrixSettings"]


class MatrixSettings(TermSettings):
    """What a covariance and a precision share: an N×N matrix in a file."""

    array: str | None = Field(None, description="Name of the array in an .npz file that holds several.")

    def default_label(self) -> str:
        path = str(getattr(self, self.kind))
        return Path(path.removesuffix(".gz")).stem

    def files(self) -> list[str]:
        return [getattr(self, self.kind)]

    def read(self, rows: Rows) -> tuple[FloatArray, IntArray]:
        """Return the matrix, symmetric, and the row of the file that each of its rows stands in.

        A matrix that already has the size of the cut table is taken as it is.
        """
        from fitter.sample.matrices import read_matrix
        from fitter.sample.tables import sha256_of

        given = getattr(self, self.kind)
        path = rows.path(given)
        kept = int(rows.keep.sum())
        matrix = read_matrix(
            path, sizes=(rows.n, kept), what=self.kind, array=self.array, table=rows.table, shown=given,
            bordered=rows.bordered and given == rows.table, on_labels=lambda labels: self._check_labels(labels, rows, given),
        )  # fmt: skip
        rows.sources[given] = sha256_of(path)
        if len(matrix) == rows.n:
            return matrix, np.arange(1, rows.n + 1)[rows.keep]
        rows.notes.append(
            f"{given} is {kept} × {kept}, the number of rows that the cuts leave of {rows.n} in the table: its rows are taken to follow "
            "the rows that are kept."
        )
        return matrix, np.arange(1, kept + 1)

    def _check_labels(self, labels: list[str], rows: Rows, given: str) -> None:
        """Refuse a matrix whose labels are the names of the table in another order; tell of labels that say nothing."""
        if all(label.isdigit() for label in labels):
            return
        names = None if rows.names is None else (rows.names if len(labels) == rows.n else rows.names[rows.keep]).tolist()
        if names is None or not set(labels) & set(names):
            rows.notes.append(
                f"The labels of {given} ({labels[0]}, …) are no names of the table: its rows are taken to follow those of the table. Map "
                "`name` to the column that holds them, and the order is checked."
            )
        elif labels != names:
            at = next(i for i, pair in enumerate(zip(labels, names, strict=True)) if pair[0] != pair[1])
            raise InputError(
                f"its rows do not follow those of {rows.table}: label {at + 1} is {labels[at]!r}, but the table has {names[at]!r} there",
                file=given, row=at + 1, cure="Write matrix and table in the same order",
            )  # fmt: skip


class Covariance(MatrixSettings):
    """An N×N covariance, mag², in a file."""

    kind: ClassVar[str] = "covariance"
    example: ClassVar[str] = "{covariance: systematics.txt, label: calibration}"

    covariance: PathText = Field(description="File of an N × N covariance, mag².")

    def build(self, rows: Rows) -> Term:
        from fitter.sample.matrices import compact

        matrix, in_file = self.read(rows)
        if len(matrix) == rows.n:
            matrix = compact(matrix, rows.keep)
        return self.term(rows.noise(dense=matrix, source=self.covariance, rows=in_file))
