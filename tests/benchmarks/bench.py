"""Speed, as ratios of times taken in the same run: `make bench`.

A shared or throttled machine changes times, so every ratio compares two things measured alternately, each by its
fastest round. BLAS is held to one thread, as in the sampler, unless a row says otherwise.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
OPEN_DATA = Path(os.environ.get("MUFITTER_OPEN_DATA") or ROOT / "../shared/open_data").resolve()
WRITTEN = "../../../shared/open_data"  # as tests/outside/*.yaml write the place of the data
WALKERS = 128


@dataclass(frozen=True)
class Row:
    """One line of the table."""

    what: str
    measured: str
    wanted: str
    met: bool


def fastest(*functions, rounds=7, least=0.05):
    """Seconds a call, for each function the fastest of rounds that take turns."""
    counts = []
    for f in functions:
        f()
        start = time.perf_counter()
        f()
        counts.append(max(1, int(least / max(time.perf_counter() - start, 1e-9))))
    best = [np.inf] * len(functions)
    for _ in range(rounds):
        for i, (f, count) in enumerate(zip(functions, counts, strict=True)):
            start = time.perf_counter()
            for _ in range(count):
                f()
            best[i] = min(best[i], (time.perf_counter() - start) / count)
    return best


def release_config(name: str) -> str:
    """A config of tests/outside with the real place of the data."""
    return (ROOT / "tests" / "outside" / f"{name}.yaml").read_text().replace(WRITTEN, str(OPEN_DATA))


def release_sample():
    """The 1,820 supernovae with the dense matrix."""
    from fitter import load_config
    from fitter.sample.sample import Sample

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "config.yaml"
        path.write_text(release_config("dovekie2025_vpec"))
        config = load_config(path)
        return Sample.from_config(config.sample, config.folder)


def posterior_and_walkers(sample, model="curved_wcdm", **more):
    """The log-posterior, and walkers where a chain would have them."""
    from fitter.inference.optimum import find_optimum
    from fitter.likelihood.posterior import LogPosterior

    posterior = LogPosterior.build(sample, model, more)
    optimum = find_optimum(posterior, np.random.SeedSequence(1))
    rng = np.random.default_rng(2)
    draws = rng.multivariate_normal(optimum.theta, optimum.covariance, 20 * WALKERS)
    return posterior, draws[np.isfinite(posterior(draws))][:WALKERS]


def plain_chi2(sample, posterior, library):
    """What a plain script computes at one point: distances by astropy, the covariance by its Cholesky factor."""
    from scipy.linalg import cho_factor, cho_solve

    factor = cho_factor(np.linalg.inv(np.array(sample.noise.precision)))

    def chi2(point):
        model = library(dict(zip(posterior.names, point, strict=True)))
        r = sample.data - model.distmod(sample.redshift).value
        return r @ cho_solve(factor, r)

    return chi2


def curved_wcdm(p):
    """The model as astropy has it."""
    from astropy.cosmology import wCDM

    return wCDM(70.0, p["omega_m"], p["omega_de"], w0=p["w"], Tcmb0=0.0)


def flat_w0wa(p):
    """The model as astropy has it."""
    from astropy.cosmology import Flatw0waCDM

    return Flatw0waCDM(70.0, p["omega_m"], w0=p["w0"], wa=p["wa"], Tcmb0=0.0)


def against_direct_sums() -> list[Row]:
    """Rows 1 and 2: one likelihood against what it replaces."""
    sample = release_sample()
    posterior, theta = posterior_and_walkers(sample)
    precision = np.array(sample.noise.precision)
    plain = plain_chi2(sample, posterior, curved_wcdm)
    residuals = np.random.default_rng(3).normal(size=(WALKERS, sample.n))

    def dense_product():
        return np.einsum("wn,wn->w", residuals @ precision, residuals)

    ours, library, dense = fastest(lambda: posterior(theta), lambda: plain(theta[0]), dense_product)
    ours, dense = ours / WALKERS, dense / WALKERS
    return [
        Row(f"one evaluation, curved_wcdm, N = {sample.n}, dense, {WALKERS} walkers", f"{ours * 1e6:.2f} µs", "", True),
        Row("  astropy distances + cho_solve, one point", f"{library / ours:,.0f} × slower", "≥ 8,000", library / ours >= 8000),
        Row("  dense product alone, no distances", f"{dense / ours:.1f} × slower", "≥ 30", dense / ours >= 30),
    ]


def stretch_rate(posterior, theta, seconds: float) -> float:
    """Effective samples a second of the stretch move, were each evaluation to take so long.

    How many evaluations an independent sample costs belongs to the move and the posterior, not to the code that computes it: it is
    measured with the fast likelihood, a plain script would need hours for it.
    """
    from emcee.moves import StretchMove

    from fitter.inference.diagnostics import autocorrelation_time
    from fitter.inference.ensemble import Ensemble

    sampler = Ensemble(*theta.shape, posterior, vectorize=True, moves=StretchMove())
    sampler.run_mcmc(theta, 12_000)
    chain = sampler.get_chain(discard=2_000)[None]
    return 1 / max(autocorrelation_time(chain[..., i]) for i in range(chain.shape[-1])) / seconds


def sampling_rates() -> list[Row]:
    """Rows 5 and 6: effective samples a second, bulk ESS of the worst parameter over the whole call, beside a plain script."""
    from fitter.inference.optimum import find_optimum
    from fitter.inference.sampling import sample_posterior
    from fitter.inference.settings import SamplingSettings

    sample, rows = release_sample(), []
    for model, library in (("curved_wcdm", curved_wcdm), ("flat_w0wa", flat_w0wa)):
        posterior, theta = posterior_and_walkers(sample, model)
        plain = plain_chi2(sample, posterior, library)
        (seconds,) = fastest(lambda plain=plain, theta=theta: plain(theta[0]))
        seed = np.random.SeedSequence(6)
        start = time.perf_counter()
        found = sample_posterior(posterior, SamplingSettings(target_ess=100_000), find_optimum(posterior, seed), seed=seed)
        rate = min(found.sampling["ess_bulk"].values()) / (time.perf_counter() - start)
        tau = max(found.sampling["autocorrelation"].values())
        slow = stretch_rate(posterior, theta, seconds)
        what = f"effective samples a second, {model}, {os.cpu_count()} cores (τ = {tau:.1f} steps)"
        rows.append(Row(what, f"{rate:,.0f}", "≥ 10,000", rate >= 1e4))
        rows.append(
            Row("  plain script: stretch move, astropy, cho_solve, one core", f"{rate / slow:,.0f} × fewer", "≥ 20,000", rate >= 2e4 * slow)
        )
    return rows


def diagonal_sample(n: int):
    """A survey of n supernovae with independent errors of 0.15 mag, 0.01 < z < 1.2."""
    from fitter.sample.sample import Sample

    rng = np.random.default_rng(5)
    z = np.sort(0.01 + 1.19 * rng.random(n))
    z[-1] = 1.2
    e = 0.5 * z
    mu = 43.1 + 5 * np.log10(z * (1 + z) * (1 + e * 0.55) / (1 + e)) + 0.15 * rng.normal(size=n)
    return Sample.from_arrays(z, mu, sigma=np.full(n, 0.15))


def against_size() -> list[Row]:
    """Row 3: the time does not depend on the number of supernovae."""
    from fitter.likelihood.posterior import LogPosterior

    _, theta = posterior_and_walkers(diagonal_sample(1820))
    sizes = (40, 1820, 100_000)
    posteriors = [LogPosterior.build(diagonal_sample(n), "curved_wcdm") for n in sizes]
    times = fastest(*(lambda p=p: p(theta) for p in posteriors), rounds=15)
    spread = max(times) / min(times) - 1
    listed = " / ".join(f"{t / WALKERS * 1e6:.2f}" for t in times)
    return [Row("one evaluation at N = 40 / 1,820 / 100,000, diagonal", f"{listed} µs, spread {spread:.0%}", "≤ 20 %", spread <= 0.2)]


def against_fixed_scatter() -> list[Row]:
    """Row 4: the price of a free intrinsic scatter."""
    from fitter.likelihood.posterior import LogPosterior

    sample = release_sample()
    fixed, theta = posterior_and_walkers(sample)
    covariance = np.linalg.inv(np.array(sample.noise.precision))
    from fitter.sample.sample import Sample

    again = Sample.from_arrays(
        sample.redshift, sample.data, z_helio=sample.redshift_helio, covariance=covariance, intrinsic={"uniform": [0, 0.5]}
    )
    free = LogPosterior.build(again, "curved_wcdm")
    scatter = np.random.default_rng(4).uniform(0, 0.1, (len(theta), 1))
    slow = np.hstack([theta, scatter])
    one, other = fastest(lambda: fixed(theta), lambda: free(slow))
    return [Row("free intrinsic scatter over fixed", f"{other / one:.1f} × slower", "≤ 20", other / one <= 20)]


def whole_process() -> list[Row]:
    """Row 7: the command as a user runs it, on every core."""
    text = release_config("dovekie2025_vpec").replace("model: flat_lcdm", "model: curved_wcdm\nsampling: {target_ess: 10000}")
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "config.yaml"
        path.write_text(text)
        command = [str(Path(sys.executable).parent / "mufitter"), "fit", str(path), "--run-folder", str(Path(folder) / "run")]
        start = time.perf_counter()
        ended = subprocess.run(command, capture_output=True, text=True, check=False)
        seconds = time.perf_counter() - start
    if ended.returncode:
        return [Row("mufitter fit, curved_wcdm", f"exit {ended.returncode}: {ended.stderr.strip()[-200:]}", "≤ 20 s", False)]
    return [Row("mufitter fit, curved_wcdm, 10,000 effective samples, whole process", f"{seconds:.1f} s", "≤ 20 s", seconds <= 20)]


def help_time() -> list[Row]:
    """Row 8: the command answers at once."""
    command = [str(Path(sys.executable).parent / "mufitter"), "--help"]
    (seconds,) = fastest(lambda: subprocess.run(command, capture_output=True, check=True), rounds=5, least=0)
    return [Row("mufitter --help", f"{seconds:.2f} s", "< 0.5 s", seconds < 0.5)]


def show(rows: list[Row]) -> None:
    """Print the one table."""
    heads = ("what", "measured", "wanted")
    widths = [max(len(h), *(len(getattr(r, h)) for r in rows)) for h in heads]
    print("  ".join(h.ljust(w) for h, w in zip(heads, widths, strict=True)))
    for r in rows:
        cells = (r.what, r.measured, r.wanted)
        line = "  ".join(c.ljust(w) for c, w in zip(cells, widths, strict=True))
        print(line + ("" if r.met else "  missed"))


def main() -> int:
    """Measure and print."""
    from threadpoolctl import threadpool_limits

    rows = help_time()
    with threadpool_limits(1):
        rows += against_size()
        if OPEN_DATA.is_dir():
            rows += against_direct_sums() + against_fixed_scatter() + sampling_rates()
    if OPEN_DATA.is_dir():
        rows += whole_process()
    else:
        print(f"no published data in {OPEN_DATA}: set MUFITTER_OPEN_DATA for the other rows", file=sys.stderr)
    show(rows)
    return 0


if __name__ == "__main__":
    sys.exit(main())
