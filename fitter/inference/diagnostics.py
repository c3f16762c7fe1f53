r"""Has the chain converged, and how many independent draws is it worth?

All functions take draws of one parameter as an (R, S, W) array: R independent replicas, S steps, W walkers.

The walkers of one ensemble move by each other's positions, so they are not W independent chains. Two things follow.
:math:`\hat R` compares replicas, each with all its walkers taken together. The effective sample size is estimated twice, once
with every walker as a chain of its own, once from the R series of ensemble means (whose variance holds all correlation between
walkers), and the smaller one counts.

References
----------
Vehtari, Gelman, Simpson, Carpenter & Bürkner 2021, Bayesian Analysis 16, 667 (rank-normalised split R-hat, bulk and tail ESS).
Geyer 1992, Statistical Science 7, 473 (initial monotone sequence). Sokal 1997, in Functional Integration (window of the
autocorrelation time; the definition that emcee uses).
"""

from __future__ import annotations

import numpy as np

from fitter.array_types import FloatArray

__all__ = [
    "autocorrelation_time",
    "ess_bulk",
    "ess_mean",
    "ess_quantile",
    "ess_sd",
    "ess_tail",
    "mcse_mean",
    "mcse_quantile",
    "rank_normalised",
    "split_rhat",
]


def autocorrelation_time(x: FloatArray, window: float = 5.0) -> float:
    """Integrated autocorrelation time in steps, averaged over all walkers of all replicas.

    Parameters
    ----------
    x : (R, S, W) ndarray
    window : float
        The sum stops at the first lag M with M ≥ window · τ(M).

    Returns
    -------
    float
        NaN if nothing ever moved.
    """
    acf = _autocovariance(_as_chains(x))
    moved = acf[:, 0] > 0
    if not moved.any():
        return float("nan")
    rho = (acf[moved] / acf[moved, :1]).mean(axis=0)
    # A walker that never moved is perfectly correlated with itself.
    stuck = 1.0 - moved.mean()
    rho = (1.0 - stuck) * rho + stuck
    taus = 2.0 * np.cumsum(rho) - 1.0
    beyond = np.arange(len(taus)) >= window * taus
    return float(taus[np.argmax(beyond)] if beyond.any() else taus[-1])


def split_rhat(x: FloatArray) -> float:
    """Rank-normalised split R-hat across replicas, the larger of bulk and folded.

    Parameters
    ----------
    x : (R, S, W) ndarray

    Returns
    -------
    float
        1 when replicas and their halves agree; infinite when nothing moved but the halves differ.
    """
    x = np.asarray(x, dtype=float)
    folded = np.abs(x - np.median(x))
    return max(_rhat(rank_normalised(x)), _rhat(rank_normalised(folded)))


def ess_bulk(x: FloatArray) -> float:
    """Effective sample size for the middle of the distribution, from rank-normalised draws, (R, S, W)."""
    return _ess(rank_normalised(x))


def ess_mean(x: FloatArray) -> float:
    """Effective sample size for the mean of the draws as they are, (R, S, W)."""
    return _ess(np.asarray(x, dtype=float))


def ess_quantile(x: FloatArray, p: float) -> float:
    """Effective sample size for the quantile of probability `p` of the draws, (R, S, W)."""
    x = np.asarray(x, dtype=float)
    return _ess((x <= np.quantile(x, p)).astype(float))


def ess_tail(x: FloatArray) -> float:
    """The smaller of the effective sample sizes for the 5 % and 95 % quantiles of the draws, (R, S, W)."""
    return min(ess_quantile(x, 0.05), ess_quantile(x, 0.95))


def ess_sd(x: FloatArray) -> float:
    """Effective sample size for the standard deviation of the draws, (R, S, W).

    The number of independent Gaussian draws that would tell it as well: N with relative error 1/√(2N). It falls where a
    rarely visited tail carries much of the variance, which quantiles do not see.
    """
    square = (np.asarray(x, dtype=float) - np.mean(x)) ** 2
    spread = square.var()
    return float(2 * square.mean() ** 2 * _ess(square) / spread) if spread > 0 else float("nan")


def mcse_mean(x: FloatArray) -> float:
    """Monte Carlo standard error of the mean of the draws, (R, S, W)."""
    x = np.asarray(x, dtype=float)
    return float(x.std() / np.sqrt(ess_mean(x)))


def mcse_quantile(x: FloatArray, p: float) -> float:
    """Monte Carlo standard error of the quantile of probability `p` of the draws, (R, S, W).

    Half the distance between the sample quantiles at the ±1σ points of the beta distribution of the order statistic.
    """
    from scipy.stats import beta

    x = np.asarray(x, dtype=float)
    n = ess_quantile(x, p)
    low, high = beta.ppf([0.1586553, 0.8413447], n * p + 1, n * (1 - p) + 1)
    a, b = np.quantile(x, [low, high])
    return float((b - a) / 2)


def rank_normalised(x: FloatArray) -> FloatArray:
    """Replace draws by the normal scores of their ranks among all draws; ties share the mean rank. Shape kept."""
    from scipy.special import ndtri

    x = np.asarray(x, dtype=float)
    _, inverse, count = np.unique(x.ravel(), return_inverse=True, return_counts=True)
    rank = np.cumsum(count) - (count - 1) / 2
    return ndtri((rank - 0.375) / (x.size + 0.25))[inverse].reshape(x.shape)


def _as_chains(x: FloatArray) -> FloatArray:
    """(R, S, W) → (R·W, S)."""
    x = np.asarray(x, dtype=float)
    return np.ascontiguousarray(x.transpose(0, 2, 1)).reshape(-1, x.shape[1])


def _halves(x: FloatArray) -> FloatArray:
    """(R, S, …) → (2R, S // 2, …): each replica's first and last half."""
    half = x.shape[1] // 2
    return np.concatenate([x[:, :half], x[:, x.shape[1] - half :]])


def _rhat(z: FloatArray) -> float:
    parts = _halves(z)
    parts = parts.reshape(len(parts), -1)
    n = parts.shape[1]
    within = parts.var(axis=1, ddof=1).mean() if n > 1 else 0.0
    between = parts.mean(axis=1).var(ddof=1)
    if within == 0:
        return 1.0 if between == 0 else float("inf")
    return float(np.sqrt((n - 1) / n + between / within))


def _ess(z: FloatArray) -> float:
    """The smaller of the two estimates of the module's head."""
    total = z.var()
    if total == 0 or z.shape[1] < 8:
        return float("nan")
    parts = _halves(z)
    walkers = _ess_of_chains(_as_chains(parts))
    means = parts.mean(axis=2)
    ensemble = _ess_of_chains(means) * total / _variance_plus(means)
    return float(min(walkers, ensemble, z.size * np.log10(z.size)))


def _variance_plus(chains: FloatArray) -> float:
    """Vehtari et al.'s estimate of the marginal variance of (M, N) chains."""
    n = chains.shape[1]
    within = chains.var(axis=1, ddof=1).mean()
    between = chains.mean(axis=1).var(ddof=1) if len(chains) > 1 else 0.0
    return within * (n - 1) / n + between


def _ess_of_chains(chains: FloatArray) -> float:
    """Effective sample size of independent (M, N) chains: eqs. 10–11 with Geyer's initial monotone sequence."""
    m, n = chains.shape
    acov = _autocovariance(chains).mean(axis=0) * n / (n - 1)
    plus = _variance_plus(chains)
    rho = 1.0 - (acov[0] - acov) / plus
    rho[0] = 1.0
    pairs = rho[: n // 2 * 2].reshape(-1, 2).sum(axis=1)
    negative = np.flatnonzero(pairs < 0)
    pairs = pairs[: negative[0]] if negative.size else pairs
    tau = max(2.0 * np.minimum.accumulate(pairs).sum() - 1.0, 1.0 / np.log10(m * n))
    return m * n / tau


def _autocovariance(chains: FloatArray, block: int = 256) -> FloatArray:
    """Autocovariance at every lag of (M, N) chains, normalised by N, by Fourier transform in blocks of chains."""
    from scipy.fft import irfft, next_fast_len, rfft

    n = chains.shape[1]
    size = next_fast_len(2 * n, real=True)
    out = np.empty(chains.shape)
    for i in range(0, len(chains), block):
        part = chains[i : i + block]
        f = rfft(part - part.mean(axis=1, keepdims=True), n=size, axis=1)
        out[i : i + block] = irfft(f.real**2 + f.imag**2, n=size, axis=1)[:, :n] / n
    return out
