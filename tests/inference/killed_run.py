"""Samples a double, storing often; a test kills this process. Usage: killed_run.py FOLDER PROCESSES OUTPUT"""

import hashlib
import os
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, os.path.dirname(__file__))

import doubles  # noqa: E402

from fitter.inference import replicas  # noqa: E402
from fitter.inference.optimum import find_optimum  # noqa: E402
from fitter.inference.sampling import sample_posterior  # noqa: E402
from fitter.inference.seeds import child_seed  # noqa: E402
from fitter.inference.settings import SamplingSettings  # noqa: E402


def main(folder, processes, output):
    replicas._SLICE_SECONDS = replicas._STORE_SECONDS = 0.05
    target = doubles.gaussian(2, 0.5, doubles.WithExtras)
    seed = np.random.SeedSequence(1)
    optimum = find_optimum(target, child_seed(seed, 0))
    settings = SamplingSettings(replicas=3, walkers=64, target_ess=60_000)
    Path(folder, f"started_{os.getpid()}").touch()
    found = sample_posterior(
        target, settings, optimum, seed=child_seed(seed, 1), folder=folder, resume=True, fingerprint="kill", processes=int(processes)
    )
    digest = hashlib.sha256(found.chain.tobytes() + found.extra["offset"].tobytes()).hexdigest()
    Path(output).write_text(f"{digest} {found.sampling['steps']} {found.sampling['converged']}")


if __name__ == "__main__":
    main(*sys.argv[1:])
