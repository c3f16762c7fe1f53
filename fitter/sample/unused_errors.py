"""A column of errors in the table that a config with a matrix leaves unused: does it agree with the matrix?"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from fitter.array_types import FloatArray
from fitter.sample.recognise import Recognised, error_column
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings
from fitter.sample.tables import Table, read_table

if TYPE_CHECKING:
    from fitter.sample.readers.layout import TextOptions

__all__ = ["unused_errors"]

_MOST_ROWS = 100_000
_CLOSE = (0.8, 1.25)  # median ratio of errors that is no news
_FAR = 2.0  # and a row is news beyond that
_AN_ERROR = (1e-6, 1e3)  # mag: what lies outside is no error of a measurement, and is not compared


def unused_errors(settings: SampleSettings, table: Table, path: Path, options: TextOptions, sample: Sample) -> str | None:
    """Compare the errors of a matrix that stands alone with those that the table gives; return a warning, or None.

    Only where there is one matrix and no sigma term, and the table's header names a column of errors.
    """
    kinds = [term.kind for term in sample.terms]
    matrices = [term for term in sample.terms if term.kind in ("covariance", "precision")]
    if len(matrices) != 1 or "sigma" in kinds or table.columns.names is None or sample.n > _MOST_ROWS:
        return None
    found = _error_column(settings, table, path, options)
    if found is None:
        return None
    name, sigma = found
    sigma = sigma[np.searchsorted(table.lines, sample.row)]
    usable = (sigma > _AN_ERROR[0]) & (sigma < _AN_ERROR[1])
    if usable.sum() < 0.5 * sample.n:
        return None
    ratio = np.where(usable, np.sqrt(np.abs(matrices[0].variance)) / np.where(usable, sigma, 1.0), np.nan)
    return _compared(name, matrices[0].label, ratio, sample)


def _error_column(settings: SampleSettings, table: Table, path: Path, options: TextOptions) -> tuple[str | int, FloatArray] | None:
    names = table.columns.names or []
    data = getattr(settings.columns, settings.data_kind)
    everything = [p for p in range(len(names)) if names[p]]
    again = read_table(path, options, numbers=[data, *everything], shown=settings.table)
    roles = {
        role: ref for role in ("redshift", "redshift_helio", "calibrator_modulus") if (ref := getattr(settings.columns, role)) is not None
    }
    guess = Recognised(again, options, roles={**roles, settings.data_kind: data})
    ref = error_column(guess)
    return None if ref is None else (ref, again.numbers(ref))


def _compared(name: str | int, label: str, ratio: FloatArray, sample: Sample) -> str | None:
    median = float(np.nanmedian(ratio))
    far = (ratio > _FAR * median) | (ratio < median / _FAR)
    if _CLOSE[0] < median < _CLOSE[1] and not far.any():
        return None
    beyond = np.abs(np.log(np.where(np.isfinite(ratio) & (ratio > 0), ratio, 1.0) / median))
    worst = int(np.argmax(beyond))
    if median < _CLOSE[0]:
        probably = f"the matrix probably holds systematics only: then add {{sigma: {name}}}"
    elif median > _CLOSE[1]:
        probably = f"{name} is probably the error of the measurement alone, and the matrix holds intrinsic scatter or more besides"
    else:
        probably = "in those rows one of the two is probably out of date or of another supernova: do both belong to the same table?"
    rows = (
        f" in {int(far.sum())} rows they differ otherwise, most in row {sample.row[worst]} (ratio {ratio[worst]:.3g});" if far.any() else ""
    )
    return (
        f"The error column {name} of the table and the diagonal of {label} disagree: the median ratio of the errors is {median:.3g};{rows} "
        f"{probably}. The matrix alone is used, as the config says."
    )
