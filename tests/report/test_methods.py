"""No sentence of the methods text is untrue of its run: each follows its fact, and is not there without it."""

import copy
import importlib.util
import re
from pathlib import Path

import pytest

from fitter.inference.moves import ensemble_moves
from fitter.report.citations import SHORT, bibliography
from fitter.report.methods import methods, methods_files
from fitter.report.prose import plain
from fitter.report.summary import Extras, summarise

_spec = importlib.util.spec_from_file_location("latex_check", Path(__file__).with_name("latex_check.py"))
latex_check = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(latex_check)

VERSIONS = {"mufitter": "1.2.3", "numpy": "4.5", "scipy": "6.7", "emcee": "8.9"}
CHECK = {"method": "adaptive Gauss–Legendre quadrature", "max_cdf_difference": 0.0021, "tolerance": 0.011, "agrees": True, "worst": "w"}


@pytest.fixture(scope="module")
def summary(real):
    more = {"provenance": {"versions": VERSIONS}}
    evidence = {"log_evidence": -12.3456, "log_evidence_error": 0.021}
    return summarise(real.log_posterior, real.posterior, real.optimum, Extras("Survey", CHECK, evidence, more))


def text_of(summary, settings=None):
    return plain("\n\n".join(methods(summary, settings)), SHORT)


def changed(summary, **sections):
    """A copy with some entries of some sections replaced."""
    summary = copy.deepcopy(summary)
    for section, entries in sections.items():
        if isinstance(entries, dict) and isinstance(summary.get(section), dict):
            summary[section] |= entries
        else:
            summary[section] = entries
    return summary


def test_three_paragraphs_with_every_number_from_the_summary(summary):
    text = text_of(summary)
    assert len(text.split("\n\n")) == 3
    for part in (
        "The data are the distance moduli of 300 supernovae at 0.01",
        "By survey there are 100 of far, 100 of middle and 100 of near.",
        "Their covariance matrix is the sum of 2 terms: sigma (independent errors, median 0.1",
        "We fitted the flat wCDM model, with distances from the expansion rate (Hogg 1999), without radiation.",
        "The priors are uniform from 0 to 1 for Ωm and uniform from −3 to 0 for w.",
        "enter as one additive offset, which we marginalised analytically with a flat prior (Goliath et al. 2001)",
        "The likelihood is Gaussian in the data with their covariance.",
        "We sampled the posterior with 4 independent ensembles of 16 walkers (Foreman-Mackey et al. 2013)",
        "Each took 120 steps, of which the first 20 were discarded (seed 7).",
        # Rounded to the safe side.
        "is at most 1.0005, and the smallest of their bulk and tail effective sample sizes is 4,321 (Vehtari et al. 2021)",
        "adaptive Gauss-Legendre quadrature, agrees with the chains: the largest difference of the cumulative distributions, for w,",
        "is 0.0021, where 0.011 is allowed",
        "The evidence is ln Z = −12.346 ± 0.021 under the priors above.",
        f"χ² is {summary['best_fit']['chi2']:.2f} for 297 degrees of freedom",
        "posterior medians with equal-tailed 68.3 % intervals",
        "mufitter 1.2.3, numpy 4.5 (Harris et al. 2020), scipy 6.7 (Virtanen et al. 2020) and emcee 8.9.",
    ):
        assert part in text, (part, text)


def test_the_steps_kept_are_those_of_the_chain(real, summary):
    assert real.posterior.chain.shape[1] == summary["sampling"]["steps"] - summary["sampling"]["burn_in"]


def test_the_moves_are_those_of_the_sampler(summary):
    """If the mixture of moves changes, the sentence must."""
    moves = {type(move).__name__: weight for move, weight in ensemble_moves("mixture", pilot=object())}
    assert moves == {"PilotMove": 0.6, "MixtureMove": 0.2, "DifferenceMove": 0.2}
    assert "three steps in five propose from a Student-t mixture fitted to the posterior beforehand" in text_of(summary)
    assert "one in five from Student-t mixtures fitted to the other half of the ensemble" in text_of(summary)
    assert "one in five is a differential-evolution move" in text_of(summary)
    assert [type(move).__name__ for move, _ in ensemble_moves("stretch")] == ["StretchMove"]
    assert "all steps are stretch moves (Goodman & Weare 2010)" in text_of(changed(summary, sampling={"move": "stretch"}))
    assert "move" not in text_of(changed(summary, sampling={"move": None})).split("Each took")[0].split("We sampled")[1]


@pytest.mark.parametrize(
    ("sections", "said", "unsaid"),
    [
        ({"sampling": {"converged": False, "reason": "max_steps reached."}}, "criterion of convergence: max_steps reached.", None),
        ({}, None, "did not meet"),
        ({"cross_check": {"agrees": False}}, "DISAGREES with the chains", "agrees with"),
        ({"cross_check": None}, None, "independent calculation"),
        ({"information": {"log_evidence": None}}, None, "evidence"),
        ({"information": {"log_evidence_error": None}}, "ln Z = −12.3456 under", "±"),
        ({"best_fit": {"p_value": None}}, "degrees of freedom.", "p ="),
        ({"radiation": True}, "radiation (photons and massless neutrinos) included", "without radiation"),
        ({"model": "cosmographic"}, "a series of the distance in redshift to third order, with q0 and j0", "Hogg"),
        ({"model": "flat_w0wa"}, "w0waCDM model (Chevallier & Polarski 2001; Linder 2003)", "wCDM"),
        ({"model": "thawing_of_ours"}, "the thawing_of_ours model.", "radiation"),
        ({"fixed": {"omega_m": 0.3}}, "We held Ωm at 0.3.", None),
        ({"fixed": {"H0": 70}}, "We held H0 at 70 km/s/Mpc.", None),
        ({"priors": {"w": "normal(-1, 0.1)"}}, "normal with mean −1 and standard deviation 0.1 for w", None),
        ({"priors": {"w": "truncated-normal(-1, 0.1, -2, 0)"}}, "mean −1 and standard deviation 0.1 between −2 and 0 for w", None),
        ({"priors": {"covariance_scale": "log-uniform(0.5, 2)"}}, "log-uniform from 0.5 to 2 for s", "Gaussian in the data with their"),
        ({"priors": {"intrinsic_scatter": "uniform(0, 0.5)"}}, "an intrinsic scatter with a free standard deviation, σ_int", None),
        ({"fixed": {"covariance_scale": 1.3}}, "multiplied by s², with s held at 1.3", "free standard"),
        ({"sample": {"distance_scale": "absolute"}}, "The zero point of the moduli is taken as given", "offset"),
        ({"sample": {"removed": {"redshift": 12, "missing": 1, "group": 0, "one_per name": 3}}},
         "we removed 12 rows by the cut on redshift, 1 row for lack of a number and 3 rows that repeat a value of name", "group"),
        ({"sample": {"removed": {"redshift": 0}}}, None, "removed"),
        ({"sample": {"groups": {"one": 300}}}, None, "By survey"),
        ({"sample": {"terms": []}}, None, "covariance matrix"),
        ({"sample": {"n_calibrators": 20, "data_kind": "magnitude"}}, "standardised magnitudes of 280 supernovae", "distance moduli of"),
        ({"sample": {"n_calibrators": 1}}, "the magnitude of 1 calibrator whose host has a distance modulus known from elsewhere", "hosts"),
        ({"provenance": {"versions": {}}}, None, "computations were made"),
        ({"sampling": {"rhat": {}, "ess_bulk": {}, "ess_tail": {}}}, None, "rank-normalised"),
        ({"sampling": {"replicas": 1}}, "with 1 independent ensemble of", None),
    ],
)  # fmt: skip
def test_each_sentence_follows_its_fact(summary, sections, said, unsaid):
    text = text_of(changed(summary, **sections))
    assert said is None or said in text, text
    assert unsaid is None or unsaid not in text, text


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"sample": {"columns": {"redshift_helio": "zHEL"}}}, "D_L = (1 + z_hel) D_M(z), with the redshift in the cosmological frame"),
        ({"sample": {"columns": {"redshift_helio": 0}}}, "D_L = (1 + z_hel) D_M(z)"),
        ({"sample": {"columns": {"redshift": "z"}}}, "D_L = (1 + z) D_M(z): one redshift serves for both factors"),
    ],
)
def test_redshifts_are_told_from_the_columns(summary, settings, said):
    assert said in text_of(summary, settings)
    assert "Luminosity distances" not in text_of(summary)


def test_numbers_of_terms_come_from_the_settings(summary):
    terms = [{"label": n, "kind": k, "median_sigma": 0.0123} for n, k in (
        ("peculiar_velocity", "peculiar_velocity"), ("lensing", "lensing"), ("dispersion", "intrinsic"), ("zero_point", "zero_point"),
        ("inverse", "precision"),
    )]  # fmt: skip
    settings = {"sample": {"uncertainty": [
        {"peculiar_velocity": 250}, {"lensing": 0.055}, {"intrinsic": 0.09, "label": "dispersion"}, {"zero_point": "group", "sigma": 0.02},
        {"intrinsic": {"uniform": [0, 1]}}, {"precision": "inverse.npz", "label": "inverse"},
    ]}}  # fmt: skip
    text = text_of(changed(summary, sample={"terms": terms}), settings)
    for part in (
        "sum of 5 terms: peculiar velocity (peculiar velocities of 250 km/s, median 0.012 mag)",
        "lensing (lensing of 0.055 mag per unit redshift, ",
        "dispersion (a scatter of 0.09 mag, ",
        "zero point (zero points with a standard deviation of 0.02 mag, ",
        "inverse (the inverse of a given matrix, ",
    ):
        assert part in text, text


@pytest.mark.parametrize(
    ("prior", "said"),
    [({"flat": []}, " with a flat prior."), ({"normal": [-19.3, 0.1]}, "mean -19.3 and standard"), (None, "analytically.")],
)
def test_marginalised_magnitude_and_zero_points(build, prior, said):
    sample = build.sample(distance_scale="calibrated", n_calibrators=30)
    given = {} if not prior or "flat" in prior else {"absolute_magnitude": prior}
    fit = build.real("flat_lcdm", sample, **given)
    summary = summarise(fit.log_posterior, fit.posterior, fit.optimum)
    settings = {"parameters": {"absolute_magnitude": prior}} if prior else {}
    text = text_of(summary, settings)
    assert "The absolute magnitude M was marginalised analytically" in text and said in text
    assert "270 supernovae" in text and "30 calibrators" in text and "offset" not in text


def test_files_are_sound_and_cite_what_they_list(summary):
    strange = changed(summary, sample={"groups": {"A & B_1 50 %": 150, "Čapek <x> $y": 150}})
    files = methods_files(strange)
    assert set(files) == {"methods.md", "methods.tex", "references.bib"}
    latex_check.check(files["methods.tex"])
    keys = latex_check.bibliography_keys(files["references.bib"])
    cited = {key for group in re.findall(r"\\cite\{([^}]*)\}", files["methods.tex"]) for key in group.split(",")}
    assert cited <= set(keys) and set(keys) - cited == {"Hunter2007", "Foreman-Mackey2016"}
    assert not any("\ue000" <= c <= "\ue0ff" for c in files["methods.md"])
    for key in cited:
        assert SHORT[key] in files["methods.md"]


def test_every_reference_is_sound():
    keys = latex_check.bibliography_keys(bibliography(SHORT))
    assert keys == list(SHORT)
    for key, short in SHORT.items():
        assert re.search(r"\d{4}$", short).group() == key[-4:]
    with pytest.raises(KeyError):
        bibliography(["Nobody1900"])
