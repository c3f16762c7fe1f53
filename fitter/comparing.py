"""Comparisons: the variants of a config fitted and set side by side, or finished fits."""

from __future__ import annotations

import html
import json
import logging
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from fitter.api import Fit, _Job, _settings, load_run
from fitter.checking import likelihood_of, samples_of
from fitter.config.expand import Variant, expand
from fitter.config.load import raise_all
from fitter.config.settings import Config
from fitter.config.write import input_problems
from fitter.errors import InputError
from fitter.inference.replicas import available_cores, end_with_parent
from fitter.inference.seeds import child_seed
from fitter.inference.settings import DEFAULT_SEED
from fitter.report.blinding import comparable, hidden_labels, require_same_blinding
from fitter.report.facts import relabelled
from fitter.report.run_folder import RunFolder, read_run, write_atomic, writing
from fitter.sample.sample import Sample
from fitter.study.entry import Entry

if TYPE_CHECKING:
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.report.run_folder import Run

__all__ = ["Comparison", "compare"]

_log = logging.getLogger("fitter")
_STUDY = 6  # child of the seed
Report = Callable[[str], None]


@dataclass(frozen=True, repr=False)
class Comparison:
    """Fits set side by side.

    Parameters
    ----------
    report : dict
        The contents of comparison.json.
    entries : tuple of Entry
        The fits.
    run_folder : Path or None
        Where tables, figures and the fits were written.
    """

    report: dict[str, Any]
    entries: tuple[Entry, ...]
    run_folder: Path | None = None

    @property
    def converged(self) -> bool:
        """Whether every fit converged."""
        return all(v["converged"] for v in self.report["variants"])

    @property
    def warnings(self) -> list[str]:
        """What a practitioner would warn of."""
        return list(self.report["warnings"])

    def table(self, fmt: Literal["text", "markdown", "csv", "latex"] = "text") -> str:
        """Return the comparison as text."""
        from fitter.report import comparison_table

        makers = {k: getattr(comparison_table, f"comparison_{k}") for k in ("text", "markdown", "csv", "latex")}
        if fmt not in makers:
            raise InputError("unknown table format", value=fmt, cure=f"Use one of {', '.join(makers)}.")
        return makers[fmt](self.report)

    def __str__(self) -> str:
        return self.table()

    def __repr__(self) -> str:
        return f"Comparison({', '.join(entry.name for entry in self.entries)})"

    def _repr_html_(self) -> str:
        return f'<pre style="overflow-x:auto;font-family:monospace">{html.escape(str(self))}</pre>'


def compare(
    what: Config | str | Path | Sequence[str | Path | Fit],
    *,
    names: Sequence[str] | None = None,
    reference: str | None = None,
    scale: str | None = None,
    average: bool | None = None,
    run_folder: str | Path | Literal[False] | None = None,
    replace: bool = False,
    resume: bool = False,
    allow_code: bool = False,
    tell: Report | None = None,
) -> Comparison:
    """Compare models, priors or data: the variants of a config, or finished fits.

    Parameters
    ----------
    what : config, its path, or a sequence of run folders or Fits
        A config has ``variants``; they are fitted first, in parallel.
    names : sequence of str, optional
        What fits are called, in their order; their titles by default.
    reference : str, optional
        The fit that differences are taken from; the first by default.
    scale : {"kass_raftery", "jeffreys"}, optional
        Whose words are used for odds.
    average : bool, optional
        Add constraints averaged over the models.
    run_folder : path-like or False, optional
        Where everything goes. False writes nothing, and is for finished fits only; it is the default where one of them is a Fit.
    replace : bool
        Whether an earlier comparison there may be replaced.
    resume : bool
        Go on with an interrupted comparison of variants: those that are finished are kept, the others continued.
    allow_code : bool
        Whether the file of a model of one's own may be run.
    tell : callable, optional
        Gets a line of text as each fit ends.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError, InputErrors
        Anything wrong with the config, the runs or the folder, before anything is fitted.
    """
    options: dict[str, Any] = {k: v for k, v in (("reference", reference), ("scale", scale), ("average", average)) if v is not None}
    _check_scale(options.get("scale"))
    if isinstance(what, Config | str | Path):
        if names is not None:
            raise InputError("the names of variants stand in the config", value=list(names), cure="Give names for finished runs only")
        place = _Place(run_folder, replace, resume)
        return _compare_variants(what, options, place, allow_code, tell or (lambda _: None))
    if resume:
        raise InputError("finished runs are compared in a moment, there is nothing to continue", cure="Leave --resume out")
    what = [what] if isinstance(what, Fit) else list(what)
    entries = [_entry_of_fit(one) if isinstance(one, Fit) else _entry_of_run(one, allow_code) for one in what]
    entries = _with_different_names(entries, what) if names is None else _renamed(entries, list(names))
    report = _report(entries, options, DEFAULT_SEED)
    if run_folder is False or (run_folder is None and any(isinstance(one, Fit) for one in what)):
        return Comparison(report, tuple(entries))
    folder = _Place(run_folder or Path("runs") / "comparison", replace).open_for(None)
    folder.open()
    try:
        _write(report, entries, folder.path)
        return Comparison(report, tuple(entries), folder.finish())
    finally:
        folder.leave()


@dataclass(frozen=True)
class _Place:
    """Where a comparison goes, and what becomes of an earlier one there."""

    run_folder: str | Path | Literal[False] | None
    replace: bool = False
    resume: bool = False

    def open_for(self, config: Config | None) -> RunFolder:
        """The folder, not yet opened."""
        if self.run_folder is False:
            raise InputError("the fits of a comparison need a folder", cure="Give run_folder a path")
        default = config.default_run_folder() if config is not None else Path()
        folder = RunFolder(Path(self.run_folder or default).expanduser(), replace=self.replace)
        if self.resume and folder.earlier == folder.target:
            raise InputError("the comparison there is finished", file=folder.target, cure="Make it again with --replace")
        folder.check_target()
        return folder


def _check_scale(scale: str | None) -> None:
    from fitter.study.odds import SCALES

    if scale is not None and scale not in SCALES:
        raise InputError("there is no such scale of odds", value=scale, cure=f"Choose one of {', '.join(SCALES)}")


def _report(entries: list[Entry], options: dict, seed: int) -> dict:
    from fitter.report.facts import json_safe
    from fitter.study.comparison import compare_entries

    hidden = require_same_blinding([e.summary for e in entries])
    report = json_safe(compare_entries(entries, seed=child_seed(np.random.SeedSequence(seed), _STUDY), **options))
    if hidden:
        said = f"Blinded: {', '.join(hidden)} carry the same hidden offset in every fit; only differences between fits mean anything."
        report |= {"blinded": list(hidden), "warnings": [said, *report["warnings"]]}
    return report


# ---------------------------------------------------------------------- variants of a config


def _compare_variants(what: Config | str | Path, options: dict, place: _Place, allow_code: bool, tell: Report) -> Comparison:
    config, _ = _settings(what, {}, allow_code)
    variants = expand(config)
    folder = place.open_for(config)
    samples = samples_of(variants)
    work = (variants, samples, folder.path / "variants", folder.target / "variants")
    for i in range(len(variants)):  # what is wrong with one of them is told before any is fitted
        job, target = _job(i, *work)
        raise_all(input_problems(job.config, job.sample))
        if place.resume and target.earlier is not None:
            job.require_same_run(target.earlier)
    if place.resume:
        _refuse_others(variants, folder.path / "variants")
    given = config.compare.model_dump()
    folder.open(resume=place.resume)
    try:
        runs = _fit_all(work, place.resume, tell)
        entries = [
            _entry(v.name, run.summary, run.posterior, partial(likelihood_of, v.config, sample))
            for v, run, sample in zip(variants, runs, samples, strict=True)
        ]
        report = _report(entries, given | options, config.sampling.seed)
        _write(report, entries, folder.path)
        return Comparison(report, tuple(entries), folder.finish())
    finally:
        folder.leave()


_work: tuple = ()


def _take(*work: Any) -> None:
    """Keep the samples in the worker: with forked processes they are shared, not copied."""
    global _work
    _work = work


def _start_worker(*work: Any) -> None:
    _take(*work)
    end_with_parent()


def _job(i: int, variants: list[Variant], samples: list[Sample], folder: Path, final: Path) -> tuple[_Job, RunFolder]:
    """The fit of one variant, and its folder."""
    variant = variants[i]
    config = variant.config.model_copy(update={"run_folder": _said(final / variant.folder)})
    target = RunFolder(folder / variant.folder)
    return _Job.prepare(config, samples[i], target, False), target


def _refuse_others(variants: list[Variant], folder: Path) -> None:
    """Refuse to go on with a comparison of other variants."""
    ours = {v.folder for v in variants}
    others = sorted(p.name for p in folder.glob("[!.]*") if p.name.removesuffix(".unfinished") not in ours)
    if others:
        problem = f"the interrupted comparison has variants that the config does not have: {', '.join(others)}"
        raise InputError(problem, file=folder, cure="Restore them in the config, or start again with --replace")


def _fit_one(i: int) -> bool:
    """Fit one variant, or take it as it is where it is finished; whether there was something to do."""
    *work, resume, processes = _work
    job, target = _job(i, *work)
    job.processes = processes
    if resume and target.earlier == target.target and job.finished_run() is not None:
        return False
    resume = resume and target.earlier is not None
    target.open(resume=resume)
    try:
        job.run(resume=resume)
    finally:
        target.leave()
    return True


def _said(path: Path) -> str:
    """A path as people would write it: relative to the working directory where it lies below."""
    here = Path.cwd().resolve()
    return path.relative_to(here).as_posix() if path.is_relative_to(here) else str(path)


def _fit_all(work: tuple, resume: bool, tell: Report) -> list:
    """Fit every variant, several at a time; return the runs, read back."""
    import multiprocessing

    variants, _, folder, _ = work
    cores = available_cores()
    workers = min(cores, len(variants))
    work = (*work, resume, max(1, cores // workers))
    said = lambda i, new, done: tell(f"{variants[i].name} {'is' if new else 'was'} done, {done} of {len(variants)}")  # noqa: E731
    if workers == 1:
        _take(*work)
        for i in range(len(variants)):
            said(i, _fit_one(i), i + 1)
    else:
        method = "fork" if "fork" in multiprocessing.get_all_start_methods() else None
        context = multiprocessing.get_context(method)
        with ProcessPoolExecutor(workers, mp_context=context, initializer=_start_worker, initargs=work) as pool:
            # The longest first: a model with many parameters at the end would leave the other cores idle.
            order = sorted(range(len(variants)), key=lambda i: -len(_sampled(variants[i])))
            pending = {pool.submit(_fit_one, i): i for i in order}
            for done, future in enumerate(as_completed(pending), 1):
                said(pending[future], future.result(), done)
    return [read_run(folder / v.folder) for v in variants]


def _sampled(variant: Variant) -> list[str]:
    return [p.name for p in variant.config.cosmology.parameters if not isinstance(variant.config.parameters.get(p.name), int | float)]


def _write(report: dict, entries: list[Entry], folder: Path) -> None:
    from fitter.report.comparison_figures import draw_comparison
    from fitter.report.comparison_table import comparison_csv, comparison_latex, comparison_markdown

    with writing(folder):
        texts = {"md": comparison_markdown, "csv": comparison_csv, "tex": comparison_latex}
        for suffix, make in texts.items():
            write_atomic(folder / f"comparison.{suffix}", make(report))
        with relabelled(hidden_labels(report.get("blinded", ()))):
            draw_comparison(report, {e.name: e.posterior for e in entries}, folder / "figures")
        write_atomic(folder / "comparison.json", json.dumps(report, indent=1, ensure_ascii=False, allow_nan=False) + "\n")


# ---------------------------------------------------------------------- finished runs


def _entry_of_run(path: str | Path, allow_code: bool) -> Entry:
    run = read_run(path)
    name = run.summary["title"] or run.summary["model"]
    return _entry(name, run.summary, run.posterior, lambda: _rebuilt(run, path, allow_code))


def _entry_of_fit(fit: Fit) -> Entry:
    summary = fit.summary()
    return _entry(summary["title"] or summary["model"], summary, fit.chains, lambda: fit.log_posterior)


def _entry(name: str, summary: dict, posterior: Posterior, likelihood: Callable[[], LogPosterior | None]) -> Entry:
    """A fit to compare; of a blinded one the sampled parameters, shifted alike in all, and nothing that knows their place."""
    if summary.get("blinded"):
        return Entry(name, *comparable(summary, posterior))
    return Entry(name, summary, posterior, likelihood())


def _rebuilt(run: Run, path: str | Path, allow_code: bool) -> LogPosterior | None:
    """The log-posterior of a run, where its data can be read again and are what they were."""
    try:
        _, config = load_run(path, allow_code=allow_code)
        sample = Sample.from_config(config.sample, config.folder) if config.sample is not None else None
        if sample is None or input_problems(config, sample):
            return None
        return likelihood_of(config, sample) if sample.sha256 == run.summary["sample"]["sha256"] else None
    except InputError as error:
        _log.info("%s: cannot be evaluated anew: %s", path, error)
        return None


def _renamed(entries: list[Entry], names: list[str]) -> list[Entry]:
    if len(names) != len(entries) or len(set(names)) < len(names):
        raise InputError(f"{len(entries)} runs need as many different names", value=names)
    return [replace(e, name=n) for e, n in zip(entries, names, strict=True)]


def _with_different_names(entries: list[Entry], fits: Sequence[str | Path | Fit]) -> list[Entry]:
    """What all titles begin with is dropped; two runs of one title are told apart by their folders."""
    names = [e.name for e in entries]
    start = os.path.commonprefix(names).rfind(": ") + 2
    names = [n[start:] for n in names] if start > 1 else names
    paths = [Path(one) for one in fits if not isinstance(one, Fit)]
    if len(set(names)) < len(names) and len(paths) < len(names):
        twice = sorted({n for n in names if names.count(n) > 1})
        raise InputError("fits have the same name", value=", ".join(twice), cure="Give each a title, or `names` to the comparison")
    if len(set(names)) < len(names):
        shared = os.path.commonpath([p.resolve().parent for p in paths])
        names = [os.path.relpath(p.resolve(), shared) for p in paths]
    if len(set(names)) < len(names):
        raise InputError("the same run is given twice", value=sorted({n for n in names if names.count(n) > 1}))
    return [replace(e, name=n) for e, n in zip(entries, names, strict=True)]
