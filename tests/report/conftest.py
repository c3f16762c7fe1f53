"""A small synthetic fit: Gaussian posterior of known moments over an invented sample."""

from dataclasses import dataclass, field, replace
from types import SimpleNamespace

import numpy as np
import pytest

from fitter.report.summary import Extras, summarise


@dataclass(frozen=True)
class NoiseDouble:
    """C = diag(variance) + modes modesᵀ."""

    variance: np.ndarray
    modes: np.ndarray
    is_diagonal: bool = True

    @property
    def log_det(self):
        return float(np.log(self.variance).sum())

    def whiten(self, X, rows=slice(None)):
        return np.asarray(X) / np.sqrt(self.variance[rows])[:, None]

    def plus_variance(self, s2):
        return replace(self, variance=self.variance + s2)

    @property
    def covariance(self):
        return np.diag(self.variance) + self.modes @ self.modes.T


@dataclass(frozen=True)
class SampleDouble:
    redshift: np.ndarray
    data: np.ndarray
    calibrator_modulus: np.ndarray
    noise: NoiseDouble
    distance_scale: str = "absolute"
    data_kind: str = "distance_modulus"
    group: np.ndarray | None = None
    removed: dict = field(default_factory=dict)
    warnings: tuple = ()
    sha256: str = "0" * 64

    @property
    def redshift_helio(self):
        return self.redshift

    @property
    def n(self):
        return len(self.redshift)

    @property
    def is_calibrator(self):
        return np.isfinite(self.calibrator_modulus)

    @property
    def n_calibrators(self):
        return int(self.is_calibrator.sum())


@dataclass(frozen=True)
class UniformDouble:
    low: float
    high: float

    def log_density(self, x):
        return np.where((x >= self.low) & (x <= self.high), -np.log(self.high - self.low), -np.inf)

    def sample(self, rng, size):
        return rng.uniform(self.low, self.high, size)

    def quantile(self, p):
        return self.low + p * (self.high - self.low)

    def describe(self):
        return f"uniform from {self.low:g} to {self.high:g}"


def modulus(z, H0=70.0, q0=-0.55):
    """Distance modulus to second order in z: enough for a drawing."""
    return 5 * np.log10(299792.458 / H0 * z * (1 + 0.5 * (1 - q0) * z)) + 25


@dataclass(frozen=True)
class LogPosteriorDouble:
    """A Gaussian likelihood in the parameters with deviance χ²_min + Δᵀ S⁻¹ Δ."""

    sample: SampleDouble
    names: tuple = ("omega_m", "omega_lambda", "H0")
    mean: tuple = (0.3, 0.7, 70.0)
    sd: tuple = (0.03, 0.05, 0.5)
    priors: tuple = (UniformDouble(0, 1), UniformDouble(-0.5, 2), UniformDouble(40, 100))
    marginalised: tuple = ()
    fixed: dict = field(default_factory=dict)
    chi2_min: float = 300.0
    n_parameters: int = 3
    model: object = field(default_factory=lambda: SimpleNamespace(name="curved_lcdm"))
    excluded: bool = False

    @property
    def n_data(self):
        return self.sample.n

    def log_prior(self, theta):
        return sum(p.log_density(theta[:, i]) for i, p in enumerate(self.priors))

    def chi2(self, theta):
        return self.chi2_min + (((np.atleast_2d(theta) - self.mean) / np.array(self.sd)) ** 2).sum(axis=1)

    def log_likelihood(self, theta):
        return -0.5 * self.chi2(theta) - 7.0

    def __call__(self, theta):
        value = self.log_prior(theta) + self.log_likelihood(theta)
        return np.where(theta[:, 0] > 0.25, -np.inf, value) if self.excluded else value

    def best_marginalised(self, theta):
        return {name: np.full(len(theta), -19.3) for name in self.marginalised}

    def derived(self, theta):
        z_acc = np.where(theta[:, 1] > 0.6, 2 * theta[:, 1] / theta[:, 0], np.nan)
        out = {"omega_k": 1 - theta[:, 0] - theta[:, 1], "z_acceleration": z_acc ** (1 / 3) - 1}
        return {**out, "lambda_si": 1.55e-52 * theta[:, 1] * (theta[:, 2] / 70) ** 2}

    def distance_modulus(self, theta, z, z_helio=None):
        return np.stack([modulus(z, row[2]) for row in np.atleast_2d(theta)])

    def residuals(self, theta):
        calibrators = self.sample.is_calibrator
        offset = -19.3 if self.sample.distance_scale == "calibrated" else 0.0
        model = self.distance_modulus(theta, self.sample.redshift)[0]
        known = np.nan_to_num(self.sample.calibrator_modulus)
        free = self.sample.data - offset - np.where(calibrators, known, model)
        if self.sample.distance_scale == "relative":
            weight = 1 / self.sample.noise.variance
            free = free - (weight * free).sum() / weight.sum()
        return free


@dataclass(frozen=True)
class PosteriorDouble:
    names: tuple
    chain: np.ndarray
    log_posterior: np.ndarray
    extra: dict
    kinds: dict
    sampling: dict

    def draws(self, name):
        return self.chain[..., self.names.index(name)] if name in self.names else self.extra[name]


@dataclass(frozen=True)
class Fit:
    log_posterior: LogPosteriorDouble
    posterior: PosteriorDouble
    optimum: object

    @property
    def sample(self):
        return self.log_posterior.sample

    def summary(self, **extras):
        return summarise(self.log_posterior, self.posterior, self.optimum, Extras(title="Invented survey", **extras))


def make_sample(n=300, seed=1, distance_scale="absolute", n_calibrators=0, diagonal=False, **more):
    rng = np.random.default_rng(seed)
    z = np.sort(np.exp(rng.uniform(np.log(0.01), np.log(1.2), n)))
    variance = rng.uniform(0.08, 0.2, n) ** 2
    modes = np.zeros((n, 0)) if diagonal else np.stack([0.02 * np.ones(n), 0.03 * np.log(z)], axis=1)
    data = modulus(z) + rng.normal(size=n) * np.sqrt(variance) + modes @ rng.normal(size=modes.shape[1])
    known = np.full(n, np.nan)
    known[:n_calibrators] = modulus(z[:n_calibrators])
    data = data - 19.3 if distance_scale == "calibrated" else data + (3.0 if distance_scale == "relative" else 0.0)
    return SampleDouble(z, data, known, NoiseDouble(variance, modes), distance_scale=distance_scale, **more)


def make_posterior(log_posterior, shape=(4, 250, 16), seed=2, transform=None, **sampling):
    rng = np.random.default_rng(seed)
    chain = rng.normal(size=(*shape, len(log_posterior.names))) * log_posterior.sd + log_posterior.mean
    chain = np.abs(chain) if transform is None else transform(chain)
    flat = chain.reshape(-1, chain.shape[-1])
    extra = {name: rng.normal(-19.3, 0.02, shape) for name in log_posterior.marginalised}
    extra |= {name: value.reshape(shape) for name, value in log_posterior.derived(flat).items()}
    kinds = dict.fromkeys(log_posterior.names, "sampled") | dict.fromkeys(log_posterior.marginalised, "marginalised")
    kinds |= {name: "derived" for name in extra if name not in kinds}
    facts = {"replicas": shape[0], "walkers": shape[2], "steps": shape[1], "burn_in": 50, "autocorrelation": {"omega_m": 1.1}}
    facts |= {"acceptance": 0.5, "converged": True, "reason": "", "seed": 1, "seconds": 1.0, "evaluations": 16000, **sampling}
    values = log_posterior(flat) if not log_posterior.excluded else np.zeros(len(flat))
    return PosteriorDouble(log_posterior.names, chain, values.reshape(shape), extra, kinds, facts)


def make_fit(sample=None, transform=None, sampling=None, shape=(4, 250, 16), **log_posterior):
    density = LogPosteriorDouble(sample or make_sample(), **log_posterior)
    theta = np.array(density.mean)
    values = dict(zip(density.names, density.mean, strict=True)) | dict.fromkeys(density.marginalised, -19.3)
    optimum = SimpleNamespace(
        theta=theta,
        log_posterior=float(density.log_likelihood(theta[None])[0]),
        chi2=density.chi2_min,
        covariance=np.diag(np.array(density.sd) ** 2),
        values=values,
    )
    return Fit(density, make_posterior(density, shape, transform=transform, **(sampling or {})), optimum)


@pytest.fixture(scope="session")
def fit():
    return make_fit()


@pytest.fixture(scope="session")
def build():
    """The makers of the doubles, for a test that wants its own."""
    return SimpleNamespace(fit=make_fit, sample=make_sample, uniform=UniformDouble, modulus=modulus, noise=NoiseDouble)
