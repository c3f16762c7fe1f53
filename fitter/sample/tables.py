"""Tables: named columns of numbers and words whose rows know their line in the file.

Each format has a reader of its own in ``readers/`` that returns a `Table`.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.files import reading, sha256_of

if TYPE_CHECKING:
    from fitter.sample.readers.layout import TextOptions

__all__ = ["Columns", "Table", "bordered_table", "read_numbers", "read_table", "sha256_of"]

_NAMES_SHOWN = 40


@dataclass(frozen=True)
class Columns:
    """The columns of a table, by name and by position.

    Parameters
    ----------
    names : sequence of str or None
        None where the table has no header.
    n : int
        Number of columns.
    file : str
        The table, for messages.
    """

    names: Sequence[str] | None
    n: int
    file: str

    def position(self, ref: int | str) -> int:
        """Return the position, from 0, of a column given by name or position.

        Raises
        ------
        InputError
            There is no such column, or there are two.
        """
        if isinstance(ref, str) and self.names is not None and ref in self.names:
            if list(self.names).count(ref) > 1:
                raise InputError(
                    "two columns have this name", file=self.file, column=ref, cure="Map the column by position (0 is the first)"
                )
            return list(self.names).index(ref)
        if isinstance(ref, int) or ref.isdigit():
            if int(ref) < self.n:
                return int(ref)
            raise InputError(
                f"there is no column {ref}: the table has {self.n}, counted from 0", file=self.file, column=ref, cure=self._available(ref)
            )
        if self.names is None:
            raise InputError(
                f"the table has no header, so no column is called {ref!r}", file=self.file, column=ref,
                cure="Its rows have one column only: is `delimiter` right?" if self.n == 1
                else f"Map columns by position, 0 to {self.n - 1}, or set `header_tag`",
            )  # fmt: skip
        raise InputError("there is no such column", file=self.file, column=ref, cure=self._available(ref))

    def known(self, refs: Iterable[int | str]) -> list[int]:
        """Return the positions of those columns that exist."""
        out = []
        for ref in refs:
            try:
                out.append(self.position(ref))
            except InputError:
                continue  # said when the column is asked for
        return out

    def label(self, position: int) -> str | int:
        """Return the name of a column, or its position where it has none."""
        return self.names[position] if self.names is not None and self.names[position] else position

    def _available(self, ref: int | str) -> str:
        if self.names is None:
            return f"Positions are 0 to {self.n - 1}"
        near = _nearest(str(ref), self.names)
        hint = f"Did you mean {near}? " if near else ""
        names = list(self.names)
        more = f" and {len(names) - _NAMES_SHOWN} more" if len(names) > _NAMES_SHOWN else ""
        return f"{hint}The columns are: {', '.join(names[:_NAMES_SHOWN])}{more}"


def _nearest(ref: str, names: Sequence[str]) -> str | None:
    """The name that a wrong one most likely stands for: `zCMB` for `z_cmb` and for `z_CMBframe`, `mu_er` for `mu_err`."""
    plain = {re.sub(r"[\W_]", "", name.lower()): name for name in names}
    wanted = re.sub(r"[\W_]", "", ref.lower())
    begins = [name for key, name in plain.items() if len(wanted) > 1 and key.startswith(wanted)]
    near = difflib.get_close_matches(wanted, plain, n=1)
    return plain.get(wanted) or (begins[0] if len(begins) == 1 else plain[near[0]] if near else None)


@dataclass(frozen=True, eq=False)
class Table:
    """N rows of a table.

    Parameters
    ----------
    columns : Columns
    lines : (N,) array of int
        Line of the file that each row stands in, from 1.
    floats, words : dict of position → (N,) array
        Columns read as numbers and as words.
    problems : dict of position → InputError
        What is wrong with a column of numbers.
    note : str or None
        What to warn of.
    """

    columns: Columns
    lines: np.ndarray
    floats: dict[int, np.ndarray]
    words: dict[int, np.ndarray] = field(default_factory=dict)
    problems: dict[int, InputError] = field(default_factory=dict)
    note: str | None = None

    @property
    def n(self) -> int:
        """Number of rows."""
        return len(self.lines)

    def numbers(self, ref: int | str) -> FloatArray:
        """Return a column as (N,) numbers, NaN where a field is empty.

        Raises
        ------
        InputError
            There is no such column, or it holds something else.
        """
        position = self.columns.position(ref)
        if position in self.problems:
            raise self.problems[position]
        return self.floats[position]

    def texts(self, ref: str | int) -> NDArray[np.str_]:
        """Return a column as (N,) words."""
        return self.words[self.columns.position(ref)]


def read_table(
    path: Path,
    options: TextOptions | None = None,
    *,
    numbers: Sequence = (),
    texts: Sequence = (),
    required: Sequence = (),
    shown: str | None = None,
) -> Table:
    """Read the columns of a table that are asked for.

    Parameters
    ----------
    path : path-like
    options : TextOptions, optional
        How a text table is laid out, where it is not to be found out.
    numbers, texts : sequences of str or int
        Columns by name or position (0 is the first).
    required : sequence of str or int
        Those for which every row of a text table must have a field, empty or not.
    shown : str, optional
        The path as messages should give it.

    Raises
    ------
    InputError
        The file cannot be read as a table. A missing column is said when the `Table` is asked for it.
    """
    return _read(Path(path), options, numbers=numbers, texts=texts, required=required, shown=shown or str(path))


def _read(path: Path, options: TextOptions | None = None, **wanted: Any) -> Table:
    """Dispatch to the reader of the format that the content shows."""
    from fitter.sample.readers.formats import format_of

    kind = format_of(path, wanted["shown"])
    if kind == "text":
        from fitter.sample.readers.layout import TextOptions
        from fitter.sample.readers.text import read_text

        return read_text(path, options or TextOptions(), **wanted)
    wanted.pop("required", None)  # elsewhere all rows are of one length
    if kind == "Parquet":
        from fitter.sample.readers.parquet import read_parquet

        return read_parquet(path, **wanted)
    from fitter.sample.readers.astro import read_astro

    return read_astro(path, kind, **wanted)


def bordered_table(path: Path, data_kind: str, shown: str) -> Table:
    """Read the redshifts and the data at the border of a FITS image, as columns 0 and 1.

    Raises
    ------
    InputError
        The file is no FITS image, or not square.
    """
    from fitter.sample.readers.astro import read_bordered
    from fitter.sample.readers.formats import format_of, table_of

    path = Path(path)
    if format_of(path, shown) != "FITS":
        raise InputError(
            f"a bordered matrix is read from a FITS image only, and {shown} is none", key="sample.layout", value="bordered",
            cure="Save z and the moduli as a CSV table, and the inverse covariance as .npy",
        )  # fmt: skip
    redshift, data, _ = read_bordered(path, shown)
    found = (redshift, data)
    return table_of(("redshift", data_kind), len(data), lambda i: found[i], everything=True, shown=shown)


def read_numbers(path: Path, *, use: Sequence | None = None, shown: str | None = None) -> tuple[list[str | int], FloatArray, IntArray]:
    """Read a table that holds nothing but numbers, or some of its columns; also an (N, k) .npy array.

    Returns
    -------
    names : list
        k names, or positions.
    values : (N, k) array
    lines : (N,) array of int

    Raises
    ------
    InputError
        The file cannot be read, or a column holds something else.
    """
    path, shown = Path(path), shown or str(path)
    with reading(path, shown):
        is_array = open(path, "rb").read(6) == b"\x93NUMPY"
    if is_array:
        from fitter.sample.matrices import read_array

        values = read_array(path, shown)
        values = values.reshape(len(values), -1)
        positions = list(range(values.shape[1])) if use is None else Columns(None, values.shape[1], shown).known(use)
        return [*positions], np.ascontiguousarray(values[:, positions], dtype=float), np.arange(1, len(values) + 1)
    table = _read(path, numbers=use or (), required=use or (), everything=use is None, shown=shown)
    refs = list(range(table.columns.n)) if use is None else list(use)
    refs = [r for r in refs if use is not None or table.columns.label(r) != "" or not np.isnan(table.floats[r]).all()]
    try:
        values = np.column_stack([table.numbers(ref) for ref in refs])
    except InputError as problem:
        if use is None:
            problem = InputError(
                problem.problem, file=problem.file, row=problem.row, column=problem.column, value=problem.value,
                cure="Where the column is no shift, list those that are: `use: [COLUMN, …]`",
            )  # fmt: skip
        raise problem from None
    return [table.columns.label(table.columns.position(r)) for r in refs], values, table.lines
