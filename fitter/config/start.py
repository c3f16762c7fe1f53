"""A first config for a table: what was recognised, as commented YAML."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from fitter.array_types import FloatArray
from fitter.errors import InputError
from fitter.sample.matrices import read_matrix
from fitter.sample.recognise import Recognised, recognise
from fitter.sample.validate import looks_inverse

__all__ = ["Start", "start"]

_RESERVED = re.compile(r"(?i)(y|n|yes|no|on|off|true|false|null|~|none)$")
_PLACEHOLDER = 0.15  # mag, where a table has no errors
_NEAREST = 0.01
_MOST_NAMED = 20
_REDSHIFT_ERROR = re.compile(r"(?i)(z\w*err\w*|(d|e_?|sig(ma)?_?|err_?)z\w*|redshift_?err\w*)")


@dataclass
class Start:
    """A config to begin with.

    Parameters
    ----------
    text : str
        The config.
    guesses, doubts : list of str
        What was guessed and why; what could not be told.
    """

    text: str
    guesses: list[str] = field(default_factory=list)
    doubts: list[str] = field(default_factory=list)


def start(table: str | Path, folder: str | Path, matrices: Sequence[str | Path] = ()) -> Start:
    """Look at a table and matrices and write a config for them.

    Parameters
    ----------
    table : path-like
    folder : path-like
        Where the config will lie: paths in it are relative to that.
    matrices : sequence of path-like
        Covariances, or one inverse covariance.

    Raises
    ------
    InputError
        A file cannot be read, or no column looks like a redshift or like a distance.
    """
    found = recognise(table, str(table))
    _require(found, str(table))
    draft = _Draft(found, Path(folder))
    keep = draft.keep()
    terms = draft.terms([Path(m) for m in matrices])
    lines = [
        f"# A first config for {Path(table).name}: look at every line, then `mufitter check` and `mufitter fit` it.",
        "sample:",
        f"  table: {draft.relative(table)}",
        *draft.tags(),
        *draft.columns(),
        *draft.missing(),
        *keep,
        "  uncertainty:                 # covariances add",
        *terms,
        *draft.scale(),
        "",
        "model: flat_lcdm               # or curved_lcdm, flat_wcdm, curved_wcdm, flat_w0wa, curved_w0wa, cosmographic",
        "# parameters:                  # a prior, or a number to hold fixed; each has a default",
        "#   omega_m: {uniform: [0, 1]}",
        "",
    ]
    guesses = [f"{role}: {ref}, {found.reasons[role]}" for role, ref in found.roles.items() if role in draft.used]
    return Start("\n".join(lines), guesses + draft.guesses, [*found.doubts, *_left(found, draft)])


def _left(found: Recognised, draft: _Draft) -> list[str]:
    """Say which columns the config does not use, and what the errors of redshifts among them would mean."""
    names = found.table.columns.names
    if names is None:
        return []
    used = {found.roles[role] for role in draft.used}
    left = [name for name in names if name and name not in used]
    said = [f"Columns not used: {', '.join(left[:_MOST_NAMED])}{', …' if len(left) > _MOST_NAMED else ''}"] if left else []
    errors = [name for name in left if _REDSHIFT_ERROR.fullmatch(name)]
    if errors:
        said.append(
            f"{errors[0]} looks like errors of redshifts, which mean 2.17 σ_z / z mag at low redshift: where sigma does not hold them yet, "
            "add a column of that as another {sigma: …}"
        )
    return said


def _require(found: Recognised, table: str) -> None:
    missing = [what for what, there in (("a redshift", "redshift" in found.roles), ("distances", found.data is not None)) if not there]
    if "redshift" not in found.roles and "redshift_helio" in found.roles:
        found.roles["redshift"] = found.roles["redshift_helio"]
        found.reasons["redshift"] = "the only redshift there is, and it looks heliocentric"
        found.doubts.append("The only redshift looks heliocentric; distances need the cosmological (CMB) frame.")
        missing = [what for what in missing if what != "a redshift"]
    if not missing:
        return
    columns = found.table.columns
    numbers = [p for p in found.table.floats if p not in found.table.problems and np.isfinite(found.table.floats[p]).any()]
    shown = [f"{columns.label(p)} {np.nanmin(found.table.floats[p]):.4g} to {np.nanmax(found.table.floats[p]):.4g}" for p in numbers[:12]]
    raise InputError(
        f"no column looks like {' or '.join(missing)}; those of numbers are: {', '.join(shown) or 'none'}", file=table,
        cure="Redshifts lie between 0 and 5, moduli between 20 and 50, magnitudes between 8 and 30 mag; map the columns by hand",
    )  # fmt: skip


class _Draft:
    """The sections of the config, made one after the other."""

    def __init__(self, found: Recognised, folder: Path) -> None:
        self.found, self.folder = found, folder
        self.guesses: list[str] = []
        self.data = found.data
        self.calibrators = "calibrator_modulus" in found.roles
        self.calibrated = self.calibrators and self.data == "magnitude"
        roles = ("redshift", "redshift_helio", self.data, "calibrator_modulus", "group", "name", "sigma")
        self.used = [role for role in roles if role in found.roles]
        if found.roles.get("redshift_helio") == found.roles["redshift"]:
            self.used.remove("redshift_helio")

    def relative(self, path: str | Path) -> str:
        """A path as the config writes it."""
        # A link to the folder leads elsewhere with `..` than its name says.
        return _quoted(os.path.relpath(os.path.abspath(path), os.path.realpath(self.folder)).replace(os.sep, "/"))

    def tags(self) -> list[str]:
        options = self.found.options
        pairs = (("header_tag", options.header_tag), ("row_tag", options.row_tag))
        return [f"  {key}: {_quoted(tag)}" for key, tag in pairs if tag is not None]

    def columns(self) -> list[str]:
        unit = "by position, 0 is the first" if self.found.table.columns.names is None else "ours: theirs"
        out = [f"  columns:                     # {unit}"]
        for role in self.used:
            if role != "sigma":
                ref = self.found.roles[role]
                out.append(f"{f'    {role}: {_quoted(ref)}':<40} # {self.found.reasons[role]}")
        return out

    def missing(self) -> list[str]:
        needed = [self.found.numbers(r) for r in self.used if r not in ("calibrator_modulus", "group", "name")]
        without = int((~np.all(np.isfinite(needed), axis=0)).sum())
        out = []
        if without:
            self.guesses.append(f"{without} rows lack a number that is needed and are left out")
            out.append(f"  missing: drop                # {without} rows lack a number that is needed")
        if "name" in self.used and self._names_twice():
            self.found.doubts.append("Some names occur in several rows; `keep: {one_per: name}` would keep the best row of each.")
            out.append("  duplicates: allow            # some names occur twice with differing values: look at them")
        return out

    def _names_twice(self) -> bool:
        names = self.found.table.texts(self.found.roles["name"])
        return len(set(names.tolist())) < len(names)

    def keep(self) -> list[str]:
        """Cuts: calibrators that nothing is done with, redshifts that are none."""
        out = []
        z = self.found.numbers("redshift")
        if np.nanmin(z) <= 0:
            self.guesses.append(f"{int((z <= 0).sum())} rows with a redshift not above 0 are left out")
            out.append(f"    redshift: [{_NEAREST}, null]     # redshifts not above 0 are none; velocities of their own rule nearby")
        elif np.nanmin(z) < _NEAREST:
            out.append(f"    # redshift: [{_NEAREST}, null]   # nearer supernovae say little: velocities of their own rule there")
        if self.calibrators and not self.calibrated:
            self.guesses.append("rows with a host modulus are left out: they serve to calibrate magnitudes, which this config does not fit")
            out.append("    calibrators: drop          # with magnitudes, `distance_scale: calibrated` would use them")
        live = any(not line.lstrip().startswith("#") for line in out)
        return ([f"  {'' if live else '# '}keep:                        # cuts"] if out else []) + out

    def terms(self, matrices: list[Path]) -> list[str]:
        """The uncertainty terms, and what the matrices probably hold."""
        sigma = self.found.numbers("sigma") if "sigma" in self.used else None
        use_sigma, out = sigma is not None, []
        for path in matrices:
            table = self.found.table
            matrix = read_matrix(path, sizes=[table.n], what="covariance", table=table.columns.file, shown=str(path))
            kind, holds_all = self._kind(np.diagonal(matrix), sigma, path)
            use_sigma = use_sigma and not holds_all
            out.append(f"    - {{{kind}: {self.relative(path)}}}")
        if use_sigma:
            out.insert(0, f"    - {{sigma: {_quoted(self.found.roles['sigma'])}}}")
        elif sigma is not None:
            out.append(f"    # - {{sigma: {_quoted(self.found.roles['sigma'])}}}   # the matrix seems to hold it already")
        elif not out:
            self.found.doubts.append(f"No column looks like errors: {_PLACEHOLDER} mag stand in their place. Replace them.")
            out.append(f"    - {{intrinsic: {_PLACEHOLDER}}}         # REPLACE: no column looks like errors; e.g. {{sigma: COLUMN}}")
        out.append("    # - {intrinsic: {uniform: [0, 0.5]}}   # where the errors do not hold the intrinsic scatter: it is then fitted")
        return out

    def _kind(self, diagonal: FloatArray, sigma: FloatArray | None, path: Path) -> tuple[str, bool]:
        """Covariance or precision, and whether it holds the errors of the sigma column already."""
        variance = None if sigma is None else sigma**2
        if looks_inverse(diagonal, variance):
            self.guesses.append(f"{path.name}: an inverse covariance, since its median diagonal element is {np.median(diagonal):.3g}")
            return "precision", True
        errors = f"its median error is {np.sqrt(abs(np.median(diagonal))):.3g} mag"
        if variance is not None and np.mean(diagonal >= 0.98 * variance) > 0.95:
            self.guesses.append(f"{path.name}: a covariance that holds the sigma column already, since {errors}; that is not added")
            return "covariance", True
        beside = "" if sigma is None else f", below the {np.nanmedian(sigma):.3g} of the sigma column, which is added"
        self.guesses.append(f"{path.name}: a covariance, since {errors}{beside}")
        return "covariance", False

    def scale(self) -> list[str]:
        if self.calibrated:
            self.guesses.append("distance_scale: calibrated, since some rows have a host modulus and the data are magnitudes")
            return ["  distance_scale: calibrated   # H0 and the absolute magnitude are both fitted"]
        self.guesses.append("distance_scale: relative, which assumes nothing of the zero point; no H0 comes out")
        return ["  distance_scale: relative     # `absolute` where the moduli are anchored: then H0 is fitted too"]


def _quoted(value: object) -> str:
    """A name or path as YAML reads it back."""
    text = str(value)
    if isinstance(value, int) or (re.fullmatch(r"[A-Za-z_./][\w./+ -]*", text) and not _RESERVED.match(text) and text == text.strip()):
        return text
    return json.dumps(text, ensure_ascii=False)
