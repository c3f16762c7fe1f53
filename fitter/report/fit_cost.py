"""How long a fit will take and how much memory: an estimate from one timed evaluation."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from fitter.inference.settings import SamplingSettings
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["Cost", "expected_cost"]

# Measured on fits of the invented survey and of published samples with two to five parameters.
_LEAST_STEPS = 200
_STEP_OVERHEAD = 3e-3  # seconds, of a step of one ensemble beside the likelihood
_REST = 5.0  # seconds: optimum, cross-check, figures
_PROCESS = 150 * 1024**2  # bytes, of a process that samples one replica
_STRETCH = 10.0  # how much slower than the mixture the stretch move mixes


@dataclass(frozen=True)
class Cost:
    """Seconds and bytes that a fit will take, and microseconds of one evaluation of the likelihood."""

    seconds: float
    memory: float
    evaluation: float


def expected_cost(log_posterior: LogPosterior, sampling: SamplingSettings) -> Cost:
    """Estimate what a fit costs; right within a factor of about three.

    Parameters
    ----------
    log_posterior : LogPosterior
    sampling : SamplingSettings
    """
    rng = np.random.default_rng(0)
    theta = np.column_stack([prior.sample(rng, sampling.walkers) for prior in log_posterior.priors])
    log_posterior(theta)
    start = time.perf_counter()
    log_posterior(theta)
    per_walker = (time.perf_counter() - start) / sampling.walkers
    correlation = (1 + len(log_posterior.names)) * (_STRETCH if sampling.move == "stretch" else 1.0)
    steps = max(_LEAST_STEPS, 50 * correlation, sampling.target_ess * correlation / (sampling.walkers * sampling.replicas))
    steps = min(steps, sampling.max_steps)
    processes = max(1, min(os.cpu_count() or 1, sampling.replicas))
    rounds = -(-sampling.replicas // processes)
    # What this process has done so far, reading and compressing, the fit has to do again.
    seconds = _REST + time.process_time() + rounds * steps * (sampling.walkers * per_walker + _STEP_OVERHEAD)
    numbers = len(log_posterior.names) + len(log_posterior.marginalised) + len(log_posterior.derived_names) + 1
    chains = 8 * 3 * steps * sampling.walkers * sampling.replicas * numbers  # written, read and summarised: three copies
    return Cost(seconds, _peak() + processes * _PROCESS + chains, 1e6 * per_walker)


def _peak() -> float:
    """Largest memory of this process so far, bytes: the data and their compression are in it."""
    try:
        import resource
    except ImportError:  # not on every system
        return 0.0
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024.0
