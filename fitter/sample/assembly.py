"""From settings or arrays to a Sample: read, cut, check, put together."""

from __future__ import annotations

import numpy as np

from fitter.errors import InputError, InputErrors
from fitter.sample.noise import Noise
from fitter.sample.sample import Sample, make_sample
from fitter.sample.uncertainty.term import Term
from fitter.sample.validate import check_choice, check_matrix, check_rows

__all__ = ["assemble_arrays"]


def assemble_arrays(
    z, mu, *, sigma, covariance, precision, modes, intrinsic, covariance_scale, distance_scale, data_kind, **columns
) -> Sample:
    """Do the work of `Sample.from_arrays`."""
    data = np.array(mu, dtype=float)
    rows = {"redshift": np.array(z, dtype=float), "data": data}
    z_helio = columns["z_helio"]
    rows["redshift_helio"] = rows["redshift"] if z_helio is None else np.array(z_helio, dtype=float)
    calibrators = columns["calibrator_modulus"]
    rows["calibrator_modulus"] = np.full(data.shape, np.nan) if calibrators is None else np.array(calibrators, dtype=float)
    problems = check_choice(data_kind, distance_scale) + check_rows(rows, distance_scale)
    for key in ("group", "name"):
        rows[key] = None if columns[key] is None else np.array([str(v) for v in columns[key]])
    if problems:
        raise InputErrors(problems)
    terms = _array_terms(len(data), sigma=sigma, covariance=covariance, precision=precision, modes=modes, intrinsic=intrinsic)
    free = intrinsic if isinstance(intrinsic, dict) else None
    return make_sample(
        rows, terms, data_kind=data_kind, distance_scale=distance_scale, intrinsic_prior=free, covariance_scale_prior=covariance_scale
    )


def _array_terms(n: int, *, sigma, covariance, precision, modes, intrinsic) -> list[Term]:
    zero, terms, problems = np.zeros(n), [], []
    if precision is not None and (sigma is not None or covariance is not None):
        problems.append(InputError("a precision stands alone: it is the inverse of the whole covariance", column="precision"))
    if sigma is not None:
        sigma = np.broadcast_to(np.asarray(sigma, dtype=float), (n,))
        if not np.all(sigma >= 0):
            worst = int(np.argmin(np.nan_to_num(sigma, nan=-np.inf)))
            problems.append(InputError("an error must be 0 or more", row=worst + 1, column="sigma", value=float(sigma[worst])))
        terms.append(Term("sigma", "sigma", Noise(sigma**2)))
    for kind, matrix in (("covariance", covariance), ("precision", precision)):
        if matrix is not None:
            matrix = np.array(matrix, dtype=float)
            problems += check_matrix(matrix, n, kind)
            if not problems:
                terms.append(Term(kind, kind, Noise(zero, dense=matrix) if kind == "covariance" else Noise(zero, precision=matrix)))
    if modes is not None:
        modes = np.array(modes, dtype=float).reshape(n, -1)
        names = tuple(f"mode {i + 1}" for i in range(modes.shape[1]))
        terms.append(Term("modes", "modes", Noise(zero, modes=modes, mode_names=names)))
    if intrinsic is not None and not isinstance(intrinsic, dict):
        terms.append(Term("intrinsic", "intrinsic", Noise(np.full(n, float(intrinsic) ** 2))))
    if problems:
        raise InputErrors(problems)
    return terms
