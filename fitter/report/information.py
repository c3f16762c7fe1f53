"""Information criteria of one fit, with the parameter count written out."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.noise import Noise

__all__ = ["deviance_draws", "information_criteria"]


def deviance_draws(log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum) -> np.ndarray:
    """Deviance of every draw, D = −2 ln L, on the scale where the best fit has its χ².

    Parameters
    ----------
    log_posterior : LogPosterior
        Only its prior is evaluated: the likelihood follows from the stored log-posterior.
    posterior : Posterior
    optimum : Optimum

    Returns
    -------
    (R·S·W,) float
    """
    theta = posterior.chain.reshape(-1, posterior.chain.shape[-1])
    log_likelihood = posterior.log_posterior.reshape(-1) - log_posterior.log_prior(theta)
    best = float(log_posterior.log_likelihood(np.atleast_2d(optimum.theta))[0])
    return best_deviance(log_posterior, optimum) - 2.0 * (log_likelihood - best)


def best_deviance(log_posterior: LogPosterior, optimum: Optimum) -> float:
    """Deviance at the best fit: χ², plus what a fitted scatter or scale adds to ln det C.

    The change of ln det C is taken from the sample's own covariance, so that a fit with a free scatter can be
    compared with one without.
    """
    noise = log_posterior.sample.noise
    fitted = fitted_noise(log_posterior, optimum.values)
    scale = noise_scale(log_posterior, optimum.values)
    change = 0.0 if fitted is noise else full_log_det(fitted) - full_log_det(noise)
    return float(optimum.chi2) + change + 2.0 * log_posterior.sample.n * math.log(scale)


def noise_parameter(log_posterior: LogPosterior, values: Mapping[str, float], name: str, default: float) -> float:
    """Value of a parameter of the noise: fitted, held fixed, or its default."""
    value = values.get(name, log_posterior.fixed.get(name, default))
    return default if value is None else float(value)


def fitted_noise(log_posterior: LogPosterior, values: dict) -> Noise:
    """Return the sample's noise with the intrinsic scatter of these values added (the scale is apart)."""
    scatter = noise_parameter(log_posterior, values, "intrinsic_scatter", 0.0)
    noise = log_posterior.sample.noise
    return noise.plus_variance(scatter**2) if scatter else noise


def noise_scale(log_posterior: LogPosterior, values: Mapping[str, float]) -> float:
    """Return the factor on all errors at these values, 1 where there is none."""
    return noise_parameter(log_posterior, values, "covariance_scale", 1.0)


def full_log_det(noise: Noise) -> float:
    """ln det of the whole covariance, the systematic modes included (matrix determinant lemma)."""
    modes = noise.modes
    if modes.shape[1] == 0:
        return float(noise.log_det)
    white = noise.whiten(modes)
    return float(noise.log_det + np.linalg.slogdet(np.eye(modes.shape[1]) + white.T @ white)[1])


def information_criteria(log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum, evidence: dict) -> dict:
    """AIC, AICc, BIC and DIC of a fit.

    Parameters
    ----------
    log_posterior, posterior, optimum
        The fit.
    evidence : dict
        ``log_evidence`` and ``log_evidence_error``, None until they are known.

    Returns
    -------
    dict
        aic, aicc, bic, dic (None where undefined), k (parameters counted, a flat-marginalised offset
        included), k_names, n (data), p_dic (effective parameters), log_evidence, log_evidence_error.

    Notes
    -----
    AIC = D + 2k (Akaike 1974), AICc = AIC + 2k(k+1)/(n−k−1) (Hurvich & Tsai 1989), BIC = D + k ln n (Schwarz
    1978), with D the deviance at the best fit: χ² there, for a fixed covariance. DIC = D(θ̄) + 2 p_D, p_D = D̄ − D(θ̄) (Spiegelhalter
    et al. 2002). An analytically marginalised flat offset adds exactly 1 to D̄, hence to p_D.
    """
    k, n = int(log_posterior.n_parameters), int(log_posterior.n_data)
    best = best_deviance(log_posterior, optimum)
    aic = best + 2 * k
    aicc = aic + 2 * k * (k + 1) / (n - k - 1) if n - k - 1 > 0 else None
    p_dic, dic = _dic(log_posterior, posterior, optimum)
    return {
        "aic": aic,
        "aicc": aicc,
        "bic": best + k * math.log(n),
        "dic": dic,
        "k": k,
        "k_names": _counted(log_posterior, k),
        "n": n,
        "p_dic": p_dic,
        "log_evidence": evidence.get("log_evidence"),
        "log_evidence_error": evidence.get("log_evidence_error"),
    }


def _counted(log_posterior: LogPosterior, k: int) -> list[str]:
    """Names of the k parameters counted: the sampled ones, and the zero point where it is marginalised."""
    names = list(log_posterior.names)
    if k > len(names):
        names.append("absolute_magnitude" if "absolute_magnitude" in log_posterior.marginalised else "zero-point offset")
    return names


def _dic(log_posterior: LogPosterior, posterior: Posterior, optimum: Optimum) -> tuple[float | None, float | None]:
    """Effective number of parameters, and DIC.

    DIC is None where the posterior mean is no likely point (a curved, long posterior): p_D is negative there and means nothing.
    """
    deviance = deviance_draws(log_posterior, posterior, optimum)
    mean = posterior.chain.reshape(-1, posterior.chain.shape[-1]).mean(axis=0)
    anchor = best_deviance(log_posterior, optimum) + 2.0 * float(log_posterior.log_likelihood(np.atleast_2d(optimum.theta))[0])
    at_mean = anchor - 2.0 * float(log_posterior.log_likelihood(mean[None])[0])
    if not math.isfinite(at_mean):
        return None, None
    flat_marginalised = log_posterior.n_parameters - len(log_posterior.names)
    p_dic = float(deviance.mean()) + flat_marginalised - at_mean
    return p_dic, at_mean + 2 * p_dic if p_dic > 0 else None
