"""From finished runs to a manuscript: `figures`, `tables`, `export`, `paper`."""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from fitter.errors import InputError

if TYPE_CHECKING:
    from fitter.report.figures.settings import FigureSettings
    from fitter.report.paper import PaperRun

__all__ = ["register"]

Runs = Annotated[list[Path], typer.Argument(metavar="RUN…", help="Run folders that `mufitter fit` wrote.", show_default=False)]
Run = Annotated[Path, typer.Argument(metavar="RUN", help="A run folder that `mufitter fit` wrote.", show_default=False)]
Parameters = Annotated[str | None, typer.Option(metavar="NAMES", help="Parameters, in this order: omega_m,w,…", show_default=False)]
Width = Annotated[str | None, typer.Option(help="single, double or a number of inches.", show_default="each figure's own")]
Style = Annotated[Path | None, typer.Option(help="A matplotlib style sheet laid over ours.", show_default=False)]
Replace = Annotated[bool, typer.Option("--replace", help="Replace files of the same names there.")]


def register(app: typer.Typer, reported: Callable) -> None:
    """Add the commands to the app.

    Parameters
    ----------
    app : typer.Typer
    reported : callable
        Decorator that turns exceptions into messages and exit codes.
    """
    commands = {
        figures: "Draw again from run folders; several are overlaid.",
        tables: "Write tables of one fit or several for a paper.",
        export: "Write draws and marginal densities for others.",
        paper: "Write figures, tables, methods and a LaTeX manuscript.",
    }
    for command, said in commands.items():
        app.command(command.__name__, short_help=said)(reported(command))


def figures(
    runs: Runs,
    only: Annotated[
        str | None,
        typer.Option(metavar="NAMES", help="corner, planes, hubble, residuals, history, correlation, budget, chains.", show_default="all"),
    ] = None,
    width: Width = None,
    format_: Annotated[str | None, typer.Option("--format", metavar="KINDS", help="pdf, png, svg, eps.", show_default="pdf,png")] = None,
    style: Style = None,
    parameters: Parameters = None,
    mark: Annotated[
        str | None, typer.Option(metavar="NAME=VALUE,…", help="Values to mark, e.g. a known truth.", show_default=False)
    ] = None,
    models: Annotated[
        str | None, typer.Option(metavar="NAMES", help="Beside the Hubble diagram's best fit: no_dark_energy, empty, matter_only.")
    ] = None,
    to: Annotated[Path | None, typer.Option(help="Folder for the files.", show_default="figures in the run folder")] = None,
    replace: Replace = False,
) -> None:
    """Draw again from run folders, without fitting; several runs are laid over each other."""
    from fitter.report.facts import relabelled
    from fitter.report.figures.draw import drawings, overlays, save_drawings
    from fitter.report.paper import drawable_of, run_labels
    from fitter.report.prose import plain
    from fitter.report.run_folder import writing

    read = [_read(path) for path in runs]
    given = {"only": _words(only), "width": _width(width), "formats": _words(format_), "parameters": _words(parameters)}
    how, labels, own_style = _looks(read, given | {"mark": _numbers(mark), "models": _words(models)})
    folder = _target(to, read, "figures")
    names = _words(only)
    if any(run.summary.get("blinded") for run in read):
        names, how = _while_hidden(read, names, how)
    with relabelled(labels):
        if len(read) == 1:
            found = drawings(drawable_of(read[0]), names, how)
        else:
            called = [plain(label) for label in run_labels(read)]
            found = overlays({label: drawable_of(run) for label, run in zip(called, read, strict=True)}, names, how)
        files = [f"{one.name}.{kind}" for one in found for kind in (*how.formats, "txt")]
        _refuse_taken(folder, files if to is not None and not replace else [])
        with writing(folder):
            written = save_drawings(found, folder, how, style=style or own_style)
    _tell(written)


def tables(
    runs: Runs,
    format_: Annotated[
        str | None, typer.Option("--format", metavar="KINDS", help="booktabs, latex (plain tabular), csv, markdown.", show_default="all")
    ] = None,
    parameters: Parameters = None,
    to: Annotated[Path | None, typer.Option(help="Folder for the files.", show_default="tables in the run folder")] = None,
    replace: Replace = False,
) -> None:
    """Write tables of parameters and of fit quality; several runs stand side by side."""
    from fitter.report.facts import relabelled
    from fitter.report.paper import TABLE_FILES, table_files
    from fitter.report.run_folder import write_atomic, writing

    read = [_open(path) for path in runs]
    _, labels, _ = _looks(read, {})
    folder = _target(to, read, "tables")
    with relabelled(labels):
        texts = table_files(read, _words(format_) or tuple(TABLE_FILES), _words(parameters))
    _refuse_taken(folder, list(texts) if to is not None and not replace else [])
    with writing(folder):
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in texts.items():
            write_atomic(folder / name, text)
    _tell([folder / name for name in texts])


def export(
    run: Run,
    format_: Annotated[str, typer.Option("--format", help="csv or parquet.")] = "csv",
    draws: Annotated[
        int | None, typer.Option(min=1, help="Rows of posterior.csv at most.", show_default="the effective sample size")
    ] = None,
    to: Annotated[Path | None, typer.Option(help="Folder for the files.", show_default="the run folder")] = None,
    replace: Replace = False,
) -> None:
    """Write equal-weight draws of the posterior, and every marginal density, as plain tables."""
    from fitter.report.export import export as write
    from fitter.report.paper import drawable_of
    from fitter.report.run_folder import writing

    read = _open(run)
    folder = read.folder if to is None else to
    _refuse_taken(folder, [f"posterior.{format_}", f"densities.{format_}"] if to is not None and not replace else [])
    with writing(folder):
        folder.mkdir(parents=True, exist_ok=True)
        _tell(write(drawable_of(read).posterior, folder, format_, draws))


def paper(
    runs: Runs,
    to: Annotated[Path, typer.Option(help="Folder for the manuscript.")] = Path("paper"),
    width: Width = None,
    style: Style = None,
    parameters: Parameters = None,
) -> None:
    """Write figures, tables, methods, references and a LaTeX manuscript that includes them; the first run is the main one."""
    from fitter.report.facts import relabelled
    from fitter.report.paper import write_paper
    from fitter.report.run_folder import writing

    read = [_open(path) for path in runs]
    how, labels, own_style = _looks(read, {"width": _width(width), "parameters": _words(parameters)})
    with relabelled(labels), writing(to):
        to.mkdir(parents=True, exist_ok=True)
        written = write_paper(read, to, how, style=style or own_style)
    _tell(written)
    if to / "manuscript.tex" not in written:
        print("manuscript.tex has been edited since it was written: it is left as it is", file=sys.stderr)


# ------------------------------------------------------------------------------------ what they share


def _read(path: Path) -> PaperRun:
    """A run folder as a manuscript needs it; the inputs and the model of the fit are not read."""
    from fitter.config.yaml_file import read_yaml
    from fitter.report.figures.draw import Drawable
    from fitter.report.paper import PaperRun
    from fitter.report.run_folder import read_run

    run = read_run(path)
    settings = read_yaml(run.config_file).data
    return PaperRun(run.folder.resolve(), run.summary, settings, Drawable(run.posterior, run.folder))


def _open(path: Path) -> PaperRun:
    """A run folder whose values are not hidden."""
    run = _read(path)
    if run.summary.get("blinded"):
        raise InputError("the values of this run are hidden", file=path, cure="Show them first with `mufitter unblind`")
    return run


def _while_hidden(runs: Sequence[PaperRun], names: list[str] | None, how: FigureSettings) -> tuple[list[str], FigureSettings]:
    """Figures of runs with hidden values, and their settings: any but these would show where the values are."""
    from fitter.report.paper import drawable_of

    allowed = ("corner", "chains") if len(runs) == 1 else ("corner",)
    for name in names or ():
        if name not in allowed:
            cure = "Show them first with `mufitter unblind`"
            raise InputError(f"`{name}` would show values of this run that are hidden", file=runs[0].folder, cure=cure)
    sampled = list(dict.fromkeys(n for run in runs for n in drawable_of(run).posterior.names))
    chosen = [n for n in how.parameters or sampled if n in sampled]
    return list(names or allowed), how.model_copy(update={"parameters": chosen or sampled, "mark": {}})


def _looks(runs: Sequence[PaperRun], given: dict) -> tuple[FigureSettings, dict[str, str], Path | None]:
    """Settings, labels and style sheet: those of the first run, with the options laid over them."""
    from pydantic import ValidationError

    from fitter.report.blinding import hidden_labels
    from fitter.report.figures.settings import FigureSettings
    from fitter.report.paper import settings_of

    how, labels = settings_of(runs[0].settings)
    given = {key: value for key, value in given.items() if value is not None and key != "only"}
    for run in runs[1:]:
        labels = {**settings_of(run.settings)[1], **labels}
    for run in runs:
        labels |= hidden_labels(run.summary.get("blinded") or ())
    try:
        changed = FigureSettings.model_validate({**how.model_dump(), **given})
    except ValidationError as error:
        first = error.errors(include_url=False)[0]
        key = str(first["loc"][0])
        option = {"formats": "format"}.get(key, key)
        raise InputError(f"--{option}: {str(first['msg']).removeprefix('Value error, ')}", value=first["input"]) from None
    style = None if how.style is None else runs[0].folder / Path(how.style).expanduser()
    return changed, labels, style


def _words(text: str | None) -> list[str] | None:
    return None if text is None else [word.strip() for word in text.split(",") if word.strip()]


def _width(text: str | None) -> str | float | None:
    if text is None or text in ("single", "double"):
        return text
    try:
        return float(text)
    except ValueError:
        raise InputError("--width: unknown figure width", value=text, cure="Use single, double or a number of inches") from None


def _numbers(text: str | None) -> dict[str, float] | None:
    """NAME=VALUE pairs."""
    found = {}
    for pair in _words(text) or []:
        name, _, number = pair.partition("=")
        try:
            found[name.strip()] = float(number)
        except ValueError:
            raise InputError("--mark: this is no NAME=VALUE", value=pair, cure="Write e.g. --mark omega_m=0.31,w=-1") from None
    return found or None


def _target(to: Path | None, runs: Sequence[PaperRun], name: str) -> Path:
    if to is not None:
        return to
    if len(runs) > 1:
        raise InputError(f"{name} of several runs belong to none of their folders", cure="Say where they go with --to FOLDER")
    return runs[0].folder / name


def _refuse_taken(folder: Path, names: list[str]) -> None:
    for name in names:
        if (folder / name).exists():
            raise InputError("the file exists", file=folder / name, cure="Replace it with --replace, or choose another folder with --to")


def _tell(written: list[Path]) -> None:
    for path in written:
        if path.suffix != ".txt":
            print(path, flush=True)
