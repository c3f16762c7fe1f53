"""The formats of astronomy: FITS, ECSV, VOTable and machine-readable (CDS) tables, through astropy."""

from __future__ import annotations

import io
import math
import struct
import warnings
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.formats import missing_extra, table_of
from fitter.sample.tables import Table

if TYPE_CHECKING:
    from astropy.table import Table as AstropyTable

__all__ = ["read_astro", "read_bordered", "read_image"]

_READERS = {"VOTable": "votable", "ECSV": "ascii.ecsv", "CDS": "ascii.cds"}
_LARGEST_FILE = 1 << 32
_CHUNK = 1 << 26
# What astropy raises for damaged files of these formats.
_DAMAGED = (
    ValueError, TypeError, KeyError, IndexError, AttributeError, OverflowError, MemoryError, EOFError, struct.error, StopIteration,
    AssertionError, RecursionError, NotImplementedError,
)  # fmt: skip


def read_astro(
    path: Path, kind: str, *, numbers: Sequence[str | int] = (), texts: Sequence[str | int] = (), everything: bool = False, shown: str
) -> Table:
    """Read the columns of a table in one of these formats that are asked for; the parameters are those of `read_text`."""
    with _astropy(kind, shown):
        note = None
        if kind == "FITS":
            table, note = _fits_table(path, [*numbers, *texts], shown)
        else:
            from astropy.table import Table as AstropyTable

            table = AstropyTable.read(io.BytesIO(_bytes(path, shown)), format=_READERS[kind])
        return table_of(
            table.colnames, len(table), lambda i: _plain(table.columns[i]), numbers=numbers, texts=texts, everything=everything,
            shown=shown, note=note,
        )  # fmt: skip


def read_image(path: Path, shown: str) -> np.ndarray:
    """Read the first two-dimensional image of a FITS file, rows as numpy has them (NAXIS2 first), in float64."""
    with _astropy("FITS", shown):
        from astropy.io import fits

        with fits.open(io.BytesIO(_bytes(path, shown)), memmap=False) as hdus:
            for hdu in hdus:
                if hdu.is_image and len(hdu.shape) == 2 and math.prod(hdu.shape):
                    return np.ascontiguousarray(hdu.data, dtype=np.float64)
    raise InputError("the FITS file holds no image of two dimensions", file=shown, cure="Is the matrix in another file?")


def read_bordered(path: Path, shown: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Split a bordered image: redshifts in its first row, distances in its first column, a matrix inside.

    The corner where they meet is not used. An image that was turned round (distances in the first row) is told by its values: no
    distance modulus or magnitude is below 5, and no redshift above.

    Returns
    -------
    redshift, data : (N,) arrays
    matrix : (N, N) array
    """
    image = read_image(path, shown)
    if image.shape[0] != image.shape[1] or len(image) < 2:
        raise InputError(
            f"a bordered matrix is square and has a row and a column more than supernovae, but this is {' × '.join(map(str, image.shape))}",
            file=shown, cure="The first row holds z, the first column the moduli",
        )  # fmt: skip
    redshift, data = image[0, 1:], image[1:, 0]
    if np.nanmedian(redshift) > 5 and np.nanmedian(data) < 5:
        redshift, data = data, redshift
    return redshift.copy(), data.copy(), np.ascontiguousarray(image[1:, 1:])


def _bytes(path: Path, shown: str) -> bytes:
    parts, size = [], 0
    with reading(path, shown), open_binary(path) as stream:
        while part := stream.read(_CHUNK):
            parts.append(part)
            size += len(part)
            if size > _LARGEST_FILE:
                raise InputError(f"the file unpacks to more than {_LARGEST_FILE >> 30} GB", file=shown, cure="Is it the right file?")
    return b"".join(parts)


@contextmanager
def _astropy(kind: str, shown: str) -> Iterator[None]:
    """Import astropy, hold its warnings back, and turn what it says of damaged files into messages."""
    try:
        from astropy.io.fits import VerifyError
        from astropy.io.votable.exceptions import VOWarning
        from yaml import YAMLError
    except ImportError:
        raise missing_extra(kind, "astro", shown) from None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            warnings.filterwarnings("error", message=".*truncated.*")
            yield
    except InputError:
        raise
    except (*_DAMAGED, OSError, VerifyError, VOWarning, YAMLError, UserWarning) as problem:
        said = str(problem).strip().splitlines()
        raise InputError(
            f"the {kind} file cannot be read: {said[0][:200] if said else type(problem).__name__}", file=shown,
            cure="Fetch or write it again, or save it as CSV",
        ) from None  # fmt: skip


def _fits_table(path: Path, wanted: Iterable[str | int], shown: str) -> tuple[AstropyTable, str | None]:
    """The first table of a FITS file that has the columns asked for, or the first, and what to tell about the choice."""
    from astropy.io import fits
    from astropy.table import Table as AstropyTable

    with fits.open(io.BytesIO(_bytes(path, shown)), memmap=False) as hdus:
        tables = [i for i, hdu in enumerate(hdus) if isinstance(hdu, fits.BinTableHDU | fits.TableHDU)]
        if not tables:
            raise InputError(
                "the FITS file holds no table", file=shown,
                cure="For an image with z in its first row and the moduli in its first column, set `layout: bordered`",
            )  # fmt: skip
        named = {name for name in wanted if isinstance(name, str)}
        chosen = max(tables, key=lambda i: (len(named & set(hdus[i].columns.names)), -i))
        note = f"{shown} holds {len(tables)} tables; the one in extension {chosen} is used." if len(tables) > 1 else None
        return AstropyTable.read(hdus[chosen]), note


def _plain(column: Any) -> np.ma.MaskedArray[Any, Any]:
    """A column of astropy as a plain (masked) array; what has no simple values becomes words."""
    values = column.value if hasattr(column, "unit") and hasattr(column, "value") else column
    if hasattr(values, "unmasked"):
        values = np.ma.MaskedArray(np.asarray(values.unmasked), mask=np.asarray(values.mask))
    values = values if isinstance(values, np.ma.MaskedArray) else np.asarray(values)
    return np.ma.MaskedArray(np.ma.getdata(values), mask=np.ma.getmaskarray(values))
