"""One finished fit, as the studies look at it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray

if TYPE_CHECKING:
    from collections.abc import Iterable

    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.likelihood.priors import Prior

__all__ = ["Density", "Entry", "batch_error"]

_BATCHES = 16  # in each replica


@dataclass(frozen=True)
class Entry:
    """A fit under the name it has in a comparison.

    Parameters
    ----------
    name : str
    summary : dict
        The contents of its summary.json.
    posterior : Posterior
    log_posterior : LogPosterior or None
        None where the data or the model's code are not at hand: nothing can be evaluated anew then.
    """

    name: str
    summary: dict
    posterior: Posterior
    log_posterior: LogPosterior | None = None

    @property
    def data(self) -> str:
        """SHA-256 of what was fitted."""
        return self.summary["sample"]["sha256"]

    @property
    def log_evidence(self) -> tuple[float, float] | None:
        """ln Z and its error."""
        information = self.summary["information"]
        if information.get("log_evidence") is None:
            return None
        return information["log_evidence"], information.get("log_evidence_error") or 0.0

    @property
    def deviance(self) -> float:
        """−2 ln L at the best fit, on the scale where it is χ² for a fixed covariance."""
        return self.summary["information"]["aic"] - 2 * self.summary["information"]["k"]

    @property
    def samples(self) -> FloatArray:
        """(R·S·W, n) draws of the sampled parameters."""
        return self.posterior.chain.reshape(-1, self.posterior.chain.shape[-1])


class Density:
    """The likelihood of a fit under other priors; what quadrature needs of a log-posterior, and no more.

    Parameters
    ----------
    log_posterior : LogPosterior
    priors : tuple of Prior
        In the order of its names.
    """

    def __init__(self, log_posterior: LogPosterior, priors: Iterable[Prior]) -> None:
        self.names, self.priors, self._of = log_posterior.names, tuple(priors), log_posterior

    @property
    def ndim(self) -> int:
        """Number of parameters."""
        return len(self.names)

    def log_prior(self, theta: FloatArray) -> FloatArray:
        """ln prior density, (W,)."""
        return np.sum([prior.log_density(theta[:, i]) for i, prior in enumerate(self.priors)], axis=0)

    def __call__(self, theta: FloatArray) -> FloatArray:
        """ln of prior times likelihood, (W,)."""
        theta = np.atleast_2d(np.asarray(theta, float))
        value = self.log_prior(theta)
        inside = value > -np.inf
        value[inside] += self._of.log_likelihood(theta[inside])
        return value


def batch_error(values: FloatArray) -> tuple[float, float]:
    """Mean of correlated values and its standard error, from batches of steps.

    Parameters
    ----------
    values : (R, S, W) array

    Returns
    -------
    mean, error : float
    """
    batches = min(_BATCHES, values.shape[1])
    means = np.concatenate([block.mean(axis=(1, 2)) for block in np.array_split(values, batches, axis=1)])
    return float(values.mean()), float(means.std(ddof=1) / np.sqrt(len(means))) if len(means) > 1 else float("inf")
