"""What a referee would change: each change of a fit as a small description, and the fit that it makes."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import BoolArray
from fitter.errors import InputError
from fitter.likelihood.priors import LogUniform, Normal, Prior, TruncatedNormal, Uniform
from fitter.parameters import ZERO_POINT, parameter
from fitter.sample.noise import Noise
from fitter.sample.uncertainty.term import Term, combine
from fitter.study.setup import FitSetup

if TYPE_CHECKING:
    from fitter.sample.sample import Sample

__all__ = ["KINDS", "STATISTICAL", "Scenario", "changed", "scenarios"]

KINDS = {
    "subsample": "Subsamples",
    "cut": "Redshift cuts",
    "offset": "Free offsets",
    "term": "Uncertainty terms removed",
    "mode": "Systematic modes shifted by 1σ",
    "prior": "Priors",
    "model": "Other assumptions",
}
"""Kind → heading, in reporting order."""

STATISTICAL = ("sigma", "intrinsic", "peculiar_velocity", "lensing")
"""Kinds of uncertainty term that average out over many supernovae."""

_LEAST = 10  # supernovae below which a subsample says nothing
_MOST_MODES = 60
_FREE_OFFSET = 1.0  # mag: flat beside the 0.01 mag that the data allow
_LOW_FRACTIONS, _HIGH_FRACTIONS = (0.1, 0.25, 0.5), (0.9, 0.75, 0.5)


@dataclass(frozen=True)
class Scenario:
    """One change.

    Parameters
    ----------
    key : str
        Unique within a study.
    kind : str
        One of `KINDS`.
    label : str
        For people.
    change : str
        Which function makes it: a key of `_CHANGES`.
    argument : object
        What that function is given.
    nested : bool
        Whether the fit uses less information of the same kind, so that the shift has an expected scatter.
    """

    key: str
    kind: str
    label: str
    change: str
    argument: object
    nested: bool = False


def changed(setup: FitSetup, scenario: Scenario) -> FitSetup:
    """Return the fit with the change made."""
    return _CHANGES[scenario.change](setup, scenario.argument)


def scenarios(setup: FitSetup, centres: dict[str, float]) -> list[Scenario]:
    """Return every change that makes sense for a fit.

    Parameters
    ----------
    setup : FitSetup
    centres : dict
        Median of each sampled parameter, about which priors are narrowed.
    """
    sample = setup.sample
    found = [*_subsamples(sample), *_cuts(sample), *_offsets(sample), *_terms(sample), *_modes(sample)]
    return found + [*_priors(setup, centres), *_assumptions(setup)]


# ---------------------------------------------------------------------- which supernovae


def _free(sample: Sample) -> BoolArray:
    return ~np.asarray(sample.is_calibrator)


def _groups(sample: Sample) -> list[str]:
    return [] if sample.group is None else [str(g) for g in dict.fromkeys(sample.group[_free(sample)])]


def _subsamples(sample: Sample) -> Iterator[Scenario]:
    groups = _groups(sample)
    free = _free(sample)
    for group in groups if len(groups) > 1 else ():
        size = int((free & (sample.group == group)).sum())
        if free.sum() - size >= _LEAST:
            yield Scenario(f"without {group}", "subsample", f"without {group}", "without_group", group, nested=True)
        if size >= _LEAST:
            yield Scenario(f"only {group}", "subsample", f"only {group}", "only_group", group, nested=True)


def _cuts(sample: Sample) -> Iterator[Scenario]:
    z = sample.redshift[_free(sample)]
    for side, fractions in (("above", _LOW_FRACTIONS), ("below", _HIGH_FRACTIONS)):
        for fraction in fractions:
            limit = float(f"{np.quantile(z, fraction):.3g}")
            if min((z > limit).sum(), (z <= limit).sum()) >= _LEAST:
                sign = ">" if side == "above" else "≤"
                yield Scenario(f"z {sign} {limit:g}", "cut", f"z {sign} {limit:g}", side, limit, nested=True)


def _select(setup: FitSetup, keep: BoolArray) -> FitSetup:
    return setup.with_sample(setup.sample.select(keep | ~_free(setup.sample)))


# ---------------------------------------------------------------------- which errors


def _offsets(sample: Sample) -> Iterator[Scenario]:
    free = _free(sample)
    middle = float(f"{np.median(sample.redshift[free]):.3g}")
    yield Scenario("offset low-high", "offset", f"free offset of z ≤ {middle:g}", "offset_below", middle, nested=True)
    groups = _groups(sample)
    for group in groups if len(groups) > 1 else ():
        yield Scenario(f"offset {group}", "offset", f"free offset of {group}", "offset_group", group, nested=True)


def _terms(sample: Sample) -> Iterator[Scenario]:
    if len(sample.terms) < 2:
        return
    for term in sample.terms:
        yield Scenario(f"no {term.label}", "term", f"without {term.label}", "without_terms", (term.label,))
    systematic = tuple(t.label for t in sample.terms if t.kind not in STATISTICAL)
    if 0 < len(systematic) < len(sample.terms):
        yield Scenario("statistical only", "term", "statistical only", "without_terms", systematic)


def _modes(sample: Sample) -> Iterator[Scenario]:
    names = sample.noise.mode_names
    for i in range(min(len(names), _MOST_MODES)):
        for sign in (1, -1):
            said = "+" if sign > 0 else "−"
            yield Scenario(f"mode {i} {said}", "mode", f"{_mode_label(names, i)} {said}1σ", "shift_mode", (i, sign))


def _mode_label(names: Sequence[str], i: int) -> str:
    name = names[i].removeprefix(ZERO_POINT)
    return name if names.count(names[i]) == 1 else f"{name} ({i + 1})"


def _with_offset(setup: FitSetup, indicator: BoolArray, name: str) -> FitSetup:
    n = setup.sample.n
    noise = Noise(np.zeros(n), modes=_FREE_OFFSET * indicator[:, None].astype(float), mode_names=(f"{ZERO_POINT}{name}",))
    terms = (*setup.sample.terms, Term(f"free offset of {name}", "zero_point", noise))
    return setup.with_sample(replace(setup.sample, terms=terms, noise=combine(terms)))


def _shift_mode(setup: FitSetup, argument: tuple[int, float]) -> FitSetup:
    i, sign = argument
    return setup.with_sample(replace(setup.sample, data=setup.sample.data + sign * setup.sample.noise.modes[:, i]))


# ---------------------------------------------------------------------- which assumptions


def _priors(setup: FitSetup, centres: dict[str, float]) -> Iterator[Scenario]:
    posterior_priors = dict(_sampled_priors(setup))
    for name, centre in centres.items():
        prior = posterior_priors.get(name)
        for factor, said in ((0.5, "halved"), (2.0, "doubled")):
            scaled = prior and _scaled(prior, centre, factor)
            if scaled:
                yield Scenario(f"prior {name} {said}", "prior", f"prior of {parameter(name).plain} {said}", "prior", (name, scaled.spec()))


def _sampled_priors(setup: FitSetup) -> Iterator[tuple[str, Prior]]:
    from fitter.likelihood.priors import parse_prior

    for name, spec in setup.parameters.items():
        if isinstance(spec, dict):
            yield name, parse_prior(spec)


def _scaled(prior: Prior, centre: float, factor: float) -> Prior | None:
    """A prior `factor` times as wide: halved about the posterior, doubled about its own middle; an edge at zero stays."""
    if isinstance(prior, Normal):
        return Normal(prior.mean, factor * prior.sd)
    if isinstance(prior, TruncatedNormal):
        return TruncatedNormal(prior.mean, factor * prior.sd, prior.low, prior.high)
    if isinstance(prior, Uniform):
        return Uniform(*_stretched(prior.low, prior.high, centre, factor))
    if isinstance(prior, LogUniform):
        return LogUniform(*np.exp(_stretched(np.log(prior.low), np.log(prior.high), np.log(centre), factor)).tolist())
    return None


def _stretched(low: float, high: float, centre: float, factor: float) -> tuple[float, float]:
    half = 0.5 * factor * (high - low)
    if factor < 1:
        middle = min(max(centre, low + half), high - half)
        return middle - half, middle + half
    middle = 0.5 * (low + high)
    return (low, low + 2 * half) if low == 0 else (middle - half, middle + half)


def _assumptions(setup: FitSetup) -> Iterator[Scenario]:
    said = "off" if setup.radiation else "on"
    yield Scenario("radiation", "model", f"radiation {said}", "radiation", not setup.radiation)
    if setup.sample.intrinsic_prior is None:
        yield Scenario("scatter", "model", "intrinsic scatter free", "free_scatter", {"uniform": [0, 0.5]})
    if setup.sample.covariance_scale_prior is None:
        yield Scenario("scale", "model", "scale of the covariance free", "free_scale", {"log_uniform": [0.5, 2.0]})


def _free_scatter(setup: FitSetup, prior: dict[str, Any]) -> FitSetup:
    sample = setup.sample
    fixed = [t.label for t in sample.terms if t.kind == "intrinsic"]
    # Without another term that scatters every supernova there would be no covariance left at a scatter of zero.
    if fixed and any(t.kind in ("sigma", "precision") for t in sample.terms):
        sample = sample.without(fixed)
    return setup.with_sample(replace(sample, intrinsic_prior=prior))


def _without_terms(setup: FitSetup, labels: Sequence[str]) -> FitSetup:
    if len(labels) == len(setup.sample.terms):
        raise InputError("no uncertainty term would be left")
    return setup.with_sample(setup.sample.without(labels))


_CHANGES = {
    "without_group": lambda s, group: _select(s, s.sample.group != group),
    "only_group": lambda s, group: _select(s, s.sample.group == group),
    "above": lambda s, limit: _select(s, s.sample.redshift > limit),
    "below": lambda s, limit: _select(s, s.sample.redshift <= limit),
    "offset_below": lambda s, limit: _with_offset(s, (s.sample.redshift <= limit) & _free(s.sample), "low redshift"),
    "offset_group": lambda s, group: _with_offset(s, (s.sample.group == group) & _free(s.sample), group),
    "without_terms": _without_terms,
    "shift_mode": _shift_mode,
    "prior": lambda s, argument: s.with_prior(*argument),
    "radiation": lambda s, on: replace(s, radiation=on),
    "free_scatter": _free_scatter,
    "free_scale": lambda s, prior: s.with_sample(replace(s.sample, covariance_scale_prior=prior)),
}
