"""What `mufitter check` says: the data, the uncertainty terms, the model and the priors of a fit to be made."""

from __future__ import annotations

import numpy as np

from fitter.report.facts import parameter

__all__ = ["check_text"]


def check_text(config, sample, log_posterior) -> str:
    """Return what is known of a fit as readable text.

    Parameters
    ----------
    config : Config or None
    sample : Sample or None
    log_posterior : LogPosterior or None
        Each None where the input does not allow to make it.
    """
    lines = []
    if config is not None and config.title:
        lines.append(config.title)
    if sample is not None:
        lines += _data(sample) + _terms(sample)
    if config is not None:
        lines.append(f"Model: {config.cosmology.name}, {'with' if config.radiation else 'no'} radiation")
    if config is not None and config.variants:
        lines.append(
            f"Variants, compared with {config.compare.reference or config.variants[0].name}: {', '.join(v.name for v in config.variants)}"
        )
    if log_posterior is not None:
        lines += _parameters(log_posterior)
    if sample is not None and sample.warnings:
        lines += ["Warnings:", *(f"  ! {text}" for text in sample.warnings)]
    return "\n".join(lines)


def _data(sample) -> list[str]:
    kind = sample.data_kind.replace("_", " ")
    lines = [f"Data: {sample.n:,} rows, {kind}, distance scale {sample.distance_scale}, {_range(sample.redshift)}"]
    if sample.n_calibrators:
        lines.append(f"  calibrators: {sample.n_calibrators}")
    if sample.group is not None:
        groups, first, counts = np.unique(sample.group, return_index=True, return_counts=True)
        for i in np.argsort(first):
            lines.append(f"  {groups[i]}: {counts[i]:,} rows, {_range(sample.redshift[sample.group == groups[i]])}")
    lines += [f"  removed by {cut}: {count:,}" for cut, count in sample.removed.items()]
    return lines


def _range(redshift) -> str:
    return f"{redshift.min():.4g} ≤ z ≤ {redshift.max():.4g}"


def _terms(sample) -> list[str]:
    lines = ["Uncertainties, median σ in mag:"]
    width = max((len(term.label) for term in sample.terms), default=0)
    lines += [f"  {term.label:<{width}}  {np.sqrt(np.median(term.variance)):.4f}  ({term.kind})" for term in sample.terms]
    if len(sample.terms) > 1:
        total = np.sqrt(np.median(sum(term.variance for term in sample.terms)))
        lines.append(f"  {'together':<{width}}  {total:.4f}")
    for name, prior in (("intrinsic scatter", sample.intrinsic_prior), ("covariance scale", sample.covariance_scale_prior)):
        if prior is not None:
            lines.append(f"  {name}: {'fitted' if isinstance(prior, dict) else prior}")
    return lines


def _parameters(log_posterior) -> list[str]:
    lines = ["Parameters:"]
    width = max(len(name) for name in (*log_posterior.names, *log_posterior.fixed, *log_posterior.marginalised))
    for name, prior in zip(log_posterior.names, log_posterior.priors, strict=True):
        lines.append(f"  {name:<{width}}  {prior.describe():<28}  {_meaning(name)}".rstrip())
    for name, value in log_posterior.fixed.items():
        lines.append(f"  {name:<{width}}  {'held at ' + format(value, 'g'):<28}  {_meaning(name)}".rstrip())
    for name in log_posterior.marginalised:
        lines.append(f"  {name:<{width}}  {'marginalised analytically':<28}  {_meaning(name)}".rstrip())
    if log_posterior.sample.distance_scale == "relative":
        lines.append("  The offset of the distances (H0 and absolute magnitude in one) is marginalised analytically, with a flat prior.")
    return lines


def _meaning(name: str) -> str:
    declared = parameter(name)
    meaning = declared.meaning if declared.meaning != name else ""
    return f"{meaning} ({declared.unit})" if declared.unit else meaning
