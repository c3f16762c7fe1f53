"""The posterior as a table of draws."""

from __future__ import annotations

from dataclasses import dataclass

from fitter.array_types import FloatArray
from fitter.inference.intervals import INTERVALS, SHARES, Interval

__all__ = ["Posterior"]


@dataclass(frozen=True)
class Posterior:
    """Draws from a posterior, R replicas × S steps × W walkers.

    Parameters
    ----------
    names : tuple of str
        The sampled parameters, in the order of the last axis of `chain`.
    chain : (R, S, W, n) ndarray
        Positions, burn-in removed, not thinned.
    log_posterior : (R, S, W) ndarray
        ln posterior density at the positions.
    extra : dict of (R, S, W) ndarray
        Marginalised parameters, drawn given each position, and derived ones. NaN where undefined.
    kinds : dict
        ``"sampled"``, ``"marginalised"`` or ``"derived"`` for every name, in reporting order.
    sampling : dict
        What was done: replicas, walkers, steps, burn_in, autocorrelation, acceptance, converged, reason,
        advice, seed, seconds, evaluations, and the diagnostics that decided.
    intervals : str
        How intervals are made of the draws: a key of `fitter.inference.intervals.INTERVALS`.
    """

    names: tuple[str, ...]
    chain: FloatArray
    log_posterior: FloatArray
    extra: dict[str, FloatArray]
    kinds: dict[str, str]
    sampling: dict
    intervals: str = "equal_tailed"

    def interval(self, name: str, share: float = SHARES["68"]) -> Interval:
        """Return the interval of one parameter that holds a share of the posterior, undefined draws left out.

        Raises
        ------
        KeyError
            If there is no such parameter.
        """
        return INTERVALS[self.intervals](self.draws(name), share)

    def draws(self, name: str) -> FloatArray:
        """Return the draws of one parameter.

        Parameters
        ----------
        name : str
            A sampled, marginalised or derived parameter.

        Returns
        -------
        (R, S, W) ndarray

        Raises
        ------
        KeyError
            If there is no such parameter; the message lists those that exist.
        """
        if name in self.names:
            return self.chain[..., self.names.index(name)]
        if name in self.extra:
            return self.extra[name]
        raise KeyError(f"no parameter {name!r} in this posterior; it has {', '.join(self.kinds)}")

    @property
    def n_draws(self) -> int:
        """Number of draws, R × S × W."""
        return self.log_posterior.size
