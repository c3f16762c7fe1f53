"""Many fits as tasks: on local processes or on a Dask cluster, each with its own seed, resumed where a study stopped.

A task is a function of what all tasks share, of its own arguments and of a seed that depends on the task's key alone. So results
are the same to the bit, whatever runs the tasks and in whatever order, and a task that was lost with its worker simply runs again.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any, TypeVar

import numpy as np

from fitter.errors import InputError, MufitterError
from fitter.inference.seeds import child_seed

Result = TypeVar("Result")

__all__ = ["Lost", "Store", "Tasks", "call", "give_up", "require_scheduler", "run_tasks", "task_seed"]

_ATTEMPTS = 4  # a task that has taken this many workers with it is given up
_shared: tuple[Callable, Any] | None = None


class Lost(MufitterError):
    """A task whose workers died again and again."""


@dataclass(frozen=True)
class Tasks:
    """What there is to do.

    Parameters
    ----------
    function : callable
        ``function(shared, argument, seed)`` → what JSON can hold.
    shared : object
        Sent once to every worker.
    arguments : dict
        Key of each task → its argument.
    seed : SeedSequence
        That of each task descends from it by the task's key.
    """

    function: Callable[[Any, Any, np.random.SeedSequence], Any]
    shared: Any
    arguments: Mapping[str, Any]
    seed: np.random.SeedSequence


class Store:
    """Results of finished tasks in a file, one JSON line each, so that an interrupted study resumes.

    Parameters
    ----------
    path : Path
    fingerprint : str
        Identifies config, data and task; lines with another one are not taken.
    """

    def __init__(self, path: Path, fingerprint: str) -> None:
        self.path, self.fingerprint = Path(path), fingerprint

    def read(self) -> dict[str, Any]:
        """Return the results by key; a line cut short by a crash counts as not done."""
        if not self.path.exists():
            return {}
        found = {}
        for line in self.path.read_text(encoding="utf-8").splitlines():
            try:
                entry = json.loads(line)
            except ValueError:
                continue
            if isinstance(entry, dict) and entry.get("fingerprint") == self.fingerprint:
                found[entry["key"]] = entry["result"]
        return found

    def add(self, key: str, result: Any) -> None:
        """Append one result, on the disk when this returns."""
        self.path.parent.mkdir(parents=True, exist_ok=True)
        line = json.dumps({"fingerprint": self.fingerprint, "key": key, "result": result}, ensure_ascii=False)
        with self.path.open("a+b") as stream:
            # A line cut short by a crash must not swallow this one.
            torn = stream.tell() > 0 and not self._ends_whole(stream)
            stream.write((b"\n" if torn else b"") + line.encode() + b"\n")
            stream.flush()
            os.fsync(stream.fileno())

    @staticmethod
    def _ends_whole(stream: IO[bytes]) -> bool:
        stream.seek(-1, os.SEEK_END)
        return stream.read(1) == b"\n"


def task_seed(seed: np.random.SeedSequence, key: str) -> np.random.SeedSequence:
    """Return the seed of a task: a descendant of the study's, by the hash of its key."""
    digest = hashlib.sha256(key.encode()).digest()
    return child_seed(seed, *(int.from_bytes(digest[i : i + 4], "little") for i in range(0, 16, 4)))


def run_tasks(
    tasks: Tasks,
    *,
    processes: int | None = None,
    scheduler: str | None = None,
    store: Store | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> dict[str, Any]:
    """Run every task that is not done yet.

    Parameters
    ----------
    tasks : Tasks
    processes : int, optional
        Local processes, one a core by default; 1 runs everything in this process.
    scheduler : str, optional
        Address of a Dask scheduler; its workers are used instead.
    store : Store, optional
        Where finished tasks are remembered.
    progress : callable, optional
        Gets the numbers of finished and of all tasks.

    Returns
    -------
    dict
        Key → result, in the order of ``tasks.arguments``.

    Raises
    ------
    InputError
        The scheduler cannot be reached, or ``distributed`` is not installed.
    Lost
        A task has brought down its worker several times.
    """
    finished = {k: v for k, v in (store.read() if store else {}).items() if k in tasks.arguments}
    waiting = {k: v for k, v in tasks.arguments.items() if k not in finished}
    if progress:
        progress(len(finished), len(tasks.arguments))
    for key, result in _results(tasks, waiting, processes, scheduler):
        # Through JSON, so that a result is the same whether it was stored or not.
        finished[key] = json.loads(json.dumps(result))
        if store:
            store.add(key, finished[key])
        if progress:
            progress(len(finished), len(tasks.arguments))
    return {key: finished[key] for key in tasks.arguments}


def _results(tasks: Tasks, waiting: dict[str, Any], processes: int | None, scheduler: str | None) -> Iterator[tuple[str, Any]]:
    from fitter.inference.replicas import available_cores

    if not waiting:
        return iter(())
    if scheduler:
        from fitter.study.cluster import on_cluster

        return on_cluster(tasks, waiting, scheduler)
    processes = min(processes or available_cores(), len(waiting))
    return _here(tasks, waiting) if processes == 1 else _in_processes(tasks, waiting, processes)


def call(function: Callable[[Any, Any, Any], Result], shared: Any, argument: Any, seed: np.random.SeedSequence | None) -> Result:
    """Run one task with one BLAS thread: more would fight over the cores, and change the last digits."""
    from threadpoolctl import threadpool_limits

    with threadpool_limits(1):
        return function(shared, argument, seed)


def _here(tasks: Tasks, waiting: dict[str, Any]) -> Iterator[tuple[str, Any]]:
    for key, argument in waiting.items():
        yield key, call(tasks.function, tasks.shared, argument, task_seed(tasks.seed, key))


def _in_processes(tasks: Tasks, waiting: dict[str, Any], processes: int) -> Iterator[tuple[str, Any]]:
    waiting, lost = dict(waiting), dict.fromkeys(waiting, 0)
    while waiting:
        running: dict = {}
        try:
            with ProcessPoolExecutor(processes, initializer=_receive, initargs=(tasks.function, tasks.shared)) as pool:
                todo = iter(list(waiting.items()))
                # No more in flight than can start soon: those are the ones a dead worker may have had.
                yield from _drain(pool, todo, waiting, running, tasks.seed, processes)
        except BrokenProcessPool:
            for key in running.values():
                lost[key] += 1
            give_up(lost)


def _drain(
    pool: ProcessPoolExecutor,
    todo: Iterator[tuple[str, Any]],
    waiting: dict[str, Any],
    running: dict[Future[Any], str],
    seed: np.random.SeedSequence,
    processes: int,
) -> Iterator[tuple[str, Any]]:
    def submit() -> None:
        for key, argument in todo:
            running[pool.submit(_call_shared, argument, task_seed(seed, key))] = key
            return

    for _ in range(processes + 1):
        submit()
    while running:
        done, _ = wait(running, return_when=FIRST_COMPLETED)
        for future in done:
            key, result = running[future], future.result()
            del running[future], waiting[key]
            yield key, result
            submit()


def give_up(lost: dict[str, int]) -> None:
    """Raise where a task has lost its worker too often."""
    hopeless = [key for key, count in lost.items() if count >= _ATTEMPTS]
    if hopeless:
        raise Lost(f"the worker died {_ATTEMPTS} times in the task {hopeless[0]!r}: is there enough memory for it?")


def _receive(function: Callable[..., Any], shared: Any) -> None:
    from fitter.inference.replicas import end_with_parent

    global _shared
    _shared = (function, shared)
    end_with_parent()


def _call_shared(argument: Any, seed: np.random.SeedSequence) -> Any:
    if _shared is None:
        raise RuntimeError("this worker was given nothing to work on")
    function, shared = _shared
    return call(function, shared, argument, seed)


def require_scheduler(address: str) -> None:
    """Refuse what is no address of a scheduler before any work is done."""
    if "://" not in address and ":" not in address:
        raise InputError("this is no address of a Dask scheduler", value=address, cure="Give it as tcp://HOST:PORT")
