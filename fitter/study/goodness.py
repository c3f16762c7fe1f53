"""Goodness of fit beyond χ²: are the residuals what the covariance says they are?

References
----------
.. [1] D'Agostino, R. B. & Stephens, M. A. 1986, Goodness-of-fit Techniques, table 4.9 (Anderson–Darling, both parameters estimated).
.. [2] Cook, R. D. & Weisberg, S. 1982, Residuals and Influence in Regression, section 2.2 (deletion residuals).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.study.influence import identity, noise_at
from fitter.study.whitened import Whitened

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

__all__ = ["anderson_darling", "goodness"]

_STEP = 0.05  # of a Hessian error: derivatives of the distance modulus
_EXPECTED_OUTLIERS = 0.05  # by chance in the whole sample, beyond the limit of the list


def goodness(log_posterior: LogPosterior, optimum: Optimum) -> dict:
    """Test the residuals of the best fit.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum

    Returns
    -------
    dict
        ``chi2``, ``dof``, ``p_two_sided``; ``anderson_darling`` {statistic, p_value}; ``kurtosis``, ``skewness`` {value, error}; ``trends``
        [{label, amplitude, error, significance}] in mag; ``outliers`` [{row, name, redshift, deviation}] and ``outlier_limit``.
    """
    noise, scale = noise_at(log_posterior, optimum.values)
    frame = Whitened(log_posterior.design, noise, _derivatives(log_posterior, optimum))
    residual = log_posterior.sample.data - log_posterior.expected(optimum.theta)[0]
    white = frame.residuals(residual) / scale
    dof = log_posterior.n_data - log_posterior.n_parameters
    statistic, p_value = anderson_darling(white)
    skewness, kurtosis = _shape(white)
    n = len(white)
    found = {
        "chi2": float(optimum.chi2),
        "dof": int(dof),
        "p_two_sided": two_sided_p(optimum.chi2, dof),
        "anderson_darling": {"statistic": statistic, "p_value": p_value},
        "skewness": {"value": skewness, "error": math.sqrt(6 / n)},
        "kurtosis": {"value": kurtosis, "error": math.sqrt(24 / n)},
        "trends": _trends(log_posterior.sample, frame, white, scale),
    }
    return found | _outliers(log_posterior.sample, frame, white, scale)


def two_sided_p(chi2: float, dof: int) -> float | None:
    """Probability of a χ² as far from expectation either way; None without degrees of freedom."""
    if dof <= 0:
        return None
    from scipy.special import gammainc, gammaincc

    return float(min(1.0, 2 * min(gammainc(0.5 * dof, 0.5 * chi2), gammaincc(0.5 * dof, 0.5 * chi2))))


def anderson_darling(x: FloatArray) -> tuple[float, float]:
    """A² of a sample against a Gaussian of its own mean and width, and its p-value [1]_."""
    from scipy.special import log_ndtr

    n = len(x)
    y = np.sort((x - x.mean()) / x.std(ddof=1))
    odd = 2 * np.arange(1, n + 1) - 1
    a2 = -n - float((odd * (log_ndtr(y) + log_ndtr(-y[::-1]))).sum()) / n
    a = a2 * (1 + 0.75 / n + 2.25 / n**2)
    if a >= 0.6:
        p = math.exp(1.2937 - 5.709 * a + 0.0186 * a * a) if a < 10 else 0.0
    elif a > 0.34:
        p = math.exp(0.9177 - 4.279 * a - 1.38 * a * a)
    elif a > 0.2:
        p = 1 - math.exp(-8.318 + 42.796 * a - 59.938 * a * a)
    else:
        p = 1 - math.exp(-13.436 + 101.14 * a - 223.73 * a * a)
    return float(a), float(p)


def _shape(x: FloatArray) -> tuple[float, float]:
    y = (x - x.mean()) / x.std()
    return float((y**3).mean()), float((y**4).mean() - 3)


def _derivatives(log_posterior: LogPosterior, optimum: Optimum) -> FloatArray:
    """Derivatives of the expected data by the cosmological parameters at the optimum, (N, n)."""
    columns = []
    for i, error in enumerate(optimum.errors):
        if log_posterior.names[i] in ("intrinsic_scatter", "covariance_scale"):
            continue
        prior = log_posterior.priors[i]
        both = np.tile(optimum.theta, (2, 1))
        both[0, i] = max(optimum.theta[i] - _STEP * error, prior.low)
        both[1, i] = min(optimum.theta[i] + _STEP * error, prior.high)
        low, high = log_posterior.expected(both)
        columns.append((high - low) / (both[1, i] - both[0, i]))
    usable = [c for c in columns if np.isfinite(c).all() and np.any(c)]
    return np.column_stack(usable) if usable else np.zeros((log_posterior.n_data, 0))


def _trends(sample: Sample, frame: Whitened, white: FloatArray, scale: float) -> list[dict]:
    """Score tests: the amplitude of each template that the residuals would take, everything fitted floating with it."""
    free = ~np.asarray(sample.is_calibrator)
    templates = {"slope in ln(1 + z)": np.where(free, np.log1p(sample.redshift), 0.0)}
    middle = np.median(sample.redshift[free])
    templates[f"step at z = {middle:.3g}"] = (free & (sample.redshift <= middle)).astype(float)
    if sample.group is not None:
        groups = list(dict.fromkeys(sample.group[free]))
        templates |= {f"offset of {g}": (free & (sample.group == g)).astype(float) for g in groups if len(groups) > 1}
    found = []
    for label, template in templates.items():
        alone = np.linalg.norm(frame.noise.whiten(template))
        projected = frame.residuals(template)
        norm = float(np.linalg.norm(projected))
        # What the fit takes up whole cannot be seen in its residuals.
        if norm > 1e-4 * alone:
            along = float(projected @ white)
            row = {"amplitude": along * scale / norm**2, "error": scale / norm, "significance": along / norm}
            found.append({"label": label, **row})
    return found


def _outliers(sample: Sample, frame: Whitened, white: FloatArray, scale: float) -> dict:
    """Supernovae whose deletion residual [2]_ chance would hardly give in a sample of this size."""
    from scipy.special import ndtri

    limit = float(-ndtri(0.5 * _EXPECTED_OUTLIERS / len(white)))
    if not frame.possible:
        return {"outlier_limit": limit, "outliers": []}
    deviation = frame.back(white[:, None])[:, 0] / np.sqrt(frame.diagonal)
    beyond = np.flatnonzero(np.abs(deviation) > limit)
    beyond = beyond[np.argsort(-np.abs(deviation[beyond]), kind="stable")]
    return {"outlier_limit": limit, "outliers": [{**identity(sample, i), "deviation": float(deviation[i])} for i in beyond.tolist()]}
