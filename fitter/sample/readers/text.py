"""Text tables: CSV, tab or whitespace, gzipped or not."""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Literal

import numpy as np

from fitter.errors import InputError
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.layout import WHITESPACE, Layout, TextOptions, find_layout, split_fields
from fitter.sample.readers.numbers import MISSING, to_numbers
from fitter.sample.tables import Columns, Table

__all__ = ["read_text"]


def read_text(
    path: Path,
    options: TextOptions,
    *,
    numbers: Sequence = (),
    texts: Sequence = (),
    required: Sequence = (),
    everything: bool = False,
    shown: str,
) -> Table:
    """Read the columns of a text table that are asked for.

    Parameters
    ----------
    path : Path
    options : TextOptions
    numbers, texts : sequences of str or int
        Columns by name or position, wanted as numbers or as words.
    required : sequence of str or int
        Those for which every row must have a field, empty or not.
    everything : bool
        All columns as numbers, in the order of the table; all are required.
    shown : str
        The path as messages should give it.

    Returns
    -------
    Table
        A column that is missing or holds something else raises only when it is asked for.
    """
    layout = find_layout(path, options, [*numbers, *texts], shown)
    columns = Columns(layout.names, layout.n_columns, shown)
    as_numbers = list(range(layout.n_columns)) if everything else columns.known(numbers)
    as_texts = columns.known(texts)
    in_each = [p for p in as_numbers if columns.label(p) != ""] if everything else columns.known(required)
    with reading(path, shown):
        _check_lengths(path, layout, max(in_each, default=-1) + 1, shown, options)
        return _read(path, layout, columns, sorted(set(as_numbers)), sorted(set(as_texts)), shown, options)


def _read(
    path: Path, layout: Layout, columns: Columns, as_numbers: list[int], as_texts: list[int], shown: str, options: TextOptions
) -> Table:
    needed = sorted({*as_numbers, *as_texts})
    try:
        found = _parse(path, layout, options, as_numbers, needed)
    except (ValueError, IndexError):  # a field is no number, or pandas trips over rows of unequal length
        found = _split(path, layout, options, needed)
    floats, problems = {}, {}
    for position in as_numbers:
        values = found[position]
        if values.dtype != np.float64:
            values, problem = to_numbers(values, layout.lines, columns.label(position), shown)
            if problem is not None:
                problems[position] = problem
        floats[position] = values
    words = {p: np.array([_word(w) for w in found[p]], dtype=str) for p in as_texts}
    return Table(columns, layout.lines, floats, words, problems, layout.note)


def _word(value: object) -> str:
    """A field as a word; a column that is wanted as numbers too comes as those."""
    return value.strip() if isinstance(value, str) else f"{value:.12g}"


def _rows(path: Path, layout: Layout, options: TextOptions) -> Iterator[str]:
    """The data rows one by one, without their tag."""
    skip = np.zeros(len(layout.skip) + len(layout.lines), dtype=bool)
    skip[layout.skip] = True
    tag = options.row_tag
    with io.TextIOWrapper(open_binary(path), encoding=layout.encoding) as text:
        for skipped, line in zip(skip.tolist(), text, strict=True):
            if skipped:
                continue
            line = line.strip("\r\n") if tag is None else line.strip("\r\n").lstrip()[len(tag) :].lstrip(" ")
            yield line if tag is None or layout.delimiter == WHITESPACE else line.removeprefix(layout.delimiter)


def _check_lengths(path: Path, layout: Layout, least: int, shown: str, options: TextOptions) -> None:
    """Refuse rows that are too long, and those that are too short: for `least` columns, or at all where a gap shifts the columns."""
    n, delimiter = layout.n_columns, layout.delimiter
    for line, text in zip(layout.lines, _rows(path, layout, options), strict=True):
        count = len(text.split()) if delimiter == WHITESPACE else text.count(delimiter) + 1
        plain = delimiter == WHITESPACE or '"' not in text  # a delimiter in quotes is none
        if plain and (count == n or (least <= count < n and delimiter != WHITESPACE)):
            continue
        fields = split_fields(text, delimiter)
        if len(fields) == n or (delimiter != WHITESPACE and len(fields) >= least and not any(fields[n:])):
            continue  # or spare delimiters at the end
        others = "the other lines have" if layout.names is None else "the header has"
        raise InputError(
            f"this line has {len(fields)} fields, {others} {n}", file=shown, row=int(line), value=text[:60],
            cure=f"{_gap(len(fields) < n, delimiter)}; set `delimiter` if columns are separated otherwise, `comment` if it ends in one",
        )  # fmt: skip


def _gap(is_short: bool, delimiter: str) -> str:
    if not is_short:
        return "Remove what is too much, or put text that holds the delimiter in quotes"
    return (
        "Fill in what is missing, or write `nan` for it"
        if delimiter == WHITESPACE
        else f"Fill in what is missing, or leave its field empty: two {delimiter!r} in a row"
    )


def _parse(path: Path, layout: Layout, options: TextOptions, as_numbers: list[int], needed: list[int]) -> dict[int, np.ndarray]:
    """Read the columns with pandas, numbers as float64; ValueError where a field is none."""
    import pandas as pd

    if layout.tagged and layout.delimiter != WHITESPACE:
        return _split(path, layout, options, needed)
    names = ["tag"] * layout.tagged + [f"column {p}" for p in range(layout.n_columns)]  # words: pandas takes whole numbers for positions
    chosen = {p: f"column {p}" for p in needed}
    # Correctly rounded numbers are the default of newer releases of pandas, which warn when they are asked for.
    exact: Literal["round_trip"] | None = "round_trip" if tuple(map(int, pd.__version__.split(".")[:2])) < (3, 1) else None
    missing = sorted({form for token in MISSING for form in (token, token.upper(), token.capitalize())} | {"NaN"})
    with io.TextIOWrapper(open_binary(path), encoding=layout.encoding) as source:
        frame = pd.read_csv(
            source,
            sep=layout.delimiter,
            header=None,
            names=names,
            usecols=list(chosen.values()),
            dtype={name: (np.float64 if p in as_numbers else object) for p, name in chosen.items()},
            skiprows=layout.skip.tolist(),
            keep_default_na=False,
            na_values={chosen[p]: missing for p in as_numbers},
            skipinitialspace=layout.delimiter != WHITESPACE,
            float_precision=exact,
            index_col=False,
            engine="c",
        )
    if len(frame) != len(layout.lines):
        raise ValueError("a quotation mark is not closed")
    return {p: frame[c].to_numpy() if p in as_numbers else frame[c].fillna("").to_numpy(dtype=object) for p, c in chosen.items()}


def _split(path: Path, layout: Layout, options: TextOptions, needed: list[int]) -> dict[int, np.ndarray]:
    """Read the columns as words, line by line."""
    found: dict[int, list[str]] = {p: [] for p in needed}
    for text in _rows(path, layout, options):
        fields = split_fields(text, layout.delimiter)
        for position, words in found.items():
            words.append(fields[position] if position < len(fields) else "")
    return {p: np.array(words, dtype=object) for p, words in found.items()}
