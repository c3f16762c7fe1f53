"""A config with mistakes taken so that checking can go on: one wrong key must not hide what else is wrong.

What a misspelt key most likely stands for is read as such, and what cannot be right is left out. Nothing is ever fitted that way.
"""

from __future__ import annotations

import copy
from dataclasses import dataclass, field, replace
from typing import Any

from pydantic import ValidationError

from fitter.config.problems import allowed_keys, by_place, nearest, problems_of
from fitter.config.settings import Config
from fitter.config.yaml_file import Document, Key
from fitter.errors import InputError

__all__ = ["Reading", "read_through"]

_PASSES = 5  # each uncovers what the mistakes of the one before had hidden
_ITEM = "an item"


@dataclass
class Reading:
    """What could be made of a document.

    Parameters
    ----------
    document : Document
        The settings, mended where that was needed.
    config : Config or None
        The validated settings; None where anything was wrong.
    mended : Config or None
        The settings of `document`, where they could be made right.
    problems : list of InputError
    left_out : set of tuple
        Places whose content is not in `document` any more, or is in doubt.
    """

    document: Document
    config: Config | None = None
    mended: Config | None = None
    problems: list[InputError] = field(default_factory=list)
    left_out: set[tuple[Key, ...]] = field(default_factory=set)

    def is_whole(self, *section: Key) -> bool:
        """Whether nothing of a section had to be left out."""
        return not any(place[: len(section)] == section for place in self.left_out)

    def is_due_to_us(self, problem: InputError) -> bool:
        """Whether a problem may come from what was left out: it is about a section that has lost something."""
        about = tuple(problem.key.split(".")) if problem.key else ()
        for place in (tuple(map(str, place)) for place in self.left_out):
            # An item that is gone has moved those behind it, whose messages would name the wrong one.
            if place[: len(about)] == about or (place[-1] == _ITEM and about[: len(place) - 1] == place[:-1]):
                return True
        return False


def read_through(document: Document) -> Reading:
    """Validate a document to its end, over all that is wrong in it."""
    reading = Reading(document)
    for turn in range(_PASSES):
        try:
            config = Config.model_validate(reading.document.data)
        except ValidationError as wrong:
            error = wrong
        else:
            reading.config, reading.mended = config if turn == 0 else None, config
            break
        found = problems_of(error, Config, reading.document)
        said = {str(p) for p in reading.problems}
        new = [p for p in found if str(p) not in said and not reading.is_due_to_us(p)]
        reading.problems += new
        if not _mend(reading, error):
            break
    return reading


def _mend(reading: Reading, error: ValidationError) -> bool:
    """Mend the document of a reading in place of what an error complains of; whether anything changed."""
    data, lines, changed = copy.deepcopy(reading.document.data), dict(reading.document.lines), False
    # From the end, so that the places of list items hold until they are used.
    grouped = by_place(error, data)
    for place in sorted(grouped, key=lambda place: [str(k) if isinstance(k, str) else f"{k:09d}" for k in place], reverse=True):
        entries = grouped[place]
        kind, value = entries[0]["type"], entries[0].get("input")
        if not place or kind == "missing" or (kind == "value_error" and isinstance(value, dict) and isinstance(place[-1], str)):
            # Nothing that could be taken out; what is said of the whole section cannot be checked further.
            reading.left_out.add(place or (_ITEM,))
            continue
        changed = True
        section = _at(data, place[:-1])
        taken = section.pop(place[-1])
        if isinstance(place[-1], int):
            reading.left_out.add((*place[:-1], _ITEM))
            lines = _moved_up(lines, place)
            continue
        near = nearest(str(place[-1]), allowed_keys(Config, entries[0]["loc"][:-1])) if kind == "extra_forbidden" else None
        if near is None or near in section:
            reading.left_out.add(place)
            continue
        section[near] = taken
        lines |= {(*place[:-1], near, *path[len(place) :]): row for path, row in lines.items() if path[: len(place)] == place}
    reading.document = replace(reading.document, data=data, lines=lines)
    return changed


def _at(data: Any, place: tuple[Key, ...]) -> Any:
    for key in place:
        data = data[key]
    return data


def _moved_up(lines: dict, place: tuple[Key, ...]) -> dict:
    """The rows of a list's items after one of them is gone."""
    *section, gone = place
    depth, out = len(section), {}
    for path, row in lines.items():
        if path[:depth] == tuple(section) and len(path) > depth and isinstance(path[depth], int):
            if path[depth] == gone:
                continue
            if path[depth] > gone:
                path = (*path[:depth], path[depth] - 1, *path[depth + 1 :])
        out[path] = row
    return out
