"""An offset common to each group of supernovae, e.g. the calibration of a survey."""

from __future__ import annotations

import difflib
from typing import Annotated, ClassVar

import numpy as np
from pydantic import BeforeValidator, Field

from fitter.errors import InputError
from fitter.sample.uncertainty.base import ColumnRef, Positive, Rows, TermSettings
from fitter.sample.uncertainty.term import Term

__all__ = ["ZeroPoint"]


def _words_as_keys(value: object) -> object:
    # YAML reads a survey that is called 50 as a number.
    return {str(k): v for k, v in value.items()} if isinstance(value, dict) else value


PerGroup = Annotated[dict[str, Positive], BeforeValidator(_words_as_keys), Field(min_length=1)]


class ZeroPoint(TermSettings):
    """One mode per group: 1 for its members, times the one-sigma error of its zero point."""

    kind: ClassVar[str] = "zero_point"
    example: ClassVar[str] = "{zero_point: group, sigma: 0.02}"

    zero_point: ColumnRef = Field(description="`group`, or the column whose values tell the groups apart.")
    sigma: Positive | PerGroup = Field(description="One-sigma error of each group's zero point, mag; or {GROUP: error} for some groups.")

    def columns(self) -> dict[str, list[str | int]]:
        return {"texts": [self.zero_point]}

    def build(self, rows: Rows) -> Term:
        group = rows.texts(self.zero_point)
        kept = group[rows.keep]
        present = np.unique(kept).tolist()
        if isinstance(self.sigma, dict):
            self._check_groups(self.sigma, np.unique(group).tolist(), rows)
            sigma = {name: value for name, value in self.sigma.items() if name in present}
        else:
            sigma = dict.fromkeys(present, self.sigma)
        modes = np.column_stack([(kept == name) * value for name, value in sigma.items()]) if sigma else np.empty((len(kept), 0))
        return self.term(rows.noise(modes=modes, mode_names=tuple(f"zero_point:{name}" for name in sigma)))

    def _check_groups(self, named: dict[str, float], known: list[str], rows: Rows) -> None:
        for name in named:
            if name not in known:
                near = difflib.get_close_matches(name, known, n=1)
                hint = f"Did you mean {near[0]}? " if near else ""
                raise InputError(
                    "zero_point names a group that no row has",
                    file=rows.table,
                    column=self.zero_point,
                    value=name,
                    cure=f"{hint}The groups are: {', '.join(known[:20])}",
                )
