"""The commands of studies, as a user gives them."""

import json
import os
import subprocess
import sys

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.studies import Place, stress

CONFIG = """
sample:
  table: table.csv
  columns: {redshift: z, distance_modulus: mu, group: survey}
  uncertainty: [{intrinsic: 0.12}, {modes: modes.csv, label: calibration}]
model: flat_lcdm
sampling: {seed: 4}
run_folder: RUN
"""


@pytest.fixture
def folder(tmp_path):
    rng = np.random.default_rng(2)
    z = np.sort(rng.uniform(0.03, 1.1, 60))
    mu = 5 * np.log10(z * (1 + 0.75 * z)) + 43.2 + 0.12 * rng.standard_normal(60)
    rows = zip(z, mu, np.where(np.arange(60) % 2, "east", "west"), strict=True)
    (tmp_path / "table.csv").write_text("z,mu,survey\n" + "".join(f"{a:.17g},{b:.17g},{c}\n" for a, b, c in rows))
    (tmp_path / "modes.csv").write_text("tilt\n" + "".join(f"{0.02 * a:.17g}\n" for a in z))
    (tmp_path / "fit.yaml").write_text(CONFIG.replace("RUN", str(tmp_path / "run")))
    (tmp_path / "blind.yaml").write_text(CONFIG.replace("RUN", str(tmp_path / "run")) + "blind: true\n")
    return tmp_path


def mufitter(*arguments):
    command = [sys.executable, "-m", "fitter.cli", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, env={**os.environ, "OPENBLAS_NUM_THREADS": "1"})


def test_stress_prints_its_verdict_and_writes_beside_the_run(folder):
    done = mufitter("stress", folder / "fit.yaml", "--processes", 1)
    assert done.returncode == 0, done.stderr
    assert "without east" in done.stdout and "survives" in done.stdout
    written = json.loads((folder / "run_stress" / "stress.json").read_text())
    assert written["schema"] == "mufitter stress 1" and len(written["config_sha256"]) == 64
    again = mufitter("stress", folder / "fit.yaml")
    assert again.returncode == 2 and "--replace" in again.stderr


def test_rehearse_prints_json_and_refuses_nonsense(folder):
    done = mufitter("rehearse", folder / "fit.yaml", "--mocks", 5, "--truth", "omega_m=0.3", "--json", "--processes", 1)
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["mocks"] == 5 and found["truth"] == {"omega_m": 0.3}
    wrong = mufitter("rehearse", folder / "fit.yaml", "--truth", "omega_m=lots", "--run-folder", folder / "x")
    assert wrong.returncode == 2 and "NAME=NUMBER" in wrong.stderr
    assert not (folder / "x").exists()
    best = mufitter("rehearse", folder / "blind.yaml", "--truth", "best", "--run-folder", folder / "x")
    assert best.returncode == 2 and "hidden" in best.stderr


def test_a_real_cluster_from_the_command_line(folder):
    distributed = pytest.importorskip("distributed", reason="the extra mufitter[cluster] is not installed")
    options = {"threads_per_worker": 1, "processes": True, "dashboard_address": None, "worker_dashboard_address": None}
    with distributed.LocalCluster(2, **options) as cluster:
        far = mufitter("rehearse", folder / "fit.yaml", "--mocks", 30, "--json", "--scheduler", cluster.scheduler_address)
    assert far.returncode == 0, far.stderr
    near = mufitter("rehearse", folder / "fit.yaml", "--mocks", 30, "--json", "--replace")
    assert json.loads(far.stdout) == json.loads(near.stdout)


def test_a_blinded_stress_test_stores_differences_only_even_when_interrupted(folder):
    whole = stress(folder / "fit.yaml", Place(False), processes=1).result
    values = [whole["baseline"]["parameters"]["omega_m"]["median"]]
    values += [row["parameters"]["omega_m"]["median"] for row in whole["variants"] if not row["problem"]]

    def stop(done, total):
        if done == 10:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        stress(folder / "blind.yaml", Place(folder / "b"), processes=1, progress=stop)
    assert (folder / "b.unfinished" / "tasks.jsonl").exists()
    _search(folder / "b.unfinished", values)
    study = stress(folder / "blind.yaml", Place(folder / "b", resume=True), processes=1)
    _search(folder / "b", values)
    assert study.result["blinded"] == ["omega_m"] and "Ωm − its value" in study.text
    assert study.result["tests"]["worst"]["significance"] == pytest.approx(whole["tests"]["worst"]["significance"], abs=1e-6)
    with pytest.raises(InputError, match="already there"):
        stress(folder / "blind.yaml", Place(folder / "b"))


def _search(where, values):
    for path in where.rglob("*"):
        if path.is_file() and path.suffix not in (".png", ".pdf"):
            text = path.read_text(encoding="utf-8")
            assert not [v for v in values if f"{v:.4f}" in text], path
