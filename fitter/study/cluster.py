"""Tasks on a Dask cluster, the extra ``mufitter[cluster]``: the only file that imports ``distributed``."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from fitter.errors import InputError
from fitter.study.tasks import Lost, Tasks, call, give_up, require_scheduler, task_seed

__all__ = ["on_cluster"]

_CONNECT_SECONDS = 10
_BARREN_ROUNDS = 4


def on_cluster(tasks: Tasks, waiting: dict[str, Any], address: str) -> Iterator[tuple[str, Any]]:
    """Run tasks on the workers of a scheduler; what they share is sent once to each worker.

    A task whose worker dies runs again elsewhere; what was shared is sent anew where every worker that held it is gone.
    """
    require_scheduler(address)
    client = _client(address)
    try:
        waiting, lost, barren = dict(waiting), dict.fromkeys(waiting, 0), 0
        while waiting:
            before = len(waiting)
            yield from _round(client, tasks, waiting, lost)
            barren = barren + 1 if len(waiting) == before else 0
            give_up(lost)
            if barren == _BARREN_ROUNDS:
                raise Lost(f"the workers of {address} died {barren} times before any task was done: have they enough memory?")
    finally:
        client.close()


def _client(address: str) -> Any:
    try:
        from distributed import Client
    except ImportError:
        raise InputError(
            "a scheduler needs the package `distributed`, which is not installed", value=address, cure="pip install 'mufitter[cluster]'"
        ) from None
    try:
        client = Client(address, timeout=_CONNECT_SECONDS, set_as_default=False)
    except (OSError, ValueError) as error:
        raise InputError(f"the scheduler does not answer: {error}", value=address, cure="Is it running, and its port open?") from None
    if not client.scheduler_info(n_workers=-1)["workers"]:
        client.close()
        raise InputError("the scheduler has no workers", value=address, cure="Start some, e.g. `dask worker ADDRESS`")
    return client


def _round(client: Any, tasks: Tasks, waiting: dict[str, Any], lost: dict[str, int]) -> Iterator[tuple[str, Any]]:
    """Submit all that waits and yield what ends well; what is lost stays in `waiting`."""
    from concurrent.futures import CancelledError

    from distributed import as_completed
    from distributed.scheduler import KilledWorker

    shared = client.scatter([tasks.shared], broadcast=True, hash=False)[0]
    futures = {
        client.submit(call, tasks.function, shared, argument, task_seed(tasks.seed, key), pure=False, retries=3): key
        for key, argument in waiting.items()
    }
    for future in as_completed(list(futures), loop=client.loop):
        key = futures[future]
        try:
            result = future.result()
        except CancelledError:
            continue  # the last worker that held what is shared is gone: another round
        except KilledWorker:
            lost[key] += 1
            continue
        yield key, result
        del waiting[key]
        future.release()
