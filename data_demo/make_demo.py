"""Invent a supernova survey whose truth is known, and write its tables and matrices.

One seed decides everything. The recipe and the true values stand in README.md beside
this file. The distances come from a closed form of flat models with a constant w and
from nothing in the package, so that a fit of these files tests the package.

Every number is rounded before it is used further and before it is written, and the
covariances are exact sums of products of whole numbers. The files are therefore the
same on every machine.
"""

from __future__ import annotations

import argparse
import gzip
import io
import sys
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from scipy.special import hyp2f1, ndtri

SEED = 20261201
C_KM_S = 299792.458
HERE = Path(__file__).resolve().parent


@dataclass(frozen=True)
class Truth:
    """What the fit should find again, and the size of every error put in."""

    omega_m: float = 0.31
    w: float = -1.0
    H0: float = 70.5  # km/s/Mpc
    absolute_magnitude: float = -19.27  # mag
    intrinsic: float = 0.09  # mag
    peculiar_velocity: float = 250.0  # km/s
    lensing: float = 0.055  # mag per unit redshift
    host_modulus: float = 0.05  # mag, each calibrator host by itself
    anchor: float = 0.018  # mag, common to all hosts
    observer_velocity: float = 312.0  # km/s, towards the apex
    apex: tuple[float, float] = (141.0, -22.0)  # right ascension and declination, degrees


@dataclass(frozen=True)
class Survey:
    """One invented survey: where it looks, how far, how well."""

    name: str
    tag: str
    size: int
    redshift: tuple[float, float]
    sigma: tuple[float, float]  # mag, measurement alone, at the near and the far end
    zero_point: float  # mag, one sigma
    fields: tuple[tuple[float, float], ...] = ()  # centres in degrees; the whole sky if empty


SURVEYS = (
    Survey("fennelwick", "FW", 170, (0.010, 0.120), (0.05, 0.09), 0.008),
    Survey("ombrevale", "OV", 370, (0.080, 0.780), (0.06, 0.15), 0.006, ((12.0, -3.0), (83.0, 21.0), (201.0, -38.0), (317.0, 8.0))),
    Survey("kestrithal", "KT", 160, (0.450, 1.600), (0.09, 0.20), 0.009, ((64.0, -51.0), (222.0, 33.0))),
)
PLANNED = Survey("quillmoor", "QM", 300, (0.050, 1.900), (0.05, 0.12), 0.005)
CALIBRATORS = Survey("calibrators", "CA", 20, (0.0015, 0.0080), (0.04, 0.07), 0.0)


@dataclass
class Table:
    """Columns of equal length, in table order."""

    columns: dict[str, np.ndarray] = field(default_factory=dict)

    def __getitem__(self, name):
        return self.columns[name]

    def __len__(self):
        return len(self.columns["name"])


class Dice:
    """Uniform and normal numbers from raw PCG64 bits, whose stream numpy guarantees for good."""

    def __init__(self, seed: int):
        self._bits = np.random.PCG64(np.random.SeedSequence(seed))

    def uniform(self, size) -> np.ndarray:
        """Numbers strictly between 0 and 1."""
        count = int(np.prod(size))
        raw = self._bits.random_raw(count) >> np.uint64(11)
        return ((raw + 0.5) * 2.0**-53).reshape(size)

    def normal(self, size) -> np.ndarray:
        """Standard normal numbers."""
        return ndtri(self.uniform(size))


def comoving_distance(z, truth: Truth) -> np.ndarray:
    """Comoving distance in Mpc in a flat model with a constant w (no radiation).

    The integral of 1/E is a Gauss hypergeometric function: substitute (1+z)^(3w).
    """
    z = np.asarray(z, dtype=float)
    b = -1.0 / (6.0 * truth.w)
    ratio = (1.0 - truth.omega_m) / truth.omega_m

    def antiderivative(growth):
        return hyp2f1(0.5, b, 1.0 + b, -ratio * growth ** (3.0 * truth.w)) / np.sqrt(growth)

    return C_KM_S / truth.H0 * 2.0 / np.sqrt(truth.omega_m) * (antiderivative(np.ones_like(z)) - antiderivative(1.0 + z))


def distance_modulus(z, z_helio, truth: Truth) -> np.ndarray:
    """Distance modulus in mag: D_L = (1 + z_helio) D_M(z)."""
    return 5.0 * np.log10((1.0 + np.asarray(z_helio)) * comoving_distance(z, truth)) + 25.0


def peculiar_velocity_sigma(z, truth: Truth) -> np.ndarray:
    """Scatter in mag of the modulus from random velocities: |dmu/dz| (1 + z) sigma_v / c."""
    hubble = truth.H0 * np.sqrt(truth.omega_m * (1 + z) ** 3 + (1 - truth.omega_m) * (1 + z) ** (3 * (1 + truth.w)))
    slope = 5.0 / np.log(10.0) * C_KM_S / hubble / comoving_distance(z, truth)
    return slope * (1 + z) * truth.peculiar_velocity / C_KM_S


def sky_positions(survey: Survey, dice: Dice) -> tuple[np.ndarray, np.ndarray]:
    """Right ascension and declination in degrees, over the sky or in the survey's fields."""
    u, v = dice.uniform((2, survey.size))
    if not survey.fields:
        return np.round(360.0 * u, 3), np.round(np.degrees(np.arcsin(2.0 * v - 1.0)), 3)
    centres = np.array(survey.fields)[np.arange(survey.size) % len(survey.fields)]
    dec = centres[:, 1] + 3.0 * (v - 0.5)
    ra = centres[:, 0] + 3.0 * (u - 0.5) / np.cos(np.radians(dec))
    return np.round(ra, 3), np.round(dec, 3)


def heliocentric(z, ra, dec, truth: Truth) -> np.ndarray:
    """Redshift seen by the moving observer, lower towards the apex."""
    ra0, dec0 = np.radians(truth.apex)
    ra, dec = np.radians(ra), np.radians(dec)
    towards = np.sin(dec) * np.sin(dec0) + np.cos(dec) * np.cos(dec0) * np.cos(ra - ra0)
    return np.round((1.0 + z) * (1.0 - truth.observer_velocity / C_KM_S * towards) - 1.0, 6)


def observe(survey: Survey, truth: Truth, dice: Dice) -> Table:
    """Names, places, redshifts and measurement errors; no magnitudes yet."""
    near, far = survey.redshift
    spread = np.sort(dice.uniform((2, survey.size)).mean(axis=0) if survey.fields else dice.uniform(survey.size) ** 0.7)
    z = np.round(near + (far - near) * spread, 6)
    ra, dec = sky_positions(survey, dice)
    low, high = survey.sigma
    growth = np.exp(0.15 * dice.normal(survey.size))
    return Table(
        {
            "name": np.array([f"{survey.tag}-{i + 1:03d}" for i in range(survey.size)]),
            "survey": np.array([survey.name] * survey.size),
            "ra": ra,
            "dec": dec,
            "z": z,
            "z_helio": heliocentric(z, ra, dec, truth),
            "sigma": np.round((low + (high - low) * spread) * growth, 4),
        }
    )


def stack(*tables: Table) -> Table:
    """One table below the other."""
    return Table({name: np.concatenate([t[name] for t in tables]) for name in tables[0].columns})


def calibration_modes(z, survey, anchored) -> dict[str, np.ndarray]:
    """One-sigma shifts from photometric calibration, mag; ``anchored`` is the share of the distance anchor."""
    x = np.log1p(z) / np.log(2.6)
    on_ground = np.where(survey == "kestrithal", 0.4, 1.0)
    modes = {f"zero_point_{s.name}": np.where(survey == s.name, s.zero_point, 0.0) for s in SURVEYS}
    modes["standard_star_colour"] = 0.012 * x
    modes["filter_edges"] = 0.006 * on_ground * np.sin(5.0 * np.pi * x)
    modes["light_curve_training"] = 0.010 * x * x - 0.004 * x
    modes["detector_linearity"] = np.where(survey == "kestrithal", 0.008 * (x - 0.4), 0.0)
    modes["anchor"] = anchored * np.ones_like(x)
    return {name: np.round(m, 4) for name, m in modes.items()}


def dust_modes(z, is_calibrator) -> dict[str, np.ndarray]:
    """One-sigma shifts from dust whose properties drift with time, mag: overlapping bumps in ln(1 + z)."""
    u = np.log1p(z)
    step = 0.14
    amplitude = np.where(is_calibrator, 0.0, (0.009 + 0.013 * u) / np.pi**0.25)
    return {f"dust_{m}": np.round(amplitude * np.exp(-0.5 * ((u - step * m) / step) ** 2), 4) for m in range(8)}


def covariance_of(modes: dict[str, np.ndarray]) -> np.ndarray:
    """Sum of outer products in units of 1e-8 mag², exact in whole numbers. Shape (N, N), int64."""
    total = 0
    for mode in modes.values():
        units = np.rint(mode * 1e4).astype(np.int64)
        total = total + units[:, None] * units[None, :]
    return total


def statistical(table: Table, truth: Truth) -> dict[str, np.ndarray]:
    """Every uncorrelated error in mag, term by term. Velocities and lensing spare the calibrators, whose distance is not from z."""
    far = table["survey"] != CALIBRATORS.name
    return {
        "measurement": table["sigma"],
        "intrinsic": np.full(len(table), truth.intrinsic),
        "peculiar_velocity": np.where(far, peculiar_velocity_sigma(table["z"], truth), 0.0),
        "lensing": np.where(far, truth.lensing * table["z"], 0.0),
    }


def magnitudes(table: Table, truth: Truth, dice: Dice, modulus, shifts) -> np.ndarray:
    """Standardised apparent magnitudes with every error drawn."""
    scatter = sum(sigma * dice.normal(len(table)) for sigma in statistical(table, truth).values())
    return np.round(modulus + truth.absolute_magnitude + scatter + shifts, 4)


@dataclass(frozen=True)
class Demo:
    """Everything that is written."""

    survey: Table
    calibrated: Table
    survey_modes: dict[str, dict[str, np.ndarray]]
    calibrated_modes: dict[str, dict[str, np.ndarray]]


def invent(truth: Truth, seed: int = SEED, planted: dict[str, float] | None = None) -> Demo:
    """Draw the survey and its calibrators.

    Parameters
    ----------
    truth : Truth
    seed : int
    planted : dict, optional
        Survey name → magnitudes added to all its supernovae, an error that no uncertainty term knows of.
    """
    dice = Dice(seed)
    survey = stack(*(observe(s, truth, dice) for s in SURVEYS))
    near = observe(CALIBRATORS, truth, dice)
    both = stack(survey, near)
    n, is_calibrator = len(survey), both["survey"] == CALIBRATORS.name
    survey_modes = {
        "calibration": calibration_modes(survey["z"], survey["survey"], truth.anchor),
        "dust": dust_modes(survey["z"], np.zeros(n, dtype=bool)),
    }
    # A host modulus that is too large makes its supernova look too bright: the sign turns.
    calibrated_modes = {
        "calibration": calibration_modes(both["z"], both["survey"], np.where(is_calibrator, -truth.anchor, 0.0)),
        "dust": dust_modes(both["z"], is_calibrator),
    }
    drawn = {name: float(dice.normal(1)[0]) for name in (*survey_modes["calibration"], *survey_modes["dust"])}
    host = np.round(distance_modulus(near["z"] * np.exp(0.1 * dice.normal(len(near))), near["z_helio"], truth), 4)
    modulus = np.concatenate([distance_modulus(survey["z"], survey["z_helio"], truth), host])
    shared = (m * drawn[k] for modes in calibrated_modes.values() for k, m in modes.items() if k != "anchor")
    magnitude = magnitudes(both, truth, dice, modulus, sum(shared))
    for name, shift in (planted or {}).items():
        magnitude = np.round(magnitude + np.where(both["survey"] == name, shift, 0.0), 4)
    anchor_error = truth.anchor * drawn["anchor"]
    known = np.round(host + truth.host_modulus * dice.normal(len(near)) + anchor_error, 4)
    return Demo(*_tables(survey, both, truth, magnitude, known, anchor_error), survey_modes, calibrated_modes)


def _tables(survey, both, truth, magnitude, known, anchor_error) -> tuple[Table, Table]:
    """Put the observed columns together: absolute moduli for the survey, magnitudes and hosts for the calibrated table."""
    n = len(survey)
    total = np.sqrt(sum(s**2 for s in statistical(survey, truth).values()))
    moduli = np.round(magnitude[:n] - (truth.absolute_magnitude - anchor_error), 4)
    absolute = Table({**survey.columns, "modulus": moduli, "sigma_all": np.round(total, 4)})
    host_error = np.where(np.arange(len(both)) < n, 0.0, truth.host_modulus)
    columns = dict(both.columns)
    columns["sigma"] = np.round(np.sqrt(both["sigma"] ** 2 + host_error**2), 4)
    columns["magnitude"] = magnitude
    columns["host_modulus"] = np.concatenate([np.full(n, np.nan), known])
    whole = statistical(Table(columns), truth)
    columns["sigma_all"] = np.round(np.sqrt(sum(s**2 for s in whole.values())), 4)
    return absolute, Table(columns)


def planned() -> Table:
    """A survey to come: redshifts and the measurement errors hoped for, nothing observed, so nothing drawn."""
    share = (np.arange(PLANNED.size) + 0.5) / PLANNED.size
    # The bulk in the middle of the range: quantiles of a triangle.
    spread = np.where(share < 0.5, np.sqrt(share / 2), 1 - np.sqrt((1 - share) / 2))
    near, far = PLANNED.redshift
    low, high = PLANNED.sigma
    z = np.round(near + (far - near) * spread, 3)
    return Table(
        {
            "name": np.array([f"{PLANNED.tag}-{i + 1:03d}" for i in range(PLANNED.size)]),
            "field": np.where(z > 1.0, "deep", "wide"),
            "z": z,
            "sigma": np.round(low + (high - low) * spread, 3),
        }
    )


DIGITS = {"ra": 3, "dec": 3, "z": 6, "z_helio": 6}


def csv_text(columns: dict[str, np.ndarray]) -> str:
    """Comma-separated text with a header row; not-a-number is left empty."""

    def cells(name, values):
        if values.dtype.kind == "U":
            return values.tolist()
        digits = DIGITS.get(name, 4)
        return ["" if np.isnan(v) else f"{v + 0.0:.{digits}f}" for v in values]

    rows = zip(*(cells(name, values) for name, values in columns.items()), strict=True)
    return "\n".join([",".join(columns), *(",".join(row) for row in rows)]) + "\n"


def flat_text(units: np.ndarray) -> str:
    """N on the first line, then the N² elements of a covariance (given in 1e-8 mag²), one a line."""
    return "\n".join([str(len(units)), *(f"{v}e-8" for v in units.ravel().tolist())]) + "\n"


def npy_bytes(units: np.ndarray) -> bytes:
    """A covariance given in 1e-8 mag², as the bytes of a .npy file in float64."""
    stream = io.BytesIO()
    np.save(stream, units / 1e8, allow_pickle=False)
    return stream.getvalue()


def files(demo: Demo) -> dict[str, bytes]:
    """File name → content before any compression."""
    modes = demo.survey_modes
    contents = {
        "survey.csv": csv_text(demo.survey.columns),
        "calibration.txt.gz": flat_text(covariance_of(modes["calibration"])),
        "calibration_modes.csv": csv_text(modes["calibration"]),
        "dust.npy.gz": npy_bytes(covariance_of(modes["dust"])),
        "calibrated.csv": csv_text(demo.calibrated.columns),
        "calibrated_modes_calibration.csv": csv_text(demo.calibrated_modes["calibration"]),
        "calibrated_modes_dust.csv": csv_text(demo.calibrated_modes["dust"]),
        "planned.csv": csv_text(planned().columns),
    }
    return {name: text.encode() if isinstance(text, str) else text for name, text in contents.items()}


def write(demo: Demo, folder: Path) -> list[Path]:
    """Write every file into ``folder``, compressed where the name says so."""
    folder.mkdir(parents=True, exist_ok=True)
    written = []
    for name, content in files(demo).items():
        path = folder / name
        path.write_bytes(gzip.compress(content, 9, mtime=0) if name.endswith(".gz") else content)
        written.append(path)
    return written


def _planted(text: str) -> tuple[str, float]:
    """Parse SURVEY:MAG."""
    name, _, size = text.partition(":")
    known = [s.name for s in SURVEYS]
    if name not in known:
        raise argparse.ArgumentTypeError(f"no survey called {name!r}; known: {', '.join(known)}")
    try:
        return name, float(size)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{text!r} should read SURVEY:MAG, e.g. ombrevale:0.05") from None


def main(arguments: list[str] | None = None) -> int:
    """Command line of the script."""
    parser = argparse.ArgumentParser(description="Write the invented survey (see README.md beside this script).")
    parser.add_argument("--out", type=Path, default=HERE, help="folder for the files (default: beside this script)")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--w", type=float, default=Truth.w, help="true equation of state of dark energy, negative")
    parser.add_argument("--plant-zero-point", type=_planted, action="append", default=[], metavar="SURVEY:MAG")
    options = parser.parse_args(arguments)
    if not options.w < 0:
        parser.error(f"--w must be negative, found {options.w}")
    for path in write(invent(Truth(w=options.w), options.seed, dict(options.plant_zero_point)), options.out):
        print(path)
    return 0


if __name__ == "__main__":
    sys.exit(main())
