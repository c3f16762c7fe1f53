"""Invent a survey of any size with systematic modes, quickly: the data of the scale benchmarks.

    python tests/benchmarks/large_survey.py FOLDER --rows 1000000 --modes 50
    python tests/benchmarks/large_survey.py FOLDER --rows 20000 --dense

writes a table, the modes (or a dense covariance) and a config into FOLDER.
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np

_BLOCK = 50_000
_SHIFTS = np.arange(-500, 501)  # in 1e-4 mag: every number that a table of modes may hold
_GROUPS = ("alder", "birch", "cedar")


def invent(rows: int, seed: int = 1):
    """Redshift, group number and modulus (mag) of each supernova; flat, Ω_m = 0.3, errors of 0.15 mag."""
    rng = np.random.default_rng(seed)
    z = np.round(0.01 + 1.19 * rng.random(rows), 6)
    grid = np.linspace(0, 1.21, 4001)
    integrand = 1 / np.sqrt(0.3 * (1 + grid) ** 3 + 0.7)
    distance = np.concatenate([[0], np.cumsum((integrand[1:] + integrand[:-1]) / 2 * np.diff(grid))])
    mu = 5 * np.log10((1 + z) * np.interp(z, grid, distance)) + 43.158 + 0.15 * rng.standard_normal(rows)
    return z, rng.integers(0, len(_GROUPS), rows), mu


def shift_tables(modes: int, seed: int = 2):
    """(modes, 1001) smooth functions of redshift in whole units of 1e-4 mag, for z from 0 to 1.21."""
    rng = np.random.default_rng(seed)
    x = np.linspace(0, 1, 1001)
    waves = np.array([np.sin(np.pi * (k % 7 + 1) * x + p) for k, p in enumerate(rng.uniform(0, 6, modes))])
    return np.rint(waves * rng.uniform(20, 150, (modes, 1))).astype(int)


def write_modes(path: Path, z, modes: int) -> None:
    """A CSV of N × k one-sigma shifts, written from a list of ready-made words."""
    words = np.array([f"{v / 1e4: .4f}," for v in _SHIFTS], dtype="S8")
    tables = shift_tables(modes)
    with open(path, "wb") as file:
        file.write((",".join(f"systematic_{k}" for k in range(modes)) + "\n").encode())
        for start in range(0, len(z), _BLOCK):
            at = np.rint(z[start : start + _BLOCK] / 1.21 * 1000).astype(int)
            lines = words[tables[:, at].T + 500].view("S1").reshape(len(at), -1)
            lines[:, -1] = b"\n"
            file.write(lines.tobytes())


def write_covariance(path: Path, z, modes: int = 12) -> None:
    """A dense covariance (N, N) of sigma² and smooth systematics, in float64, row block by row block."""
    at = np.rint(z / 1.21 * 1000).astype(int)
    shifts = shift_tables(modes)[:, at].T / 1e4
    out = np.lib.format.open_memmap(path, mode="w+", dtype=np.float64, shape=(len(z), len(z)))
    for start in range(0, len(z), 1000):
        rows = slice(start, min(start + 1000, len(z)))
        out[rows] = shifts[rows] @ shifts.T
        index = np.arange(rows.start, rows.stop)
        out[index, index] += 0.15**2
    out.flush()


def write(folder: Path, rows: int, modes: int = 50, dense: bool = False) -> Path:
    """Write everything into `folder`; return the config."""
    folder.mkdir(parents=True, exist_ok=True)
    z, group, mu = invent(rows)
    with open(folder / "survey.csv", "w", encoding="ascii") as file:
        file.write("name,survey,z,mu,sigma\n")
        file.writelines(f"s{i},{_GROUPS[g]},{a:.6f},{m:.4f},0.15\n" for i, (a, g, m) in enumerate(zip(z, group, mu, strict=True)))
    if dense:
        write_covariance(folder / "covariance.npy", z)
        terms = "    - {covariance: covariance.npy}\n"
    else:
        write_modes(folder / "modes.csv", z, modes)
        terms = "    - {sigma: sigma}\n    - {modes: modes.csv}\n    - {zero_point: group, sigma: 0.01}\n"
    columns = "{name: name, group: survey, redshift: z, distance_modulus: mu}"
    text = f"sample:\n  table: survey.csv\n  columns: {columns}\n  uncertainty:\n{terms}model: flat_wcdm\n"
    (folder / "config.yaml").write_text(text, encoding="utf-8")
    return folder / "config.yaml"


def main() -> None:
    parser = argparse.ArgumentParser(description="Invent a survey of any size with systematic modes.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--modes", type=int, default=50)
    parser.add_argument("--dense", action="store_true", help="a dense covariance instead of modes")
    options = parser.parse_args()
    print(write(options.folder, options.rows, options.modes, options.dense))


if __name__ == "__main__":
    main()
