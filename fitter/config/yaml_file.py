"""A YAML file, read safely, with the line of every key kept for the messages."""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import yaml

from fitter.errors import InputError, InputErrors

__all__ = ["Document", "parse_yaml", "read_yaml"]

MAX_BYTES = 1_000_000
MAX_VALUES = 100_000
MAX_DEPTH = 50
_NO_TEXT = re.compile("[\0\ud800-\udfff]")

Key = str | int


@dataclass(frozen=True)
class Document:
    """What a YAML file says, and where it says it.

    Parameters
    ----------
    data : dict
        The content, plain Python objects only.
    lines : dict
        Path of keys and list positions → line number (1 is the first line).
    path : Path or None
        The file; None for settings that never were in one.
    """

    data: dict
    lines: dict[tuple[Key, ...], int] = field(default_factory=dict)
    path: Path | None = None

    def line(self, keys: tuple[Key, ...]) -> int | None:
        """Return the line of a key, or of the nearest key around it."""
        for length in range(len(keys), 0, -1):
            if keys[:length] in self.lines:
                return self.lines[keys[:length]]
        return None

    def error(self, problem: str, keys: tuple[Key, ...] = (), *, value: object = None, cure: str | None = None) -> InputError:
        """Return an InputError that names the file, the row and the dotted key."""
        key = ".".join(str(k) for k in keys) or None
        return InputError(problem, file=self.path, row=self.line(keys), key=key, value=value, cure=cure)


class _Loader(yaml.SafeLoader):
    """PyYAML's safe loader with the scalars of YAML 1.2: 1e-3 is a number, `no` and dates are words."""


_Loader.yaml_implicit_resolvers = {}
for _tag, _pattern, _first in (
    ("bool", r"true|True|TRUE|false|False|FALSE", "tTfF"),
    ("int", r"[-+]?[0-9]+|0o[0-7]+|0x[0-9a-fA-F]+", "-+0123456789"),
    ("float", r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?|[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)", "-+.0123456789"),
    ("null", r"~|null|Null|NULL|", ["~", "n", "N", ""]),
):
    _Loader.add_implicit_resolver(f"tag:yaml.org,2002:{_tag}", re.compile(rf"^(?:{_pattern})$"), list(_first))


def _integer(loader: _Loader, node: yaml.ScalarNode) -> int:
    text = loader.construct_scalar(node)
    return int(text, 0) if text[:2] in ("0o", "0x") else int(text)


_Loader.add_constructor("tag:yaml.org,2002:int", _integer)


def read_yaml(path: str | Path) -> Document:
    """Read one YAML file that holds one mapping.

    Parameters
    ----------
    path : path-like
        The file: UTF-8 (a byte-order mark is fine) or UTF-16 with its mark, at most 1 MB.

    Returns
    -------
    Document

    Raises
    ------
    InputError
        For a file that is missing, too large, not text, not YAML or not a mapping.
    InputErrors
        For keys given twice, all of them at once.
    """
    path = Path(path)
    return parse_yaml(_decode(_bytes_of(path), path), path)


def parse_yaml(text: str, path: Path | None = None) -> Document:
    """Read YAML from a string; ``path`` is only used in messages."""
    loader = None
    try:
        loader = _Loader(text)
        node = loader.get_single_node()
        walk = _Walk(loader, path)
        data = walk.value(node, ()) if node is not None else None
    except yaml.MarkedYAMLError as error:
        raise _syntax_error(error, text, path) from None
    except yaml.reader.ReaderError as error:
        row = text.count("\n", 0, error.position) + 1
        raise InputError("a control character, which YAML does not allow", file=path, row=row, value=chr(error.character)) from None
    except RecursionError:
        raise InputError("the file is nested too deeply to be a config", file=path) from None
    finally:
        if loader is not None:
            loader.dispose()
    if walk.problems:
        raise InputErrors(walk.problems) if len(walk.problems) > 1 else walk.problems[0]
    if data is None:
        raise InputError("the config is empty", file=path, cure="It needs at least `sample:` and `model:`")
    if not isinstance(data, dict):
        raise InputError(
            "a config is a list of `key: value` lines, this file is not", file=path, row=1, value=_shorten(data),
            cure="Is it the table? The config names the table under `sample: {table: …}`",
        )  # fmt: skip
    return Document(data, walk.lines, path)


class _Walk:
    """Turns YAML nodes into Python objects, noting lines and keys given twice."""

    def __init__(self, loader: _Loader, path: Path | None) -> None:
        self.loader, self.path = loader, path
        self.lines: dict[tuple[Key, ...], int] = {}
        self.problems: list[InputError] = []
        self.count = 0

    def value(self, node: yaml.Node, keys: tuple[Key, ...]) -> Any:
        self.count += 1
        # Aliases let a few lines stand for billions of values, or for themselves.
        if self.count > MAX_VALUES or len(keys) > MAX_DEPTH:
            raise InputError("the config holds too many values or is nested too deeply", file=self.path, row=node.start_mark.line + 1)
        if isinstance(node, yaml.CollectionNode) and node.tag not in ("tag:yaml.org,2002:map", "tag:yaml.org,2002:seq"):
            raise _tag_error(self.path, node.start_mark.line + 1, node.tag)
        if isinstance(node, yaml.MappingNode):
            return self._mapping(node, keys)
        if isinstance(node, yaml.SequenceNode):
            items = []
            for i, item in enumerate(node.value):
                self.lines[(*keys, i)] = item.start_mark.line + 1
                items.append(self.value(item, (*keys, i)))
            return items
        try:
            value = self.loader.construct_object(node, deep=True)
        except (ValueError, OverflowError):
            problem = "this value does not fit its YAML tag"
            raise InputError(problem, file=self.path, row=node.start_mark.line + 1, value=_shorten(node.value)) from None
        if isinstance(value, str) and _NO_TEXT.search(value):
            # Escapes can write what the reader refuses to read, and no path or file can hold it.
            raise InputError("a character that no text can hold", file=self.path, row=node.start_mark.line + 1, value=_shorten(value))
        return value

    def _mapping(self, node: yaml.MappingNode, keys: tuple[Key, ...]) -> dict:
        result: dict = {}
        first_line: dict = {}
        for key_node, value_node in node.value:
            line = key_node.start_mark.line + 1
            key = self.value(key_node, keys) if isinstance(key_node, yaml.ScalarNode) else None
            if not isinstance(key, str | int | float | bool):
                raise InputError("a key must be a word", file=self.path, row=line, cure="Is a quote or a colon missing?")
            # Numbers as keys are words here: no key of a config is a number.
            key = key_node.value
            if key in result:
                dotted = ".".join(str(k) for k in (*keys, key))
                problem = f"the key is given twice, on lines {first_line[key]} and {line}"
                self.problems.append(InputError(problem, file=self.path, row=line, key=dotted, cure="Keep one of them"))
                continue
            first_line[key] = self.lines[(*keys, key)] = line
            result[key] = self.value(value_node, (*keys, key))
        return result


def _bytes_of(path: Path) -> bytes:
    try:
        with path.open("rb") as stream:
            content = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise InputError("there is no such file", file=path, cure=_nearby(path)) from None
    except IsADirectoryError:
        inside = path / "config.yaml"
        cure = f"Did you mean {inside}?" if inside.exists() else "Give the config file itself"
        raise InputError("this is a folder, not a config", file=path, cure=cure) from None
    except OSError as error:
        raise InputError(f"the file cannot be read: {error.strerror}", file=path) from None
    if len(content) > MAX_BYTES:
        problem = f"the file is larger than {MAX_BYTES // 1_000_000} MB, too large for a config"
        raise InputError(problem, file=path, cure="Is it the table? The config names the table under `sample: {table: …}`")
    return content


def _nearby(path: Path) -> str | None:
    try:
        names = [p.name for p in path.parent.iterdir() if p.suffix in (".yaml", ".yml")]
    except OSError:
        return f"The folder {path.parent} cannot be read or does not exist"
    close = difflib.get_close_matches(path.name, names, n=1)
    return f"Did you mean {path.parent / close[0]}?" if close else None


def _decode(content: bytes, path: Path) -> str:
    encoding = "utf-16" if content[:2] in (b"\xff\xfe", b"\xfe\xff") else "utf-8-sig"
    try:
        return content.decode(encoding)
    except UnicodeDecodeError as error:
        row = content.count(b"\n", 0, error.start) + 1
        raise InputError("the file is not UTF-8 text", file=path, row=row, value=content[error.start : error.start + 1]) from None


def _syntax_error(error: yaml.MarkedYAMLError, text: str, path: Path | None) -> InputError:
    mark = error.problem_mark or error.context_mark
    row = mark.line + 1 if mark else None
    lines = text.splitlines()
    line = lines[row - 1] if row and row <= len(lines) else ""
    problem, cure = f"not valid YAML: {error.problem}", None
    if "\t" in line[: len(line) - len(line.lstrip())] or "'\\t'" in (error.problem or ""):
        cure = "Indent with spaces, not with tabs"
    elif isinstance(error, yaml.constructor.ConstructorError):
        return _tag_error(path, row, line.strip())
    elif isinstance(error, yaml.composer.ComposerError) and "document" in (error.context or "") + (error.problem or ""):
        problem, cure = "the file holds more than one YAML document", "Keep one; remove the line `---`"
    elif re.search(r"\w:[^\s/]", line):
        cure = "A colon after a key must be followed by a space"
    elif "%" in line or "@" in line or "`" in line:
        cure = "Put text with special characters in quotes"
    else:
        cure = "Look at this row and the one before it for a missing colon, bracket or quote, or a wrong indent"
    return InputError(problem, file=path, row=row, value=line.strip() or None, cure=cure)


def _tag_error(path: Path | None, row: int | None, value: str) -> InputError:
    return InputError("a YAML tag that a config cannot have", file=path, row=row, value=value, cure="Remove the word that begins with `!`")


def _shorten(value: object, length: int = 60) -> str:
    text = str(value)
    return text if len(text) <= length else text[: length - 1] + "…"
