"""The parameter table for a paper: LaTeX, Markdown, CSV."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence

from fitter.report.digits import figures_for
from fitter.report.facts import parameter, unit_text
from fitter.report.terminal import best_text, cell_text

__all__ = ["TABLE_FORMATS", "caption", "parameter_table"]

_RULES = {"booktabs": (r"\toprule", r"\midrule", r"\bottomrule"), "latex": (r"\hline", r"\hline", r"\hline")}
TABLE_FORMATS = ("booktabs", "latex", "markdown", "csv")


def parameter_table(summaries: dict | Sequence[dict], fmt: str = "booktabs", names: Sequence[str] | None = None) -> str:
    """Return the table of one fit's parameters, or of several fits side by side.

    Parameters
    ----------
    summaries : dict or sequence of dict
        As :func:`fitter.report.summary.summarise` makes them.
    fmt : {"booktabs", "latex", "markdown", "csv"}
        ``latex`` needs no package; ``booktabs`` needs the one of that name.
    names : sequence of str, optional
        Which parameters, in which order; all of them by default.

    Raises
    ------
    fitter.errors.InputError
        For an unknown format or parameter.
    """
    summaries = [summaries] if isinstance(summaries, dict) else list(summaries)
    if fmt not in TABLE_FORMATS:
        from fitter.errors import InputError

        raise InputError("unknown table format", value=fmt, cure=f"Use one of {', '.join(TABLE_FORMATS)}.")
    names = _names(summaries, names)
    if fmt == "csv":
        return _csv(summaries, names)
    if fmt == "markdown":
        return _markdown(summaries, names)
    return _latex(summaries, names, _RULES[fmt])


def _names(summaries: list[dict], names: Sequence[str] | None) -> list[str]:
    known = list(dict.fromkeys(name for s in summaries for name in s["parameters"]))
    unknown = [name for name in names or () if name not in known]
    if unknown:
        from fitter.errors import InputError

        raise InputError("no such parameter in these fits", value=unknown[0], cure=f"Known: {', '.join(known)}.")
    return list(names) if names is not None else known


def caption(summary: dict) -> str:
    """Return the caption that a table or figure of this fit must carry: intervals, priors, data."""
    sample = summary["sample"]
    priors = "; ".join(f"{parameter(name).plain} {text}" for name, text in summary.get("priors", {}).items())
    text = (
        f"Posterior medians with equal-tailed 68.3 % intervals; limits are one-sided, 95 %. Model {summary['model']}, "
        f"{sample['n']} supernovae at {sample['redshift_min']:.3g} ≤ z ≤ {sample['redshift_max']:.3g}, "
        f"{sample['distance_scale']} distance scale"
    )
    text += f", {sample['n_calibrators']} of them calibrators" if sample["n_calibrators"] else ""
    text += ", radiation included" if summary["radiation"] else ", no radiation"
    return f"{text}. Priors: {priors}." if priors else f"{text}."


def _markdown(summaries: list[dict], names: list[str]) -> str:
    if len(summaries) == 1:
        rows = [["parameter", "median, 68 %", "best fit", "kind"]]
        facts = summaries[0]["parameters"]
        rows += [[f"{parameter(n).plain}{unit_text(n)}", cell_text(facts[n]), best_text(facts[n]), facts[n]["kind"]] for n in names]
    else:
        rows = [["parameter", *(s["title"] or s["model"] for s in summaries)]]
        rows += [[f"{parameter(n).plain}{unit_text(n)}", *(_cell(s, n, cell_text) for s in summaries)] for n in names]
    rows.insert(1, ["---"] * len(rows[0]))
    return "\n".join("| " + " | ".join(cell.replace("|", r"\|") for cell in row) + " |" for row in rows)


def _csv(summaries: list[dict], names: list[str]) -> str:
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    columns = ("median", "low68", "high68", "low95", "high95", "mean", "sd", "best")
    writer.writerow(["fit", "name", "kind", "unit", *columns, "limit"])
    for summary in summaries:
        for name in names:
            facts = summary["parameters"].get(name)
            if facts is None:
                continue
            values = ["" if facts[c] is None else repr(facts[c]) for c in columns]
            limit = facts.get("limit")
            said = "" if not limit else f"{'<' if limit['side'] == 'upper' else '>'} {limit['value']!r}"
            writer.writerow([summary["title"] or summary["model"], name, facts["kind"], parameter(name).unit, *values, said])
    return out.getvalue()


def _cell(summary: dict, name: str, form) -> str:
    facts = summary["parameters"].get(name)
    return "—" if facts is None else form(facts)


def latex_cell(facts: dict) -> str:
    """Return a parameter's value with errors, or its limit, for a LaTeX table."""
    limit = facts.get("limit")
    if limit:
        sign = "<" if limit["side"] == "upper" else ">"
        return f"${sign} {figures_for(limit['value'], width=facts['sd'], mcse=facts['mcse']).latex()}$"
    if facts["median"] is None:
        return "--"
    return f"${figures_for(facts['median'], facts['low68'], facts['high68'], mcse=facts['mcse']).latex()}$"


def _latex_symbol(name: str) -> str:
    declared = parameter(name)
    unit = rf"\ [{declared.latex_unit}]" if declared.latex_unit else ""
    return f"${declared.latex}{unit}$"


def latex_text(text: str) -> str:
    """Escape plain text for LaTeX."""
    special = {"\\": r"\textbackslash{}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}"}
    special |= {c: "\\" + c for c in "&%$#_{}"}
    special |= {"≤": r"$\le$", "≥": r"$\ge$", "χ": r"$\chi$", "σ": r"$\sigma$", "Λ": r"$\Lambda$", "Ω": r"$\Omega$", "−": "$-$"}
    special |= {"±": r"$\pm$", "×": r"$\times$", "²": r"$^2$", "ρ": r"$\rho$", "…": r"\dots{}", "⁻": r"$^-$", "³": r"$^3$", "→": r"$\to$"}
    return "".join(special.get(c, c) for c in text)


def _latex(summaries: list[dict], names: list[str], rules: tuple[str, str, str]) -> str:
    top, middle, bottom = rules
    single = len(summaries) == 1
    heads = ["Median", "Best fit"] if single else [latex_text(s["title"] or s["model"]) for s in summaries]
    lines = [rf"\begin{{tabular}}{{l{'c' * len(heads)}}}", top, " & ".join(["Parameter", *heads]) + r" \\", middle]
    for name in names:
        if single:
            facts = summaries[0]["parameters"][name]
            best = "--" if facts["best"] is None else f"${figures_for(facts['best'], width=facts['sd']).latex()}$"
            cells = [latex_cell(facts), best]
        else:
            cells = [_cell(s, name, latex_cell).replace("—", "--") for s in summaries]
        lines.append(" & ".join([_latex_symbol(name), *cells]) + r" \\")
    return "\n".join([*lines, bottom, r"\end{tabular}"]) + "\n"
