"""What every fit of a study has in common: sample, model, priors. Small enough to send to a worker, complete enough to fit there."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from fitter.cosmology import Model
from fitter.likelihood.posterior import LogPosterior
from fitter.sample.sample import Sample

__all__ = ["FitSetup"]


@dataclass(frozen=True)
class FitSetup:
    """One fit, not yet built.

    Parameters
    ----------
    sample : Sample
    model : str or Model
    parameters : dict
        Priors as a config writes them, and fixed numbers.
    radiation : bool
    hidden : dict
        Offsets added to every reported location of these parameters; what a blinded study stores.
    """

    sample: Sample
    model: Model | str
    parameters: dict = field(default_factory=dict)
    radiation: bool = False
    hidden: dict[str, float] = field(default_factory=dict)

    def posterior(self) -> LogPosterior:
        """Build the posterior density."""
        return LogPosterior.build(self.sample, self.model, self.parameters, radiation=self.radiation)

    def with_sample(self, sample: Sample) -> FitSetup:
        """Return the same fit of another sample."""
        return replace(self, sample=sample)

    def with_prior(self, name: str, prior: dict) -> FitSetup:
        """Return the same fit with another prior of one parameter."""
        return replace(self, parameters={**self.parameters, name: prior})
