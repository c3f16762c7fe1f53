"""How the evidence depends on the widths of the priors: each halved and doubled in turn."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fitter.inference.target import Peak
from fitter.likelihood.priors import LogUniform, Normal, Prior, TruncatedNormal, Uniform
from fitter.study.entry import Density, Entry, batch_error

__all__ = ["FACTORS", "EvidenceShift", "anchors", "evidence_shifts", "rescaled"]

FACTORS = (0.5, 2.0)
_NOT_NEGATIVE = ("omega_m", "omega_de", "H0", "intrinsic_scatter", "covariance_scale")
_FEW = 0.2  # share of equally good draws below which reweighting is not trusted


@dataclass(frozen=True)
class EvidenceShift:
    """What another width of one prior does to ln Z.

    Parameters
    ----------
    parameter : str
    factor : float
    prior : Prior
        The changed one.
    change, error : float
        Of ln Z.
    cut : float
        Share of the posterior that a narrower prior cuts away.
    """

    parameter: str
    factor: float
    prior: Prior
    change: float
    error: float
    cut: float


def anchors(entries: list[Entry]) -> dict[str, float]:
    """Value around which each parameter's prior is stretched: the posterior median of the first fit that samples it."""
    found: dict[str, float] = {}
    for entry in entries:
        for i, name in enumerate(entry.posterior.names):
            found.setdefault(name, float(np.median(entry.samples[:, i])))
    return found


def rescaled(prior: Prior, factor: float, anchor: float, floor: float = -math.inf) -> Prior:
    """Return a prior `factor` times as wide.

    Parameters
    ----------
    prior : Prior
    factor : float
    anchor : float
        What a flat prior is stretched around; a Gaussian keeps its mean.
    floor : float
        A bound that is not crossed: what is lost there is added at the other end.
    """
    if isinstance(prior, Normal):
        return Normal(prior.mean, prior.sd * factor)
    if isinstance(prior, TruncatedNormal):
        return TruncatedNormal(prior.mean, prior.sd * factor, prior.low, prior.high)
    anchor = min(max(anchor, prior.low), prior.high)
    if isinstance(prior, LogUniform):
        centre = math.log(anchor)
        return LogUniform(*(math.exp(centre + factor * (math.log(end) - centre)) for end in (prior.low, prior.high)))
    low, high = (anchor + factor * (end - anchor) for end in (prior.low, prior.high))
    if low < floor <= prior.low:
        low, high = floor, floor + factor * (prior.high - prior.low)
    return Uniform(low, high)


def evidence_shifts(entry: Entry, around: dict[str, float]) -> list[EvidenceShift]:
    """Change of a fit's ln Z for each of its priors halved and doubled.

    Parameters
    ----------
    entry : Entry
        With its log-posterior.
    around : dict
        As `anchors` returns it.

    Notes
    -----
    Where the old prior covers the new one as far as there is any posterior, the ratio of evidences is the mean of the
    priors' ratio over the draws. Where a wider prior opens what the old one had cut off, the quadrature is made anew;
    beyond its dimensions that width is left out.
    """
    shifts: list[EvidenceShift] = []
    if entry.log_posterior is None:
        return shifts
    for i, (name, prior) in enumerate(zip(entry.log_posterior.names, entry.log_posterior.priors, strict=True)):
        for factor in FACTORS:
            new = rescaled(prior, factor, around[name], 0.0 if name in _NOT_NEGATIVE else -math.inf)
            found = _shift(entry, i, prior, new)
            if found is not None:
                shifts.append(EvidenceShift(name, factor, new, *found))
    return shifts


def _shift(entry: Entry, i: int, old: Prior, new: Prior) -> tuple[float, float, float] | None:
    draws = entry.posterior.chain[..., i]
    with np.errstate(over="ignore"):
        ratio = np.exp(new.log_density(draws) - old.log_density(draws))
    cut = float((ratio == 0).mean())
    inside = ratio[ratio > 0]
    trusted = inside.size and ratio.sum() ** 2 / (ratio**2).sum() > _FEW * ratio.size
    if trusted and not _opens(entry, old, new, entry.posterior.names[i]):
        mean, error = batch_error(ratio)
        return math.log(mean), error / mean, cut
    found = _integrated(entry, i, new)
    return None if found is None else (*found, cut)


def _opens(entry: Entry, old: Prior, new: Prior, name: str) -> bool:
    """Whether a wider prior reaches where the old one had cut the posterior off."""
    edges = entry.summary["parameters"][name].get("density_at_prior_edge") or (0.0, 0.0)
    return bool((new.low < old.low and edges[0] > 0) or (new.high > old.high and edges[1] > 0))


def _integrated(entry: Entry, i: int, new: Prior) -> tuple[float, float] | None:
    from fitter.inference.quadrature import MAX_DIMENSIONS, integrate

    log_posterior, before = entry.log_posterior, entry.log_evidence
    if log_posterior is None or before is None or len(log_posterior.names) > MAX_DIMENSIONS:
        return None
    priors = list(log_posterior.priors)
    priors[i] = new
    best = entry.samples[entry.posterior.log_posterior.argmax()]
    start = Peak(best, np.atleast_2d(np.cov(entry.samples, rowvar=False)))
    density = Density(log_posterior, priors)
    if not np.isfinite(density(best[None])[0]):
        return None
    grid = integrate(density, start)
    if grid is None:
        return None
    return grid.log_evidence - before[0], math.hypot(grid.log_evidence_error, before[1])
