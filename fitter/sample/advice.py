"""What is not refused but a practitioner would ask about, each with its cure."""

from __future__ import annotations

import re

import numpy as np

from fitter.array_types import FloatArray
from fitter.sample.sample import Sample

__all__ = ["about_data", "advice", "scatter_about_curve", "smooth_residuals"]

_ODD = 4.0  # times larger or smaller than the scatter
_FEWEST_ROWS = 15  # below which a scatter about a curve says little


def advice(sample: Sample, columns: dict | None = None, n_calibrators_inside: int = 0) -> list[str]:
    """Return warnings about a sample.

    Parameters
    ----------
    sample : Sample
    columns : dict, optional
        Role → column in the table.
    n_calibrators_inside : int
        Rows with a known host modulus in a fit whose scale is not calibrated.
    """
    found = [
        _data_range(sample),
        _heliocentric(sample, columns or {}),
        _calibrators(sample, n_calibrators_inside),
        *_counted_twice(sample),
        *_included_already(sample),
        _systematics_only(sample),
        _size_of_errors(sample),
    ]
    return [text for text in found if text]


def about_data(sample: Sample) -> list[str]:
    """Return those of the warnings that the data themselves give rise to; idle where something stands in for them."""
    return [text for text in (_data_range(sample), _systematics_only(sample), _size_of_errors(sample)) if text]


def _data_range(sample: Sample) -> str | None:
    low, high = (5.0, 35.0) if sample.data_kind == "magnitude" else (20.0, 50.0)
    outside = (sample.data < low) | (sample.data > high)
    if not outside.any():
        return None
    row = int(np.argmax(outside))
    other = "`distance_modulus`" if sample.data_kind == "magnitude" else "`magnitude`"
    return (
        f"{int(outside.sum())} of {sample.n} values are outside the {low:g} to {high:g} mag expected of a "
        f"{sample.data_kind.replace('_', ' ')}, the first {sample.data[row]:g} in row {sample.row[row]}. Check the column; is it {other}?"
    )


def _heliocentric(sample: Sample, columns: dict) -> str | None:
    name = str(columns.get("redshift", ""))
    if re.search(r"hel", name, re.IGNORECASE):
        return (
            f"The redshift column {name!r} looks heliocentric. Distances need the cosmological (CMB) frame: map that to `redshift` and "
            "this one to `redshift_helio`."
        )
    apart = np.abs(sample.redshift - sample.redshift_helio) > 0.01
    if apart.any():
        row = int(np.argmax(apart))
        return (
            f"In {int(apart.sum())} rows the cosmological and the heliocentric redshift differ by more than 0.01, the first in row "
            f"{sample.row[row]} ({sample.redshift[row]:g} and {sample.redshift_helio[row]:g}). The Sun's motion makes 0.0012: check both."
        )
    return None


def _calibrators(sample: Sample, inside: int) -> str | None:
    if not inside:
        return None
    return (
        f"{inside} calibrator rows (hosts with a known modulus) are inside a fit with distance_scale: {sample.distance_scale}, where they "
        "are used like any other supernova and their covariance may hold the error of the host's distance. Drop them with "
        "`keep: {calibrators: drop}`, or use `distance_scale: calibrated`."
    )


def _counted_twice(sample: Sample) -> list[str]:
    """A covariance beside a sigma column that it holds already."""
    sigma = [t.noise.variance for t in sample.terms if t.kind == "sigma"]
    if not sigma or not np.all(sum(sigma) > 0):
        return []
    found = []
    for term in sample.terms:
        if term.kind != "covariance" or term.noise.dense is None:
            continue
        ratio = np.sqrt(np.abs(np.diagonal(term.noise.dense)) / sum(sigma))
        share = np.mean(ratio >= 0.99)
        if share > 0.95:
            found.append(
                f"The errors look counted twice: the covariance {term.label!r} has a diagonal at least as large as the sigma column in "
                f"{100 * share:.0f} % of the rows (median ratio of the errors {np.median(ratio):.3g}, largest in row "
                f"{sample.row[int(np.argmax(ratio))]}), so it probably holds the statistical errors already. Both are added, as the config "
                "says; if it does, remove the sigma term."
            )
    return found


def _included_already(sample: Sample) -> list[str]:
    added = [t for t in sample.terms if t.kind in ("peculiar_velocity", "lensing")]
    released = [t for t in sample.terms if t.kind == "sigma"] or [t for t in sample.terms if t.kind in ("covariance", "precision")]
    if not added or not released or sample.intrinsic_prior is not None or any(t.kind == "intrinsic" for t in sample.terms):
        return []  # errors to which an intrinsic scatter is still to be added are those of the measurement alone
    total = sum(t.variance for t in released)
    found = []
    for term in added:
        if np.mean(total >= term.noise.variance) > 0.99:
            share = np.max(term.noise.variance / np.maximum(total, 1e-300))
            found.append(
                f"{term.label} looks included already: the errors of the release are at least as large in every row (it is at most "
                f"{100 * share:.0f} % of their variance). Released errors usually hold it; if these do, remove the term."
            )
    return found


def _systematics_only(sample: Sample) -> str | None:
    """Errors far below the scatter of the data about a smooth curve, where no statistical term was given."""
    statistical = {"sigma", "precision", "intrinsic"}
    if statistical & {t.kind for t in sample.terms} or sample.intrinsic_prior is not None:
        return None
    used = ~sample.is_calibrator & (sample.redshift < 10)
    if used.sum() < _FEWEST_ROWS:
        return None
    pull, scatter = scatter_about_curve(sample.redshift[used], sample.data[used], np.sqrt(sample.noise.total_variance[used]))
    if pull < 2:
        return None
    return (
        f"The errors look systematic only: the data scatter by {scatter:.3g} mag about a smooth curve, {pull:.2g} times the errors given. "
        "Add the statistical errors, e.g. {sigma: COLUMN}."
    )


def _size_of_errors(sample: Sample) -> str | None:
    """Uncorrelated errors that are far from the scatter of the data: another unit, variances, or something left out."""
    known = ("sigma", "intrinsic", "peculiar_velocity", "lensing")
    terms = [t for t in sample.terms if t.kind in known]
    alone = not any(t.kind in ("covariance", "precision") for t in sample.terms)
    used = ~sample.is_calibrator & (sample.redshift < 10)
    if not any(t.kind == "sigma" for t in terms) or not alone or used.sum() < _FEWEST_ROWS:
        return None
    sigma = np.sqrt(sum(t.variance for t in terms))[used]
    pull, scatter = scatter_about_curve(sample.redshift[used], sample.data[used], sigma)
    fitted = sample.intrinsic_prior is not None or sample.covariance_scale_prior is not None
    if pull > _ODD and not fitted:
        return (
            f"The errors look too small: the data scatter by {scatter:.3g} mag about a smooth curve, {pull:.3g} times the errors given "
            f"(median {np.median(sigma):.3g} mag). Are they variances, or of the measurement alone? Then add an intrinsic scatter: "
            "{intrinsic: {uniform: [0, 0.5]}}."
        )
    if pull < 1 / _ODD:
        return (
            f"The errors look too large: the data scatter by {scatter:.3g} mag about a smooth curve, {pull:.3g} times the errors given "
            f"(median {np.median(sigma):.3g} mag). Are they in percent, or of the distance instead of the magnitude?"
        )
    return None


def scatter_about_curve(z: FloatArray, data: FloatArray, sigma: FloatArray) -> tuple[float, float]:
    """Robust scatter about a smooth Hubble diagram, in units of the errors and in mag."""
    residual = smooth_residuals(z, data, sigma, fewest=1)
    if residual is None:
        raise ValueError("there are no data to put a curve through")
    return 1.4826 * float(np.median(np.abs(residual / np.maximum(sigma, 1e-12)))), 1.4826 * float(np.median(np.abs(residual)))


def smooth_residuals(z: FloatArray, data: FloatArray, sigma: FloatArray, fewest: int = _FEWEST_ROWS) -> FloatArray | None:
    """Data less a smooth Hubble diagram, (N,) mag: a quartic in ln(1 + z) beside 5 log10 z, fitted three times without what is far off.

    None where there are fewer rows than ``fewest``.
    """
    if len(z) < fewest:
        return None
    u = np.log1p(z)
    design = np.polynomial.chebyshev.chebvander(2 * u / u.max() - 1, min(4, len(z) // 5))
    y = data - 5 * np.log10(z)
    sigma = np.maximum(sigma, 1e-12)
    weight = 1 / sigma
    for _ in range(3):
        fitted = np.linalg.lstsq(design * weight[:, None], y * weight, rcond=None)[0]
        residual = y - design @ fitted
        pull = np.abs(residual) / sigma
        weight = np.where(pull <= 3 * max(1.0, 1.4826 * float(np.median(pull))), 1 / sigma, 0.0)
    return residual
