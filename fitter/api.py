"""Fits from Python: what the command line does, as functions and objects."""

from __future__ import annotations

import logging
import shutil
from collections.abc import Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from fitter.checking import Check, check, likelihood_of
from fitter.config.figures import figure_problems
from fitter.config.load import SaidOfData, config_from_mapping, load_config, placing, raise_all, valid, validate
from fitter.config.settings import Config
from fitter.config.write import as_run, config_hash, config_text, differences, input_problems
from fitter.config.yaml_file import read_yaml
from fitter.errors import InputError, MufitterError
from fitter.inference.seeds import child_seed
from fitter.parameters import declared_elsewhere
from fitter.report.blinding import (
    blind_optimum,
    blind_posterior,
    blind_summary,
    data_key,
    hidden_labels,
    hidden_names,
    offsets,
    true_chain,
    veil_key,
)
from fitter.report.run_folder import Run, RunFolder, read_run, write_atomic, writing
from fitter.sample.sample import Sample

if TYPE_CHECKING:
    from types import TracebackType

    import pandas as pd
    from matplotlib.figure import Figure

    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.report.page import Picture
    from fitter.sample.capsule import Capsule

__all__ = ["Check", "Fit", "TooShort", "check", "fit", "load_config", "read_run"]

# Fewer steps than this have no convergence diagnostics worth the name.
_LEAST_STEPS = 10


class TooShort(MufitterError):
    """A fit was interrupted before it could be summarised."""

    exit_code = 1


_log = logging.getLogger("fitter")
# Children of the seed; a number is never given a second meaning.
_OPTIMUM, _SAMPLING, _PROOF = 1, 2, 3


@dataclass(frozen=True, repr=False)
class Fit:
    """A finished fit.

    Parameters
    ----------
    config : Config
        The settings.
    sample : Sample
        What was observed.
    log_posterior : LogPosterior
        The function that was sampled.
    optimum : Optimum
        Where the posterior density is highest.
    chains : Posterior
        The draws, by replica, step and walker.
    run_folder : Path or None
        Where the results were written.
    """

    config: Config
    sample: Sample
    log_posterior: LogPosterior
    optimum: Optimum
    chains: Posterior
    run_folder: Path | None = None
    _summary: dict[str, Any] = field(default_factory=dict, repr=False)

    def summary(self) -> dict[str, Any]:
        """Return the contents of summary.json."""
        return self._summary

    @property
    def converged(self) -> bool:
        """Whether every convergence check was passed."""
        return bool(self._summary["sampling"]["converged"])

    @property
    def warnings(self) -> list[str]:
        """What a practitioner would warn of."""
        return list(self._summary["warnings"])

    @property
    def best_fit(self) -> dict[str, float]:
        """Value of every parameter where the posterior density is highest."""
        return dict(self._summary["best_fit"]["values"])

    @cached_property
    def posterior(self) -> pd.DataFrame:
        """The draws as a table: one column a parameter, then log_posterior, replica, step and walker."""
        import pandas as pd

        columns = {name: self.chains.draws(name).ravel() for name in self.chains.kinds}
        indices = np.indices(self.chains.log_posterior.shape).reshape(3, -1)
        columns["log_posterior"] = self.chains.log_posterior.ravel()
        return pd.DataFrame(columns | dict(zip(("replica", "step", "walker"), indices, strict=True)))

    def corner(self) -> Figure:
        """Return the corner plot of the sampled and main derived parameters."""
        from fitter.report.facts import relabelled
        from fitter.report.figures.corner import corner_figure
        from fitter.report.figures.style import shown_in_notebooks

        hidden = self._summary.get("blinded") or ()
        with relabelled(hidden_labels(hidden)):
            return shown_in_notebooks(corner_figure(self.chains, list(self.chains.names) if hidden else None))

    def hubble_diagram(self) -> Figure:
        """Return the Hubble diagram with the residuals from the best fit."""
        if self._summary.get("blinded"):
            raise InputError("the Hubble diagram would show the best fit, which is hidden", cure="Unblind the run first")
        if not self.sample.has_rows:
            raise InputError("a capsule has no single supernovae, and so no Hubble diagram", cure="This needs the original data")
        from fitter.report.figures.hubble import hubble_figure
        from fitter.report.figures.style import shown_in_notebooks

        return shown_in_notebooks(hubble_figure(self.log_posterior, self.optimum, self.chains))

    def capsule(self, *, order: int = 48, citation: str = "") -> Capsule:
        """Return the likelihood as a capsule; ``.text()`` of it is what to write to a file.

        Raises
        ------
        InputError
            The intrinsic scatter is fitted, or this is a fit of a capsule already.
        """
        from fitter.sharing import capsule_of_sample

        scatter = float(self.log_posterior.fixed.get("intrinsic_scatter", 0.0))
        return capsule_of_sample(self.sample, order=order, scatter=scatter, title=self.config.title, citation=citation)

    def __str__(self) -> str:
        from fitter.report.terminal import terminal_summary

        return terminal_summary(self._summary)

    def __repr__(self) -> str:
        from fitter.report.facts import parameter, relabelled
        from fitter.report.terminal import cell_text

        facts, said = self._summary["parameters"], self._summary
        with relabelled(self.config.labels):
            values = "; ".join(f"{parameter(n).plain} {cell_text(facts[n])}" for n in self.chains.names if n in facts)
        return f"Fit({said['model']}, {said['sample']['n']} supernovae: {values}{'' if self.converged else '; not converged'})"

    def to_arviz(self) -> Any:
        """Return the draws for ArviZ: each replica is a chain, its walkers one after the other.

        Only replicas are independent: the walkers of one move by each other's positions. What decided on convergence stands in `summary`.

        Raises
        ------
        InputError
            ArviZ is not installed.
        """
        try:
            import arviz
        except ModuleNotFoundError:
            raise InputError("ArviZ is not installed", cure="pip install 'mufitter[arviz]'") from None
        chains = self.chains
        by_replica = lambda a: np.asarray(a).transpose(0, 2, 1).reshape(len(a), -1)  # noqa: E731 - (R, S, W) to (R, W S)
        groups = {
            "posterior": {name: by_replica(chains.draws(name)) for name in chains.kinds},
            "sample_stats": {"lp": by_replica(chains.log_posterior)},
        }
        from_dict: Any = arviz.from_dict  # its first argument is of another type since version 1
        return from_dict(**groups) if int(arviz.__version__.split(".")[0]) < 1 else from_dict(groups)

    def _repr_html_(self) -> str:
        from fitter.report.facts import relabelled
        from fitter.report.page import fit_html

        with relabelled(self.config.labels):
            return fit_html(self._summary)


def fit(
    config: Config | Mapping[str, Any] | str | Path | None = None,
    *,
    run_folder: str | Path | Literal[False] | None = None,
    replace: bool = False,
    resume: bool = False,
    progress: bool = False,
    allow_code: bool = False,
    **settings: Any,
) -> Fit:
    """Fit a model to a sample.

    Parameters
    ----------
    config : Config, mapping or path, optional
        The settings, or the config file that holds them.
    run_folder : path-like or False, optional
        Where the results go; by default what the config says, and nothing is written if it says nothing or for False.
    replace : bool
        Whether an earlier run there may be replaced.
    resume : bool
        Continue an unfinished run of the same settings and data.
    progress : bool
        Show a progress bar on stderr.
    allow_code : bool
        Whether the file of a model of one's own may be run.
    **settings
        Sections of a config (title, sample, model, parameters, sampling, …); they override those of ``config``.
        ``sample`` may be a `Sample`.

    Returns
    -------
    Fit

    Raises
    ------
    InputError, InputErrors
        Anything wrong with settings, data or run folder, before anything is written.

    Examples
    --------
    >>> from fitter import Sample, fit
    >>> sample = Sample.from_arrays(z, mu, covariance=covariance)            # doctest: +SKIP
    >>> result = fit(sample=sample, model="flat_lcdm")                       # doctest: +SKIP
    >>> result.posterior["omega_m"].mean()                                   # doctest: +SKIP
    """
    chosen, sample = _settings(config, settings, allow_code)
    if chosen.variants:
        raise chosen.document.error("this config holds variants, not one fit", ("variants",), cure="Fit them with `mufitter compare`")
    target = chosen.run_folder if run_folder is None else run_folder
    if not target:
        return _Job.prepare(chosen, sample, None, progress).run()
    folder = RunFolder(Path(target).expanduser(), replace=replace)
    folder.check_target(resume=resume)
    job = _Job.prepare(chosen.model_copy(update={"run_folder": str(target)}), sample, folder, progress)
    if resume and folder.earlier is not None:
        job.require_same_run(folder.earlier)
        if folder.earlier == folder.target and (finished := job.finished_run()) is not None:
            return finished
    folder.open(resume=resume)
    try:
        return job.run(resume=resume)
    finally:
        folder.leave()


def _settings(
    config: Config | Mapping[str, Any] | str | Path | None, settings: dict[str, Any], allow_code: bool = False
) -> tuple[Config, Sample | None]:
    """Bring a path, mapping, Config and keywords to one Config, and the Sample if it was given as an object."""
    if isinstance(config, str | Path):
        config = load_config(config, allow_code=allow_code)
    data = settings.get("sample")
    sample = data if isinstance(data, Sample) else None
    settings = {k: v for k, v in settings.items() if sample is None or k != "sample"}
    if isinstance(config, Config):
        if sample is None and not settings:
            return config, None
        given, folder = {**config.document.data, **settings}, config.folder
        allow_code = allow_code or config._allow_code
    else:
        given, folder = {**(config or {}), **settings}, Path.cwd()
    if sample is not None:
        given.pop("sample", None)
    return config_from_mapping(given, folder=folder, sample=sample, allow_code=allow_code), sample


@dataclass
class _Job:
    """One fit on its way from settings to results."""

    config: Config
    sample: Sample
    log_posterior: LogPosterior
    folder: RunFolder | None
    progress: bool
    processes: int | None = None

    @classmethod
    def prepare(cls, config: Config, sample: Sample | None, folder: RunFolder | None, progress: bool) -> _Job:
        """Read the data and build the likelihood; nothing is written."""
        with placing(config.document):
            if sample is None:
                sample = Sample.from_config(config.sample, config.folder)
                raise_all(input_problems(config, sample))
            log_posterior = likelihood_of(config, sample)
            config.sampling.check_dimension(len(log_posterior.names))
            raise_all(figure_problems(config, log_posterior))
            hidden_names(config.blind, log_posterior)
        return cls(config, sample, log_posterior, folder, progress)

    @property
    def _place(self) -> RunFolder:
        """The run folder of a fit that writes."""
        if self.folder is None:
            raise RuntimeError("this fit writes nothing")
        return self.folder

    @cached_property
    def settings(self) -> dict[str, Any]:
        """The settings as run."""
        return as_run(self.config, self.sample, self._place.target if self.folder is not None else Path.cwd())

    def require_same_run(self, earlier: Path) -> None:
        """Refuse to continue a run of other settings or data, naming what differs."""
        file = earlier / "config.yaml"
        if not file.exists():
            return
        different = differences(read_yaml(file).data, self.settings)
        if different:
            said = "; ".join(different[:6]) + ("; …" if len(different) > 6 else "")
            cure = "Restore these settings to continue it, or start again with --replace"
            raise InputError(f"the earlier run is of other settings or data: {said}", file=earlier, cure=cure)
        if earlier == self._place.target:
            self._require_same_end(read_run(earlier).summary)

    def _require_same_end(self, summary: dict[str, Any]) -> None:
        """Refuse to go on with a run that has converged and is not what is asked for."""
        sampling = summary["sampling"]
        if not sampling["converged"]:
            return
        if self.config.sampling.target_ess > sampling.get("target_ess", np.inf):
            problem = f"the run there has ended with a target_ess of {sampling['target_ess']}, it cannot be continued"
            raise InputError(problem, file=self._place.target, cure="Make a longer one with --replace")
        if self.config.intervals != (made := summary.get("intervals", "equal_tailed")):
            problem = f"the run there has ended with {made.replace('_', '-')} intervals, it cannot be continued with others"
            raise InputError(problem, file=self._place.target, cure="Make it again with --replace")

    def finished_run(self) -> Fit | None:
        """Return the run that is already in its place and converged, or None if it can be continued."""
        run = read_run(self._place.target)
        if not run.summary["sampling"]["converged"]:
            return None
        optimum = self._optimum()
        if self.hidden and run.summary.get("blinded"):
            optimum = blind_optimum(optimum, self.log_posterior.names, self.hidden)
        return Fit(self.config, self.sample, self.log_posterior, optimum, run.posterior, self._place.target, run.summary)

    def run(self, *, resume: bool = False) -> Fit:
        """Find the optimum, sample, summarise, draw and write."""
        if self.folder is None:
            return self._blinded(self._compute(None, resume=False))
        with writing(self._place.path), _RunLog(self._place.path / "run.log"):
            self._write_config()
            result = self._blinded(self._compute(self._place.path, resume=resume))
            self._write_results(result)
        return replace(result, run_folder=self._place.finish())

    @cached_property
    def hidden(self) -> dict[str, float]:
        """Hidden offset of each blinded parameter."""
        return offsets(self._data_key, hidden_names(self.config.blind, self.log_posterior))

    @property
    def _data_key(self) -> str:
        return data_key(self.sample, None if self.config.sample is None else self.config.sample.table)

    def _blinded(self, result: Fit) -> Fit:
        """Hide what the config hides; from here on nothing knows the values."""
        if not self.hidden:
            return result
        chains = blind_posterior(result.chains, self.hidden)
        optimum = blind_optimum(result.optimum, self.log_posterior.names, self.hidden)
        summary = blind_summary(result.summary(), self.hidden, self.log_posterior, self._data_key)
        return replace(result, chains=chains, optimum=optimum, _summary=summary)

    def unblind(self, run: Run) -> Fit:
        """Write a blinded run again with its values, and when that was."""
        shutil.copytree(run.folder, self._place.path, dirs_exist_ok=True, ignore=shutil.ignore_patterns("figures", "summary.*", ".*"))
        with writing(self._place.path), _RunLog(self._place.path / "run.log"):
            record = {"when": datetime.now(UTC).isoformat(timespec="seconds"), "config_sha256": config_hash(self.settings)}
            _log.info("unblinded, config SHA-256 %s", record["config_sha256"])
            result = self._summarised(self._optimum(), self._opened(run.posterior))
            result._summary.update(unblinded=record)
            self._write_results(result)
        return replace(result, run_folder=self._place.finish())

    def _opened(self, chains: Posterior) -> Posterior:
        from fitter.inference.sampling import derive_and_draw, kinds_of

        chain = true_chain(chains, self.hidden)
        run = lambda function, arguments: [function(self.log_posterior, *a) for a in arguments]  # noqa: E731
        extra = derive_and_draw(self.log_posterior, chain, self._seed(_SAMPLING), run)
        sampling = {k: v for k, v in chains.sampling.items() if k != "blinded"}
        return replace(chains, chain=chain, extra=extra, kinds=kinds_of(self.log_posterior, extra), sampling=sampling)

    def _seed(self, purpose: int) -> np.random.SeedSequence:
        return child_seed(np.random.SeedSequence(self.config.sampling.seed), purpose)

    def _optimum(self) -> Optimum:
        from fitter.inference.optimum import find_optimum

        return find_optimum(self.log_posterior, self._seed(_OPTIMUM))

    def _compute(self, folder: Path | None, *, resume: bool) -> Fit:
        from fitter.inference.progress import progress_bar
        from fitter.inference.sampling import sample_posterior

        _log.info("%s, model %s, sampled: %s", self.sample_line(), self.config.cosmology.name, ", ".join(self.log_posterior.names))
        for text in self.sample.warnings:
            _log.warning(text)
        optimum = self._optimum()
        _log.info("optimum: chi2 %.4f at %s", optimum.chi2, "hidden values" if self.hidden else optimum.values)
        fingerprint = config_hash(self.settings)
        with progress_bar(quiet=not self.progress) as bar:
            chains = sample_posterior(
                self.log_posterior, self.config.sampling, optimum, seed=self._seed(_SAMPLING),
                folder=folder, progress=bar, resume=resume, fingerprint=fingerprint,
                processes=self.processes, veil=veil_key(self._data_key) if self.hidden else b"",
            )  # fmt: skip
        _log.info("sampled: %s", {k: v for k, v in chains.sampling.items() if k in ("steps", "burn_in", "converged", "reason", "seconds")})
        steps = chains.log_posterior.shape[1]
        if steps < _LEAST_STEPS:
            cure = " Continue with --resume." if folder is not None else ""
            raise TooShort(f"stopped after {steps} steps, too early to say anything.{cure}")
        return self._summarised(optimum, chains)

    def _summarised(self, optimum: Optimum, chains: Posterior) -> Fit:
        from fitter.inference.profile import profile_intervals
        from fitter.inference.proof import prove
        from fitter.report.provenance import provenance
        from fitter.report.summary import Extras, summarise

        chains = replace(chains, intervals=self.config.intervals)
        more = {"provenance": provenance(self.config.sampling.seed, config_hash(self.settings), self.sample.sources)}
        ess = {name: min(chains.sampling["ess_bulk"][name], chains.sampling["ess_tail"][name]) for name in chains.names}
        proof = prove(self.log_posterior, chains, optimum, ess, seed=self._seed(_PROOF))
        _log.info("cross-check: %s; evidence: %s", proof.cross_check, proof.evidence)
        more["evidence"] = proof.evidence
        if hasattr(self.log_posterior, "accuracy"):
            more["capsule"] = self.log_posterior.accuracy(chains.chain)
        if declared := declared_elsewhere(chains.kinds):
            more["declared"] = declared
        profile = profile_intervals(self.log_posterior, optimum)
        extras = Extras(self.config.title, proof.cross_check, proof.evidence, more, profile)
        summary = summarise(self.log_posterior, chains, optimum, extras)
        return Fit(self.config, self.sample, self.log_posterior, optimum, chains, None, summary)

    def sample_line(self) -> str:
        """Return one line on the data."""
        calibrators = f" ({self.sample.n_calibrators} calibrators)" if self.sample.n_calibrators else ""
        return f"{self.sample.n} supernovae{calibrators}, SHA-256 {self.sample.sha256}"

    def _write_config(self) -> None:
        from fitter import __version__

        header = [
            f"As run by mufitter {__version__}, every default written out. Repeat it with",
            "  mufitter fit config.yaml --run-folder NEW",
        ]
        if self.config.sample is None:
            header.append(f"The data came as arrays from Python (SHA-256 {self.sample.sha256}): this file alone cannot repeat the fit.")
        write_atomic(self._place.path / "config.yaml", config_text(self.settings, header))

    def _write_results(self, result: Fit) -> None:
        from fitter.inference.checkpoint import remove_checkpoint
        from fitter.report.chain_file import write_chain
        from fitter.report.facts import relabelled
        from fitter.report.methods import methods_files
        from fitter.report.page import PAGE, page_text
        from fitter.report.summary import summary_csv, summary_json, summary_markdown

        path, summary = self._place.path, result.summary()
        write_chain(path / "chain.h5", result.chains, {"config_sha256": config_hash(self.settings)})
        if result.converged:
            remove_checkpoint(path)
        texts = {"summary.md": summary_markdown(summary), "summary.csv": summary_csv(summary)}
        if not summary.get("blinded"):
            with relabelled(result.config.labels):
                texts |= methods_files(summary, self.settings)
        for name, text in texts.items():
            write_atomic(path / name, text)
        pictures = _draw_blinded(result, path) if summary.get("blinded") else _draw(result, path)
        with relabelled({**result.config.labels, **hidden_labels(summary.get("blinded") or ())}):
            write_atomic(path / PAGE, page_text(summary, (path / "config.yaml").read_text(encoding="utf-8"), pictures))
        # Last: a folder with this file is complete.
        write_atomic(path / "summary.json", summary_json(summary))
        for text in result.warnings:
            _log.warning(text)


def _draw(result: Fit, folder: Path) -> dict[str, Picture]:
    """Keep what the figures of a fit show, and draw those that were asked for."""
    from fitter.report.facts import relabelled
    from fitter.report.figures.data import DATA_FILE, collect, write_figure_data
    from fitter.report.figures.draw import Drawable, drawings, save_drawings

    data = collect(result.log_posterior, result.optimum, result.chains)
    write_figure_data(folder / DATA_FILE, data)
    how, run = result.config.figures, Drawable(result.chains, data)
    pictures: dict[str, Picture] = {}
    with relabelled(result.config.labels):
        found = drawings(run, how.only, how, strict=False)
        save_drawings(found, folder / "figures", how, style=result.config.style_file, pictures=pictures)
    return pictures


def _draw_blinded(result: Fit, folder: Path) -> dict[str, Picture]:
    """Draw the chains and the corner plot of shifted parameters: any other figure would show where they are."""
    from fitter.report.facts import relabelled
    from fitter.report.figures.draw import Drawable, drawings, save_drawings
    from fitter.report.figures.settings import FigureSettings

    names = result.chains.names
    how = FigureSettings.model_validate(
        {**result.config.figures.model_dump(), "only": ["corner", "chains"], "parameters": list(names), "mark": {}}
    )
    with relabelled({**result.config.labels, **hidden_labels(result.summary()["blinded"])}):
        found = drawings(Drawable(result.chains, folder), how.only, how, strict=False)
        pictures: dict[str, Picture] = {}
        save_drawings(found, folder / "figures", how, style=result.config.style_file, pictures=pictures)
    return pictures


class _RunLog(AbstractContextManager):
    """Writes the log of a run to a file, the traceback too if it fails."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __enter__(self) -> _RunLog:
        self._handler = logging.FileHandler(self.path, encoding="utf-8")
        self._handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        self._level, self._propagate = _log.level, _log.propagate
        _log.addHandler(self._handler)
        _log.setLevel(logging.INFO)
        # The log belongs to the file; the terminal gets the summary.
        _log.propagate = False
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None) -> None:
        if error is not None:
            _log.error("stopped", exc_info=error)
        _log.removeHandler(self._handler)
        _log.setLevel(self._level)
        _log.propagate = self._propagate
        self._handler.close()


def load_run(path: str | Path, *, allow_code: bool = False) -> tuple[Run, Config]:
    """Read a run folder together with its config."""
    run = read_run(path)
    document = read_yaml(run.config_file)
    # A fit of arrays has no sample section; what the parameters depend on stands in the summary.
    arrays = None if "sample" in document.data else SaidOfData(run.summary["sample"]["distance_scale"], run.summary["sample"]["data_kind"])
    config, _, problems = validate(document, run.folder, arrays, allow_code=allow_code)
    return run, valid(config, problems)


def unblind(path: str | Path, *, allow_code: bool = False) -> Fit:
    """Show the hidden values of a blinded run: write its summary, tables, chain and figures again, with a record of when.

    Parameters
    ----------
    path : path-like
        The run folder.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Raises
    ------
    InputError
        The run is not blinded, or its data are not those that it was made of.
    """
    run, config = load_run(path, allow_code=allow_code)
    require_blinded(run)
    if config.sample is None:
        raise InputError(
            "the data came as arrays from Python, the folder cannot name them", file=run.folder, cure="Fit again without blind"
        )
    folder = RunFolder(run.folder, replace=True)
    job = _Job.prepare(config, None, folder, False)
    if job.sample.sha256 != run.summary["sample"]["sha256"]:
        raise InputError("the data are not those that this run was made of", file=run.folder, cure="Restore the input files")
    folder.open()
    try:
        return job.unblind(run)
    finally:
        folder.leave()


def require_blinded(run: Run) -> None:
    """Refuse a run that hides nothing."""
    if not run.summary.get("blinded"):
        when = (run.summary.get("unblinded") or {}).get("when")
        raise InputError(f"this run was unblinded on {when}" if when else "this run is not blinded", file=run.folder)
