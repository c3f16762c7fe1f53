"""What `mufitter check` says: the data, the uncertainty terms, the model and the priors of a fit to be made."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.report.facts import parameter
from fitter.sample.budget import SHARE
from fitter.sample.capsule import CapsuleSample

if TYPE_CHECKING:
    from fitter.config.settings import Config
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

__all__ = ["check_text"]

_SHOWN = 5  # examples of a kind


def check_text(config: Config | None, sample: Sample | None, log_posterior: LogPosterior | None, *, planned: bool = False) -> str:
    """Return what is known of a fit as readable text.

    Parameters
    ----------
    config : Config or None
    sample : Sample or None
    log_posterior : LogPosterior or None
        Each None where the input does not allow to make it.
    planned : bool
        Whether something only stands in for the data, which are still to be observed.
    """
    lines = []
    if config is not None and config.title:
        lines.append(config.title)
    if sample is not None:
        lines += (
            _data(sample) + _capsule(sample) if isinstance(sample, CapsuleSample) else _data(sample, planned) + _of_rows(sample, planned)
        )
    if config is not None:
        lines.append(f"Model: {config.cosmology.name}, {'with' if config.radiation else 'no'} radiation")
    if config is not None and config.variants:
        lines.append(
            f"Variants, compared with {config.compare.reference or config.variants[0].name}: {', '.join(v.name for v in config.variants)}"
        )
    if log_posterior is not None:
        lines += _parameters(log_posterior) + ([] if planned or config is None else _cost(config, log_posterior))
    if sample is not None and sample.warnings:
        lines += ["Warnings:", *(f"  ! {text}" for text in sample.warnings)]
    return "\n".join(lines)


def _capsule(sample: CapsuleSample) -> list[str]:
    c = sample.capsule
    title = f", {c.title}" if c.title else ""
    return [f"A capsule of order {c.order}: the likelihood of {c.n:,} supernovae{title}, no single rows"]


def _of_rows(sample: Sample, planned: bool) -> list[str]:
    return _terms(sample) + _covariance(sample) + ([] if planned else _oddities(sample))


def _data(sample: Sample, planned: bool = False) -> list[str]:
    kind = "no moduli or magnitudes" if planned else sample.data_kind.replace("_", " ")
    lines = ["A survey to come: `mufitter rehearse` draws its data and fits them; there is nothing to fit yet."] if planned else []
    lines.append(f"Data: {sample.n:,} rows, {kind}, distance scale {sample.distance_scale}, {_range(sample.redshift)}")
    if sample.n_calibrators:
        lines.append(f"  calibrators: {sample.n_calibrators}")
    if sample.group is not None and sample.has_rows:
        groups, first, counts = np.unique(sample.group, return_index=True, return_counts=True)
        for i in np.argsort(first):
            lines.append(f"  {groups[i]}: {counts[i]:,} rows, {_range(sample.redshift[sample.group == groups[i]])}")
    lines += [f"  removed by {cut}: {count:,}" for cut, count in sample.removed.items()]
    return lines


def _range(redshift: FloatArray) -> str:
    return f"{redshift.min():.4g} ≤ z ≤ {redshift.max():.4g}"


def _percent(share: float | None) -> str:
    return f"{'?' if share is None else format(100 * share, '.1f'):>5} %"


def _terms(sample: Sample) -> list[str]:
    from fitter.sample.examination import budget

    parts = budget(sample)
    if not parts:
        return ["Uncertainties: an inverse covariance, too large to be taken apart here"]
    lines = [f"Uncertainties, median σ in mag and {SHARE}:"]
    width = max(len("together"), *(len(part.label) for part in parts))
    lines += [f"  {part.label:<{width}}  {part.sigma:.4f}  {_percent(part.share)}  ({part.kind})" for part in parts]
    if len(parts) > 1:
        total = np.sqrt(np.median(sum(term.variance for term in sample.terms)))
        lines.append(f"  {'together':<{width}}  {total:.4f}")
    for name, prior in (("intrinsic scatter", sample.intrinsic_prior), ("covariance scale", sample.covariance_scale_prior)):
        if prior is not None:
            lines.append(f"  {name}: {'fitted' if isinstance(prior, dict) else prior}")
    return lines


def _covariance(sample: Sample) -> list[str]:
    """Condition number and correlations."""
    from fitter.sample.examination import EIGENVALUES_OF, condition_number, correlations

    condition = condition_number(sample)
    weak = " (above 1e12 digits are lost: check the matrix)" if condition > 1e12 else ""
    said = f"{condition:.3g}" if sample.n <= EIGENVALUES_OF else f"about {condition:.2g}"
    lines = [f"  condition number {said}{weak}"]
    found = correlations(sample)
    if found is None:
        return lines if sample.noise.precision is not None else [*lines, "  rows are uncorrelated"]
    text = f"  correlations: median {found.median:.3g}, largest {found.largest:.3g} (rows {found.pair[0]} and {found.pair[1]})"
    if found.within is not None and found.between is not None:
        text += f"; median within a group {found.within:.3g}, between groups {found.between:.3g}"
    return [*lines, text + (f" [{found.n:,} rows looked at]" if found.n < sample.n else "")]


def _oddities(sample: Sample) -> list[str]:
    """Outliers and rows that stand twice."""
    from fitter.sample.examination import BEYOND, outliers, repeated_rows

    found = outliers(sample)
    chance = 6.3e-5 * sample.n
    expected = f", {chance:.2g} expected by chance" if chance > 0.1 else ""
    lines = [f"Rows beyond {BEYOND:g} σ of a smooth curve: {len(found) or 'none'}{expected}"]
    lines += [f"  row {o.row} {o.name}: {o.residual:+.3f} mag, {o.pull:+.1f} σ" for o in found[:_SHOWN]]
    lines += [f"  and {len(found) - _SHOWN} more"] if len(found) > _SHOWN else []
    weak = np.empty(0) if sample.noise.precision is not None and sample.n > 6000 else sample.noise.total_variance
    heavy = int(np.sum(weak > 100 * np.median(weak))) if len(weak) else 0
    lines += [f"Rows with errors above ten times the median, which say nothing: {heavy:,}"] if heavy else []
    twice = repeated_rows(sample)
    if twice:
        pairs = ", ".join(f"{a} and {b}" for a, b in twice[:_SHOWN])
        more = f" and {len(twice) - _SHOWN} more pairs" if len(twice) > _SHOWN else ""
        lines.append(f"Rows with the same redshift and the same data: {pairs}{more}")
    return lines


def _cost(config: Config, log_posterior: LogPosterior) -> list[str]:
    from fitter.report.fit_cost import expected_cost

    cost = expected_cost(log_posterior, config.sampling)
    lines = [
        f"The fit will take about {_duration(cost.seconds)} and {cost.memory / 1024**3:.1f} GB of memory "
        f"({cost.evaluation:.3g} µs an evaluation)."
    ]
    excluded = log_posterior.prior_excluded_fraction(np.random.default_rng(0))
    if excluded > 0:
        lines.insert(0, f"  {100 * excluded:.1f} % of the prior is outside the model's range (no big bang, or an antipode among the data).")
    return lines


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{round(seconds, -1 if seconds > 20 else 0):.0f} s"
    return f"{seconds / 60:.0f} minutes" if seconds < 5400 else f"{seconds / 3600:.1f} hours"


def _parameters(log_posterior: LogPosterior) -> list[str]:
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
