"""Studies from Python and from the command line: stress tests and rehearsals of the fit that a config describes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from fitter.api import _settings
from fitter.config.load import raise_all
from fitter.config.parameters import FLAT
from fitter.config.settings import Config
from fitter.config.write import as_run, config_hash, config_text, input_problems
from fitter.errors import InputError
from fitter.inference.seeds import child_seed
from fitter.report.run_folder import RunFolder, write_atomic, writing
from fitter.sample.sample import Sample
from fitter.study.setup import FitSetup
from fitter.study.tasks import Store

__all__ = ["Study", "stress"]

_STRESS = 7  # children of the seed
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
class StudyJob:
    """A study on its way from settings to results."""

    config: Config
    setup: FitSetup
    blind: tuple[str, ...] = ()

    @classmethod
    def prepare(cls, config: Config | str | Path, allow_code: bool) -> StudyJob:
        """Read config and data; nothing is written."""
        config, _ = _settings(config, {}, allow_code)
        if config.variants:
            problem = "this config holds variants, not one fit"
            raise config.document.error(problem, ("variants",), cure="Give each variant a config of its own")
        sample = Sample.from_config(config.sample, config.folder)
        raise_all(input_problems(config, sample))
        return cls(config, setup_of(config, sample), blinded_names(config, sample))

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


def setup_of(config: Config, sample: Sample) -> FitSetup:
    """Return the fit that a config describes."""
    given = {k: v for k, v in config.complete_parameters(sample).items() if v != FLAT}
    return FitSetup(sample, config.cosmology, given, config.radiation)


def blinded_names(config: Config, sample: Sample) -> tuple[str, ...]:
    """Return the parameters whose values the config hides."""
    blind = getattr(config, "blind", False)
    if not blind:
        return ()
    return setup_of(config, sample).posterior().names


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
