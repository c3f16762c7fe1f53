"""The warnings a practitioner would give on reading a fit, each with its cure."""

from __future__ import annotations

from typing import TYPE_CHECKING

from fitter.report.digits import figures_for, plain_number
from fitter.report.facts import parameter

if TYPE_CHECKING:
    from fitter.cosmology import Model
    from fitter.likelihood.posterior import LogPosterior
    from fitter.likelihood.priors import Prior
    from fitter.sample.sample import Sample

__all__ = ["practitioner_warnings", "standing_cautions"]

_LEANS = 0.135  # density at a prior's edge over the peak: the edge stands within 2σ of it
_PRIOR_DOMINATED = 0.9  # posterior width over prior width
_P_SMALL, _P_TINY = 0.01, 1e-3
_RATIO_FAR, _RATIO_DOF = 2.0, 10
_FEW, _RHAT = 400, 1.01
_MOSTLY = 0.5
_FEW_CALIBRATORS = 5
_MANY = 100
_BEYOND = 1e-3  # share of draws beyond a capsule's order
_RESUME = "continue this run with `mufitter fit CONFIG --resume`"
_NOISE_PARAMETERS = ("intrinsic_scatter", "covariance_scale")
_CANNOT_BE_NEGATIVE = ("omega_m", "intrinsic_scatter", "covariance_scale")


def practitioner_warnings(summary: dict, log_posterior: LogPosterior) -> list[str]:
    """Return the warnings that the facts of a fit call for, the gravest first, and last the cautions that always hold.

    Parameters
    ----------
    summary : dict
        As :func:`fitter.report.summary.summarise` makes it (warnings not needed yet).
    log_posterior : LogPosterior
        For the priors, and the sample's covariance and own warnings.

    Returns
    -------
    list of str
    """
    texts = _cross_check(summary) + _convergence(summary) + _chi2(summary)
    texts += _prior_edges(summary, log_posterior) + _prior_share(summary)
    texts += _capsule(summary) + _scale(summary)
    texts += _covariance(log_posterior.sample) + _model(summary, log_posterior.model)
    return texts + [str(text) for text in log_posterior.sample.warnings] + standing_cautions(summary)


def standing_cautions(summary: dict) -> list[str]:
    """Return what holds for every fit of this kind, whatever came out: where H0 comes from, and what evidences depend on."""
    return _zero_point(summary) + _evidence(summary)


def _cross_check(summary: dict) -> list[str]:
    check = summary.get("cross_check") or {}
    if check.get("agrees") is not False:
        return []
    return [
        f"CROSS-CHECK FAILED: the chain and {check.get('method') or 'the independent calculation'} disagree (largest difference of a "
        f"cumulative distribution {plain_number(check.get('max_cdf_difference'), 2)}, allowed "
        f"{plain_number(check.get('tolerance'), 2)}). "
        "Do not use these numbers: run longer with another seed, and report it if the two still disagree."
    ]


def _convergence(summary: dict) -> list[str]:
    sampling, texts = summary.get("sampling") or {}, []
    interrupted = sampling.get("reason") == "interrupted"
    if sampling.get("converged") is False:
        reason = sampling.get("reason")
        because = f" ({str(reason).rstrip('.')})" if reason else ""
        if interrupted:
            texts.append(f"Interrupted before it converged: {_RESUME}.")
        else:
            texts.append(f"Not converged{because}: raise sampling.max_steps, then {_RESUME}.")
    sampled = {n: p for n, p in summary["parameters"].items() if p.get("ess") is not None}
    few = {n: p["ess"] for n, p in sampled.items() if p["ess"] < _FEW}
    if few:
        worst = min(few, key=lambda name: few[name])
        texts.append(
            f"Too few independent samples: {few[worst]:.0f} for {parameter(worst).plain}, at least {_FEW} are needed for intervals. "
            + (f"{_RESUME[0].upper()}{_RESUME[1:]}." if interrupted else "Raise sampling.target_ess or sampling.max_steps.")
        )
    apart = {n: p["rhat"] for n, p in sampled.items() if p.get("rhat") is not None and p["rhat"] > _RHAT}
    if apart:
        worst = max(apart, key=lambda name: apart[name])
        texts.append(
            f"The replicas disagree: R̂ = {apart[worst]:.3f} for {parameter(worst).plain} (below {_RHAT} is wanted). "
            "Run longer; if it stays, look at the chains for separate modes."
        )
    return texts


def _chi2(summary: dict) -> list[str]:
    fit = summary["best_fit"]
    dof, p_value, chi2 = fit["dof"], fit["p_value"], fit["chi2"]
    if p_value is None:
        return [f"No degrees of freedom are left ({dof}): χ² says nothing about the fit. Use more data or fix a parameter."]
    kinds = summary["parameters"]
    if any(kinds.get(name, {}).get("kind") == "sampled" for name in _NOISE_PARAMETERS):
        return []  # the scatter or scale was fitted: χ²/dof is near 1 whatever the data
    said = f"χ²/dof = {chi2:.1f}/{dof} = {chi2 / dof:.2f} (p = {p_value:.2g})"
    far = dof >= _RATIO_DOF and not 1 / _RATIO_FAR < chi2 / dof < _RATIO_FAR
    if p_value < _P_TINY:
        return [
            f"{said}: the p-value is tiny, the scatter is larger than the errors and the model allow. Look at the "
            "residuals for outliers; add an "
            "intrinsic term or a missing covariance; the parameters' errors are too small as they stand."
        ]
    if p_value < _P_SMALL or (far and chi2 > dof):
        return [f"{said} is high: errors may be underestimated. Look for outliers, or let sample.uncertainty have an intrinsic term."]
    if p_value > 1 - _P_SMALL or (far and chi2 < dof):
        return [
            f"{said} is low: the errors look too large, or one was counted twice (released errors often hold scatter, "
            "lensing and peculiar "
            "velocities already). Compare the uncertainty terms with the release notes, or fit a covariance_scale."
        ]
    return []


def _prior_edges(summary: dict, log_posterior: LogPosterior) -> list[str]:
    texts = []
    for name, prior in zip(log_posterior.names, log_posterior.priors, strict=True):
        facts = summary["parameters"][name]
        symbol = parameter(name).plain
        if _dominated(prior, facts):
            texts.append(
                f"The posterior of {symbol} is little narrower than its prior ({prior.describe()}): the data hardly constrain it. "
                f"Quote no measurement of {name}, and give the prior with every other result."
            )
            continue
        edges = [(e, at) for e, at in zip(("low", "high"), facts["density_at_prior_edge"], strict=True) if at > _LEANS]
        texts += [_edge_text(name, symbol, getattr(prior, edge), edge, facts) for edge, _ in edges]
    return texts


def _edge_text(name: str, symbol: str, bound: float, edge: str, facts: dict) -> str:
    said = f"The posterior of {symbol} leans on the {'lower' if edge == 'low' else 'upper'} edge of its prior, {bound:g}"
    limit = facts.get("limit")
    quote = ""
    if limit:
        value = figures_for(limit["value"], width=facts["sd"], mcse=facts["mcse"]).plain()
        quote = f"quote a one-sided limit ({symbol} {'<' if limit['side'] == 'upper' else '>'} {value} at 95 %)"
    if edge == "low" and bound == 0 and name in _CANNOT_BE_NEGATIVE:
        return f"{said}, which is a physical bound: {quote or 'say so beside the interval, which it cuts short'}."
    widen = f"widen parameters.{name}, or say in the text that the prior cuts the interval"
    return f"{said}: {widen}{f'; or {quote}' if quote else ''}."


def _dominated(prior: Prior, facts: dict) -> bool:
    """Whether the central 68 % of the posterior is about as wide as the prior's."""
    if facts.get("low68") is None:
        return False
    prior_width = float(prior.quantile(0.8413)) - float(prior.quantile(0.1587))
    return facts["high68"] - facts["low68"] > _PRIOR_DOMINATED * prior_width


def _prior_share(summary: dict) -> list[str]:
    excluded = summary.get("prior_excluded_fraction")
    if excluded is None or excluded <= _MOSTLY:
        return []
    return [
        f"{100 * excluded:.0f} % of the prior is excluded (no big bang inside the data's redshifts, or an antipode "
        "there): the effective prior "
        "is not the one written in the config. Narrow the priors to what is meant; the evidence depends on it."
    ]


def _scale(summary: dict) -> list[str]:
    sample = summary["sample"]
    if "H0" not in summary["parameters"] or sample["distance_scale"] != "calibrated" or sample["n_calibrators"] >= _FEW_CALIBRATORS:
        return []
    return [
        f"H0 rests on only {sample['n_calibrators']} calibrators: one of them moves it noticeably. Repeat the fit leaving each out in turn."
    ]


def _zero_point(summary: dict) -> list[str]:
    """Where H0 comes from, or why there is none."""
    scale, has_h0 = summary["sample"]["distance_scale"], "H0" in summary["parameters"]
    if scale == "relative" and not has_h0:
        return [
            "No H0: the distance scale is relative, so H0 and the absolute magnitude are one offset, marginalised. For an H0, give moduli "
            "on an absolute scale, or calibrators (sample.distance_scale)."
        ]
    if scale == "absolute" and has_h0:
        return [
            "H0 rests on the zero point of the given moduli: its value is that of the anchor behind them, and its error is only right if "
            "the covariance holds the anchor's (1 % in H0 is 0.0216 mag common to all). Name the anchor when quoting it."
        ]
    return []


def _model(summary: dict, model: Model) -> list[str]:
    """What the model itself says of data that reach this far."""
    return list(model.advice(summary["sample"]["redshift_max"])) if hasattr(model, "advice") else []


def _capsule(summary: dict) -> list[str]:
    """Whether the nodes of a capsule suffice; unlike a fit of the data themselves it has no finer ones."""
    found = summary.get("capsule") or {}
    if found.get("beyond", 0.0) <= _BEYOND:
        return []
    return [
        f"The capsule's order {found['order']} is too low for {100 * found['beyond']:.2g} % of this posterior: χ² may be off there by "
        f"up to {plain_number(found['worst'], 2)}. Fit the data themselves, or a capsule of higher order "
        "(`mufitter capsule RUN --order 96`)."
    ]


def _covariance(sample: Sample) -> list[str]:
    noise = sample.noise
    if not noise.is_diagonal or noise.modes.shape[1] or sample.n < _MANY:
        return []
    return [
        f"A diagonal is no covariance: {sample.n} supernovae share calibration and other systematics, which errors "
        "taken as independent leave "
        "out, so these intervals are too narrow. Add the release's covariance, or modes, to sample.uncertainty."
    ]


def _evidence(summary: dict) -> list[str]:
    if summary["information"].get("log_evidence") is None:
        return []
    return ["The evidence depends on the widths of the priors: compare models only under priors you would defend, and quote them with it."]
