"""The command line: parses, calls, prints. Data go to stdout, messages to stderr."""

from __future__ import annotations

import functools
import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, TextIO

import typer

from fitter.commands import blinding, paper, share, start
from fitter.errors import InputError, InputErrors, MufitterError

if TYPE_CHECKING:
    from fitter.api import Fit
    from fitter.comparing import Comparison
    from fitter.config.settings import Config
    from fitter.studies import Study

__all__ = ["app", "main"]

NOT_CONVERGED, USER_INPUT, OUR_FAULT, INTERRUPTED = 1, 2, 3, 130

app = typer.Typer(
    help="What a table of supernova distances says about dark energy, curvature and the expansion rate.",
    epilog="Exit codes: 0 fine, 1 not converged, 2 something in your input, 3 a fault of mufitter.",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)

ConfigFile = Annotated[Path, typer.Argument(metavar="CONFIG", help="The config, a YAML file.", show_default=False)]
AllowCode = Annotated[bool, typer.Option("--allow-code", help="Run the file of a model of your own that the config names.")]


def main() -> None:
    """Run the command line; the entry point of `mufitter`."""
    for stream in (sys.stdout, sys.stderr):
        # A terminal that cannot show Ω must not end a fit.
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")
    app(prog_name="mufitter")


def _reported(command: Callable[..., int | None]) -> Callable[..., None]:
    """Let a command end with the exit code that it returns, and turn exceptions into messages on stderr and exit codes."""

    @functools.wraps(command)
    def wrapped(*arguments: Any, **options: Any) -> None:
        code: int | None = 0
        try:
            code = command(*arguments, **options)
        except MufitterError as error:
            _complain(error)
            code = error.exit_code
        except BrokenPipeError:
            # The reader of our output has left, as `head` does: nothing is wrong.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        except KeyboardInterrupt:
            _say("mufitter: interrupted")
            code = INTERRUPTED
        except Exception as error:  # noqa: BLE001 - the last resort: a short message on screen, the traceback in a file
            _blame_ourselves(error)
            code = OUR_FAULT
        raise typer.Exit(code or 0)

    return wrapped


def _say(text: str) -> None:
    print(text, file=sys.stderr)


def _colour(text: str, code: str, stream: TextIO) -> str:
    plain = os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb" or not stream.isatty()
    return text if plain else f"\x1b[{code}m{text}\x1b[0m"


def _complain(error: MufitterError) -> None:
    mark = _colour("mufitter:", "1;31", sys.stderr)
    errors = error.errors if isinstance(error, InputErrors) else (error,)
    if len(errors) > 1:
        _say(f"{mark} {len(errors)} problems")
        for one in errors:
            _say(f"  - {one}")
    else:
        _say(f"{mark} {errors[0]}")


def _blame_ourselves(error: Exception) -> None:
    import tempfile
    import traceback

    from fitter import __version__

    text = "".join(traceback.format_exception(error))
    said = f"{type(error).__name__}: {error}".splitlines()[0]
    try:
        with tempfile.NamedTemporaryFile("w", prefix="mufitter-error-", suffix=".log", delete=False, encoding="utf-8") as file:
            file.write(f"mufitter {__version__}, {sys.version}, {sys.platform}\n{sys.argv}\n{text}")
        where = f"The details are in {file.name}; please report them."
    except OSError:
        where = "The details could not be saved, there is no room for temporary files."
    _say(f"{_colour('mufitter:', '1;31', sys.stderr)} a fault of mufitter, not yours: {said[:300]}\n{where}")


def _version(wanted: bool) -> None:
    if wanted:
        from fitter import __version__

        print(f"mufitter {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")] = False,
) -> None:
    pass


@app.command("fit", short_help="Fit a model to a sample: posterior, summary, figures.")
@_reported
def _fit(
    config: ConfigFile,
    run_folder: Annotated[
        Path | None, typer.Option(help="Where the results go.", show_default="what the config says, or runs/NAME")
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier run there.")] = False,
    resume: Annotated[bool, typer.Option("--resume", help="Continue an unfinished run.")] = False,
    seed: Annotated[int | None, typer.Option(min=0, help="Seed of all randomness, instead of the config's.", show_default=False)] = None,
    json_: Annotated[bool, typer.Option("--json", help="Print summary.json to stdout instead of the readable summary.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress and no summary, only warnings and errors.")] = False,
    allow_code: AllowCode = False,
) -> int:
    """Fit a model to a sample: posterior, summary and figures in a run folder."""
    _refuse_both(replace, resume)
    from fitter.api import fit

    settings = _loaded(config, allow_code)
    if seed is not None:
        settings = settings.changed({"sampling.seed": seed})
    target = run_folder or settings.default_run_folder()
    result = fit(settings, run_folder=target, replace=replace, resume=resume, progress=not quiet)
    _print_result(result, json_, quiet)
    if not quiet:
        _say(f"Written to {result.run_folder}; report.html there shows it all")
    if result.converged:
        return 0
    _say(f"mufitter: not converged. {result.summary()['sampling'].get('advice') or ''}".rstrip())
    return NOT_CONVERGED


def _loaded(path: Path, allow_code: bool) -> Config:
    """The config; where it is wrong, with all that is wrong with its files too."""
    from fitter.config.load import load_config

    try:
        return load_config(path, allow_code=allow_code)
    except InputError:
        from fitter.checking import check

        problems = check(path, allow_code=allow_code).problems
        if not problems:
            raise
        raise InputErrors(problems) from None


def _print_result(result: Fit, as_json: bool, quiet: bool) -> None:
    from fitter.report.summary import summary_json
    from fitter.report.terminal import terminal_summary, told_apart

    if as_json:
        sys.stdout.write(summary_json(result.summary()))
    elif not quiet:
        sys.stdout.write(terminal_summary(result.summary(), stream=sys.stdout))
    if as_json or quiet:
        for kind, texts in zip(("Warning", "Caution"), told_apart(result.summary()), strict=True):
            for text in texts:
                _say(f"{kind}: {text}")
    sys.stdout.flush()


@app.command("compare", short_help="Set models, priors or data side by side.")
@_reported
def _compare(
    what: Annotated[
        list[Path],
        typer.Argument(metavar="CONFIG | RUN RUN …", help="A config with variants, or finished run folders.", show_default=False),
    ],
    name: Annotated[list[str] | None, typer.Option(help="What a run is called, once for each in turn.", show_default="its title")] = None,
    reference: Annotated[str | None, typer.Option(help="The fit that differences are taken from.", show_default="the first")] = None,
    scale: Annotated[str | None, typer.Option(help="Whose words for odds: kass_raftery or jeffreys.", show_default="kass_raftery")] = None,
    average: Annotated[bool, typer.Option("--average", help="Add constraints averaged over the models, weighted by evidence.")] = False,
    run_folder: Annotated[
        Path | None, typer.Option(help="Where everything goes.", show_default="what the config says, or runs/comparison")
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier comparison there.")] = False,
    resume: Annotated[bool, typer.Option("--resume", help="Continue an interrupted comparison; finished variants are kept.")] = False,
    json_: Annotated[bool, typer.Option("--json", help="Print comparison.json to stdout instead of the table.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress and no table, only warnings and errors.")] = False,
    allow_code: AllowCode = False,
) -> int:
    """Set models, priors or data side by side: which one do the data want?"""
    _refuse_both(replace, resume)
    from fitter.comparing import compare

    one = _loaded(what[0], allow_code) if len(what) == 1 and not what[0].is_dir() else what
    tell = None if quiet else lambda text: _say(f"  {text}")
    options: dict[str, Any] = {
        "names": name or None,
        "reference": reference,
        "scale": scale,
        "average": average or None,
        "run_folder": run_folder,
        "replace": replace,
        "resume": resume,
    }
    result = compare(one, **options, allow_code=allow_code, tell=tell)
    _print_comparison(result, json_, quiet)
    if not quiet:
        _say(f"Written to {result.run_folder}")
    if result.converged:
        return 0
    _say("mufitter: not every variant has converged. Raise sampling.max_steps in the config and compare again with --replace")
    return NOT_CONVERGED


def _refuse_both(replace: bool, resume: bool) -> None:
    if replace and resume:
        raise InputError("--replace starts anew, --resume continues: choose one of them")


def _print_comparison(result: Comparison, as_json: bool, quiet: bool) -> None:
    import json

    from fitter.report.comparison_table import comparison_text

    if as_json:
        print(json.dumps(result.report, indent=1, ensure_ascii=False), flush=True)
    elif not quiet:
        print(comparison_text(result.report, stream=sys.stdout), end="", flush=True)
    if as_json or quiet:
        for text in result.warnings:
            _say(f"Warning: {text}")


Processes = Annotated[int | None, typer.Option(min=1, help="Local processes.", show_default="one a core")]
Scheduler = Annotated[str | None, typer.Option(metavar="ADDRESS", help="Run on the workers of this Dask scheduler.", show_default=False)]


@app.command("stress", short_help="Does the answer survive changes of data, errors and priors?")
@_reported
def _stress(
    config: ConfigFile,
    run_folder: Annotated[Path | None, typer.Option(help="Where the results go.", show_default="the config's, with _stress")] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier study there.")] = False,
    resume: Annotated[bool, typer.Option("--resume", help="Continue an interrupted study.")] = False,
    processes: Processes = None,
    scheduler: Scheduler = None,
    json_: Annotated[bool, typer.Option("--json", help="Print stress.json to stdout instead of the tables.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress and no tables.")] = False,
    allow_code: AllowCode = False,
) -> None:
    """Does the answer survive? Refit without each group, cut, systematic and prior; single supernovae; residuals."""
    from fitter.studies import Place, stress

    running: dict[str, Any] = {"processes": processes, "scheduler": scheduler, "progress": _counting(quiet)}
    study = stress(config, Place(run_folder, replace, resume), **running, allow_code=allow_code)
    _print_study(study, json_, quiet)


@app.command("rehearse", short_help="Fit mock samples: bias, coverage, precision to expect.")
@_reported
def _rehearse(
    config: ConfigFile,
    mocks: Annotated[int, typer.Option(min=1, help="How many mock samples.")] = 500,
    truth: Annotated[
        str | None, typer.Option(help="`best` fit, `prior`, or values: omega_m=0.3,H0=70.", show_default="best; prior without data")
    ] = None,
    draw_from: Annotated[
        Path | None, typer.Option(help="A config whose model and covariance the mocks are drawn from.", show_default="CONFIG")
    ] = None,
    sampler: Annotated[bool, typer.Option("--sampler", help="Fit with the sampler, as `mufitter fit` does: hours.")] = False,
    run_folder: Annotated[Path | None, typer.Option(help="Where the results go.", show_default="the config's, with _rehearsal")] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier study there.")] = False,
    resume: Annotated[bool, typer.Option("--resume", help="Continue an interrupted study.")] = False,
    processes: Processes = None,
    scheduler: Scheduler = None,
    json_: Annotated[bool, typer.Option("--json", help="Print rehearsal.json to stdout instead of the table.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress and no table.")] = False,
    allow_code: AllowCode = False,
) -> None:
    """Fit mock samples: bias, coverage, calibration of the errors, and the precision of a survey to come."""
    from fitter.studies import MockOptions, Place, parse_truth, rehearse

    options = MockOptions(mocks, parse_truth(truth), draw_from, "sampler" if sampler else "quick")
    running: dict[str, Any] = {"processes": processes, "scheduler": scheduler, "progress": _counting(quiet)}
    study = rehearse(config, options, Place(run_folder, replace, resume), **running, allow_code=allow_code)
    _print_study(study, json_, quiet)


def _counting(quiet: bool) -> Callable[[int, int], None] | None:
    """A progress bar on stderr, or None where nobody looks."""
    if quiet or not sys.stderr.isatty():
        return None
    from tqdm import tqdm

    bar = tqdm(unit="task", file=sys.stderr, leave=False)

    def show(done: int, total: int) -> None:
        bar.total = total
        bar.update(done - bar.n)
        if done == total:
            bar.close()

    return show


def _print_study(study: Study, as_json: bool, quiet: bool) -> None:
    import json

    if as_json:
        print(json.dumps(study.result, indent=1, ensure_ascii=False), flush=True)
    elif not quiet:
        print(study.text, end="", flush=True)
    if not quiet:
        _say(f"Written to {study.run_folder}")


@app.command("check", short_help="Say what will be fitted, and all that is wrong with it.")
@_reported
def _check(config: ConfigFile, allow_code: AllowCode = False) -> None:
    """Read everything, say what will be fitted and all that is wrong; fit nothing."""
    from fitter.checking import check

    found = check(config, allow_code=allow_code)
    if not found.ok:
        raise InputErrors(found.problems)
    print(found, flush=True)
    _say("Nothing is wrong for a rehearsal; a fit needs a column of moduli or magnitudes." if found.planned else "Nothing is wrong.")


@app.command("schema")
@_reported
def _schema() -> None:
    """Print the JSON Schema of the config, for editors."""
    import json

    from fitter.config.schema import config_schema

    print(json.dumps(config_schema(), indent=2, ensure_ascii=False), flush=True)


@app.command("explain")
@_reported
def _explain(
    key: Annotated[str | None, typer.Argument(metavar="KEY", help="Key, parameter, model or prior.", show_default="what there is")] = None,
) -> None:
    """Say what a key means: unit, default, example."""
    from fitter.config.schema import explain

    print(explain(key), flush=True)


blinding.register(app, _reported)
paper.register(app, _reported)
start.register(app, _reported)
share.register(app, _reported)


if __name__ == "__main__":
    main()
