"""A finished run handed on: its likelihood as a capsule, its report as a page."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from fitter import __version__
from fitter.api import load_run
from fitter.config.load import raise_all
from fitter.config.write import input_problems
from fitter.config.yaml_file import read_yaml
from fitter.errors import InputError
from fitter.likelihood.capsule import DEFAULT_ORDER, encapsulate
from fitter.report.run_folder import read_run, write_atomic, writing
from fitter.report.summary import group_counts
from fitter.sample.budget import error_budget
from fitter.sample.capsule import Capsule
from fitter.sample.sample import Sample

__all__ = ["capsule_of_sample", "capsules_of_run", "write_page"]


def capsules_of_run(
    run_folder: str | Path, without: Sequence[str] = (), *, each: bool = False, order: int = DEFAULT_ORDER, citation: str = "",
    allow_code: bool = False,
) -> dict[str, Capsule]:  # fmt: skip
    """Compress the likelihood of a run's data.

    Parameters
    ----------
    run_folder : path-like
    without : sequence of str
        Labels of uncertainty terms: for each, one more capsule with that term switched off.
    each : bool
        One more capsule for every term that can be switched off.
    order : int
        Degree of the nodes.
    citation : str
        What whoever uses the capsule should cite.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Returns
    -------
    dict
        File name → capsule; the first is capsule.json, with every term.

    Raises
    ------
    InputError
        No run, data that have changed since or that came as arrays, a free intrinsic scatter, an unknown label.
    """
    run, config = load_run(run_folder, allow_code=allow_code)
    if config.sample is None:
        cure = "In Python, `result.capsule()` of that fit makes one"
        raise InputError("the data of this run came as arrays, the run folder does not have them", file=run.folder, cure=cure)
    sample = Sample.from_config(config.sample, config.folder)
    raise_all(input_problems(config, sample))
    facts: dict[str, Any] = {"title": config.title, "citation": citation}
    scatter = float(run.summary["fixed"].get("intrinsic_scatter", 0.0))
    found = {"capsule.json": capsule_of_sample(sample, order=order, scatter=scatter, **facts)}
    for label in dict.fromkeys([*without, *(_removable(sample) if each else ())]):
        less = capsule_of_sample(sample.without(label), order=order, scatter=scatter, without=(label,), **facts)
        found[f"capsule_without_{_file_name(label)}.json"] = less
    return found


def capsule_of_sample(
    sample: Sample, *, order: int = DEFAULT_ORDER, scatter: float = 0.0, title: str = "", citation: str = "", without: tuple[str, ...] = ()
) -> Capsule:
    """Compress a sample, with a description of what is in it."""
    terms = [part.facts() for part in error_budget(sample)]
    words = f"The likelihood of {title or 'a supernova sample'}, compressed with mufitter {__version__}. Cite the authors of the data."
    facts = {
        "title": title,
        "citation": citation or words,
        "made_by": f"mufitter {__version__}",
        "without": without,
        "terms": terms,
        "groups": group_counts(sample),
        "sources": {Path(path).name: sha for path, sha in sample.sources.items()},
    }
    return encapsulate(sample, order=order, scatter=scatter, facts=facts)


def _removable(sample: Sample) -> list[str]:
    """Labels of the terms without which the covariance is still one."""
    labels = []
    for label in sample.labels if len(sample.labels) > 1 else ():
        try:
            _ = sample.without(label).noise.log_det
        except InputError:
            continue
        labels.append(label)
    return labels


def _file_name(label: str) -> str:
    return "".join(c if c.isalnum() or c in "-_" else "_" for c in label)


def write_page(run_folder: str | Path) -> Path:
    """Write report.html of a finished run again, from its folder alone.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        No run, or its files are damaged.
    """
    from fitter.report.facts import relabelled
    from fitter.report.figures.draw import Drawable, drawings
    from fitter.report.figures.style import styled
    from fitter.report.page import PAGE, page_text, picture_of
    from fitter.report.paper import settings_of

    run = read_run(run_folder)
    if run.summary.get("blinded"):
        raise InputError("the central values of this run are hidden; its page is the one that the fit wrote", file=run.folder)
    how, labels = settings_of(read_yaml(run.config_file).data)
    with relabelled(labels), styled(None):
        found = drawings(Drawable(run.posterior, run.folder), how.only, how, strict=False)
        pictures = {one.name: picture_of(one.make(how.width), one.caption) for one in found}
        text = page_text(run.summary, run.config_file.read_text(encoding="utf-8"), pictures)
    with writing(run.folder):
        write_atomic(run.folder / PAGE, text)
    return run.folder / PAGE
