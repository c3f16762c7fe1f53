"""Moves for curved, cut and two-peaked posteriors: propose from mixtures that look like them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from emcee.moves import MHMove, RedBlueMove, StretchMove
from emcee.state import State

from fitter.array_types import BoolArray, FloatArray
from fitter.inference.mixture import fit_mixture

if TYPE_CHECKING:
    from emcee.model import Model as EmceeModel

    from fitter.inference.mixture import StudentMixture


__all__ = ["DifferenceMove", "MixtureMove", "PilotMove", "ensemble_moves"]


class MixtureMove(RedBlueMove):
    """Independent proposals from a Student-t mixture fitted to the complementary half of the ensemble.

    Half of the walkers are frozen, a mixture q is fitted to them, and every walker x of the other half is
    offered an independent draw x' of q. It is accepted with probability min(1, p(x') q(x) / (p(x) q(x'))): as q does not
    depend on the half that moves, this leaves p invariant for any q that is positive wherever p is. Then the halves
    change places.

    Parameters
    ----------
    components : int, optional
        Components of the mixture; by default chosen from the number of points in the half and the dimension.
    iterations : int
        EM steps of each fit. None by default: on supernova posteriors they cost more time than the better fit saves.

    Notes
    -----
    The move has no state of its own: a chain can be continued from positions and the random state alone.
    """

    nu = 5.0
    broad = 0.15

    def __init__(self, components: int | None = None, iterations: int = 0) -> None:
        super().__init__(nsplits=2, randomize_split=True)
        self.components, self.iterations = components, iterations

    def get_proposal(
        self, sample: FloatArray, complement: list[FloatArray], random: np.random.RandomState
    ) -> tuple[FloatArray, FloatArray]:
        """Return proposals, (M, d), for the walkers `sample`, (M, d), and ln[q(old) / q(new)], (M,)."""
        points = np.concatenate(complement, axis=0)
        k = self.components or _components(*points.shape)
        mixture = fit_mixture(points, k, nu=self.nu, iterations=self.iterations, broad=self.broad)
        proposal = mixture.draw(random, len(sample))
        density = mixture.log_density(np.concatenate([sample, proposal]))
        return proposal, density[: len(sample)] - density[len(sample) :]

    def propose(self, model: EmceeModel, state: Any) -> tuple[Any, BoolArray]:
        """Update both halves in turn; as the parent's, but the acceptance is decided for all walkers at once."""
        half = np.arange(len(state.coords)) % self.nsplits
        model.random.shuffle(half)
        accepted = np.zeros(len(half), dtype=bool)
        for split in range(self.nsplits):
            moving = half == split
            proposal, factors = self.get_proposal(state.coords[moving], [state.coords[~moving]], model.random)
            log_prob, blobs = model.compute_log_prob_fn(proposal)
            change = factors + log_prob - state.log_prob[moving]
            accepted[moving] = change > np.log(model.random.uniform(size=len(change)))
            state = self.update(state, State(proposal, log_prob=log_prob, blobs=blobs), accepted, moving)
        return state, accepted


def _components(points: int, ndim: int) -> int:
    """As many components as leave each just enough points for a covariance, at most eight: the measured optimum is flat."""
    return int(np.clip(2 * points // (5 * (ndim + 1)), 1, 8))


class PilotMove(MHMove):
    """Independent proposals from a mixture that was fitted before the chain began and never changes.

    Half of one ensemble is too few points to know a tail that holds half a per cent of the posterior: a walker that gets
    there stays for hundreds of steps. The pilot (`fitter.inference.pilot`) has seen the tails.

    Parameters
    ----------
    mixture : StudentMixture
    """

    def __init__(self, mixture: StudentMixture) -> None:
        super().__init__(self._propose)
        self.mixture = mixture

    def _propose(self, positions: FloatArray, random: np.random.RandomState) -> tuple[FloatArray, FloatArray]:
        """Return proposals, (W, d), and ln[q(old) / q(new)], (W,)."""
        proposal = self.mixture.draw(random, len(positions))
        density = self.mixture.log_density(np.concatenate([positions, proposal]))
        return proposal, density[: len(positions)] - density[len(positions) :]


class DifferenceMove(RedBlueMove):
    """A step along the difference of two walkers of the other half, of a length drawn over three decades.

    Differential evolution (ter Braak 2006, Statistics and Computing 16, 239) with short steps as well: they free walkers from
    thin tails, where a step as long as the bulk is wide never stays inside. The length does not depend on the walker, so the proposal is
    symmetric.
    """

    shortest = 1e-3

    def get_proposal(
        self, sample: FloatArray, complement: list[FloatArray], random: np.random.RandomState
    ) -> tuple[FloatArray, FloatArray]:
        """Return proposals, (M, d), for the walkers `sample`, (M, d), and zeros, (M,)."""
        points = np.concatenate(complement, axis=0)
        size, n = len(sample), len(points)
        first = random.randint(n, size=size)
        second = (first + random.randint(1, n, size=size)) % n
        length = 2.38 / np.sqrt(2 * sample.shape[1]) * np.exp(random.uniform(np.log(self.shortest), 0, size=(size, 1)))
        return sample + length * (points[first] - points[second]), np.zeros(size)


def ensemble_moves(name: str, pilot: StudentMixture | None = None) -> list[tuple[DifferenceMove | MixtureMove | PilotMove, float]]:
    """Return the moves of one step, in the form that emcee's sampler takes.

    Parameters
    ----------
    name : {"mixture", "stretch"}
        ``mixture`` keeps a share of difference moves, which free walkers where the mixtures are a bad fit.
    pilot : StudentMixture, optional
        For ``mixture``: a density fitted to the posterior beforehand.
    """
    if name == "stretch":
        return [(StretchMove(), 1.0)]
    if pilot is None:
        return [(MixtureMove(), 0.8), (DifferenceMove(), 0.2)]
    return [(PilotMove(pilot), 0.6), (MixtureMove(), 0.2), (DifferenceMove(), 0.2)]
