"""Which single supernova moves the answer: every one left out in turn, by a rank-one update instead of N fits.

Leaving datum i out multiplies the likelihood by exp[½ (P r)_i² / P_ii], up to a constant (P: precision with the nuisance amplitudes
marginalised; r: residuals of the model). Points of the posterior weighted by that are points of the posterior without it [1]_.

References
----------
.. [1] Gelfand, A. E., Dey, D. K. & Chang, H. 1992, Bayesian Statistics 4, 147 (leave-one-out by importance weights);
   Cook, R. D. & Weisberg, S. 1982, Residuals and Influence in Regression, chapter 2 (deletion residuals).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.study.refit import Refit, resample
from fitter.study.whitened import Whitened

if TYPE_CHECKING:
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.noise import Noise
    from fitter.sample.sample import Sample

__all__ = ["influence", "noise_at"]

_POINTS = 2000
_ELEMENTS = 4_000_000  # of a points × supernovae table held at once
_LISTED = 10
_TRUSTED = 0.2  # share of the points that must still count, else the shift is only a lower bound


def noise_at(log_posterior: LogPosterior, values: dict[str, float]) -> tuple[Noise, float]:
    """The covariance of a fit, modes apart, with the best intrinsic scatter where that is free; and the best factor on it."""
    noise = log_posterior.design.noise
    if "intrinsic_scatter" in log_posterior.names:
        noise = noise.plus_variance(values["intrinsic_scatter"] ** 2)
    scale = values.get("covariance_scale", log_posterior.fixed.get("covariance_scale", 1.0))
    return noise, scale


def influence(log_posterior: LogPosterior, fitted: Refit, seed: np.random.SeedSequence) -> dict:
    """Shift of every parameter when one supernova is left out.

    Parameters
    ----------
    log_posterior : LogPosterior
    fitted : Refit
    seed : SeedSequence

    Returns
    -------
    dict
        ``largest``: {PARAMETER: [{row, name, redshift, shift (in σ), trusted}]}, the largest shifts first; ``rms``: {PARAMETER: of all
        shifts}; ``points``.
    """
    theta = resample(fitted.marginals, _POINTS, seed)
    shift, effective = shifts(log_posterior, theta, fitted.optimum.values)
    sd = np.array([fitted.marginals.sd(name) for name in log_posterior.names])
    shift /= sd
    largest = {}
    for j, name in enumerate(log_posterior.names):
        order = np.argsort(-np.abs(shift[:, j]), kind="stable")[:_LISTED]
        largest[name] = [
            {**identity(log_posterior.sample, i), "shift": float(shift[i, j]), "trusted": bool(effective[i] > _TRUSTED)} for i in order
        ]
    rms = np.sqrt((shift**2).mean(axis=0))
    return {"largest": largest, "rms": dict(zip(log_posterior.names, rms.tolist(), strict=True)), "points": len(theta)}


def identity(sample: Sample, i: int) -> dict:
    """What tells a supernova from the others."""
    return {
        "row": int(sample.row[i]),
        "name": None if sample.name is None else str(sample.name[i]),
        "group": None if sample.group is None else str(sample.group[i]),
        "redshift": float(sample.redshift[i]),
    }


def shifts(log_posterior: LogPosterior, theta: FloatArray, values: dict[str, float]) -> tuple[FloatArray, FloatArray]:
    """Shift of the posterior mean without each datum, (N, n), and the effective share of the points, (N,).

    Parameters
    ----------
    log_posterior : LogPosterior
    theta : (W, n) array
        Equally likely points.
    values : dict
        Of the best fit; the covariance is taken there.
    """
    noise, _ = noise_at(log_posterior, values)
    design = log_posterior.design
    frame = Whitened(design, noise, np.zeros((design.n, 0)))
    scale = np.ones(len(theta))
    if "covariance_scale" in log_posterior.names:
        scale = theta[:, log_posterior.names.index("covariance_scale")]
    elif "covariance_scale" in log_posterior.fixed:
        scale = scale * log_posterior.fixed["covariance_scale"]
    total, square, moment = np.zeros(design.n), np.zeros(design.n), np.zeros((design.n, theta.shape[1]))
    step = max(_ELEMENTS // design.n, 1)
    for start in range(0, len(theta), step):
        part = slice(start, start + step)
        residual = log_posterior.sample.data - log_posterior.expected(theta[part])
        gain = frame.back(frame.residuals(residual.T)) ** 2 / frame.diagonal[:, None]
        # One datum fewer is one factor 1/s fewer.
        weight = scale[part] * np.exp(0.5 * gain / scale[part] ** 2)
        total += weight.sum(axis=1)
        square += (weight**2).sum(axis=1)
        moment += weight @ (theta[part] - theta.mean(axis=0))
    return moment / total[:, None], total**2 / square / len(theta)
