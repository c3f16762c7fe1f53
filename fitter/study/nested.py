"""Which of two fits is the other with some parameters held at a value."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology import MODELS, Model, get_model, radiation_density
from fitter.likelihood.posterior import REFERENCE_H0, LogPosterior

__all__ = ["Nesting", "expressions", "nesting"]

Given = Mapping[str, float | FloatArray]
Expression = float | str | Callable[[Given], float | FloatArray]
# Parameters beside the model's, and what their absence means.
_OTHERS: dict[str, float | None] = {"H0": None, "absolute_magnitude": None, "intrinsic_scatter": 0.0, "covariance_scale": 1.0}


@dataclass(frozen=True)
class Nesting:
    """How a simpler fit stands inside a larger one.

    Parameters
    ----------
    extra : tuple of str
        Sampled parameters of the larger fit that the simpler one has not.
    values : dict
        For each sampled parameter of the larger fit: a number; the name of the simpler fit's parameter that it is; or a function
        of the simpler fit's parameters.
    small, large : LogPosterior
    """

    extra: tuple[str, ...]
    values: dict[str, Expression]
    small: LogPosterior
    large: LogPosterior

    @property
    def shared(self) -> dict[str, str]:
        """Larger fit's name → simpler fit's name, of the sampled parameters they share."""
        return {name: value for name, value in self.values.items() if isinstance(value, str)}

    def points(self, theta: FloatArray) -> FloatArray:
        """Points of the simpler fit, (W, n), as points of the larger one, (W, m)."""
        given = _named(self.small, theta)
        return np.column_stack([np.broadcast_to(_evaluate(self.values[name], given), len(theta)) for name in self.large.names])

    def at_edge(self) -> tuple[str, ...]:
        """Extra parameters whose nested value stands at an end of the larger fit's prior: on the boundary of what is allowed."""
        priors = dict(zip(self.large.names, self.large.priors, strict=True))
        return tuple(n for n in self.extra if isinstance(self.values[n], float) and self.values[n] in (priors[n].low, priors[n].high))

    def describe(self) -> dict[str, float | str]:
        """Nested value of each extra parameter: a number, or ``"flat"`` where flatness decides it."""
        return {n: value if isinstance(value := self.values[n], float) else "flat" for n in self.extra}


def expressions(model: Model, simpler: str) -> dict[str, Expression] | None:
    """Parameters of a model in terms of those of a simpler one that it contains, directly or through others; None if it does not."""
    if model.name == simpler:
        return {p.name: p.name for p in model.parameters}
    for within in model.contains:
        inside = {p.name: within.at.get(p.name, p.name) for p in model.parameters}
        if within.model == simpler:
            return inside
        deeper = expressions(get_model(within.model), simpler) if within.model in MODELS else None
        if deeper is not None:
            return {name: _through(value, deeper) for name, value in inside.items()}
    return None


def _through(value: Expression, deeper: dict[str, Expression]) -> Expression:
    if isinstance(value, str):
        return deeper[value]
    if callable(value):
        return lambda given: value({n: _evaluate(e, given) for n, e in deeper.items()} | {"omega_r": given["omega_r"]})
    return value


def _evaluate(value: Expression, given: Given) -> float | FloatArray:
    if isinstance(value, str):
        return given[value]
    return value(given) if callable(value) else value


def _named(log_posterior: LogPosterior, theta: FloatArray) -> dict[str, FloatArray]:
    """Every parameter of a fit, sampled or fixed, by name, and the radiation density."""
    given = {n: np.full(len(theta), v) for n, v in log_posterior.fixed.items()}
    given |= {n: theta[:, i] for i, n in enumerate(log_posterior.names)}
    h0 = given.get("H0", np.full(len(theta), REFERENCE_H0))
    given["omega_r"] = radiation_density(h0) if log_posterior.radiation else np.zeros(len(theta))
    return given


def nesting(small: LogPosterior, large: LogPosterior) -> Nesting | None:
    """Return how one fit is nested in another, or None.

    Parameters
    ----------
    small, large : LogPosterior
        Of the same data.
    """
    if small.sample.sha256 != large.sample.sha256 or small.radiation != large.radiation or small.marginalised != large.marginalised:
        return None
    found = expressions(large.model, small.model.name)
    if found is None:
        return None
    inside: dict[str, Expression | None] = dict(found)
    for name, absent in _OTHERS.items():
        inside[name] = name if name in small.names else small.fixed.get(name, absent)
    values: dict[str, Expression] = {}
    for name, value in inside.items():
        resolved = small.fixed.get(value, value) if isinstance(value, str) else value
        if name in large.names:
            if resolved is None:
                return None
            values[name] = resolved if isinstance(resolved, str) or callable(resolved) else float(resolved)
        elif resolved != large.fixed.get(name, _OTHERS.get(name)):
            return None
    names = [v for v in values.values() if isinstance(v, str)]
    extra = tuple(n for n in large.names if not isinstance(values[n], str))
    if not extra or sorted(names) != sorted(small.names):
        return None
    return Nesting(extra, values, small, large)
