"""A comparison as text: for the terminal, Markdown, CSV and LaTeX."""

from __future__ import annotations

import csv
import io
import math
import textwrap
from collections.abc import Callable, Mapping
from typing import Any, TextIO

from fitter.inference.intervals import interval_words
from fitter.report.digits import plain_number
from fitter.report.facts import parameter, unit_text
from fitter.report.tables import latex_cell, latex_text
from fitter.report.terminal import cell_text, wants_colour

__all__ = ["comparison_csv", "comparison_latex", "comparison_markdown", "comparison_text", "main_names"]

# Derived parameters that say something beside the sampled ones; the CSV has them all.
_DERIVED = ("omega_k", "omega_lambda", "omega_de", "q0")
_DIFFERENCES = (("chi2", "Δχ²"), ("aic", "ΔAIC"), ("aicc", "ΔAICc"), ("bic", "ΔBIC"), ("dic", "ΔDIC"))
_NONE = "—"
_SHORT = {"not worth more than a bare mention": "bare mention"}


def main_names(report: Mapping[str, Any]) -> list[str]:
    """Parameters shown in a comparison: sampled and marginalised, then the main derived ones; fixed ones where others sample them."""
    kinds: dict[str, str] = {}
    for variant in report["variants"]:
        for name, facts in variant["parameters"].items():
            if facts["kind"] != "derived" or name not in kinds:
                kinds[name] = facts["kind"]
    free = [n for n, kind in kinds.items() if kind != "derived"]
    return free + [n for n in _DERIVED if kinds.get(n) == "derived"]


def _value(variant: dict, name: str, form: Callable[[dict], str] = cell_text, fixed: str = "{} (fixed)") -> str:
    if name in variant["parameters"]:
        return form(variant["parameters"][name])
    if name in variant["fixed"]:
        return fixed.format(f"{variant['fixed'][name]:g}".replace("-", "−"))
    return _NONE


def signed(value: float | None, digits: int = 2) -> str:
    """Return a difference with its sign, a true minus; zero has none."""
    if value is None:
        return _NONE
    text = f"{value:+.{digits}f}"
    return f"{0:.{digits}f}" if float(text) == 0 else text.replace("-", "−")


def evidence_text(delta: dict | None) -> str:
    """Return Δ ln Z with its error, in digits that this deserves."""
    if delta is None or delta["log_evidence"] is None:
        return _NONE
    error = delta["log_evidence_error"]
    if not error:
        return signed(delta["log_evidence"])
    if error < 0.005:
        return signed(delta["log_evidence"])
    return f"{signed(delta['log_evidence'], max(0, 1 - math.floor(math.log10(error))))} ± {error:.1g}"


def _words(delta: dict | None) -> str:
    if delta is None or delta["strength"] is None:
        return _NONE
    words = _SHORT.get(delta["strength"], delta["strength"])
    return f"{words}, {'for' if delta['log_evidence'] > 0 else 'against'}"


def _odds(delta: dict | None) -> str:
    if delta is None or delta["odds"] is None:
        return _NONE
    size = delta["odds"].split(" : ")[0]
    return f"{size} : 1" if delta["log_evidence"] > 0 else f"1 : {size}"


def _rows(report: dict) -> list[list[str]]:
    """Label, then one cell a fit."""
    variants = report["variants"]
    rows = [["model", *(v["model"] for v in variants)], ["supernovae", *(f"{v['n']:,}" for v in variants)]]
    rows += [[f"{parameter(n).plain}{unit_text(n)}", *(_value(v, n) for v in variants)] for n in main_names(report)]
    rows.append(["χ²_min", *(f"{v['chi2']:.2f}" for v in variants)])
    rows.append(["dof", *(str(v["dof"]) for v in variants)])
    rows.append(["p-value", *(plain_number(v["p_value"], 2) for v in variants)])
    rows.append(["k, parameters counted", *(str(v["k"]) for v in variants)])
    for key, label in _DIFFERENCES:
        rows.append([label, *(signed((v["delta"] or {}).get(key)) for v in variants)])
    rows.append(["Δ ln Z", *(evidence_text(v["delta"]) for v in variants)])
    rows.append(["odds to the reference", *(_odds(v["delta"]) for v in variants)])
    rows.append(["in words", *(_words(v["delta"]) for v in variants)])
    return rows


def comparison_text(report: dict, *, stream: TextIO | None = None, width: int = 100) -> str:
    """Return a comparison for the terminal."""
    bold, plain = ("\x1b[1m", "\x1b[0m") if stream is not None and wants_colour(stream) else ("", "")
    header, rows = ["", *(v["name"] for v in report["variants"])], _rows(report)
    lines = []
    for columns in _blocks([header, *rows], width):
        widths = [max(len(row[c]) for row in [header, *rows]) for c in columns]
        for i, row in enumerate([header, *rows]):
            text = "  " + "  ".join(row[c].ljust(w) for c, w in zip(columns, widths, strict=True)).rstrip()
            lines.append(f"{bold}{text}{plain}" if i == 0 else text)
        lines.append("")
    for title, texts in _sections(report):
        lines.append(f"{bold}{title}{plain}")
        for text in texts:
            lines += textwrap.wrap(text, width, initial_indent="  ", subsequent_indent="    ", break_long_words=False)
        lines.append("")
    return "\n".join(lines).rstrip() + "\n"


def _blocks(table: list[list[str]], width: int) -> list[list[int]]:
    """Columns that fit side by side, the labels first in each."""
    label = max(len(row[0]) for row in table) + 2
    blocks, used = [[0]], label
    for c in range(1, len(table[0])):
        need = max(len(row[c]) for row in table) + 2
        if used + need > width and len(blocks[-1]) > 1:
            blocks.append([0])
            used = label
        blocks[-1].append(c)
        used += need
    return blocks


def caption(report: dict) -> str:
    """Return what a reader of the table must know."""
    intervals = interval_words({v["name"]: v.get("intervals", "equal_tailed") for v in report["variants"]})
    return (
        f"Medians with {intervals}; limits are one-sided, 95 %. Differences are from {report['reference']}; k counts the "
        f"marginalised zero point. Odds are evidence ratios, all models equally likely before the data; words after {report['scale']}."
    )


def _sections(report: dict) -> list[tuple[str, list[str]]]:
    sections = [("Notes to the table", [caption(report)])]
    if report["nested"]:
        sections.append(("Nested models", [nested_sentence(p) for p in report["nested"]]))
    changed = _width_sentences(report)
    if changed:
        sections.append(("Priors half and twice as wide", changed))
    if report["consistency"]:
        sections.append(("Consistency of the data", [c["sentence"] for c in report["consistency"]]))
    if report["average"]:
        sections.append(("Averaged over the models, weighted by evidence", _average_lines(report)))
    if report["warnings"]:
        sections.append(("Warnings", [f"! {text}" for text in report["warnings"]]))
    return sections


def nested_sentence(pair: dict) -> str:
    """Return the tests of one nested pair in words."""
    at = ", ".join("space is flat" if v == "flat" else f"{parameter(n).plain} = {v:g}".replace("-", "−") for n, v in pair["extra"].items())
    test = pair["likelihood_ratio"]
    text = f"{pair['simpler']} is {pair['larger']} where {at}: likelihood ratio Δχ² = {test['statistic']:.2f} for {test['dof']} more "
    text += f"parameter{'s' if test['dof'] > 1 else ''}, p = {plain_number(test['p_value'], 2)} ({test['sigma']:.1f}σ)"
    text += f" [{test['boundary']}]" if test["boundary"] else ""
    ratio, odds = pair["savage_dickey"], pair["delta_log_evidence"]
    if odds is None:
        return f"{text}."
    agrees = "agrees with" if pair["agrees"] else "DISAGREES WITH"
    value = f"{signed(ratio['log_ratio'])} ± {max(ratio['error'], 0.01):.1g}"
    return f"{text}; Savage–Dickey ln ratio {value} {agrees} Δ ln Z = {signed(odds[0])}."


def _width_sentences(report: dict) -> list[str]:
    """One line for each fit: how far Δ ln Z moves."""
    lines = []
    for name in dict.fromkeys(r["variant"] for r in report["prior_widths"]):
        rows = [r for r in report["prior_widths"] if r["variant"] == name]
        by_parameter: dict[str, list[str]] = {}
        for r in rows:
            by_parameter.setdefault(r["parameter"], []).append(
                f"{signed(r['delta_log_evidence'])}{' (verdict changes)' if r['changes'] else ''}"
            )
        said = "; ".join(f"{parameter(n).plain}: {' and '.join(values)}" for n, values in by_parameter.items())
        lines.append(f"Δ ln Z of {name}, prior halved and doubled: {said}.")
    return lines


def _average_lines(report: dict) -> list[str]:
    average = report["average"]
    weights = ", ".join(f"{name} {weight:.3f}" for name, weight in average["weights"].items())
    facts = {n: {**f, "mcse": None} for n, f in average["parameters"].items()}
    said = f"Weights: {weights}. Medians with {interval_words({'': 'equal_tailed'})}."
    return [said, *(f"{parameter(n).plain}{unit_text(n)}: {cell_text(f)}" for n, f in facts.items())]


def comparison_markdown(report: dict) -> str:
    """Return a comparison as a Markdown page."""
    header = ["", *(v["name"] for v in report["variants"])]
    rows = [header, ["---"] * len(header), *_rows(report)]
    lines = [f"# Comparison with {report['reference']}", ""]
    lines += ["| " + " | ".join(cell.replace("|", r"\|") for cell in row) + " |" for row in rows]
    for title, texts in _sections(report):
        lines += ["", f"## {title}", "", *(f"- {text}" for text in texts)]
    return "\n".join(lines) + "\n"


def comparison_csv(report: dict) -> str:
    """Return a comparison as CSV, one row a fit, every parameter, full precision."""
    names = list(dict.fromkeys(n for v in report["variants"] for n in v["parameters"]))
    facts = ("median", "low68", "high68", "low95", "high95", "mean", "sd", "best")
    own = ("name", "model", "n", "chi2", "dof", "p_value", "k", "aic", "aicc", "bic", "dic", "log_evidence", "log_evidence_error")
    differences = ("chi2", "aic", "aicc", "bic", "dic", "log_evidence", "log_evidence_error", "odds")
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([*own, *(f"delta_{d}" for d in differences), *(f"{n}_{f}" for n in names for f in facts), "reference", "scale"])
    for v in report["variants"]:
        cells = [v[key] for key in own] + [(v["delta"] or {}).get(d) for d in differences]
        cells += [v["parameters"].get(n, {}).get(f) for n in names for f in facts]
        writer.writerow([*("" if c is None else c for c in cells), report["reference"], report["scale"]])
    return out.getvalue()


def comparison_latex(report: dict) -> str:
    """Return a comparison as a LaTeX table with its caption as a comment; needs the booktabs package."""
    variants = report["variants"]
    rows = []
    for name in main_names(report):
        declared = parameter(name)
        unit = rf"\ [{declared.latex_unit}]" if declared.latex_unit else ""
        cells = [_value(v, name, latex_cell, r"${}$ (fixed)").replace("−", "-").replace(_NONE, "--") for v in variants]
        rows.append([f"${declared.latex}{unit}$", *cells])
    labels = {"χ²_min": r"$\chi^2_\mathrm{min}$", "dof": "dof", "p-value": "$p$", "k, parameters counted": "$k$", "Δχ²": r"$\Delta\chi^2$"}
    labels |= {label: rf"$\Delta$\,{label[1:]}" for _, label in _DIFFERENCES[1:]} | {"Δ ln Z": r"$\Delta\ln Z$"}
    for label, *cells in _rows(report)[2 + len(main_names(report)) :]:
        rows.append([labels.get(label, latex_text(label)), *(latex_text(c).replace(_NONE, "--") for c in cells)])
    lines = ["% " + line for line in textwrap.wrap(caption(report), 120)]
    lines += [rf"\begin{{tabular}}{{l{'c' * len(variants)}}}", r"\toprule"]
    lines += [" & ".join(["", *(latex_text(v["name"]) for v in variants)]) + r" \\", r"\midrule"]
    lines += [" & ".join(row) + r" \\" for row in rows]
    return "\n".join([*lines, r"\bottomrule", r"\end{tabular}"]) + "\n"
