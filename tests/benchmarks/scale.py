"""Large surveys, each in a process of its own so that its memory can be told: `make bench`, and `make bench-dense` for the slow one.

python tests/benchmarks/scale.py            # a million supernovae with 50 modes
python tests/benchmarks/scale.py --dense    # 20,000 with a dense matrix: minutes, and 5 GB of memory and of disk
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from bench import WALKERS, Row, fastest, show
from large_survey import write

SMALL = 1000


def peak_memory() -> float:
    """Largest memory of this process so far, bytes."""
    import resource

    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024.0


def first_evaluation(path: Path) -> dict:
    """From a config to the first evaluation, in this process."""
    start = time.perf_counter()
    from fitter import load_config
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

    config = load_config(path)
    sample = Sample.from_config(config.sample, config.folder)
    posterior = LogPosterior.build(sample, "flat_wcdm")
    value = posterior(np.array([[0.3, -1.0]]))
    found = {"seconds": time.perf_counter() - start, "memory": peak_memory(), "finite": bool(np.isfinite(value[0]))}
    if sample.noise.is_diagonal:
        found["times"] = against_small(sample, posterior)
    return found


def against_small(sample, posterior) -> list[float]:
    """Seconds an evaluation of this sample and of a thousand of its rows, taken in turns on one thread."""
    from threadpoolctl import threadpool_limits

    from fitter.likelihood.posterior import LogPosterior

    small = LogPosterior.build(sample.select(np.linspace(0, sample.n - 1, SMALL).astype(int)), "flat_wcdm")
    rng = np.random.default_rng(1)
    theta = np.column_stack([rng.uniform(0.25, 0.35, WALKERS), rng.uniform(-1.1, -0.9, WALKERS)])
    with threadpool_limits(1):
        return [t / WALKERS for t in fastest(lambda: posterior(theta), lambda: small(theta), rounds=15)]


def in_a_process(path: Path) -> dict:
    """`first_evaluation` in a new process."""
    ended = subprocess.run([sys.executable, __file__, "--measure", str(path)], capture_output=True, text=True, check=True)
    return json.loads(ended.stdout.splitlines()[-1])


def million(folder: Path) -> list[Row]:
    found = in_a_process(write(folder, 1_000_000, 50))
    gigabytes = found["memory"] / 1024**3
    large, small = found["times"]
    return [
        Row(
            "1,000,000 supernovae, 50 modes: config to first evaluation",
            f"{found['seconds']:.0f} s, {gigabytes:.1f} GB",
            "< 60 s, < 4 GB",
            found["seconds"] < 60 and gigabytes < 4 and found["finite"],
        ),
        Row(
            f"  one evaluation, N = 1,000,000 and {SMALL:,}",
            f"{large * 1e6:.2f} / {small * 1e6:.2f} µs",
            "within 20 %",
            large < 1.2 * small,
        ),
    ]


def dense(folder: Path) -> list[Row]:
    n = 20_000
    found = in_a_process(write(folder, n, dense=True))
    ratio = found["memory"] / (8 * n**2)
    what = f"dense {n:,}²: peak memory over the matrix ({found['seconds']:.0f} s)"
    return [Row(what, f"{ratio:.2f} ×", "≤ 1.6 ×", ratio <= 1.6 and found["finite"])]


def main() -> int:
    if sys.argv[1:2] == ["--measure"]:
        print(json.dumps(first_evaluation(Path(sys.argv[2]))))
        return 0
    with tempfile.TemporaryDirectory() as folder:
        show(dense(Path(folder)) if "--dense" in sys.argv else million(Path(folder)))
    return 0


if __name__ == "__main__":
    sys.exit(main())
