"""Chunks of chain on disk, so that a killed run loses seconds and a resumed one continues the same chain.

A checkpoint folder holds ``about.json`` (format version, fingerprint of config and data, shape of the run) and one
``replica_R_from_STEP.npz`` for every chunk written. A chunk holds the steps since the one before and the random state after
them. Files are written under a temporary name and renamed, so a chunk is there whole or not at all.
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import IO

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError

__all__ = ["Checkpoint", "Chunk", "remove_checkpoint", "veiled", "write_atomically"]

_FORMAT = 1
_ABOUT = "about.json"


@dataclass(frozen=True)
class Chunk:
    """Steps ``start`` … ``start + n - 1`` of one replica.

    Parameters
    ----------
    start : int
    chain : (n, W, d) ndarray
    log_posterior : (n, W) ndarray
    accepted : int
        Proposals accepted in these steps, all walkers together.
    random_state : tuple
        Of the Mersenne Twister after the last of these steps, as numpy's ``RandomState.get_state`` gives it.
    counts : dict of int
        What the likelihood counted in these steps.
    """

    start: int
    chain: FloatArray
    log_posterior: FloatArray
    accepted: int
    random_state: tuple
    counts: dict[str, int]

    @property
    def stop(self) -> int:
        """One past the last step."""
        return self.start + len(self.chain)


class Checkpoint:
    """The checkpoint of one run.

    Parameters
    ----------
    folder : Path
        The run folder; chunks go to ``folder / "checkpoint"``.
    about : dict
        What must agree for a chain to be continued, e.g. the fingerprint, names, replicas, walkers, seed. JSON types only.
    resume : bool
        Continue an existing checkpoint. If False, an existing one is refused.
    veil : bytes, optional
        Positions are stored unreadable without this key, and come back bit by bit with it.

    Raises
    ------
    InputError
        If there is a checkpoint that may not be continued, naming what differs; or if nothing can be written there.
    """

    def __init__(self, folder: Path, about: dict, *, resume: bool, veil: bytes = b"") -> None:
        self.folder = Path(folder) / "checkpoint"
        self._veil = veil
        self.about = json.loads(json.dumps({"format": _FORMAT, **about}))
        path = self.folder / _ABOUT
        if path.exists():
            self._compare(path, resume)
        else:
            _writable(lambda: self.folder.mkdir(parents=True, exist_ok=True), self.folder)
            write_atomically(path, lambda f: f.write(json.dumps(self.about, indent=1).encode()))

    def _compare(self, path: Path, resume: bool) -> None:
        if not resume:
            raise InputError(
                "an unfinished run is stored here", file=self.folder, cure="Continue it with --resume, or start anew with --replace"
            )
        try:
            found = json.loads(path.read_text())
        except (OSError, ValueError) as error:
            raise InputError(f"the checkpoint cannot be read: {error}", file=path, cure="Start anew with --replace") from error
        differing = [k for k in sorted({*found, *self.about}) if found.get(k) != self.about.get(k)]
        if differing:
            what = "; ".join(f"{k}: stored {found.get(k)!r}, now {self.about.get(k)!r}" for k in differing)
            raise InputError(
                f"the unfinished run stored here is another one ({what})",
                file=self.folder,
                cure="Resume with the config and data it was started with, or choose another run folder",
            )

    def write(self, replica: int, chunks: list[Chunk]) -> None:
        """Store consecutive chunks of a replica as one file."""
        first, last = chunks[0], chunks[-1]
        name, key, position, has_gauss, gauss = last.random_state
        arrays = {
            "start": first.start,
            "chain": veiled(np.concatenate([c.chain for c in chunks]), self._veil),
            "log_posterior": np.concatenate([c.log_posterior for c in chunks]),
            "accepted": sum(c.accepted for c in chunks),
            "random_name": name,
            "random_key": key,
            "random_rest": np.array([position, has_gauss], dtype=np.int64),
            "random_gauss": np.float64(gauss),
            "counts": json.dumps(add_counts(c.counts for c in chunks)),
        }
        path = self.folder / f"replica_{replica}_from_{first.start:09d}.npz"
        write_atomically(path, lambda f: np.savez(f, **arrays))

    def read(self, replica: int) -> list[Chunk]:
        """Return the stored chunks of a replica in order; empty if none was written."""
        chunks: list[Chunk] = []
        for path in sorted(self.folder.glob(f"replica_{replica}_from_*.npz")):
            chunk = _read_chunk(path)
            chunk = replace(chunk, chain=veiled(chunk.chain, self._veil))
            if chunk.start != (chunks[-1].stop if chunks else 0):
                raise InputError("a chunk of the chain before this one is missing", file=path, cure="Start anew with --replace")
            chunks.append(chunk)
        return chunks


def veiled(values: FloatArray, key: bytes) -> FloatArray:
    """Return an array of the same shape with its bits turned by a stream from the key; twice gives it back."""
    if not key:
        return values
    bits = np.ascontiguousarray(values, dtype=float).view(np.uint64)
    stream = np.random.Generator(np.random.PCG64(int.from_bytes(key, "little")))
    return (bits ^ stream.integers(0, 2**64, size=bits.shape, dtype=np.uint64)).view(float)


def _read_chunk(path: Path) -> Chunk:
    import zipfile

    try:
        with np.load(path, allow_pickle=False) as f:
            position, has_gauss = (int(v) for v in f["random_rest"])
            state = (str(f["random_name"]), f["random_key"], position, has_gauss, float(f["random_gauss"]))
            counts = json.loads(str(f["counts"]))
            return Chunk(int(f["start"]), f["chain"], f["log_posterior"], int(f["accepted"]), state, counts)
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as error:
        raise InputError(f"a chunk of the chain cannot be read: {error}", file=path, cure="Start anew with --replace") from error


def add_counts(counts: Iterable[dict[str, int]]) -> dict[str, int]:
    """Sum dicts of numbers key by key."""
    total: dict[str, int] = {}
    for one in counts:
        for key, value in one.items():
            total[key] = total.get(key, 0) + int(value)
    return total


def write_atomically(path: Path, write: Callable[[IO[bytes]], object]) -> None:
    """Write a file whole or not at all.

    Parameters
    ----------
    path : Path
    write : callable
        Given the open binary file.

    Raises
    ------
    InputError
        If the disk is full or the folder cannot be written; what stood at `path` is still there.
    """
    path = Path(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.partial")

    def work() -> None:
        try:
            with open(temporary, "wb") as f:
                write(f)
                f.flush()
                os.fsync(f.fileno())
            os.replace(temporary, path)
        finally:
            temporary.unlink(missing_ok=True)

    _writable(work, path)


def _writable(action: Callable[[], object], path: Path) -> None:
    try:
        action()
    except OSError as error:
        raise InputError(
            f"cannot write here: {error.strerror or error}",
            file=path,
            cure="Free space or choose another run folder; what was stored before is untouched and --resume continues it",
        ) from error


def remove_checkpoint(folder: Path) -> None:
    """Remove the checkpoint of a run folder once its chain is stored elsewhere; other files in it stay."""
    folder = Path(folder) / "checkpoint"
    if not folder.is_dir():
        return
    ours = [*folder.glob("replica_*_from_*.npz"), *folder.glob(".*.partial")]
    for path in [*ours, folder / _ABOUT]:
        path.unlink(missing_ok=True)
    if not any(folder.iterdir()):
        folder.rmdir()
