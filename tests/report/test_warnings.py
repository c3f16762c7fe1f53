"""Each warning comes when it should, names its cure, and is silent otherwise."""

import numpy as np
import pytest

from fitter.report.warnings import practitioner_warnings, standing_cautions

QUIET = {"distance_scale": "absolute"}


def texts(fit, **extras):
    return fit.summary(**extras)["warnings"]


def one(warnings, word):
    found = [text for text in warnings if word in text]
    assert len(found) == 1, warnings
    return found[0]


def none(warnings, word):
    assert not [text for text in warnings if word in text], warnings


def shifted(amount, column=0):
    def transform(chain):
        chain[..., column] = np.abs(chain[..., column] + amount)
        return chain

    return transform


def test_a_clean_fit_only_says_where_h0_comes_from(fit):
    assert len(texts(fit)) == 1
    assert "0.0216 mag" in one(texts(fit), "anchor")


def test_leaning_on_a_physical_edge(build):
    text = one(texts(build.fit(transform=shifted(-0.3))), "leans on the lower edge")
    assert "physical bound" in text and "< 0.0" in text


def test_leaning_on_the_edge_of_a_prior_that_can_be_widened(build):
    edge = build.uniform(69.5, 100)

    def cut(chain):
        chain[..., 2] = np.where(chain[..., 2] < 69.5, 139.0 - chain[..., 2], chain[..., 2])
        return chain

    fit = build.fit(transform=cut, priors=(build.uniform(0, 1), build.uniform(-0.5, 2), edge))
    text = one(texts(fit), "leans on the lower edge of its prior, 69.5")
    assert "widen parameters.H0" in text


def test_both_edges_and_the_upper_one(build):
    def cut(chain):
        chain[..., 0] = 0.35 - np.abs(chain[..., 0] - 0.3)
        return chain

    fit = build.fit(transform=cut, priors=(build.uniform(0, 0.35), build.uniform(-0.5, 2), build.uniform(40, 100)))
    assert "> 0." in one(texts(fit), "leans on the upper edge of its prior, 0.35")


def test_a_posterior_that_is_its_prior(build):
    def flat(chain):
        chain[..., 1] = np.random.default_rng(4).uniform(-0.5, 2, chain.shape[:-1])
        return chain

    warnings = texts(build.fit(transform=flat))
    assert "hardly constrain" in one(warnings, "posterior of ΩΛ")
    none(warnings, "ΩΛ leans")


@pytest.mark.parametrize(
    ("chi2", "n", "word"),
    [
        (300.0, 300, None),
        (359.0, 300, "is high"),
        (460.0, 300, "p-value is tiny"),
        (240.0, 300, "is low"),
        (5.0, 14, "is low"),
        (21.0, 14, None),
    ],
)
def test_goodness_of_fit_both_tails(build, chi2, n, word):
    warnings = texts(build.fit(build.sample(n=n), chi2_min=chi2))
    if word is None:
        none(warnings, "χ²/dof")
    else:
        assert word in one(warnings, "χ²/dof")


def test_no_degrees_of_freedom(build):
    one(texts(build.fit(build.sample(n=3), chi2_min=0.1)), "No degrees of freedom")


def test_a_fitted_scatter_silences_the_chi2(build):
    names = ("omega_m", "omega_lambda", "intrinsic_scatter")
    fit = build.fit(names=names, mean=(0.3, 0.7, 0.2), sd=(0.03, 0.05, 0.01), priors=(build.uniform(0, 1),) * 3, chi2_min=600.0)
    object.__setattr__(fit.log_posterior, "derived", lambda theta: {})
    summary = {**fit_summary_without_derived(fit), "warnings": []}
    none(practitioner_warnings(summary, fit.log_posterior), "χ²/dof")


def fit_summary_without_derived(fit):
    from fitter.report.summary import Extras, summarise

    object.__setattr__(fit.posterior, "kinds", dict.fromkeys(fit.posterior.names, "sampled"))
    return summarise(fit.log_posterior, fit.posterior, fit.optimum, Extras())


def test_too_few_samples_and_not_converged(build):
    fit = build.fit(shape=(2, 20, 4), sampling={"converged": False, "reason": "max_steps reached"})
    warnings = texts(fit)
    assert "max_steps reached" in one(warnings, "Not converged")
    assert "at least 400" in one(warnings, "Too few independent samples")
    clean = texts(build.fit())
    none(clean, "onverged")
    none(clean, "Too few")


def test_replicas_that_disagree(build):
    def apart(chain):
        chain[0, ..., 0] += 0.05
        return chain

    warnings = texts(build.fit(transform=apart))
    assert "Ωm" in one(warnings, "replicas disagree")
    none(texts(build.fit()), "replicas disagree")


def test_a_failed_cross_check_comes_first(build):
    check = {"method": "quadrature", "max_cdf_difference": 0.2, "tolerance": 0.02, "agrees": False}
    assert texts(build.fit(), cross_check=check)[0].startswith("CROSS-CHECK FAILED")
    none(texts(build.fit(), cross_check={**check, "agrees": True}), "CROSS-CHECK")
    none(texts(build.fit()), "CROSS-CHECK")


def test_a_prior_mostly_excluded(build):
    assert "70 %" in one(texts(build.fit(excluded_fraction=0.7)), "of the prior is excluded")
    none(texts(build.fit(excluded_fraction=0.4)), "excluded")


def test_no_h0_on_a_relative_scale(build):
    fit = build.fit(
        build.sample(distance_scale="relative"),
        names=("omega_m", "omega_lambda", "w"),
        priors=(build.uniform(0, 1), build.uniform(-1, 2), build.uniform(0, 200)),
    )
    one(texts(fit), "No H0: the distance scale is relative")
    none(texts(build.fit()), "No H0")


def test_few_calibrators(build):
    few = build.fit(build.sample(distance_scale="calibrated", n_calibrators=3))
    one(texts(few), "only 3 calibrators")
    none(texts(build.fit(build.sample(distance_scale="calibrated", n_calibrators=20))), "calibrators")


def test_a_diagonal_is_no_covariance(build):
    one(texts(build.fit(build.sample(diagonal=True))), "A diagonal is no covariance: 300 supernovae")
    none(texts(build.fit(build.sample(n=50, diagonal=True), chi2_min=50.0)), "diagonal")
    none(texts(build.fit()), "diagonal")


def test_evidence_depends_on_priors(build):
    one(texts(build.fit(), evidence={"log_evidence": -1.0, "log_evidence_error": 0.1}), "evidence depends")
    none(texts(build.fit()), "evidence")


def test_the_samples_own_warnings_pass_through(build):
    assert "lensing was added twice" in texts(build.fit(build.sample(warnings=("lensing was added twice",))))


def test_an_interrupted_run_is_to_be_resumed(build):
    warned = texts(build.fit(sampling={"converged": False, "reason": "interrupted"}))
    assert "mufitter fit CONFIG --resume" in one(warned, "Interrupted")
    none(warned, "max_steps")
    short = texts(build.fit(sampling={"converged": False, "reason": "max_steps"}))
    assert "raise sampling.max_steps" in one(short, "Not converged") and "--resume" in one(short, "Not converged")


def test_cautions_are_what_holds_for_every_fit_of_the_kind(fit):
    summary = fit.summary(evidence={"log_evidence": -850.2, "log_evidence_error": 0.01})
    assert [text.split(":")[0] for text in summary["cautions"]] == [
        "H0 rests on the zero point of the given moduli",
        "The evidence depends on the widths of the priors",
    ]
    assert summary["warnings"][-2:] == summary["cautions"]
    relative = {"sample": {"distance_scale": "relative"}, "parameters": {}, "information": {"log_evidence": None}}
    (only,) = standing_cautions(relative)
    assert only.startswith("No H0")
