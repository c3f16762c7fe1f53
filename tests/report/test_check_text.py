"""`mufitter check` as a doctor: its error budget is what the invented survey was made with; what it finds was put there."""

import importlib.util
import re
import sys
from pathlib import Path

import numpy as np
import pytest

from fitter import Sample, fit
from fitter.checking import check
from fitter.report.check_text import _percent, check_text
from fitter.report.page import page_text
from fitter.sample.budget import SHARE
from fitter.sample.examination import budget, condition_number, correlations, outliers, repeated_rows

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="module")
def demo():
    spec = importlib.util.spec_from_file_location("make_demo_for_check", ROOT / "data_demo" / "make_demo.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module, module.invent(module.Truth())


@pytest.fixture(scope="module")
def text():
    found = check(ROOT / "configs" / "curved_lcdm.yaml")
    assert found.ok
    return str(found)


def test_the_budget_is_what_was_put_in(demo, text):
    """Printed to 1e-4 mag and 0.1 %; the velocity term takes Ω_m = 0.3 where the truth has 0.31, below 1e-4 mag."""
    module, made = demo
    table = made.survey
    variances = {name: s**2 for name, s in module.statistical(table, module.Truth()).items()}
    variances |= {name: sum(m**2 for m in modes.values()) for name, modes in made.survey_modes.items()}
    total = sum(variances.values())
    called = {"measurement": "sigma"}
    for name, variance in variances.items():
        sigma, share = re.search(rf"^  {called.get(name, name)} +([\d.]+) +([\d.]+) %", text, re.MULTILINE).groups()
        assert float(sigma) == pytest.approx(np.sqrt(np.median(variance)), abs=1.5e-4), name
        assert float(share) == pytest.approx(100 * np.mean(variance / total), abs=0.1), name
    together = float(re.search(r"^  together +([\d.]+)", text, re.MULTILINE)[1])
    assert together == pytest.approx(np.sqrt(np.median(total)), abs=1.5e-4)


def test_groups_ranges_prior_and_cost(text):
    assert "fennelwick: 170 rows" in text and "kestrithal: 160 rows" in text
    assert re.search(r"[\d.]+ % of the prior is outside the model's range", text)
    assert re.search(r"The fit will take about \d+ (s|minutes) and [\d.]+ GB of memory", text)
    assert "Rows beyond 4 σ of a smooth curve: none" in text


N = 120
RNG = np.random.default_rng(4)
Z = np.sort(RNG.uniform(0.02, 1.2, N))
MU = 43.2 + 5 * np.log10(Z * (1 + 0.7 * Z)) + RNG.normal(0, 0.12, N)


def test_shares_add_to_one_and_condition_is_the_ratio_of_eigenvalues():
    modes = np.column_stack([0.02 + 0 * Z, 0.03 * Z])
    sample = Sample.from_arrays(Z, MU, sigma=np.linspace(0.1, 0.2, N), modes=modes, intrinsic=0.05)
    assert sum(part.share for part in budget(sample)) == pytest.approx(1, abs=1e-12)
    values = np.linalg.eigvalsh(sample.noise.covariance())
    assert condition_number(sample) == pytest.approx(values[-1] / values[0], rel=1e-9)


def test_check_report_and_capsule_tell_the_same_share():
    """The mean over the supernovae, not the ratio of medians: with errors that grow with redshift the two differ."""
    sigma = np.where(Z < 0.8, 0.05, 0.4)
    sample = Sample.from_arrays(Z, MU, sigma=sigma, modes=0.1 * np.ones((N, 1)))
    variance = sigma**2
    expected = np.mean(variance / (variance + 0.01))
    assert abs(np.median(variance) / (np.median(variance) + 0.01) - expected) > 0.05
    made = fit(sample=sample, model="flat_lcdm", sampling={"target_ess": 200, "walkers": 16, "replicas": 2})
    said = f"{100 * expected:.1f} %"
    assert re.search(rf"^Uncertainties, .*{SHARE}", check_text(None, sample, None), re.MULTILINE) and said in check_text(None, sample, None)
    for terms in (made.summary()["sample"]["terms"], made.capsule().terms):
        assert terms[0]["share"] == pytest.approx(expected, rel=1e-12) and terms[1]["share"] == pytest.approx(1 - expected, rel=1e-12)
    page = made._repr_html_() + page_text(made.summary(), "", {})
    assert SHARE in page and f"{100 * expected:.0f} %" in page


def test_condition_of_many_rows_is_found_without_a_matrix(monkeypatch):
    modes = np.column_stack([0.02 + 0 * Z, 0.03 * Z])
    sample = Sample.from_arrays(Z, MU, sigma=0.1, modes=modes)
    exact = condition_number(sample)
    monkeypatch.setattr("fitter.sample.examination.EIGENVALUES_OF", 10)
    assert condition_number(sample) == pytest.approx(exact, rel=0.01)


@pytest.mark.parametrize("kind", ["covariance", "precision"])
@pytest.mark.parametrize("with_modes", [False, True])
def test_condition_of_many_correlated_rows_is_estimated(kind, with_modes, monkeypatch):
    """Lanczos finds both ends of the spectrum from inside; the ends of this one stand apart, so that a few steps reach them."""
    dense = 0.02**2 * np.exp(-np.abs(Z[:, None] - Z)) + np.diag(np.linspace(0.05, 0.2, N) ** 2)
    modes = np.column_stack([0.02 + 0 * Z, 0.03 * Z]) if with_modes else None
    given = {kind: dense if kind == "covariance" else np.linalg.inv(dense)}
    sample = Sample.from_arrays(Z, MU, modes=modes, **given)
    values = np.linalg.eigvalsh(sample.noise.covariance())
    vector = RNG.standard_normal(N)
    np.testing.assert_allclose(sample.noise.apply(vector), sample.noise.covariance() @ vector, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(sample.noise.apply(sample.noise.apply_inverse(vector)), vector, rtol=1e-8, atol=1e-8)
    monkeypatch.setattr("fitter.sample.examination.EIGENVALUES_OF", 10)
    found = condition_number(sample)
    assert 0.9 * values[-1] / values[0] < found <= 1.0001 * values[-1] / values[0]


def test_correlations_within_and_between_groups():
    group = np.where(np.arange(N) < 60, "a", "b")
    modes = np.column_stack([(group == g) * 0.1 for g in ("a", "b")])
    found = correlations(Sample.from_arrays(Z, MU, sigma=0.1, modes=modes, group=group))
    assert (found.within, found.between) == (pytest.approx(0.5), pytest.approx(0, abs=1e-12)) and found.largest == pytest.approx(0.5)
    assert correlations(Sample.from_arrays(Z, MU, sigma=0.1)) is None


def test_outliers_are_the_rows_that_were_moved():
    data = MU.copy()
    data[[30, 80]] += [1.5, -1.0]
    found = outliers(Sample.from_arrays(Z, data, sigma=0.12, name=[f"sn{i}" for i in range(N)]))
    assert [(o.row, o.name) for o in found] == [(31, "sn30"), (81, "sn80")]
    assert found[0].residual == pytest.approx(1.5, abs=0.5) and found[1].pull < -4
    assert outliers(Sample.from_arrays(Z, MU, sigma=0.12)) == []


def test_errors_that_are_too_small_make_no_outliers_of_everybody():
    assert outliers(Sample.from_arrays(Z, MU, sigma=0.02, intrinsic={"uniform": [0, 0.5]})) == []


def test_rows_that_stand_twice():
    z, data = np.append(Z, Z[7]), np.append(MU, MU[7])
    assert repeated_rows(Sample.from_arrays(z, data, sigma=0.12)) == [(8, N + 1)]
    assert repeated_rows(Sample.from_arrays(Z, MU, sigma=0.12)) == []


def test_a_share_that_is_not_known_is_a_question_mark():
    assert _percent(0.125) == " 12.5 %"
    assert _percent(None) == "    ? %"
