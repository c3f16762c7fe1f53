"""A sample made of arrays, through the same checks as one read from files."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.sample.assembly import Problems, finish
from fitter.sample.matrices import make_symmetric
from fitter.sample.noise import Noise
from fitter.sample.sample import DATA_KINDS, DISTANCE_SCALES, Sample
from fitter.sample.uncertainty.sigma import LARGEST_ERROR
from fitter.sample.uncertainty.term import Term
from fitter.sample.validate import Place

__all__ = ["assemble_arrays"]


def assemble_arrays(
    z: ArrayLike,
    mu: ArrayLike,
    *,
    distance_scale: str,
    data_kind: str,
    intrinsic: dict[str, list[float]] | float | None,
    covariance_scale: dict[str, list[float]] | None,
    **given: Any,
) -> Sample:
    """Do the work of `Sample.from_arrays`."""
    problems = Problems()
    for key, value, known in (("data_kind", data_kind, DATA_KINDS), ("distance_scale", distance_scale, DISTANCE_SCALES)):
        if value not in known:
            problems.found.append(InputError(f"{key} must be one of {', '.join(known)}", value=value))
    take = _rows(z, mu, given, problems)
    problems.stop_if_any()
    n = len(take["data"])
    columns = {"redshift": "z", "data": "mu", "name": "name"} | ({"redshift_helio": "z_helio"} if given["z_helio"] is not None else {})
    place = Place(None, np.arange(1, n + 1), columns)
    inside = 0 if distance_scale == "calibrated" else int(np.isfinite(take["calibrator_modulus"]).sum())
    if distance_scale != "calibrated":
        take["calibrator_modulus"] = np.full(n, np.nan)
    terms = _terms(n, given, intrinsic, problems)
    if not (terms or problems.found):
        cure = "Give covariance, precision or sigma"
        problems.found.append(InputError("there is no uncertainty term: nothing says how far the data scatter", cure=cure))
    rest = {
        "data_kind": data_kind,
        "distance_scale": distance_scale,
        "intrinsic_prior": intrinsic if isinstance(intrinsic, dict) else None,
        "covariance_scale_prior": covariance_scale,
    }
    return finish(take, terms, place, problems, rest=rest, calibrators_inside=inside)


def _rows(z: ArrayLike, mu: ArrayLike, given: dict, problems: Problems) -> dict:
    data = _numbers(mu, "mu", None, problems)
    n = len(data)
    if not n:
        problems.found.append(InputError("there are no supernovae", cure="Give at least one"))
    redshift = _numbers(z, "z", n, problems)
    helio = redshift if given["z_helio"] is None else _numbers(given["z_helio"], "z_helio", n, problems)
    calibrators = np.full(n, np.nan)
    if given["calibrator_modulus"] is not None:
        calibrators = _numbers(given["calibrator_modulus"], "calibrator_modulus", n, problems)
        calibrators = np.where(calibrators > 0, calibrators, np.nan)
    take: dict[str, Any] = {"redshift": redshift, "redshift_helio": helio, "data": data, "calibrator_modulus": calibrators}
    for key in ("group", "name"):
        values = given[key]
        take[key] = None if values is None else np.array([str(v) for v in values], dtype=str)
        if values is not None and len(values) != n:
            problems.found.append(InputError(f"{key} must have one value per supernova, {n}", value=len(values)))
    return take


def _numbers(values: ArrayLike, key: str, n: int | None, problems: Problems) -> FloatArray:
    """A private (N,) copy of an array of numbers."""
    try:
        numbers = np.array(values, dtype=float)
    except (TypeError, ValueError) as problem:
        problems.found.append(InputError(f"{key} must be an array of numbers: {problem}"))
        return np.full(n or 1, np.nan)
    if numbers.ndim != 1 or (n is not None and len(numbers) != n):
        if numbers.ndim == 1:
            problems.found.append(InputError(f"{key} must have one number per supernova: it has {len(numbers)}, and mu {n}"))
        else:
            problems.found.append(InputError(f"{key} must have one axis, a number per supernova", value=numbers.shape))
        return np.full(n or 1, np.nan)
    return numbers


def _terms(n: int, given: dict, intrinsic: dict[str, list[float]] | float | None, problems: Problems) -> list[Term]:
    terms = []
    sigma, precision = given["sigma"], given["precision"]
    if precision is not None and (sigma is not None or given["covariance"] is not None):
        problems.found.append(
            InputError("a precision stands alone: it is the inverse of the whole covariance", cure="Leave the others out")
        )
    if sigma is not None:
        errors = np.full(n, float(sigma)) if np.ndim(sigma) == 0 else _numbers(sigma, "sigma", n, problems)
        bad = ~((errors >= 0) & (errors <= LARGEST_ERROR))
        if bad.any():
            worst = int(np.argmax(bad))
            problems.found.append(
                InputError("an error must be a finite number, 0 or more", row=worst + 1, column="sigma", value=float(errors[worst]))
            )
        terms.append(Term("sigma", "sigma", Noise(errors**2)))
    for kind in ("covariance", "precision"):
        if given[kind] is not None:
            with problems.collect():
                matrix = _matrix(given[kind], n, kind)
                dense, inverse = (matrix, None) if kind == "covariance" else (None, matrix)
                terms.append(Term(kind, kind, Noise(np.zeros(n), dense=dense, precision=inverse)))
    if given["modes"] is not None:
        with problems.collect():
            terms.append(_modes(given["modes"], n))
    if intrinsic is not None and not isinstance(intrinsic, dict):
        terms.append(Term("intrinsic", "intrinsic", Noise(np.full(n, float(intrinsic) ** 2))))
    return terms


def _matrix(values: ArrayLike, n: int, kind: str) -> FloatArray:
    matrix = np.array(values, dtype=float, order="C")
    if matrix.shape != (n, n):
        shape = " × ".join(map(str, matrix.shape))
        raise InputError(f"the {kind} is {shape}, but there are {n} supernovae", cure="Give one row and column per supernova")
    make_symmetric(matrix, f"the {kind}")
    return matrix


def _modes(values: ArrayLike, n: int) -> Term:
    modes = np.array(values, dtype=float)
    modes = modes[:, None] if modes.ndim == 1 else modes
    if modes.ndim != 2 or len(modes) != n or not np.all(np.isfinite(modes)):
        raise InputError(f"modes must be finite numbers, one row per supernova ({n}) and a column per systematic", value=modes.shape)
    names = tuple(f"mode {i + 1}" for i in range(modes.shape[1]))
    return Term("modes", "modes", Noise(np.zeros(n), modes=modes, mode_names=names))
