"""The summary in a terminal."""

import io

import pytest

from fitter.report.terminal import profile_text, terminal_summary, wants_colour


class Terminal(io.StringIO):
    def isatty(self):
        return True


@pytest.fixture
def summary(build):
    check = {"method": "quadrature", "max_cdf_difference": 0.0041, "tolerance": 0.015, "agrees": True}
    evidence = {"log_evidence": -850.2134, "log_evidence_error": 0.011}
    return build.fit().summary(cross_check=check, evidence=evidence)


def test_says_what_matters(summary):
    text = terminal_summary(summary)
    assert "300 supernovae" in text and "no radiation" in text and "absolute distance scale" in text
    line = next(row for row in text.splitlines() if row.lstrip().startswith("Ωm"))
    assert line.split() == ["Ωm", "0.300", "±", "0.030", "0.300"]
    assert "H0 [km/s/Mpc]" in text
    assert "χ²/dof = 300.00 / 297 = 1.010, p-value 0.44" in text
    assert "Converged:" in text and "4 replicas" in text
    assert "Cross-check by quadrature: agrees" in text
    assert "ln Z = −850.213 ± 0.011" in text
    assert "3 parameters counted" in text
    assert all(w.split()[0] in text for w in summary["warnings"])


def test_fits_in_a_hundred_columns_and_columns_line_up(summary):
    lines = terminal_summary(summary).splitlines()
    assert max(map(len, lines)) <= 100
    start = next(row for row in lines if "median, 68 %" in row).index("median")
    rows = [row for row in lines if row.strip().startswith(("Ω", "H0", "z_acc", "Λ"))]
    assert len(rows) == 6
    assert all(row[start - 1] == " " and row[start] != " " for row in rows)


def test_colour_only_for_a_terminal_that_wants_it(summary, monkeypatch):
    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("TERM", "xterm")
    assert "\x1b[" in terminal_summary(summary, stream=Terminal())
    assert "\x1b[" not in terminal_summary(summary, stream=io.StringIO())
    assert "\x1b[" not in terminal_summary(summary)
    monkeypatch.setenv("NO_COLOR", "1")
    assert not wants_colour(Terminal())


def test_failure_is_loud(build):
    check = {"method": "quadrature", "max_cdf_difference": 0.2, "tolerance": 0.015, "agrees": False}
    text = terminal_summary(build.fit(sampling={"converged": False}).summary(cross_check=check))
    assert "NOT CONVERGED" in text and "DISAGREES" in text


def test_undefined_share_is_said(build):
    text = terminal_summary(build.fit(mean=(0.3, 0.1, 70.0), sd=(0.03, 0.01, 0.5)).summary())
    row = next(line for line in text.splitlines() if line.strip().startswith("z_acc"))
    assert "—" in row and "undefined in 100 % of draws" in row


def test_tiny_errors_of_the_evidence_are_not_printed(summary):
    information = {**summary["information"], "log_evidence": 380.4365843497, "log_evidence_error": 2.4e-9}
    text = terminal_summary({**summary, "information": information})
    assert "ln Z = 380.4366, numerical error < 0.0001" in text


def test_cautions_stand_apart_from_warnings(summary):
    assert summary["cautions"] and set(summary["cautions"]) <= set(summary["warnings"])
    text = terminal_summary({**summary, "warnings": ["Something is wrong with this run.", *summary["cautions"]]})
    lines = text.splitlines()
    warned, cautioned = (next(i for i, line in enumerate(lines) if line.startswith(word)) for word in ("Warning", "Caution"))
    assert lines[warned + 1] == "  ! Something is wrong with this run." and warned < cautioned
    assert lines[cautioned + 1].startswith("  - ") and not any(line.startswith("  !") for line in lines[cautioned:])
    old = {key: value for key, value in summary.items() if key != "cautions"}  # a run of an earlier version
    assert "Caution" not in terminal_summary(old) and "  ! " in terminal_summary(old)


def test_profiles_without_an_end_say_what_is_there_instead():
    edges = {"low_at_edge": False, "high_at_edge": False}
    open_below = {"maximum": -1.2, "delta1": {"low": None, "high": -0.9, **edges}}
    at_prior = {"maximum": 0.1, "delta1": {"low": 0.0, "high": 0.3, **edges, "low_at_edge": True}}
    free = {"maximum": 0.1, "delta1": {"low": None, "high": None, **edges}}
    assert profile_text(open_below, "delta1") == "< −0.90, without a lower limit"
    assert profile_text(at_prior, "delta1") == "< 0.30, to the prior's edge"
    assert profile_text(free, "delta1") == "not limited within the prior"
