"""What a config would fit, and everything that is wrong with it, found without fitting."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from fitter.config.expand import Variant, expand_as_far_as_possible
from fitter.config.figures import figure_problems
from fitter.config.load import files_at_a_glance, mended_config, placing, validate
from fitter.config.parameters import FLAT
from fitter.config.planned import with_stand_in
from fitter.config.settings import Config
from fitter.config.write import input_problems
from fitter.config.yaml_file import read_yaml
from fitter.errors import InputError
from fitter.report.blinding import hidden_names
from fitter.sample.advice import about_data
from fitter.sample.assembly import Problems
from fitter.sample.sample import Sample

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["Check", "check", "likelihood_of", "samples_of"]


@dataclass(frozen=True)
class Check:
    """What a config would fit, and everything that is wrong with it.

    Parameters
    ----------
    problems : tuple of InputError
    config : Config or None
    sample : Sample or None
    log_posterior : LogPosterior or None
        Each None where the input does not allow to make it.
    planned : bool
        Whether there are no data yet: a survey that can be rehearsed, but not fitted.
    """

    problems: tuple[InputError, ...]
    config: Config | None = None
    sample: Sample | None = None
    log_posterior: LogPosterior | None = None
    planned: bool = False

    @property
    def ok(self) -> bool:
        """Whether the fit can be made."""
        return not self.problems

    def __str__(self) -> str:
        from fitter.report.check_text import check_text

        if self.problems:
            return "\n".join(map(str, self.problems))
        return check_text(self.config, self.sample, self.log_posterior, planned=self.planned)


def check(path: str | Path, *, allow_code: bool = False) -> Check:
    """Read everything that a config names and fit nothing.

    Parameters
    ----------
    path : path-like
        The config file.
    allow_code : bool
        Whether the file of a model of one's own may be run.

    Returns
    -------
    Check
        Problems of the config, of the sample's files and of every variant together.
    """
    problems, folder = Problems(), Path(path).parent
    document = None
    with problems.collect():
        document = read_yaml(path)
    if document is None:
        return Check(tuple(problems.found))
    stand_in = with_stand_in(document)
    document = stand_in or document
    config, settings, wrong = validate(document, folder, allow_code=allow_code)
    problems.found += wrong
    sample = None
    if settings is None:
        problems.found += files_at_a_glance(document, folder)
    else:
        with problems.collect(), placing(document):
            sample = Sample.from_config(settings, folder)
    if stand_in is not None and sample is not None:
        sample = replace(sample, warnings=tuple(w for w in sample.warnings if w not in about_data(sample)))
    _check_variants(config or mended_config(document, folder, allow_code=allow_code), sample, problems)
    log_posterior = _log_posterior(config, sample, problems) if config is not None and sample is not None and not problems.found else None
    found = tuple({str(p): p for p in problems.found}.values())
    return Check(found, config, sample, log_posterior, planned=stand_in is not None)


def _log_posterior(config: Config, sample: Sample, problems: Problems) -> LogPosterior | None:
    """Build the likelihood and collect what only it can tell to be wrong."""
    with problems.collect(), placing(config.document):
        problems.found += input_problems(config, sample)
        log_posterior = likelihood_of(config, sample)
        config.sampling.check_dimension(len(log_posterior.names))
        problems.found += figure_problems(config, log_posterior)
        hidden_names(config.blind, log_posterior)
        return log_posterior
    return None


def _check_variants(config: Config | None, sample: Sample | None, problems: Problems) -> None:
    """Read what each variant reads, and build its likelihood."""
    if config is None or not config.variants:
        return
    variants, wrong = expand_as_far_as_possible(config)
    problems.found += wrong
    read = {} if sample is None or config.sample is None else {config.sample.model_dump_json(by_alias=True): sample}
    for variant, reduced in zip(variants, _read(variants, read, problems), strict=True):
        if reduced is not None:
            _log_posterior(variant.config, reduced, problems)


def likelihood_of(config: Config, sample: Sample) -> LogPosterior:
    """Build the posterior density of a config and its data."""
    from fitter.likelihood.posterior import LogPosterior

    given = {k: v for k, v in config.complete_parameters(sample).items() if v != FLAT}
    return LogPosterior.build(sample, config.cosmology, given, radiation=config.radiation)


def samples_of(variants: Sequence[Variant]) -> list[Sample]:
    """Return the sample of each variant; what several share is read once.

    Raises
    ------
    InputError, InputErrors
        What is wrong with any of them.
    """
    problems = Problems()
    samples = _read(variants, {}, problems)
    problems.stop_if_any()
    return [sample for sample in samples if sample is not None]


def _read(variants: Sequence[Variant], read: dict[str, Sample], problems: Problems) -> list[Sample | None]:
    """The sample of each variant, None for those that have problems; `read` holds what is at hand by `Variant.data_key`."""
    found: dict[tuple, Sample] = {}
    for variant in variants:
        key = variant.data_key
        with problems.collect(), placing(variant.config.document):
            if key not in read:
                read[key] = Sample.from_config(variant.complete_sample, variant.config.folder)
            if (key, variant.without) not in found:
                found[key, variant.without] = _reduced(read[key], variant)
    return [found.get((v.data_key, v.without)) for v in variants]


def _reduced(sample: Sample, variant: Variant) -> Sample:
    """The sample without some of its uncertainty terms, and without the record of files that only these read."""
    if not variant.without:
        return sample
    settings: Any = variant.config.sample
    files = {settings.table, *(f for term in settings.uncertainty for f in term.files())}
    return replace(sample.without(variant.without), sources={k: v for k, v in sample.sources.items() if k in files})
