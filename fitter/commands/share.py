"""A finished run handed on: `capsule`, `page`."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Annotated

import typer

from fitter.errors import InputError

__all__ = ["register"]

Run = Annotated[Path, typer.Argument(metavar="RUN", help="A run folder that `mufitter fit` wrote.", show_default=False)]


def register(app: typer.Typer, reported: Callable) -> None:
    """Add the commands to the app; ``reported`` turns exceptions into messages and exit codes."""
    app.command("capsule", short_help="Write the likelihood itself as one small file.")(reported(capsule))
    app.command("page")(reported(page))


def capsule(
    run: Run,
    without: Annotated[
        list[str] | None, typer.Option(metavar="LABEL", help="One more capsule with this uncertainty switched off; may be repeated.")
    ] = None,
    each: Annotated[bool, typer.Option("--each", help="One more capsule for every uncertainty that can be switched off.")] = False,
    order: Annotated[int, typer.Option(min=16, max=256, help="Degree of the nodes: 32 is 8 kB, 48 is 15 kB, 96 is 55 kB.")] = 48,
    citation: Annotated[str, typer.Option(help="What whoever uses it should cite.", show_default="the authors of the data")] = "",
    to: Annotated[Path | None, typer.Option(help="Folder for the files.", show_default="the run folder")] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace files of the same names there.")] = False,
    allow_code: Annotated[bool, typer.Option("--allow-code", help="Run the file of a model of your own that the config names.")] = False,
) -> None:
    """Write the likelihood itself as one small file, for a paper's supplement; `sample: {capsule: FILE}` fits it."""
    from fitter.report.run_folder import write_atomic, writing
    from fitter.sharing import capsules_of_run

    made = capsules_of_run(run, without or (), each=each, order=order, citation=citation, allow_code=allow_code)
    folder = (run if run.is_dir() else run.parent) if to is None else to
    for name in made if to is not None and not replace else ():
        if (folder / name).exists():
            raise InputError("there is such a file already", file=folder / name, cure="Replace it with --replace, or choose another --to")
    with writing(folder):
        folder.mkdir(parents=True, exist_ok=True)
        for name, content in made.items():
            write_atomic(folder / name, content.text())
    for name in made:
        print(folder / name)
    sys.stdout.flush()


def page(run: Run) -> None:
    """Write report.html again from a run folder."""
    from fitter.sharing import write_page

    print(write_page(run))
