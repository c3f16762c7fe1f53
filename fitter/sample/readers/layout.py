"""Finding out how a text table is laid out: comments, header, tags, delimiter; which line each row stands in."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from fitter.errors import InputError
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.numbers import MISSING, is_number

__all__ = ["WHITESPACE", "Layout", "TextOptions", "find_layout", "split_fields"]

WHITESPACE = r"\s+"
_COMMENTS = ("#", "%", "!", "//")
_WORDS = {"whitespace": WHITESPACE, "space": WHITESPACE, " ": WHITESPACE, "tab": "\t", "\\t": "\t", "comma": ",", "semicolon": ";"}
_CANDIDATES = ("\t", ";", "|", ",", WHITESPACE)  # in this order where nothing else decides
_LOOK_AT = 200  # rows that are looked at to find the delimiter
_LONGEST_LINE = 1 << 25
_MOST_ROWS = 100_000_000
_MOST_CHARACTERS = 1 << 34


@dataclass(frozen=True)
class TextOptions:
    """What a config says about a text table; None is found out."""

    header_tag: str | None = None
    row_tag: str | None = None
    delimiter: str | None = None
    comment: str | None = None


@dataclass(frozen=True)
class Layout:
    """How a text table is laid out.

    Parameters
    ----------
    delimiter : str
        One character, or ``WHITESPACE``.
    names : tuple of str or None
        The header, without its tag; None where there is none.
    n_columns : int
        Without the tag.
    skip : (m,) array of int
        Lines (from 0) that hold no data.
    lines : (N,) array of int
        Line (from 1) of each data row.
    tagged : bool
        Whether every data row begins with a tag.
    encoding : str
    note : str or None
        What to warn of.
    """

    delimiter: str
    names: Sequence[str] | None
    n_columns: int
    skip: np.ndarray
    lines: np.ndarray
    tagged: bool
    encoding: str
    note: str | None = None


@dataclass
class _Scan:
    """One pass over the lines."""

    data: list[int] = field(default_factory=list)  # line numbers from 0
    head: list[str] = field(default_factory=list)  # the first data lines
    comments: list[str] = field(default_factory=list)  # before the first data line, without the comment sign
    header: str | None = None  # the tagged header
    header_line: int = 0
    n_lines: int = 0
    first_words: dict[str, int] = field(default_factory=dict)


def find_layout(path: Path, options: TextOptions, wanted: Sequence = (), shown: str | None = None) -> Layout:
    """Find out how a text table is laid out.

    Parameters
    ----------
    path : Path
    options : TextOptions
    wanted : sequence of str or int
        The columns that will be asked for; their names help to tell a header.
    shown : str
        The path as messages should give it.

    Raises
    ------
    InputError
        The file cannot be read, is no text table, or has no rows.
    """
    shown = shown or str(path)
    for encoding in ("utf-8-sig", "latin-1"):
        try:
            with reading(path, shown):
                scan = _scan(path, encoding, options, shown)
            break
        except UnicodeDecodeError:
            continue
    if not scan.data:
        raise _no_rows(scan, options, shown)
    delimiter = _delimiter(scan, options, shown)
    wanted = [w for w in wanted if isinstance(w, str) and w not in MISSING]
    names, drop_first = _header(scan, options, delimiter, wanted, shown)
    data = np.array(scan.data[drop_first:])
    if not len(data):
        raise InputError("the table has a header but no rows", file=shown, row=scan.data[0] + 1, cure="Give a table with data")
    is_data = np.zeros(scan.n_lines, dtype=bool)
    is_data[data] = True
    n_columns, note = _usual_length(scan.head[drop_first:], delimiter, options.row_tag), None
    if names is not None:
        if delimiter != WHITESPACE:  # rows may leave out delimiters behind their last value
            n_columns = max(n_columns, len(names))
        names, note = _names_for(names, n_columns, delimiter, scan, wanted, shown)
    return Layout(delimiter, names, n_columns, np.flatnonzero(~is_data), data + 1, options.row_tag is not None, encoding, note)


def _scan(path: Path, encoding: str, options: TextOptions, shown: str) -> _Scan:
    scan, characters = _Scan(), 0
    comments = (options.comment,) if options.comment else _COMMENTS
    header_tag, row_tag = options.header_tag, options.row_tag
    with open_binary(path) as binary, io.TextIOWrapper(binary, encoding=encoding) as text:
        while line := text.readline(_LONGEST_LINE):
            number = scan.n_lines
            scan.n_lines += 1
            characters += len(line)
            if len(scan.head) < _LOOK_AT or number % 4096 == 0 or len(line) > 100_000:
                _refuse_absurd(line, number, characters, shown)
            stripped = line.strip()
            if not stripped:
                continue
            if header_tag and scan.header is None and _begins(stripped, header_tag):
                scan.header, scan.header_line = stripped[len(header_tag) :].strip(" \t,;|"), number
            elif row_tag:
                if _begins(stripped, row_tag):
                    _add_row(scan, number, line)
                elif len(scan.first_words) < 5:
                    scan.first_words[stripped.split()[0][:30]] = number
            elif stripped.startswith(comments):
                if not scan.data:
                    scan.comments.append(_uncommented(stripped, comments))
            elif not header_tag or scan.header is not None:
                _add_row(scan, number, line)
    return scan


def _add_row(scan: _Scan, number: int, line: str) -> None:
    scan.data.append(number)
    if len(scan.head) < _LOOK_AT:
        scan.head.append(line.rstrip("\r\n"))  # a blank at the end may be a delimiter


def _begins(line: str, tag: str) -> bool:
    if not line.startswith(tag):
        return False
    rest = line[len(tag) : len(tag) + 1]
    return not rest or not rest.isalnum() or not tag[-1].isalnum()


def _uncommented(line: str, comments: Sequence[str]) -> str:
    for sign in comments:
        while line.startswith(sign):
            line = line[len(sign) :]
    return line.strip()


def _refuse_absurd(line: str, number: int, characters: int, shown: str) -> None:
    if "\x00" in line:
        raise InputError("this is not a text table: it holds binary data", file=shown, row=number + 1, cure="Export it as CSV in UTF-8")
    if len(line) >= _LONGEST_LINE or number > _MOST_ROWS or characters > _MOST_CHARACTERS:
        raise InputError("the table is absurdly large", file=shown, row=number + 1, cure="Check that this is the right file")


def _no_rows(scan: _Scan, options: TextOptions, shown: str) -> InputError:
    if options.header_tag and scan.header is None and not options.row_tag:
        return InputError(f"no line begins with the header tag {options.header_tag!r}", file=shown, cure="Check `header_tag`")
    if options.row_tag and scan.first_words:
        words = ", ".join(repr(w) for w in scan.first_words)
        return InputError(
            f"no line begins with the row tag {options.row_tag!r}", file=shown, cure=f"Lines begin with {words}: check `row_tag`"
        )
    return InputError("the table has no rows", file=shown, cure="Give a table with data")


def split_fields(line: str, delimiter: str, tag: str | None = None) -> list[str]:
    """Cut a row into its fields, after its tag."""
    if tag:
        line = line.lstrip()[len(tag) :].lstrip(" ")
        line = line[1:] if delimiter != WHITESPACE and line[:1] == delimiter else line
    if delimiter == WHITESPACE:
        line, delimiter = line.replace("\t", " ").strip(), " "
    try:
        fields = next(csv.reader([line], delimiter=delimiter, skipinitialspace=True), None) or [""]
    except csv.Error:
        fields = line.split(delimiter)
    return [f.strip() for f in fields]


def _delimiter(scan: _Scan, options: TextOptions, shown: str) -> str:
    if options.delimiter:
        delimiter = _WORDS.get(options.delimiter.lower(), options.delimiter)
        if delimiter != WHITESPACE and len(delimiter) != 1:
            raise InputError(
                "a delimiter is one character, or `whitespace` or `tab`", key="sample.delimiter", value=options.delimiter,
                cure="Leave `delimiter` out to have it found",
            )  # fmt: skip
        return delimiter
    rows = scan.head[1:] or scan.head  # the first may be a header
    return max(_CANDIDATES, key=lambda d: _plausibility(rows, d, options.row_tag))


def _usual_length(rows: Sequence[str], delimiter: str, tag: str | None) -> int:
    counts = [len(split_fields(row, delimiter, tag)) for row in rows]
    return max(set(counts), key=lambda n: (counts.count(n), n))


def _plausibility(rows: Sequence[str], delimiter: str, tag: str | None) -> tuple[bool, float]:
    """Whether it cuts rows into more than one column, most of them into equally many, and the share of fields that are numbers then."""
    split = [split_fields(row, delimiter, tag) for row in rows]
    counts = [len(fields) for fields in split]
    usual = max(counts, key=counts.count)
    consistent = usual > 1 and counts.count(usual) >= 0.9 * len(counts)
    numbers = sum(is_number(f, decimal_comma=delimiter != ",") for fields in split for f in fields)
    return consistent, numbers / max(sum(counts), 1)


def _header(scan: _Scan, options: TextOptions, delimiter: str, wanted: list[str], shown: str) -> tuple[list[str] | None, int]:
    """Return the names, or None, and whether the first data row turned out to be the header (1 or 0)."""
    if scan.header is not None:
        names = split_fields(scan.header, delimiter)
        return (names if len(names) > 1 else scan.header.split()), 0
    if options.header_tag:
        raise InputError(f"no line begins with the header tag {options.header_tag!r}", file=shown, cure="Check `header_tag`")
    if options.row_tag:
        return _commented_header(scan, options, delimiter, wanted), 0
    first = split_fields(scan.head[0], delimiter)
    below = [split_fields(row, delimiter) for row in scan.head[1:]]
    if set(wanted) & set(first):
        return first, 1
    if not any(is_number(f, decimal_comma=True) for f in first):
        numeric = [f for row in below for f in row if is_number(f, decimal_comma=True)]
        if numeric or not below:
            return first, 1
    return _commented_header(scan, options, delimiter, wanted), 0


def _commented_header(scan: _Scan, options: TextOptions, delimiter: str, wanted: list[str]) -> list[str] | None:
    """A comment above the data that has a word for each column: the one with the wanted names, else the last."""
    n_columns = _usual_length(scan.head, delimiter, options.row_tag)
    splits = [f for line in scan.comments for f in (split_fields(line, delimiter), line.replace(",", " ").split())]
    named = [f for f in splits if len(f) >= n_columns and set(wanted) & set(f)]
    if named:
        return max(named, key=lambda f: (len(set(wanted) & set(f)), len(f) == n_columns))
    last = scan.comments[-1] if scan.comments else ""
    for fields in (split_fields(last, delimiter), last.replace(",", " ").split()):
        if len(fields) == n_columns and not any(is_number(f) for f in fields):
            return fields
    return None


def _names_for(
    names: list[str], n_columns: int, delimiter: str, scan: _Scan, wanted: list[str], shown: str
) -> tuple[list[str] | None, str | None]:
    """Fit a header to the columns: return the names, or None, and what to tell about it.

    A spare delimiter at the end of either is harmless. Names beyond the last column are a matter for a warning.
    """
    while len(names) > n_columns and not names[-1]:
        names = names[:-1]
    if len(names) < n_columns and delimiter != WHITESPACE and not any(split_fields(row, delimiter)[-1] for row in scan.head[1:]):
        names = [*names, ""]
    if len(names) == n_columns:
        return names, None
    if not wanted:
        return None, None  # every column is asked for by its position
    row = scan.header_line + 1 if scan.header is not None else scan.data[0] + 1
    if len(names) > n_columns and set(wanted) & set(names) <= set(names[:n_columns]):
        spare = ", ".join(names[n_columns:])
        return names[:n_columns], (
            f"{shown}: the header has {len(names)} names, but the rows have {n_columns} columns; names are taken from the left, and "
            f"{spare} is taken to be absent. Check that no name holds a blank, or map the columns by position."
        )
    raise InputError(
        f"the header has {len(names)} names, but the rows have {n_columns} columns", file=shown, row=row,
        cure="Correct the header, set `delimiter`, or map the columns by position (0 is the first)",
    )  # fmt: skip
