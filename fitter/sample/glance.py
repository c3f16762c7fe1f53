"""What can be said of a sample's files where its settings are not right as a whole: those that are not there, columns that are missing."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

from pydantic import TypeAdapter, ValidationError

from fitter.errors import InputError, InputErrors
from fitter.sample.files import reading
from fitter.sample.readers.layout import TextOptions
from fitter.sample.tables import read_table
from fitter.sample.uncertainty import AnyTerm
from fitter.sample.uncertainty.base import TermSettings

__all__ = ["glance"]

_NUMBERS = ("redshift", "redshift_helio", "distance_modulus", "magnitude", "calibrator_modulus")
_WORDS = ("group", "name")
_OPTIONS = ("header_tag", "row_tag", "delimiter", "comment")


def glance(given: Any, folder: Path) -> list[InputError]:
    """Return what is wrong with the files that a ``sample:`` section names, without a word on the section itself.

    Parameters
    ----------
    given : object
        The section as the config holds it, right or not.
    folder : Path
        What its paths are relative to.
    """
    if not isinstance(given, dict):
        return []
    terms = [term for item in _list(given.get("uncertainty")) if (term := _term(item)) is not None]
    problems: list[InputError] = []
    files = [file for term in terms for file in term.files()]
    capsule: Any = given.get("capsule")
    for path in dict.fromkeys([*files, capsule] if _is_text(capsule) else files):
        try:
            with reading(folder / os.path.expanduser(path), path):
                open(folder / os.path.expanduser(path), "rb").close()
        except InputError as problem:
            problems.append(problem)
    if _is_text(given.get("table")) and given.get("layout", "rows") == "rows":
        problems = _table_problems(given, terms, folder) + problems
    return problems


def _table_problems(given: dict, terms: list[TermSettings], folder: Path) -> list[InputError]:
    columns = given.get("columns")
    mapped: dict[str, Any] = columns if isinstance(columns, dict) else {}
    roles = {role: ref for role, ref in mapped.items() if role in (*_NUMBERS, *_WORDS) and _is_column(ref)}
    numbers = [ref for role, ref in roles.items() if role in _NUMBERS] + [r for t in terms for r in t.columns().get("numbers", [])]
    texts = [ref for role, ref in roles.items() if role in _WORDS]
    texts += [ref for t in terms for ref in t.columns().get("texts", []) if ref not in mapped]
    options = TextOptions(**{key: given[key] for key in _OPTIONS if _is_text(given.get(key))})
    try:
        # What a row lacks is not asked here: rows that lack something may be cut, or dropped.
        table = read_table(folder / os.path.expanduser(given["table"]), options, numbers=numbers, texts=texts, shown=given["table"])
    except InputError as problem:
        return list(problem.errors) if isinstance(problem, InputErrors) else [problem]
    problems = {}
    for ask, refs in ((table.numbers, numbers), (table.texts, texts)):
        for ref in refs:
            try:
                ask(ref)
            except InputError as problem:
                problems[str(problem)] = problem
    return list(problems.values())


def _term(item: Any) -> TermSettings | None:
    adapter: TypeAdapter[TermSettings] = TypeAdapter(AnyTerm)
    try:
        return adapter.validate_python(item)
    except ValidationError:
        return None


def _list(value: Any) -> list:
    return value if isinstance(value, list) else []


def _is_text(value: Any) -> bool:
    return isinstance(value, str) and value != ""


def _is_column(value: Any) -> bool:
    return _is_text(value) or (isinstance(value, int) and not isinstance(value, bool) and value >= 0)
