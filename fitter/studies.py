"""Studies from Python and from the command line: stress tests and rehearsals of the fit that a config describes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from fitter.api import _settings
from fitter.config.load import placing, raise_all, validate
from fitter.config.parameters import FLAT
from fitter.config.planned import with_stand_in
from fitter.config.settings import Config
from fitter.config.write import as_run, config_hash, config_text, input_problems
from fitter.config.yaml_file import read_yaml
from fitter.errors import InputError
from fitter.inference.seeds import child_seed
from fitter.report.run_folder import RunFolder, write_atomic, writing
from fitter.sample.sample import Sample
from fitter.study.setup import FitSetup
from fitter.study.tasks import Store

if TYPE_CHECKING:
    from fitter.study.rehearse import Rehearsal

__all__ = ["MockOptions", "Place", "Study", "parse_truth", "rehearse", "stress"]

_STRESS, _REHEARSAL = 7, 8  # children of the seed
_TASKS = "tasks.jsonl"
Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Study:
    """What a study found, and where it was written."""

    result: dict[str, Any]
    text: str
    run_folder: Path | None = None

    def __str__(self) -> str:
        return self.text


@dataclass(frozen=True)
class Place:
    """Where a study goes, and what becomes of an earlier one there.

    Parameters
    ----------
    run_folder : path-like, False or None
        False writes nothing; None is the default place.
    replace, resume : bool
        Replace an earlier study; continue an interrupted one.
    """

    run_folder: str | Path | Literal[False] | None = None
    replace: bool = False
    resume: bool = False


def stress(
    config: Config | str | Path,
    place: Place | None = None,
    *,
    processes: int | None = None,
    scheduler: str | None = None,
    progress: Progress | None = None,
    allow_code: bool = False,
) -> Study:
    """Refit under every change that a referee would ask for.

    Parameters
    ----------
    config : Config or path
    place : Place, optional
        Where the results go; by default the config's run folder with ``_stress`` at its end.
    processes : int, optional
        Local processes; one a core by default.
    scheduler : str, optional
        Address of a Dask scheduler to use instead.
    progress : callable, optional
        Gets the numbers of finished and of all tasks.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Raises
    ------
    InputError, InputErrors
        Anything wrong with config, data, folder or scheduler.
    """
    from fitter.report.stress_table import stress_text
    from fitter.study.stress import stress as run

    job = StudyJob.prepare(config, allow_code)
    running = {"processes": processes, "scheduler": scheduler, "progress": progress}

    def study(store: Store | None) -> dict:
        found = run(job.setup, seed=job.seed(_STRESS), blind=job.blind, store=store, **running)
        return {"schema": found["schema"], "title": job.config.title, **found}

    return job.run(study, place or Place(), "stress", stress_text, _write_stress)


@dataclass(frozen=True)
class MockOptions:
    """Which mocks are drawn, and how they are fitted.

    Parameters
    ----------
    mocks : int
    truth : "best", "prior" or dict, optional
        Where they are drawn: at the best fit of the data, at draws from the prior, or at given values. By default the best fit; the
        prior where there are no data or the fit is blinded.
    draw_from : path-like, optional
        Another config, for the same supernovae, whose model and covariance the mocks are drawn from.
    method : {"quick", "sampler"}
        Without a chain, or with the sampler as the config sets it.
    """

    mocks: int = 500
    truth: str | dict[str, float] | None = None
    draw_from: str | Path | None = None
    method: Literal["quick", "sampler"] = "quick"


def rehearse(
    config: Config | str | Path,
    mocks: MockOptions | None = None,
    place: Place | None = None,
    *,
    processes: int | None = None,
    scheduler: str | None = None,
    progress: Progress | None = None,
    allow_code: bool = False,
) -> Study:
    """Fit mock samples: bias, coverage, ranks of the truth, χ² against expectation, precision.

    Parameters
    ----------
    config : Config or path
        A table without moduli, of a survey that does not exist yet, will do: map neither ``distance_modulus`` nor ``magnitude``.
    mocks : MockOptions, optional
    place : Place, optional
        Where the results go; by default the config's run folder with ``_rehearsal`` at its end.
    processes, scheduler, progress, allow_code
        As for `stress`.

    Raises
    ------
    InputError, InputErrors
        Anything wrong with config, data, truth, folder or scheduler.
    """
    from fitter.report.rehearsal_table import rehearsal_text
    from fitter.study.rehearse import METHODS
    from fitter.study.rehearse import rehearse as run

    options = mocks or MockOptions()
    if options.mocks < 1 or options.method not in METHODS:
        what = options.mocks if options.mocks < 1 else options.method
        raise InputError("this cannot be rehearsed", value=what, cure=f"Take a mock or more, and a method of {', '.join(METHODS)}")
    job = StudyJob.prepare(config, allow_code, planned=True)
    source = job if options.draw_from is None else StudyJob.prepare(options.draw_from, allow_code, planned=True)
    rehearsal = _rehearsal(job, source, options)
    running = {"processes": processes, "scheduler": scheduler, "progress": progress}

    def study(store: Store | None) -> dict:
        found = run(rehearsal, seed=job.seed(_REHEARSAL), store=store, **running)
        return {"schema": found["schema"], "title": job.config.title, "planned": job.planned, **found}

    decided_by = f"{options.mocks} {rehearsal.truth} {options.method} {source.hash}"
    return job.run(study, place or Place(), "rehearsal", rehearsal_text, _write_rehearsal, decided_by)


def parse_truth(text: str | None) -> str | dict[str, float] | None:
    """Read ``best``, ``prior`` or ``omega_m=0.3,H0=70``.

    Raises
    ------
    InputError
        A value that is no number.
    """
    if text is None or "=" not in text:
        return text
    found = {}
    for item in text.split(","):
        name, _, value = item.partition("=")
        try:
            found[name.strip()] = float(value)
        except ValueError:
            raise InputError(
                "the truth of the mocks cannot be read from this", value=item, cure="Write NAME=NUMBER, separated by commas"
            ) from None
    return found


def _rehearsal(job: StudyJob, source: StudyJob, options: MockOptions) -> Rehearsal:
    from fitter.study.rehearse import Rehearsal, best_truth

    truth, hidden = options.truth, bool(job.blind or source.blind)
    if truth is None:
        truth = "prior" if source.planned or hidden else "best"
    if truth == "best" and (source.planned or hidden):
        why = "a survey without data has no best fit" if source.planned else "the best fit of a blinded config is hidden"
        raise InputError(why, cure="Draw from the prior, or give the true values")
    if isinstance(truth, str) and truth not in ("best", "prior"):
        raise InputError(
            "the truth of the mocks cannot be read from this", value=truth, cure="Give `best`, `prior` or values such as omega_m=0.3"
        )
    if truth == "best":
        truth = best_truth(source.setup, source.seed(_REHEARSAL))
    values = dict(truth) if isinstance(truth, dict) else None
    return Rehearsal(job.setup, source.setup, values, options.mocks, options.method, job.config.sampling)


@dataclass(frozen=True)
class StudyJob:
    """A study on its way from settings to results."""

    config: Config
    setup: FitSetup
    blind: tuple[str, ...] = ()
    planned: bool = False

    @classmethod
    def prepare(cls, config: Config | str | Path, allow_code: bool, *, planned: bool = False) -> StudyJob:
        """Read config and data; nothing is written. `planned` allows a table without moduli."""
        without_data = None
        if planned and not isinstance(config, Config):
            without_data = _planned_config(Path(config), allow_code)
        config, _ = _settings(without_data or config, {}, allow_code)
        if config.variants:
            problem = "this config holds variants, not one fit"
            raise config.document.error(problem, ("variants",), cure="Give each variant a config of its own")
        with placing(config.document):
            sample = Sample.from_config(config.sample, config.folder)
        raise_all(input_problems(config, sample))
        if not sample.has_rows:
            raise InputError("a capsule has no single supernovae to leave out or to draw", cure="This needs the original data")
        return cls(config, setup_of(config, sample), blinded_names(config, sample), without_data is not None)

    @property
    def hash(self) -> str:
        """SHA-256 of the settings as run and of the data."""
        return config_hash(as_run(self.config, self.setup.sample, Path.cwd()))

    def seed(self, purpose: int) -> np.random.SeedSequence:
        """Return the seed for one purpose."""
        return child_seed(np.random.SeedSequence(self.config.sampling.seed), purpose)

    def run(self, study: Callable, place: Place, kind: str, text: Callable, write: Callable, decided_by: str = "") -> Study:
        """Run a study in its folder, or in none, and write what it found.

        Parameters
        ----------
        study : callable
            Gets a Store or None, returns the result.
        place : Place
        kind : str
            Name of the result file and end of the default folder.
        text, write : callables
            Make the text; write the files.
        decided_by : str
            What beside the config decides the result: an interrupted study with another is not continued.
        """
        if place.run_folder is False:
            result = study(None)
            return Study(result, text(result))
        default = self.config.default_run_folder()
        folder = RunFolder(Path(place.run_folder or default.with_name(f"{default.name}_{kind}")).expanduser(), replace=place.replace)
        settings = as_run(self.config, self.setup.sample, folder.target)
        folder.open(resume=place.resume)
        try:
            with writing(folder.path):
                self._write_config(folder.path / "config.yaml", settings, kind)
                result = study(Store(folder.path / _TASKS, f"{kind} {decided_by} {config_hash(settings)}"))
                result = {**result, "config_sha256": config_hash(settings), "sample_sha256": self.setup.sample.sha256}
                write(result, folder.path)
                (folder.path / _TASKS).unlink(missing_ok=True)
            return Study(result, text(result), folder.finish())
        finally:
            folder.leave()

    def _write_config(self, path: Path, settings: dict, kind: str) -> None:
        from fitter import __version__

        write_atomic(path, config_text(settings, [f"As run by mufitter {__version__} {kind}, every default written out."]))


def _planned_config(path: Path, allow_code: bool) -> Config | None:
    """Return the config of a survey that does not exist yet, or None where there are data."""
    document = with_stand_in(read_yaml(path))
    if document is None:
        return None
    config, _, problems = validate(document, path.parent, allow_code=allow_code)
    raise_all(problems)
    return config


def setup_of(config: Config, sample: Sample) -> FitSetup:
    """Return the fit that a config describes."""
    given = {k: v for k, v in config.complete_parameters(sample).items() if v != FLAT}
    return FitSetup(sample, config.cosmology, given, config.radiation)


def blinded_names(config: Config, sample: Sample) -> tuple[str, ...]:
    """Return the parameters whose values the config hides."""
    from fitter.report.blinding import hidden_names

    return hidden_names(config.blind, setup_of(config, sample).posterior()) if config.blind else ()


def _write_stress(result: dict, folder: Path) -> None:
    from fitter.report.figures.stress import stress_caption, stress_figure
    from fitter.report.figures.style import save_figure, styled
    from fitter.report.stress_table import stress_csv, stress_markdown

    with styled():
        for name in result["baseline"]["parameters"]:
            save_figure(stress_figure(result, name), folder / "figures" / f"stress_{name}", stress_caption(result, name))
    write_atomic(folder / "stress.md", stress_markdown(result))
    write_atomic(folder / "stress.csv", stress_csv(result))
    write_result(folder / "stress.json", result)


def _write_rehearsal(result: dict, folder: Path) -> None:
    from fitter.report.figures.rehearsal import rehearsal_caption, rehearsal_figure
    from fitter.report.figures.style import save_figure, styled
    from fitter.report.rehearsal_table import rehearsal_csv, rehearsal_markdown

    with styled():
        save_figure(rehearsal_figure(result), folder / "figures" / "rehearsal", rehearsal_caption(result))
    write_atomic(folder / "rehearsal.md", rehearsal_markdown(result))
    write_atomic(folder / "rehearsal.csv", rehearsal_csv(result))
    write_result(folder / "rehearsal.json", result)


def write_result(path: Path, result: dict) -> None:
    """Write a study's numbers as JSON."""
    import json

    from fitter.report.facts import json_safe

    write_atomic(path, json.dumps(json_safe(result), indent=1, ensure_ascii=False, allow_nan=False) + "\n")


def read_study(path: str | Path, name: str) -> dict:
    """Read a study back from its folder or file."""
    import json

    file = Path(path) / name if Path(path).is_dir() else Path(path)
    try:
        return json.loads(file.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(f"this study cannot be read: {error}", file=file) from None
