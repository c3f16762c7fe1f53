"""The sample: what was observed, immutable."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from fitter.array_types import BoolArray, IntArray
from fitter.errors import InputError, InputErrors
from fitter.sample.noise import Noise, read_only
from fitter.sample.uncertainty.term import Term, combine

if TYPE_CHECKING:
    from fitter.sample.capsule import CapsuleSettings
    from fitter.sample.settings import SampleSettings

__all__ = ["DATA_KINDS", "DISTANCE_SCALES", "Sample"]

DATA_KINDS = ("distance_modulus", "magnitude")
DISTANCE_SCALES = ("relative", "absolute", "calibrated")


@dataclass(frozen=True, eq=False, repr=False)
class Sample:
    """N supernovae with their redshifts, distances and the covariance of these.

    Made by `from_config` or `from_arrays`; every array is read-only.

    Parameters
    ----------
    redshift : (N,) array
        In the cosmological frame.
    redshift_helio : (N,) array
        Heliocentric; equal to ``redshift`` where none was given.
    data : (N,) array
        Distance modulus or magnitude, mag.
    data_kind : str
        ``"distance_modulus"`` or ``"magnitude"``.
    calibrator_modulus : (N,) array
        Distance modulus of the host known from elsewhere, mag; NaN where the row is no calibrator.
    group, name : (N,) arrays of str, or None
        Survey and supernova.
    distance_scale : str
        ``"relative"``, ``"absolute"`` or ``"calibrated"``.
    terms : tuple of Term
        The fixed uncertainty terms, each under its label.
    noise : Noise
        Their sum.
    intrinsic_prior, covariance_scale_prior : dict, float or None
        As in the config: free parameters (or a held factor on all errors) of the likelihood.
    removed : dict
        How many rows each cut removed, in order.
    row : (N,) array of int
        Line number in the table (1 … N for arrays).
    sources : dict
        Input path → SHA-256.
    warnings : tuple of str
        What a practitioner would ask about.
    """

    redshift: np.ndarray
    redshift_helio: np.ndarray
    data: np.ndarray
    data_kind: str
    calibrator_modulus: np.ndarray
    group: np.ndarray | None
    name: np.ndarray | None
    distance_scale: str
    terms: tuple[Term, ...]
    noise: Noise
    intrinsic_prior: dict | None = None
    covariance_scale_prior: dict | float | None = None
    removed: dict[str, int] = field(default_factory=dict)
    row: IntArray = field(default_factory=lambda: np.empty(0, dtype=int))
    sources: dict[str, str] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for key in ("redshift", "redshift_helio", "data", "calibrator_modulus"):
            object.__setattr__(self, key, read_only(getattr(self, key)))
        for key in ("group", "name"):
            if getattr(self, key) is not None:
                object.__setattr__(self, key, read_only(getattr(self, key), None))
        row = self.row if np.size(self.row) else np.arange(1, self.n + 1)
        object.__setattr__(self, "row", read_only(row, int))

    def __repr__(self) -> str:
        what = self.data_kind.replace("_", " ")
        calibrators = f", {self.n_calibrators} calibrators" if self.n_calibrators else ""
        low, high = (f"{z:.3g}" for z in (self.redshift.min(), self.redshift.max()))
        return (
            f"Sample({self.n} supernovae{calibrators}, {low} ≤ z ≤ {high}, {what}, {self.distance_scale} scale, "
            f"uncertainties: {', '.join(self.labels)})"
        )

    @property
    def n(self) -> int:
        """Number of rows, calibrators included."""
        return len(self.redshift)

    @property
    def has_rows(self) -> bool:
        """Whether the supernovae themselves are known, not their compressed likelihood alone."""
        return True

    @cached_property
    def is_calibrator(self) -> BoolArray:
        """(N,) bool."""
        return read_only(np.isfinite(self.calibrator_modulus), bool)

    @property
    def n_calibrators(self) -> int:
        """Number of rows whose host has a known modulus."""
        return int(self.is_calibrator.sum())

    @property
    def labels(self) -> tuple[str, ...]:
        """Labels of the fixed uncertainty terms."""
        return tuple(term.label for term in self.terms)

    @cached_property
    def sha256(self) -> str:
        """SHA-256 of what is fitted: redshifts, data, calibrators and covariance, as little-endian float64."""
        digest = hashlib.sha256(f"{self.data_kind} {self.distance_scale} {self.n}".encode())
        noise = self.noise
        parts = (self.redshift, self.redshift_helio, self.data, self.calibrator_modulus)
        for values in (*parts, noise.variance, noise.dense, noise.precision, noise.modes):
            digest.update(b"|")
            if values is not None:
                digest.update(values.astype("<f8", copy=False).data.cast("B") if values.size else b"")
        return digest.hexdigest()

    @classmethod
    def from_config(cls, settings: CapsuleSettings | SampleSettings | None, folder: str | Path) -> Sample:
        """Read a sample.

        Parameters
        ----------
        settings : SampleSettings, CapsuleSettings or None
            The ``sample:`` section of a config; None is refused.
        folder : path-like
            Paths in the settings are relative to it.

        Raises
        ------
        InputError, InputErrors
            Everything that is wrong with the input, found in one pass.
        """
        from fitter.sample.assembly import assemble
        from fitter.sample.capsule import CapsuleSettings, sample_from_capsule

        if settings is None:
            raise InputError(
                "this config names no data: they came as arrays from Python", cure="Give it a `sample:`, or fit the arrays again"
            )
        if isinstance(settings, CapsuleSettings):
            return sample_from_capsule(settings, Path(folder))
        return assemble(settings, Path(folder))

    @classmethod
    def from_arrays(
        cls,
        z: ArrayLike,
        mu: ArrayLike,
        *,
        covariance: ArrayLike | None = None,
        precision: ArrayLike | None = None,
        sigma: ArrayLike | None = None,
        modes: ArrayLike | None = None,
        z_helio: ArrayLike | None = None,
        data_kind: str = "distance_modulus",
        calibrator_modulus: ArrayLike | None = None,
        group: ArrayLike | None = None,
        name: ArrayLike | None = None,
        distance_scale: str = "relative",
        intrinsic: dict[str, list[float]] | float | None = None,
        covariance_scale: dict[str, list[float]] | float | None = None,
    ) -> Sample:
        """Make a sample of arrays.

        Parameters
        ----------
        z, mu : (N,) arrays
            Cosmological redshift; distance modulus, or magnitude where ``data_kind`` says so (mag).
        covariance, precision : (N, N) array, optional
            Covariance (mag²) or its inverse; the latter stands alone.
        sigma : (N,) array or float, optional
            Uncorrelated errors, mag; added to the covariance.
        modes : (N, k) array, optional
            One-sigma shifts of k systematics, mag.
        z_helio, calibrator_modulus, group, name : (N,) arrays, optional
            As in `Sample`.
        intrinsic : float or dict, optional
            Intrinsic scatter, mag, or a prior such as ``{"uniform": [0, 0.5]}``.
        covariance_scale : float or dict, optional
            Factor on all errors, or its prior.

        Raises
        ------
        InputError, InputErrors
            Everything that is wrong with the arrays.
        """
        from fitter.sample.arrays import assemble_arrays

        given = {k: v for k, v in locals().items() if k not in ("cls", "assemble_arrays")}
        return assemble_arrays(**given)

    def without(self, labels: str | Iterable[str]) -> Sample:
        """Return the sample with some uncertainty terms switched off.

        Raises
        ------
        InputError
            A label is unknown, or no term would be left.
        """
        labels = [labels] if isinstance(labels, str) else list(labels)
        unknown = [label for label in labels if label not in self.labels]
        if unknown:
            raise InputErrors(
                [
                    InputError("no uncertainty term has this label", value=u, cure=f"The labels are: {', '.join(self.labels)}")
                    for u in unknown
                ]
            )
        kept = tuple(term for term in self.terms if term.label not in labels)
        return replace(self, terms=kept, noise=combine(kept))

    def select(self, mask: BoolArray | IntArray | Sequence[int]) -> Sample:
        """Return some of the rows (boolean mask or indices, in the order given); the rest is marginalised.

        Raises
        ------
        InputError
            No row is left.
        """
        index = np.arange(self.n)[mask]
        if not len(index):
            raise InputError("the selection leaves no supernova", cure="Widen it")
        terms = tuple(term.select(index) for term in self.terms)
        rows = {k: getattr(self, k)[index] for k in ("redshift", "redshift_helio", "data", "calibrator_modulus", "row")}
        rows |= {k: getattr(self, k)[index] for k in ("group", "name") if getattr(self, k) is not None}
        return replace(self, **rows, terms=terms, noise=combine(terms))
