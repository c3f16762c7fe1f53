"""The compressed likelihood of a sample as a small JSON file, and the sample that stands for it: no rows, the same χ²."""

from __future__ import annotations

import base64
import binascii
import hashlib
import json
import os
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import SimpleNamespace
from typing import Annotated, Any, Literal, NoReturn

import numpy as np
from pydantic import BaseModel, ConfigDict, Discriminator, Field, Tag, ValidationError

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.errors import InputError
from fitter.sample.files import reading, sha256_of
from fitter.sample.noise import Noise
from fitter.sample.sample import Sample
from fitter.sample.settings import SampleSettings
from fitter.sample.uncertainty.base import PathText

__all__ = ["CAPSULE_SCHEMA", "AnySample", "Capsule", "CapsuleSample", "CapsuleSettings", "read_capsule"]

CAPSULE_SCHEMA = "mufitter capsule 1"
_CURE = "Write it again with `mufitter capsule RUN`, or fetch it again"


class CapsuleSettings(BaseModel):
    """A sample as its compressed likelihood: the file holds everything else, cuts and uncertainties included."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    capsule: PathText = Field(description="A file that `mufitter capsule` wrote, instead of a table; its path is relative to the config.")

    @property
    def table(self) -> str:
        """The file that is read."""
        return self.capsule

    @property
    def uncertainty(self) -> tuple:
        """No term can be told from another any more."""
        return ()


def _form(given: Any) -> str:
    return "CapsuleSettings" if isinstance(given, CapsuleSettings) or (isinstance(given, dict) and "capsule" in given) else "SampleSettings"


AnySample = Annotated[
    Annotated[SampleSettings, Tag("SampleSettings")] | Annotated[CapsuleSettings, Tag("CapsuleSettings")], Discriminator(_form)
]


class Amplitude(BaseModel):
    """A nuisance amplitude that the file keeps, with a unit Gaussian prior that is part of the factor."""

    name: str
    sigma: float = Field(description="What an amplitude of 1 shifts, mag.")


class Capsule(BaseModel):
    """The contents of the file; docs/capsule.md says what each key means.

    The likelihood is ln L = log_norm − ½ (‖y − R v‖² + rho2), v = [amplitudes, f − f_ref at the nodes, magnitude].
    """

    model_config = ConfigDict(frozen=True)

    format: Literal["mufitter capsule 1"] = Field("mufitter capsule 1", alias="schema")
    title: str = ""
    citation: str = ""
    made_by: str = ""
    without: tuple[str, ...] = ()
    n: int = Field(ge=1)
    n_calibrators: int = Field(ge=0)
    redshift_min: float = Field(gt=0)
    redshift_max: float = Field(gt=0)
    data_kind: Literal["distance_modulus", "magnitude"]
    distance_scale: Literal["relative", "absolute", "calibrated"]
    covariance_scale: dict[str, Any] | float | None = None
    correlated: bool = True
    terms: tuple[dict[str, Any], ...] = ()
    groups: dict[str, int] = {}
    removed: dict[str, int] = {}
    sample_sha256: str
    sources: dict[str, str] = {}
    order: int = Field(ge=8, le=256)
    u_max: float = Field(gt=0)
    amplitudes: tuple[Amplitude, ...] = ()
    log_norm: float
    rho2: float
    reference: str
    y: str
    factor: str
    checksum: str

    @property
    def width(self) -> int:
        """Number of columns of R."""
        return len(self.amplitudes) + self.order + 2

    def arrays(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return R (c, c) upper triangular, y (c,) and f_ref at the nodes (K+1,)."""
        r = np.zeros((self.width, self.width))
        r[np.triu_indices(self.width)] = unpack(self.factor)
        return r, unpack(self.y), unpack(self.reference)

    def digest(self) -> str:
        """SHA-256 of the numbers, in the order factor, y, reference, rho2, log_norm, as little-endian doubles."""
        numbers = [unpack(self.factor), unpack(self.y), unpack(self.reference), np.array([self.rho2, self.log_norm])]
        return hashlib.sha256(np.concatenate(numbers).astype("<f8").tobytes()).hexdigest()

    def text(self) -> str:
        """Return the file's contents."""
        return json.dumps(self.model_dump(mode="json", by_alias=True), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def pack(values: FloatArray) -> str:
    """Doubles as text: little-endian IEEE 754, base64."""
    return base64.b64encode(np.ascontiguousarray(values, "<f8").tobytes()).decode()


def unpack(text: str) -> np.ndarray:
    """The doubles that `pack` wrote."""
    return np.frombuffer(base64.b64decode(text, validate=True), "<f8").astype(float)


def read_capsule(path: str | Path, shown: str | None = None) -> Capsule:
    """Read and verify a capsule.

    Parameters
    ----------
    path : path-like
    shown : str, optional
        How messages call the file.

    Raises
    ------
    InputError
        No such file, damaged, or of another format.
    """
    path, shown = Path(path), shown or str(path)
    with reading(path, shown):
        content = path.read_bytes()
    try:
        given = json.loads(content)
    except (UnicodeDecodeError, json.JSONDecodeError) as error:
        raise InputError(f"this is no capsule: not JSON ({error})", file=shown, cure=_CURE) from None
    written = given.get("schema") if isinstance(given, dict) else None
    if written != CAPSULE_SCHEMA:
        problem = f"the format is not {CAPSULE_SCHEMA!r}"
        raise InputError(problem, file=shown, value=written, cure="A capsule is written by `mufitter capsule RUN`")
    try:
        capsule = Capsule.model_validate(given)
        r, y, reference = capsule.arrays()
        sound = len(y) == len(r) and len(reference) == capsule.order + 1 and capsule.digest() == capsule.checksum
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(step) for step in first["loc"])
        raise InputError(f"the capsule is damaged: {first['msg']}", file=shown, key=key, cure=_CURE) from None
    except (ValueError, binascii.Error) as error:
        raise InputError(f"the capsule is damaged: {error}", file=shown, cure=_CURE) from None
    if not sound:
        raise InputError("the capsule is damaged: its numbers do not match its checksum", file=shown, cure=_CURE)
    return capsule


@dataclass(frozen=True, eq=False, repr=False)
class CapsuleSample(Sample):
    """A sample known only through its compressed likelihood.

    Its arrays hold two stand-in rows, at the lowest and the highest redshift; whatever needs the supernovae themselves is refused.
    """

    capsule: Capsule = field(kw_only=True)

    @classmethod
    def from_file(cls, path: str | Path, shown: str | None = None) -> CapsuleSample:
        """Read a capsule as a sample."""
        capsule = read_capsule(path, shown)
        return cls.of(capsule, {shown or str(path): sha256_of(Path(path))})

    @classmethod
    def of(cls, capsule: Capsule, sources: dict[str, str] | None = None) -> CapsuleSample:
        """Return the sample that a capsule stands for."""
        z = np.array([capsule.redshift_min, capsule.redshift_max])
        terms: Any = tuple(SimpleNamespace(**t, variance=np.array([t["median_sigma"] ** 2])) for t in capsule.terms)
        modes = np.tile([a.sigma for a in capsule.amplitudes], (2, 1)).reshape(2, -1)
        dense = np.zeros((2, 2)) if capsule.correlated else None
        noise = Noise(np.ones(2), dense, None, modes, tuple(a.name for a in capsule.amplitudes))
        groups = np.repeat(list(capsule.groups), list(capsule.groups.values())) if capsule.groups else None
        return cls(
            z, z, np.zeros(2), capsule.data_kind, np.full(2, np.nan), groups, None, capsule.distance_scale, terms, noise,
            None, capsule.covariance_scale, dict(capsule.removed), np.arange(2), sources or {}, capsule=capsule,
        )  # fmt: skip

    @property
    def has_rows(self) -> bool:
        """Whether the supernovae themselves are known."""
        return False

    @property
    def n(self) -> int:
        """Number of rows behind the capsule, calibrators included."""
        return self.capsule.n

    @property
    def n_calibrators(self) -> int:
        """Number of calibrators behind the capsule."""
        return self.capsule.n_calibrators

    @property
    def sha256(self) -> str:  # type: ignore[override]
        """SHA-256 of the sample behind the capsule."""
        return self.capsule.sample_sha256

    def without(self, labels: str | Iterable[str]) -> NoReturn:
        """Refuse: the terms have been added up."""
        cure = "Write one without the term from the original run: `mufitter capsule RUN --without LABEL`"
        raise InputError("no uncertainty term can be taken out of a capsule", value=labels, cure=cure)

    def select(self, mask: BoolArray | IntArray | Sequence[int]) -> NoReturn:
        """Refuse: there are no rows."""
        raise InputError("a capsule has no single supernovae to select from", cure="This needs the original data")


def sample_from_capsule(settings: CapsuleSettings, folder: Path) -> CapsuleSample:
    """Read the capsule that a config names."""
    return CapsuleSample.from_file(Path(folder) / os.path.expanduser(settings.capsule), settings.capsule)
