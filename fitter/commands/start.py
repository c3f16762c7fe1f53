"""From a table to a first config: `start`."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Annotated

import typer

from fitter.errors import InputError, InputErrors

__all__ = ["register"]


def register(app: typer.Typer, reported: Callable) -> None:
    """Add the command to the app; ``reported`` turns exceptions into messages and exit codes."""
    app.command("start", short_help="Look at a table and write a first config for it.")(reported(start))


def start(
    table: Annotated[Path, typer.Argument(metavar="TABLE", help="A table of supernovae.", show_default=False)],
    covariance: Annotated[
        list[Path] | None, typer.Option(metavar="FILE", help="A covariance or an inverse covariance; more than once if need be.")
    ] = None,
    output: Annotated[
        Path | None,
        typer.Option("--output", "-o", help="The config to write, or a folder for it.", show_default="here, with the table's name"),
    ] = None,
) -> None:
    """Look at a table and write a commented config for it; nothing is overwritten."""
    from fitter.config.start import start as draft

    # Not beside the table: a folder of shared data may be nobody's to write to.
    target = _target(output or Path(), table)
    _refuse_taken(target)
    made = draft(table, target.parent, covariance or ())
    _write_new(target, made.text)
    for heading, lines in (("Guessed:", made.guesses), ("To be looked at:", made.doubts)):
        if lines:
            print("\n".join([heading, *(f"  {line}" for line in lines)]))
    sys.stdout.flush()
    _say_checked(target)


def _target(output: Path, table: Path) -> Path:
    """The file to write: what is said, or in the folder that is said, called like the table."""
    return output / f"{table.name.split('.')[0] or 'config'}.yaml" if output.is_dir() else output


def _say_checked(target: Path) -> None:
    from fitter.checking import check

    found = check(target)
    print(f"Written to {target}", file=sys.stderr)
    if not found.ok:
        raise InputErrors(found.problems)
    for text in found.sample.warnings if found.sample is not None else ():
        print(f"Warning: {text}", file=sys.stderr)
    print(f"Next: mufitter check {target}", file=sys.stderr)


def _refuse_taken(target: Path) -> None:
    if os.path.lexists(target):
        raise InputError("there is such a file already, and nothing is overwritten", file=target, cure="Give another name with -o")
    if not target.parent.is_dir():
        raise InputError("there is no such folder", file=target.parent, cure="Make it first")
    if not os.access(target.parent, os.W_OK):
        raise InputError("there is no permission to write here", file=target.parent, cure="Name a file or folder of yours with -o")


def _write_new(target: Path, text: str) -> None:
    """Write a whole file under a name that is free; whoever took it meanwhile keeps it."""
    from fitter.report.run_folder import write_atomic, writing

    part = target.with_name(f".{target.name}.{os.getpid()}")
    with writing(target.parent):
        write_atomic(part, text)
        try:
            os.link(part, target)
        except FileExistsError:
            _refuse_taken(target)
        except OSError:  # a file system without links
            os.rename(part, target)
        finally:
            part.unlink(missing_ok=True)
