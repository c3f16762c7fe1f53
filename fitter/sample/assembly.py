"""From settings or arrays to a Sample: read, cut, check, put together; every problem is told at once."""

from __future__ import annotations

import os
from collections.abc import Callable, Collection, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import BoolArray, FloatArray
from fitter.errors import InputError, InputErrors
from fitter.sample.advice import advice
from fitter.sample.cuts import CutColumn, Cuts, one_per_object
from fitter.sample.files import reading, sha256_of
from fitter.sample.readers.layout import TextOptions
from fitter.sample.readers.numbers import to_numbers
from fitter.sample.sample import Sample
from fitter.sample.settings import Columns, SampleSettings
from fitter.sample.tables import Table, bordered_table, read_table
from fitter.sample.uncertainty.base import Rows
from fitter.sample.uncertainty.term import Term, combine, unique_labels
from fitter.sample.unused_errors import unused_errors
from fitter.sample.validate import Place, check_data, check_duplicates, check_inverse, check_redshift, check_sizes

__all__ = ["Problems", "assemble", "finish"]

_REDSHIFTS = ("redshift", "redshift_helio")
_NUMBERS = (*_REDSHIFTS, "distance_modulus", "magnitude", "calibrator_modulus")
_WORDS = ("group", "name")


@dataclass
class Problems:
    """Collects errors so that one pass finds them all."""

    found: list[InputError] = field(default_factory=list)

    @contextmanager
    def collect(self) -> Iterator[None]:
        """Keep an InputError that is raised inside and carry on after it."""
        try:
            yield
        except InputErrors as several:
            self.found += several.errors
        except InputError as problem:
            self.found.append(problem)

    def stop_if_any(self) -> None:
        """Raise what was found: the one error, or all of them."""
        unique = list({str(e): e for e in self.found}.values())
        if len(unique) == 1:
            raise unique[0]
        if unique:
            raise InputErrors(unique)


def assemble(settings: SampleSettings, folder: Path) -> Sample:
    """Do the work of `Sample.from_config`."""
    folder = Path(folder)
    path = folder / os.path.expanduser(settings.table)
    problems = Problems()
    table = _table(settings, folder, path)
    observed = _Observed(settings, table, problems)
    kept, cuts = observed.cut()
    rows = Rows(
        n=table.n,
        # A calibrator's distance does not come from its redshift: velocities and lensing leave it alone.
        redshift=np.where(observed.calibrated & observed.is_calibrator, np.nan, observed.values["redshift"]),
        numbers=observed.numbers,
        texts=observed.texts,
        lines=table.lines,
        keep=kept,
        folder=folder,
        table=settings.table,
        sources={settings.table: sha256_of(path)},
        notes=[note for note in (table.note, *cuts.notes) if note],
        names=observed.words["name"],
        bordered=settings.layout == "bordered",
    )
    terms = _build(settings, rows, problems) if kept.any() else []
    sample = _put_together(observed, rows, terms, cuts.removed, problems)
    said = unused_errors(settings, table, path, _text_options(settings), sample) if settings.layout == "rows" else None
    return sample if said is None else replace(sample, warnings=(*sample.warnings, said))


def _table(settings: SampleSettings, folder: Path, path: Path) -> Table:
    """Read the table; where that fails, tell of the other files that are not there as well."""
    options = _text_options(settings)
    try:
        if settings.layout == "bordered":
            return bordered_table(path, settings.data_kind, settings.table)
        numbers = _wanted_numbers(settings)
        # Where there is no calibrator, the end of a row may be left out, and where rows without values are dropped, the rest too.
        spare = numbers if settings.missing == "drop" else [settings.columns.calibrator_modulus]
        required = [ref for ref in numbers if ref not in spare]
        return read_table(path, options, numbers=numbers, texts=_wanted_words(settings), required=required, shown=settings.table)
    except InputError as problem:
        raise _with_missing_files(problem, settings, folder) from None


def _with_missing_files(problem: InputError, settings: SampleSettings, folder: Path) -> InputError:
    problems = Problems([problem])
    for given in (file for term in settings.uncertainty for file in term.files()):
        path = folder / os.path.expanduser(given)
        with problems.collect(), reading(path, given):
            open(path, "rb").close()
    return InputErrors(problems.found) if len(problems.found) > 1 else problem


def _text_options(settings: SampleSettings) -> TextOptions:
    return TextOptions(settings.header_tag, settings.row_tag, settings.delimiter, settings.comment)


def _mapped(columns: Columns, ref: str | int) -> str | int:
    """The column that a role or a column is read from."""
    if isinstance(ref, str) and ref in Columns.model_fields and getattr(columns, ref) is not None:
        return getattr(columns, ref)
    return ref


def _wanted_numbers(settings: SampleSettings) -> list:
    roles = [getattr(settings.columns, role) for role in _NUMBERS]
    return [r for r in roles if r is not None] + [r for t in settings.uncertainty for r in t.columns().get("numbers", [])]


def _wanted_words(settings: SampleSettings) -> list:
    rules = [ref for ref in settings.keep.rules if ref not in _NUMBERS or _mapped(settings.columns, ref) is ref]
    refs = [*rules, *(ref for term in settings.uncertainty for ref in term.columns().get("texts", []))]
    refs += [settings.keep.one_per] if settings.keep.one_per is not None else []
    roles = [getattr(settings.columns, role) for role in _WORDS]
    return [ref for ref in roles if ref is not None] + [_mapped(settings.columns, ref) for ref in refs]


class _Observed:
    """The columns of the table by role, before any cut."""

    def __init__(self, settings: SampleSettings, table: Table, problems: Problems) -> None:
        self.settings, self.table, self.problems = settings, table, problems
        self.columns = settings.columns
        self.unreadable: set[str] = set()
        self.values: dict[str, np.ndarray] = {}
        for role in ("redshift", "redshift_helio", settings.data_kind, "calibrator_modulus"):
            self.values[role] = self._read(role)
        # No modulus below 0 can be a host's: releases fill the column with such numbers where there is none.
        calibrator = self.values["calibrator_modulus"]
        self.values["calibrator_modulus"] = np.where(calibrator > 0, calibrator, np.nan)
        self.words = {role: self._words(role) for role in _WORDS}
        self.is_calibrator = np.isfinite(self.values["calibrator_modulus"])
        self.calibrated = settings.distance_scale == "calibrated"

    def _read(self, role: str) -> np.ndarray:
        ref = getattr(self.columns, role)
        if ref is not None:
            with self.problems.collect():
                return self.numbers(ref)
            self.unreadable.add(role)
        elif role == "redshift_helio":
            if "redshift" in self.unreadable:
                self.unreadable.add(role)  # or it would be missing in every row
            return self.values["redshift"]
        return np.full(self.table.n, np.nan)

    def _words(self, role: str) -> NDArray[np.str_] | None:
        ref = getattr(self.columns, role)
        if ref is None:
            return None
        with self.problems.collect():
            return self.table.texts(ref)
        return None

    def numbers(self, ref: str | int) -> np.ndarray:
        """Return a column as numbers, those that stand for a missing value turned to NaN."""
        values = self.table.numbers(_mapped(self.columns, ref))
        stand_ins = self.settings.missing_values
        return np.where(np.isin(values, stand_ins), np.nan, values) if stand_ins else values

    def texts(self, ref: str | int) -> np.ndarray:
        """Return a column, or a role's, as words."""
        return self.table.texts(_mapped(self.columns, ref))

    def place(self, kept: BoolArray) -> Place:
        """Return where the kept rows stand."""
        columns = {role: getattr(self.columns, role) for role in Columns.model_fields if getattr(self.columns, role) is not None}
        return Place(self.settings.table, self.table.lines[kept], columns | {"data": columns.get(self.settings.data_kind)})

    def cut(self) -> tuple[BoolArray, Cuts]:
        """Return the mask of the rows that are kept and the cuts that made it."""
        cuts = Cuts(self.settings.keep, self._cut_column, self.words["group"], self.is_calibrator, self.calibrated, self.settings.table)
        kept = cuts.apply()
        self.problems.found += cuts.problems
        if self.settings.missing == "drop":
            whole = self._has_values()
            cuts.removed["missing"] = int((kept & ~whole).sum())
            kept = kept & whole
        if not kept.any():
            counts = ", ".join(f"{label} {count}" for label, count in cuts.removed.items()) or "none"
            self.problems.found.append(
                InputError(
                    f"the cuts leave none of the {self.table.n} supernovae of {self.settings.table} (removed by {counts})",
                    key="sample.keep", cure=" ".join(["Widen the cuts.", *cuts.notes]),
                )
            )  # fmt: skip
        return kept, cuts

    def _cut_column(self, ref: str) -> CutColumn:
        mapped = _mapped(self.columns, ref)
        if ref in Columns.model_fields and mapped is ref and (self.table.columns.names is None or ref not in self.table.columns.names):
            raise InputError(
                f"keep cuts on {ref}, but `columns` does not map it", key=f"sample.keep.{ref}", cure=f"Add `{ref}: COLUMN` to `columns`"
            )
        if ref in self.values:
            read = self.numbers if ref in self.unreadable else self.values.__getitem__  # the former says again what is wrong
            return CutColumn(ref, None, lambda: read(ref), is_redshift=ref in _REDSHIFTS)
        position = self.table.columns.position(mapped)
        redshifts = self.table.columns.known(r for r in (self.columns.redshift, self.columns.redshift_helio) if r is not None)
        is_redshift = position in redshifts
        if position in self.table.floats:
            return CutColumn(ref, None, lambda: self.numbers(mapped), is_redshift=is_redshift)
        words = self.table.texts(mapped)
        return CutColumn(ref, words, self._converter(words, self.table.columns.label(position)), is_redshift=is_redshift)

    def _converter(self, words: NDArray[np.str_], label: str | int) -> Callable[[], np.ndarray]:
        def convert() -> FloatArray:
            values, problem = to_numbers(words, self.table.lines, label, self.settings.table)
            if problem is not None:
                raise problem
            return values

        return convert

    def _has_values(self) -> np.ndarray:
        needed = [self.values[role] for role in ("redshift", "redshift_helio", self.settings.data_kind) if role not in self.unreadable]
        for term in self.settings.uncertainty:
            for ref in term.columns().get("numbers", []):
                with self.problems.collect():
                    needed.append(self.numbers(ref))
        return np.all([np.isfinite(values) for values in needed], axis=0) if needed else np.ones(self.table.n, dtype=bool)


def _build(settings: SampleSettings, rows: Rows, problems: Problems) -> list[Term]:
    terms = []
    for item in settings.uncertainty:
        with problems.collect():
            term = item.build(rows)
            if term is not None:
                terms.append(term)
    return terms


def _put_together(observed: _Observed, rows: Rows, terms: list[Term], removed: dict, problems: Problems) -> Sample:
    settings, kept = observed.settings, rows.keep
    if settings.keep.one_per is not None and kept.any():
        kept, terms = _one_per(observed, kept, terms, removed, problems)
    take = {k: v[kept] for k, v in observed.values.items()}
    take["data"] = take.pop(settings.data_kind)
    take |= {role: None if words is None else words[kept] for role, words in observed.words.items()}
    place = observed.place(kept)
    inside = 0 if observed.calibrated else int(np.isfinite(take["calibrator_modulus"]).sum())
    if not observed.calibrated:
        take["calibrator_modulus"] = np.full(len(take["data"]), np.nan)
    skip = {"data" if role == settings.data_kind else role for role in observed.unreadable}
    return finish(
        take, terms, place, problems, skip=skip, allow_duplicates=settings.duplicates == "allow", calibrators_inside=inside,
        notes=tuple(rows.notes),
        rest={
            "data_kind": settings.data_kind,
            "distance_scale": settings.distance_scale,
            "intrinsic_prior": settings.intrinsic_prior,
            "covariance_scale_prior": settings.covariance_scale_prior,
            "removed": removed,
            "row": place.lines,
            "sources": rows.sources,
        },
    )  # fmt: skip


def _one_per(observed: _Observed, kept: BoolArray, terms: list[Term], removed: dict, problems: Problems) -> tuple[BoolArray, list[Term]]:
    """Keep the row with the smallest error of each object; the terms follow."""
    ref = observed.settings.keep.one_per
    if ref is None:
        return kept, terms
    with problems.collect():
        objects = observed.texts(ref)[kept]
        if not terms:
            return kept, terms
        mask = one_per_object(objects, combine(terms).total_variance)
        removed[f"one_per {ref}"] = int((~mask).sum())
        thinned = np.zeros_like(kept)
        thinned[np.flatnonzero(kept)[mask]] = True
        return thinned, [term.select(mask) for term in terms]
    return kept, terms


def finish(
    take: dict[str, Any], terms: list[Term], place: Place, problems: Problems, *, rest: dict, skip: Collection[str] = frozenset(),
    allow_duplicates: bool = False,
    calibrators_inside: int = 0, notes: Sequence[str] = (),
) -> Sample:  # fmt: skip
    """Check the rows and terms that are kept, and make the sample of them.

    Raises
    ------
    InputError, InputErrors
        Everything found here and before.
    """
    found, duplicates = _check(take, place, skip, rest["distance_scale"], allow_duplicates)
    problems.found += found + check_inverse(terms)
    problems.stop_if_any()
    labelled = unique_labels(terms)
    with problems.collect():
        noise = combine(labelled, place.file)
        problems.found += check_sizes(noise, place)
        problems.stop_if_any()
        _ = noise.log_det  # a covariance that is not positive definite is told now, and the factor kept
    problems.stop_if_any()
    sample = Sample(**take, terms=labelled, noise=noise, **rest)
    said = (*notes, *duplicates, *advice(sample, place.columns, calibrators_inside))
    return replace(sample, warnings=said)


def _check(
    take: dict, place: Place, skip: Collection[str], distance_scale: str, allow_duplicates: bool
) -> tuple[list[InputError], list[str]]:
    problems: list[InputError] = []
    for role in _REDSHIFTS:
        given = role == "redshift" or take[role] is not take["redshift"]
        if role not in skip and given and not (role == "redshift_helio" and role not in place.columns):
            problems += check_redshift(role, take[role], place)
    if "data" not in skip:
        problems += check_data(take["data"], place)
    calibrator = np.isfinite(take["calibrator_modulus"])
    if distance_scale == "calibrated" and calibrator.size and calibrator.all():
        problems.append(
            InputError(
                f"all {len(calibrator)} rows are calibrators: no other supernova is left to compare with them", file=place.file,
                column=place.columns.get("calibrator_modulus"), cure="Widen the cuts, or check the column: other rows have none",
            )
        )  # fmt: skip
    if distance_scale == "calibrated" and "calibrator_modulus" not in skip and not calibrator.any():
        problems.append(
            InputError(
                "distance_scale: calibrated needs at least one row with a calibrator modulus, and none has one", file=place.file,
                column=place.columns.get("calibrator_modulus"), cure="Check the column and the cuts, or use `distance_scale: relative`",
            )
        )  # fmt: skip
    if take.get("name") is None or {"redshift", "data"} & set(skip):
        return problems, []
    found, notes = check_duplicates(take["name"], take.get("group"), take["redshift"], take["data"], place, allow_duplicates)
    return problems + found, notes
