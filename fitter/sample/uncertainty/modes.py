"""Systematics as one-sigma shifts of all distances: never an N×N matrix."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any, ClassVar

import numpy as np
from pydantic import Field

from fitter.errors import InputError
from fitter.sample.uncertainty.base import ColumnRef, PathText, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["LARGEST_SHIFT", "Modes"]

LARGEST_SHIFT = 5.0  # mag


class Modes(TermSettings):
    """k systematics, each a column of shifts (mag) for a change of one sigma."""

    kind: ClassVar[str] = "modes"
    example: ClassVar[str] = "{modes: shifts.csv}"

    modes: PathText | Annotated[list[ColumnRef], Field(min_length=1)] = Field(
        description="File with a column of one-sigma shifts (mag) per systematic, or a list of such columns of the table."
    )
    use: Annotated[list[ColumnRef], Field(min_length=1)] | None = Field(None, description="Columns of that file to use; all by default.")

    def columns(self) -> dict[str, Any]:
        return {"numbers": list(self.modes)} if isinstance(self.modes, list) else {}

    def files(self) -> list[str]:
        return [] if isinstance(self.modes, list) else [self.modes]

    def default_label(self) -> str:
        return self.kind if isinstance(self.modes, list) else Path(self.modes.removesuffix(".gz")).stem

    def build(self, rows: Rows) -> Term:
        names: Sequence[str | int]
        if isinstance(self.modes, list):
            names, shifts, lines = self.modes, np.column_stack([rows.numbers(c) for c in self.modes]), rows.lines
            place = rows.table
        else:
            from fitter.sample.tables import read_numbers, sha256_of

            names, shifts, lines = read_numbers(rows.path(self.modes), use=self.use, shown=self.modes)
            rows.sources[self.modes] = sha256_of(rows.path(self.modes))
            place = self.modes
        kept = int(rows.keep.sum())
        if len(shifts) not in (rows.n, kept):
            raise InputError(
                f"the modes have {len(shifts)} rows, but the table {rows.table} has {rows.n}",
                file=place,
                cure="Give one row per row of the table, in the same order",
            )
        if len(shifts) == kept != rows.n:
            rows.notes.append(
                f"{place} has {kept} rows, the number that the cuts leave of {rows.n} in the table: they are taken to follow the rows "
                "that are kept."
            )
        if len(shifts) == rows.n and not rows.keep.all():
            shifts, lines = shifts[rows.keep], lines[rows.keep]
        bad = ~np.isfinite(shifts)
        if bad.any():
            row, column = np.argwhere(bad)[0]
            raise InputError(
                "a shift must be a finite number",
                file=place,
                row=int(lines[row]),
                column=names[column],
                value=float(shifts[row, column]),
                cure="Write 0 where a systematic does not touch a supernova",
            )
        large = np.abs(shifts).max(axis=0) > LARGEST_SHIFT
        if large.any():
            column = int(np.argmax(large))
            row = int(np.argmax(np.abs(shifts[:, column])))
            raise InputError(
                f"a one-sigma shift above {LARGEST_SHIFT:g} mag is no systematic",
                file=place,
                row=int(lines[row]),
                column=names[column],
                value=float(shifts[row, column]),
                cure="Where the column is no shift, list those that are: `use: [COLUMN, …]`",
            )
        return self.term(rows.noise(modes=shifts, mode_names=tuple(str(n) for n in names), source=place, rows=lines))
