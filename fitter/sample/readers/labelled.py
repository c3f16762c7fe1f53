"""Text matrices with labels: a row of names or of an index above the numbers, a column of them beside."""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from itertools import islice
from pathlib import Path

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.sample.files import open_binary
from fitter.sample.readers.numbers import is_number, plain_number

__all__ = ["read_labelled"]

_COMMENTS = ("#", "%", "!")
_LONGEST_LINE = 1 << 23
_FEWEST_COUNTED = 5  # 1 2 3 might be the first row of a matrix, but not 1 2 3 4 5


def read_labelled(path: Path, sizes: Sequence[int], shown: str) -> tuple[FloatArray, list[str] | None] | None:
    """Read a labelled square matrix.

    Labels are words, or whole numbers that count up by one.

    Returns
    -------
    (matrix, labels) or None
        None where the file has no labels. labels: those of the rows, or else of the columns.

    Raises
    ------
    InputError
        A row has another length, holds no number, or the labels of rows and columns differ.
    """
    first, second = [*(fields for _, fields in islice(_rows(path), 2)), [], []][:2]
    for n in (n for n in sizes if n > 1):
        header = _labels(first, n)
        beside = len(second) == n + 1 and (header is not None or _is_label(second[0]))
        if (header is not None and len(second) in (n, n + 1)) or (beside and len(first) == n + 1 and _is_label(first[0])):
            return _read(path, n, header, beside, shown)
    return None


def _labels(fields: list[str], n: int) -> list[str] | None:
    """The n labels of a header, without its corner; None where it is a row of numbers."""
    if len(fields) not in (n, n + 1):
        return None
    labels = fields[-n:]
    if all(_is_label(label) for label in labels):
        return labels
    whole = [int(label) if label.isdigit() else -1 for label in labels]
    counted = n >= _FEWEST_COUNTED and whole[0] in (0, 1) and whole == list(range(whole[0], whole[0] + n))
    return labels if counted else None


def _is_label(field: str) -> bool:
    return field != "" and not is_number(field, decimal_comma=True)


def _rows(path: Path) -> Iterator[tuple[int, list[str]]]:
    """Line number and fields of the lines that are neither empty nor comments."""
    with open_binary(path) as binary, io.TextIOWrapper(binary, encoding="utf-8-sig", errors="replace") as text:
        for number, line in enumerate(iter(lambda: text.readline(_LONGEST_LINE), ""), 1):
            if line.strip() and not line.lstrip().startswith(_COMMENTS):
                mark = next((m for m in (",", ";", "\t") if m in line), None)
                yield number, [f.strip().strip("\"'") for f in (line.rstrip("\r\n").split(mark) if mark else line.split())]


def _read(path: Path, n: int, header: list[str] | None, beside: bool, shown: str) -> tuple[FloatArray, list[str]]:
    matrix, labels, count = np.empty((n, n)), [], 0
    for number, fields in islice(_rows(path), int(header is not None), None):
        if len(fields) != n + beside or count == n:
            what = f"more than {n} rows" if count == n else f"{len(fields) - beside} numbers in this row, not {n}"
            raise InputError(f"the labelled matrix has {what}", file=shown, row=number, cure="Check that the file is whole")
        labels.append(fields[0])
        for column, word in enumerate(fields[beside:]):
            try:
                matrix[count, column] = float(plain_number(word))
            except ValueError:
                raise InputError("this is not a number", file=shown, row=number, column=column + 1 + beside, value=word[:40]) from None
        count += 1
    if count < n:
        raise InputError(f"the labelled matrix has {count} rows, not {n}", file=shown, cure="Check that the file is whole")
    if not beside and header is not None:
        labels = header
    if header is not None and labels != header:
        at = next(i for i in range(n) if labels[i] != header[i])
        raise InputError(
            f"rows and columns of the matrix are in another order: label {at + 1} is {labels[at]!r} and {header[at]!r}", file=shown,
            cure="Write both in the order of the table",
        )  # fmt: skip
    return matrix, labels
