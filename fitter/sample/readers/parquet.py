"""Parquet tables, through pandas and pyarrow."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fitter.errors import InputError
from fitter.sample.files import reading
from fitter.sample.readers.formats import missing_extra, table_of
from fitter.sample.tables import Columns, Table

__all__ = ["read_parquet"]


def read_parquet(
    path: Path, *, numbers: Sequence[str | int] = (), texts: Sequence[str | int] = (), everything: bool = False, shown: str
) -> Table:
    """Read the columns of a Parquet table that are asked for; the parameters are those of `read_text`."""
    try:
        import pyarrow.parquet as parquet
        from pyarrow import ArrowException
    except ImportError:
        raise missing_extra("Parquet", "parquet", shown) from None
    try:
        with reading(path, shown), parquet.ParquetFile(path) as file:
            names = [str(name) for name in file.schema_arrow.names]
            columns = Columns(names, len(names), shown)
            positions = range(len(names)) if everything else sorted({*columns.known(numbers), *columns.known(texts)})
            frame = file.read(columns=[names[p] for p in positions]).to_pandas()
            n = file.metadata.num_rows
    except (ArrowException, ValueError) as problem:
        raise InputError(f"the Parquet file cannot be read: {str(problem)[:200]}", file=shown, cure="Fetch or write it again") from None

    def column(position: int) -> NDArray[Any]:
        values = frame[names[position]]
        missing = values.isna().to_numpy()
        plain = values.to_numpy(dtype=float, na_value=np.nan) if values.dtype.kind in "fiub" else values.to_numpy(dtype=object)
        return np.ma.MaskedArray(plain, mask=missing)

    return table_of(names, n, column, numbers=numbers, texts=texts, everything=everything, shown=shown)
