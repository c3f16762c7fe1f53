"""What a rehearsal found, as text for the terminal, Markdown and CSV."""

from __future__ import annotations

import csv
import io
import textwrap

from fitter.report.digits import figures_for, plain_number
from fitter.report.facts import parameter

__all__ = ["rehearsal_csv", "rehearsal_markdown", "rehearsal_text"]

_LEGEND = (
    "expected ±1σ: median error of a fit, and the range of 68 % of them. bias: mean of the fits minus the truth; bias/σ: the same with "
    "each fit in units of its own error, scatter/σ their scatter, 1 for right errors. 68 %, 95 %: how often the interval holds the truth. "
    "ranks p: chance of the truths' ranks, which are uniform for right errors."
)
_HEAD = ("", "expected ±1σ", "bias", "bias/σ", "scatter/σ", "68 %", "95 %", "ranks p")


def rehearsal_text(result: dict) -> str:
    """Return the rehearsal for a terminal."""
    rows = [_HEAD, *(_row(name, facts) for name, facts in result["parameters"].items())]
    widths = [max(len(row[i]) for row in rows) for i in range(len(_HEAD))]
    lines = [_title(result), _truth(result), "", *(f"  {text}" for text in result["verdict"]), ""]
    lines += ["  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows]
    legend = textwrap.wrap(_LEGEND, 98, initial_indent="  ", subsequent_indent="  ")
    return "\n".join([*lines, "", *legend, "", _chi2(result["chi2"])]) + "\n"


def rehearsal_markdown(result: dict) -> str:
    """Return the rehearsal as a Markdown page."""
    lines = [f"# {_title(result)}", "", _truth(result), "", *(f"- {text}" for text in result["verdict"]), ""]
    lines += ["| " + " | ".join(("parameter", *_HEAD[1:])) + " |", "|" + " --- |" * len(_HEAD)]
    lines += ["| " + " | ".join(_row(name, facts)) + " |" for name, facts in result["parameters"].items()]
    return "\n".join([*lines, "", _LEGEND, "", _chi2(result["chi2"])]) + "\n"


def rehearsal_csv(result: dict) -> str:
    """Return every fit: one row a mock and parameter."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    keys = ("truth", "mean", "sd", "median", "low68", "high68", "low95", "high95", "rank")
    writer.writerow(["mock", "chi2", "parameter", *keys])
    for fit in result["fits"]:
        for name, facts in fit["parameters"].items():
            writer.writerow([fit["mock"], fit["chi2"], name, *(facts.get(key, "") for key in keys)])
    return out.getvalue()


def _title(result: dict) -> str:
    what = "a survey to come" if result.get("planned") else "mocks"
    return f"Rehearsal: {result['model']} on {result['mocks']} {what if what == 'mocks' else 'mocks of ' + what}, {result['n']} supernovae"


def _truth(result: dict) -> str:
    drawn = f" by {result['source_model']}" if result["source_model"] != result["model"] else ""
    drawn += "" if result["same_covariance"] else " with the covariance of another config"
    if result["truth"] == "prior":
        return f"Drawn{drawn} at truths from the prior."
    values = ", ".join(f"{parameter(k).plain} = {plain_number(v)}" for k, v in result["truth"].items()).replace("-", "−")
    return f"Drawn{drawn} at {values}."


def _row(name: str, facts: dict) -> tuple[str, ...]:
    precision = facts["precision"]
    unit = f" {parameter(name).unit}" if parameter(name).unit else ""
    middle, low, high = (figures_for(precision[key], width=precision["sigma"]).plain() for key in ("sigma", "sigma_low", "sigma_high"))
    sigma = f"{middle} ({low}–{high}){unit}"
    if facts["coverage"] is None:
        return (parameter(name).plain, sigma, "", "", "", "", "", "")
    bias, c68, c95 = facts["bias"], facts["coverage"]["68"], facts["coverage"]["95"]
    error = bias["error"] or 0.0
    size = figures_for(bias["mean"], bias["mean"] - error, bias["mean"] + error).plain()
    in_sigma = f"{bias['in_sigma']:+.2f} ± {bias['in_sigma_error'] or 0:.2f}".replace("-", "−")
    shares = (f"{100 * c['share']:.1f} ± {100 * c['error']:.1f} %" for c in (c68, c95))
    scatter = "" if bias["pull_sd"] is None else f"{bias['pull_sd']:.2f}"
    return (parameter(name).plain, sigma, size, in_sigma, scatter, *shares, f"{facts['ranks']['ks_p_value']:.2g}")


def _chi2(facts: dict) -> str:
    if facts["sd"] is None:
        return f"χ²: mean {facts['mean']:.1f}, {facts['dof']} degrees of freedom"
    expected = (2 * facts["dof"]) ** 0.5
    return (
        f"χ²: mean {facts['mean']:.1f} ± {facts['error']:.1f}, scatter {facts['sd']:.1f}; expected {facts['dof']} and {expected:.1f}; "
        f"Kolmogorov–Smirnov p = {facts['ks_p_value']:.2g}"
    )
