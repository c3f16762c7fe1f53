"""figures_data.h5: what the figures of the data show, so that they can be drawn again from the run folder alone."""

from __future__ import annotations

import json
import types
import typing
from dataclasses import dataclass, fields, is_dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from fitter.errors import InputError
from fitter.report.figures.covariance import BudgetData, CorrelationData, budget_data, correlation_data
from fitter.report.figures.history import HistoryData, history_data
from fitter.report.figures.hubble import HubbleData, hubble_data
from fitter.report.figures.residuals import ResidualData, residual_data
from fitter.report.hdf5 import writing_hdf5
from fitter.report.information import fitted_noise

if TYPE_CHECKING:
    import h5py
    from _typeshed import DataclassInstance

    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["DATA_FILE", "FigureData", "collect", "read_figure_data", "write_figure_data"]

DATA_FILE = "figures_data.h5"
_FORMAT = "mufitter figures 1"
_Stored = TypeVar("_Stored", bound="DataclassInstance")
_CURE = "Make the run again with `mufitter fit CONFIG --replace`"


@dataclass(frozen=True)
class FigureData:
    """What each figure of the data shows: at most some 20,000 single points, whatever N; None where there is nothing to show."""

    hubble: HubbleData | None
    residuals: ResidualData | None
    history: HistoryData | None
    correlation: CorrelationData | None
    budget: BudgetData | None


def collect(log_posterior: LogPosterior, optimum: Optimum, posterior: Posterior) -> FigureData:
    """Work out what the figures of a fit show.

    Parameters
    ----------
    log_posterior : LogPosterior
    optimum : Optimum
    posterior : Posterior
    """
    if not log_posterior.sample.has_rows:
        return FigureData(None, None, history_data(log_posterior, posterior), None, None)
    residuals = residual_data(log_posterior, optimum)
    if np.asarray(log_posterior.sample.is_calibrator).all():
        return FigureData(None, residuals, None, None, None)
    noise = fitted_noise(log_posterior, optimum.values)
    return FigureData(
        hubble=hubble_data(log_posterior, optimum, posterior),
        residuals=residuals,
        history=history_data(log_posterior, posterior),
        correlation=correlation_data(log_posterior.sample, noise),
        budget=budget_data(log_posterior, optimum.values),
    )


def write_figure_data(path: str | Path, data: FigureData) -> None:
    """Write the file, under a temporary name first."""
    with writing_hdf5(path, _FORMAT) as file:
        _store(file, data)


def read_figure_data(path: str | Path) -> FigureData:
    """Read the file back.

    Raises
    ------
    InputError
        A file that is missing, damaged or of another format.
    """
    import h5py

    path = Path(path)
    if not path.is_file():
        raise InputError("this run holds no data for its figures: another version of mufitter made it", file=path, cure=_CURE)
    try:
        with h5py.File(path, "r") as file:
            if file.attrs.get("format") != _FORMAT:
                cure = "Another version of mufitter wrote it: use that one"
                raise InputError(f"the format is not {_FORMAT!r}", file=path, value=file.attrs.get("format"), cure=cure)
            return _load(FigureData, file)
    except (OSError, KeyError, ValueError, TypeError) as error:
        raise InputError(f"the figures' data are damaged or cut short: {error}", file=path, cure=_CURE) from None


def _store(group: h5py.Group, value: Any) -> None:
    """Write the fields of a dataclass: arrays as datasets, the rest as attributes in JSON, what is None not at all."""
    for field in fields(value):
        item = getattr(value, field.name)
        if item is None:
            continue
        if is_dataclass(item):
            _store(group.create_group(field.name), item)
        elif isinstance(item, dict):
            inner = group.create_group(field.name)
            for name, array in item.items():
                inner.create_dataset(name, data=array)
        elif isinstance(item, np.ndarray) and item.dtype.kind in "fiub":
            group.create_dataset(field.name, data=item, compression="gzip" if item.size > 1000 else None)
        else:
            # A data set, not an attribute: the surveys of 20,000 points exceed what an attribute holds.
            group.create_dataset(field.name, data=json.dumps(item.tolist() if isinstance(item, np.ndarray) else item))


def _load(kind: type[_Stored], group: h5py.Group) -> _Stored:
    """Read a dataclass back, by the types of its fields."""
    types_of = typing.get_type_hints(kind)
    return kind(**{field.name: _item(types_of[field.name], group, field.name) for field in fields(kind)})


def _item(kind: Any, group: h5py.Group, name: str) -> Any:
    options = typing.get_args(kind) if isinstance(kind, types.UnionType) else (kind,)
    if name not in group:
        if type(None) not in options:
            raise KeyError(f"{name} is missing")
        return None
    kind = next(option for option in options if option is not type(None))
    stored = group[name]
    if isinstance(kind, type) and is_dataclass(kind):
        return _load(kind, stored)
    if typing.get_origin(kind) is dict:
        return {key: data[()] for key, data in stored.items()}
    value = stored[()]
    if isinstance(value, bytes):
        value = json.loads(value)
        return np.array(value) if kind is np.ndarray else value
    return value
