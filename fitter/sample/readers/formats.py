"""Which format a table is in, told by its content; and columns of any format as a `Table`."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.numbers import to_numbers
from fitter.sample.tables import Columns, Table

__all__ = ["ASTRO", "format_of", "missing_extra", "table_of"]

ASTRO = ("FITS", "VOTable", "ECSV", "CDS")
_LOOK_AT = 1 << 16
_MOST_NUMBERS = 1 << 31


def format_of(path: Path, shown: str) -> str:
    """Return "FITS", "VOTable", "ECSV", "CDS" (machine-readable tables), "Parquet" or "text"."""
    with reading(path, shown), open_binary(path) as stream:
        head = stream.read(_LOOK_AT)
    if head[:9] == b"SIMPLE  =":
        return "FITS"
    if head[:4] == b"PAR1":
        return "Parquet"
    if head.removeprefix(b"\xef\xbb\xbf")[:7] == b"# %ECSV":
        return "ECSV"
    if head.lstrip(b"\xef\xbb\xbf \r\n\t")[:1] == b"<" and b"<VOTABLE" in head:
        return "VOTable"
    return "CDS" if b"Byte-by-byte Description of file" in head else "text"


def missing_extra(what: str, extra: str, shown: str) -> InputError:
    """An optional library is not installed."""
    return InputError(
        f"this is a {what} file, which needs the extra mufitter[{extra}]", file=shown,
        cure=f"Install it with `pip install 'mufitter[{extra}]'`, or save the table as CSV",
    )  # fmt: skip


def table_of(
    names: Sequence[str],
    n: int,
    column: Callable[[int], np.ndarray],
    *,
    numbers: Sequence[str | int] = (),
    texts: Sequence[str | int] = (),
    everything: bool = False,
    shown: str,
    note: str | None = None,
) -> Table:
    """Make a `Table` of columns that are arrays already.

    Parameters
    ----------
    names : sequence of str
    n : int
        Number of rows.
    column : callable
        Position → (N,) array, numbers or words; a masked element has no value.
    numbers, texts, everything, shown, note
        As in `read_text`.

    Raises
    ------
    InputError
        The table has no rows, or more than can be meant.
    """
    columns, lines = Columns(tuple(names), len(names), shown), np.arange(1, n + 1)
    if not n:
        raise InputError("the table has no rows", file=shown, cure="Give a table with data")
    as_numbers = list(range(len(names))) if everything else columns.known(numbers)
    as_texts = columns.known(texts)
    if n * len({*as_numbers, *as_texts}) > _MOST_NUMBERS:
        raise InputError(f"{n} rows are too many for a table", file=shown, cure="Check that this is the right file")
    floats, words, problems = {}, {}, {}
    for position in sorted({*as_numbers, *as_texts}):
        values = np.ma.asanyarray(column(position))
        if values.shape != (n,):
            problems[position] = InputError(
                "the column holds several values a row", file=shown, column=columns.label(position), cure="Map a column of single values"
            )
            floats[position], words[position] = np.full(n, np.nan), np.full(n, "")
            continue
        if position in as_texts:
            words[position] = _words(values)
        if position in as_numbers:
            floats[position], problem = _numbers(values, lines, columns.label(position), shown)
            if problem is not None:
                problems[position] = problem
    return Table(columns, lines, floats, words, problems, note)


def _numbers(values: NDArray[Any], lines: IntArray, label: str | int, shown: str) -> tuple[FloatArray, InputError | None]:
    """(N,) float64, NaN where there is no value, and what is wrong."""
    if values.dtype.kind in "fiub":
        return np.ma.filled(values.astype(np.float64), np.nan), None
    return to_numbers(_words(values), lines, label, shown)


def _words(values: NDArray[Any]) -> NDArray[np.str_]:
    missing = np.ma.getmaskarray(values)
    if values.dtype.kind == "f":
        out = [f"{v:.12g}" for v in np.ma.getdata(values).tolist()]
    else:
        out = [_word(v) for v in np.ma.getdata(values).tolist()]
    return np.where(missing, "", np.array(out, dtype=str))


def _word(value: object) -> str:
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace").strip()
    return "" if value is None else str(value).strip()
