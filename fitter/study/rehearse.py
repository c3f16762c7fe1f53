"""Would this fit get the right answer? Mock samples drawn from a model and a covariance, each fitted with the same settings.

With truths drawn from the prior the rank of each truth in its posterior is uniform if, and only if, sampler and likelihood are right
(simulation-based calibration [1]_). With one fixed truth the bias and the coverage are those of a frequentist.

References
----------
.. [1] Talts, S. et al. 2018, arXiv:1804.06788; Cook, S. R., Gelman, A. & Rubin, D. B. 2006, J. Comput. Graph. Stat. 15, 675.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.inference.optimum import find_optimum
from fitter.inference.seeds import child_seed
from fitter.inference.settings import SamplingSettings
from fitter.likelihood.posterior import LogPosterior
from fitter.study.calibration import calibrate
from fitter.study.refit import LEVELS, Refit, WeightedDraws, refit
from fitter.study.setup import FitSetup
from fitter.study.tasks import Tasks, call, run_tasks

if TYPE_CHECKING:
    pass

__all__ = ["METHODS", "SCHEMA", "Rehearsal", "rehearse"]

SCHEMA = "mufitter rehearsal 1"
METHODS = ("quick", "sampler")
_BATCH = 20  # mocks in one task, on one factorisation
_BEST, _TASKS = 0, 1
_TRIES = 1000


@dataclass(frozen=True)
class Rehearsal:
    """What is rehearsed.

    Parameters
    ----------
    fit : FitSetup
        The fit, with its covariance and priors.
    source : FitSetup
        What mocks are drawn from; the same as `fit` unless that is to be put in doubt.
    truth : dict or None
        The true value of every sampled parameter of `source`; None draws them from its priors, anew for each mock.
    mocks : int
    method : {"quick", "sampler"}
        Without a chain, or with the sampler that a fit would use.
    sampling : SamplingSettings, optional
        For the latter.
    """

    fit: FitSetup
    source: FitSetup
    truth: dict[str, float] | None
    mocks: int
    method: str = "quick"
    sampling: SamplingSettings | None = None


def best_truth(setup: FitSetup, seed: np.random.SeedSequence) -> dict[str, float]:
    """Return the best fit of the data as truth."""
    optimum = call(lambda *_: find_optimum(setup.posterior(), child_seed(seed, _BEST)), None, None, None)
    return {name: optimum.values[name] for name in setup.posterior().names}


def rehearse(rehearsal: Rehearsal, *, seed: np.random.SeedSequence, **running: Any) -> dict:
    """Draw and fit mocks.

    Parameters
    ----------
    rehearsal : Rehearsal
    seed : SeedSequence
        Each mock's own descends from it by the number of the mock.
    **running
        Of `run_tasks`.

    Returns
    -------
    dict
        ``schema``, ``model``, ``source_model``, ``n``, ``mocks``, ``truth``, ``method``, ``fits`` (one a mock), and what `calibrate` makes
        of them.

    Raises
    ------
    InputError
        The truth is no possible model, or mocks and fit have different supernovae.
    """
    source = rehearsal.source.posterior()
    _check(rehearsal, source)
    starts = range(0, rehearsal.mocks, _BATCH)
    arguments = {f"mocks from {i}": (i, min(i + _BATCH, rehearsal.mocks)) for i in starts}
    seed = child_seed(seed, _TASKS)
    done = run_tasks(Tasks(_fit_batch, (rehearsal, seed), arguments, seed), **running)
    fits = [fit for batch in done.values() for fit in batch]
    posterior = rehearsal.fit.posterior()
    result = {
        "schema": SCHEMA,
        "model": posterior.model.name,
        "source_model": source.model.name,
        "same_covariance": rehearsal.source is rehearsal.fit,
        "n": rehearsal.fit.sample.n,
        "mocks": rehearsal.mocks,
        "truth": rehearsal.truth or "prior",
        "method": rehearsal.method,
        "fits": fits,
    }
    return result | calibrate(fits, posterior.names, posterior.n_data - posterior.n_parameters)


def _check(rehearsal: Rehearsal, source: LogPosterior) -> None:
    fit, drawn = rehearsal.fit.sample, rehearsal.source.sample
    if fit.n != drawn.n or not np.array_equal(fit.redshift, drawn.redshift):
        raise InputError(
            f"mocks are drawn for {drawn.n} supernovae and fitted to {fit.n}: they must be the same ones, in the same order",
            cure="Let both configs read the same table with the same cuts",
        )
    if rehearsal.truth is None:
        return
    missing = [name for name in source.names if name not in rehearsal.truth]
    unknown = [name for name in rehearsal.truth if name not in source.names]
    if missing or unknown:
        wrong = f"no value for {', '.join(missing)}" if missing else f"{unknown[0]} is not sampled"
        raise InputError(f"the truth does not fit the model: {wrong}", value=rehearsal.truth, cure=f"Give {', '.join(source.names)}")
    theta = np.array([[rehearsal.truth[name] for name in source.names]])
    if not np.isfinite(source(theta)[0]):
        raise InputError("the truth is outside the prior, or no possible model", value=rehearsal.truth, cure="Choose another")


def _fit_batch(shared: tuple[Rehearsal, np.random.SeedSequence], argument: tuple[int, int], _: object) -> list[dict]:
    """Draw and fit mocks number start … stop − 1."""
    rehearsal, seed = shared
    source, fit = rehearsal.source.posterior(), rehearsal.fit.posterior()
    numbers = range(*argument)
    drawn = [_draw(source, rehearsal.truth, np.random.default_rng(child_seed(seed, i, 0))) for i in numbers]
    posteriors = fit.with_data(np.array([data for _, data in drawn]))
    return [
        _fit_one(rehearsal, posterior, dict(zip(source.names, theta.tolist(), strict=True)), child_seed(seed, i, 1)) | {"mock": i}
        for i, (theta, _), posterior in zip(numbers, drawn, posteriors, strict=True)
    ]


def _draw(source: LogPosterior, truth: dict[str, float] | None, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """One truth and its data; models that cannot be are not drawn, as they are not in the posterior either."""
    if truth is not None:
        theta = np.array([truth[name] for name in source.names])
        return theta, source.simulate(theta, rng)[0]
    for _ in range(_TRIES):
        theta = np.array([float(prior.sample(rng)) for prior in source.priors])
        if np.isfinite(source(theta)[0]):
            return theta, source.simulate(theta, rng)[0]
    raise InputError(f"not one of {_TRIES} draws from the priors is a possible model", cure="Narrow them, or give --truth")


def _fit_one(rehearsal: Rehearsal, posterior: LogPosterior, truth: dict[str, float], seed: np.random.SeedSequence) -> dict:
    fitted = (
        _sampled(posterior, rehearsal.sampling or SamplingSettings(), seed) if rehearsal.method == "sampler" else refit(posterior, seed)
    )
    marginals = fitted.marginals
    parameters = {}
    for name in posterior.names:
        facts = {"mean": marginals.mean(name), "sd": marginals.sd(name)}
        facts |= dict(zip(LEVELS, marginals.quantile(name, list(LEVELS.values())).tolist(), strict=True))
        if name in truth:
            facts |= {"truth": truth[name], "rank": float(np.clip(marginals.cdf(name, truth[name])[0], 0.0, 1.0))}
        parameters[name] = facts
    return {"parameters": parameters, "chi2": float(fitted.optimum.chi2), "error": fitted.error}


def _sampled(posterior: LogPosterior, settings: SamplingSettings, seed: np.random.SeedSequence) -> Refit:
    """The fit as `mufitter fit` makes it."""
    from fitter.inference.sampling import sample_posterior

    optimum = find_optimum(posterior, child_seed(seed, 0))
    chains = sample_posterior(posterior, settings, optimum, seed=child_seed(seed, 1), processes=1)
    theta = chains.chain.reshape(-1, len(posterior.names))
    ess = min(chains.sampling["ess_bulk"].values())
    return Refit(optimum, WeightedDraws(posterior.names, theta, np.full(len(theta), 1.0 / len(theta))), float(ess**-0.5))
