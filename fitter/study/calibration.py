"""What a set of mock fits says: bias, coverage, uniformity of ranks, χ² against expectation, precision.

References
----------
.. [1] Talts, S. et al. 2018, arXiv:1804.06788 (ranks of the truth are uniform).
.. [2] Clopper, C. J. & Pearson, E. S. 1934, Biometrika 26, 404 (exact binomial test).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

__all__ = ["BINS", "calibrate"]

BINS = 20
_INTERVALS = {"68": ("low68", "high68", 0.8413 - 0.1587), "95": ("low95", "high95", 0.95)}
_ALARM = 0.01  # probability of any false alarm in a whole rehearsal


def calibrate(fits: list[dict], names: Sequence[str], dof: int) -> dict:
    """Judge mock fits.

    Parameters
    ----------
    fits : list of dict
        ``parameters`` {NAME: {mean, sd, median, low68, …, truth, rank}} and ``chi2``; a parameter without a truth has no rank.
    names : sequence of str
    dof : int
        Degrees of freedom of each fit.

    Returns
    -------
    dict
        ``parameters`` {NAME: {bias, coverage, ranks, precision}}, ``chi2``, ``alarms``, ``verdict``.
    """
    parameters = {name: _parameter([fit["parameters"][name] for fit in fits]) for name in names}
    chi2 = _chi2(np.array([fit["chi2"] for fit in fits]), dof)
    alarms = _alarms(parameters, chi2)
    return {"parameters": parameters, "chi2": chi2, "alarms": alarms, "verdict": _verdict(parameters, chi2, alarms, len(fits))}


def _parameter(rows: list[dict]) -> dict:
    table = {key: np.array([row[key] for row in rows]) for key in rows[0]}
    half = 0.5 * (table["high68"] - table["low68"])
    middle, low, high = np.quantile(half, [0.5, 0.1587, 0.8413]).tolist()
    precision = {"sigma": middle, "sigma_low": low, "sigma_high": high}
    if "truth" not in table:
        return {"precision": precision, "bias": None, "coverage": None, "ranks": None}
    return {"precision": precision, "bias": _bias(table), "coverage": _coverage(table), "ranks": _ranks(table["rank"])}


def _bias(table: dict) -> dict:
    """Mean of estimate minus truth, in the parameter's unit and in each posterior's own width; the scatter of the latter."""
    error, pull = table["mean"] - table["truth"], (table["mean"] - table["truth"]) / table["sd"]
    n = len(error)
    return {
        "mean": float(error.mean()),
        "error": float(error.std(ddof=1) / math.sqrt(n)) if n > 1 else None,
        "in_sigma": float(pull.mean()),
        "in_sigma_error": float(pull.std(ddof=1) / math.sqrt(n)) if n > 1 else None,
        "pull_sd": float(pull.std(ddof=1)) if n > 1 else None,
    }


def _coverage(table: dict) -> dict:
    found = {}
    n = len(table["truth"])
    for level, (low, high, nominal) in _INTERVALS.items():
        inside = int(((table["truth"] >= table[low]) & (table["truth"] <= table[high])).sum())
        found[level] = {
            "share": inside / n,
            "error": math.sqrt(nominal * (1 - nominal) / n),
            "nominal": nominal,
            "p_value": binomial_p(inside, n, nominal),
        }
    return found


def binomial_p(k: int, n: int, p: float) -> float:
    """Exact two-sided binomial p-value, twice the smaller tail [2]_."""
    from scipy.special import bdtr, bdtrc

    upper = 1.0 if k == 0 else float(bdtrc(k - 1, n, p))
    return min(1.0, 2 * min(float(bdtr(k, n, p)), upper))


def _ranks(rank: np.ndarray) -> dict:
    """Histogram of the truth's rank in its posterior, with two tests of uniformity: Kolmogorov–Smirnov, and χ² of the bins."""
    from scipy.special import gammaincc

    n = len(rank)
    counts = np.histogram(rank, bins=BINS, range=(0, 1))[0]
    chi2 = float(((counts - n / BINS) ** 2).sum() / (n / BINS))
    return {
        "counts": counts.tolist(),
        "ks_p_value": kolmogorov_p(rank),
        "chi2_p_value": float(gammaincc(0.5 * (BINS - 1), 0.5 * chi2)) if n >= 5 * BINS else None,
    }


def kolmogorov_p(rank: np.ndarray) -> float:
    """P-value of uniformity on [0, 1] by the largest difference of the cumulative distributions."""
    from scipy.special import kolmogorov

    n, x = len(rank), np.sort(rank)
    steps = np.arange(n + 1) / n
    distance = max((steps[1:] - x).max(), (x - steps[:-1]).max())
    # Stephens 1970: the asymptotic distribution serves small n with this factor.
    return float(kolmogorov((math.sqrt(n) + 0.12 + 0.11 / math.sqrt(n)) * distance))


def _chi2(chi2: np.ndarray, dof: int) -> dict:
    from scipy.special import gammainc

    if dof <= 0:
        return {"dof": dof, "mean": float(chi2.mean()), "sd": None, "error": None, "ks_p_value": None}
    return {
        "dof": dof,
        "mean": float(chi2.mean()),
        "sd": float(chi2.std(ddof=1)) if len(chi2) > 1 else None,
        "error": math.sqrt(2 * dof / len(chi2)),
        "ks_p_value": kolmogorov_p(gammainc(0.5 * dof, 0.5 * chi2)),
    }


def _alarms(parameters: dict, chi2: dict) -> list[dict]:
    """Tests that fail by more than chance allows for all of them together (Bonferroni)."""
    tests = [("χ²", "distribution", chi2["ks_p_value"])] if chi2["ks_p_value"] is not None else []
    for name, facts in parameters.items():
        if facts["coverage"]:
            tests += [(name, f"coverage of the {level} % interval", c["p_value"]) for level, c in facts["coverage"].items()]
            tests.append((name, "ranks", facts["ranks"]["ks_p_value"]))
    return [{"of": of, "test": test, "p_value": p} for of, test, p in tests if p < _ALARM / len(tests)]


def _verdict(parameters: dict, chi2: dict, alarms: list[dict], mocks: int) -> list[str]:
    said = []
    for name, facts in parameters.items():
        if facts["coverage"]:
            c68, c95, bias = facts["coverage"]["68"], facts["coverage"]["95"], facts["bias"]
            inside = f"{100 * c68['share']:.1f} ± {100 * c68['error']:.1f} % and {100 * c95['share']:.1f} ± {100 * c95['error']:.1f} %"
            shift = f"{bias['in_sigma']:+.2f} ± {bias['in_sigma_error'] or 0:.2f}σ".replace("-", "−")
            said.append(f"{name}: the 68 % and 95 % intervals hold the truth in {inside} of {mocks} mocks; bias {shift}.")
    if chi2["dof"] > 0:
        said.append(f"χ² averages {chi2['mean']:.1f} ± {chi2['error']:.1f} for {chi2['dof']} degrees of freedom.")
    if alarms:
        listed = "; ".join(f"{a['of']}, {a['test']} (p = {a['p_value']:.1g})" for a in alarms)
        return [f"The fit does not do what it claims: {listed}.", *said]
    tested = any(facts["coverage"] for facts in parameters.values())
    return ["Coverage, ranks and χ² are as they should be, within the errors of the rehearsal." if tested else "Precision only.", *said]
