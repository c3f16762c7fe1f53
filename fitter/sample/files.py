"""Opening input files: gzipped or not, with a message instead of a traceback."""

from __future__ import annotations

import difflib
import gzip
import hashlib
import io
import os
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from fitter.errors import InputError

__all__ = ["open_binary", "reading", "sha256_of"]

_BUFFER = 1 << 20


@contextmanager
def reading(path: Path, shown: str) -> Iterator[None]:
    """Turn what can go wrong while a file is read into an `InputError` that names it."""
    try:
        yield
    except FileNotFoundError:
        raise InputError("there is no such file", file=shown, cure=_instead(path)) from None
    except IsADirectoryError:
        raise InputError("this is a folder, not a file", file=shown, cure="Give the path of a file in it") from None
    except PermissionError:
        raise InputError("the file may not be read", file=shown, cure="Change its permissions") from None
    except (EOFError, zlib.error, gzip.BadGzipFile) as problem:
        raise InputError(
            f"the compressed file is damaged or cut short ({problem})", file=shown, cure="Fetch it again, or unpack and look at it"
        ) from None
    except OSError as problem:
        raise InputError(f"the file cannot be read: {problem.strerror or problem}", file=shown) from None


def _instead(path: Path) -> str:
    folder = path.parent
    if not folder.is_dir():
        return f"There is no folder {os.path.abspath(folder)} either; paths are relative to the config file"
    near = difflib.get_close_matches(path.name, sorted(os.listdir(folder)), n=1)
    hint = f"Did you mean {near[0]}? " if near else ""
    return f"{hint}It was looked for in {os.path.abspath(folder)}; paths are relative to the config file"


def open_binary(path: Path) -> io.BufferedReader[io.FileIO] | gzip.GzipFile:
    """Open a file, unpacking it on the way where it is gzipped, whatever its name says."""
    stream = io.BufferedReader(io.FileIO(path), _BUFFER)
    packed = stream.peek(2)[:2] == b"\x1f\x8b"
    return gzip.GzipFile(fileobj=stream) if packed else stream


def sha256_of(path: Path) -> str:
    """SHA-256 of a file as it lies on disk."""
    digest = hashlib.sha256()
    with open(path, "rb") as stream:
        while block := stream.read(_BUFFER):
            digest.update(block)
    return digest.hexdigest()
