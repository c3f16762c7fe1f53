"""The parameter table for a paper: LaTeX, Markdown, CSV."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Sequence

from fitter.inference.intervals import interval_words
from fitter.report.digits import figures_for, plain_number
from fitter.report.facts import parameter, unit_text
from fitter.report.prose import CHI2, ascii_formula, latex, latex_text, listed, math, model_text, plain, redshift_range, symbol
from fitter.report.terminal import best_text, cell_text, median_head

__all__ = ["TABLE_FORMATS", "caption", "caption_text", "fit_table", "full_markdown", "latex_float", "latex_text", "parameter_table"]

_RULES = {"booktabs": (r"\toprule", r"\midrule", r"\bottomrule"), "latex": (r"\hline", r"\hline", r"\hline")}
TABLE_FORMATS = ("booktabs", "latex", "markdown", "csv")


def parameter_table(summaries: dict | Sequence[dict], fmt: str = "booktabs", names: Sequence[str] | None = None) -> str:
    """Return the table of one fit's parameters, or of several fits side by side.

    Parameters
    ----------
    summaries : dict or sequence of dict
        As :func:`fitter.report.summary.summarise` makes them; the title of each is its name in the table.
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
    # What one fit derives may be fitted in another: all that is fitted anywhere comes first.
    fitted = {name for s in summaries for name, facts in s["parameters"].items() if facts["kind"] != "derived"}
    return list(names) if names is not None else sorted(known, key=lambda name: name not in fitted)


def caption(summary: dict) -> str:
    """Return the caption that a table or figure of this fit must carry, in plain text: intervals, priors, data."""
    return plain(caption_text([summary]))


def caption_text(summaries: Sequence[dict], labels: Sequence[str] | None = None) -> str:
    """Return the caption of a table of one fit or several, with marks (`fitter.report.prose`) for formulas.

    Parameters
    ----------
    summaries : sequence of dict
    labels : sequence of str, optional
        What the fits are called in the table, where there are several.
    """
    kinds = {label: s.get("intervals", "equal_tailed") for label, s in zip(_labels(summaries, labels), summaries, strict=True)}
    text = f"Posterior medians with {interval_words(kinds)}"
    if any(facts.get("limit") for s in summaries for facts in s["parameters"].values()):
        text += "; limits are one-sided, 95 %"
    if len(summaries) == 1:
        return f"{text}. Model {_fit_text(summaries[0])}{_undefined(summaries[0])}"
    names = _labels(summaries, labels)
    # A fit that goes by the name of its model need not be told which one it is.
    each = [f"{name}: {_fit_text(s).removeprefix(name + ', ')}{_undefined(s)}" for name, s in zip(names, summaries, strict=True)]
    return text + ". " + " ".join(f"{one[:1].upper()}{one[1:]}" for one in each)


def _labels(summaries: Sequence[dict], labels: Sequence[str] | None) -> list[str]:
    return list(labels) if labels else [s["title"] or s["model"] for s in summaries]


def _fit_text(summary: dict) -> str:
    """Model, data and priors of a fit."""
    sample = summary["sample"]
    low, high = (f"{sample[k]:.3g}" for k in ("redshift_min", "redshift_max"))
    text = f"{model_text(summary['model'])}, {sample['n']:,} supernovae at {redshift_range(low, high)}"
    text += f", {sample['n_calibrators']} of them calibrators" if sample["n_calibrators"] else ""
    text += f", {sample['distance_scale']} distance scale"
    text += ", radiation included" if summary["radiation"] else ", no radiation"
    priors = "; ".join(f"{symbol(name)} {said}" for name, said in summary.get("priors", {}).items())
    held = "; ".join(f"{symbol(name)} = {value:g}" for name, value in (summary.get("fixed") or {}).items())
    return text + (f". Priors: {priors}" if priors else "") + (f". Held: {held}." if held else ".")


def _undefined(summary: dict) -> str:
    """Which parameters do not exist in a part of the posterior."""
    shares = {n: facts.get("undefined_fraction") for n, facts in summary["parameters"].items()}
    said = [f"{symbol(n)} in {100 * share:.2g} %" for n, share in shares.items() if share]
    return f" Undefined, and left out of the values, are {listed(said)} of the posterior." if said else ""


def full_markdown(summary: dict) -> str:
    """Return a Markdown table of one fit with moments and both intervals, for the summary of a run."""
    rows = [["parameter", median_head(summary), "95 %", "mean", "sd", "best fit", "kind"]]
    for name, facts in summary["parameters"].items():
        if facts["median"] is None:
            rows.append([f"{parameter(name).plain}{unit_text(name)}", *["—"] * 5, facts["kind"]])
            continue
        low, high, mean, sd = (figures_for(facts[k], width=facts["sd"]).plain() for k in ("low95", "high95", "mean", "sd"))
        cells = [cell_text(facts), f"{low} to {high}", mean, sd, best_text(facts), facts["kind"]]
        rows.append([f"{parameter(name).plain}{unit_text(name)}", *cells])
    return _ruled(rows)


def _markdown(summaries: list[dict], names: list[str]) -> str:
    if len(summaries) == 1:
        rows = [["parameter", median_head(summaries[0]), "best fit", "kind"]]
        facts = summaries[0]["parameters"]
        rows += [[f"{parameter(n).plain}{unit_text(n)}", cell_text(facts[n]), best_text(facts[n]), facts[n]["kind"]] for n in names]
    else:
        rows = [["parameter", *(plain(s["title"] or s["model"]) for s in summaries)]]
        rows += [[f"{parameter(n).plain}{unit_text(n)}", *(_cell(s, n, cell_text) for s in summaries)] for n in names]
    return _ruled(rows)


def _ruled(rows: list[list[str]]) -> str:
    """Return rows as a Markdown table, the first of them its head."""
    rows = [rows[0], ["---"] * len(rows[0]), *rows[1:]]
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
            writer.writerow([plain(summary["title"] or summary["model"]), name, facts["kind"], parameter(name).unit, *values, said])
    return out.getvalue()


def _cell(summary: dict, name: str, form: Callable[[dict], str]) -> str:
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
    return f"${ascii_formula(declared.latex + unit)}$"


def _latex(summaries: list[dict], names: list[str], rules: tuple[str, str, str]) -> str:
    top, middle, bottom = rules
    single = len(summaries) == 1
    heads = ["Median", "Best fit"] if single else [latex(s["title"] or s["model"]) for s in summaries]
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


_NUMBERS = (
    ("N", lambda s: f"{s['sample']['n']}"),
    (CHI2, lambda s: f"{s['best_fit']['chi2']:.2f}"),
    ("d.o.f.", lambda s: f"{s['best_fit']['dof']}"),
    (math("p", "p"), lambda s: _number(s["best_fit"]["p_value"], 2)),
    (math("k", "k"), lambda s: f"{s['information']['k']}"),
    ("AIC", lambda s: _decimals(s["information"]["aic"])),
    ("AICc", lambda s: _decimals(s["information"]["aicc"])),
    ("BIC", lambda s: _decimals(s["information"]["bic"])),
    ("DIC", lambda s: _decimals(s["information"]["dic"])),
    (math(r"\ln Z", "ln Z"), lambda s: _log_evidence(s["information"])),
)
FIT_CAPTION = (
    f"Quality of the fits. {math('N', 'N')}: data; {math('k', 'k')}: parameters counted, with an offset marginalised under a flat prior; "
    f"{CHI2} where the posterior density is highest, {math('p', 'p')} the probability of a larger one by chance; "
    f"{math('Z', 'Z')}: evidence, under the priors given with the parameters."
)


def _number(x: float | None, significant: int) -> str:
    return "—" if x is None else plain_number(x, significant)


def _decimals(x: float | None) -> str:
    return "—" if x is None else f"{x:.2f}"


def _log_evidence(information: dict) -> str:
    value, error = information.get("log_evidence"), information.get("log_evidence_error")
    if value is None:
        return "—"
    # More than two decimals of ln Z say nothing: a tenth is an odds ratio of 1.1.
    return f"{value:.2f}" if not error or error < 0.05 else f"{value:.1f}"


def fit_table(summaries: Sequence[dict], fmt: str = "booktabs") -> str:
    """Return the table of goodness of fit, information criteria and evidence: a row for each fit.

    Parameters
    ----------
    summaries : sequence of dict
        The title of each is its name in the table.
    fmt : {"booktabs", "latex", "markdown", "csv"}
    """
    heads = ["Fit", *(head for head, _ in _NUMBERS)]
    rows = [[s["title"] or model_text(s["model"]), *(form(s) for _, form in _NUMBERS)] for s in summaries]
    if fmt == "csv":
        return "".join(",".join(_quoted("" if c == "—" else plain(c)) for c in row) + "\n" for row in [heads, *rows])
    if fmt == "markdown":
        lines = ["| " + " | ".join(plain(c).replace("|", r"\|") for c in row) + " |" for row in [heads, *rows]]
        return "\n".join([lines[0], "| " + " | ".join(["---"] * len(heads)) + " |", *lines[1:]])
    top, middle, bottom = _RULES[fmt]
    lines = [" & ".join("--" if c == "—" else latex(c) for c in row) + r" \\" for row in [heads, *rows]]
    head, *body = lines
    return "\n".join([rf"\begin{{tabular}}{{l{'r' * len(_NUMBERS)}}}", top, head, middle, *body, bottom, r"\end{tabular}"]) + "\n"


def _quoted(cell: str) -> str:
    return '"' + cell.replace('"', '""') + '"' if any(c in cell for c in ',"\n') else cell


def latex_float(tabular: str, text: str, label: str, *, wide: bool = False) -> str:
    """Return a table environment with a caption, above the tabular as journals want it, and a label.

    Parameters
    ----------
    tabular : str
    text : str
        The caption, with marks.
    label : str
        For ``\\ref``, after ``tab:``.
    wide : bool
        Over both columns of a page that has two.
    """
    name = "table*" if wide else "table"
    lines = [
        rf"\begin{{{name}}}",
        r"\centering",
        rf"\caption{{{latex(text)}}}",
        rf"\label{{tab:{label}}}",
        r"\smallskip",
        r"\small\setlength{\tabcolsep}{4pt}",  # powers of ten and units in one column of a page
        r"\renewcommand{\arraystretch}{1.25}",  # room for errors above and below the line
        tabular.rstrip(),
        rf"\end{{{name}}}",
    ]
    return "\n".join(lines) + "\n"
