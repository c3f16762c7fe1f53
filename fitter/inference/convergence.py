"""Is the chain good enough, and if not, how long must it become?"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import ceil, isfinite, nan

import numpy as np

from fitter.array_types import FloatArray
from fitter.inference.diagnostics import autocorrelation_time, ess_bulk, ess_sd, ess_tail, split_rhat

__all__ = ["FIRST_STEPS", "Status", "assess", "next_length"]

#: Steps before the first look at the chain.
FIRST_STEPS = 200
RHAT_LIMIT = 1.01
LENGTH_IN_TAU = 50
BURN_IN_IN_TAU = 10
# The standard deviation may be known from half the target: to 1 % at 10,000 / 2.
SPREAD_SHARE = 0.5


@dataclass(frozen=True)
class Status:
    """Diagnostics of a chain, by parameter name, and the verdict.

    Parameters
    ----------
    steps, burn_in : int
        Steps in all, and those to drop at the beginning.
    tau, rhat, bulk, tail, spread : dict of float
        Autocorrelation time in steps, R-hat, effective sample sizes for the middle, the tails and the standard deviation.
    lacking : tuple of str
        What keeps the chain from being converged; empty if it is.
    """

    steps: int
    burn_in: int
    tau: dict[str, float]
    rhat: dict[str, float]
    bulk: dict[str, float]
    tail: dict[str, float]
    spread: dict[str, float]
    lacking: tuple[str, ...]

    @property
    def converged(self) -> bool:
        """True if every check was passed."""
        return not self.lacking

    @property
    def ess(self) -> float:
        """The smallest effective sample size, that of the standard deviation counted double; NaN if one is unknown."""
        return float(np.min([*self.bulk.values(), *self.tail.values(), *(v / SPREAD_SHARE for v in self.spread.values())]))


def assess(chain: FloatArray, names: tuple[str, ...], target_ess: float) -> Status:
    """Judge a chain.

    Burn-in is ten autocorrelation times, at most half of the chain; τ is first measured in the second half, then in
    what burn-in leaves.

    Parameters
    ----------
    chain : (R, S, W, n) ndarray
        From the first step on.
    names : tuple of str
    target_ess : float

    Returns
    -------
    Status
    """
    steps = chain.shape[1]
    burn_in = steps // 2
    for _ in range(2):
        kept = chain[:, burn_in:]
        tau = {name: autocorrelation_time(kept[..., i]) for i, name in enumerate(names)}
        longest = max(tau.values())
        burn_in = steps // 2 if not isfinite(longest) else min(ceil(BURN_IN_IN_TAU * longest), steps // 2)
    kept = chain[:, burn_in:]
    columns = {name: np.ascontiguousarray(kept[..., i]) for i, name in enumerate(names)}
    rhat = {name: split_rhat(x) for name, x in columns.items()}
    bulk = {name: ess_bulk(x) for name, x in columns.items()}
    tail = {name: ess_tail(x) for name, x in columns.items()}
    spread = {name: ess_sd(x) for name, x in columns.items()}
    status = Status(steps, burn_in, tau, rhat, bulk, tail, spread, ())
    return replace(status, lacking=_lacking(status, target_ess))


def _lacking(status: Status, target_ess: float) -> tuple[str, ...]:
    out = []
    length = status.steps - status.burn_in
    for name, tau in status.tau.items():
        if not length > LENGTH_IN_TAU * tau:
            out.append(f"{name}: the chain is {length} steps, {length / tau if tau > 0 else nan:.0f} autocorrelation times; 50 are needed")
        if not status.rhat[name] < RHAT_LIMIT:
            out.append(f"{name}: the replicas disagree, R-hat = {status.rhat[name]:.3f}; below 1.01 is needed")
        ess = min(status.bulk[name], status.tail[name])
        if not ess >= target_ess:
            out.append(f"{name}: effective sample size {ess:.0f}; {target_ess:.0f} is asked for")
        if not status.spread[name] >= SPREAD_SHARE * target_ess:
            wanted = SPREAD_SHARE * target_ess
            out.append(f"{name}: effective sample size {status.spread[name]:.0f} for the standard deviation; {wanted:.0f} is asked for")
    return tuple(out)


def next_length(status: Status, target_ess: float, max_steps: int) -> int:
    """Steps at which to look again: what the rates measured so far say is needed, with a small margin.

    Early estimates of τ are too small, and those of the ESS scatter, so a chain grows at most
    2.5 times; one whose replicas disagree at least doubles.
    """
    kept = status.steps - status.burn_in
    tau = max(status.tau.values())
    if not (isfinite(tau) and isfinite(status.ess) and status.ess > 0):
        return min(2 * status.steps, max_steps)
    wanted = max(1.08 * LENGTH_IN_TAU * tau, 1.05 * kept * target_ess / status.ess) + BURN_IN_IN_TAU * tau
    if not max(status.rhat.values()) < RHAT_LIMIT:
        wanted = max(wanted, 2 * status.steps)
    wanted = min(max(wanted, 1.1 * status.steps), 2.5 * status.steps)
    return min(ceil(wanted / 10) * 10, max_steps)
