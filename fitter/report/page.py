"""report.html: a run on one page that needs nothing else, the verdict first.

Figures are vectors inside the page, tables can be copied as LaTeX and CSV. It reads on a phone, prints, and follows the reader's dark mode.
"""

from __future__ import annotations

import base64
import html
import io
import re
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from string import Template
from typing import TYPE_CHECKING

from fitter.report.digits import figures_for, plain_number
from fitter.report.facts import parameter, unit_text
from fitter.report.prose import plain
from fitter.report.summary import summary_csv
from fitter.report.tables import parameter_table
from fitter.report.terminal import best_text, cell_text, data_line, information_lines, median_head, profile_text, told_apart
from fitter.sample.budget import SHARE

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["PAGE", "Picture", "fit_html", "page_text", "picture_of", "verdict"]

PAGE = "report.html"
_MISFIT = 1e-3
_FINE_RHAT = 1.01
_NAMES = {
    "corner": "Corner plot", "hubble_diagram": "Hubble diagram", "residuals": "Residuals", "history": "History of the expansion",
    "correlation": "Correlation matrix", "error_budget": "Error budget by redshift", "chains": "Chains",
}  # fmt: skip

Picture = tuple[str, str]
"""An SVG and its caption."""


def picture_of(figure: Figure, caption: str) -> Picture:
    """Return a matplotlib figure as SVG, letters as outlines, with its caption in plain text."""
    import matplotlib as mpl

    stream = io.StringIO()
    with mpl.rc_context({"svg.fonttype": "path", "svg.hashsalt": "mufitter", "path.simplify": True}):
        figure.savefig(stream, format="svg", metadata={"Date": None})
    svg = stream.getvalue()
    # A hundredth of a point is enough for a path; letters are scaled, their coordinates are not touched.
    svg = re.sub(r' d="[^"]*"', lambda path: re.sub(r"(\.\d{2})\d+", r"\1", path[0]), svg[svg.index("<svg") :])
    return svg, plain(caption).strip()


def verdict(summary: dict) -> tuple[str, str, str]:
    """Return (class, headline, reasons): may these numbers be used?

    Parameters
    ----------
    summary : dict
        The contents of summary.json.
    """
    sampling, check, fit = summary["sampling"], summary.get("cross_check") or {}, summary["best_fit"]
    agrees, p = check.get("agrees"), fit.get("p_value")
    crossed = "no second method was applied"
    if agrees is not None:
        crossed = "a second method finds the same posterior" if agrees else "a second method DISAGREES"
    state = "the chains have converged" if sampling.get("converged") else "the chains have NOT converged"
    quality = f"χ²/dof = {fit['chi2'] / fit['dof']:.3f}" if fit["dof"] > 0 else "there are no degrees of freedom to judge the fit by"
    reasons = f"{state}; {crossed}; {quality}" + (f" (p = {plain_number(p, 2)})." if p is not None else ".")
    reasons = reasons[0].upper() + reasons[1:]
    if not sampling.get("converged"):
        return "bad", "Not to be used yet", f"{reasons} {sampling.get('advice') or ''}".strip()
    if agrees is False:
        return "bad", "Not to be used: two methods disagree", reasons
    if p is not None and not _MISFIT < p < 1 - _MISFIT:
        cause = "the model or the errors do not describe the data" if p < 0.5 else "the errors are too large for these data"
        return "mind", f"Computed soundly, but {cause}", reasons
    if agrees is None:
        return "mind", "Converged, without a second opinion", reasons
    told, _ = told_apart(summary)
    if told:
        return "mind", f"Computed soundly, but {'a warning says' if len(told) == 1 else 'warnings say'} what to mind", reasons
    return "good", "Sound", reasons


def page_text(summary: dict, config: str, pictures: Mapping[str, Picture]) -> str:
    """Return the page.

    Parameters
    ----------
    summary : dict
        The contents of summary.json.
    config : str
        The config as run.
    pictures : mapping
        Name of a figure → its SVG and caption, in the order of the page.
    """
    made = summary.get("provenance") or {}
    version = (made.get("versions") or {}).get("mufitter") or ""
    sections = {
        "parameters": ("Parameters", _parameters(summary)),
        "figures": ("Figures", "".join(_figure(name, *picture) for name, picture in pictures.items())),
        "convergence": ("Convergence", _convergence(summary)),
        "cross-check": ("Cross-check", _cross_check(summary)),
        "errors": ("Where the errors come from", _errors(summary)),
        "fit": ("Goodness of fit and evidence", _fit(summary)),
        "config": ("Config", _copyable("config-text", "Copy the config", config, "The config as run, with every default")),
        "provenance": ("Provenance", _provenance(summary, made)),
    }
    shown = {key: value for key, value in sections.items() if value[1]}
    kind, headline, reasons = verdict(summary)
    text = Template(resources.files("fitter.report").joinpath("page_template.html").read_text(encoding="utf-8"))
    return text.substitute(
        title=_e(summary["title"] or summary["model"]),
        generator=_e(f"mufitter {version}"),
        data=_e(data_line(summary).strip()),
        verdict=f'<div class="verdict {kind}"><strong>{_e(headline)}.</strong> {_e(reasons)}</div>',
        warnings=_warnings(*told_apart(summary)) + _hidden(summary),
        links="".join(f'<li><a href="#{key}">{_e(name)}</a></li>' for key, (name, _) in shown.items()),
        sections="".join(
            f'<section id="{key}" aria-labelledby="{key}-h"><h2 id="{key}-h">{_e(name)}</h2>{body}</section>\n'
            for key, (name, body) in shown.items()
        ),
        footer=_e(f"Made by mufitter {version}, {made.get('finished', '')}. This page needs no network and no other file."),
    )


def fit_html(summary: dict) -> str:
    """Return what a notebook shows of a fit: verdict, parameters, warnings."""
    kind, headline, reasons = verdict(summary)
    colour = {"good": "#14692f", "mind": "#7a4b00", "bad": "#9b1c1c"}[kind]
    cells = [
        (
            f"{_symbol(name)}{_e(unit_text(name))}",
            _e(cell_text(facts)) if facts.get("median") is not None else "undefined",
            _e(facts["kind"]),
        )
        for name, facts in summary["parameters"].items()
    ]
    rows = "".join("<tr>" + "".join(f'<td style="text-align:left">{cell}</td>' for cell in row) + "</tr>" for row in cells)
    told, cautions = told_apart(summary)
    return (
        f"<div><strong>{_e(summary['title'] or summary['model'])}</strong>, {_e(data_line(summary).strip())}"
        f'<p><strong style="border-left:.3em solid {colour};padding-left:.5em">{_e(headline)}.</strong> {_e(reasons)}</p>'
        f"<table><thead><tr><th></th><th>{_e(median_head(summary))}</th><th></th></tr></thead><tbody>{rows}</tbody></table>"
        + "".join(_folded(name, texts) for name, texts in (("Warnings", told), ("Cautions", cautions)))
        + "</div>"
    )


def _e(text: object) -> str:
    return html.escape(str(text))


def _symbol(name: str) -> str:
    """A parameter's symbol with its indices set low."""
    text = re.sub(r"_(\w+)", r"<sub>\1</sub>", _e(parameter(name).plain))
    return re.sub(r"^(Ω|[A-Za-z])([mkΛ]|DE|\d)$", r"\1<sub>\2</sub>", text)


def _folded(name: str, texts: list[str]) -> str:
    if not texts:
        return ""
    return f"<details><summary>{name} ({len(texts)})</summary><ul>{''.join(f'<li>{_e(text)}</li>' for text in texts)}</ul></details>"


def _warnings(told: list[str], cautions: list[str]) -> str:
    """What this run calls for, and apart from it what every run of its kind must say."""
    label = "A warning" if len(told) == 1 else f"{len(told)} warnings, the gravest first"
    text = "<p>Nothing in this run calls for a warning.</p>"
    if told:
        text = f'<p><strong>{label}</strong></p><ul class="warnings">{"".join(f"<li>{_e(one)}</li>" for one in told)}</ul>'
    if cautions:
        text += f"<p><strong>To be said with every such fit</strong></p><ul>{''.join(f'<li>{_e(one)}</li>' for one in cautions)}</ul>"
    return text


def _hidden(summary: dict) -> str:
    if not summary.get("blinded"):
        return ""
    return '<p class="verdict mind">Central values are hidden until <code>mufitter unblind</code>; widths, χ² and diagnostics are true.</p>'


def _table(header: list[str], rows: list[list[str]], kind: str = "", fixed: int = 1) -> str:
    """A table of cells that are HTML already, the first ones never broken; it scrolls by itself where the screen is narrow."""
    head = "".join(f'<th scope="col">{cell}</th>' for cell in header)
    body = "".join(
        "<tr>" + "".join(f"<td{' class=n' if i < fixed else ''}>{cell}</td>" for i, cell in enumerate(row)) + "</tr>" for row in rows
    )
    return f'<div class="wide {kind}" tabindex="0"><table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>'


def _copyable(key: str, button: str, text: str, label: str) -> str:
    return (
        f'<div class="tools"><button type="button" data-copy="{key}">{_e(button)}</button></div>'
        f'<details><summary>{_e(label)}</summary><pre id="{key}" tabindex="0">{_e(text)}</pre></details>'
    )


def _parameters(summary: dict) -> str:
    rows = []
    for name, facts in summary["parameters"].items():
        undefined = facts.get("undefined_fraction")
        note = {"sampled": summary.get("priors", {}).get(name, ""), "marginalised": "marginalised analytically"}.get(
            facts["kind"], facts["kind"]
        )
        note += f"; undefined in {100 * undefined:.3g} % of draws" if undefined else ""
        value = cell_text(facts) if facts.get("median") is not None else "undefined"
        best = best_text(facts) if facts.get("best") is not None and facts.get("sd") else ""
        rows.append([f"{_symbol(name)}{_e(unit_text(name))}", _e(value), _e(best), _e(parameter(name).meaning), _e(note)])
    rows += [[_symbol(n), _e(f"{v:g}"), "", _e(parameter(n).meaning), "held fixed"] for n, v in (summary.get("fixed") or {}).items()]
    table = _table(["", median_head(summary), "best fit", "meaning", "prior or kind"], rows, fixed=3)
    latex = _copyable("latex", "Copy as LaTeX", parameter_table(summary, "booktabs"), "LaTeX table")
    return table + latex + _copyable("csv", "Copy as CSV", summary_csv(summary), "CSV, full precision")


def _figure(name: str, svg: str, caption: str) -> str:
    data = base64.b64encode(svg.encode()).decode()
    title = _NAMES.get(name, name.replace("_", " "))
    return (
        f'<figure><button type="button" aria-label="Enlarge: {_e(title)}"><img src="data:image/svg+xml;base64,{data}" alt="{_e(title)}. '
        f'{_e(caption)}"></button><figcaption><strong>{_e(title)}.</strong> {_e(caption)}</figcaption></figure>'
    )


def _convergence(summary: dict) -> str:
    s, known = summary["sampling"], {n: p for n, p in summary["parameters"].items() if p.get("ess") is not None}
    if not known or not s.get("replicas"):
        return ""
    least, worst = min(p["ess"] for p in known.values()), max(p["rhat"] or 0 for p in known.values())
    apart = "cannot be told apart" if worst < _FINE_RHAT else "differ from each other more than chance allows"
    words = (
        f"{s['replicas']} ensembles of {s['walkers']} walkers each, started apart and run independently, took {s['steps']:,} steps after "
        f"the first {s['burn_in']:,} were discarded. They {apart}: R̂, the ratio of the spread of all draws to that within an ensemble, is "
        f"at most {worst:.4f} (below {_FINE_RHAT} is wanted). Neighbouring draws repeat each other, so the chains are worth {least:,.0f} "
        f"independent samples or more ({s.get('target_ess', 0):,} were asked for); the Monte Carlo error of a mean is its standard "
        "deviation over the root of that number."
    )
    times = s.get("autocorrelation") or {}
    rows = []
    for n, p in known.items():
        rhat = f"{p['rhat']:.4f}" if p.get("rhat") else ""
        rows.append([_symbol(n), f"{p['ess']:,.0f}", rhat, f"{times[n]:.1f}" if times.get(n) else "", plain_number(p["mcse"], 2)])
    return f"<p>{_e(words)}</p>" + _table(["", "independent samples", "R̂", "τ (steps)", "error of the mean"], rows)


def _cross_check(summary: dict) -> str:
    check = summary.get("cross_check") or {}
    if check.get("agrees") is None:
        return "<p>No second method was applied to this posterior.</p>"
    found = (
        f"The posterior was computed a second time, without a chain, by {check.get('method') or 'an independent method'}. The largest "
        f"difference between the two cumulative distributions of a parameter is {plain_number(check.get('max_cdf_difference'), 2)}"
        + (f" (of {parameter(check['worst']).plain})" if check.get("worst") in summary["parameters"] else "")
        + f"; chance explains up to {plain_number(check.get('tolerance'), 2)}. "
    )
    return f"<p>{_e(found + ('The two agree.' if check['agrees'] else 'They disagree: do not use these numbers.'))}</p>"


def _errors(summary: dict) -> str:
    terms = summary["sample"].get("terms") or []
    if not terms:
        return ""
    rows = []
    for term in sorted(terms, key=lambda t: -(t.get("share") or 0.0)):
        share = term.get("share")
        if share is None:
            rows.append([_e(term["label"]), _e(term["kind"].replace("_", " ")), f"{term['median_sigma']:.4f}", ""])
            continue
        bar = f'<span class="bar" style="width:{max(2, round(100 * share)) / 16:.2f}rem" aria-hidden="true"></span>{100 * share:.0f} %'
        rows.append([_e(term["label"]), _e(term["kind"].replace("_", " ")), f"{term['median_sigma']:.4f}", bar])
    words = f"Median error of one supernova by source, in mag, and {SHARE}. Correlated sources weigh more in the parameters."
    return f"<p>{words}</p>" + _table(["source", "kind", "σ (mag)", "share"], rows)


def _fit(summary: dict) -> str:
    fit = summary["best_fit"]
    p = f", p-value {plain_number(fit['p_value'], 3)}" if fit.get("p_value") is not None else ""
    lines = [f"χ² = {fit['chi2']:.2f} for {fit['dof']:,} degrees of freedom{p}.", *information_lines(summary["information"])]
    return "".join(f"<p>{_e(line)}</p>" for line in lines) + _profile(summary)


def _profile(summary: dict) -> str:
    profile, errors = summary.get("profile") or {}, summary["best_fit"].get("errors") or {}
    if not profile:
        return ""
    rows = [
        [
            _symbol(n),
            _e(profile_text(facts, "delta1")),
            _e(profile_text(facts, "delta4")),
            _e(figures_for(errors[n], width=errors[n]).plain()) if errors.get(n) else "",
        ]
        for n, facts in profile.items()
    ]
    words = (
        "Without the prior's density: the value of highest likelihood, and how far the parameter can go while all others adapt until "
        "χ² has risen by 1 or 4 (68.3 % and 95.4 % for a Gaussian likelihood). Beside it the error from the curvature at the best fit."
    )
    return f"<p>{words}</p>" + _table(["", "profile, Δχ² = 1", "profile, Δχ² = 4", "curvature"], rows)


def _provenance(summary: dict, made: dict) -> str:
    sample = summary["sample"]
    rows = [[_e(name), _e(made[key])] for key, name in (("finished", "finished"), ("command", "command"), ("seed", "seed")) if key in made]
    rows += [[_e(name), _e(made[key])] for key, name in (("platform", "platform"), ("python", "Python")) if key in made]
    rows.append(["packages", _e(", ".join(f"{k} {v}" for k, v in (made.get("versions") or {}).items() if v))])
    rows += [["SHA-256 of the data as fitted", _e(sample["sha256"])]]
    rows += [["SHA-256 of the settings", _e(made["config_sha256"])]] if "config_sha256" in made else []
    rows += [[f"SHA-256 of {_e(Path(path).name)}", _e(sha)] for path, sha in (made.get("inputs") or {}).items()]
    return _table(["", ""], rows, "hash")
