"""Square matrices from files: text, .npy and .npz, full or packed, gzipped or not."""

from __future__ import annotations

import gzip
import io
import lzma
import math
import struct
import tokenize
import zipfile
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import IO, Any

import numpy as np

from fitter.array_types import BoolArray, FloatArray
from fitter.errors import InputError
from fitter.sample.cholesky import LARGEST, mirror_lower
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.numbers import plain_number

__all__ = ["compact", "make_symmetric", "read_array", "read_matrix"]

# Beside √(c_ii c_jj). Rounding to float32 or to six digits in text stays below; what is accepted is averaged away.
ASYMMETRY = 1e-5
_BLOCK = 1024
_LARGEST = 1e30  # nobody's variance in mag², nor its inverse
# What the readers of numpy and zipfile raise for damaged files, beside what `reading` turns into messages.
_BAD_HEADER = (ValueError, SyntaxError, TypeError, KeyError, MemoryError, RecursionError, struct.error, tokenize.TokenError)
_BAD_ZIP = (zipfile.BadZipFile, NotImplementedError, RuntimeError, ValueError, struct.error, lzma.LZMAError)
_CHUNK = 1 << 24  # characters of text at a time


def read_matrix(
    path: Path, *, sizes: Sequence[int], what: str, array: str | None = None, table: str = "the table", shown: str | None = None,
    bordered: bool = False, on_labels: Callable[[list[str]], None] | None = None,
) -> FloatArray:  # fmt: skip
    """Read an N×N matrix.

    Parameters
    ----------
    path : path-like
        Text or CSV (square, with labels or without; or one number after the other, N first or not), .npy or .npz (square, or a
        packed triangle), or a FITS image.
    sizes : sequence of int
        The N that are possible; the first is the number of rows of the table.
    what : str
        "covariance" or "precision", for messages.
    array : str, optional
        Name of the array in an .npz.
    table, shown : str
        The table and the path, for messages.
    bordered : bool
        Whether a FITS image has redshifts in its first row and moduli in its first column, which are left out.
    on_labels : callable, optional
        Called with the N labels of the rows of a text matrix that has them.

    Returns
    -------
    (N, N) array of float
        Symmetric and finite, ours to write to.

    Raises
    ------
    InputError
        Unreadable; another N; NaN or infinite; not symmetric.
    """
    path, shown = Path(path), shown or str(path)
    sizes = list(dict.fromkeys(sizes))
    if min(sizes) > LARGEST:
        raise InputError(
            f"a dense {what} of {sizes[0]} rows is beyond the {LARGEST} that can be factored", file=shown,
            cure="Give the systematics as modes (N × k one-sigma shifts) instead",
        )  # fmt: skip
    with reading(path, shown):
        with open_binary(path) as stream:
            magic = stream.peek(6)[:6]
        if magic == b"\x93NUMPY":
            matrix = _from_npy(path, sizes, table, shown)
        elif magic[:4] == b"PK\x03\x04":
            matrix = _from_npz(path, sizes, array, table, shown)
        elif magic == b"SIMPLE":
            matrix = _from_fits(path, sizes, bordered, table, shown)
        else:
            matrix = _from_text(path, sizes, table, shown, on_labels)
    make_symmetric(matrix, f"the {what}", shown)
    return matrix


def make_symmetric(matrix: FloatArray, what: str, shown: str | None = None) -> None:
    """Average a matrix with its transpose, in place, after checking that they agree and are finite.

    Raises
    ------
    InputError
        With the row and column of the worst element.
    """
    n = len(matrix)
    for i in range(0, n, _BLOCK):
        bad = ~(np.abs(matrix[i : i + _BLOCK]) < _LARGEST)
        if bad.any():
            row, column = np.argwhere(bad)[0] + (i, 0)
            raise InputError(
                f"{what} holds a value that is not a finite number, or absurdly large", file=shown, row=int(row) + 1,
                column=int(column) + 1,
                value=float(matrix[row, column]), cure="Correct it, or cut that supernova from table and matrix",
            )  # fmt: skip
    scale = np.sqrt(np.abs(np.diagonal(matrix)))
    worst = (0.0, 0, 0, 0.0, 0.0)
    for i in range(0, n, _BLOCK):
        for j in range(0, i + 1, _BLOCK):
            worst = max(worst, _symmetrise_block(matrix, slice(i, i + _BLOCK), slice(j, j + _BLOCK), scale))
    by, row, column, value, mirrored = worst
    if by > ASYMMETRY:
        raise InputError(
            f"{what} is not symmetric: row {row + 1}, column {column + 1} holds {value:.6g}, and its mirror image {mirrored:.6g} "
            f"(a difference of {by:.3g} times the errors of the two supernovae)",
            file=shown, row=row + 1, column=column + 1, cure="Check how the file was written; the two must agree to 1e-5",
        )  # fmt: skip


def _symmetrise_block(matrix: FloatArray, rows: slice, columns: slice, scale: FloatArray) -> tuple[float, int, int, float, float]:
    """Average a block with its mirror image; return the largest difference, beside the errors, its place and the two numbers."""
    block, mirror = matrix[rows, columns], matrix[columns, rows].T
    unequal = block != mirror
    if not unequal.any():
        return 0.0, 0, 0, 0.0, 0.0
    beside = scale[rows, None] * scale[None, columns]
    beside = np.where(beside > 0, beside, np.maximum(np.abs(block), np.abs(mirror)))
    with np.errstate(over="ignore"):
        relative = np.divide(np.abs(block - mirror), beside, out=np.zeros_like(beside), where=unequal)
    if rows == columns:
        relative = np.tril(relative)
    i, j = np.unravel_index(np.argmax(relative), relative.shape)
    worst = float(relative[i, j]), int(i) + rows.start, int(j) + columns.start, float(block[i, j]), float(mirror[i, j])
    mean = 0.5 * (block + mirror)
    matrix[rows, columns] = mean
    matrix[columns, rows] = mean.T
    return worst


def compact(matrix: FloatArray, keep: BoolArray) -> FloatArray:
    """Return the rows and columns of a matrix that are kept; the matrix itself is spent.

    Works in the memory of ``matrix``, which no copy of most of a large matrix would fit beside.
    """
    index = np.flatnonzero(keep)
    n = len(index)
    if n == len(matrix):
        return matrix
    if n < len(matrix) // 2:
        return matrix[np.ix_(index, index)]
    flat = matrix.reshape(-1)
    for i, row in enumerate(index):
        flat[i * n : (i + 1) * n] = matrix[row, index]
    return flat[: n * n].reshape(n, n)


def _from_npy(path: Path, sizes: list[int], table: str, shown: str) -> FloatArray:
    with open_binary(path) as stream:
        shape, dtype = _array_header(stream, shown)
        _require_numbers(dtype, shown)
        n, packed = _size_of(shape, None, sizes, table, shown)
    return _unpack(read_array(path, shown), n, packed)


def read_array(path: Path, shown: str) -> FloatArray:
    """Read an .npy file, never a pickle."""
    with open_binary(path) as stream:
        _require_numbers(_array_header(stream, shown)[1], shown)
    with open_binary(path) as stream:
        return _load(stream, shown)


def _load(stream: IO[bytes] | io.BufferedIOBase, shown: str) -> FloatArray:
    try:
        return np.lib.format.read_array(stream, allow_pickle=False)
    except (ValueError, struct.error) as problem:
        raise InputError(f"the array cannot be read: {problem}", file=shown, cure="Check that the file is whole") from None


def _array_header(stream: IO[bytes] | io.BufferedIOBase, shown: str) -> tuple[tuple[int, ...], np.dtype[Any]]:
    """Shape and dtype of the .npy array that a stream begins with, before its numbers are read."""
    try:
        version = np.lib.format.read_magic(stream)
        read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, _, dtype = read(stream)
    except _BAD_HEADER as problem:
        raise InputError(f"this is no .npy array: {problem}", file=shown, cure="Write it with numpy.save") from None
    if any(length < 0 for length in shape):
        raise InputError("this is no .npy array: a length is negative", file=shown, value=shape, cure="Write it with numpy.save")
    return shape, dtype


def _require_numbers(dtype: np.dtype[Any], shown: str) -> None:
    if dtype.kind not in "fiub":
        raise InputError(
            f"the array holds {dtype}, not real numbers", file=shown, cure="Save it as an array of floats; Python objects are never loaded"
        )


def _from_npz(path: Path, sizes: list[int], wanted: str | None, table: str, shown: str) -> FloatArray:
    """Look at the header of every array, choose the matrix, and load only that."""
    with open_binary(path) as stream:
        try:
            archive = zipfile.ZipFile(stream)
            headers, counts = _npz_headers(archive, shown)
            name = _choose(headers, wanted, sizes, shown)
            shape, dtype = headers[name]
            _require_numbers(dtype, f"{shown} ({name})")
            n, packed = _size_of(shape, counts, sizes, table, shown)
            with archive.open(f"{name}.npy") as entry:
                return _unpack(_load(entry, shown), n, packed)
        except _BAD_ZIP as problem:
            raise InputError(f"the .npz file is damaged: {problem}", file=shown, cure="Fetch or write it again") from None


def _npz_headers(archive: zipfile.ZipFile, shown: str) -> tuple[dict[str, tuple[tuple[int, ...], np.dtype[Any]]], list[int]]:
    """Shape and dtype of every array by name, and the values of whole numbers that stand alone: one may be N."""
    headers, counts = {}, []
    for member in (m for m in archive.namelist() if m.endswith(".npy")):
        with archive.open(member) as entry:
            shape, dtype = _array_header(entry, f"{shown} ({member})")
        headers[member.removesuffix(".npy")] = shape, dtype
        if math.prod(shape) == 1 and dtype.kind in "iu":
            with archive.open(member) as entry:
                counts.append(int(_load(entry, shown).reshape(-1)[0]))
    return headers, counts


def _choose(headers: dict, wanted: str | None, sizes: list[int], shown: str) -> str:
    listed = ", ".join(f"{name} {shape}" for name, (shape, _) in headers.items())
    if wanted is not None:
        if wanted not in headers:
            raise InputError("the .npz has no such array", file=shown, value=wanted, cure=f"It holds: {listed}")
        return wanted
    fitting = {n * n for n in sizes} | {n * (n + 1) // 2 for n in sizes}
    size = {name: math.prod(shape) for name, (shape, dtype) in headers.items() if dtype.kind in "fiub"}
    large = [n for n in size if size[n] > 1] or [n for n in size if headers[n][0]] or list(size) or list(headers)
    right = [n for n in large if size.get(n) in fitting]
    candidates = right or large
    if len(candidates) != 1:
        raise InputError(
            "the .npz holds no array" if not candidates else f"it is not clear which of the arrays is the matrix: {', '.join(candidates)}",
            file=shown, cure=f"Say which with `array: NAME`; it holds: {listed}",
        )  # fmt: skip
    return candidates[0]


def _size_of(shape: tuple[int, ...], counts: list[int] | None, sizes: list[int], table: str, shown: str) -> tuple[int, bool]:
    """N of an array and whether it is a packed triangle; refuses an N that the table does not have."""
    total = math.prod(shape)
    if len(shape) == 2 and shape[0] != shape[1] and 1 not in shape:
        raise InputError(f"the matrix is {shape[0]} × {shape[1]}, not square", file=shown, cure=_cure_size(shape[0], sizes))
    if len(shape) > 2:
        raise InputError(f"the array has {len(shape)} dimensions, not two", file=shown, value=tuple(shape))
    square = len(shape) == 2 and shape[0] == shape[1]
    possible = [(n, False) for n in [math.isqrt(total)] if n * n == total]
    triangle = (math.isqrt(8 * total + 1) - 1) // 2
    if not square and triangle * (triangle + 1) // 2 == total:
        possible.append((triangle, True))
    fits = [p for p in possible if p[0] in sizes and (not counts or p[0] in counts)] or [p for p in possible if p[0] in sizes]
    if fits:
        return fits[0]
    said = [p for p in possible if p[0] in (counts or ())]
    nearest = said or possible
    raise _wrong_size(nearest[0][0] if nearest else None, total, sizes, table, shown)


def _wrong_size(n: int | None, total: int, sizes: list[int], table: str, shown: str) -> InputError:
    if n is None:
        return InputError(
            f"the file holds {total} numbers, which make no square; {_expected(sizes, table)}, that is {sizes[0] ** 2} numbers", file=shown,
            cure="Check that the file is whole and belongs to this table",
        )  # fmt: skip
    return InputError(f"the matrix is {n} × {n}, but {_expected(sizes, table)}", file=shown, cure=_cure_size(n, sizes))


def _expected(sizes: list[int], table: str) -> str:
    """Which N would have been right, before and after the cuts."""
    if len(sizes) == 1:
        return f"{table} has {sizes[0]} rows: N must be {sizes[0]}"
    return (
        f"{table} has {sizes[0]} rows before the cuts and {sizes[1]} after: N must be {sizes[0]} (the cuts then remove rows from both) "
        f"or {sizes[1]} (the rows that are kept, in their order)"
    )


def _cure_size(n: int, sizes: list[int]) -> str:
    if len(sizes) > 1:
        return "Give the matrix that belongs to the table, or make the cuts with which it was made"
    if 0 < sizes[0] - n:
        return f"Was it made after a cut? Then make the same cut with `keep:`, or give the table of those {n} rows"
    return "Give the table that the matrix was made for, and cut with `keep:`: rows are then removed from both"


def _unpack(values: FloatArray, n: int, packed: bool) -> FloatArray:
    """An (N, N) array of native float64 from a square or a packed triangle."""
    if not packed:
        values = values.reshape(n, n)
        # A Fortran-ordered array is turned round, not copied: the matrix is symmetric, or will be refused.
        values = values.T if values.flags.f_contiguous and not values.flags.c_contiguous else values
        return np.ascontiguousarray(values, dtype=np.float64)
    values = values.reshape(-1)
    matrix = np.empty((n, n))
    _fill_from_upper(matrix, values)
    if not _plausible(matrix):
        _fill_from_lower(matrix, values)
        if not _plausible(matrix):
            _fill_from_upper(matrix, values)
    return matrix


def _fill_from_upper(matrix: FloatArray, values: FloatArray) -> None:
    """The upper triangle row by row, which is also the lower one column by column."""
    n, start = len(matrix), 0
    for i in range(n):
        matrix[i:, i] = values[start : start + n - i]
        start += n - i
    mirror_lower(matrix)


def _fill_from_lower(matrix: FloatArray, values: FloatArray) -> None:
    """The lower triangle row by row, which is also the upper one column by column."""
    start = 0
    for i in range(len(matrix)):
        matrix[i, : i + 1] = values[start : start + i + 1]
        start += i + 1
    mirror_lower(matrix)


def _plausible(matrix: FloatArray) -> bool:
    """Whether the diagonal is positive and no correlation is beyond 1: which order a triangle was packed in."""
    scale = np.diagonal(matrix)
    if not np.all(scale > 0):
        return False
    scale = np.sqrt(scale)
    return all(np.all(np.abs(matrix[i : i + _BLOCK]) <= 1.001 * scale[i : i + _BLOCK, None] * scale) for i in range(0, len(matrix), _BLOCK))


def _from_fits(path: Path, sizes: list[int], bordered: bool, table: str, shown: str) -> FloatArray:
    from fitter.sample.readers.astro import read_bordered, read_image

    image = read_bordered(path, shown)[2] if bordered else read_image(path, shown)
    n, _ = _size_of(image.shape, None, sizes, table, shown)
    return _unpack(image, n, False)


def _from_text(path: Path, sizes: list[int], table: str, shown: str, on_labels: Callable[..., Any] | None = None) -> FloatArray:
    """Read the numbers in their order, whatever the lines: N on the first, or N² alone, or a triangle; or a labelled matrix."""
    from fitter.sample.readers.labelled import read_labelled

    labelled = read_labelled(path, sizes, shown)
    if labelled is not None:
        if on_labels is not None:
            on_labels(labelled[1])
        return labelled[0]
    values, total, first_alone = _numbers(path, max(n * n for n in sizes) + 1, shown)
    first = values[0] if total else math.nan
    stated = int(first) if first_alone and 0 < first < 1e7 and first == int(first) else None
    for n in sizes:
        for count, packed in ((n * n, False), (n * (n + 1) // 2, True)):
            if stated == n and total == count + 1:
                return _unpack(values[1 : count + 1], n, packed)
            if total == count and not (total > 1 and stated in sizes):
                return _unpack(values[:count], n, packed)
    if stated is not None and stated > 1:
        if total - 1 in (stated**2, stated * (stated + 1) // 2):
            raise _wrong_size(stated, total - 1, sizes, table, shown)
        raise InputError(
            f"its first line says N = {stated}, which calls for {stated}² = {stated**2} numbers, but {total - 1} follow; "
            f"{_expected(sizes, table)}",
            file=shown, row=1, cure="Check that the file is whole",
        )  # fmt: skip
    root = math.isqrt(total)
    raise _wrong_size(root if root * root == total and total else None, total, sizes, table, shown)


def _numbers(path: Path, capacity: int, shown: str) -> tuple[FloatArray, int, bool]:
    """All numbers of a text file in order (the first ``capacity`` kept), how many, and whether the first has a line of its own."""
    values, total, alone, line = np.empty(min(capacity, _most_numbers(path))), 0, False, 0
    capacity = len(values)
    with open_binary(path) as binary, io.TextIOWrapper(binary, encoding="utf-8-sig", errors="replace") as text:
        while lines := text.readlines(_CHUNK):
            rows = [row for row in lines if not row.lstrip().startswith(("#", "%", "!"))]
            if not total and rows:
                first = next((row for row in rows if row.strip()), "")
                alone = len(first.replace(",", " ").split()) == 1
            words = "".join(rows).replace(",", " ").replace(";", " ").split()
            try:
                found = np.fromiter(map(float, words), dtype=float, count=len(words))
            except ValueError:
                found = _slowly(lines, line, shown)
            room = max(0, min(len(found), capacity - total))
            values[total : total + room] = found[:room]
            total += len(found)
            line += len(lines)
    return values, total, alone


def _most_numbers(path: Path) -> int:
    """More numbers than a file can hold: each takes two bytes, and gzip packs at most 1032 into one."""
    with open_binary(path) as stream:
        packed = isinstance(stream, gzip.GzipFile)
    return path.stat().st_size * (516 if packed else 1) + 1


def _slowly(lines: list[str], before: int, shown: str) -> FloatArray:
    """Convert line by line, to accept other minus signs and exponents, or to say where something is no number."""
    found = []
    for number, line in enumerate(lines, before + 1):
        if line.lstrip().startswith(("#", "%", "!")):
            continue
        for column, word in enumerate(line.replace(",", " ").replace(";", " ").split(), 1):
            try:
                found.append(float(plain_number(word)))
            except ValueError:
                raise InputError(
                    "this is not a number", file=shown, row=number, column=column, value=word[:40],
                    cure="A matrix file holds numbers only (comment lines begin with #); .npy and .npz are read too",
                ) from None  # fmt: skip
    return np.array(found)
