"""What a config may hold: as JSON Schema for editors, and as text for people."""

from __future__ import annotations

import types
import typing
from collections.abc import Iterable

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from fitter.config.examples import EXAMPLES
from fitter.config.problems import nearest
from fitter.config.settings import Config
from fitter.cosmology import MODELS
from fitter.errors import InputError, in_yaml
from fitter.likelihood.priors import PRIORS
from fitter.parameters import PARAMETERS

__all__ = ["config_schema", "explain"]


def config_schema() -> dict:
    """Return the JSON Schema of a config file."""
    schema = Config.model_json_schema()
    # Data given as arrays have no `sample` section, a file always has one.
    sample = schema["properties"]["sample"]
    sample.pop("default", None)
    sample.update(next(option for option in sample.pop("anyOf") if option.get("type") != "null"))
    schema["required"] = ["sample", *schema.get("required", [])]
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **schema, "title": "mufitter config"}


def explain(key: str | None = None) -> str:
    """Return what a key, parameter, model or prior means, its unit, default and an example.

    Parameters
    ----------
    key : str, optional
        A dotted key (``sampling.seed``), its last part, a name used as a value, or a parameter's symbol (``z_acc``). What there is
        to explain by default.

    Raises
    ------
    InputError
        An unknown key; the nearest known one is named.
    """
    fields = _all_fields()
    if key is None:
        return _overview(fields)
    key = _symbols().get(key.replace("_", ""), key)
    texts = [
        _field_text(path, field, fields) for path, several in fields.items() if key in (path, path.split(".")[-1]) for field in several
    ]
    texts += [_parameter_text(key.split(".")[-1])] if key.split(".")[-1] in PARAMETERS else []
    texts += [_model_text(key)] if key in MODELS else []
    texts += [_prior_text(key)] if key in PRIORS else []
    if not texts:
        known = [*fields, *(path.split(".")[-1] for path in fields), *PARAMETERS, *MODELS, *PRIORS]
        near = nearest(key, known)
        top = ", ".join(path for path in fields if "." not in path)
        cure = f"Did you mean `{near}`?" if near else f"The sections are {top}"
        raise InputError("there is no such key", value=key, cure=cure)
    return "\n\n".join(texts)


def _overview(fields: dict[str, list[FieldInfo]]) -> str:
    """What there is to explain."""
    sections = [path for path in fields if "." not in path]
    lines = [f"{'Sections:':<12}{', '.join(sections)}", f"{'Models:':<12}{', '.join(MODELS)}"]
    lines += [f"{'Parameters:':<12}{', '.join(PARAMETERS)}", f"{'Priors:':<12}{', '.join(PRIORS)}"]
    return "\n".join([*lines, "A key inside a section is written with a dot, or alone: sample.columns, seed."])


def _symbols() -> dict[str, str]:
    """Symbol, as tables and terminal show it, without underscores → parameter; symbols that two share are left out."""
    shown = [p.plain.replace("_", "") for p in PARAMETERS.values()]
    return {s: name for s, name in zip(shown, PARAMETERS, strict=True) if shown.count(s) == 1 and s not in PARAMETERS}


def _all_fields() -> dict[str, list[FieldInfo]]:
    """Every key; one that several forms of a section share has several meanings."""
    found: dict[str, list[FieldInfo]] = {}
    _collect(Config, "", found, ())
    return found


def _collect(model: type[BaseModel], prefix: str, found: dict[str, list[FieldInfo]], seen: tuple) -> None:
    for name, field in model.model_fields.items():
        path = f"{prefix}{field.alias or name}"
        meanings = found.setdefault(path, [])
        if all(field.description != other.description for other in meanings):
            meanings.append(field)
        for inner in _models(field.annotation):
            if inner not in seen:
                _collect(inner, f"{path}.", found, (*seen, inner))
    if model.model_config.get("extra") == "allow":
        for inner in _models(typing.get_type_hints(model)["__pydantic_extra__"]):
            _collect(inner, f"{prefix}COLUMN.", found, (*seen, inner))


def _models(annotation: object) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and not isinstance(annotation, types.GenericAlias) and issubclass(annotation, BaseModel):
        return [annotation]
    return [m for part in typing.get_args(annotation) for m in _models(part)]


def _field_text(path: str, field: FieldInfo, fields: Iterable[str]) -> str:
    lines = [path, f"  {field.description or 'see the README'}"]
    if field.is_required():
        lines.append("  required")
    elif (default := field.get_default(call_default_factory=True)) is not None and not isinstance(default, BaseModel):
        lines.append(f"  default: {default if default not in ('', {}, []) else 'empty'}")
    choices = _choices(field)
    if choices:
        lines.append(f"  one of: {', '.join(choices)}")
    inside = [other[len(path) + 1 :] for other in fields if other.startswith(f"{path}.") and "." not in other[len(path) + 1 :]]
    if inside:
        lines.append(f"  keys: {', '.join(inside)}")
    if path in EXAMPLES:
        lines.append(f"  example: {EXAMPLES[path]}")
    return "\n".join(lines)


def _choices(field: FieldInfo) -> list[str]:
    if typing.get_origin(field.annotation) is typing.Literal:
        return [str(choice) for choice in typing.get_args(field.annotation)]
    return list(MODELS) if field is Config.model_fields["model"] else []


def _parameter_text(name: str) -> str:
    p = PARAMETERS[name]
    symbol = f" ({p.plain})" if p.plain != name else ""
    lines = [f"{name}{symbol}, a parameter", f"  {p.meaning}"]
    lines.append(f"  unit: {p.unit}" if p.unit else "  without unit")
    models = [m for m, c in MODELS.items() if any(q.name == name for q in c.parameters)]
    if models:
        lines.append(f"  free in: {', '.join(models)}")
    if p.default_prior is None:
        lines.append("  derived, it cannot be set")
    else:
        ((kind, numbers),) = p.default_prior.items()
        lines.append(f"  default prior: {{{kind}: {numbers}}} (a model may have its own; `mufitter check` shows it)")
        if numbers:
            lines.append(f"  example: parameters: {{{name}: {{{kind}: {numbers}}}}}")
    return "\n".join(lines)


def _model_text(name: str) -> str:
    model = MODELS[name]
    # What stands after it in a docstring is the order of theta, for developers.
    said = (model.__doc__ or "").strip().splitlines()[0].split(": theta")[0].rstrip(".")
    lines = [f"{name}, a model", f"  {said}.", "  parameters and their default priors:"]
    priors = [f"{p.name}: {in_yaml(p.default_prior)}" for p in model.parameters]
    width = max(map(len, priors))
    lines += [f"    {prior:<{width}}   {p.meaning}" for prior, p in zip(priors, model.parameters, strict=True)]
    return "\n".join(lines)


def _prior_text(name: str) -> str:
    prior = PRIORS[name]
    return f"{name}, a prior\n  {(prior.__doc__ or '').strip().splitlines()[0]}\n  {name}: [{', '.join(prior.fields)}]"
