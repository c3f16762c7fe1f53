"""What a stress study found, as text for the terminal, Markdown and CSV."""

from __future__ import annotations

import csv
import io
import textwrap
from collections.abc import Iterable

from fitter.report.digits import figures_for, plain_number
from fitter.report.facts import parameter
from fitter.study.scenarios import KINDS
from fitter.study.stress import FLAG

__all__ = ["stress_csv", "stress_markdown", "stress_text"]

_COLUMNS = ("median", "low68", "high68", "low95", "high95", "sigma", "shift", "shift_in_sigma", "expected", "significance", "flagged")
_LISTED = 3
_LEGEND = (
    "shift/σ: of the median, over the error of this fit. shift/expected: over the scatter that less information explains, "
    f"√|σ² − σ²(this fit)|; judged by this, ← beyond {FLAG:g}. Empty: nothing to expect, the data being the same or the error the prior's."
)
_LEAST_SHARE = 0.001  # of the variance: below it a term of the error budget is not printed


def stress_text(result: dict) -> str:
    """Return the study for a terminal: verdict first, then one table a parameter."""
    lines = [f"Stress: {result['model']}, {result['n']} supernovae", "", *_paragraphs(result["verdict"]), "", *_paragraphs([_LEGEND])]
    for name in result["baseline"]["parameters"]:
        rows = [_cells(row, name) for row in result["variants"]]
        head = ("", "n", _value_head(result, name), "shift/σ", "shift/expected", "")
        table = [head, ("this fit", str(result["n"]), _value(result["baseline"]["parameters"][name]), "", "", ""), *rows]
        widths = [max(len(row[i]) for row in table) for i in range(len(head))]
        lines += ["", *("  ".join(_padded(cell, width, i) for i, (cell, width) in enumerate(zip(row, widths, strict=True))).rstrip()
                        for row in table)]  # fmt: skip
    return "\n".join([*lines, *_budget_lines(result), *_influence_lines(result), *_goodness_lines(result["goodness"])]) + "\n"


def stress_markdown(result: dict) -> str:
    """Return the study as a Markdown page."""
    lines = [f"# Stress: {result.get('title') or result['model']}", "", *(f"- {text}" for text in result["verdict"]), "", _LEGEND]
    for name in result["baseline"]["parameters"]:
        head = ("change", "n", _value_head(result, name), "shift/σ", "shift/expected", "flag")
        lines += ["", f"## {parameter(name).plain}", "", "| " + " | ".join(head) + " |", "|" + " --- |" * len(head)]
        lines.append(f"| this fit | {result['n']} | {_value(result['baseline']['parameters'][name])} | | | |")
        for kind, heading in KINDS.items():
            rows = [row for row in result["variants"] if row["kind"] == kind]
            lines += [f"| **{heading}** | | | | | |"] if rows else []
            lines += ["| " + " | ".join(cell.strip() for cell in _cells(row, name)) + " |" for row in rows]
    for _, heading, *found in filter(None, (_budget_lines(result), _influence_lines(result), _goodness_lines(result["goodness"]))):
        lines += ["", f"## {heading}", "", *(f"- {line.strip()}" for line in found)]
    return "\n".join(lines) + "\n"


def stress_csv(result: dict) -> str:
    """Return every number of the tables: one row a change and parameter."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["key", "kind", "label", "n", "chi2", "parameter", *_COLUMNS, "problem"])
    for row in result["variants"]:
        for name, facts in row["parameters"].items() or [("", {})]:
            known = [row["key"], row["kind"], row["label"], row["n"], row["chi2"], name, *(facts.get(c) for c in _COLUMNS), row["problem"]]
            writer.writerow(["" if cell is None else cell for cell in known])
    return out.getvalue()


def _paragraphs(texts: Iterable[str]) -> list[str]:
    return [line for text in texts for line in textwrap.wrap(text, 98, initial_indent="  ", subsequent_indent="  ")]


def _padded(cell: str, width: int, column: int) -> str:
    return cell.ljust(width) if column in (0, 2) else cell.rjust(width)


def _value_head(result: dict, name: str) -> str:
    p = parameter(name)
    unit = f" ({p.unit})" if p.unit else ""
    return f"{p.plain} − its value{unit}" if name in result["blinded"] else f"{p.plain}{unit}"


def _value(facts: dict) -> str:
    return figures_for(facts["median"], facts["low68"], facts["high68"]).plain()


def _cells(row: dict, name: str) -> tuple[str, ...]:
    facts = row["parameters"].get(name)
    if facts is None:
        return (row["label"], "" if row["n"] is None else str(row["n"]), "not possible" if row["problem"] else "", "", "", "")
    significance = "" if facts["significance"] is None else _signed(facts["significance"])
    return (row["label"], str(row["n"]), _value(facts), _signed(facts["shift_in_sigma"]), significance, "←" if facts["flagged"] else "")


def _signed(x: float, decimals: int = 2) -> str:
    return f"{round(x, decimals) + 0.0:+.{decimals}f}".replace("-", "−")  # adding zero turns −0.0 into 0.0


def _budget_lines(result: dict) -> list[str]:
    """The systematic error budget, the largest share first."""
    rows = [
        (label, name, facts)
        for label, shares in result["error_budget"].items()
        for name, facts in shares.items()
        if abs(facts["share"]) > _LEAST_SHARE
    ]
    rows.sort(key=lambda row: -abs(row[2]["share"]))
    lines = []
    for label, name, facts in rows:
        size = plain_number(abs(facts["sigma"]), 2)
        moves = figures_for(facts["shift"], width=abs(facts["sigma"])).plain()
        way = "less" if facts["share"] > 0 else "more"
        lines.append(
            f"  {parameter(name).plain}, {label}: σ² {100 * abs(facts['share']):.1f} % {way}, √|Δσ²| = {size}, median moves by {moves}"
        )
    return ["", "Error budget: the fit without each term", *lines] if lines else []


def _influence_lines(result: dict) -> list[str]:
    """The supernovae that move each parameter most."""
    if not result["influence"]:
        return []
    lines = []
    for name, rows in result["influence"]["largest"].items():
        listed = ", ".join(f"{_called(row)} at z = {row['redshift']:.3g} ({_signed(row['shift'])}σ)" for row in rows[:_LISTED])
        lines.append(f"  {parameter(name).plain}: {listed}")
    return ["", "Single supernovae left out, the largest shifts", *lines]


def _called(who: dict) -> str:
    return who["name"] or f"row {who['row']}"


def _goodness_lines(facts: dict) -> list[str]:
    p = facts["p_two_sided"]
    chi2 = f"  χ² = {facts['chi2']:.1f} for {facts['dof']} degrees of freedom" + (f", two-sided p = {p:.3g}" if p is not None else "")
    shape = (
        f"  whitened residuals: Anderson–Darling p = {facts['anderson_darling']['p_value']:.2g}, excess kurtosis "
        f"{_signed(facts['kurtosis']['value'])} ± {facts['kurtosis']['error']:.2f}, skewness "
        f"{_signed(facts['skewness']['value'])} ± {facts['skewness']['error']:.2f}"
    )
    trends = [
        f"  {t['label']}: {_signed(t['amplitude'], 3)} ± {t['error']:.3f} mag ({_signed(t['significance'])}σ)"
        + (" ←" if abs(t["significance"]) > FLAG else "")
        for t in facts["trends"]
    ]
    outliers = [f"  outliers beyond {facts['outlier_limit']:.1f}σ: {len(facts['outliers'])}"]
    return ["", "Residuals of the best fit", chi2, shape, *trends, *outliers]
