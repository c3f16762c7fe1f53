"""A disk that is really full, and one that is really read-only: a clear message, nothing lost, and the run goes on afterwards."""

import os
import shutil
import subprocess
import sys

import h5py
import numpy as np
import pytest

CONFIG = """
sample:
  table: table.csv
  columns: {redshift: z, distance_modulus: mu}
  uncertainty: [{intrinsic: 0.12}]
  distance_scale: absolute
model: flat_lcdm
sampling: {target_ess: 2000, walkers: 64, seed: 3}
figures: {only: [corner], formats: [png]}
"""


def _mount(*arguments):
    if not sys.platform.startswith("linux") or os.geteuid() != 0 or shutil.which("mount") is None:
        pytest.skip("needs root on Linux, to mount a small disk")
    done = subprocess.run(["mount", *map(str, arguments)], capture_output=True, text=True, check=False)
    if done.returncode:
        pytest.skip(f"this machine mounts nothing: {done.stderr.strip()}")


@pytest.fixture
def disk(tmp_path):
    """A disk of 1 MB: room for the beginning of a chain only."""
    folder = tmp_path / "disk"
    folder.mkdir()
    _mount("-t", "tmpfs", "-o", "size=1m", "tmpfs", folder)
    yield folder
    subprocess.run(["umount", folder], check=True)


@pytest.fixture
def config(tmp_path):
    rng = np.random.default_rng(5)
    z = np.sort(rng.uniform(0.03, 1.1, 60))
    mu = 5 * np.log10(z * (1 + 0.7 * z)) + 43.16 + 0.12 * rng.standard_normal(60)
    (tmp_path / "table.csv").write_text("z,mu\n" + "".join(f"{a:.6f},{b:.6f}\n" for a, b in zip(z, mu, strict=True)))
    (tmp_path / "config.yaml").write_text(CONFIG)
    return tmp_path / "config.yaml"


def mufitter(*arguments):
    return subprocess.run([sys.executable, "-m", "fitter.cli", *map(str, arguments)], capture_output=True, text=True, check=False)


def chain(folder):
    with h5py.File(folder / "chain.h5") as file:
        return file["chain"][()]


def test_a_full_disk_is_told_and_the_run_continues_with_room(disk, config, tmp_path):
    stopped = mufitter("fit", config, "--run-folder", disk / "run")
    assert stopped.returncode == 2
    assert "disk is full" in stopped.stderr or "No space left" in stopped.stderr
    assert "--resume" in stopped.stderr and "Traceback" not in stopped.stderr
    assert not (disk / "run").exists()
    _mount("-o", "remount,size=200m", disk)
    ended = mufitter("fit", config, "--run-folder", disk / "run", "--resume")
    assert ended.returncode == 0, ended.stderr
    assert mufitter("fit", config, "--run-folder", tmp_path / "whole").returncode == 0
    np.testing.assert_array_equal(chain(disk / "run"), chain(tmp_path / "whole"))


def test_what_is_on_a_full_disk_stays(disk, config):
    (disk / "run").mkdir()
    (disk / "run" / "summary.json").write_text("{}")
    (disk / "run" / ".mufitter-run.json").write_text('{"format": "mufitter run 1"}')
    before = {p.name: p.read_bytes() for p in (disk / "run").iterdir()}
    assert mufitter("fit", config, "--run-folder", disk / "run", "--replace").returncode == 2
    assert {p.name: p.read_bytes() for p in (disk / "run").iterdir()} == before


def test_a_read_only_disk_is_told_before_any_work(disk, config):
    _mount("-o", "remount,ro", disk)
    refused = mufitter("fit", config, "--run-folder", disk / "run")
    assert refused.returncode == 2
    assert "read-only" in refused.stderr and "--run-folder" in refused.stderr and "Traceback" not in refused.stderr
