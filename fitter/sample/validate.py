"""What is refused, and what is only asked about."""

from __future__ import annotations

import numpy as np

from fitter.errors import InputError

__all__ = ["check_choice", "check_matrix", "check_rows"]


def check_choice(data_kind, distance_scale) -> list[InputError]:
    from fitter.sample.sample import DATA_KINDS, DISTANCE_SCALES

    problems = []
    for key, value, known in (("data_kind", data_kind, DATA_KINDS), ("distance_scale", distance_scale, DISTANCE_SCALES)):
        if value not in known:
            problems.append(InputError(f"{key} must be one of {', '.join(known)}", column=key, value=value))
    return problems


def check_rows(rows, distance_scale) -> list[InputError]:
    n, problems = len(rows["data"]), []
    for key in ("redshift", "redshift_helio", "data"):
        values = rows[key]
        if values.shape != (n,):
            problems.append(InputError(f"{key} must have one number per supernova, {n}", column=key, value=values.shape))
            continue
        bad = np.flatnonzero(~np.isfinite(values))
        if len(bad):
            problems.append(InputError(f"{key} must be a finite number", row=int(bad[0]) + 1, column=key, value=float(values[bad[0]])))
        elif key != "data" and np.any(values <= 0):
            worst = int(np.argmin(values))
            problems.append(InputError(f"{key} must be above 0", row=worst + 1, column=key, value=float(values[worst])))
    return problems


def check_matrix(matrix, n, kind) -> list[InputError]:
    if matrix.shape != (n, n):
        return [InputError(f"the {kind} is {' × '.join(map(str, matrix.shape))}, but there are {n} supernovae", column=kind)]
    if not np.all(np.isfinite(matrix)):
        i, j = np.argwhere(~np.isfinite(matrix))[0]
        return [InputError(f"the {kind} holds a value that is not finite", row=int(i) + 1, column=int(j) + 1, value=float(matrix[i, j]))]
    return []
