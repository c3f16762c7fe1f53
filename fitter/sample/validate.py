"""What is refused in a sample: every check returns the problems it finds, so that all are told at once."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import BoolArray, FloatArray
from fitter.errors import InputError
from fitter.sample.noise import Noise
from fitter.sample.uncertainty.term import Term

__all__ = ["Place", "check_data", "check_duplicates", "check_finite", "check_inverse", "check_redshift", "check_sizes", "looks_inverse"]

_LARGEST_REDSHIFT = 1100.0  # nothing is seen from beyond the last scattering
_LARGEST_DATUM = 1000.0  # mag
_WILD_REDSHIFT = 0.01  # two redshifts of one supernova cannot differ by so much
_LARGEST_VARIANCE = 4.0  # mag²: nobody's median distance error is above 2 mag
_MOST_NAMES = 100_000  # compared in a tenth of a second
_BLANKS = re.compile(r"(?<!\d)[\s_-]+|[\s_-]+(?!\d)")  # those between two digits tell numbers apart
_SN = re.compile(r"^sn(?=\d)")
_SMALLEST_ERROR, _LARGEST_ERROR = 1e-6, 1e9  # mag
_SAID = 3  # how many examples a message gives


@dataclass(frozen=True)
class Place:
    """Where the rows of a sample stand, for messages.

    Parameters
    ----------
    file : str or None
    lines : (N,) array of int
        Line of the file that each row stands in.
    columns : dict
        Role → column in the file.
    """

    file: str | None
    lines: np.ndarray
    columns: dict = field(default_factory=dict)

    def error(self, problem: str, role: str, index: int, value: float | str, cure: str | None = None) -> InputError:
        """Return an error about one value."""
        return InputError(
            problem, file=self.file, row=int(self.lines[index]), column=self.columns.get(role, role), value=value, cure=cure
        )  # fmt: skip


def check_finite(role: str, values: FloatArray, place: Place) -> list[InputError]:
    """NaN and infinite values."""
    bad = ~np.isfinite(values)
    if not bad.any():
        return []
    index = int(np.argmax(bad))
    what = "there is no value" if np.isnan(values[index]) else "the value is infinite"
    return [
        place.error(
            f"{what}, but {role} must be a finite number{_more(bad)}", role, index, float(values[index]),
            "Correct it, cut the row with `keep:`, or drop rows without values with `missing: drop`",
        )
    ]  # fmt: skip


def check_data(values: FloatArray, place: Place) -> list[InputError]:
    """NaN, infinite, or nothing that a magnitude or a modulus can be."""
    problems = check_finite("data", values, place)
    bad = np.isfinite(values) & (np.abs(values) > _LARGEST_DATUM)
    if bad.any():
        index = int(np.argmax(bad))
        what = f"this is no magnitude or distance modulus{_more(bad)}"
        problems.append(place.error(what, "data", index, float(values[index]), "Check the column, or cut the row with `keep:`"))
    return problems


def check_redshift(role: str, values: FloatArray, place: Place) -> list[InputError]:
    """NaN, infinite, or not above 0: a distance modulus diverges there."""
    problems = check_finite(role, values, place)
    bad = np.isfinite(values) & (values <= 0)
    if bad.any():
        index = int(np.argmax(bad))
        cure = "Cut such rows with `keep: {redshift: [0.01, null]}` (a calibrator's redshift is not used: write any above 0 there)"
        problems.append(place.error(f"{role} must be above 0{_more(bad)}", role, index, float(values[index]), cure))
    bad = np.isfinite(values) & (values > _LARGEST_REDSHIFT)
    if bad.any():
        index = int(np.argmax(bad))
        cure = "Redshifts look like velocities? Divide them by 299792.458 km/s; otherwise correct the row or cut it with `keep:`"
        problems.append(place.error(f"this is no redshift{_more(bad)}", role, index, float(values[index]), cure))
    return problems


def check_duplicates(
    name: NDArray[np.str_], group: NDArray[np.str_] | None, redshift: FloatArray, data: FloatArray, place: Place, allowed: bool
) -> tuple[list[InputError], list[str]]:
    """Rows with the same name.

    Releases legitimately list a supernova once per survey that saw it. So the same name in different groups is only told of, and the
    same name within a group, or without groups to tell them apart, is refused where redshift or data differ. Redshifts of one name that
    differ by more than 0.01 are refused in any case: those are two objects, or a slip. ``allowed`` turns all of it into warnings.

    Returns
    -------
    problems : list of InputError
    notes : list of str
    """
    # Rows of one name and group stand next to each other, so that comparing neighbours misses none.
    order = np.argsort(name, kind="stable") if group is None else np.lexsort((group, name))
    same = (name[order][1:] == name[order][:-1]) & (name[order][1:] != "")
    first, second = order[:-1][same], order[1:][same]
    alike = _written_differently(name)
    if not len(first):
        return [], alike
    differ = (redshift[first] != redshift[second]) | (data[first] != data[second])
    wild = np.abs(redshift[first] - redshift[second]) > _WILD_REDSHIFT
    across = np.zeros(len(first), dtype=bool) if group is None else group[first] != group[second]
    wrong = differ & (wild | ~across)
    if not wrong.any() or allowed:
        names = list(dict.fromkeys(name[first].tolist()))
        listed = ", ".join(names[:_SAID]) + (f" and {len(names) - _SAID} more" if len(names) > _SAID else "")
        return [], [
            f"{len(names)} supernovae stand in more than one row ({listed}). Each row counts as independent unless the covariance says "
            "otherwise; `keep: {one_per: COLUMN}` keeps the best of each.",
            *alike,
        ]
    index = int(np.argmax(wrong))
    a, b = int(first[index]), int(second[index])
    what = (
        f"redshift {redshift[a]:g} and {redshift[b]:g}" if redshift[a] != redshift[b] else f"{data[a]:g} and {data[b]:g} mag"
    )  # fmt: skip
    cure = "" if group is not None else "map `group` where several surveys saw it, "
    problem = place.error(
        f"this name occurs twice with differing values, {what}; first in row {place.lines[a]}{_more(wrong, 'name')}", "name", b,
        str(name[b]), f"Correct it, {cure}keep one row each with `keep: {{one_per: COLUMN}}`, or accept it with `duplicates: allow`",
    )  # fmt: skip
    return [problem], []


def _written_differently(name: NDArray[np.str_]) -> list[str]:
    """Say which names are the same but for capitals, blanks and a leading SN; they count as different supernovae."""
    if len(name) > _MOST_NAMES:
        return []
    forms: dict[str, list[str]] = {}
    for written in dict.fromkeys(name.tolist()):
        forms.setdefault(_SN.sub("", _BLANKS.sub("", written.casefold())), []).append(written)
    pairs = [" and ".join(several) for key, several in forms.items() if key and len(several) > 1]
    if not pairs:
        return []
    listed = ", ".join(pairs[:_SAID]) + (f", and {len(pairs) - _SAID} more" if len(pairs) > _SAID else "")
    asked = "Is this one name" if len(pairs) == 1 else f"Are these {len(pairs)} names"
    return [f"{asked} written in two ways? {listed}. They count as different supernovae; write them alike if they are the same."]


def check_inverse(terms: list[Term]) -> list[InputError]:
    """A covariance that looks like an inverse, and the reverse, judged by its diagonal."""
    sigma = [term.noise.variance for term in terms if term.kind == "sigma"]
    variance = np.sum(sigma, axis=0) if sigma else None
    problems = []
    for term in terms:
        matrix = term.noise.precision if term.kind == "precision" else term.noise.dense
        if matrix is None:
            continue
        if term.kind == "covariance" and looks_inverse(np.diagonal(matrix), variance):
            problems.append(
                InputError(
                    f"this looks like an inverse covariance: its median diagonal element is {np.median(np.diagonal(matrix)):.3g}, "
                    f"{_beside(np.diagonal(matrix), variance)}",
                    file=term.noise.source, cure="Use it as uncertainty: [{precision: FILE}], without a sigma term",
                )
            )  # fmt: skip
        elif term.kind == "precision" and np.median(np.diagonal(matrix)) < 1 / _LARGEST_VARIANCE:
            median = np.median(np.diagonal(matrix))
            problems.append(
                InputError(
                    f"this looks like a covariance, not its inverse: its median diagonal element is {median:.3g}; as an inverse covariance "
                    f"that would mean errors of {abs(median) ** -0.5 if median else np.inf:.3g} mag",
                    file=term.noise.source, cure="Use it as uncertainty: [{covariance: FILE}]",
                )
            )  # fmt: skip
    return problems


def check_sizes(noise: Noise, place: Place) -> list[InputError]:
    """Errors that no distance has: so small that they would outweigh every other row, or too large to compute with."""
    with np.errstate(divide="ignore"):
        sigma = np.sqrt(np.abs(noise.total_variance)) if noise.precision is None else np.abs(np.diagonal(noise.precision)) ** -0.5
    # Not those of no error at all, or of a precision of zero: they are told as what they are.
    cases = (
        ((sigma > 0) & (sigma < _SMALLEST_ERROR), "and none is known so well", "Check the unit of the errors"),
        (np.isfinite(sigma) & (sigma > _LARGEST_ERROR), "so it tells nothing", "Cut this row with `keep:`"),
    )
    return [
        InputError(
            f"the uncertainty terms leave this datum an error of {sigma[i]:.3g} mag, {what}{_more(bad)}", file=noise.source or place.file,
            row=int(noise.source_rows[i]), cure=f"{cure}; outside {_SMALLEST_ERROR:g} to {_LARGEST_ERROR:g} mag errors are refused",
        )
        for bad, what, cure in cases if bad.any() for i in [int(np.argmax(bad))]
    ]  # fmt: skip


def looks_inverse(diagonal: FloatArray, variance: FloatArray | None) -> bool:
    """Whether a matrix is the inverse of a covariance: its diagonal is absurd as mag², or times σ² about 1."""
    if np.median(diagonal) > _LARGEST_VARIANCE:
        return True
    if variance is None or not np.all(variance > 0):
        return False
    product, ratio = np.median(diagonal * variance), np.median(diagonal / variance)
    return bool(1 / 3 < product < 3 and not 0.1 < ratio < 10)


def _beside(diagonal: FloatArray, variance: FloatArray | None) -> str:
    if variance is not None and np.all(variance > 0):
        return f"and times the square of the sigma column it is {np.median(diagonal * variance):.3g}"
    return f"an error of {np.sqrt(np.median(diagonal)):.3g} mag if it were a covariance"


def _more(bad: BoolArray, what: str = "row") -> str:
    others = int(np.sum(bad)) - 1
    return f", here and in {others} more {what}{'s' if others > 1 else ''}" if others else ""
