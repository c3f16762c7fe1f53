"""Several fits side by side: differences, tests of nested pairs, the priors' part in the verdict, consistency of data sets."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from itertools import combinations, permutations
from typing import Any

import numpy as np

from fitter.errors import InputError
from fitter.inference.seeds import child_seed
from fitter.likelihood.posterior import LogPosterior
from fitter.parameters import PARAMETERS, parameter
from fitter.study.averaging import averaged
from fitter.study.consistency import consistency, overlap
from fitter.study.density_ratio import density_ratio, ratio_along
from fitter.study.entry import Entry
from fitter.study.likelihood_ratio import likelihood_ratio
from fitter.study.nested import Nesting, nesting
from fitter.study.odds import odds_sentence, scale_name, strength, verdict
from fitter.study.prior_widths import anchors, evidence_shifts

__all__ = ["SCHEMA", "compare_entries"]

SCHEMA = "mufitter comparison 1"
_CRITERIA = ("aic", "aicc", "bic", "dic")
_SIGMAS = 4.0
_PAIRED, _ALONG = 0, 1  # children of the seed
_STRETCH = {0.5: "halved", 2.0: "doubled"}


@dataclass
class _Study:
    """One comparison in the making."""

    entries: list[Entry]
    reference: Entry
    scale: str
    seed: np.random.SeedSequence
    warnings: list[str] = field(default_factory=list)

    @property
    def same_data(self) -> list[Entry]:
        """The fits whose criteria may be compared with the reference's."""
        return [e for e in self.entries if e.data == self.reference.data]


def compare_entries(
    entries: list[Entry], *, reference: str | None = None, scale: str = "kass_raftery", average: bool = False, seed: np.random.SeedSequence
) -> dict:
    """Compare fits.

    Parameters
    ----------
    entries : list of Entry
        Two or more, with different names.
    reference : str, optional
        What differences are taken from; the first by default.
    scale : str
        Whose words are used for odds: a key of `fitter.study.odds.SCALES`.
    average : bool
        Add model-averaged constraints.
    seed : SeedSequence

    Returns
    -------
    dict
        JSON-safe content of comparison.json.

    Raises
    ------
    InputError
        Fewer than two fits, an unknown reference, or two models that mean different things by one parameter.
    """
    study = _Study(entries, _reference(entries, reference), scale, seed)
    _check_symbols(entries)
    report = {
        "schema": SCHEMA,
        "reference": study.reference.name,
        "scale": scale_name(scale),
        "data": {e.name: e.data for e in entries},
        "variants": [_variant(study, e) for e in entries],
        "nested": _nested_pairs(study),
        "prior_widths": _prior_widths(study),
        "consistency": _data_sets(study),
        "average": _average(study) if average else None,
    }
    return report | {"warnings": _notes(study, report) + study.warnings}


def _reference(entries: list[Entry], name: str | None) -> Entry:
    names = [e.name for e in entries]
    if len(entries) < 2:
        raise InputError("a comparison needs two fits or more", value=names)
    if name is not None and name not in names:
        raise InputError("there is no such fit in this comparison", value=name, cure=f"Choose one of {', '.join(names)}")
    return entries[0 if name is None else names.index(name)]


def _check_symbols(entries: list[Entry]) -> None:
    """Refuse two models of one's own that use a name for different things: a table could not show both."""
    known: dict[str, dict] = {}
    for entry in entries:
        for name, declared in (entry.summary.get("declared") or {}).items():
            if name not in PARAMETERS and known.setdefault(name, declared)["meaning"] != declared["meaning"]:
                cure = "Rename it in one of the model files and fit again"
                raise InputError(f"two models mean different things by {name}", value=declared["meaning"], cure=cure)


def _variant(study: _Study, entry: Entry) -> dict:
    summary, information = entry.summary, entry.summary["information"]
    comparable = entry.data == study.reference.data
    facts = {
        "name": entry.name,
        "model": summary["model"],
        "n": summary["sample"]["n"],
        "parameters": summary["parameters"],
        "intervals": summary.get("intervals", "equal_tailed"),
        "fixed": summary.get("fixed", {}),
        "priors": summary.get("priors", {}),
        "converged": summary["sampling"]["converged"],
        **{key: summary["best_fit"][key] for key in ("chi2", "dof", "p_value")},
        "k": information["k"],
        **{key: information.get(key) for key in (*_CRITERIA, "log_evidence", "log_evidence_error")},
    }
    return facts | {"delta": _delta(study, entry) if comparable else None}


def _delta(study: _Study, entry: Entry) -> dict:
    """Differences from the reference: this fit minus that."""
    ours, theirs = entry.summary["information"], study.reference.summary["information"]
    delta = {"chi2": entry.summary["best_fit"]["chi2"] - study.reference.summary["best_fit"]["chi2"]}
    for key in _CRITERIA:
        delta[key] = None if ours.get(key) is None or theirs.get(key) is None else ours[key] - theirs[key]
    evidence = _log_odds(entry, study.reference)
    delta["log_evidence"], delta["log_evidence_error"] = evidence if evidence else (None, None)
    told = None if evidence is None or entry is study.reference else evidence[0]
    delta["odds"] = None if told is None else odds_sentence(told, entry.name, study.reference.name, study.scale)
    delta["strength"] = None if told is None else strength(told, study.scale)
    return delta


def _log_odds(entry: Entry, other: Entry) -> tuple[float, float] | None:
    """ln Z of one fit minus that of another, with its error."""
    if entry.log_evidence is None or other.log_evidence is None:
        return None
    error = 0.0 if entry is other else math.hypot(entry.log_evidence[1], other.log_evidence[1])
    return entry.log_evidence[0] - other.log_evidence[0], error


def _nested_pairs(study: _Study) -> list[dict]:
    found = []
    for small, large in permutations(study.entries, 2):
        if small.log_posterior is None or large.log_posterior is None:
            continue
        nest = nesting(small.log_posterior, large.log_posterior)
        if nest is not None:
            found.append(_pair(study, small, large, nest))
    return found


def _pair(study: _Study, small: Entry, large: Entry, nest: Nesting) -> dict[str, Any]:
    edge = nest.at_edge()
    test = likelihood_ratio(small.deviance - large.deviance, len(nest.extra), len(edge))
    ratio, odds = density_ratio(large.posterior, nest), _log_odds(small, large)
    if ratio is None:
        seed = child_seed(study.seed, _ALONG, study.entries.index(small), study.entries.index(large))
        ratio = ratio_along(small.posterior, large.posterior, nest, seed)
    agrees = None
    if odds is not None:
        agrees = bool(abs(ratio["log_ratio"] - odds[0]) <= _SIGMAS * math.hypot(ratio["error"], odds[1]))
        if not agrees:
            study.warnings.append(
                f"{small.name} against {large.name}: ln of the Savage–Dickey ratio is {ratio['log_ratio']:.3f} ± {ratio['error']:.2g}, but "
                f"the evidences differ by {odds[0]:.3f} ± {odds[1]:.2g}. One of them is wrong: trust neither before the cross-checks agree."
            )
    return {
        "simpler": small.name,
        "larger": large.name,
        "extra": nest.describe(),
        "likelihood_ratio": test,
        "flat_priors": _flat(nest.large) and _flat(nest.small),
        "savage_dickey": ratio,
        "delta_log_evidence": None if odds is None else list(odds),
        "agrees": agrees,
    }


def _flat(log_posterior: LogPosterior) -> bool:
    """Whether the best fit is the likelihood's own."""
    return all(prior.keyword == "uniform" for prior in log_posterior.priors)


def _prior_widths(study: _Study) -> list[dict]:
    """Δ ln Z of each fit against the reference with each prior halved and doubled, in both where both have it."""
    usable = [e for e in study.same_data if e.log_posterior is not None and e.log_evidence is not None]
    if study.reference not in usable or len(usable) < 2:
        return []
    around = anchors(usable)
    shifts = {e.name: {(s.parameter, s.factor): s for s in evidence_shifts(e, around)} for e in usable}
    rows = []
    for entry in usable:
        if entry is not study.reference:
            names = dict.fromkeys([*entry.posterior.names, *study.reference.posterior.names])
            rows += [row for n in names for f in (0.5, 2.0) if (row := _width_row(study, entry, shifts, n, f))]
    return rows


def _width_row(study: _Study, entry: Entry, shifts: dict, name: str, factor: float) -> dict | None:
    ours, theirs = (shifts[e.name].get((name, factor)) for e in (entry, study.reference))
    sampled = [name in e.posterior.names for e in (entry, study.reference)]
    odds = _log_odds(entry, study.reference)
    if odds is None or (ours is None and sampled[0]) or (theirs is None and sampled[1]):
        return None
    before, error = odds
    after = before + (ours.change if ours else 0.0) - (theirs.change if theirs else 0.0)
    total = math.sqrt(error**2 + sum(s.error**2 for s in (ours, theirs) if s))
    was, now = verdict(before, study.scale), verdict(after, study.scale)
    return {
        "variant": entry.name,
        "parameter": name,
        "factor": factor,
        "prior": (ours or theirs).prior.describe(),
        "delta_log_evidence": after,
        "error": total,
        "strength": now[1],
        "changes": was != now,
        "cut": max(s.cut for s in (ours, theirs) if s),
    }


def _data_sets(study: _Study) -> list[dict]:
    """Consistency of fits of one model to different data."""
    found = []
    for i, (first, second) in enumerate(combinations(study.entries, 2)):
        if first.data == second.data or first.summary["model"] != second.summary["model"]:
            continue
        common = overlap(first, second)
        if common == min(e.summary["sample"]["n"] for e in (first, second)):
            continue  # a part of the same sample, or other errors: nobody takes them for independent
        if common != 0:
            why = "share supernovae" if common else "may share supernovae (their data are not at hand)"
            study.warnings.append(f"{first.name} and {second.name} {why}: a test of their consistency would need independent data.")
            continue
        result = consistency(first, second, np.random.default_rng(child_seed(study.seed, _PAIRED, i)))
        found += [result] if result else []
    return found


def _average(study: _Study) -> dict | None:
    usable = [e for e in study.same_data if e.log_evidence is not None]
    return averaged(usable) if len(usable) > 1 else None


def _notes(study: _Study, report: dict) -> list[str]:
    notes = []
    others = [e.name for e in study.entries if e.data != study.reference.data]
    if others:
        notes.append(
            f"{', '.join(others)}: other data or another covariance than {study.reference.name}, so no difference of χ², of information "
            "criteria or of evidence is given. The parameters and the overlaid figures may be compared."
        )
    notes += [f"{v['name']} has not converged: its numbers are provisional." for v in report["variants"] if not v["converged"]]
    failed = [e.name for e in study.entries if (e.summary.get("cross_check") or {}).get("agrees") is False]
    notes += [f"{name}: the cross-check of its chain failed; do not use its numbers." for name in failed]
    unsure = [e.name for e in study.entries if (e.summary.get("evidence") or {}).get("methods_agree") is False]
    notes += [f"{name}: quadrature and importance sampling disagree on its evidence." for name in unsure]
    absent = [e.name for e in study.entries if e.log_posterior is None]
    if absent:
        notes.append(
            f"{', '.join(absent)}: the data or the model's code are not at hand, so there are no nested tests and no other prior widths."
        )
    notes += [_width_warning(study, name, report["prior_widths"]) for name in dict.fromkeys(r["variant"] for r in report["prior_widths"])]
    informative = [p for p in report["nested"] if not p["flat_priors"]]
    if informative:
        notes.append(
            "Likelihood-ratio tests compare best fits, which informative priors pull away from the best likelihood: p is approximate."
        )
    return [text for text in notes if text]


def _width_warning(study: _Study, name: str, rows: list[dict]) -> str:
    """The prior widths that would turn a verdict, in one sentence for each fit."""
    changed = [r for r in rows if r["variant"] == name and r["changes"]]
    if not changed:
        return ""
    now = next(v["delta"]["strength"] for v in (_variant(study, e) for e in study.entries if e.name == name))
    said = [f"“{r['strength']}” with that of {parameter(r['parameter']).plain} {_STRETCH[r['factor']]}" for r in changed]
    return f"The verdict on {name} ({now}) depends on the widths of the priors: {'; '.join(said)}."
