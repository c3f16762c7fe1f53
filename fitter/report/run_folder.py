"""The run folder: made beside its final place and moved there whole, never at the cost of anything else."""

from __future__ import annotations

import errno
import fnmatch
import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from fitter.errors import InputError
from fitter.parameters import declare_again
from fitter.report.summary import SCHEMA

if TYPE_CHECKING:
    from fitter.inference.posterior import Posterior

__all__ = ["Run", "RunFolder", "is_run_folder", "read_run", "write_atomic", "writing"]

MARKER = ".mufitter-run.json"
FOLDER_FORMAT = "mufitter run 1"
_LOCK = ".lock"
_WITHOUT_VALUE = (MARKER, _LOCK, "config.yaml", "run.log")
# Later commands add these to a finished folder.
_ADDED_LATER = (
    *(f"figures/*.{kind}" for kind in ("pdf", "png", "svg", "eps", "txt")),
    *(f"tables/*.{kind}" for kind in ("tex", "csv", "md")),
    *(f"{name}.{kind}" for name in ("posterior", "densities") for kind in ("csv", "parquet")),
    "report.html",
    "capsule*.json",
)

_REASONS = {
    errno.ENOSPC: ("the disk is full", "Make room, then continue with --resume"),
    errno.EDQUOT: ("the disk quota is used up", "Make room, then continue with --resume"),
    errno.EROFS: ("the file system is read-only", "Choose another place with --run-folder"),
    errno.EACCES: ("there is no permission to write here", "Choose another place with --run-folder"),
    errno.EPERM: ("there is no permission to write here", "Choose another place with --run-folder"),
    errno.ENAMETOOLONG: ("the name is too long", "Choose a shorter one with --run-folder"),
    errno.ENOTDIR: ("a part of this path is a file", "Choose another place with --run-folder"),
    errno.EEXIST: ("a part of this path is a file", "Choose another place with --run-folder"),
}


@contextmanager
def writing(path: str | Path) -> Iterator[None]:
    """Turn a failure to write into a message: disk full, read-only, no permission."""
    try:
        yield
    except OSError as error:
        if error.errno not in _REASONS:
            raise
        problem, cure = _REASONS[error.errno]
        raise InputError(problem, file=error.filename or path, cure=cure) from error


def write_atomic(path: str | Path, content: str | bytes) -> None:
    """Write a file so that a reader sees the old content or the new, never a part."""
    path = Path(path)
    data = content.encode() if isinstance(content, str) else content
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with temporary.open("wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def is_run_folder(path: str | Path) -> bool:
    """Return whether a folder was written by mufitter: by its marker, or by its summary beside a config."""
    path = Path(path)
    if _json_of(path / MARKER).get("format", "").startswith("mufitter run"):
        return True
    schema = _json_of(path / "summary.json").get("schema")
    return isinstance(schema, str) and schema.startswith("mufitter summary") and (path / "config.yaml").is_file()


def _json_of(path: Path) -> dict:
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return content if isinstance(content, dict) else {}


class RunFolder:
    """A run folder in the making.

    It grows in ``path``, a sibling called NAME.unfinished, and takes its final place in one move when
    it is finished. What was there before is removed only after that.

    Parameters
    ----------
    target : path-like
        The final place.
    replace : bool
        Whether an earlier run there may be replaced.
    """

    def __init__(self, target: str | Path, *, replace: bool = False) -> None:
        # A link to a run folder on another disk stays a link.
        self.target = Path(target).resolve()
        self.path = self.target.with_name(self.target.name + ".unfinished")
        self._old = self.target.with_name(f".{self.target.name}.replaced-by-mufitter")
        self.replace = replace
        self._lock: TextIO | None = None

    def check_target(self, *, resume: bool = False) -> None:
        """Refuse a target that holds something else, or an earlier run without leave to replace it.

        Raises
        ------
        InputError
            With nothing changed on disk.
        """
        if not self.target.exists() or (self.target.is_dir() and not any(self.target.iterdir())):
            return
        cure = "Choose another place with --run-folder"
        if not self.target.is_dir():
            raise InputError("a file stands where the run folder should go", file=self.target, cure=cure)
        if not is_run_folder(self.target):
            problem = "this folder exists and is not a run folder of mufitter, it is left alone"
            raise InputError(problem, file=self.target, cure=cure)
        if not self.replace and not resume:
            raise InputError("a run is already there", file=self.target, cure=f"Replace it with --replace. {cure}")
        foreign = self._foreign()
        if foreign:
            names = ", ".join(foreign[:5]) + (", …" if len(foreign) > 5 else "")
            problem = f"the run folder also holds what mufitter did not write: {names}"
            raise InputError(problem, file=self.target, cure=f"Move that away first. {cure}")

    @property
    def earlier(self) -> Path | None:
        """The folder of the run that a resumed fit would continue, or None."""
        if self._is_unfinished():
            return self.path
        return self.target if is_run_folder(self.target) else None

    def open(self, *, resume: bool = False) -> None:
        """Create the unfinished folder, or take up one that is there, and lock it against a second process.

        Raises
        ------
        InputError
            An unfinished run that was not asked for, another process at work, or no way to write.
        """
        with writing(self.target):
            self.target.parent.mkdir(parents=True, exist_ok=True)
            self._recover()
            self.check_target(resume=resume)
            self._refuse_unfinished(resume)
            if resume and not self.path.exists() and is_run_folder(self.target):
                self._copy_target()
            self.path.mkdir(exist_ok=True)
            self._take_lock()
            if not resume:
                self._clear()
            write_atomic(self.path / MARKER, json.dumps({"format": FOLDER_FORMAT}))

    def _copy_target(self) -> None:
        copy = self.target.with_name(f".{self.target.name}.copied-by-mufitter")
        shutil.rmtree(copy, ignore_errors=True)
        shutil.copytree(self.target, copy, ignore=shutil.ignore_patterns("figures", "tables", *_NOT_COPIED))
        write_atomic(copy / MARKER, json.dumps({"format": FOLDER_FORMAT}))
        os.rename(copy, self.path)

    def finish(self) -> Path:
        """Move the folder to its place and return that; an earlier run is removed afterwards."""
        with writing(self.target):
            self._drop_lock()
            files = sorted(str(p.relative_to(self.path)) for p in self.path.rglob("*") if p.is_file())
            write_atomic(self.path / MARKER, json.dumps({"format": FOLDER_FORMAT, "files": files}, indent=1))
            if self.target.exists() and any(self.target.iterdir()):
                os.rename(self.target, self._old)
            os.rename(self.path, self.target)
            _sync(self.target.parent)
            if self._old.exists():
                shutil.rmtree(self._old)
        return self.target

    def leave(self) -> None:
        """Give the folder up: what can be resumed stays, a folder without value goes."""
        self._drop_lock()
        if self.path.is_dir() and self._without_value():
            shutil.rmtree(self.path)

    def _foreign(self) -> list[str]:
        written = set(_json_of(self.target / MARKER).get("files") or _REGULAR) | {MARKER}
        present = (str(p.relative_to(self.target)) for p in sorted(self.target.rglob("*")) if p.is_symlink() or not p.is_dir())
        return [name for name in present if name not in written and not any(fnmatch.fnmatch(name, known) for known in _ADDED_LATER)]

    def _refuse_unfinished(self, resume: bool) -> None:
        if not self.path.exists():
            return
        if not self.path.is_dir() or (any(self.path.iterdir()) and not self._is_unfinished()):
            raise InputError("this is in the way and not mufitter's", file=self.path, cure="Move it, or use another --run-folder")
        if not resume and not self.replace and not self._without_value():
            cure = "Continue it with --resume, or discard it with --replace"
            raise InputError("an unfinished run is there", file=self.path, cure=cure)

    def _is_unfinished(self) -> bool:
        marker = _json_of(self.path / MARKER)
        return marker.get("format", "").startswith("mufitter run") and "files" not in marker

    def _without_value(self) -> bool:
        return all(p.name in _WITHOUT_VALUE for p in self.path.iterdir())

    def _clear(self) -> None:
        for entry in self.path.iterdir():
            if entry.name == _LOCK:
                continue
            shutil.rmtree(entry) if entry.is_dir() and not entry.is_symlink() else entry.unlink()

    def _recover(self) -> None:
        """Undo or end a replacement that was cut off between its two moves."""
        if not self._old.is_dir() or not is_run_folder(self._old):
            return
        if self.target.exists():
            shutil.rmtree(self._old)
        else:
            os.rename(self._old, self.target)

    def _take_lock(self) -> None:
        try:
            import fcntl
        except ImportError:  # not a POSIX system: no lock, as before
            return
        self._lock = (self.path / _LOCK).open("w")
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            self._lock.close()
            self._lock = None
            cure = "Wait for it, or use another --run-folder"
            raise InputError("another mufitter is at work in this run folder", file=self.path, cure=cure) from None

    def _drop_lock(self) -> None:
        if self._lock is not None:
            (self.path / _LOCK).unlink(missing_ok=True)
            self._lock.close()
            self._lock = None


_NOT_COPIED = (
    *("figures", "tables", "summary.*", "chain.h5", "figures_data.h5"),
    *("methods.*", "references.bib", "posterior.*", "densities.*", "report.html"),
)
_REGULAR = (
    *("config.yaml", "summary.json", "summary.md", "summary.csv", "chain.h5", "run.log"),
    *("figures_data.h5", "report.html", "methods.md", "methods.tex", "references.bib"),
)


def _sync(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


@dataclass(frozen=True)
class Run:
    """A finished run, read back.

    Parameters
    ----------
    folder : Path
    summary : dict
        The contents of summary.json.
    """

    folder: Path
    summary: dict

    @property
    def config_file(self) -> Path:
        """The config as run."""
        return self.folder / "config.yaml"

    @cached_property
    def posterior(self) -> Posterior:
        """The draws, read from chain.h5 on first use; raises InputError if that is damaged."""
        from fitter.report.chain_file import read_chain

        return read_chain(self.folder / "chain.h5")


def read_run(path: str | Path) -> Run:
    """Read a run folder.

    Parameters
    ----------
    path : path-like
        The folder, or a file in it.

    Raises
    ------
    InputError
        No such folder, no run, unfinished, damaged, or written in another format.
    """
    folder = Path(path)
    folder = folder.parent if folder.is_file() else folder
    unfinished = folder.with_name(folder.name + ".unfinished")
    if not folder.is_dir():
        cure = "The fit is unfinished: continue it with `mufitter fit CONFIG --resume`" if unfinished.is_dir() else None
        raise InputError("there is no such run folder", file=folder, cure=cure)
    file = folder / "summary.json"
    if not file.is_file():
        raise InputError("this is no finished run: summary.json is missing", file=folder, cure="Give the folder that `mufitter fit` wrote")
    try:
        summary = json.loads(file.read_text(encoding="utf-8"))
    except UnicodeDecodeError:
        raise InputError("the summary is damaged: not text", file=file, cure="Run the fit again with --replace") from None
    except json.JSONDecodeError as error:
        problem = f"the summary is damaged or cut short: {error.msg}"
        raise InputError(problem, file=file, row=error.lineno, cure="Run the fit again with --replace") from None
    written = summary.get("schema") if isinstance(summary, dict) else None
    if written != SCHEMA:
        problem = f"the format is not {SCHEMA!r}"
        raise InputError(problem, file=file, value=written, cure="Another version of mufitter wrote it: use that one")
    declare_again(summary.get("declared"))
    return Run(folder, summary)
