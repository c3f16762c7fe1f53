"""Settings of the sampler: what the ``sampling:`` section of a config may hold."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field, field_validator

from fitter.errors import InputError

__all__ = ["DEFAULT_SEED", "SamplingSettings"]

#: The seed of every fit whose config names none: a fixed number, so that a run can be repeated.
DEFAULT_SEED = 20261201


class SamplingSettings(BaseModel):
    """How the posterior is sampled.

    Parameters
    ----------
    replicas : int
        Independent ensembles. Only they can show that a chain has not converged: the walkers of
        one ensemble move by each other's positions.
    walkers : int
        Walkers in each ensemble, even, and more than twice the number of sampled parameters.
    target_ess : int
        Effective sample size that every sampled parameter must reach.
    max_steps : int
        Longest chain of a replica, burn-in included. A chain that stops here is marked unconverged
        unless it passed every check.
    seed : int
        The one number that all randomness of a fit comes from.
    move : {"mixture", "stretch"}
        ``mixture`` proposes from Student-t mixtures fitted beforehand and to half of the ensemble (`fitter.inference.moves`);
        ``stretch`` is emcee's default, ten times slower or more on curved posteriors.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    replicas: int = Field(default=4, ge=1, le=256, description="Independent ensembles of walkers.")
    walkers: int = Field(default=128, ge=4, le=100_000, description="Walkers in each ensemble, an even number.")
    target_ess: int = Field(default=10_000, ge=1, description="Effective sample size that every sampled parameter must reach.")
    max_steps: int = Field(default=20_000, ge=20, description="Longest chain of a replica, burn-in included.")
    seed: int = Field(default=DEFAULT_SEED, ge=0, description="The one number that all randomness of a fit comes from.")
    move: Literal["mixture", "stretch"] = Field(
        default="mixture", description="How walkers move: `mixture` suits curved posteriors, `stretch` is the common ensemble move."
    )

    @field_validator("walkers")
    @classmethod
    def _even(cls, value: int) -> int:
        if value % 2:
            raise ValueError(f"walkers must be even (half of them move at a time): use {value + 1}")
        return value

    def check_dimension(self, ndim: int) -> None:
        """Refuse an ensemble that cannot span the parameter space.

        Raises
        ------
        InputError
            If there is nothing to sample, or not more than ``2 * ndim`` walkers.
        """
        if ndim < 1:
            raise InputError("no parameter is left to sample: all are fixed", key="parameters", cure="Give at least one of them a prior")
        if self.walkers <= 2 * ndim:
            raise InputError(
                f"{ndim} sampled parameters need more than {2 * ndim} walkers",
                key="sampling.walkers",
                value=self.walkers,
                cure=f"Use at least {max(32, 4 * ndim)}; 128 is the default",
            )
