"""Evidence under other prior widths: against closed forms and against a quadrature made anew."""

import math
from dataclasses import replace

import numpy as np
import pytest

from fitter import Sample, fit
from fitter.likelihood.priors import LogUniform, Normal, TruncatedNormal, Uniform
from fitter.study.entry import Entry
from fitter.study.prior_widths import anchors, evidence_shifts, rescaled


def test_flat_priors_stretch_around_the_anchor():
    assert rescaled(Uniform(-3, 0), 0.5, -1.0) == Uniform(-2, -0.5)
    assert rescaled(Uniform(-3, 0), 2.0, -1.0) == Uniform(-5, 1)
    assert rescaled(Uniform(0, 1), 2.0, 0.3, floor=0.0) == Uniform(0, 2)
    narrow = rescaled(Uniform(0, 1), 0.5, 0.3, floor=0.0)
    assert (narrow.low, narrow.high) == pytest.approx((0.15, 0.65))
    assert rescaled(Uniform(-0.5, 2), 2.0, 0.7).width == 5.0


def test_other_priors_keep_their_centre():
    assert rescaled(Normal(70, 2), 2.0, 71.0) == Normal(70, 4)
    assert rescaled(TruncatedNormal(0.3, 0.1, 0, 1), 0.5, 0.2) == TruncatedNormal(0.3, 0.05, 0, 1)
    wide = rescaled(LogUniform(0.5, 2), 2.0, 1.0)
    assert (wide.low, wide.high) == pytest.approx((0.25, 4))


@pytest.fixture(scope="module")
def entry():
    """A fit of two parameters, well inside their priors for one and cut by it for the other."""
    rng = np.random.default_rng(5)
    z = np.sort(rng.uniform(0.02, 1.0, 120))
    mu = 43.1 + 5 * np.log10(z * (1 + 0.77 * z - 0.2 * z**2)) + rng.normal(0, 0.12, len(z))
    sample = Sample.from_arrays(z, mu, sigma=0.12)
    priors = {"omega_m": {"uniform": [0, 1]}, "w": {"uniform": [-1.2, -0.2]}}
    result = fit(sample=sample, model="flat_wcdm", parameters=priors, sampling={"target_ess": 2000}, run_folder=False)
    return Entry("fit", result.summary(), result.chains, result.log_posterior)


def direct(entry, priors):
    """ln Z by a plain sum over a fine grid."""
    axes = [np.linspace(p.low, p.high, 700)[:-1] + 0.5 * p.width / 699 for p in priors]
    mesh = np.stack([g.ravel() for g in np.meshgrid(*axes, indexing="ij")], axis=1)
    value = entry.log_posterior.log_likelihood(mesh)
    return math.log(np.exp(value - value.max()).mean()) + value.max()


def test_every_width_agrees_with_a_direct_sum(entry):
    before = direct(entry, entry.log_posterior.priors)
    shifts = evidence_shifts(entry, anchors([entry]))
    assert {(s.parameter, s.factor) for s in shifts} == {(n, f) for n in ("omega_m", "w") for f in (0.5, 2.0)}
    for shift in shifts:
        i = entry.log_posterior.names.index(shift.parameter)
        priors = list(entry.log_posterior.priors)
        priors[i] = shift.prior
        expected = direct(entry, priors) - before
        # The direct sum itself is good to about its cell over the posterior's width, squared: 1e-3.
        assert shift.change == pytest.approx(expected, abs=4 * shift.error + 5e-3), shift


def test_a_posterior_cut_by_its_prior_is_integrated_anew(entry):
    # Mere reweighting would give -ln 2 for a doubled flat prior; here the wider one finds more likelihood.
    wider = next(s for s in evidence_shifts(entry, anchors([entry])) if (s.parameter, s.factor) == ("w", 2.0))
    assert max(entry.summary["parameters"]["w"]["density_at_prior_edge"]) > 0.1
    assert wider.change > -math.log(2) + 0.05


def test_what_a_narrower_prior_cuts_is_told(entry):
    narrow = next(s for s in evidence_shifts(entry, {**anchors([entry]), "omega_m": 0.02}) if (s.parameter, s.factor) == ("omega_m", 0.5))
    inside = (entry.samples[:, 0] >= narrow.prior.low) & (entry.samples[:, 0] <= narrow.prior.high)
    assert narrow.cut == pytest.approx(1 - inside.mean(), abs=1e-9)


def test_the_anchor_is_the_first_fit_that_samples_the_parameter(entry):
    moved = replace(entry, posterior=replace(entry.posterior, chain=entry.posterior.chain + 1.0))
    assert anchors([entry, moved]) == anchors([entry])
