"""Cuts: which rows are kept, said as data."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeGuard

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import BoolArray, FloatArray
from fitter.errors import InputError
from fitter.sample.settings import Keep, RuleSettings

__all__ = ["CutColumn", "Cuts", "one_per_object"]

_WORDS = ("group", "name")  # roles whose two-element lists are values, not ranges


@dataclass(frozen=True)
class CutColumn:
    """A column as the rules see it.

    Parameters
    ----------
    label : str
        As the config calls it.
    words : (N,) array of str or None
    numbers : callable
        Returns the (N,) numbers; raises InputError where the column holds something else.
    is_redshift : bool
        Whether its cuts spare calibrators.
    """

    label: str
    words: np.ndarray | None
    numbers: Callable[[], np.ndarray]
    is_redshift: bool = False


@dataclass
class Cuts:
    """Applies the rules of a config one after the other.

    Parameters
    ----------
    settings : Keep
    column : callable
        Reference → CutColumn; raises InputError.
    groups : (N,) array of str or None
    is_calibrator : (N,) array of bool
    calibrated : bool
        Whether calibrators pin the absolute magnitude: only then do they need no redshift.
    table : str
        For messages.
    """

    settings: Keep
    column: Callable[[str], CutColumn]
    groups: np.ndarray | None
    is_calibrator: np.ndarray
    calibrated: bool
    table: str
    removed: dict[str, int] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)
    problems: list[InputError] = field(default_factory=list)

    def apply(self) -> np.ndarray:
        """Return the (N,) mask of rows that are kept; fills ``removed``, ``notes`` and ``problems``."""
        kept = np.ones(len(self.is_calibrator), dtype=bool)
        if self.settings.calibrators == "drop":
            kept = self._count("calibrators", kept, ~self.is_calibrator)
        for ref, rule in self.settings.rules.items():
            try:
                column = self.column(ref)
                passes = self._passes(rule, column)
            except InputError as problem:
                self.problems.append(problem)
                continue
            if column.is_redshift and self.calibrated and self.settings.calibrators == "spare":
                passes = passes | self.is_calibrator
            kept = self._count(ref, kept, passes)
        return kept

    def _count(self, label: str, kept: BoolArray, passes: BoolArray) -> BoolArray:
        self.removed[str(label)] = int((kept & ~passes).sum())
        return kept & passes

    def _passes(self, rule: Any, column: CutColumn) -> np.ndarray:
        if isinstance(rule, RuleSettings):
            if rule.range is not None:
                return self._in_range(rule.range, column)
            if rule.one_of is not None:
                return self._is_one_of(rule.one_of, column)
            if rule.exclude is not None:
                return ~self._passes(rule.exclude, column)
            return self._per_group(rule, column)
        if not isinstance(rule, list):
            return self._is_one_of([rule], column)
        if len(rule) == 2 and column.label not in _WORDS and all(v is None or _is_plain_number(v) for v in rule):
            return self._in_range(rule, column)
        return self._is_one_of(rule, column)

    def _in_range(self, bounds: Sequence[float | None], column: CutColumn) -> np.ndarray:
        low = -np.inf if bounds[0] is None else bounds[0]
        high = np.inf if bounds[1] is None else bounds[1]
        if low > high:
            raise InputError(
                "the lower end of the range is above the upper one", key=f"sample.keep.{column.label}", value=list(bounds),
                cure="Write [low, high]",
            )  # fmt: skip
        values = column.numbers()
        return (values >= low) & (values <= high)

    def _is_one_of(self, wanted: Sequence[bool | int | float | str | None], column: CutColumn) -> np.ndarray:
        if None in wanted:
            raise InputError(
                "a list of values cannot hold null", key=f"sample.keep.{column.label}", value=wanted,
                cure="Write a range as [low, high], where null leaves an end open",
            )  # fmt: skip
        passes = np.zeros(len(self.is_calibrator), dtype=bool)
        for value in wanted:
            found = _equal(value, column)
            if not found.any():
                self.notes.append(f"keep: {column.label}: no row of {self.table} has the value {value!r}.{_nearest(value, column)}")
            passes |= found
        return passes

    def _per_group(self, rule: RuleSettings, column: CutColumn) -> np.ndarray:
        if self.groups is None:
            raise InputError(
                "a rule per group needs to know the groups", key=f"sample.keep.{column.label}",
                cure="Map `group` among the columns, e.g. group: SURVEY",
            )  # fmt: skip
        known = np.unique(self.groups)
        others = np.ones(len(self.groups), dtype=bool) if rule.others is None else self._passes(rule.others, column)
        for name, inner in (rule.group or {}).items():
            members = self.groups == name
            if not members.any():
                near = difflib.get_close_matches(name, known.tolist(), n=1)
                hint = f"Did you mean {near[0]}? " if near else ""
                raise InputError(
                    f"no row of {self.table} has this group", key=f"sample.keep.{column.label}", value=name,
                    cure=f"{hint}The groups are: {', '.join(known[:20].tolist())}",
                )  # fmt: skip
            others = np.where(members, self._passes(inner, column), others)
        return others


def _is_plain_number(value: object) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _equal(value: bool | int | float | str | None, column: CutColumn) -> np.ndarray:
    words = column.words
    if isinstance(value, bool):
        forms = ("true", "yes", "t", "1") if value else ("false", "no", "f", "0")
        return np.isin(np.char.lower(words), forms) if words is not None else column.numbers() == float(value)
    matches = np.zeros(0, dtype=bool) if words is None else words == str(value)
    if _is_plain_number(value):
        try:
            numeric = column.numbers() == float(value)
        except InputError:
            return matches
        return numeric if words is None else matches | numeric
    return matches if words is not None else np.zeros(len(column.numbers()), dtype=bool)


def _nearest(value: object, column: CutColumn) -> str:
    if column.words is None:
        return ""
    near = difflib.get_close_matches(str(value), np.unique(column.words)[:10_000].tolist(), n=1)
    return f" Did you mean {near[0]}?" if near else ""


def one_per_object(objects: NDArray[np.str_], variance: FloatArray) -> np.ndarray:
    """Return the mask that keeps, of the rows with the same word, the one with the smallest variance.

    Rows without a word are objects of their own; of equal variances the first is kept.
    """
    order = np.lexsort((np.arange(len(objects)), variance, objects))
    ordered = objects[order]
    first = np.ones(len(order), dtype=bool)
    first[1:] = (ordered[1:] != ordered[:-1]) | (ordered[1:] == "")
    mask = np.zeros(len(order), dtype=bool)
    mask[order[first]] = True
    return mask
