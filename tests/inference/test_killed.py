"""Kill real processes at random moments: the resumed chain is the uninterrupted one, bit for bit.

MUFITTER_SOAK sets the number of kills (6 by default).
"""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

KILLS = int(os.environ.get("MUFITTER_SOAK", "6"))
SCRIPT = Path(__file__).with_name("killed_run.py")
pytestmark = pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")


def start(folder, processes, output):
    folder.mkdir(exist_ok=True)
    return subprocess.Popen([sys.executable, str(SCRIPT), str(folder), str(processes), str(output)], start_new_session=True)


def wait_until_sampling(folder, process):
    """Imports take most of the time of so short a run; kills are to hit the sampling."""
    flag = folder / f"started_{process.pid}"
    while not flag.exists() and process.poll() is None:
        time.sleep(0.005)


def alive_in_session(session):
    """Process ids of a session that still run."""
    found = []
    for path in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = path.read_text().rsplit(")", 1)[1].split()
        except OSError:
            continue
        if int(fields[3]) == session and fields[0] != "Z":
            found.append(int(path.parent.name))
    return found


def test_killed_again_and_again(tmp_path):
    rng = np.random.default_rng(2)
    reference = tmp_path / "reference"
    began = time.monotonic()
    assert start(tmp_path / "whole", 1, reference).wait(120) == 0
    length = time.monotonic() - began
    kills = runs = 0
    while kills < KILLS:
        folder, output = tmp_path / f"run{runs}", tmp_path / f"chain{runs}"
        runs += 1
        while not output.exists():
            process = start(folder, 1 + kills % 2, output)
            wait_until_sampling(folder, process)
            if kills < KILLS:
                time.sleep(rng.uniform(0, 0.5 * length))
            else:
                process.wait(120)
            if process.poll() is None:
                os.kill(process.pid, signal.SIGKILL)
                kills += 1
            process.wait()
        assert output.read_text() == reference.read_text()


def killed_leaves_nothing(process):
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    deadline = time.monotonic() + 10
    while alive_in_session(process.pid) and time.monotonic() < deadline:
        time.sleep(0.05)
    return alive_in_session(process.pid) == []


IN_PROC = pytest.mark.skipif(not Path("/proc").is_dir(), reason="looks for processes in /proc")


@IN_PROC
def test_workers_end_with_a_killed_parent(tmp_path):
    process = start(tmp_path / "run", 2, tmp_path / "chain")
    wait_until_sampling(tmp_path / "run", process)
    time.sleep(0.3)
    assert killed_leaves_nothing(process)


NAPS = """
import pathlib, sys, time
import numpy as np

def nap(*_):
    (pathlib.Path(sys.argv[1]) / f"started_{time.monotonic_ns()}").touch()
    time.sleep(120)

"""
STUDY = """
from fitter.study.tasks import Tasks, run_tasks
run_tasks(Tasks(nap, None, {"a": 1, "b": 2}, np.random.SeedSequence(1)), processes=2)
"""


COMPARISON = """
from fitter import comparing
comparing._fit_one, comparing._sampled, comparing.available_cores = nap, lambda variant: (), lambda: 2
comparing._fit_all((["a", "b"], None, None, None), False, print)
"""


@IN_PROC
@pytest.mark.parametrize("code", [STUDY, COMPARISON], ids=["study", "comparison"])
def test_workers_of_many_fits_end_with_a_killed_parent(code, tmp_path):
    process = subprocess.Popen([sys.executable, "-c", NAPS + code, str(tmp_path)], start_new_session=True)
    deadline = time.monotonic() + 60
    while len(list(tmp_path.iterdir())) < 2 and process.poll() is None and time.monotonic() < deadline:
        time.sleep(0.02)
    assert len(alive_in_session(process.pid)) >= 3
    assert killed_leaves_nothing(process)
