"""Digits follow the width of the posterior and the Monte Carlo error."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fitter.report.digits import Figures, evidence_digits, figures_for, last_place, superscript


@pytest.mark.parametrize(
    ("value", "low", "high", "mcse", "plain", "latex"),
    [
        (0.29812, 0.2761, 0.3204, 0.0002, "0.298 ± 0.022", r"0.298 \pm 0.022"),
        (0.29812, 0.2761, 0.3404, 0.0002, "0.298 +0.042 −0.022", r"0.298^{+0.042}_{-0.022}"),
        (-1.0902, -1.31, -0.87, 0.002, "−1.09 ± 0.22", r"-1.09 \pm 0.22"),
        (73.04, 72.0, 74.08, 0.01, "73.0 ± 1.0", r"73.0 \pm 1.0"),
        (1234.5, 1134.5, 1334.5, 1.0, "1230 ± 100", r"1230 \pm 100"),
        (1.0891e-52, 1.069e-52, 1.1092e-52, 1e-55, "(1.089 ± 0.020) × 10⁻⁵²", r"(1.089 \pm 0.020) \times 10^{-52}"),
        (5e7, 4.9e7, 5.1e7, None, "(5.00 ± 0.10) × 10⁷", r"(5.00 \pm 0.10) \times 10^{7}"),
        (-0.00001, -0.03, 0.03, 1e-4, "0.000 ± 0.030", r"0.000 \pm 0.030"),
    ],
)
def test_rounded_together(value, low, high, mcse, plain, latex):
    figures = figures_for(value, low, high, mcse=mcse)
    assert figures.plain() == plain
    assert figures.latex() == latex


def test_monte_carlo_error_takes_digits_away_but_never_the_width():
    assert last_place(0.022, 0.00022) == -3
    assert last_place(0.022, 0.006) == -2
    assert last_place(0.022, 10.0) == -2
    assert last_place(0.0996, None) == -2  # prints as 0.10, not 0.100


def test_undefined_and_widthless():
    assert figures_for(None).plain() == "—"
    assert figures_for(float("nan"), 0, 1).plain() == "—"
    assert figures_for(0.25, 0.25, 0.25).plain() == "0.25 ± 0"
    assert Figures("-2").plain() == "−2"
    assert superscript(-52) == "⁻⁵²"


@given(st.floats(-1e6, 1e6), st.floats(1e-6, 1e3), st.floats(1e-6, 1e3))
def test_rounding_moves_nothing_by_more_than_a_tenth_of_the_width(value, up, down):
    figures = figures_for(value, value - down, value + up)
    scale = 10.0**figures.exponent
    # The last digit is the second of the smaller error: half a unit of it is at most a twentieth of that error.
    slack = 0.0501 * min(up, down) + 1e-9 * abs(value)
    assert abs(float(figures.value) * scale - value) <= slack
    assert abs(float(figures.plus) * scale - up) <= slack
    assert abs(float(figures.minus) * scale - down) <= slack


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        (380.4365843497, 2.4e-09, ("380.4366", "")),
        (393.82736, 0.00022, ("393.8274", "0.0002")),
        (377.59224, 0.0024, ("377.5922", "0.0024")),
        (-850.2134, 0.011, ("−850.213", "0.011")),
        (-850.2134, 0.3, ("−850.21", "0.30")),
        (-850.2134, 12.0, ("−850", "12")),
    ],
)
def test_an_evidence_claims_no_more_than_four_decimals(value, error, expected):
    assert evidence_digits(value, error) == expected
