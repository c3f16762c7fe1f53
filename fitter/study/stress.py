"""Does the answer survive? One fit refitted under every change that a referee would ask for.

A subsample's estimate differs from that of the whole sample with variance σ_sub² − σ_all² [1]_, since the whole sample's is
efficient; the same holds for a fit in which a nuisance parameter has been set free [2]_. Shifts are judged against that.

References
----------
.. [1] Gratton, S. & Challinor, A. 2020, MNRAS 499, 3410.
.. [2] Hausman, J. A. 1978, Econometrica 46, 1251.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Iterator
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.errors import MufitterError
from fitter.inference.seeds import child_seed
from fitter.likelihood.posterior import LogPosterior
from fitter.study.goodness import goodness
from fitter.study.influence import influence
from fitter.study.refit import Refit, refit
from fitter.study.scenarios import Scenario, changed, scenarios
from fitter.study.setup import FitSetup
from fitter.study.tasks import Tasks, call, run_tasks

if TYPE_CHECKING:
    from fitter.likelihood.priors import Prior

__all__ = ["FLAG", "SCHEMA", "stress"]

SCHEMA = "mufitter stress 1"
FLAG = 2.5
"""Shifts beyond this many expected scatters are flagged."""

# Beside so small a scatter, in units of the parameter's own error, a shift measures the skewness of the posterior.
_LEAST_SCATTER = 0.05
# An interval wider than this share of the prior's own is the prior's: √(σ_sub² − σ_all²) is no scatter then.
_MOST_PRIOR = 0.7
_BASELINE, _REFITS = 0, 1
_TOGETHER = 20  # shifted data vectors in one task, on one factorisation


def stress(setup: FitSetup, *, seed: np.random.SeedSequence, blind: Collection[str] = (), **running: Any) -> dict:
    """Refit under every change of `scenarios`.

    Parameters
    ----------
    setup : FitSetup
    seed : SeedSequence
    blind : collection of str
        Parameters of which only differences from the fit itself are returned or stored.
    **running
        Of `run_tasks`: processes, scheduler, store, progress.

    Returns
    -------
    dict
        ``schema``, ``model``, ``n``, ``blinded``, ``baseline``, ``variants``, ``error_budget``, ``influence``, ``goodness``, ``tests``,
        ``verdict``.
    """
    log_posterior = setup.posterior()
    base = call(lambda *_: refit(log_posterior, child_seed(seed, _BASELINE)), None, None, None)
    centres = {name: facts["median"] for name, facts in base.facts()["parameters"].items()}
    hidden = {name: -centres[name] for name in blind if name in centres}
    changes = scenarios(setup, centres)
    tasks = Tasks(_refit_batch, replace(setup, hidden=hidden), _batches(changes), child_seed(seed, _REFITS))
    found = {key: result for batch in run_tasks(tasks, **running).values() for key, result in batch.items()}
    baseline = base.facts(hidden)
    limits = {name: _MOST_PRIOR * _width(prior) for name, prior in zip(log_posterior.names, log_posterior.priors, strict=True)}
    variants = [_variant(baseline, change, found[change.key], limits) for change in changes]
    result = {
        "schema": SCHEMA,
        "model": log_posterior.model.name,
        "n": setup.sample.n,
        "blinded": sorted(hidden),
        "baseline": baseline,
        "variants": variants,
        "error_budget": _error_budget(baseline, variants),
        **call(lambda *_: _residual_tests(log_posterior, base, seed), None, None, None),
    }
    result["tests"] = _count_tests(result)
    result["verdict"] = _verdict(result)
    return result


def _residual_tests(log_posterior: LogPosterior, base: Refit, seed: np.random.SeedSequence) -> dict:
    single = influence(log_posterior, base, child_seed(seed, 2)) if log_posterior.design.n <= 20_000 else None
    return {"influence": single, "goodness": goodness(log_posterior, base.optimum)}


def _batches(changes: list[Scenario]) -> dict[str, tuple[Scenario, ...]]:
    """Tasks: one a change, but for shifted data, which share a factorisation."""
    shifted = [c for c in changes if c.change == "shift_mode"]
    batches: dict[str, tuple[Scenario, ...]] = {c.key: (c,) for c in changes if c.change != "shift_mode"}
    for start in range(0, len(shifted), _TOGETHER):
        batches[f"modes from {start}"] = tuple(shifted[start : start + _TOGETHER])
    return batches


def _refit_batch(setup: FitSetup, batch: tuple[Scenario, ...], seed: np.random.SeedSequence) -> dict:
    """Fit the changes of one task; what cannot be fitted says why."""
    posteriors: Iterable[LogPosterior | None]
    if batch[0].change == "shift_mode":
        data = np.array([changed(setup, change).sample.data for change in batch])
        posteriors = setup.posterior().with_data(data)
    else:
        posteriors = [None]
    return {c.key: _refit_one(setup, c, p, child_seed(seed, i)) for i, (c, p) in enumerate(zip(batch, posteriors, strict=True))}


def _refit_one(setup: FitSetup, change: Scenario, log_posterior: LogPosterior | None, seed: np.random.SeedSequence) -> dict:
    try:
        log_posterior = log_posterior or changed(setup, change).posterior()
        fitted = refit(log_posterior, seed)
    except MufitterError as error:
        return {"problem": getattr(error, "problem", str(error))}
    values = {k: v for k, v in fitted.optimum.values.items() if k.startswith("zero_point:") and change.kind == "offset"}
    return {"n": log_posterior.n_data, "offsets": values, **fitted.facts(setup.hidden)}


def _width(prior: Prior) -> float:
    """Half the width of the central 68 % of a prior."""
    return 0.5 * float(prior.quantile(0.8413) - prior.quantile(0.1587))


def _sigma(facts: dict) -> float:
    return 0.5 * (facts["high68"] - facts["low68"])


def _variant(baseline: dict, change: Scenario, found: dict, limits: dict[str, float]) -> dict:
    row = {"key": change.key, "kind": change.kind, "label": change.label, "nested": change.nested, "problem": found.get("problem")}
    if row["problem"]:
        return row | {"n": None, "chi2": None, "parameters": {}}
    compared = {}
    for name, before in baseline["parameters"].items():
        if name in found["parameters"]:
            after = found["parameters"][name]
            compared[name] = _compare(before, after, change.nested and _sigma(after) < limits[name])
    return row | {"n": found["n"], "chi2": found["chi2"], "parameters": compared}


def _compare(before: dict, after: dict, judged: bool) -> dict:
    """Shift of one parameter, and how much of it chance explains."""
    sigma, all_ = _sigma(after), _sigma(before)
    shift = after["median"] - before["median"]
    facts = {key: after[key] for key in ("median", "low68", "high68", "low95", "high95")}
    facts |= {"sigma": sigma, "shift": shift, "shift_in_sigma": shift / all_, "expected": None, "significance": None, "flagged": False}
    if judged:
        expected = max(math.sqrt(abs(sigma**2 - all_**2)), _LEAST_SCATTER * all_)
        facts |= {"expected": expected, "significance": shift / expected, "flagged": abs(shift / expected) > FLAG}
    return facts


def _error_budget(baseline: dict, variants: list[dict]) -> dict:
    """What each uncertainty term adds: σ_total² − σ_without², its root (signed), its share of σ_total², and the shift of the median."""
    budget: dict = {}
    for row in variants:
        if row["kind"] != "term" or row["problem"]:
            continue
        for name, facts in row["parameters"].items():
            total = _sigma(baseline["parameters"][name])
            variance = total**2 - facts["sigma"] ** 2
            budget.setdefault(row["label"], {})[name] = {
                "variance": variance,
                "sigma": math.copysign(math.sqrt(abs(variance)), variance),
                "share": variance / total**2,
                "shift": facts["shift"],
            }
    return budget


# ---------------------------------------------------------------------- verdict


def _tested(result: dict) -> Iterator[tuple[str, str | None, float]]:
    """Every test: (label, parameter or None, significance)."""
    for row in result["variants"]:
        for name, facts in row["parameters"].items():
            if facts["significance"] is not None:
                yield row["label"], name, facts["significance"]
    for trend in result["goodness"]["trends"]:
        yield f"residuals: {trend['label']}", None, trend["significance"]


def _count_tests(result: dict) -> dict:
    from scipy.special import ndtr

    tested = list(_tested(result))
    chance = float(2 * ndtr(-FLAG))
    found: dict[str, Any] = {
        "n": len(tested),
        "flagged": sum(abs(s) > FLAG for *_, s in tested),
        "expected_by_chance": chance * len(tested),
        "worst": None,
    }
    if tested:
        label, name, worst = max(tested, key=lambda t: abs(t[2]))
        local = float(2 * ndtr(-abs(worst)))
        # Šidák; the tests share supernovae, so the true probability is smaller.
        overall = -math.expm1(len(tested) * math.log1p(-local)) if local < 1 else 1.0
        found["worst"] = {"label": label, "parameter": name, "significance": worst, "p_local": local, "p_global": overall}
    return found


def _verdict(result: dict) -> list[str]:
    """Sentences for people."""
    tests, worst = result["tests"], result["tests"]["worst"]
    said = []
    if worst is None:
        said.append("No subsample or offset can be tested here.")
    else:
        what = worst["label"] + (f", {worst['parameter']}" if worst["parameter"] else "")
        largest = f"the largest is {abs(worst['significance']):.1f}σ ({what})"
        chance = f"{tests['expected_by_chance']:.1f} would be by chance if they were independent"
        if tests["flagged"]:
            elsewhere = f"a shift as large anywhere among them has probability {worst['p_global']:.2g} at most"
            said.append(f"{tests['flagged']} of {tests['n']} tests are beyond {FLAG}σ, {chance}; {largest}; {elsewhere}.")
        else:
            said.append(f"The answer survives: none of {tests['n']} tests is beyond {FLAG}σ ({chance}); {largest}.")
    said += _trend_sentences(result["goodness"]["trends"])
    said += _fit_sentences(result["goodness"]) + _influence_sentences(result["influence"])
    cannot = [row["label"] for row in result["variants"] if row["problem"]]
    if cannot:
        said.append(f"Could not be fitted: {', '.join(cannot)}.")
    return said


def _trend_sentences(trends: list[dict[str, Any]]) -> list[str]:
    beyond = sorted((t for t in trends if abs(t["significance"]) > FLAG), key=lambda t: -abs(t["significance"]))
    said = []
    for t in beyond:
        size = f"{t['amplitude']:+.3f} ± {t['error']:.3f} mag ({abs(t['significance']):.1f}σ)"
        said.append(f"The residuals ask for {_article(t['label'])}{t['label']}: {size}.")
    return said


def _article(label: str) -> str:
    return "an " if label[0] in "aeiou" else "a "


def _fit_sentences(facts: dict) -> list[str]:
    said = []
    p = facts["p_two_sided"]
    if p is not None and p < 0.01:
        way = "too large" if facts["chi2"] > facts["dof"] else "too small"
        said.append(f"χ² = {facts['chi2']:.1f} for {facts['dof']} degrees of freedom is {way} (two-sided p = {p:.2g}).")
    normal = facts["anderson_darling"]["p_value"]
    if normal < 0.01:
        tails = facts["kurtosis"]["value"]
        said.append(f"The whitened residuals are not Gaussian (Anderson–Darling p = {normal:.2g}, excess kurtosis {tails:+.2f}).")
    if facts["outliers"]:
        listed = ", ".join(f"{_called(o)} ({o['deviation']:+.1f}σ)" for o in facts["outliers"][:5])
        said.append(f"{len(facts['outliers'])} outliers beyond {facts['outlier_limit']:.1f}σ: {listed}.")
    return said


def _influence_sentences(single: dict | None) -> list[str]:
    said = []
    for name, rows in (single or {"largest": {}})["largest"].items():
        if rows and abs(rows[0]["shift"]) > 0.5:
            said.append(f"One supernova, {_called(rows[0])}, moves {name} by {rows[0]['shift']:+.2f} of its error when left out.")
    return said


def _called(who: dict) -> str:
    return who["name"] or f"row {who['row']}"
