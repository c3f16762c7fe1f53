"""HDF5 files written whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

__all__ = ["writing_hdf5"]


@contextmanager
def writing_hdf5(path: str | Path, file_format: str) -> Iterator[Any]:
    """Open an HDF5 file for writing under a temporary name; it takes its place once it is complete and on the disk."""
    import h5py

    path = Path(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with h5py.File(temporary, "w") as file:
            file.attrs["format"] = file_format
            yield file
        with temporary.open("rb+") as stream:
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)
