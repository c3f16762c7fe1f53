"""Priors are normalised, invert their own quantiles, and refuse what is no prior."""

import numpy as np
import pytest
from scipy.integrate import quad

from fitter.errors import InputError
from fitter.likelihood.priors import PRIORS, parse_prior

SPECS = [
    {"uniform": [-1, 3]},
    {"normal": [0.3, 0.05]},
    {"truncated_normal": [0.3, 0.5, 0, 1]},
    {"log_uniform": [0.5, 2]},
]


@pytest.mark.parametrize("spec", SPECS, ids=lambda s: next(iter(s)))
def test_densities_integrate_to_one_and_quantiles_invert_them(spec):
    prior = parse_prior(spec)
    low, high = max(prior.low, -50), min(prior.high, 50)
    total, error = quad(lambda x: float(np.exp(prior.log_density(x))), low, high, points=[0.3] if low < 0.3 < high else None)
    assert total == pytest.approx(1.0, abs=10 * error + 1e-7)
    for p in (0.1, 0.5, 0.9):
        below, error = quad(lambda x: float(np.exp(prior.log_density(x))), low, float(prior.quantile(p)), limit=200)
        assert below == pytest.approx(p, abs=10 * error + 1e-7)


@pytest.mark.parametrize("spec", SPECS, ids=lambda s: next(iter(s)))
def test_outside_and_nan_have_no_density(spec):
    prior = parse_prior(spec)
    assert prior.log_density(np.array([np.nan])) == -np.inf
    if np.isfinite(prior.width):
        assert (prior.log_density(np.array([prior.low - 1e-9, prior.high + 1e-9])) == -np.inf).all()
        assert np.isfinite(prior.log_density(np.array([prior.low, prior.high]))).all()


@pytest.mark.parametrize("spec", SPECS, ids=lambda s: next(iter(s)))
def test_spec_round_trips(spec):
    prior = parse_prior(spec)
    assert parse_prior(prior.spec()) == prior


@pytest.mark.parametrize(
    "spec",
    [{"uniform": [1, 0]}, {"uniform": [0]}, {"normal": [0, -1]}, {"gauss": [0, 1]}, {}, [0, 1], {"log_uniform": [0, 1]},
     {"uniform": [0, "1"]}, {"uniform": [0, float("inf")]}, {"truncated_normal": [0, 1, 60, 70]}],
    ids=str,
)  # fmt: skip
def test_what_is_no_prior_is_refused_with_a_cure(spec):
    with pytest.raises(InputError) as caught:
        parse_prior(spec, key="parameters.w")
    assert caught.value.key == "parameters.w"
    assert caught.value.cure


def test_every_kind_is_tested():
    assert {next(iter(s)) for s in SPECS} == set(PRIORS)
