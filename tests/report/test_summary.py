"""The contents of summary.json and its two companions."""

import csv
import io
import json

import numpy as np
import pytest
from scipy.stats import chi2, norm

from fitter.report.facts import edge_density, json_safe
from fitter.report.information import full_log_det
from fitter.report.summary import chi2_p_value, summary_csv, summary_json, summary_markdown

TOP = {"schema", "title", "model", "sample", "parameters", "best_fit", "information", "sampling", "cross_check", "warnings"}
PARAMETER = {"kind", "mean", "sd", "median", "low68", "high68", "low95", "high95", "best", "ess", "rhat", "mcse"}


def test_every_promised_key_is_there(fit):
    summary = fit.summary()
    assert summary.keys() >= TOP
    assert summary["sample"].keys() >= {"n", "n_calibrators", "redshift_min", "redshift_max", "sha256"}
    assert summary["best_fit"].keys() >= {"chi2", "dof", "p_value", "log_posterior", "values"}
    assert summary["information"].keys() >= {"aic", "aicc", "bic", "dic", "log_evidence", "log_evidence_error"}
    assert list(summary["parameters"]) == list(fit.posterior.kinds)
    for facts in summary["parameters"].values():
        assert facts.keys() >= PARAMETER
    assert json.loads(summary_json(summary)) == summary


def test_moments_and_intervals_are_those_of_the_gaussian_drawn_from(fit):
    facts = fit.summary()["parameters"]["omega_m"]
    error = 0.03 / np.sqrt(16000)
    assert facts["mean"] == pytest.approx(0.3, abs=5 * error)
    assert facts["sd"] == pytest.approx(0.03, rel=5 / np.sqrt(2 * 16000))
    for key, p in {"low95": 0.025, "low68": norm.cdf(-1), "median": 0.5, "high68": norm.cdf(1), "high95": 0.975}.items():
        z = norm.ppf(p)
        quantile_error = np.sqrt(p * (1 - p) / 16000) / norm.pdf(z) * 0.03
        assert facts[key] == pytest.approx(0.3 + 0.03 * z, abs=5 * quantile_error)
    assert facts["mcse"] == pytest.approx(error, rel=0.2)
    assert facts["rhat"] < 1.01


def test_undefined_draws_are_counted_not_hidden(build):
    facts = build.fit(mean=(0.3, 0.6, 70.0)).summary()["parameters"]["z_acceleration"]
    assert facts["undefined_fraction"] == pytest.approx(0.5, abs=5 * 0.5 / np.sqrt(16000))
    assert facts["ess"] < 0.6 * 16000
    assert np.isfinite([facts[k] for k in ("mean", "sd", "median", "low95", "rhat")]).all()


def test_a_parameter_that_never_exists_is_null(build):
    facts = build.fit(mean=(0.3, 0.1, 70.0), sd=(0.03, 0.01, 0.5)).summary()["parameters"]["z_acceleration"]
    assert facts["undefined_fraction"] == 1.0
    assert all(facts[k] is None for k in ("mean", "sd", "median", "low68", "best", "ess", "rhat", "mcse"))


def test_goodness_of_fit(fit):
    best = fit.summary()["best_fit"]
    assert (best["chi2"], best["dof"]) == (300.0, 297)
    assert best["p_value"] == pytest.approx(chi2.sf(300.0, 297), rel=1e-12)
    assert best["values"]["omega_k"] == pytest.approx(0.0, abs=1e-12)
    assert chi2_p_value(3.0, 0) is None


def test_information_criteria_by_hand(fit):
    information = fit.summary()["information"]
    assert information["aic"] == pytest.approx(306.0)
    assert information["aicc"] == pytest.approx(306.0 + 24 / 296)
    assert information["bic"] == pytest.approx(300 + 3 * np.log(300))
    # A Gaussian posterior under flat priors: p_D is the number of parameters, the mean of a χ² with 3 degrees of freedom.
    assert information["p_dic"] == pytest.approx(3.0, abs=5 * np.sqrt(6 / 16000) + 0.01)
    assert information["dic"] == pytest.approx(306.0, abs=0.15)
    assert (information["k"], information["k_names"]) == (3, ["omega_m", "omega_lambda", "H0"])


def test_a_marginalised_offset_is_counted(build):
    information = build.fit(build.sample(distance_scale="relative"), n_parameters=4).summary()["information"]
    assert information["k_names"][-1] == "zero-point offset"
    assert information["aic"] == pytest.approx(308.0)
    assert information["p_dic"] == pytest.approx(4.0, abs=0.11)


def test_log_det_of_the_whole_covariance(build):
    noise = build.sample(n=40).noise
    assert full_log_det(noise) == pytest.approx(np.linalg.slogdet(noise.covariance())[1], abs=1e-9)


def test_a_free_scatter_changes_the_deviance_by_its_log_det(build):
    from fitter.report.information import best_deviance

    fit = build.fit(build.sample(n=40))
    fit.optimum.values["intrinsic_scatter"] = 0.1
    before = fit.sample.noise.covariance()
    change = np.linalg.slogdet(before + 0.01 * np.eye(40))[1] - np.linalg.slogdet(before)[1]
    assert best_deviance(fit.log_posterior, fit.optimum) == pytest.approx(300.0 + change, abs=1e-8)


def test_extras_reach_the_summary(build):
    check = {"method": "quadrature", "max_cdf_difference": np.float64(0.004), "tolerance": 0.01, "agrees": np.bool_(True)}
    summary = build.fit().summary(cross_check=check, evidence={"log_evidence": -10.0, "log_evidence_error": 0.1}, more={"extra": 1})
    assert summary["cross_check"] == {"method": "quadrature", "max_cdf_difference": 0.004, "tolerance": 0.01, "agrees": True}
    assert (summary["information"]["log_evidence"], summary["extra"]) == (-10.0, 1)
    assert fit_without_extras(build)["cross_check"] is None


def fit_without_extras(build):
    return build.fit().summary()


def test_one_sided_limit_where_the_peak_stands_against_the_edge(build):
    def fold(chain):
        chain[..., 0] = np.abs(chain[..., 0] - 0.3)
        return chain

    facts = build.fit(transform=fold).summary()["parameters"]["omega_m"]
    assert facts["limit"]["side"] == "upper"
    # |x| of a Gaussian: 95 % lies below 1.96σ.
    assert facts["limit"]["value"] == pytest.approx(1.96 * 0.03, rel=0.04)
    assert "limit" not in build.fit().summary()["parameters"]["omega_m"]


@pytest.mark.parametrize(("distance", "expected"), [(0.0, 1.0), (1.0, np.exp(-0.5)), (2.0, np.exp(-2)), (6.0, 0.0)])
def test_density_at_an_edge(distance, expected):
    draws = np.random.default_rng(5).normal(size=400_000)
    draws = draws[draws > -distance]
    low, high = edge_density(draws, -distance, 50.0)
    assert low == pytest.approx(expected, abs=0.06)
    assert high == 0.0


def test_density_at_the_edges_of_a_flat_posterior_and_of_open_priors():
    draws = np.random.default_rng(6).uniform(size=400_000)
    assert min(edge_density(draws, 0.0, 1.0)) > 0.9
    assert edge_density(draws, -np.inf, np.inf) == (0.0, 0.0)


def test_json_safe_has_no_nan():
    assert json_safe({"a": np.array([1.0, np.nan]), "b": np.float32(2), 3: (np.inf, {"c"})}) == {
        "a": [1.0, None],
        "b": 2.0,
        "3": [None, ["c"]],
    }


def test_csv_says_the_same(fit):
    summary = fit.summary()
    rows = {row["name"]: row for row in csv.DictReader(io.StringIO(summary_csv(summary)))}
    for name, facts in summary["parameters"].items():
        assert float(rows[name]["median"]) == facts["median"]
        assert rows[name]["kind"] == facts["kind"]
    assert float(rows["chi2"]["value"]) == summary["best_fit"]["chi2"]


def test_markdown_says_the_same(fit):
    text = summary_markdown(fit.summary())
    assert text.startswith("# Invented survey\n")
    assert "| Ωm | 0.300 ± 0.030 |" in text
    assert "χ²/dof = 300.00 / 297" in text
    assert "## Warnings" not in text and "## Cautions" in text  # nothing but where H0 comes from
    head, row = (next(line for line in text.splitlines() if line.startswith(start)) for start in ("| parameter", "| Ωm"))
    cells = dict(zip(head.split(" | "), row.split(" | "), strict=True))
    facts = fit.summary()["parameters"]["omega_m"]
    assert float(cells["mean"]) == pytest.approx(facts["mean"], abs=5e-4) and float(cells["sd"]) == pytest.approx(facts["sd"], rel=0.05)
    low, high = map(float, cells["95 %"].split(" to "))
    assert (low, high) == (pytest.approx(facts["low95"], abs=5e-4), pytest.approx(facts["high95"], abs=5e-4))
