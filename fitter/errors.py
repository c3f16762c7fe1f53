"""Errors that a user can act on: each says where, what, and the cure."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from os import PathLike

__all__ = ["InputError", "InputErrors", "MufitterError", "in_yaml"]


class MufitterError(Exception):
    """Base of every error that mufitter raises on purpose."""

    exit_code = 3


class InputError(MufitterError):
    """Something the user gave is wrong.

    Parameters
    ----------
    problem : str
        What is wrong, in one sentence, with the value that was expected.
    file : path-like, optional
        The file it stands in.
    row : int, optional
        Line number in that file (1 is the first line), or 1-based matrix row.
    column : str or int, optional
        Column of a table or of a matrix.
    key : str, optional
        Dotted key of a config.
    value : object, optional
        The offending value, as it was read.
    cure : str, optional
        What the user can do about it.
    """

    exit_code = 2

    def __init__(
        self,
        problem: str,
        *,
        file: str | PathLike[str] | None = None,
        row: int | None = None,
        column: str | int | None = None,
        key: str | None = None,
        value: object = None,
        cure: str | None = None,
    ) -> None:
        self.problem, self.file, self.row = problem, file, row
        self.column, self.key, self.value, self.cure = column, key, value, cure
        super().__init__(str(self))

    def __reduce__(self) -> tuple[Any, ...]:
        # Keyword-only arguments do not survive the default pickling of exceptions,
        # and these errors cross process borders.
        where = {k: getattr(self, k) for k in ("file", "row", "column", "key", "value", "cure")}
        return _rebuild, (type(self), self.problem, where)

    def __str__(self) -> str:
        place = [str(self.file)] if self.file is not None else []
        place += [f"row {self.row}"] if self.row is not None else []
        place += [f"column {self.column}"] if self.column is not None else []
        place += [f"key {self.key}"] if self.key is not None else []
        text = f"{', '.join(place)}: {self.problem}" if place else self.problem
        if self.value is not None:
            text += f" (found {in_yaml(self.value)})"
        if self.cure is not None:
            text += f". {self.cure}"
        return text


def in_yaml(value: object) -> str:
    """Write a value as a config would hold it where that is not what Python writes: a prior as ``{uniform: [0, 1]}``."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {in_yaml(inner)}" for key, inner in value.items()) + "}"
    return repr(value)


def _rebuild(kind: type[InputError], problem: str, where: dict[str, Any]) -> InputError:
    return kind(problem, **where)


class InputErrors(InputError):
    """Several input errors found in one pass; ``errors`` holds them in order."""

    def __init__(self, errors: Sequence[InputError]) -> None:
        self.errors = tuple(errors)
        super().__init__("\n".join(str(e) for e in self.errors))

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.errors,)
