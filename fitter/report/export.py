"""Draws and marginal densities as plain tables, for others to overlay."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from fitter.errors import InputError
from fitter.report.figures.panels import density, plot_range

if TYPE_CHECKING:
    import pandas as pd

    from fitter.inference.posterior import Posterior

__all__ = ["EXPORT_FORMATS", "densities_table", "export", "posterior_table"]

EXPORT_FORMATS = ("csv", "parquet")
_DIGITS = 10


def posterior_table(posterior: Posterior, draws: int | None = None) -> pd.DataFrame:
    """Return equal-weight draws of every parameter, evenly thinned, whole steps at a time.

    Parameters
    ----------
    posterior : Posterior
    draws : int, optional
        Rows at most; by default the smallest effective sample size that the run recorded, as more rows only repeat each other.

    Returns
    -------
    pandas.DataFrame
        A column for each parameter and ``log_posterior``; empty where a parameter does not exist.
    """
    import pandas as pd

    total = posterior.log_posterior.size
    if draws is None:
        known = [e for e in (posterior.sampling.get("ess_bulk") or {}).values() if e]
        draws = int(min(known, default=total))
    if draws < 1:
        raise InputError("an export needs one draw at least", value=draws)
    rows = np.unique(np.linspace(0, total - 1, min(draws, total)).astype(int))
    columns = {name: posterior.draws(name).reshape(-1)[rows] for name in posterior.kinds}
    return pd.DataFrame(columns | {"log_posterior": posterior.log_posterior.reshape(-1)[rows]})


def densities_table(posterior: Posterior, points: int = 200) -> pd.DataFrame:
    """Return the marginal density of every parameter that varies, normalised to one over the range given.

    Parameters
    ----------
    posterior : Posterior
    points : int
        For each parameter.

    Returns
    -------
    pandas.DataFrame
        Columns ``parameter``, ``value``, ``density`` (in one over the parameter's unit).
    """
    import pandas as pd

    parts = []
    for name in posterior.kinds:
        draws = np.asarray(posterior.draws(name), dtype=float).ravel()
        draws = draws[np.isfinite(draws)]
        if draws.size < 2 or np.ptp(draws) == 0:
            continue
        x, y = density(draws, plot_range([draws], share=0.9999), bins=points)
        parts.append(pd.DataFrame({"parameter": name, "value": x, "density": y / (y.sum() * (x[1] - x[0]))}))
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=["parameter", "value", "density"])


def export(posterior: Posterior, folder: Path, fmt: str = "csv", draws: int | None = None) -> list[Path]:
    """Write posterior and densities, as CSV or Parquet.

    Parameters
    ----------
    posterior : Posterior
    folder : Path
    fmt : {"csv", "parquet"}
    draws : int, optional
        As for :func:`posterior_table`.

    Returns
    -------
    list of Path

    Raises
    ------
    InputError
        An unknown format, or Parquet without a library that writes it.
    """
    if fmt not in EXPORT_FORMATS:
        raise InputError("unknown export format", value=fmt, cure=f"Use {' or '.join(EXPORT_FORMATS)}.")
    written = []
    for name, table in (("posterior", posterior_table(posterior, draws)), ("densities", densities_table(posterior))):
        target = Path(folder) / f"{name}.{fmt}"
        temporary = target.with_name(f".{target.name}.{os.getpid()}")
        try:
            _write(table, temporary, fmt)
            os.replace(temporary, target)
        finally:
            temporary.unlink(missing_ok=True)
        written.append(target)
    return written


def _write(table: pd.DataFrame, path: Path, fmt: str) -> None:
    if fmt == "csv":
        table.to_csv(path, index=False, float_format=f"%.{_DIGITS}g")
    else:
        try:
            table.to_parquet(path, index=False)
        except ImportError:
            cure = "Install pyarrow beside mufitter, or use --format csv"
            raise InputError("no library that writes Parquet is installed", value=fmt, cure=cure) from None
    with path.open("rb+") as stream:
        os.fsync(stream.fileno())
