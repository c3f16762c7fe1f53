"""The likelihood-ratio test of nested fits (Wilks 1938), and what it becomes at a boundary (Chernoff 1954; Self & Liang 1987)."""

from __future__ import annotations

import math

__all__ = ["likelihood_ratio", "sigma_of"]


def sigma_of(log_p: float) -> float:
    """Return the two-sided number of Gaussian standard deviations of a p-value, given as its logarithm."""
    from scipy.optimize import brentq
    from scipy.special import log_ndtr

    if log_p >= 0:
        return 0.0
    return float(brentq(lambda s: math.log(2) + log_ndtr(-s) - log_p, 0.0, 10.0 + math.sqrt(-2 * log_p)))


def likelihood_ratio(delta: float, extra: int, at_edge: int = 0) -> dict:
    """Test whether extra parameters improve a fit more than chance would.

    Parameters
    ----------
    delta : float
        Deviance of the simpler fit minus that of the larger one; a negative one is taken as zero.
    extra : int
        Number of extra parameters.
    at_edge : int
        How many of them the simpler fit holds at the end of their range.

    Returns
    -------
    dict
        ``statistic``, ``dof``, ``p_value``, ``sigma``, and ``boundary``: None, or which distribution stands in for χ² and why.

    Notes
    -----
    With one extra parameter at its edge the statistic is zero half of the time and χ² with one degree of freedom otherwise, so that
    p is halved. With more than one the weights depend on the data: p is then of χ², which is too large.
    """
    from scipy.stats import chi2

    statistic = max(float(delta), 0.0)
    log_p, boundary = float(chi2.logsf(statistic, extra)), None
    if at_edge and extra == 1:
        log_p = log_p - math.log(2) if statistic > 0 else 0.0
        boundary = "half of χ² with one degree of freedom: the nested value is at the edge of the prior"
    elif at_edge:
        boundary = "χ², which makes p too large: a nested value is at the edge of its prior"
    return {"statistic": statistic, "dof": extra, "p_value": math.exp(log_p), "sigma": sigma_of(log_p), "boundary": boundary}
