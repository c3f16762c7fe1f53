"""Uncorrelated errors from a column of the table."""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field

from fitter.array_types import BoolArray
from fitter.errors import InputError
from fitter.sample.uncertainty.base import ColumnRef, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["LARGEST_ERROR", "Sigma"]

LARGEST_ERROR = 1e6  # mag; some releases write large errors for rows that are not to count, none as large as this


class Sigma(TermSettings):
    """A column of one-sigma errors, mag."""

    kind: ClassVar[str] = "sigma"
    example: ClassVar[str] = "{sigma: MUERR}"

    sigma: ColumnRef = Field(description="Column of the one-sigma errors, mag.")

    def columns(self) -> dict[str, list[ColumnRef]]:
        return {"numbers": [self.sigma]}

    def build(self, rows: Rows) -> Term:
        sigma = rows.numbers(self.sigma)
        bad = rows.keep & ~((sigma >= 0) & (sigma <= LARGEST_ERROR))
        if bad.any():
            row = int(bad.argmax())
            raise InputError(
                f"an error must be a finite number, 0 or more, and not above {LARGEST_ERROR:g} mag{_others(bad)}",
                file=rows.table,
                row=int(rows.lines[row]),
                column=self.sigma,
                value=float(sigma[row]),
                cure="Correct it, or cut the row with `keep:`",
            )
        return self.term(rows.noise(sigma**2))


def _others(bad: BoolArray) -> str:
    count = int(bad.sum()) - 1
    return f", here and in {count} more {'rows' if count > 1 else 'row'}" if count else ""
