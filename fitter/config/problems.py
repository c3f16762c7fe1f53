"""Turns pydantic's validation errors into messages that name the row, the value and the cure."""

from __future__ import annotations

import difflib
import re
import types
import typing
from collections.abc import Iterable
from typing import Any

from pydantic import BaseModel, ValidationError

from fitter.config.examples import EXAMPLES
from fitter.config.yaml_file import Document, Key
from fitter.errors import InputError

__all__ = ["allowed_keys", "by_place", "nearest", "problems_of"]

_EXPECTED = {
    "float": "a number",
    "int": "a whole number",
    "bool": "true or false",
    "string": "text",
    "list": "a list in square brackets, e.g. [0.01, 2.3]",
    "tuple": "a list in square brackets, e.g. [0.01, 2.3]",
    "dict": "a section of `key: value` lines",
    "model": "a section of `key: value` lines",
    "dataclass": "a section of `key: value` lines",
    "none": "nothing",
    "path": "a path",
    "finite": "a finite number",
    "mapping": "a section of `key: value` lines",
}
_BOUNDS = {
    "greater_than": ("a value above", "gt"),
    "greater_than_equal": ("a value of at least", "ge"),
    "less_than": ("a value below", "lt"),
    "less_than_equal": ("a value of at most", "le"),
    "too_short": ("a length of at least", "min_length"),
    "too_long": ("a length of at most", "max_length"),
    "string_too_short": ("a length of at least", "min_length"),
    "multiple_of": ("a multiple of", "multiple_of"),
}


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word that a misspelt one most likely stands for, or None."""
    known = list(known)
    lower = {k.lower(): k for k in known}
    plain = str(word).lower().replace("-", "_").replace(" ", "_")
    if plain in lower:
        return lower[plain]
    close = difflib.get_close_matches(plain, lower, n=1, cutoff=0.6)
    return lower[close[0]] if close else None


def problems_of(error: ValidationError, model: type[BaseModel], document: Document, prefix: tuple[Key, ...] = ()) -> list[InputError]:
    """Translate a validation error.

    Parameters
    ----------
    error : pydantic.ValidationError
        What the validation of ``model`` found.
    model : type
        The model that was validated, for the sets of allowed keys.
    document : Document
        The config; gives the rows.
    prefix : tuple
        Where in the document the validated part stands.

    Returns
    -------
    list of InputError
        One per problem, in the order of the file.
    """
    grouped = by_place(error, _at(document.data, prefix))
    problems = [_message(entries, prefix + path, model, document) for path, entries in grouped.items()]
    return sorted(problems, key=lambda p: p.row or 0)


def by_place(error: ValidationError, data: object) -> dict[tuple[Key, ...], list[dict]]:
    """Return pydantic's entries by the path, in the data that were validated, of what they complain of."""
    found = _one_branch_each([(e, *_place(tuple(e["loc"]), data, e["type"])) for e in error.errors(include_url=False)])
    grouped: dict[tuple[Key, ...], list] = {}
    for entry, path, _ in found:
        grouped.setdefault(path, []).append(entry)
    for path in [p for p, entries in grouped.items() if entries[0]["type"] == "missing" and _is_misspelt(p, grouped)]:
        del grouped[path]
    return grouped


def _is_misspelt(missing: tuple[Key, ...], grouped: dict) -> bool:
    """Whether an unknown key of the same section stands for the missing one, so that one message is enough."""
    unknown = [p[-1] for p, entries in grouped.items() if entries[0]["type"] == "extra_forbidden" and p[:-1] == missing[:-1]]
    return any(nearest(str(key), [str(missing[-1])]) for key in unknown)


def allowed_keys(model: type[BaseModel], loc: tuple[Key, ...] = ()) -> list[str]:
    """Return the keys that a section may have; ``loc`` leads to it from ``model``."""
    models = [model]
    for step in loc:
        models = _after(models, step)
    return list(dict.fromkeys(key for m in models for key in _fields(m)))


def _after(models: list[type[BaseModel]], step: Key) -> list[type[BaseModel]]:
    """The models that a value can be of, one step of a location further: a key, or the name of one branch of a union."""
    named = [m for m in models if m.__name__ == step]
    inside = [c for m in models if step in _fields(m) for c in _models_in(_fields(m)[step].annotation)]
    free = [c for m in models if m.model_config.get("extra") == "allow" and step not in _fields(m) for c in _models_of_any_key(m)]
    return named or inside or free or models


def _models_of_any_key(model: type[BaseModel]) -> list[type[BaseModel]]:
    return _models_in(typing.get_type_hints(model)["__pydantic_extra__"])


def _fields(model: type[BaseModel]) -> dict:
    return {f.alias or name: f for name, f in model.model_fields.items()}


def _models_in(annotation: object) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and not isinstance(annotation, types.GenericAlias) and issubclass(annotation, BaseModel):
        return [annotation]
    return [m for part in typing.get_args(annotation) for m in _models_in(part)]


def _at(data: Any, keys: tuple[Key, ...]) -> Any:
    for key in keys:
        data = data[key]
    return data


def _place(loc: tuple[Key, ...], data: Any, kind: str) -> tuple[tuple[Key, ...], tuple]:
    """Split pydantic's location into the path in the file and the (path, name) of the union branches."""
    if not loc:
        return (), ()
    head, rest = loc[0], loc[1:]
    options = []
    known = (isinstance(data, dict) and head in data) or (isinstance(data, list) and isinstance(head, int) and head < len(data))
    if known:
        path, branches = _place(rest, data[head], kind)
        options.append(((head, *path), tuple(((head, *p), name) for p, name in branches)))
    if kind == "missing" and not rest:
        return (head,), ()
    path, branches = _place(rest, data, kind)
    options.append((path, (((), head), *branches)))
    # A branch may be called like a key of the file: the reading that leaves fewest names unexplained is the right one.
    return min(options, key=lambda option: len(option[1]))


def _one_branch_each(found: list) -> list:
    """Where a value may take several forms, keep the complaints about the form it resembles most."""
    scores: dict[tuple, dict] = {}
    for entry, path, branches in found:
        for place, name in branches:
            score = scores.setdefault(place, {})
            score[name] = score.get(name, 0) + _distance(entry, path == place)
    return [f for f in found if all(scores[place][name] == min(scores[place].values()) for place, name in f[2])]


def _distance(entry: dict, whole: bool) -> int:
    """How far a value is from a form: wrong keys say more than wrong values inside, and a value out of bounds says least."""
    kind = entry["type"]
    if kind in ("missing", "extra_forbidden"):
        return 10
    if whole and kind.endswith(("_type", "_parsing", "_from_float")):
        # A section is not meant to be a number, nor a number a section.
        return 20 if kind in ("model_type", "dict_type") or isinstance(entry.get("input"), dict) else 5
    return 1


def _message(entries: list[dict], keys: tuple[Key, ...], model: type[BaseModel], document: Document) -> InputError:
    entry = entries[0]
    kind, value = entry["type"], entry.get("input")
    if kind == "extra_forbidden":
        return _unknown_key(entry, keys, model, document)
    if kind == "missing" and isinstance(keys[-1], int):
        return document.error(f"the list is too short, number {keys[-1] + 1} is missing", keys[:-1], cure=_help(entry, keys[:-1], model))
    if kind == "missing":
        return document.error(f"the key `{keys[-1]}` is missing", keys[:-1], cure=_known(allowed_keys(model, entry["loc"][:-1])))
    if kind in ("value_error", "assertion_error"):
        cause = entry.get("ctx", {}).get("error")
        if isinstance(cause, InputError):
            return document.error(cause.problem, keys, value=cause.value, cure=cause.cure)
        return document.error(str(cause), keys, value=None if isinstance(value, dict) else value)
    if kind in ("literal_error", "enum"):
        words = re.findall(r"'([^']*)'", entry["ctx"]["expected"])
        near = nearest(value, words) if isinstance(value, str) else None
        cure = f"Did you mean `{near}`?" if near else _help(entry, keys, model)
        return document.error(f"expected one of: {', '.join(words)}", keys, value=value, cure=cure)
    expected = list(dict.fromkeys(_expected(e) for e in entries))
    return document.error(
        f"expected {' or '.join(expected)}", keys, value=_brief(value), cure=_cure(kind, value) or _help(entry, keys, model)
    )


def _help(entry: dict, keys: tuple[Key, ...], model: type[BaseModel]) -> str | None:
    """What the key is for that a wrong value stands under, and an example."""
    named = [k for k in keys if isinstance(k, str)]
    described = [d for d in _fields_on_the_way(model, entry["loc"]) if d[0] in named and d[1].description]
    if not described:
        return None
    key, field, owner = described[-1]
    example = getattr(owner, "example", None) or EXAMPLES.get(".".join(named[: named.index(key) + 1]))
    return f"`{key}`: {field.description.rstrip('.')}" + (f". Write e.g. {example}" if example else "")


def _fields_on_the_way(model: type[BaseModel], loc: tuple[Key, ...]) -> list[tuple]:
    """(key, field, model that has it) for each key that a location leads through."""
    models, found = [model], []
    for step in loc:
        holders = [m for m in models if step in _fields(m)]
        found += [(step, _fields(m)[step], m) for m in holders[:1]]
        models = _after(models, step)
    return found


def _unknown_key(entry: dict, keys: tuple[Key, ...], model: type[BaseModel], document: Document) -> InputError:
    known = allowed_keys(model, entry["loc"][:-1])
    key = str(keys[-1])
    near = nearest(key, known)
    if ":" in key:
        cure = "A colon after a key must be followed by a space. "
    else:
        cure = f"Did you mean `{near}`? " if near else ""
    return document.error(f"there is no key `{key}` here", keys, cure=cure + (_known(known) or ""))


def _known(keys: list[str]) -> str | None:
    return f"Known keys: {', '.join(keys)}" if keys else None


def _expected(entry: dict) -> str:
    kind, context = entry["type"], entry.get("ctx", {})
    if kind in _BOUNDS:
        words, key = _BOUNDS[kind]
        return f"{words} {context[key]:g}"
    if kind == "int_from_float":
        return "a whole number"
    return _EXPECTED.get(kind.split("_")[0], entry["msg"][:1].lower() + entry["msg"][1:])


def _cure(kind: str, value: object) -> str | None:
    if kind == "string_type" and isinstance(value, int | float):
        return f'Put it in quotes: "{value}"'
    if not isinstance(value, str):
        return None
    if re.fullmatch(r"[-+]?\d+,\d+", value.strip()):
        return "The decimal mark is a point"
    return None


def _brief(value: object) -> object:
    text = repr(value)
    return value if len(text) <= 80 else text[:79] + "…"
