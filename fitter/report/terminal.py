"""A fit's summary for people at a terminal."""

from __future__ import annotations

import os
import textwrap
import unicodedata
from typing import TextIO

from fitter.report.digits import evidence_digits, figures_for, plain_number
from fitter.report.facts import parameter, unit_text

__all__ = ["facts_lines", "terminal_summary", "told_apart", "wants_colour"]

_WIDTH = 100
_BOLD, _YELLOW, _PLAIN = "\x1b[1m", "\x1b[33m", "\x1b[0m"
_KINDS = {"sampled": "", "marginalised": "marginalised analytically", "derived": "derived"}


def wants_colour(stream: TextIO) -> bool:
    """Return whether a stream is a terminal whose user has not asked for no colour (NO_COLOR)."""
    return bool(getattr(stream, "isatty", lambda: False)()) and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"


def terminal_summary(summary: dict, *, stream: TextIO | None = None, width: int = _WIDTH) -> str:
    """Return the readable summary of a fit.

    Parameters
    ----------
    summary : dict
        As :func:`fitter.report.summary.summarise` makes it.
    stream : file-like, optional
        Where it will be written: colour is used if that is a terminal and NO_COLOR is unset.
    width : int
        Columns at most.
    """
    colour = stream is not None and wants_colour(stream)
    lines = [_paint(summary["title"] or summary["model"], _BOLD, colour), *_wrap(data_line(summary), width), ""]
    lines += _table(summary, colour)
    lines.append("")
    for line in facts_lines(summary):
        lines += _wrap(line, width)
    told, cautions = told_apart(summary)
    for texts, heading, mark, code in ((told, "Warning", "  ! ", _YELLOW), (cautions, "Caution", "  - ", _PLAIN)):
        if texts:
            lines += ["", _paint(heading + "s" * (len(texts) > 1), _BOLD, colour)]
            lines += [_paint(line, code, colour) for text in texts for line in _wrap(text, width, mark=mark)]
    return "\n".join(lines) + "\n"


def told_apart(summary: dict) -> tuple[list[str], list[str]]:
    """Return the warnings that this run has called for, and the cautions that hold for every run of its kind."""
    cautions = summary.get("cautions") or []
    return [text for text in summary["warnings"] if text not in cautions], list(cautions)


def facts_lines(summary: dict) -> list[str]:
    """Return one line each for goodness of fit, convergence, cross-check, criteria and evidence."""
    lines = [_chi2_line(summary["best_fit"]), _profile_line(summary.get("profile") or {}), _convergence_line(summary)]
    lines.append(_cross_check_line(summary.get("cross_check")))
    return [line for line in (*lines, *information_lines(summary["information"])) if line]


def _paint(text: str, code: str, colour: bool) -> str:
    return f"{code}{text}{_PLAIN}" if colour else text


def _wrap(text: str, width: int, mark: str = "  ") -> list[str]:
    return textwrap.wrap(text, width, initial_indent=mark, subsequent_indent=" " * len(mark), break_long_words=False)


def data_line(summary: dict) -> str:
    sample = summary["sample"]
    parts = [f"{sample['n']:,} supernovae, {sample['redshift_min']:.3g} ≤ z ≤ {sample['redshift_max']:.3g}"]
    if sample["n_calibrators"]:
        parts.append(f"{sample['n_calibrators']} of them calibrators")
    parts += [f"{sample['distance_scale']} distance scale", f"model {summary['model']}"]
    parts.append("radiation included" if summary["radiation"] else "no radiation")
    return ", ".join(parts)


def cell_text(facts: dict) -> str:
    """Return a parameter's value with its 68 % errors, or its one-sided limit, in plain Unicode."""
    limit = facts.get("limit")
    if limit:
        sign = "<" if limit["side"] == "upper" else ">"
        return f"{sign} {figures_for(limit['value'], width=facts['sd'], mcse=facts['mcse']).plain()} (95 %)"
    return figures_for(facts["median"], facts["low68"], facts["high68"], mcse=facts["mcse"]).plain()


def best_text(facts: dict) -> str:
    """Return a parameter's best-fit value in as many digits as its posterior's width deserves."""
    return figures_for(facts["best"], width=facts["sd"]).plain()


def median_head(summary: dict) -> str:
    """Return the head of the column of medians: what errors stand beside them."""
    kind = summary.get("intervals", "equal_tailed")
    return "median, 68 %" + ("" if kind == "equal_tailed" else " " + kind.replace("_", "-"))


def _table(summary: dict, colour: bool) -> list[str]:
    header = ("", median_head(summary), "best fit", "")
    rows = []
    for name, facts in summary["parameters"].items():
        note = _KINDS[facts["kind"]]
        undefined = facts.get("undefined_fraction")
        if undefined:
            note = f"{note}; undefined in {100 * undefined:.3g} % of draws"
        rows.append((f"{parameter(name).plain}{unit_text(name)}", cell_text(facts), best_text(facts), note))
    widths = [max(_columns(row[i]) for row in [header, *rows]) for i in range(3)]
    lines = ["  " + "  ".join([*(_pad(c, w) for c, w in zip(row[:3], widths, strict=True)), row[3]]).rstrip() for row in [header, *rows]]
    return [_paint(lines[0], _BOLD, colour), *lines[1:]]


def _columns(text: str) -> int:
    """Width of a text in terminal columns: combining marks take none."""
    return sum(not unicodedata.combining(c) for c in text)


def _pad(text: str, width: int) -> str:
    return text + " " * (width - _columns(text))


def _chi2_line(fit: dict) -> str:
    if fit["dof"] <= 0:
        return f"χ² = {fit['chi2']:.2f} with {fit['dof']} degrees of freedom"
    ratio = fit["chi2"] / fit["dof"]
    return f"χ²/dof = {fit['chi2']:.2f} / {fit['dof']} = {ratio:.3f}, p-value {plain_number(fit['p_value'], 3)}"


def _profile_line(profile: dict) -> str:
    said = "; ".join(f"{parameter(name).plain} {profile_text(facts, 'delta1')}" for name, facts in profile.items())
    return f"Profile likelihood, Δχ² = 1: {said}" if said else ""


def profile_text(facts: dict, delta: str) -> str:
    """Return where the likelihood of a parameter is highest and how far it can go, e.g. ``"0.373 +0.056 −0.059"``.

    Parameters
    ----------
    facts : dict
        An entry of ``profile`` in summary.json.
    delta : {"delta1", "delta4"}
        Δχ² = 1 or 4.
    """
    ends = facts[delta]
    inside = {side: ends[side] is not None and not ends[f"{side}_at_edge"] for side in ("low", "high")}
    if all(inside.values()):
        return figures_for(facts["maximum"], ends["low"], ends["high"]).plain()
    if not any(inside.values()):
        return "not limited within the prior"
    sign, side, other = ("<", "high", "low") if inside["high"] else (">", "low", "high")
    end = "to the prior's edge" if ends[f"{other}_at_edge"] else f"without a {'lower' if other == 'low' else 'upper'} limit"
    return f"{sign} {figures_for(ends[side], width=abs(ends[side] - facts['maximum']) or None).plain()}, {end}"


def _convergence_line(summary: dict) -> str:
    sampling = summary["sampling"]
    known = {n: p for n, p in summary["parameters"].items() if p.get("ess") is not None}
    state = {True: "Converged", False: "NOT CONVERGED"}.get(sampling.get("converged"), "Convergence not assessed")
    if not known:
        return state
    worst = min(known, key=lambda n: known[n]["ess"])
    text = f"{state}: {known[worst]['ess']:,.0f} independent samples or more (fewest: {parameter(worst).plain})"
    rhats = [p["rhat"] for p in known.values() if p.get("rhat") is not None]
    text += f", R̂ ≤ {max(rhats):.4f}" if rhats else ""
    times = [t for t in (sampling.get("autocorrelation") or {}).values() if t is not None]
    text += f", τ ≤ {max(times):.1f} steps" if times else ""
    if all(sampling.get(key) for key in ("replicas", "walkers", "steps")):
        text += f"; {sampling['replicas']} replicas × {sampling['walkers']} walkers × {sampling['steps']} steps"
    return text


def _cross_check_line(check: dict | None) -> str:
    if not check or check.get("agrees") is None:
        return ""
    verdict = "agrees" if check["agrees"] else "DISAGREES"
    return (
        f"Cross-check by {check.get('method') or 'an independent calculation'}: {verdict} "
        f"(largest difference of a cumulative distribution {plain_number(check.get('max_cdf_difference'), 2)}, "
        f"allowed {plain_number(check.get('tolerance'), 2)})"
    )


def information_lines(information: dict) -> list[str]:
    named = [(label, information.get(key)) for label, key in (("AIC", "aic"), ("AICc", "aicc"), ("BIC", "bic"), ("DIC", "dic"))]
    said = [f"{label} {value:.2f}" for label, value in named if value is not None]
    lines = [f"{', '.join(said)} ({information['k']} parameters counted: {', '.join(information['k_names'])})"] if said else []
    log_evidence, error = information.get("log_evidence"), information.get("log_evidence_error")
    if log_evidence is not None:
        if error:
            digits, accuracy = evidence_digits(log_evidence, error)
            lines.append(f"Evidence: ln Z = {digits}" + (f" ± {accuracy}" if accuracy else ", numerical error < 0.0001"))
        else:
            lines.append(f"Evidence: ln Z = {plain_number(log_evidence, 6)}")
    return lines
