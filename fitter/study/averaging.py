"""Constraints averaged over models, weighted by their evidence (Hoeting et al. 1999, Statistical Science 14, 382)."""

from __future__ import annotations

from typing import Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.study.entry import Entry

__all__ = ["averaged", "model_weights"]

_QUANTILES = {"low95": 0.025, "low68": 0.1587, "median": 0.5, "high68": 0.8413, "high95": 0.975}


def model_weights(entries: list[Entry]) -> dict[str, float]:
    """Posterior probability of each fit's model among them, all equally likely before the data."""
    heights = np.array([-np.inf if entry.log_evidence is None else entry.log_evidence[0] for entry in entries])
    weights = np.exp(heights - heights.max())
    return dict(zip((e.name for e in entries), (weights / weights.sum()).tolist(), strict=True))


def averaged(entries: list[Entry]) -> dict[str, Any]:
    """Average over fits of the same data.

    Parameters
    ----------
    entries : list of Entry
        Each with an evidence.

    Returns
    -------
    dict
        ``weights`` by fit, and ``parameters``: mean, sd and quantiles of every parameter that all of them have.
    """
    weights = model_weights(entries)
    parameters: dict[str, dict[str, float]] = {}
    shared = [name for name in entries[0].posterior.kinds if all(name in e.posterior.kinds for e in entries)]
    for name in shared:
        draws = [e.posterior.draws(name).ravel() for e in entries]
        draws = [d[np.isfinite(d)] for d in draws]
        if all(d.size for d in draws):
            # Chains differ in length: each counts by its model's weight, not by its number of draws.
            weight = np.concatenate([np.full(d.size, weights[e.name] / d.size) for e, d in zip(entries, draws, strict=True)])
            parameters[name] = _facts(np.concatenate(draws), weight)
    return {"weights": weights, "parameters": parameters}


def _facts(values: FloatArray, weight: FloatArray) -> dict[str, float]:
    mean = float(values @ weight)
    order = np.argsort(values)
    cumulative = np.cumsum(weight[order]) - 0.5 * weight[order]
    facts = {"mean": mean, "sd": float(np.sqrt((values - mean) ** 2 @ weight))}
    return facts | {k: float(np.interp(q, cumulative, values[order])) for k, q in _QUANTILES.items()}
