"""What the columns of an unknown table probably are, by their names and by what they hold."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.sample.files import open_binary, reading
from fitter.sample.readers.formats import format_of
from fitter.sample.readers.layout import TextOptions
from fitter.sample.readers.numbers import is_number
from fitter.sample.tables import Table, read_table

__all__ = ["Recognised", "error_column", "recognise"]

_HEAD = 200  # lines that are looked at for tags
_MOST_COLUMNS = 5000
_SEVERAL = 0.9  # share of rows that must look right


@dataclass
class Recognised:
    """What was found in a table.

    Parameters
    ----------
    table : Table
        Every column as words; as numbers where it holds them.
    options : TextOptions
        Tags found at the beginning of header and rows.
    roles : dict
        Role (a key of `columns`, or "sigma") → column, by name or position.
    reasons : dict
        Role → why.
    doubts : list of str
        What could not be told, or might be otherwise.
    """

    table: Table
    options: TextOptions
    roles: dict[str, str | int] = field(default_factory=dict)
    reasons: dict[str, str] = field(default_factory=dict)
    doubts: list[str] = field(default_factory=list)

    def numbers(self, role: str) -> np.ndarray:
        """(N,) numbers of a role's column."""
        return self.table.numbers(self.roles[role])

    @property
    def data(self) -> str | None:
        """Role of the data that are used: distance moduli where there are some, unless magnitudes have calibrators."""
        calibrated = "calibrator_modulus" in self.roles and "magnitude" in self.roles and "distance_modulus" not in self.roles
        if calibrated:
            return "magnitude"
        return next((role for role in ("distance_modulus", "magnitude") if role in self.roles), None)

    @property
    def data_column(self) -> str | int:
        """Column of the data.

        Raises
        ------
        KeyError
            No column holds data.
        """
        role = self.data
        if role is None:
            raise KeyError("no column of this table holds distances")
        return self.roles[role]


@dataclass(frozen=True)
class _Rule:
    role: str
    names: tuple[str, ...]  # in order of preference
    holds: Callable[[np.ndarray], bool]
    never: str = r"(?!)"
    by_content: bool = False  # whether the content alone may decide


def recognise(path: str | Path, shown: str | None = None) -> Recognised:
    """Look at a table and say which column is what.

    Raises
    ------
    InputError
        The file cannot be read as a table, or has too many columns to guess.
    """
    path, shown = Path(path), shown or str(path)
    options = _tags(path, shown) if format_of(path, shown) == "text" else TextOptions()
    table = _every_column(path, options, shown)
    found = Recognised(table, options, doubts=[table.note] if table.note else [])
    for rule in _NUMBER_RULES:
        _apply(rule, found)
    if found.data is not None:
        _sigma(found)
    _words(found)
    return found


def _every_column(path: Path, options: TextOptions, shown: str) -> Table:
    columns = read_table(path, options, shown=shown).columns
    n = columns.n
    if n > _MOST_COLUMNS:
        raise InputError(f"the table has {n} columns, too many to guess", file=shown, cure="Write the config by hand")
    # A header in a comment is taken for one where it has the names that are asked for.
    asked = _commented_names(path, n, shown) if columns.names is None and format_of(path, shown) == "text" else []
    return read_table(path, options, numbers=[*range(n), *asked], texts=range(n), shown=shown)


def _head(path: Path, shown: str) -> list[str]:
    with reading(path, shown), open_binary(path) as stream:
        return [line.decode("utf-8", "replace") for line in (stream.readline(1 << 16) for _ in range(_HEAD)) if line.strip()]


def _commented_names(path: Path, n: int, shown: str) -> list[str]:
    """The words of the last comment above the data, where there are as many as columns (or more) and none is a number."""
    comments = [line.lstrip().lstrip("#%!/").replace(",", " ").split() for line in _head(path, shown) if _is_comment(line)]
    last = comments[-1] if comments else []
    return last[:n] if len(last) >= n and not any(is_number(word) for word in last) else []


def _is_comment(line: str) -> bool:
    return line.lstrip().startswith(("#", "%", "!", "//"))


def _tags(path: Path, shown: str) -> TextOptions:
    """A word that begins (nearly) every data row, and one that begins the header above."""
    lines = [line.split() for line in _head(path, shown) if not _is_comment(line)]
    words = Counter(fields[0] for fields in lines)
    if not words:
        return TextOptions()
    tag, count = words.most_common(1)[0]
    if count < 2 or count < _SEVERAL * (len(lines) - 3) or not re.fullmatch(r"[^\W\d]\w*:", tag):
        return TextOptions()
    header = next((fields[0] for fields in lines if fields[0] != tag and fields[0].endswith(":") and len(fields) > 2), None)
    return TextOptions(header_tag=header, row_tag=tag)


def _share(values: FloatArray, low: float, high: float) -> float:
    """Share of the numbers that are within (low, high)."""
    finite = values[np.isfinite(values)]
    return float(np.mean((finite > low) & (finite < high))) if len(finite) else 0.0


def _is_redshift(values: FloatArray) -> bool:
    return _share(values, 0, 5) > _SEVERAL and len(np.unique(values[np.isfinite(values)])) > min(2, len(values) - 1)


def _is_modulus(values: FloatArray) -> bool:
    return _share(values, 20, 50) > _SEVERAL


def _is_magnitude(values: FloatArray) -> bool:
    return _share(values, 8, 30) > _SEVERAL


def _is_sigma(values: FloatArray) -> bool:
    return bool(_share(values, 0, 3) > _SEVERAL and np.nanmedian(values) < 1)


def _is_calibrator(values: FloatArray) -> bool:
    """Moduli in some rows, and nothing, or what stands for nothing, in the others."""
    known = np.isfinite(values) & (values > 0)
    return 0 < known.sum() < 0.5 * len(values) and _share(values[known], 20, 45) == 1


_ERROR = r"err|sig|unc|cov|^d|^e_|_e$|std|prob|bias"
_NUMBER_RULES = (
    _Rule("redshift_helio", (r"^z_?hel", r"hel"), _is_redshift, r"err|sig|unc|^d|vpec|^e_"),
    _Rule("redshift", (r"^z_?(hd|cosmo)", r"^z_?cmb", r"^z$", r"^redshift", r"cmb", r"^z"), _is_redshift, rf"hel|{_ERROR}", True),
    _Rule("calibrator_modulus", (r"host.*mod|mu.*host|host.*mu", r"cal.*mod|mu.*cal|cal.*mu", r"ceph|trgb|anchor"), _is_calibrator, _ERROR),
    _Rule("distance_modulus", (r"^mu$", r"^modul|modulus$", r"^mu|dist.*mod|^dm$"), _is_modulus, rf"{_ERROR}|host|cal|ceph", True),
    _Rule(
        "magnitude", (r"^m_?b.*(corr|std)|^m_?corr", r"^m_?b$", r"^mag", r"mag", r"^m_?b|^m$"), _is_magnitude, rf"{_ERROR}|host|mass", True
    ),
)


def _label(table: Table, position: int) -> str | int:
    label = table.columns.label(position)
    names = table.columns.names
    return label if isinstance(label, str) and names is not None and list(names).count(label) == 1 else position


def _number_columns(found: Recognised) -> list[int]:
    taken = {found.table.columns.position(ref) for ref in found.roles.values()}
    return [p for p in found.table.floats if p not in found.table.problems and p not in taken]


def _apply(rule: _Rule, found: Recognised) -> None:
    """Give a role to the column with the best name among those that hold the right numbers, else to the first that does."""
    if rule.role == "magnitude" and "distance_modulus" in found.roles and found.table.columns.names is None:
        return
    candidates = [p for p in _number_columns(found) if rule.holds(found.table.floats[p])]
    named = [(p, str(found.table.columns.label(p)).lower()) for p in candidates if isinstance(found.table.columns.label(p), str)]
    for pattern in rule.names:
        fitting = [p for p, name in named if re.search(pattern, name) and not re.search(rule.never, name)]
        if fitting:
            found.roles[rule.role] = _label(found.table, fitting[0])
            found.reasons[rule.role] = f"by its name, and its numbers fit ({_range(found.table.floats[fitting[0]])})"
            others = [str(_label(found.table, p)) for p in fitting[1:]]
            if others:
                found.doubts.append(f"{rule.role} might also be {' or '.join(others)}.")
            return
    if not rule.by_content or (rule.role == "magnitude" and "distance_modulus" in found.roles):
        return
    excluded = [p for p, name in named if re.search(rule.never, name)]
    unnamed = [p for p in candidates if p not in excluded and _goes_with_redshift(found, rule, p)]
    if unnamed:
        found.roles[rule.role] = _label(found.table, unnamed[0])
        found.reasons[rule.role] = f"only by what it holds ({_range(found.table.floats[unnamed[0]])})"
        found.doubts.append(f"{rule.role} is column {unnamed[0]} only because its numbers would fit: check it.")


def _goes_with_redshift(found: Recognised, rule: _Rule, position: int) -> bool:
    """Whether distances grow with the redshift, as a rank correlation above 0.5; and a redshift is no whole number."""
    values = found.table.floats[position]
    if rule.role == "redshift":
        return bool(np.mean(values == np.round(values)) < 0.5)
    if "redshift" not in found.roles:
        return False
    z = found.numbers("redshift")
    both = np.isfinite(z) & np.isfinite(values)
    if both.sum() < 5:
        return True
    ranks = np.array([np.argsort(np.argsort(v[both])) for v in (z, values)], dtype=float)
    ranks -= ranks.mean(axis=1, keepdims=True)
    return bool(ranks[0] @ ranks[1] > 0.5 * np.sqrt((ranks[0] @ ranks[0]) * (ranks[1] @ ranks[1])))


def _sigma(found: Recognised) -> None:
    """The errors of the data, by name, else the column that follows the data."""
    data = found.table.columns.position(found.data_column)
    own = _named_errors(found)
    if own:
        found.roles["sigma"], found.reasons["sigma"] = _label(found.table, own[0]), "by its name, and its numbers fit"
        if own[1:]:
            found.doubts.append(f"The errors might also be {' or '.join(str(_label(found.table, p)) for p in own[1:])}.")
    elif found.table.columns.names is None and data + 1 in _number_columns(found) and _is_sigma(found.table.floats[data + 1]):
        found.roles["sigma"], found.reasons["sigma"] = data + 1, "small numbers in the column after the data"
        found.doubts.append(f"The errors are column {data + 1} only because it follows the data: check it.")


def error_column(found: Recognised) -> str | int | None:
    """The column whose name says that it holds the errors of the data; None where there is none."""
    own = _named_errors(found)
    return _label(found.table, own[0]) if own else None


def _named_errors(found: Recognised) -> list[int]:
    """Columns with a name that says error and belongs to the data's, else says nothing but error; the best first."""
    stem = re.split(r"[_\W]", str(found.table.columns.label(found.table.columns.position(found.data_column))).lower())[0]
    labels = {p: found.table.columns.label(p) for p in _number_columns(found) if _is_sigma(found.table.floats[p])}
    names = {p: label.lower() for p, label in labels.items() if isinstance(label, str)}
    said = [p for p in names if re.search(r"err|sig|unc|std|^d|^e_|_e$|^e$", names[p])]
    own = [p for p in said if stem in names[p]] or [p for p in said if re.match(r"(sig(ma)?|err(or)?|unc\w*|std|e)($|_|\W)", names[p])]
    return sorted(own, key=lambda p: (names[p].split("_")[-1] in ("all", "tot", "total"), len(names[p])))


def _words(found: Recognised) -> None:
    """Names, of which nearly every row has its own, and groups, of which there are few."""
    taken = {found.table.columns.position(ref) for ref in found.roles.values()}
    n = found.table.n
    wanted = {
        "name": (r"^name$|^sn_?(name|id)?$|^c?id$|^object|designation|name", lambda k: k > 0.5 * n),
        "group": (r"survey|^group|^sample|^source|instrument|telescope|^set$", lambda k: 1 < k <= max(2, min(100, 0.3 * n))),
    }
    distinct = {p: len(set(w.tolist())) for p, w in found.table.words.items() if p not in taken}
    for role, (pattern, fits) in wanted.items():
        labels = {p: str(found.table.columns.label(p)).lower() for p in distinct}
        named = [p for p in distinct if re.search(pattern, labels[p]) and fits(distinct[p])]
        is_word = [p for p in distinct if p in found.table.problems and fits(distinct[p])] if found.table.columns.names is None else []
        chosen = (named or is_word)[:1]
        for p in chosen:
            found.roles[role] = _label(found.table, p)
            found.reasons[role] = f"{distinct.pop(p)} different words in {n} rows"


def _range(values: FloatArray) -> str:
    finite = values[np.isfinite(values)]
    return f"{finite.min():.4g} to {finite.max():.4g}"
