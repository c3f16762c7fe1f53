"""What every uncertainty term is once it has been read: a label, a kind and its share of the covariance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.noise import Noise

__all__ = ["Term", "combine", "unique_labels"]


@dataclass(frozen=True, eq=False)
class Term:
    """One uncertainty term.

    Parameters
    ----------
    label : str
        What people call it; unique within a sample.
    kind : str
        Its key in a config: sigma, covariance, precision, modes, …
    noise : Noise
        Its share of the covariance, for the same rows as the sample.
    """

    label: str
    kind: str
    noise: Noise

    @property
    def variance(self) -> FloatArray:
        """(N,) its share of the total variance, mag²."""
        return self.noise.total_variance

    def select(self, mask: BoolArray | IntArray) -> Term:
        """Return the term for some of the rows."""
        return replace(self, noise=self.noise.select(mask))


def unique_labels(terms: Sequence[Term]) -> tuple[Term, ...]:
    """Number the labels that occur more than once, in order: sigma, sigma 2, …"""
    seen: dict[str, int] = {}
    out = []
    for term in terms:
        seen[term.label] = count = seen.get(term.label, 0) + 1
        out.append(term if count == 1 else replace(term, label=f"{term.label} {count}"))
    return tuple(out)


def combine(terms: Sequence[Term], source: str | None = None) -> Noise:
    """Add all terms up to one covariance.

    Parameters
    ----------
    terms : sequence of Term
        At least one; at most one of them a precision, which is inverted where another term adds to the diagonal.
    source : str or None
        What to name in a message where no term comes from a matrix file.

    Raises
    ------
    InputError
        There is no term.
    """
    if not terms:
        raise InputError(
            "there is no uncertainty term: nothing says how far the data scatter",
            file=source,
            key="sample.uncertainty",
            cure="Add at least one, e.g. {sigma: COLUMN} or {covariance: FILE}",
        )
    parts = [term.noise for term in terms]
    variance = sum((p.variance for p in parts[1:]), parts[0].variance)
    precise = [p for p in parts if p.precision is not None]
    if precise and (np.any(variance) or len(precise) > 1 or any(p.dense is not None for p in parts)):
        parts, precise = [p.inverted() for p in parts], []
    matrices = [p for p in parts if not p.is_diagonal]
    shifts = [p.modes for p in parts if p.mode_names] or [parts[0].modes[:, :0]]
    files = dict.fromkeys(p.source for p in matrices or parts if p.source)
    return Noise(
        variance,
        dense=None if precise else _total([p.dense for p in matrices if p.dense is not None]),
        precision=precise[0].precision if precise else None,
        modes=np.hstack(shifts) if len(shifts) > 1 else shifts[0],
        mode_names=tuple(name for p in parts for name in p.mode_names),
        source=" + ".join(files) or source,
        source_rows=(matrices or parts)[0].source_rows,
    )


def _total(matrices: list[FloatArray]) -> FloatArray | None:
    """Sum of dense matrices; a single one is passed on without a copy."""
    if len(matrices) < 2:
        return matrices[0] if matrices else None
    total = np.array(matrices[0])
    for matrix in matrices[1:]:
        total += matrix
    return total
