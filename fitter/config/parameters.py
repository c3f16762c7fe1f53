"""The `parameters:` section: which names a fit has, what each may be set to, and why others are refused."""

from __future__ import annotations

import math
from typing import Any

from fitter.config.problems import nearest
from fitter.config.yaml_file import Document
from fitter.cosmology import MODELS, Model, get_model
from fitter.errors import InputError
from fitter.parameters import PARAMETERS, Parameter

__all__ = ["FLAT", "complete_parameters", "free_parameters", "loose_problems", "parameter_problems", "term_prior_problems"]

FLAT: dict[str, list[float]] = {"flat": []}
"""How a config writes the improper flat prior of the absolute magnitude."""

_DARK_ENERGY = ("omega_lambda", "omega_de", "omega_k")
_SET_IN_UNCERTAINTY = {"intrinsic_scatter": "intrinsic", "covariance_scale": "covariance_scale"}


def free_parameters(model: str | Model, distance_scale: str, data_kind: str = "distance_modulus") -> dict[str, Parameter]:
    """Return the parameters that a config may set, each with its default prior.

    Parameters
    ----------
    model : str or Model
        The cosmological model.
    distance_scale : {"relative", "absolute", "calibrated"}
        What the zero point of the distances is known from.
    data_kind : {"distance_modulus", "magnitude"}
        What the table holds.
    """
    parameters = {p.name: p for p in (get_model(model) if isinstance(model, str) else model).parameters}
    if distance_scale in ("absolute", "calibrated"):
        parameters["H0"] = PARAMETERS["H0"]
    if distance_scale == "calibrated" or (distance_scale == "absolute" and data_kind == "magnitude"):
        parameters["absolute_magnitude"] = PARAMETERS["absolute_magnitude"]
    return parameters


def complete_parameters(
    given: dict, model: str | Model, distance_scale: str, data_kind: str = "distance_modulus"
) -> dict[str, dict | float]:
    """Return every parameter with its prior or fixed value, the defaults filled in, in reporting order."""
    complete: dict[str, Any] = {
        name: given.get(name, p.default_prior) for name, p in free_parameters(model, distance_scale, data_kind).items()
    }
    return complete


def parameter_problems(
    given: dict, model: str | Model, distance_scale: str, document: Document, data_kind: str = "distance_modulus"
) -> list[InputError]:
    """Return everything that is wrong with a `parameters:` section, one error per entry."""
    known = free_parameters(model, distance_scale, data_kind)
    problems = []
    for name, value in given.items():
        keys = ("parameters", name)
        if name in known:
            problem = _value_problem(name, value, known[name].default_prior, document)
        else:
            said, cure = _why_not(name, model if isinstance(model, str) else model.name, distance_scale, list(known))
            problem = document.error(said, keys, value=value, cure=cure)
        if problem is not None:
            problems.append(problem)
    everything = complete_parameters(given, model, distance_scale, data_kind)
    if distance_scale == "absolute" and everything.get("absolute_magnitude") == FLAT:
        cure = "Give `absolute_magnitude` a number or a normal prior; or use `distance_scale: relative`"
        problems.append(document.error("magnitudes on an absolute scale need the absolute magnitude", ("parameters",), cure=cure))
    if not problems and all(isinstance(v, int | float) for v in everything.values()):
        cure = "Give at least one parameter a prior, or leave it out for its default"
        problems.append(document.error("every parameter is held fixed, nothing is left to fit", ("parameters",), cure=cure))
    return problems


def loose_problems(given: dict, document: Document) -> list[InputError]:
    """Return what is wrong with a `parameters:` section whatever model and data it is for: names that none has, values that are none."""
    problems = []
    for name, value in given.items():
        if name in PARAMETERS:
            problem = _value_problem(name, value, PARAMETERS[name].default_prior, document)
        else:
            near = nearest(name, PARAMETERS)
            cure = f"Did you mean `{near}`?" if near else f"Parameters are {', '.join(n for n, p in PARAMETERS.items() if p.default_prior)}"
            problem = document.error("there is no such parameter", ("parameters", name), value=value, cure=cure)
        if problem is not None:
            problems.append(problem)
    return problems


def term_prior_problems(sample: Any, document: Document) -> list[InputError]:
    """Return what is wrong with the priors of uncertainty terms that are fitted."""
    terms = sample.get("uncertainty") if isinstance(sample, dict) else None
    problems = []
    for i, item in enumerate(terms if isinstance(terms, list) else ()):
        for name, term in _SET_IN_UNCERTAINTY.items():
            given = item.get(term) if isinstance(item, dict) else None
            if isinstance(given, dict) and len(given) == 1:
                problem = _prior_problem(name, given, ("sample", "uncertainty", i, term), document)
                problems += [problem] if problem is not None else []
    return problems


def _why_not(name: str, model: str, distance_scale: str, known: list[str]) -> tuple[str, str]:
    """Why a name is no parameter of this fit, and what to do."""
    if name == "H0" and distance_scale == "relative":
        return (
            "H0 cannot be had from a relative distance scale: H0 and the absolute magnitude of the supernovae only enter as one offset",
            "Remove H0; or set `distance_scale: absolute` if the moduli are anchored, or `calibrated` with known host moduli",
        )
    if name == "absolute_magnitude":
        return (
            f"the absolute magnitude is no parameter of this fit (distance_scale: {distance_scale})",
            "Remove it; it is fitted with `distance_scale: calibrated`, a magnitude column and calibrators",
        )
    if name in _SET_IN_UNCERTAINTY:
        term = _SET_IN_UNCERTAINTY[name]
        return f"{name} belongs to the uncertainties", f"Write its prior there: `uncertainty: [{{{term}: {{uniform: [low, high]}}}}]`"
    if name in _DARK_ENERGY:
        return _why_no_density(name, model, known)
    having = [m for m, c in MODELS.items() if any(p.name == name for p in c.parameters)]
    if having:
        return f"{model} has no parameter {name}", f"Remove it, or choose a model that has it: {', '.join(having)}"
    if name in PARAMETERS:
        return f"{name} is derived from the others, it cannot be set", f"Remove it. Parameters of this fit: {', '.join(known)}"
    near = nearest(name, [*known, *PARAMETERS])
    suggestion = f"Did you mean `{near}`? " if near else ""
    if near and near not in known:
        # The nearest name is one that this fit does not have: say so, instead of pointing to another quantity.
        why, cure = _why_not(near, model, distance_scale, known)
        suggestion += f"That is no parameter of {model} on this distance scale: {why}. {cure}. "
    return "there is no such parameter", f"{suggestion}Parameters of this fit: {', '.join(known)}"


def _why_no_density(name: str, model: str, known: list[str]) -> tuple[str, str]:
    other = next((n for n in known if n in _DARK_ENERGY), None)
    if name == "omega_k" or other is None:
        cure = "Remove it"
        if name == "omega_k" and other is not None:
            cure = f"Remove it; omega_m and {other} decide it"
        elif other is None:
            cure = f"Remove it, or choose the curved model {model.replace('flat_', 'curved_')}"
        return f"{name} is derived from the other parameters of {model}, it cannot be set", cure
    return f"the dark-energy density of {model} is called {other}", f"Write `{other}` instead"


def _value_problem(name: str, value: object, default: dict | None, document: Document) -> InputError | None:
    keys = ("parameters", name)
    example = default if default and default != FLAT else {"normal": [-19.25, 0.03]}
    ((kind, numbers),) = example.items()
    cure = f"Write a prior, e.g. `{name}: {{{kind}: {numbers}}}`, or a number to hold it fixed"
    if isinstance(value, bool) or not isinstance(value, dict | int | float):
        if isinstance(value, list) and len(value) == 2:
            cure = f"Say which prior: `{name}: {{uniform: {value}}}` or `{name}: {{normal: {value}}}`"
        return document.error("expected a prior or a number", keys, value=value, cure=cure)
    if isinstance(value, int | float):
        if not math.isfinite(value):
            return document.error("expected a finite number", keys, value=value, cure=cure)
        if name == "H0" and value <= 0:
            return document.error("H0 must be positive", keys, value=value, cure="Its unit is km/s/Mpc, e.g. 70")
        return None
    if name == "absolute_magnitude" and value == FLAT:
        return None
    return _prior_problem(name, value, keys, document)


def _prior_problem(name: str, value: dict, keys: tuple, document: Document) -> InputError | None:
    from fitter.likelihood.priors import PRIORS, parse_prior

    if len(value) == 1 and next(iter(value)) not in PRIORS:
        kind = next(iter(value))
        near = nearest(kind, PRIORS)
        cure = (f"Did you mean `{near}`? " if near else "") + f"Priors: {', '.join(PRIORS)}"
        return document.error(f"there is no prior called `{kind}`", (*keys, kind), cure=cure)
    try:
        prior = parse_prior(value)
    except InputError as error:
        return document.error(error.problem, keys, value=error.value, cure=error.cure)
    if name == "H0" and prior.high <= 0:
        return document.error("H0 must be positive", keys, value=value, cure="Its unit is km/s/Mpc, e.g. {uniform: [40, 100]}")
    return None
