"""A small synthetic fit: Gaussian posterior of known moments over an invented sample."""

from dataclasses import dataclass, field, replace
from types import SimpleNamespace

import numpy as np
import pytest

from fitter.inference.optimum import Optimum
from fitter.inference.posterior import Posterior
from fitter.likelihood.posterior import LogPosterior
from fitter.likelihood.priors import Uniform
from fitter.report.summary import Extras, summarise
from fitter.sample.sample import Sample


def modulus(z, H0=70.0, q0=-0.55):
    """Distance modulus to second order in z: enough for a drawing."""
    return 5 * np.log10(299792.458 / H0 * z * (1 + 0.5 * (1 - q0) * z)) + 25


@dataclass(frozen=True)
class LogPosteriorDouble:
    """A Gaussian likelihood in the parameters with deviance χ²_min + Δᵀ S⁻¹ Δ."""

    sample: Sample
    names: tuple = ("omega_m", "omega_lambda", "H0")
    mean: tuple = (0.3, 0.7, 70.0)
    sd: tuple = (0.03, 0.05, 0.5)
    priors: tuple = (Uniform(0, 1), Uniform(-0.5, 2), Uniform(40, 100))
    marginalised: tuple = ()
    fixed: dict = field(default_factory=dict)
    chi2_min: float = 300.0
    n_parameters: int = 3
    model: object = field(default_factory=lambda: SimpleNamespace(name="curved_lcdm"))
    radiation: bool = False
    excluded_fraction: float = 0.0

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
        return self.log_prior(theta) + self.log_likelihood(theta)

    def prior_excluded_fraction(self, rng, draws=2000):
        return self.excluded_fraction

    def zero_point(self, theta):
        if self.sample.distance_scale == "calibrated":
            return -19.3
        if self.sample.distance_scale == "absolute":
            return 0.0
        weight = 1 / self.sample.noise.variance
        return float((weight * (self.sample.data - modulus(self.sample.redshift))).sum() / weight.sum())

    def best_marginalised(self, theta):
        return {name: np.full(len(theta), -19.3) for name in self.marginalised}

    def derived(self, theta):
        z_acc = np.where(theta[:, 1] > 0.6, 2 * theta[:, 1] / theta[:, 0], np.nan)
        out = {"omega_k": 1 - theta[:, 0] - theta[:, 1], "z_acceleration": z_acc ** (1 / 3) - 1}
        return {**out, "lambda_si": 1.55e-52 * theta[:, 1] * (theta[:, 2] / 70) ** 2}

    def distance_modulus(self, theta, z, z_helio=None):
        return np.stack([modulus(z, row[2]) for row in np.atleast_2d(theta)])

    def residuals(self, theta):
        model = self.distance_modulus(theta, self.sample.redshift)[0]
        model = np.where(self.sample.is_calibrator, self.sample.calibrator_modulus, model)
        return self.sample.data - model - self.zero_point(theta)


@dataclass(frozen=True)
class Fit:
    log_posterior: LogPosteriorDouble
    posterior: Posterior
    optimum: object

    @property
    def sample(self):
        return self.log_posterior.sample

    def summary(self, **extras):
        return summarise(self.log_posterior, self.posterior, self.optimum, Extras(title="Invented survey", **extras))


def make_sample(n=300, seed=1, distance_scale="absolute", n_calibrators=0, diagonal=False, warnings=(), **more):
    rng = np.random.default_rng(seed)
    z = np.sort(np.exp(rng.uniform(np.log(0.01), np.log(1.2), n)))
    sigma = rng.uniform(0.08, 0.2, n)
    modes = None if diagonal else np.stack([0.02 * np.ones(n), 0.03 * np.log(z)], axis=1)
    data = modulus(z) + rng.normal(size=n) * sigma + (0 if diagonal else modes @ rng.normal(size=2))
    if distance_scale == "calibrated":
        known = np.where(np.arange(n) < n_calibrators, modulus(z), np.nan)
        more |= {"calibrator_modulus": known, "data_kind": "magnitude"}
        data = data - 19.3
    elif distance_scale == "relative":
        data = data + 3.0
    sample = Sample.from_arrays(z, data, sigma=sigma, modes=modes, distance_scale=distance_scale, **more)
    return replace(sample, warnings=tuple(warnings))


def make_dense(sample):
    """The same covariance as one dense matrix."""
    return Sample.from_arrays(sample.redshift, sample.data, covariance=sample.noise.covariance(), distance_scale=sample.distance_scale)


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
    values = log_posterior(flat)
    return Posterior(log_posterior.names, chain, values.reshape(shape), extra, kinds, facts)


def make_fit(sample=None, transform=None, sampling=None, shape=(4, 250, 16), **log_posterior):
    density = LogPosteriorDouble(sample or make_sample(), **log_posterior)
    theta = np.array(density.mean)
    values = dict(zip(density.names, density.mean, strict=True)) | dict.fromkeys(density.marginalised, -19.3)
    optimum = Optimum(
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
    return SimpleNamespace(
        fit=make_fit, sample=make_sample, dense=make_dense, uniform=Uniform, modulus=modulus, real=make_real_fit, truth=TRUTH, spread=SPREAD
    )  # fmt: skip


@pytest.fixture(scope="session")
def real():
    """A flat_wcdm fit of a relative sample of three surveys."""
    return make_real_fit(sample=make_sample(distance_scale="relative", group=np.repeat(["near", "far", "middle"], 100)))


def make_real_fit(model="flat_wcdm", sample=None, truth=None, sd=None, shape=(4, 100, 16), seed=3, **parameters):
    """A true likelihood with a Gaussian stand-in for its chain: for figures that ask the model itself."""
    density = LogPosterior.build(sample or make_sample(distance_scale="relative"), model, parameters or None)
    theta = np.array([(truth or TRUTH)[name] for name in density.names])
    spread = np.array([(sd or SPREAD)[name] for name in density.names])
    rng = np.random.default_rng(seed)
    chain = np.clip(theta + spread * rng.normal(size=(*shape, len(theta))), density._low, density._high)
    flat = chain.reshape(-1, len(theta))
    extra = {n: v.reshape(shape) for n, v in {**density.draw_marginalised(flat, rng), **density.derived(flat)}.items()}
    kinds = dict.fromkeys(density.names, "sampled") | dict.fromkeys(density.marginalised, "marginalised")
    kinds |= {name: "derived" for name in extra if name not in kinds}
    facts = {"replicas": shape[0], "walkers": shape[2], "steps": shape[1] + 20, "burn_in": 20, "autocorrelation": {}, "move": "mixture"}
    facts |= {"rhat": dict.fromkeys(density.names, 1.00041), "ess_bulk": dict.fromkeys(density.names, 5432.1)}
    facts |= {"ess_tail": dict.fromkeys(density.names, 4321.9), "acceptance": 0.5, "converged": True, "seed": 7}
    posterior = Posterior(density.names, chain, density(flat).reshape(shape), extra, kinds, facts)
    values = dict(zip(density.names, theta.tolist(), strict=True))
    values |= {n: float(v[0]) for n, v in density.best_marginalised(theta[None]).items()}
    optimum = Optimum(
        theta=theta, log_posterior=float(density(theta[None])[0]), chi2=float(density.chi2(theta[None])[0]),
        covariance=np.diag(spread**2), values=values,
    )  # fmt: skip
    return Fit(density, posterior, optimum)


TRUTH = {"omega_m": 0.3, "omega_lambda": 0.7, "omega_de": 0.7, "w": -1.0, "w0": -1.0, "wa": 0.0, "H0": 70.0, "q0": -0.55, "j0": 1.0}
TRUTH |= {"absolute_magnitude": -19.3, "intrinsic_scatter": 0.1, "covariance_scale": 1.1}
SPREAD = {"omega_m": 0.02, "omega_lambda": 0.04, "omega_de": 0.04, "w": 0.05, "w0": 0.05, "wa": 0.2, "H0": 0.5, "q0": 0.05, "j0": 0.3}
SPREAD |= {"absolute_magnitude": 0.02, "intrinsic_scatter": 0.01, "covariance_scale": 0.03}
