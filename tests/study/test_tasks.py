"""Tasks: the same results whoever runs them, nothing lost with a worker, nothing done twice after an interruption."""

import os
import signal
from pathlib import Path

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.study.tasks import Lost, Store, Tasks, run_tasks

SEED = np.random.SeedSequence(7)


def noisy_sum(shared, argument, seed):
    return float(shared["values"].sum() + argument + np.random.default_rng(seed).standard_normal())


def dies_once(shared, argument, seed):
    mark = Path(shared["folder"]) / f"died_{argument}"
    if argument % 5 == 3 and not mark.exists():
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    with (Path(shared["folder"]) / "log").open("a") as log:
        log.write(f"{argument}\n")
    return noisy_sum(shared, argument, seed)


def always_dies(shared, argument, seed):
    os.kill(os.getpid(), signal.SIGKILL)


def some_tasks(function=noisy_sum, n=12, **shared):
    return Tasks(function, {"values": np.arange(5.0), **shared}, {f"task {i}": i for i in range(n)}, SEED)


def test_same_to_the_bit_in_any_order_and_by_any_number_of_processes():
    tasks = some_tasks()
    alone = run_tasks(tasks, processes=1)
    turned = Tasks(tasks.function, tasks.shared, dict(reversed(tasks.arguments.items())), SEED)
    assert alone == run_tasks(tasks, processes=3) == run_tasks(turned, processes=2)
    assert list(alone) == list(tasks.arguments)
    assert len(set(alone.values())) == 12  # each has a seed of its own


def test_a_killed_process_costs_nothing(tmp_path):
    tasks = some_tasks(dies_once, folder=str(tmp_path))
    seen = []
    assert run_tasks(tasks, processes=2, progress=lambda done, n: seen.append(done)) == run_tasks(some_tasks(), processes=1)
    assert (tmp_path / "died_3").exists() and (tmp_path / "died_8").exists()
    assert seen == list(range(13))


def test_a_task_that_kills_every_worker_is_given_up():
    with pytest.raises(Lost, match="task 0"):
        run_tasks(some_tasks(always_dies, n=2), processes=2)


def test_resumes_from_what_is_finished(tmp_path):
    store = Store(tmp_path / "tasks.jsonl", "a")
    tasks = some_tasks(dies_once, folder=str(tmp_path))
    (tmp_path / "died_3").touch()
    (tmp_path / "died_8").touch()

    def stop(done, total):
        if done == 4:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_tasks(tasks, processes=1, store=store, progress=stop)
    with store.path.open("ab") as stream:
        stream.write(b'{"fingerprint": "a", "key": "task 9", "resu')
    assert run_tasks(tasks, processes=1, store=store) == run_tasks(some_tasks(), processes=1)
    done = (tmp_path / "log").read_text().split()
    assert sorted(done, key=int) == [str(i) for i in range(12)]
    assert len(store.read()) == 12
    assert Store(store.path, "another config").read() == {}


def test_addresses_that_lead_nowhere():
    pytest.importorskip("distributed", reason="the extra mufitter[cluster] is not installed")
    with pytest.raises(InputError, match="no address"):
        run_tasks(some_tasks(), scheduler="nonsense")


def test_a_real_cluster_equals_local_processes_even_when_a_worker_is_killed(tmp_path):
    distributed = pytest.importorskip("distributed", reason="the extra mufitter[cluster] is not installed")
    options = {"threads_per_worker": 1, "processes": True, "dashboard_address": None, "worker_dashboard_address": None}
    with distributed.LocalCluster(2, **options) as cluster:
        address = cluster.scheduler_address
        assert run_tasks(some_tasks(), scheduler=address) == run_tasks(some_tasks(), processes=1)
        seen = []
        tasks = some_tasks(dies_once, n=10, folder=str(tmp_path))
        killed = run_tasks(tasks, scheduler=address, progress=lambda done, n: seen.append(done))
    assert killed == run_tasks(some_tasks(n=10), processes=1)
    assert (tmp_path / "died_3").exists() and (tmp_path / "died_8").exists()
    assert seen == list(range(11))
