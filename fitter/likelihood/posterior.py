"""The posterior density of a sample under a model: parameters in, ln p out, vectorised over walkers."""

from __future__ import annotations

import copy
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology import get_model, radiation_density
from fitter.cosmology.adaptive import log_distance_at
from fitter.cosmology.derived import derived, derived_names
from fitter.cosmology.distances import data_term, hubble_term, log_distance
from fitter.errors import InputError
from fitter.likelihood.design import Design
from fitter.likelihood.kernel import Kernel
from fitter.likelihood.priors import Normal, Prior, TruncatedNormal, Uniform, parse_prior
from fitter.parameters import PARAMETERS, ZERO_POINT

if TYPE_CHECKING:
    from fitter.cosmology.base import Model
    from fitter.likelihood.scatter import ScatterNodes
    from fitter.parameters import Parameter
    from fitter.sample.noise import Noise
    from fitter.sample.sample import Sample

__all__ = ["LogPosterior", "REFERENCE_H0"]

# Radiation needs an H0 even where the data have no scale; Ω_r changes by 1e-5 over any sensible range.
REFERENCE_H0 = 70.0
_MAGNITUDE = "absolute_magnitude"
_SCATTER = "intrinsic_scatter"
_POSITIVE = ("H0", "covariance_scale")
_NOT_NEGATIVE = (*_POSITIVE, _SCATTER)


@dataclass(frozen=True)
class _Layout:
    """Which column or number each ingredient of the likelihood comes from."""

    names: tuple[str, ...]
    fixed: dict[str, float]

    def column(self, theta: FloatArray, name: str) -> FloatArray | None:
        """(W,) values of a parameter, sampled or fixed; None if there is none."""
        if name in self.names:
            return theta[:, self.names.index(name)]
        value = self.fixed.get(name)
        return None if value is None else np.full(len(theta), value)

    def known(self, theta: FloatArray, name: str) -> FloatArray:
        """(W,) values of a parameter that is there for certain."""
        found = self.column(theta, name)
        if found is None:
            raise KeyError(name)
        return found


class LogPosterior:
    """ln of the posterior density, normalised prior and likelihood, for an array of parameter points.

    Use `LogPosterior.build`. All arrays `theta` are (W, n), columns in the order of `names`.

    Attributes
    ----------
    names, priors : tuples
        The sampled parameters and their priors.
    fixed : dict
        Parameters held at a number.
    marginalised : tuple of str
        Linear parameters integrated out analytically that can be drawn given the others.
    n_data, n_parameters : int
        Supernovae (calibrators included); sampled parameters plus linear ones marginalised with a flat prior or fitted.
    """

    def __init__(self, sample: Sample, model: Model, priors: dict[str, Prior], fixed: dict[str, float], *, radiation: bool = False) -> None:
        self.sample, self.model, self.radiation = sample, model, radiation
        self.names = tuple(priors)
        self.priors = tuple(priors.values())
        self.fixed = dict(fixed)
        self._layout = _Layout(self.names, self.fixed)
        self._set_up_linear(priors)
        self._set_up_prior_box()
        scatter = None
        if _SCATTER in self.names:
            from fitter.likelihood.scatter import scatter_nodes

            scatter = scatter_nodes(self.design, _scatter_limit(priors[_SCATTER]))
        self.kernel = self._make_kernel(scatter)

    @classmethod
    def build(cls, sample: Sample, model_name: Model | str, parameters: dict | None = None, *, radiation: bool = False) -> LogPosterior:
        """Assemble the posterior of a sample.

        Parameters
        ----------
        sample : Sample
        model_name : str or Model
        parameters : dict, optional
            For each parameter a prior as in a config, or a number to hold it fixed; default priors elsewhere.
        radiation : bool
            Include photons and massless neutrinos.

        Raises
        ------
        InputError
            Unknown model or parameter, or one that these data cannot tell.
        """
        model = get_model(model_name) if isinstance(model_name, str) else model_name
        wanted = dict(parameters or {})
        priors: dict[str, Prior] = {}
        fixed: dict[str, float] = {}
        for parameter in _free_parameters(sample, model):
            _assign(parameter.name, wanted.pop(parameter.name, parameter.default_prior), priors, fixed)
        if _MAGNITUDE in wanted and _takes_magnitude(sample):
            _assign(_MAGNITUDE, wanted.pop(_MAGNITUDE), priors, fixed)
        for name, spec in ((_SCATTER, sample.intrinsic_prior), ("covariance_scale", sample.covariance_scale_prior)):
            if spec is not None:
                _assign(name, wanted.pop(name, spec), priors, fixed)
        _refuse_unknown(wanted, sample, model)
        if not priors:
            raise InputError("every parameter is held fixed", key="parameters", cure="Give at least one of them a prior.")
        if not sample.has_rows:
            from fitter.likelihood.capsule import CapsulePosterior

            cls = CapsulePosterior
        return cls(sample, model, priors, fixed, radiation=radiation)

    # ------------------------------------------------------------------ set-up

    def _set_up_linear(self, priors: dict[str, Prior]) -> None:
        """Decide what becomes of the zero point: a flat template, a Gaussian one, a sampled column, or a constant."""
        s = self.sample
        ones, none = np.ones((len(s.redshift), 1)), np.zeros((len(s.redshift), 0))
        noise = s.noise if _SCATTER not in self.fixed else s.noise.plus_variance(self.fixed[_SCATTER] ** 2)
        flat, gaussian, linear, shift = none, noise.modes, none, 0.0
        names = list(s.noise.mode_names)
        self._magnitude_template = None
        prior = priors.get(_MAGNITUDE)
        scaled = "covariance_scale" in self.names or "covariance_scale" in self.fixed
        if s.distance_scale == "relative":
            flat = ones
        elif _takes_magnitude(s):
            if _MAGNITUDE in self.fixed:
                shift = self.fixed[_MAGNITUDE]
            elif prior is None:
                self._require_calibrators()
                flat = ones
                self._magnitude_template = (gaussian.shape[1], 0.0, 1.0)
            elif isinstance(prior, Normal) and not scaled:
                # A Gaussian prior is one more template of unit amplitude: M = mean + sd a.
                self._magnitude_template = (gaussian.shape[1], prior.mean, prior.sd)
                gaussian, shift = np.hstack([gaussian, prior.sd * ones]), prior.mean
                self._drop(_MAGNITUDE)
            else:
                linear = ones
        self._template_names = names
        self.marginalised = (() if self._magnitude_template is None else (_MAGNITUDE,)) + tuple(
            n for n in names if n.startswith(ZERO_POINT)
        )
        self._n_flat = flat.shape[1]
        self.n_data = s.n
        # A parameter with a Gaussian prior brings a datum of its own, its prior's: it changes no number of degrees of freedom.
        self.n_parameters = len(self.names) + self._n_flat
        self.design = self._make_design(noise, flat, gaussian, linear, shift)

    def _make_design(self, noise: Noise, flat: FloatArray, gaussian: FloatArray, linear: FloatArray, shift: float) -> Design:
        s = self.sample
        return Design(s.redshift, s.redshift_helio, s.data, s.calibrator_modulus, noise, flat, gaussian, linear, shift)

    def _make_kernel(self, scatter: ScatterNodes | None) -> Kernel:
        return Kernel(self.design, self.model, scatter)

    def _require_calibrators(self) -> None:
        if self.sample.distance_scale == "absolute":
            cure = "Give absolute_magnitude a number or a normal prior, or use distance_scale: relative."
            raise InputError("magnitudes on an absolute scale need the absolute magnitude", key="parameters", cure=cure)

    def _drop(self, name: str) -> None:
        keep = [i for i, n in enumerate(self.names) if n != name]
        self.names, self.priors = tuple(self.names[i] for i in keep), tuple(self.priors[i] for i in keep)
        self._layout = _Layout(self.names, self.fixed)

    def _set_up_prior_box(self) -> None:
        self._low = np.array([p.low for p in self.priors])
        self._high = np.array([p.high for p in self.priors])
        uniform = [isinstance(p, Uniform) for p in self.priors]
        self._log_box = -sum(np.log(p.width) for p, u in zip(self.priors, uniform, strict=True) if u)
        self._shaped = [i for i, u in enumerate(uniform) if not u]
        for i, name in enumerate(self.names):
            if name in _POSITIVE:
                self._low[i] = max(self._low[i], np.nextafter(0, 1))

    # ------------------------------------------------------------------ densities

    @property
    def ndim(self) -> int:
        return len(self.names)

    @property
    def counts(self) -> dict[str, int]:
        """How many evaluations there were, and how many needed finer grids or adaptive quadrature, or were excluded."""
        return self.kernel.counts

    def log_prior(self, theta: FloatArray) -> FloatArray:
        """ln prior density, (W,); −inf outside, and for NaN."""
        theta = np.atleast_2d(np.asarray(theta, float))
        with np.errstate(invalid="ignore"):
            inside = ((theta >= self._low) & (theta <= self._high)).all(axis=1)
        value = np.where(inside, self._log_box, -np.inf)
        for i in self._shaped:
            value = value + self.priors[i].log_density(theta[:, i])
        return value

    def __call__(self, theta: FloatArray) -> FloatArray:
        """ln posterior density (not divided by the evidence), (W,); −inf outside the prior, never NaN."""
        theta = np.atleast_2d(np.asarray(theta, float))
        value = self.log_prior(theta)
        inside = value > -np.inf
        if inside.all():
            return value + self.log_likelihood(theta)
        if inside.any():
            value[inside] += self.log_likelihood(theta[inside])
        return value

    def log_likelihood(self, theta: FloatArray) -> FloatArray:
        """ln likelihood with every normalisation, marginalised over the linear parameters, (W,)."""
        theta = np.atleast_2d(np.asarray(theta, float))
        chi2, log_norm = self._chi2_raw(theta)
        scale = self._layout.column(theta, "covariance_scale")
        if scale is None:
            return log_norm - 0.5 * chi2
        return log_norm - (self.n_data - self._n_flat) * np.log(scale) - 0.5 * chi2 / scale**2

    def chi2(self, theta: FloatArray) -> FloatArray:
        """χ², minimised over the marginalised parameters, (W,); +inf outside the model's range."""
        theta = np.atleast_2d(np.asarray(theta, float))
        chi2, _ = self._chi2_raw(theta)
        scale = self._layout.column(theta, "covariance_scale")
        return chi2 if scale is None else chi2 / scale**2

    def _chi2_raw(self, theta: FloatArray) -> tuple[FloatArray, float | FloatArray]:
        return self.kernel(*self._ingredients(theta))

    def _ingredients(self, theta: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray | None]:
        """The kernel's arguments."""
        w = len(theta)
        h0 = self._h0(theta)
        offset = np.zeros(w) if h0 is None else hubble_term(h0)
        linear = theta[:, [self.names.index(_MAGNITUDE)]] if _MAGNITUDE in self.names else np.zeros((w, 0))
        sigma = self._layout.column(theta, _SCATTER) if self._scatter_is_free else None
        return self._cosmology(theta), self._omega_r(theta, h0), offset, linear, sigma

    @property
    def _scatter_is_free(self) -> bool:
        return _SCATTER in self.names

    def _cosmology(self, theta: FloatArray) -> FloatArray:
        """(W, p) parameters of the model, sampled or fixed."""
        own = [p.name for p in self.model.parameters]
        if own == list(self.names[: len(own)]):
            return theta[:, : len(own)]
        return np.column_stack([self._layout.known(theta, name) for name in own])

    def _h0(self, theta: FloatArray) -> FloatArray | None:
        return None if self.sample.distance_scale == "relative" else self._layout.column(theta, "H0")

    def _omega_r(self, theta: FloatArray, h0: FloatArray | None) -> FloatArray:
        if not self.radiation:
            return np.zeros(len(theta))
        return radiation_density(np.full(len(theta), REFERENCE_H0) if h0 is None else h0)

    # ------------------------------------------------------------------ what else can be said

    def draw_marginalised(self, theta: FloatArray, rng: np.random.Generator) -> dict[str, FloatArray]:
        """Draws of the marginalised parameters from their conditional Gaussian, one for each row of `theta`."""
        if not self.marginalised:
            return {}
        return self._nuisance(theta, rng.standard_normal((len(theta), self.design.n_nuisance)))

    def best_marginalised(self, theta: FloatArray) -> dict[str, FloatArray]:
        """Conditional means of the marginalised parameters, (W,) each."""
        return self._nuisance(theta, None) if self.marginalised else {}

    def _nuisance(self, theta: FloatArray, noise: FloatArray | None) -> dict[str, FloatArray]:
        theta = np.atleast_2d(theta)
        scale = self._layout.column(theta, "covariance_scale")
        if noise is not None and scale is not None:
            noise = noise * scale[:, None]
        amplitude = self.kernel.nuisance(*self._ingredients(theta), noise=noise)
        out = {}
        if self._magnitude_template is not None:
            column, mean, sd = self._magnitude_template
            out[_MAGNITUDE] = mean + sd * amplitude[:, column]
        for column, name in enumerate(self._template_names):
            if name.startswith(ZERO_POINT):
                # A mode is σ in each row of its group: amplitude × σ is the shift in mag.
                out[name] = amplitude[:, column] * np.abs(self.sample.noise.modes[:, column]).max()
        return out

    def cosmology(self, theta: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray | None]:
        """The model's own parameters (W, p), Ω_r (W,), and H0 (W,) in km/s/Mpc or None on a relative scale."""
        theta = np.atleast_2d(np.asarray(theta, float))
        h0 = self._h0(theta)
        return self._cosmology(theta), self._omega_r(theta, h0), h0

    @property
    def derived_names(self) -> tuple[str, ...]:
        return derived_names(self.model, self._has_h0)

    @property
    def _has_h0(self) -> bool:
        return self.sample.distance_scale != "relative"

    def derived(self, theta: FloatArray) -> dict[str, FloatArray]:
        """Derived parameters, (W,) each; NaN where one does not exist."""
        theta = np.atleast_2d(theta)
        h0 = self._h0(theta)
        return derived(self.model, self._cosmology(theta), self._omega_r(theta, h0), h0)

    def distance_modulus(self, theta: FloatArray, z: FloatArray, z_helio: FloatArray | None = None) -> FloatArray:
        """Distance moduli, (W, M); on a relative scale for H0 = 70 km/s/Mpc, since the scale is arbitrary.

        Good to 1e-8 mag however close a model comes to having no big bang; NaN where a model has no distance.
        """
        theta, z = np.atleast_2d(theta), np.asarray(z, float)
        h0 = self._h0(theta)
        mu = log_distance_at(
            self.model, self._cosmology(theta), z, self._omega_r(theta, h0), within=float(self.sample.redshift.max())
        ) + data_term(z, z if z_helio is None else z_helio)
        return mu + hubble_term(REFERENCE_H0 if h0 is None else h0)[..., None]

    def zero_point(self, theta: FloatArray) -> float:
        """What is added to `distance_modulus` to predict the data, mag: the magnitude, or the best offset of a relative scale."""
        theta = np.atleast_2d(theta)
        if self.sample.distance_scale == "relative":
            amplitude = self.kernel.nuisance(*self._ingredients(theta))
            return float(amplitude[0, -1] - hubble_term(REFERENCE_H0))
        for source in (self._layout.column(theta, _MAGNITUDE), self.best_marginalised(theta).get(_MAGNITUDE)):
            if source is not None:
                return float(source[0])
        return 0.0

    def residuals(self, theta: FloatArray) -> FloatArray:
        """Data minus model at one point, (N,) mag, with the best marginalised values; systematic modes are not taken off."""
        theta = np.atleast_2d(theta)
        s = self.sample
        calibrator = ~np.isnan(s.calibrator_modulus)
        predicted = self.distance_modulus(theta[:1], s.redshift, s.redshift_helio)[0]
        predicted = np.where(calibrator, s.calibrator_modulus, predicted)
        return s.data - predicted - self.zero_point(theta)

    # ------------------------------------------------------------------ other data

    def with_data(self, data: FloatArray) -> Iterator[LogPosterior]:
        """The posterior given each of M other data vectors (M, N), all else being equal: one factorisation for all of them."""
        data = np.atleast_2d(np.asarray(data, float))
        for row, kernel in zip(data, self.kernel.with_data(data), strict=True):
            other = copy.copy(self)
            other.sample, other.design, other.kernel = replace(self.sample, data=row), kernel.design, kernel
            yield other

    def expected(self, theta: FloatArray) -> FloatArray:
        """The data that theta predicts, (W, N) mag.

        Marginalised parameters are at the mean of their prior; a flat one, which has none, at its best value.
        """
        theta = np.atleast_2d(np.asarray(theta, float))
        s = self.sample
        predicted = self.distance_modulus(theta, s.redshift, s.redshift_helio)
        calibrator = ~np.isnan(s.calibrator_modulus)
        predicted[:, calibrator] = s.calibrator_modulus[calibrator]
        if self._n_flat:
            flat = self.kernel.nuisance(*self._ingredients(theta))[:, -1]
            return predicted + (flat if self._has_h0 else flat - hubble_term(REFERENCE_H0))[:, None]
        magnitude = self._layout.column(theta, _MAGNITUDE)
        return predicted + (self.design.shift if magnitude is None else magnitude[:, None])

    def simulate(self, theta: FloatArray, rng: np.random.Generator) -> FloatArray:
        """One mock data vector for each row of theta, (W, N) mag: the prediction and a draw of everything that scatters."""
        theta = np.atleast_2d(np.asarray(theta, float))
        scatter = self.design.noise.draw(rng, len(theta))
        if self._scatter_is_free:
            scatter = scatter + self._layout.known(theta, _SCATTER)[:, None] * rng.standard_normal(scatter.shape)
        extra = self.design.gaussian[:, self.sample.noise.modes.shape[1] :]  # the prior of the absolute magnitude
        scatter = scatter + rng.standard_normal((len(theta), extra.shape[1])) @ extra.T
        scale = self._layout.column(theta, "covariance_scale")
        return self.expected(theta) + (scatter if scale is None else scatter * scale[:, None])

    def prior_excluded_fraction(self, rng: np.random.Generator, draws: int = 2000) -> float:
        """Share of the prior that is outside the model's range (no big bang, or an antipode among the data)."""
        theta = np.column_stack([p.sample(rng, draws) for p in self.priors])
        theta = np.clip(theta, self._low, self._high)
        grid = self.kernel.levels[0].grid
        _, _, inside = log_distance(self.model, self._cosmology(theta), grid, self._omega_r(theta, self._h0(theta)))
        return float(1.0 - inside.mean())


def _takes_magnitude(sample: Sample) -> bool:
    return sample.distance_scale == "calibrated" or (sample.distance_scale == "absolute" and sample.data_kind == "magnitude")


def _free_parameters(sample: Sample, model: Model) -> tuple[Parameter, ...]:
    return model.parameters + (() if sample.distance_scale == "relative" else (PARAMETERS["H0"],))


def _assign(name: str, spec: dict[str, Any] | float, priors: dict[str, Any], fixed: dict[str, Any]) -> None:
    if isinstance(spec, (int, float)) and not isinstance(spec, bool):
        fixed[name] = float(spec)
    else:
        priors[name] = _physical(name, parse_prior(spec, key=f"parameters.{name}"))


def _physical(name: str, prior: Prior) -> Prior:
    """Cut a prior at zero, and normalise it again, where the parameter cannot be negative."""
    if name not in _NOT_NEGATIVE or prior.low >= 0:
        return prior
    if prior.high <= 0:
        raise InputError(f"{name} cannot be negative", key=f"parameters.{name}", value=prior.describe(), cure="Give it room above 0.")
    if isinstance(prior, Uniform):
        return Uniform(0.0, prior.high)
    if isinstance(prior, Normal | TruncatedNormal):
        return TruncatedNormal(prior.mean, prior.sd, 0.0, prior.high)
    return prior


def _refuse_unknown(wanted: dict[str, Any], sample: Sample, model: Model) -> None:
    problems = [
        InputError(*_why_not(name, sample, model)[:1], key=f"parameters.{name}", cure=_why_not(name, sample, model)[1]) for name in wanted
    ]
    if len(problems) == 1:
        raise problems[0]
    if problems:
        from fitter.errors import InputErrors

        raise InputErrors(problems)


def _why_not(name: str, sample: Sample, model: Model) -> tuple[str, str]:
    """Why a parameter cannot be given a prior here, and what to do."""
    own = ", ".join(p.name for p in _free_parameters(sample, model))
    if sample.distance_scale == "relative" and name in ("H0", _MAGNITUDE):
        problem = f"{name} cannot be measured on a relative distance scale: H0 and the absolute magnitude only enter as one offset"
        return problem, "Remove it, or say distance_scale: absolute or calibrated if the data are anchored."
    if name in (_SCATTER, "covariance_scale"):
        term = "intrinsic" if name == _SCATTER else "covariance_scale"
        return f"{name} is not part of this fit", f"Add an uncertainty term {{{term}: PRIOR}} to the sample."
    if name in PARAMETERS:
        return f"{model.name} has no free parameter {name}", f"Its parameters are {own}."
    return "there is no such parameter", f"{model.name} takes {own}."


def _scatter_limit(prior: Prior) -> float:
    limit = prior.high if np.isfinite(prior.high) else float(prior.quantile(1 - 1e-12))
    return max(limit, 1e-3)
