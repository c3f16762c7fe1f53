"""The published releases: where they are, how the configs beside this file reach them,
and readers and a χ² that share no code with the package."""

import json
import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import cholesky, solve_triangular

HERE = Path(__file__).resolve().parent
DEFAULT = "../../../shared/open_data"  # as the configs beside this file write it
# config → key in reference_posteriors.json
RELEASES = {
    "pantheon2018_binned": "pantheon2018_binned",
    "union2.1": "union2.1_diagonal",
    "dovekie2025_statonly": "des_dovekie_statonly",
    "dovekie2025_vpec": "des_dovekie_vpec",
}


@dataclass(frozen=True)
class Release:
    """A release as the test's own reader found it; either `covariance` or `precision` is given."""

    z: np.ndarray
    z_helio: np.ndarray
    data: np.ndarray
    kind: str
    covariance: np.ndarray | None = None
    precision: np.ndarray | None = None


@pytest.fixture(scope="session")
def open_data():
    """Folder of the published releases; the test is skipped where there is none."""
    folder = Path(os.environ.get("MUFITTER_OPEN_DATA") or HERE / DEFAULT).resolve()
    if not (folder / "reference_posteriors.json").is_file():
        pytest.skip(f"no published data in {folder}: set MUFITTER_OPEN_DATA to the folder that holds reference_posteriors.json")
    return folder


@pytest.fixture(scope="session")
def reference(open_data):
    """reference_posteriors.json under the names of the configs."""
    content = json.loads((open_data / "reference_posteriors.json").read_text())
    return {name: content[key] for name, key in RELEASES.items()}


@pytest.fixture(scope="session")
def release_config(open_data, tmp_path_factory):
    """Function: name of a release → its config, with the data's real place written in."""
    folder = tmp_path_factory.mktemp("configs")

    def write(name):
        path = folder / f"{name}.yaml"
        path.write_text((HERE / f"{name}.yaml").read_text().replace(DEFAULT, str(open_data)))
        return path

    return write


@pytest.fixture(scope="session")
def release(open_data):
    """Function: name of a release → `Release`."""
    readers = {
        "pantheon2018_binned": _pantheon,
        "union2.1": _union,
        "dovekie2025_statonly": lambda d: _dovekie(d, "STATONLY.npz"),
        "dovekie2025_vpec": lambda d: _dovekie(d, "VPEC.npz"),
    }
    return lambda name: readers[name](open_data)


def _pantheon(folder):
    folder = folder / "pantheon2018_binned"
    z, z_helio, mag, error = np.loadtxt(folder / "lcparam_DS17f.txt", usecols=(1, 2, 4, 5), unpack=True)
    flat = np.loadtxt(folder / "sys_DS17f.txt")
    return Release(z, z_helio, mag, "magnitude", flat[1:].reshape(40, 40) + np.diag(error**2))


def _union(folder):
    z, mu, error = np.loadtxt(folder / "union2.1" / "mu_vs_z.txt", usecols=(1, 2, 3), unpack=True)
    return Release(z, z, mu, "distance_modulus", np.diag(error**2))


def _dovekie(folder, matrix):
    folder = folder / "dovekie2025"
    rows = [line.split() for line in (folder / "HD.csv").read_text().splitlines() if line.startswith("SN:")]
    z, z_helio, mu = np.array([row[3:6] for row in rows], dtype=float).T
    with np.load(folder / matrix) as stored:
        n, packed = int(np.ravel(stored["nsn"])[0]), stored["cov"].astype(float)
    upper = np.zeros((n, n))
    upper[np.triu_indices(n)] = packed
    return Release(z, z_helio, mu, "distance_modulus", precision=upper + np.triu(upper, 1).T)


@pytest.fixture(scope="session")
def direct_sum():
    """Function: `Release` → χ² by the full matrix, see `Direct`."""
    return Direct


def e_squared(name, theta, z):
    """E² of one point, written again for the test."""
    flat = name.startswith("flat")
    omega_m = theta[0]
    omega_de = 1 - omega_m if flat else theta[1]
    if name.endswith("lcdm"):
        growth = np.ones_like(z)
    elif name.endswith("wcdm"):
        growth = (1 + z) ** (3 * (1 + theta[-1]))
    else:
        w0, wa = theta[-2:]
        growth = (1 + z) ** (3 * (1 + w0 + wa)) * np.exp(-3 * wa * z / (1 + z))
    return omega_m * (1 + z) ** 3 + (1 - omega_m - omega_de) * (1 + z) ** 2 + omega_de * growth


class Direct:
    """χ² with the offset minimised, by the full matrix."""

    def __init__(self, release):
        self.release = release
        if release.precision is not None:
            self.root = cholesky(release.precision)  # upper: P = Rᵀ R
            self.whiten = lambda v: self.root @ v
        else:
            self.root = cholesky(release.covariance, lower=True)
            self.whiten = lambda v: solve_triangular(self.root, v, lower=True)
        self.ones = self.whiten(np.ones(len(release.z)))
        grid = np.arange(0.0, release.z.max(), 0.002)
        self.edges = np.unique(np.concatenate([[0.0], grid, release.z]))
        x, self.weight = np.polynomial.legendre.leggauss(12)
        self.half = 0.5 * np.diff(self.edges)
        self.points = (self.edges[:-1] + self.half)[:, None] + self.half[:, None] * x
        self.where = np.searchsorted(self.edges, release.z)

    def __call__(self, name, theta):
        """χ², or infinity without a big bang or behind the antipode."""
        e2 = e_squared(name, theta, self.points)
        if not e2.min() > 0:
            return np.inf
        panels = (e2**-0.5) @ self.weight * self.half
        distance = np.concatenate([[0.0], np.cumsum(panels)])[self.where]
        omega_k = 0.0 if name.startswith("flat") else 1 - theta[0] - theta[1]
        root = np.sqrt(abs(omega_k))
        if omega_k < 0 and root * distance.max() >= np.pi:
            return np.inf
        if root * distance.max() > 1e-4:
            distance = (np.sinh if omega_k > 0 else np.sin)(root * distance) / root
        r = self.whiten(self.release.data - 5 * np.log10((1 + self.release.z_helio) * distance))
        r = r - self.ones * (self.ones @ r) / (self.ones @ self.ones)
        return r @ r
