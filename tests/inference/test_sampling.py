import errno
import json
import os
import pickle
import signal

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.inference import convergence, moves, replicas
from fitter.inference.checkpoint import remove_checkpoint
from fitter.inference.diagnostics import mcse_mean, mcse_quantile
from fitter.inference.optimum import find_optimum
from fitter.inference.progress import ProgressReport, progress_bar
from fitter.inference.sampling import sample_posterior
from fitter.inference.seeds import child_seed
from fitter.inference.settings import SamplingSettings

SEED = 99
SMALL = SamplingSettings(replicas=3, walkers=32, target_ess=1500)


def sample(target, settings=SMALL, **more):
    seed = np.random.SeedSequence(SEED)
    optimum = find_optimum(target, child_seed(seed, 0))
    return sample_posterior(target, settings, optimum, **{"seed": child_seed(seed, 1), "processes": 1} | more)


def same(a, b):
    np.testing.assert_array_equal(a.chain, b.chain)
    np.testing.assert_array_equal(a.log_posterior, b.log_posterior)
    assert a.extra.keys() == b.extra.keys()
    for name in a.extra:
        np.testing.assert_array_equal(a.extra[name], b.extra[name])


def test_gaussian_moments_within_monte_carlo_error(doubles):
    p = sample(doubles.gaussian(3, 0.9), SamplingSettings(target_ess=4000))
    assert p.sampling["converged"] and p.sampling["reason"] == "converged"
    for name in p.names:
        x = p.draws(name)
        assert abs(x.mean()) < 4.5 * mcse_mean(x)
        assert abs((x**2).mean() - 1) < 4.5 * mcse_mean(x**2)
    xy = p.draws("x0") * p.draws("x1")
    assert abs(xy.mean() - 0.9) < 4.5 * mcse_mean(xy)
    assert min(p.sampling["ess_bulk"].values()) >= 4000


def test_one_dimension_against_quadrature(doubles):
    def density(t):
        return -2 * np.abs(t[:, 0] - 0.3) ** 1.5

    p = sample(doubles.Double(density, [(0, 2)]), SamplingSettings(target_ess=4000))
    x = np.linspace(0, 2, 20001)
    cdf = np.concatenate([[0], np.cumsum(np.exp(density(((x[1:] + x[:-1]) / 2)[:, None])))])
    for q in (0.025, 0.16, 0.5, 0.84, 0.975):
        exact = np.interp(q, cdf / cdf[-1], x)
        assert abs(np.quantile(p.chain, q) - exact) < 4.5 * mcse_quantile(p.draws("x0"), q)


def test_processes_do_not_change_a_bit(doubles):
    target = doubles.gaussian(2, 0.5, doubles.WithExtras)
    one, two = sample(target, processes=1), sample(target, processes=2)
    same(one, two)
    assert two.sampling["processes"] == 2
    assert one.sampling["counts"] == two.sampling["counts"]


def test_the_likelihood_reaches_a_spawned_process(doubles):
    # Where there is no fork it is pickled, once.
    target = pickle.loads(pickle.dumps(doubles.gaussian(2, 0.5, doubles.WithExtras)))
    same(sample(target), sample(doubles.gaussian(2, 0.5, doubles.WithExtras)))


def test_seed_and_replicas_differ(doubles):
    target = doubles.gaussian(2)
    a = sample(target)
    b = sample(target, seed=np.random.SeedSequence(1))
    assert not np.array_equal(a.chain[:, :50], b.chain[:, :50])
    assert not np.array_equal(a.chain[0], a.chain[1])


def test_extras_and_kinds(doubles):
    p = sample(doubles.gaussian(2, 0.5, doubles.WithExtras))
    assert p.kinds == {"x0": "sampled", "x1": "sampled", "offset": "marginalised", "square": "derived"}
    np.testing.assert_array_equal(p.draws("square"), p.draws("x0") ** 2)
    noise = p.draws("offset") - p.draws("x0")
    assert abs(noise.std() - 1) < 5 / np.sqrt(2 * noise.size)
    # Every draw has a noise of its own, also where a walker stayed.
    assert len(np.unique(noise)) == noise.size
    with pytest.raises(KeyError, match="x0, x1, offset, square"):
        p.draws("nothing")


def test_the_table_belongs_together(doubles):
    target = doubles.banana()
    p = sample(target)
    np.testing.assert_array_equal(target(p.chain.reshape(-1, 2)).reshape(p.log_posterior.shape), p.log_posterior)
    facts = p.sampling
    assert p.chain.shape == (3, facts["steps"] - facts["burn_in"], 32, 2)
    assert facts["burn_in"] >= 5 * max(facts["autocorrelation"].values())
    assert p.chain.shape[1] > 50 * max(facts["autocorrelation"].values())
    json.dumps(facts)


def test_limit_of_steps(doubles):
    p = sample(doubles.banana(), SamplingSettings(replicas=2, walkers=16, max_steps=60, target_ess=10**6))
    assert (p.sampling["steps"], p.sampling["converged"], p.sampling["reason"]) == (60, False, "max_steps")
    assert "max_steps" in p.sampling["advice"] and p.sampling["lacking"]


class _Frozen:
    """A broken move: nobody ever moves."""

    def propose(self, model, state):
        return state, np.zeros(len(state.coords), dtype=bool)

    def tune(self, state, accepted):
        pass


@pytest.mark.parametrize("share", [1.0, 0.995])
def test_a_chain_that_hardly_moves_is_not_called_converged(doubles, monkeypatch, share):
    good = moves.ensemble_moves("stretch")
    monkeypatch.setattr(moves, "ensemble_moves", lambda *_: [(_Frozen(), share), (good[0][0], 1 - share)])
    p = sample(doubles.gaussian(2), SamplingSettings(replicas=2, walkers=16, max_steps=600))
    assert not p.sampling["converged"] and p.sampling["lacking"]


def test_disagreeing_replicas_are_reported(doubles, monkeypatch):
    def pinned(log_posterior, optimum, walkers, seed):
        side = 1 if seed.spawn_key[-2] % 2 else -1
        x = 12.0 * side + 0.1 * np.random.default_rng(seed).standard_normal((walkers, 1))
        return x, log_posterior(x)

    def far(t):
        return np.logaddexp(-50 * (t[:, 0] - 12) ** 2, -50 * (t[:, 0] + 12) ** 2)

    from fitter.inference import sampling

    monkeypatch.setattr(sampling, "starting_walkers", pinned)
    p = sample(doubles.Double(far, [(-20, 20)]), SamplingSettings(replicas=2, walkers=16, max_steps=400, target_ess=100, move="stretch"))
    assert not p.sampling["converged"]
    assert max(p.sampling["rhat"].values()) > 1.5
    assert "peaks" in p.sampling["advice"]


# ---------------------------------------------------------------------- interruption and checkpoints


def often(monkeypatch):
    """Hand over and store every few steps."""
    monkeypatch.setattr(replicas, "_SLICE_SECONDS", 0.02)
    monkeypatch.setattr(replicas, "_STORE_SECONDS", 0.02)
    monkeypatch.setattr(replicas, "_LOOK_SECONDS", 0.01)


def interrupter(after):
    """A progress callback that presses Ctrl-C once the slowest replica has gone so many steps."""
    calls = []

    def look(report):
        calls.append(report.steps)
        if report.steps >= after and calls[-2:-1] < [after]:
            os.kill(os.getpid(), signal.SIGINT)

    return look, calls


@pytest.mark.parametrize("processes", [1, 2])
def test_interrupted_and_resumed_is_the_uninterrupted_chain(doubles, monkeypatch, tmp_path, processes):
    target = doubles.gaussian(2, 0.5, doubles.WithExtras)
    settings = SamplingSettings(replicas=3, walkers=32, target_ess=8_000)
    whole = sample(target, settings)
    often(monkeypatch)
    look, calls = interrupter(after=60)
    part = sample(target, settings, folder=tmp_path, progress=look, processes=processes)
    assert (part.sampling["converged"], part.sampling["reason"]) == (False, "interrupted")
    assert 0 < part.sampling["steps"] < whole.sampling["steps"]
    assert max(calls) < 400
    again = sample(target, settings, folder=tmp_path, resume=True, processes=processes)
    same(again, whole)
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    # What was interrupted is a stretch of the whole.
    first = max(part.sampling["burn_in"], whole.sampling["burn_in"])
    last = part.sampling["steps"]
    assert last > first
    ours = part.chain[:, first - part.sampling["burn_in"] :]
    np.testing.assert_array_equal(ours, whole.chain[:, first - whole.sampling["burn_in"] :][:, : last - first])


def test_chunks_do_not_influence_the_chain(doubles, monkeypatch, tmp_path):
    target = doubles.gaussian(2)
    whole = sample(target)
    often(monkeypatch)
    same(sample(target, folder=tmp_path), whole)
    assert len(list((tmp_path / "checkpoint").glob("replica_0_*.npz"))) > 3


def test_checkpoint_of_another_run_is_refused(doubles, monkeypatch, tmp_path):
    often(monkeypatch)
    target = doubles.gaussian(2)
    sample(target, folder=tmp_path, fingerprint="aaa")
    with pytest.raises(InputError, match="--resume"):
        sample(target, folder=tmp_path, fingerprint="aaa")
    with pytest.raises(InputError, match="fingerprint: stored 'aaa', now 'bbb'"):
        sample(target, folder=tmp_path, fingerprint="bbb", resume=True)
    with pytest.raises(InputError, match="walkers: stored 32, now 34"):
        sample(target, SMALL.model_copy(update={"walkers": 34}), folder=tmp_path, fingerprint="aaa", resume=True)
    first = next((tmp_path / "checkpoint").glob("replica_1_from_*.npz"))
    first.write_bytes(first.read_bytes()[:100])
    with pytest.raises(InputError, match="cannot be read"):
        sample(target, folder=tmp_path, fingerprint="aaa", resume=True)


def test_more_steps_continue_a_stopped_run(doubles, monkeypatch, tmp_path):
    often(monkeypatch)
    target = doubles.gaussian(2)
    short = SamplingSettings(replicas=2, walkers=32, max_steps=60, target_ess=3000)
    assert sample(target, short, folder=tmp_path).sampling["reason"] == "max_steps"
    long = short.model_copy(update={"max_steps": 20_000})
    same(sample(target, long, folder=tmp_path, resume=True), sample(target, long))


def test_full_disk(doubles, monkeypatch, tmp_path):
    often(monkeypatch)
    real, calls = np.savez, []

    def savez(file, **arrays):
        calls.append(1)
        if len(calls) > 3:
            file.write(b"half")
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        real(file, **arrays)

    target = doubles.gaussian(2)
    with monkeypatch.context() as m:
        m.setattr(np, "savez", savez)
        with pytest.raises(InputError, match="No space left"):
            sample(target, folder=tmp_path)
    assert len(list((tmp_path / "checkpoint").glob("*.npz"))) == 3
    assert not list((tmp_path / "checkpoint").glob("*.partial"))
    same(sample(target, folder=tmp_path, resume=True), sample(target))


def test_folder_that_cannot_be_made(doubles, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="cannot write"):
        sample(doubles.gaussian(2), folder=tmp_path / "file")


def test_removing_a_checkpoint_spares_other_files(doubles, monkeypatch, tmp_path):
    often(monkeypatch)
    sample(doubles.gaussian(2), folder=tmp_path)
    (tmp_path / "checkpoint" / "notes.txt").write_text("mine")
    remove_checkpoint(tmp_path)
    assert [p.name for p in (tmp_path / "checkpoint").iterdir()] == ["notes.txt"]
    (tmp_path / "checkpoint" / "notes.txt").unlink()
    remove_checkpoint(tmp_path)
    assert not (tmp_path / "checkpoint").exists()


def test_next_length_aims_at_what_is_missing():
    def status(steps, burn_in, tau, ess, rhat=1.0):
        one = {"x": tau}
        return convergence.Status(steps, burn_in, one, {"x": rhat}, {"x": ess}, {"x": 2 * ess}, {"x": 3 * ess}, ("x",))

    # 150 steps gave 1000: three times that, with the margin, but at most 2.5 times the length.
    assert convergence.next_length(status(200, 50, 1.0, 1000.0), 3000, 10**6) == 490
    assert convergence.next_length(status(200, 50, 1.0, 1000.0), 10**6, 10**6) == 500
    # 50 τ is missing: 1.08 · 50 · 5 + 10 · 5.
    assert convergence.next_length(status(200, 50, 5.0, 1e6), 3000, 10**6) == 320
    assert convergence.next_length(status(200, 50, 1.0, 1e6, rhat=1.2), 3000, 10**6) == 400
    assert convergence.next_length(status(200, 50, 1.0, 1000.0), 10**6, 450) == 450
    assert convergence.next_length(status(200, 100, float("nan"), float("nan")), 3000, 10**6) == 400


class _Terminal:
    """A stream that says it is a terminal."""

    def __init__(self):
        self.text = ""

    def write(self, text):
        self.text += text

    def flush(self):
        pass

    def isatty(self):
        return True


def test_progress_bar_only_on_a_terminal():
    import io

    report = ProgressReport(50, 200, 6.5, 4321.0, 1.004, 3.0)
    for quiet, stream, shown in ((False, _Terminal(), True), (True, _Terminal(), False), (False, io.StringIO(), False)):
        with progress_bar(quiet, stream) as bar:
            bar(report)
        text = stream.text if isinstance(stream, _Terminal) else stream.getvalue()
        assert ("τ = 6.5" in text and "ESS = 4,321" in text and "3 s left" in text) is shown
