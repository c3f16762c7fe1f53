"""Samplers with a fault, whole fits of them: every convergence check is passed, and the cross-check says no."""

import numpy as np
import pytest

from fitter import Sample, fit
from fitter.inference import moves
from fitter.inference.moves import MixtureMove, PilotMove
from fitter.inference.proof import cross_check
from fitter.inference.quadrature import integrate


@pytest.fixture(scope="module")
def settings():
    rng = np.random.default_rng(21)
    z = np.sort(rng.uniform(0.02, 1.2, 200))
    mu = 5 * np.log10(z * (1 + 0.775 * z - 0.1 * z**2)) + 43.16 + 0.12 * rng.standard_normal(200)
    sample = Sample.from_arrays(z, mu, sigma=0.12)
    return {"sample": sample, "model": "flat_wcdm", "sampling": {"target_ess": 4000}, "run_folder": False}


class NoHastings(MixtureMove):
    """Forgets that its proposals are not symmetric."""

    def get_proposal(self, sample, complement, random):
        proposal, factors = super().get_proposal(sample, complement, random)
        return proposal, 0 * factors


class HalfHastings(PilotMove):
    """Takes the factor's square root."""

    def __init__(self, pilot):
        super().__init__(pilot)
        right = self.get_proposal
        self.get_proposal = lambda positions, random: (lambda p, f: (p, 0.5 * f))(*right(positions, random))


class SkipsMoves(MixtureMove):
    """Leaves out three in ten of the steps that go downhill."""

    def propose(self, model, state):
        before, height = state.coords.copy(), state.log_prob.copy()
        state, accepted = super().propose(model, state)
        skipped = (state.log_prob < height) & (model.random.rand(len(height)) < 0.3)
        state.coords[skipped], state.log_prob[skipped] = before[skipped], height[skipped]
        return state, accepted & ~skipped


FAULTS = {
    "no Hastings factor": lambda pilot: [(PilotMove(pilot), 0.5), (NoHastings(), 0.5)],
    "half a Hastings factor": lambda pilot: [(HalfHastings(pilot), 1.0)],
    "skips moves": lambda pilot: [(SkipsMoves(), 1.0)],
}


@pytest.mark.parametrize("fault", FAULTS)
def test_a_faulty_move_is_caught_by_the_cross_check(settings, fault, monkeypatch):
    monkeypatch.setattr(moves, "ensemble_moves", lambda move, pilot=None: FAULTS[fault](pilot))
    result = fit(**settings)
    check = result.summary()["cross_check"]
    assert result.converged, "the fault would have been seen without a cross-check"
    assert check["agrees"] is False and check["max_cdf_difference"] > check["tolerance"]
    assert "DISAGREES" in str(result)
    assert "cross-check" in result.warnings[0].lower()
    assert "Not to be used" in result._repr_html_()


def test_the_moves_as_they_are_pass(settings):
    result = fit(**settings)
    assert result.converged and result.summary()["cross_check"]["agrees"] is True


def test_a_chain_that_forgets_rejected_steps_is_caught(settings):
    """A rejected proposal counts the old position once more; who leaves it out draws from another distribution."""
    result = fit(**settings)
    chain = result.chains.chain
    moved = np.any(np.diff(chain, axis=1) != 0, axis=-1)
    kept = chain[:, 1:][moved]
    kept = kept[: len(kept) // 400 * 400].reshape(4, -1, 100, chain.shape[-1])
    broken = type(result.chains)(result.chains.names, kept, np.zeros(kept.shape[:3]), {}, result.chains.kinds, {})
    grid = integrate(result.log_posterior, result.optimum)
    ess = result.chains.sampling["ess_bulk"]
    assert cross_check(grid, result.chains, ess)["agrees"] is True
    assert cross_check(grid, broken, ess)["agrees"] is False
