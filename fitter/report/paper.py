"""Everything that goes into a manuscript: tables with captions, methods, figures, and a skeleton that includes them."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from fitter.errors import InputError
from fitter.report.citations import bibliography
from fitter.report.figures.draw import Drawable, Drawing, drawings, overlays
from fitter.report.figures.settings import FigureSettings
from fitter.report.figures.style import save_figure, styled
from fitter.report.methods import methods, methods_files
from fitter.report.prose import cited, latex, latex_text, listed, model_text, plain
from fitter.report.run_folder import write_atomic
from fitter.report.tables import FIT_CAPTION, caption_text, fit_table, latex_float, parameter_table

__all__ = ["PaperRun", "TABLE_FILES", "drawable_of", "paper_files", "run_labels", "table_files", "write_paper"]

MARKER = ".mufitter-paper.json"
_SUFFIX = {"booktabs": ".tex", "latex": "_plain.tex", "csv": ".csv", "markdown": ".md"}
TABLE_FILES = {fmt: (f"parameters{end}", f"fits{end}") for fmt, end in _SUFFIX.items()}


@dataclass(frozen=True)
class PaperRun:
    """A run as a manuscript needs it.

    Parameters
    ----------
    folder : Path
    summary, settings : dict
        The contents of summary.json and of config.yaml.
    drawable : Drawable, optional
        Tables and methods do without.
    """

    folder: Path
    summary: dict
    settings: dict = field(default_factory=dict)
    drawable: Drawable | None = None


def run_labels(runs: Sequence[PaperRun]) -> list[str]:
    """Return what runs are called beside each other, with marks: the model, or the title, or the folder, whichever tells them apart."""
    choices = (
        [model_text(run.summary["model"]) for run in runs],
        [run.summary["title"] for run in runs],
        [run.folder.name for run in runs],
        [f"{run.folder.parent.name}/{run.folder.name}" for run in runs],
    )
    for labels in choices:
        if len(set(labels)) == len(labels) and all(labels):
            return labels
    return [f"{i + 1}: {label}" for i, label in enumerate(choices[2])]


def table_files(runs: Sequence[PaperRun], formats: Sequence[str] = tuple(_SUFFIX), names: Sequence[str] | None = None) -> dict[str, str]:
    """Return the contents of the tables of parameters and of fit quality by file name.

    Parameters
    ----------
    runs : sequence of PaperRun
    formats : sequence of {"booktabs", "latex", "csv", "markdown"}
        ``latex`` is a plain tabular that needs no package.
    names : sequence of str, optional
        Parameters, in this order.
    """
    unknown = [fmt for fmt in formats if fmt not in _SUFFIX]
    if unknown:
        raise InputError("unknown table format", value=unknown[0], cure=f"Use any of {', '.join(_SUFFIX)}.")
    labels = run_labels(runs)
    named = [{**run.summary, "title": label} for run, label in zip(runs, labels, strict=True)]
    text = caption_text(named, labels)
    files: dict[str, str] = {}
    for fmt in formats:
        parameters, fits = parameter_table(named, fmt, names), fit_table(named, fmt)
        if fmt in ("booktabs", "latex"):
            parameters = latex_float(parameters, text, "parameters", wide=len(runs) > 1)
            fits = latex_float(fits, FIT_CAPTION, "fits", wide=True)
        elif fmt == "markdown":
            parameters, fits = f"{parameters.rstrip()}\n\n{plain(text)}\n", f"{fits.rstrip()}\n\n{plain(FIT_CAPTION)}\n"
        files |= dict(zip(TABLE_FILES[fmt], (parameters, fits), strict=True))
    return files


# --------------------------------------------------------------------------------- manuscript


def write_paper(runs: Sequence[PaperRun], folder: Path, how: FigureSettings | None = None, *, style: Path | None = None) -> list[Path]:
    """Write figures, tables, methods, references and a manuscript that includes them into a folder.

    What an earlier call wrote is written again; a manuscript that was edited since is left alone.

    Parameters
    ----------
    runs : sequence of PaperRun
        The first is the main one: all its figures are shown, and its methods.
    folder : Path
    how : FigureSettings, optional
    style : Path, optional

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    InputError
        A file stands in the way that no earlier call wrote; nothing is written then.
    """
    folder = Path(folder)
    how = (how or FigureSettings()).model_copy(update={"formats": ["pdf"]})
    with styled(style):
        drawn = [(one, one.make(how.width)) for one in _figures(runs, how)]
        texts = paper_files(runs, [(one.name, one.caption, figure.get_figwidth()) for one, figure in drawn])
        figures = [f"figures/{one.name}.{kind}" for one, _ in drawn for kind in ("pdf", "txt")]
        before = _written_before(folder)
        strange = [name for name in (*texts, *figures) if (folder / name).exists() and name not in before]
        if strange:
            cure = "Choose another folder with --to"
            raise InputError("this file is in the way and not mufitter's", file=folder / strange[0], cure=cure)
        if (folder / "manuscript.tex").exists() and _sha((folder / "manuscript.tex").read_bytes()) != before["manuscript.tex"]:
            texts.pop("manuscript.tex")  # edited since
        for name, text in texts.items():
            (folder / name).parent.mkdir(parents=True, exist_ok=True)
            write_atomic(folder / name, text)
        for one, figure in drawn:
            save_figure(figure, folder / "figures" / one.name, one.caption, formats=how.formats)
    known = {**before, **{name: _sha(text.encode()) for name, text in texts.items()}, **dict.fromkeys(figures)}
    write_atomic(folder / MARKER, json.dumps({"format": "mufitter paper 1", "files": known}, indent=1))
    return [folder / name for name in (*texts, *figures)]


def _sha(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def _written_before(folder: Path) -> dict[str, str]:
    """File → SHA-256 of what an earlier call wrote here."""
    try:
        return dict(json.loads((folder / MARKER).read_text(encoding="utf-8"))["files"])
    except (OSError, ValueError, KeyError, TypeError):
        return {}


def drawable_of(run: PaperRun) -> Drawable:
    """Return what the figures of a run need."""
    if run.drawable is None:
        raise ValueError(f"the run {run.folder} was read without what its figures show")
    return run.drawable


def _figures(runs: Sequence[PaperRun], how: FigureSettings) -> list[Drawing]:
    """All figures of the main run, the planes that only others have, and the overlays that several share."""
    found = {one.name: one for one in drawings(drawable_of(runs[0]), how=how)}
    for run in runs[1:]:
        for one in drawings(drawable_of(run), ["planes"], how, strict=False):
            found.setdefault(one.name, one)
    if len(runs) > 1:
        labels = [plain(label) for label in run_labels(runs)]
        shared = {label: drawable_of(run) for label, run in zip(labels, runs, strict=True)}
        for one in overlays(shared, how=how):
            if one.name == "history":
                found["history_runs"] = type(one)("history_runs", one.make, one.caption)
    return list(found.values())


def paper_files(runs: Sequence[PaperRun], figures: Sequence[tuple[str, str, float]]) -> dict[str, str]:
    """Return the texts of a manuscript's folder by file name.

    Parameters
    ----------
    runs : sequence of PaperRun
    figures : sequence of (str, str, float)
        Name, caption with marks, and width in inches.
    """
    files = {f"tables/{name}": text for name, text in table_files(runs).items()}
    main = methods_files(runs[0].summary, runs[0].settings)
    paragraphs = [p for run in runs for p in methods(run.summary, run.settings)]
    captions = [caption for _, caption, _ in figures]
    keys = cited("\n".join([*paragraphs, *captions]))
    files |= {"methods.md": main["methods.md"], "methods.tex": main["methods.tex"]}
    files["references.bib"] = bibliography([*keys, "Hunter2007", "Foreman-Mackey2016"])
    files["manuscript.tex"] = _manuscript(runs, figures)
    return files


_COLUMN = 3.55  # inches that fit one column of the skeleton
_SKELETON = r"""%% A skeleton that includes every figure and table; set it with pdflatex, bibtex, pdflatex, pdflatex.
\documentclass[10pt,twocolumn]{article}
\usepackage[margin=0.62in,columnsep=0.22in]{geometry}
\usepackage{amsmath,booktabs,graphicx}
\setcounter{totalnumber}{20}
\setcounter{topnumber}{20}
\setcounter{dbltopnumber}{20}
\renewcommand{\textfraction}{0.05}
\renewcommand{\topfraction}{0.95}
\renewcommand{\dbltopfraction}{0.95}
\title{%(title)s}
\author{Author}
\begin{document}
\maketitle

\section{Method}
\input{methods.tex}

\section{Results}
Parameters are given in Table~\ref{tab:parameters}, the quality of the fit in Table~\ref{tab:fits}, and the posterior, the data and the
chains in Figures~%(references)s.
Figures were made with Matplotlib~\cite{Hunter2007} and corner~\cite{Foreman-Mackey2016}.

\input{tables/parameters.tex}
\input{tables/fits.tex}

%(figures)s

\bibliographystyle{plain}
\bibliography{references}
\end{document}
"""


def _manuscript(runs: Sequence[PaperRun], figures: Sequence[tuple[str, str, float]]) -> str:
    blocks = [_figure(*one) for one in figures]
    values = {
        "title": latex_text(runs[0].summary["title"]) or latex(model_text(runs[0].summary["model"])),
        "references": listed([rf"\ref{{fig:{name}}}" for name, _, _ in figures]),
        "figures": "\n\n".join(blocks),
    }
    return _SKELETON % values


def _figure(name: str, caption: str, width: float) -> str:
    """A float that includes a figure at its own size, so that its letters keep theirs."""
    kind = "figure" if width <= _COLUMN else "figure*"
    lines = [rf"\begin{{{kind}}}", r"\centering", rf"\includegraphics{{figures/{name}.pdf}}"]
    return "\n".join([*lines, rf"\caption{{{latex(caption)}}}", rf"\label{{fig:{name}}}", rf"\end{{{kind}}}"])


def settings_of(data: Mapping) -> tuple[FigureSettings, dict[str, str]]:
    """Return how the figures of a run look, from the contents of its config.yaml: settings and labels."""
    from pydantic import ValidationError

    try:
        return FigureSettings.model_validate(data.get("figures") or {}), dict(data.get("labels") or {})
    except ValidationError as error:
        raise InputError("the figures section of the run's config is damaged", value=error.errors()[0]["msg"]) from None
