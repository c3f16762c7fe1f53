"""Detailed balance: an ensemble of exact draws stays one, and a chain from elsewhere finds the exact moments."""

import numpy as np
import pytest
from emcee import EnsembleSampler
from emcee.state import State

from fitter.inference.diagnostics import mcse_mean
from fitter.inference.mixture import fit_mixture
from fitter.inference.moves import DifferenceMove, MixtureMove, PilotMove, ensemble_moves


def exact_draws(name, n, rng):
    if name == "gaussian":
        return rng.multivariate_normal(np.zeros(2), [[1, 0.9], [0.9, 1]], size=n)
    if name == "banana":
        x = rng.standard_normal(n)
        return np.column_stack([x, x**2 + 0.5 * rng.standard_normal(n)])
    if name == "two_modes":
        first = rng.random(n)[:, None] < 2 / 3
        z = rng.standard_normal((n, 2))
        return np.where(first, 3 + z, -3 + 0.5 * z)
    rate, top = np.array([2, 1]), np.array([1, 0.5])
    return -np.log1p(rng.random((n, 2)) * np.expm1(-rate * top)) / rate


#: Exact mean of x0, mean of x1, and P(x1 < 0.2).
EXACT = {
    "gaussian": (0.0, 0.0, 0.5792597),
    "banana": (0.0, 1.0, None),
    "two_modes": (1.0, 1.0, None),
    "hard_edges": (0.5 - 1 / np.expm1(2), 1 - 0.5 / np.expm1(0.5), -np.expm1(-0.2) / -np.expm1(-0.5)),
}


def target_of(doubles, name):
    return doubles.gaussian(2, 0.9) if name == "gaussian" else getattr(doubles, name)()


def run(target, start, moves, steps, seed):
    sampler = EnsembleSampler(*start.shape, target, vectorize=True, moves=moves)
    sampler.run_mcmc(State(start, random_state=np.random.RandomState(seed).get_state()), steps)
    return sampler


def chain_of(doubles, name, moves, walkers=32, steps=3000, seed=5):
    start = exact_draws(name, walkers, np.random.default_rng(seed))
    sampler = run(target_of(doubles, name), start, moves, steps, seed)
    return sampler.get_chain()[None], sampler


def pulls(chain, name):
    """Differences from the exact answers in Monte Carlo standard errors."""
    x, y = chain[..., 0], chain[..., 1]
    mean_x, mean_y, below = EXACT[name]
    series = [(x, mean_x), (y, mean_y)] + ([((y < 0.2).astype(float), below)] if below is not None else [])
    return np.array([(s.mean() - exact) / mcse_mean(s) for s, exact in series])


@pytest.mark.parametrize("name", EXACT)
def test_chain_has_the_exact_moments(doubles, name):
    # A small ensemble: a fit of 16 points, where a dependence on the moving half would show.
    chain, sampler = chain_of(doubles, name, MixtureMove())
    assert 0.1 < sampler.acceptance_fraction.mean() < 0.95
    assert np.abs(pulls(chain, name)).max() < 4.5


@pytest.mark.parametrize("name", EXACT)
def test_exact_draws_stay_exact(doubles, name):
    n = 4000
    rng = np.random.default_rng(11)
    after = run(target_of(doubles, name), exact_draws(name, n, rng), MixtureMove(), 15, 3).get_chain()[-1]
    from scipy.stats import ks_2samp

    reference = exact_draws(name, 20 * n, rng)
    for i in range(2):
        assert ks_2samp(after[:, i], reference[:, i]).pvalue > 1e-4


@pytest.mark.parametrize("iterations", [0, 3])
def test_em_iterations_keep_the_target(doubles, iterations):
    chain, _ = chain_of(doubles, "banana", MixtureMove(components=3, iterations=iterations), steps=2000)
    assert np.abs(pulls(chain, "banana")).max() < 4.5


def rough_pilot(name):
    """A mixture fitted to few draws: not the target, nor far from it."""
    return fit_mixture(exact_draws(name, 60, np.random.default_rng(3)), 2, iterations=2, broad=0.3)


@pytest.mark.parametrize("name", EXACT)
def test_pilot_move_keeps_the_target(doubles, name):
    chain, sampler = chain_of(doubles, name, PilotMove(rough_pilot(name)))
    assert 0.1 < sampler.acceptance_fraction.mean() < 0.95
    assert np.abs(pulls(chain, name)).max() < 4.5


@pytest.mark.parametrize("name", ["gaussian", "hard_edges"])
def test_difference_move_keeps_the_target(doubles, name):
    chain, _ = chain_of(doubles, name, DifferenceMove(), steps=6000)
    assert np.abs(pulls(chain, name)).max() < 4.5


@pytest.mark.parametrize("name", EXACT)
def test_default_moves_keep_the_target(doubles, name):
    chain, _ = chain_of(doubles, name, ensemble_moves("mixture", rough_pilot(name)), walkers=64, steps=2000)
    assert np.abs(pulls(chain, name)).max() < 4.5


class NoHastings(MixtureMove):
    """Forgets the factor."""

    def get_proposal(self, sample, complement, random):
        proposal, factors = super().get_proposal(sample, complement, random)
        return proposal, 0 * factors


class OwnHalf(MixtureMove):
    """Fits to the half that moves: q depends on the walkers it is judged for."""

    def get_proposal(self, sample, complement, random):
        return super().get_proposal(sample, [sample], random)


class PilotWithoutHastings(PilotMove):
    """Forgets the factor."""

    def __init__(self):
        super().__init__(rough_pilot("gaussian"))
        self.get_proposal = self._proposal_only

    def _proposal_only(self, positions, random):
        proposal, factors = self._propose(positions, random)
        return proposal, 0 * factors


@pytest.mark.parametrize("wrong", [NoHastings, OwnHalf, PilotWithoutHastings])
def test_wrong_moves_are_caught(doubles, wrong):
    # The spread suffers most: a proposal of too heavy tails is taken as it is.
    chain, _ = chain_of(doubles, "gaussian", wrong(), walkers=16)
    square = chain[..., 0] ** 2
    assert abs(square.mean() - 1) > 6 * mcse_mean(square)


def test_right_move_passes_the_same_check(doubles):
    chain, _ = chain_of(doubles, "gaussian", MixtureMove(), walkers=16)
    square = chain[..., 0] ** 2
    assert abs(square.mean() - 1) < 4.5 * mcse_mean(square)


def test_hastings_factor_is_the_ratio_of_densities(doubles):
    rng = np.random.default_rng(0)
    moving, frozen = rng.standard_normal((2, 20, 2))
    proposal, factors = MixtureMove(components=2).get_proposal(moving, [frozen], np.random.RandomState(1))
    q = fit_mixture(frozen, 2, iterations=0, broad=MixtureMove.broad)
    np.testing.assert_allclose(factors, q.log_density(moving) - q.log_density(proposal), rtol=1e-12)
