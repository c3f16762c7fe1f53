"""Small shared looks at a fit: names, draws, priors' edges, values as plain Python."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from contextvars import ContextVar
from pathlib import Path
from typing import Any

import numpy as np

from fitter.parameters import Parameter
from fitter.parameters import parameter as declaration

__all__ = ["axis_label", "edge_density", "json_safe", "parameter", "relabelled", "unit_text"]

_EDGE_BINS = 25


_labels: ContextVar[Mapping[str, str]] = ContextVar("symbols in force instead of the declared ones", default={})  # noqa: B039 - never changed


@contextmanager
def relabelled(labels: Mapping[str, str] | None) -> Iterator[None]:
    """Use other LaTeX symbols than the declared ones, in every figure, table and text, while this context is open.

    Parameters
    ----------
    labels : mapping
        Parameter → symbol in LaTeX, without dollar signs.
    """
    token = _labels.set({**_labels.get(), **(labels or {})})
    try:
        yield
    finally:
        _labels.reset(token)


def parameter(name: str) -> Parameter:
    """Return the declaration of a parameter, with the user's symbol if there is one; an undeclared name is its own symbol."""
    try:
        declared = declaration(name)
    except KeyError:
        safe = name.replace("_", r"\_")
        declared = Parameter(name, rf"\mathrm{{{safe}}}", name, "", name)
    symbol = _labels.get().get(name)
    return declared if symbol is None else dataclasses.replace(declared, latex=symbol)


def unit_text(name: str) -> str:
    """Return the unit in brackets for a plain-text table, or an empty string."""
    unit = parameter(name).unit
    return f" [{unit}]" if unit else ""


def axis_label(name: str, exponent: int = 0) -> str:
    """Return the label of an axis: symbol, common power of ten and unit in LaTeX.

    Parameters
    ----------
    name : str
        The parameter.
    exponent : int
        The axis shows the parameter divided by ten to this power.
    """
    declared = parameter(name)
    inside = [rf"10^{{{exponent}}}"] if exponent else []
    inside += [declared.latex_unit] if declared.latex_unit else []
    unit = r"\ [" + r"\,".join(inside) + "]" if inside else ""
    return f"${declared.latex}{unit}$"


def edge_density(draws: np.ndarray, low: float, high: float) -> tuple[float, float]:
    """Posterior density at each edge of a prior, relative to its peak.

    Parameters
    ----------
    draws : (n,) float
        Draws of one parameter.
    low, high : float
        The support of its prior; an infinite end counts as zero density.

    Returns
    -------
    (at_low, at_high) : float
        Between 0 and 1. A Gaussian whose peak stands 2σ from the edge has 0.135 there.

    Notes
    -----
    A histogram over the central 99.8 % of the draws; the end bins are compared with the fullest one
    only where that range reaches to within half a bin of the edge.
    """
    start, stop = np.quantile(draws, [0.001, 0.999])
    if not stop > start:
        return 0.0, 0.0
    step = (stop - start) / _EDGE_BINS
    touches = (start - low < 0.5 * step, high - stop < 0.5 * step)
    if not any(touches):
        return 0.0, 0.0
    if touches[0]:
        start = low
    if touches[1]:
        stop = high
    counts, _ = np.histogram(draws, bins=_EDGE_BINS, range=(start, stop))
    # The peak of a histogram with noise is biased high: a mean over the three bins around it.
    peak = np.convolve(counts, np.ones(3) / 3, mode="valid").max()
    ends = np.minimum(counts[[0, -1]] / max(peak, 1), 1.0)
    return float(ends[0]) if touches[0] else 0.0, float(ends[1]) if touches[1] else 0.0


def json_safe(value: Any) -> Any:
    """Return a copy made of plain Python, with null where a number is not finite.

    Parameters
    ----------
    value : object
        Dicts, sequences, arrays, dataclasses, numbers, text.
    """
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        value = {f.name: getattr(value, f.name) for f in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(k): json_safe(v) for k, v in value.items()}
    if isinstance(value, np.ndarray):
        value = value.tolist()
    if isinstance(value, list | tuple | set | frozenset):
        return [json_safe(v) for v in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
