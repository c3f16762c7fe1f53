"""Parameter tables for a paper."""

import csv
import io

import numpy as np
import pytest

from fitter.errors import InputError
from fitter.report.tables import caption, latex_text, parameter_table


def test_booktabs_and_plain_latex(fit):
    lines = parameter_table(fit.summary(), "booktabs").splitlines()
    assert lines[0] == r"\begin{tabular}{lcc}" and lines[-1] == r"\end{tabular}"
    assert lines[4] == r"$\Omega_m$ & $0.300 \pm 0.030$ & $0.300$ \\"
    assert sum("rule" in line for line in lines) == 3
    plain = parameter_table(fit.summary(), "latex")
    assert plain.count(r"\hline") == 3 and "rule" not in plain
    assert r"\mathrm{km\,s^{-1}\,Mpc^{-1}}" in plain
    for text in (plain, "\n".join(lines)):
        assert text.count("{") == text.count("}") and text.count("$") % 2 == 0


def test_side_by_side_with_a_parameter_only_one_has(fit, build):
    other = build.fit().summary()
    del other["parameters"]["omega_lambda"]
    other["title"] = "50 % & more"
    rows = parameter_table([fit.summary(), other]).splitlines()
    assert rows[2] == r"Parameter & Invented survey & 50 \% \& more \\"
    assert rows[5].endswith(r"& -- \\")


def test_what_any_fit_has_sampled_comes_first(build):
    rows = parameter_table([build.real(model).summary() for model in ("flat_lcdm", "flat_wcdm", "curved_lcdm")], "markdown").splitlines()
    assert [row.split(" | ")[0].strip("| ") for row in rows[2:7]] == ["Ωm", "ΩΛ", "w", "q0", "z_acc"]


def test_limits_as_limits(build):
    def fold(chain):
        chain[..., 0] = np.abs(chain[..., 0] - 0.3)
        return chain

    summary = build.fit(transform=fold).summary()
    assert r"$\Omega_m$ & $< 0.05" in parameter_table(summary)
    assert "< 0.05" in parameter_table(summary, "markdown")


def test_chosen_names_in_the_order_asked(fit):
    rows = parameter_table(fit.summary(), "markdown", names=["H0", "omega_m"]).splitlines()
    assert [row.split("|")[1].strip() for row in rows[2:]] == ["H0 [km/s/Mpc]", "Ωm"]


def test_csv_in_full_precision(fit):
    summary = fit.summary()
    rows = list(csv.DictReader(io.StringIO(parameter_table(summary, "csv"))))
    assert [r["name"] for r in rows] == list(summary["parameters"])
    assert float(rows[0]["median"]) == summary["parameters"]["omega_m"]["median"]


def test_bad_requests_are_told(fit):
    with pytest.raises(InputError, match="format"):
        parameter_table(fit.summary(), "word")
    with pytest.raises(InputError, match="omega_m"):
        parameter_table(fit.summary(), names=["omega_x"])


def test_caption_states_intervals_priors_and_data(fit):
    text = caption(fit.summary())
    for part in ("equal-tailed 68.3 %", "300 supernovae", "Ωm uniform(0, 1)", "no radiation"):
        assert part in text
    assert latex_text("Ωm < 50 %") == r"$\Omega$m $<$ 50 \%"
