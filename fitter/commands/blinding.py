"""`unblind`: show what a blinded run hides, once the analysis is frozen."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Annotated

import typer

from fitter.errors import InputError

__all__ = ["register"]

_WORD = "unblind"


def register(app: typer.Typer, reported: Callable) -> None:
    """Add the command to the app; `reported` turns exceptions into messages and exit codes."""
    app.command("unblind", short_help="Show the hidden values of a blinded fit.")(reported(unblind))


def unblind(
    run: Annotated[Path, typer.Argument(metavar="RUN", help="A run folder of a blinded fit.", show_default=False)],
    yes: Annotated[bool, typer.Option("--yes", help="Do not ask.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="Do not print the summary.")] = False,
    allow_code: Annotated[bool, typer.Option("--allow-code", help="Run the file of a model of your own that the config names.")] = False,
) -> None:
    """Show the hidden values of a blinded fit; when that was, and of which config, is recorded in the run."""
    from fitter.api import read_run, require_blinded
    from fitter.api import unblind as open_run

    require_blinded(read_run(run))
    if not yes:
        _confirm(run)
    result = open_run(run, allow_code=allow_code)
    if not quiet:
        print(result, end="", flush=True)
        print(f"Written to {result.run_folder}", file=sys.stderr)


def _confirm(run: Path) -> None:
    """Ask for the word; without anybody to answer, refuse."""
    cure = "Give --yes, once the analysis is frozen"
    if not sys.stdin.isatty():
        raise InputError("unblinding cannot be undone and needs a confirmation", file=run, cure=cure)
    print(f"This shows the values of {run} for good. Type `{_WORD}` to go on: ", end="", file=sys.stderr, flush=True)
    if sys.stdin.readline().strip() != _WORD:
        raise InputError("not confirmed, nothing was changed", file=run, cure=cure)
