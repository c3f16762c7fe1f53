"""Sample a posterior until it is known well enough."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable
from math import isfinite, nan
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.checkpoint import Checkpoint
from fitter.inference.convergence import FIRST_STEPS, Status, assess, next_length
from fitter.inference.pilot import pilot_mixture
from fitter.inference.posterior import Posterior
from fitter.inference.progress import ProgressReport
from fitter.inference.replicas import Replica, Replicas, available_cores
from fitter.inference.seeds import child_seed, random_state
from fitter.inference.settings import SamplingSettings
from fitter.inference.start import starting_walkers

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["derive_and_draw", "kinds_of", "sample_posterior"]

# Below this number of steps there is nothing to summarise.
_FEWEST = 20
# Rows for which derived parameters are computed at once.
_BLOCK = 16384


def sample_posterior(
    log_posterior: LogPosterior,
    settings: SamplingSettings,
    optimum: Optimum,
    *,
    seed: np.random.SeedSequence,
    folder: Path | None = None,
    progress: Callable[[ProgressReport], None] | None = None,
    resume: bool = False,
    fingerprint: str = "",
    processes: int | None = None,
    veil: bytes = b"",
) -> Posterior:
    """Draw from the posterior with R independent ensembles.

    Runs in rounds, each followed by a look at the whole chain, until for every sampled parameter R-hat < 1.01, the chain is longer
    than 50 autocorrelation times and the ESS of bulk, tails and standard deviation reach the target; or until ``settings.max_steps``.

    Parameters
    ----------
    log_posterior : LogPosterior
    settings : SamplingSettings
    optimum : Optimum
    seed : SeedSequence
        Everything random comes from it; the result does not depend on the number of processes, nor on where a run was
        interrupted and resumed.
    folder : Path or None
        The run folder, for checkpoints; None keeps none.
    progress : callable or None
        Gets a `ProgressReport` a few times a second.
    resume : bool
        Continue the checkpoint in `folder`, if there is one.
    fingerprint : str
        Identifies config and data; a checkpoint with another one is refused.
    processes : int, optional
        By default one for each core, at most one for each replica.
    veil : bytes, optional
        Key that hides the positions in the checkpoint.

    Returns
    -------
    Posterior

    Raises
    ------
    InputError
        If there is nothing to sample, no starting point, a checkpoint of another run, or no room on the disk.
    KeyboardInterrupt
        If interrupted before the first few steps. Later an interrupt ends the sampling cleanly: what is there is returned, with
        ``converged`` False and ``reason`` "interrupted".
    """
    from threadpoolctl import threadpool_limits

    began = time.monotonic()
    settings.check_dimension(len(log_posterior.names))
    about = _about(log_posterior, settings, seed, fingerprint)
    checkpoint = None if folder is None else Checkpoint(folder, about, resume=resume, veil=veil)
    with threadpool_limits(1):
        pilot = pilot_mixture(log_posterior, optimum, child_seed(seed, 2)) if settings.move == "mixture" else None
        replicas = [_begin(log_posterior, settings, optimum, child_seed(seed, 0, i)) for i in range(settings.replicas)]
        with Replicas(log_posterior, replicas, settings.move, pilot, processes or available_cores(), checkpoint) as ensembles:
            status = _run(ensembles, log_posterior.names, settings, progress)
            chain, values = ensembles.chain(status.steps)
            chain, values = chain[:, status.burn_in :], values[:, status.burn_in :]
            extra = derive_and_draw(log_posterior, chain, seed, ensembles.map)
    facts = _facts(ensembles, status, settings, time.monotonic() - began)
    return Posterior(tuple(log_posterior.names), chain, values, extra, kinds_of(log_posterior, extra), facts)


def kinds_of(log_posterior: LogPosterior, extra: Iterable[str]) -> dict[str, str]:
    """What every parameter is, in reporting order; `extra` names the marginalised and derived ones."""
    kinds = {n: "sampled" for n in log_posterior.names} | {n: "marginalised" for n in log_posterior.marginalised}
    return kinds | {n: kinds.get(n, "derived") for n in extra}


def _about(log_posterior: LogPosterior, settings: SamplingSettings, seed: np.random.SeedSequence, fingerprint: str) -> dict[str, Any]:
    """What must agree for a chain to be continued; its length may change."""
    return {
        "fingerprint": fingerprint,
        "parameters": list(log_posterior.names),
        "replicas": settings.replicas,
        "walkers": settings.walkers,
        "move": settings.move,
        "seed": [repr(seed.entropy), list(seed.spawn_key)],
    }


def _begin(log_posterior: LogPosterior, settings: SamplingSettings, optimum: Optimum, seed: np.random.SeedSequence) -> Replica:
    positions, values = starting_walkers(log_posterior, optimum, settings.walkers, child_seed(seed, 0))
    return Replica(positions, values, random_state(child_seed(seed, 1)))


def _run(
    ensembles: Replicas, names: tuple[str, ...], settings: SamplingSettings, progress: Callable[[ProgressReport], None] | None
) -> Status:
    """Rounds until converged, at the limit, or interrupted."""
    target, status = min(FIRST_STEPS, settings.max_steps), None
    while True:
        ensembles.advance(target, _reporter(progress, ensembles.steps, target, status))
        reached = min(target, ensembles.steps)
        if ensembles.interrupted and reached < _FEWEST:
            raise KeyboardInterrupt
        chain, _ = ensembles.chain(reached)
        status = assess(chain, names, settings.target_ess)
        if ensembles.interrupted or status.converged or reached >= settings.max_steps:
            return status
        target = next_length(status, settings.target_ess, settings.max_steps)


def _reporter(
    progress: Callable[[ProgressReport], None] | None, first: int, aim: int, status: Status | None
) -> Callable[[int], None] | None:
    if progress is None:
        return None
    began = time.monotonic()
    tau, ess, rhat = (nan, nan, nan) if status is None else (max(status.tau.values()), status.ess, max(status.rhat.values()))

    def look(steps: int) -> None:
        rate = (steps - first) / max(time.monotonic() - began, 1e-9)
        left = (aim - steps) / rate if rate > 0 else nan
        progress(ProgressReport(min(steps, aim), aim, tau, ess, rhat, max(left, 0.0) if isfinite(left) else nan))

    return look


def derive_and_draw(
    log_posterior: LogPosterior, chain: FloatArray, seed: np.random.SeedSequence, run: Callable[..., Any]
) -> dict[str, FloatArray]:
    """Marginalised parameters, drawn, and derived ones, computed, for every position; in blocks to bound the memory.

    Parameters
    ----------
    log_posterior : LogPosterior
    chain : (R, S, W, n) ndarray
    seed : SeedSequence
        That of the sampling.
    run : callable
        ``run(function, arguments)`` → list of ``function(log_posterior, *a)``.
    """
    seed = child_seed(seed, 1)
    rows = chain.reshape(-1, chain.shape[-1])
    # A rejected proposal repeats a position: what is derived from it is computed once.
    moved = np.ones(chain.shape[:3], dtype=bool)
    moved[:, 1:] = (chain[:, 1:] != chain[:, :-1]).any(axis=-1)
    order = np.where(moved, np.cumsum(moved).reshape(moved.shape) - 1, 0)
    order = np.maximum.accumulate(order, axis=1).ravel()
    extra: dict[str, FloatArray] = {}
    if log_posterior.marginalised:
        extra |= _joined(run(_draw_block, [(b, child_seed(seed, k)) for k, b in enumerate(_blocks(rows))]))
    if log_posterior.derived_names:
        distinct = _joined(run(_derive_block, [(b,) for b in _blocks(rows[moved.ravel()])]))
        extra |= {name: column[order] for name, column in distinct.items()}
    return {name: column.reshape(chain.shape[:-1]) for name, column in extra.items()}


def _blocks(rows: FloatArray) -> list[FloatArray]:
    return [rows[start : start + _BLOCK] for start in range(0, len(rows), _BLOCK)]


def _draw_block(log_posterior: LogPosterior, theta: FloatArray, seed: np.random.SeedSequence) -> dict[str, FloatArray]:
    return log_posterior.draw_marginalised(theta, np.random.default_rng(seed))


def _derive_block(log_posterior: LogPosterior, theta: FloatArray) -> dict[str, FloatArray]:
    return log_posterior.derived(theta)


def _joined(parts: list[dict[str, FloatArray]]) -> dict[str, FloatArray]:
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def _facts(ensembles: Replicas, status: Status, settings: SamplingSettings, seconds: float) -> dict[str, Any]:
    """The ``sampling`` part of the summary."""
    reason, advice = _verdict(ensembles, status, settings)
    return {
        "replicas": settings.replicas,
        "walkers": settings.walkers,
        "move": settings.move,
        "steps": status.steps,
        "burn_in": status.burn_in,
        "autocorrelation": status.tau,
        "rhat": status.rhat,
        "ess_bulk": status.bulk,
        "ess_tail": status.tail,
        "ess_sd": status.spread,
        "acceptance": ensembles.accepted,
        "converged": reason == "converged",
        "reason": reason,
        "advice": advice,
        "lacking": list(status.lacking),
        "target_ess": settings.target_ess,
        "max_steps": settings.max_steps,
        "seed": settings.seed,
        "seconds": seconds,
        "processes": ensembles.processes,
        "evaluations": int(status.steps * settings.walkers * settings.replicas),
        "counts": ensembles.counts,
    }


def _verdict(ensembles: Replicas, status: Status, settings: SamplingSettings) -> tuple[str, str]:
    if ensembles.interrupted:
        return "interrupted", "Continue with --resume."
    if status.converged:
        return "converged", ""
    advice = "Raise sampling.max_steps and continue with --resume."
    if max(status.rhat.values()) > 1.1:
        advice += " The replicas disagree widely: the posterior may have separate peaks; look at them one at a time by narrower priors."
    return "max_steps", advice
