"""What a fit says, as one dict: the contents of summary.json, and the same as Markdown and CSV."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from fitter.inference.intervals import INTERVALS, SHARES
from fitter.inference.profile import ProfileInterval
from fitter.report.facts import edge_density, json_safe, parameter
from fitter.report.information import information_criteria, noise_scale
from fitter.sample.budget import error_budget

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.likelihood.priors import Prior
    from fitter.sample.sample import Sample

__all__ = ["SCHEMA", "Extras", "summarise", "summary_csv", "summary_json", "summary_markdown"]

SCHEMA = "mufitter summary 1"

_ENOUGH_DRAWS = 100_000
_MOST_GROUPS = 50
_LIMIT_DENSITY = 0.6  # of the peak, at a prior's edge: the peak is within about 1σ of it


@dataclass(frozen=True)
class Extras:
    """What a summary may hold beside the fit itself.

    Parameters
    ----------
    title : str
    cross_check : object, optional
        Mapping or dataclass with method, max_cdf_difference, tolerance, agrees.
    evidence : object, optional
        Mapping or dataclass with log_evidence and log_evidence_error.
    more : dict
        Further top-level keys, written as they are.
    profile : tuple of ProfileInterval
        Profile-likelihood intervals of the sampled parameters.
    """

    title: str = ""
    cross_check: object | None = None
    evidence: object | None = None
    more: dict = field(default_factory=dict)
    profile: tuple[ProfileInterval, ...] = ()


def summarise(log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum, extras: Extras | None = None) -> dict:
    """Summarise a fit.

    Parameters
    ----------
    log_posterior : LogPosterior
    posterior : Posterior
    optimum : Optimum
    extras : Extras, optional

    Returns
    -------
    dict
        JSON-safe, with the keys schema, title, model, radiation, sample, parameters, intervals, best_fit, profile,
        information, sampling, cross_check, warnings.
    """
    from fitter.report.warnings import practitioner_warnings, standing_cautions

    extras = extras or Extras()
    best = best_values(log_posterior, posterior, optimum)
    evidence = json_safe(extras.evidence) if extras.evidence is not None else {}
    summary = {
        "schema": SCHEMA,
        "title": extras.title,
        "model": log_posterior.model.name,
        "radiation": bool(log_posterior.radiation),
        "sample": _sample_facts(log_posterior.sample),
        "parameters": {name: _parameter_facts(log_posterior, posterior, name, best.get(name)) for name in posterior.kinds},
        "intervals": posterior.intervals,
        "best_fit": _best_fit(log_posterior, optimum, best),
        "profile": profile_facts(extras.profile),
        "information": information_criteria(log_posterior, posterior, optimum, evidence),
        "sampling": dict(posterior.sampling),
        "cross_check": extras.cross_check,
        "prior_excluded_fraction": log_posterior.prior_excluded_fraction(np.random.default_rng(0)),
        "fixed": dict(log_posterior.fixed),
        "priors": {name: prior.describe() for name, prior in zip(log_posterior.names, log_posterior.priors, strict=True)},
        **extras.more,
    }
    summary = json_safe(summary)
    summary["warnings"] = practitioner_warnings(summary, log_posterior)
    summary["cautions"] = standing_cautions(summary)
    return summary


def best_values(log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum) -> dict[str, float]:
    """Values of every parameter at the best fit: sampled, marginalised, derived."""
    theta = np.atleast_2d(np.asarray(optimum.theta, dtype=float))
    values = dict(zip(log_posterior.names, theta[0].tolist(), strict=True))
    for more in (log_posterior.best_marginalised(theta), log_posterior.derived(theta)):
        values.update({name: float(np.ravel(v)[0]) for name, v in more.items()})
    values.update(optimum.values)
    return {name: values[name] for name in posterior.kinds if name in values}


def _sample_facts(sample: Sample) -> dict:
    in_flow = sample.redshift[~np.asarray(sample.is_calibrator)]
    redshift = in_flow if in_flow.size else sample.redshift
    return {
        "n": sample.n,
        "n_calibrators": sample.n_calibrators,
        "redshift_min": float(redshift.min()),
        "redshift_max": float(redshift.max()),
        "sha256": sample.sha256,
        "distance_scale": sample.distance_scale,
        "data_kind": sample.data_kind,
        "removed": dict(sample.removed),
        "terms": [part.facts() for part in error_budget(sample)],
        "groups": group_counts(sample),
    }


def group_counts(sample: Sample) -> dict[str, int]:
    """Data of each survey, the largest first; empty where there are too many to list."""
    if sample.group is None:
        return {}
    names, counts = np.unique(np.asarray(sample.group).astype(str), return_counts=True)
    if len(names) > _MOST_GROUPS:
        return {}
    return {str(names[i]): int(counts[i]) for i in np.argsort(-counts, kind="stable")}


def _best_fit(log_posterior: LogPosterior, optimum: Optimum, best: dict) -> dict:
    dof = int(log_posterior.n_data) - int(log_posterior.n_parameters)
    return {
        "chi2": float(optimum.chi2),
        "dof": dof,
        "p_value": chi2_p_value(float(optimum.chi2), dof),
        "log_posterior": float(optimum.log_posterior),
        "values": best,
        "errors": dict(zip(log_posterior.names, optimum.errors.tolist(), strict=True)),
        "covariance_scale": noise_scale(log_posterior, optimum.values),
    }


def profile_facts(intervals: Iterable[ProfileInterval]) -> dict[str, dict]:
    """Return profile-likelihood intervals by parameter and Δχ², an end without a limit as None."""
    facts: dict[str, dict] = {}
    for one in intervals:
        ends = {"low": one.low, "high": one.high}
        told = {side: value if np.isfinite(value) else None for side, value in ends.items()}
        edges = {"low_at_edge": one.low_at_edge, "high_at_edge": one.high_at_edge}
        facts.setdefault(one.name, {"maximum": one.best})[f"delta{one.delta:g}"] = {**told, **edges}
    return facts


def chi2_p_value(chi2: float, dof: int) -> float | None:
    """Probability of a larger χ² by chance; None without degrees of freedom."""
    if dof <= 0:
        return None
    from scipy.special import gammaincc  # not scipy.stats, which takes over a second to import

    return float(gammaincc(0.5 * dof, 0.5 * chi2))


def _parameter_facts(log_posterior: LogPosterior, posterior: Posterior, name: str, best: float | None) -> dict:
    """Moments, quantiles and Monte Carlo accuracy of one parameter.

    Draws where a derived parameter does not exist (a universe that never accelerates has no such redshift) are
    left out of the moments and counted in ``undefined_fraction``.
    """
    draws = np.asarray(posterior.draws(name), dtype=float)
    defined = np.isfinite(draws)
    everywhere = bool(defined.all())
    facts = {"kind": posterior.kinds[name], **_moments(draws.ravel() if everywhere else draws[defined], posterior.intervals), "best": best}
    facts.update(_accuracy(posterior, name, defined, facts["sd"]))
    if not everywhere:
        facts["undefined_fraction"] = float(1.0 - defined.mean())
    facts["unit"] = parameter(name).unit
    if name in log_posterior.names:
        facts.update(_edge_facts(draws.ravel(), log_posterior.priors[log_posterior.names.index(name)], facts))
    return facts


def _moments(values: np.ndarray, intervals: str) -> dict:
    """Mean, standard deviation, median and the ends of the intervals."""
    if values.size == 0:
        return dict.fromkeys(["mean", "sd", "median", *(f"{end}{share}" for share in SHARES for end in ("low", "high"))])
    facts = {
        "mean": float(values.mean()),
        "sd": float(values.std(ddof=1)) if values.size > 1 else 0.0,
        "median": float(np.median(values)),
    }
    for share, held in SHARES.items():
        interval = INTERVALS[intervals](values, held)
        facts |= {f"low{share}": interval.low, f"high{share}": interval.high}
    return facts


def _accuracy(posterior: Posterior, name: str, defined: np.ndarray, sd: float | None) -> dict:
    """Effective sample size, R̂, and the Monte Carlo error of the mean, sd/√ess.

    What decided on the end of sampling is taken over. The rest is judged by a thinned chain: R̂ and the bulk ESS change little,
    as neighbouring steps repeat each other. Both use ranks only, so undefined draws stand beyond every defined one:
    that the chains agree on how often the parameter exists is part of convergence.
    """
    share = float(defined.mean())
    if share == 0 or not sd:
        return {"ess": None, "rhat": None, "mcse": None}
    known = posterior.sampling
    if name in known.get("rhat", {}) and name in known.get("ess_bulk", {}):
        ess, rhat = float(known["ess_bulk"][name]), float(known["rhat"][name])
    else:
        ess, rhat = _diagnose(np.asarray(posterior.draws(name), dtype=float), defined, sd)
    ess *= share
    facts = {"ess": ess, "rhat": rhat, "mcse": sd / float(np.sqrt(ess)) if ess > 0 else None}
    if name in known.get("ess_tail", {}):
        facts["ess_tail"] = float(known["ess_tail"][name])
    return facts


def _diagnose(draws: np.ndarray, defined: np.ndarray, sd: float) -> tuple[float, float]:
    from fitter.inference.diagnostics import ess_bulk, split_rhat

    stride = max(1, draws.size // _ENOUGH_DRAWS)
    draws, defined = draws[:, ::stride], defined[:, ::stride]
    if not defined.all():
        beyond = np.max(draws[defined], initial=-np.inf) + sd
        draws = np.where(defined, draws, beyond)
    return float(ess_bulk(draws)), float(split_rhat(draws))


def _edge_facts(draws: np.ndarray, prior: Prior, facts: dict) -> dict:
    """Density at the prior's edges, and a one-sided 95 % limit where the peak stands against one."""
    at_low, at_high = edge_density(draws, prior.low, prior.high)
    more: dict[str, object] = {"density_at_prior_edge": [at_low, at_high]}
    if max(at_low, at_high) > _LIMIT_DENSITY and min(at_low, at_high) <= _LIMIT_DENSITY:
        side, level = ("upper", 0.95) if at_low > at_high else ("lower", 0.05)
        more["limit"] = {"side": side, "level": 0.95, "value": float(np.quantile(draws, level))}
    return more


def summary_json(summary: dict) -> str:
    """Return the summary as JSON text; refuses NaN."""
    return json.dumps(summary, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


_COLUMNS = ("mean", "sd", "median", "low68", "high68", "low95", "high95", "best", "ess", "rhat", "mcse")
_PROFILE_COLUMNS = {f"profile_{side}_delta{delta}": (f"delta{delta}", side) for delta in (1, 4) for side in ("low", "high")}


def summary_csv(summary: dict) -> str:
    """Return the summary as CSV: one row a parameter, then one row for each other number.

    Full precision throughout; the ``value`` column holds what is not a parameter.
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["name", "kind", "unit", "value", *_COLUMNS, "hessian_error", *_PROFILE_COLUMNS])
    errors, profile = summary["best_fit"].get("errors") or {}, summary.get("profile") or {}
    for name, facts in summary["parameters"].items():
        numbers = [facts.get(c) for c in _COLUMNS] + [errors.get(name)]
        numbers += [profile.get(name, {}).get(delta, {}).get(side) for delta, side in _PROFILE_COLUMNS.values()]
        writer.writerow([name, facts["kind"], facts.get("unit", ""), "", *(_cell(x) for x in numbers)])
    for section in ("sample", "best_fit", "information", "sampling", "cross_check"):
        for key, value in (summary.get(section) or {}).items():
            if isinstance(value, int | float | str | bool):
                writer.writerow([key, section, "", _cell(value), *[""] * (len(_COLUMNS) + 1 + len(_PROFILE_COLUMNS))])
    return out.getvalue()


def _cell(value: object) -> str:
    return "" if value is None else repr(value) if isinstance(value, float) else str(value)


def summary_markdown(summary: dict) -> str:
    """Return the summary as a Markdown page."""
    from fitter.report.tables import full_markdown
    from fitter.report.terminal import facts_lines, told_apart

    lines = [f"# {summary['title'] or summary['model']}", "", full_markdown(summary), ""]
    lines += [f"- {line}" for line in facts_lines(summary)]
    for heading, texts in zip(("Warnings", "Cautions"), told_apart(summary), strict=True):
        if texts:
            lines += ["", f"## {heading}", "", *(f"- {text}" for text in texts)]
    return "\n".join(lines) + "\n"
