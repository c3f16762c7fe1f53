"""Independent ensembles, in processes or one after the other, with the same result to the last bit."""

from __future__ import annotations

import multiprocessing as mp
import os
import signal
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import FIRST_COMPLETED, ProcessPoolExecutor, wait
from dataclasses import dataclass, field
from multiprocessing.context import BaseContext
from types import FrameType
from typing import TYPE_CHECKING, Any, Self, TypeVar

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.checkpoint import Checkpoint, Chunk, add_counts

if TYPE_CHECKING:
    from fitter.inference.mixture import StudentMixture
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["Replica", "Replicas", "available_cores", "end_with_parent"]

Result = TypeVar("Result")

# Longest time a replica works before another one has its turn, and between two writes of its chain, in seconds.
_SLICE_SECONDS = 0.25
_STORE_SECONDS = 2.0
_LOOK_SECONDS = 0.2


def available_cores() -> int:
    """Number of cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@dataclass
class Replica:
    """One ensemble: where it is, and the chunks of chain behind it."""

    positions: FloatArray
    log_prob: FloatArray
    random_state: tuple
    chunks: list[Chunk] = field(default_factory=list)
    unwritten: list[Chunk] = field(default_factory=list)
    written_at: float = 0.0

    @property
    def steps(self) -> int:
        """Steps done."""
        return self.chunks[-1].stop if self.chunks else 0

    def append(self, chunk: Chunk) -> None:
        """Go to the end of `chunk`."""
        self.chunks.append(chunk)
        self.positions, self.log_prob = chunk.chain[-1], chunk.log_posterior[-1]
        self.random_state = chunk.random_state


@dataclass(frozen=True)
class _Task:
    """What a worker needs to advance one replica."""

    replica: int
    positions: FloatArray
    log_prob: FloatArray
    random_state: tuple
    start: int
    steps: int
    move: str
    pilot: StudentMixture | None


class Replicas:
    """Advance R replicas together.

    Parameters
    ----------
    log_posterior : LogPosterior
    replicas : list of Replica
        At their starting points.
    move : str
        As in the settings.
    pilot : StudentMixture or None
        For the moves.
    processes : int
        1 works in this process.
    checkpoint : Checkpoint or None

    Notes
    -----
    Use as a context manager: processes end with it. While it is open an interrupt (Ctrl-C) lets every
    replica finish its step and sets `interrupted`; a second one acts at once.
    """

    def __init__(
        self,
        log_posterior: LogPosterior,
        replicas: list[Replica],
        move: str,
        pilot: StudentMixture | None,
        processes: int,
        checkpoint: Checkpoint | None,
    ) -> None:
        self.log_posterior, self.replicas, self.checkpoint = log_posterior, replicas, checkpoint
        self.move, self.pilot = move, pilot
        self.processes = min(processes, len(replicas))
        self.interrupted = False
        self._pool: ProcessPoolExecutor | None = None
        self._restore: Callable[[int, FrameType | None], Any] | int | None = None
        now = time.monotonic()
        for i, replica in enumerate(replicas):
            replica.written_at = now
            for chunk in checkpoint.read(i) if checkpoint else []:
                replica.append(chunk)

    def __enter__(self) -> Self:
        context = _context()
        self._board = _Board(context, len(self.replicas))
        if self.processes > 1:
            self._pool = ProcessPoolExecutor(
                self.processes, mp_context=context, initializer=_start_worker, initargs=(self.log_posterior, self._board, os.getpid())
            )
        if threading.current_thread() is threading.main_thread():
            self._restore = signal.signal(signal.SIGINT, self._on_interrupt)
        return self

    def __exit__(self, *_: object) -> None:
        self._board.stop.value = 1
        if self._pool is not None:
            self._pool.shutdown(wait=True, cancel_futures=True)
        if self._restore is not None:
            signal.signal(signal.SIGINT, self._restore)

    def _on_interrupt(self, *_: object) -> None:
        self.interrupted = True
        self._board.stop.value = 1
        signal.signal(signal.SIGINT, self._restore)

    @property
    def steps(self) -> int:
        """Steps that all replicas have done."""
        return min(r.steps for r in self.replicas)

    def advance(self, target: int, look: Callable[[int], None] | None = None) -> None:
        """Bring every replica to at least `target` steps, or as far as an interrupt lets it.

        Parameters
        ----------
        target : int
        look : callable, optional
            Called a few times a second with the steps done by the slowest replica.
        """
        for i, replica in enumerate(self.replicas):
            self._board.steps[i] = replica.steps
        try:
            if self._pool is None:
                self._advance_here(target, look)
            else:
                self._advance_in_pool(self._pool, target, look)
        except KeyboardInterrupt:
            # Only where no handler could be set, e.g. outside the main thread.
            self.interrupted = True
        if self.interrupted:
            self._flush(everything=True)

    def _advance_here(self, target: int, look: Callable[[int], None] | None) -> None:
        # In turns, so that an interrupt finds all of them about equally long.
        while self.steps < target and not self.interrupted:
            for i in range(len(self.replicas)):
                if self.replicas[i].steps < target and not self.interrupted:
                    self._take(i, _advance(self.log_posterior, self._task(i, target), self._board))
            if look is not None:
                look(self.steps)

    def _advance_in_pool(self, pool: ProcessPoolExecutor, target: int, look: Callable[[int], None] | None) -> None:
        running = {pool.submit(_advance_in_worker, self._task(i, target)): i for i, r in enumerate(self.replicas) if r.steps < target}
        while running:
            done, _ = wait(running, timeout=_LOOK_SECONDS, return_when=FIRST_COMPLETED)
            for future in done:
                i = running.pop(future)
                self._take(i, future.result())
                if self.replicas[i].steps < target and not self.interrupted:
                    running[pool.submit(_advance_in_worker, self._task(i, target))] = i
            if look is not None:
                look(min(self._board.steps))

    def map(self, function: Callable[..., Result], arguments: list[tuple[Any, ...]]) -> list[Result]:
        """Return ``function(log_posterior, *args)`` for every tuple of `arguments`, in order, from the worker processes."""
        if self._pool is None:
            return [function(self.log_posterior, *args) for args in arguments]
        return list(self._pool.map(_call_in_worker, [(function, args) for args in arguments]))

    def _task(self, i: int, target: int) -> _Task:
        r = self.replicas[i]
        return _Task(i, r.positions, r.log_prob, r.random_state, r.steps, target - r.steps, self.move, self.pilot)

    def _take(self, i: int, chunk: Chunk) -> None:
        if len(chunk.chain) == 0:
            return
        self.replicas[i].append(chunk)
        self.replicas[i].unwritten.append(chunk)
        self._flush()

    def _flush(self, everything: bool = False) -> None:
        if self.checkpoint is None:
            return
        now = time.monotonic()
        for i, replica in enumerate(self.replicas):
            if replica.unwritten and (everything or now - replica.written_at >= _STORE_SECONDS):
                self.checkpoint.write(i, replica.unwritten)
                replica.unwritten = []
                replica.written_at = now

    def chain(self, steps: int) -> tuple[FloatArray, FloatArray]:
        """Return the first `steps` steps of all replicas: positions (R, S, W, n) and ln densities (R, S, W)."""
        chain = [np.concatenate([c.chain for c in r.chunks])[:steps] for r in self.replicas]
        values = [np.concatenate([c.log_posterior for c in r.chunks])[:steps] for r in self.replicas]
        return np.stack(chain), np.stack(values)

    @property
    def accepted(self) -> float:
        """Share of proposals accepted."""
        tried = sum(c.log_posterior.size for r in self.replicas for c in r.chunks)
        return sum(c.accepted for r in self.replicas for c in r.chunks) / max(tried, 1)

    @property
    def counts(self) -> dict[str, int]:
        """What the likelihood counted, all replicas together."""
        return add_counts(c.counts for r in self.replicas for c in r.chunks)


class _Board:
    """A few numbers that workers and parent share: a flag that asks to stop, and each replica's steps."""

    def __init__(self, context: BaseContext, n: int) -> None:
        self.stop = context.Value("b", 0, lock=False)
        self.steps = context.Array("q", n, lock=False)


def _context() -> BaseContext:
    """Fork where it is safe: the likelihood is then shared without a copy."""
    return mp.get_context("fork" if sys.platform.startswith("linux") else "spawn")


_worker: dict[str, Any] = {}


def _start_worker(log_posterior: LogPosterior, board: _Board, parent: int) -> None:
    """Once per process: keep the likelihood, one BLAS thread, leave Ctrl-C to the parent, and end with it."""
    from threadpoolctl import threadpool_limits

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _worker.update(log_posterior=log_posterior, board=board, limit=threadpool_limits(1))
    end_with_parent(parent)


def end_with_parent(parent: int | None = None) -> None:
    """Make this worker process end with the one that started it, by default its parent as it is now.

    A killed parent cannot tell its workers: they would finish what nobody wants, keep its locks, and wait for work for ever.
    """
    threading.Thread(target=_end_with, args=(os.getppid() if parent is None else parent,), daemon=True).start()


def _end_with(parent: int) -> None:
    while os.getppid() == parent:
        time.sleep(0.5)
    os._exit(1)


def _advance_in_worker(task: _Task) -> Chunk:
    return _advance(_worker["log_posterior"], task, _worker["board"])


def _call_in_worker(work: tuple[Callable[..., Result], tuple[Any, ...]]) -> Result:
    function, args = work
    return function(_worker["log_posterior"], *args)


def _advance(log_posterior: LogPosterior, task: _Task, board: _Board) -> Chunk:
    """Run one replica until its steps are done, its time is over, or a stop is asked for."""
    from emcee.state import State
    from threadpoolctl import threadpool_limits

    from fitter.inference.ensemble import Ensemble
    from fitter.inference.moves import ensemble_moves

    before = dict(log_posterior.counts)
    walkers, ndim = task.positions.shape
    sampler = Ensemble(walkers, ndim, log_posterior, vectorize=True, moves=ensemble_moves(task.move, task.pilot))
    state = State(task.positions, log_prob=task.log_prob, random_state=task.random_state, copy=True)
    end = time.monotonic() + _SLICE_SECONDS
    with threadpool_limits(1):
        for _ in sampler.sample(state, iterations=task.steps, skip_initial_state_check=True):
            done = sampler.backend.iteration
            board.steps[task.replica] = task.start + done
            if board.stop.value or time.monotonic() > end:
                break
    done = sampler.backend.iteration
    counts = {k: v - before.get(k, 0) for k, v in log_posterior.counts.items()}
    return Chunk(
        start=task.start,
        chain=sampler.backend.chain[:done].copy(),
        log_posterior=sampler.backend.log_prob[:done].copy(),
        accepted=int(sampler.backend.accepted.sum()),
        random_state=sampler.random_state,
        counts=counts,
    )
