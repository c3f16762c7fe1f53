"""Texts set twice, and the strict reader that guards the LaTeX."""

import importlib.util
from pathlib import Path

import pytest

from fitter.parameters import PARAMETERS
from fitter.report.facts import parameter, relabelled
from fitter.report.prose import cite, cited, latex, latex_text, listed, math, model_text, plain, symbol, with_unit

_spec = importlib.util.spec_from_file_location("latex_check", Path(__file__).with_name("latex_check.py"))
latex_check = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(latex_check)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("50 % & 3 $ of #1_a {x}", r"50 \% \& 3 \$ of \#1\_a \{x\}"),
        ("a~b^c\\d", r"a\textasciitilde{}b\textasciicircum{}c\textbackslash{}d"),
        ("Ωm < 1, ΩΛ ≥ 0", r"$\Omega$m $<$ 1, $\Omega$$\Lambda$ $\ge$ 0"),
        ("χ² ± 3 × 10⁻⁵²", r"$\chi$$^{2}$ $\pm$ 3 $\times$ 10$^{-52}$"),
        ("Jönsson, Señor, Čapek, Ångström, Łódź", r"J\"{o}nsson, Se\~{n}or, \v{C}apek, \AA{}ngstr\"{o}m, \L{}\'{o}d\'{z}"),
        ("µ and μ, Α, ο, ς", r"$\mu$ and $\mu$, $A$, $o$, $\varsigma$"),
        ("R̂ “so” – no…", r"R ``so'' -- no\dots{}"),
        ("超新星", "???"),
    ],
)
def test_plain_text_for_latex(text, expected):
    assert latex_text(text) == expected


def test_whatever_the_text_the_latex_is_sound():
    from hypothesis import given, settings
    from hypothesis import strategies as st

    @settings(max_examples=300, deadline=None)
    @given(st.text())
    def sound(text):
        set_ = latex_text(text)
        greek = latex_check.MATH | set("varsigma delta epsilon zeta eta theta iota kappa nu xi pi tau upsilon phi psi omega".split())
        greek |= set("Gamma Theta Xi Pi Upsilon Phi Psi".split())
        before, latex_check.MATH = latex_check.MATH, greek
        try:
            latex_check.check(set_)
        finally:
            latex_check.MATH = before

    sound()


def test_marks_are_set_in_both_ways():
    text = f"{symbol('omega_m')} < 1_0 {cite('Hogg1999', 'Linder2003')} and {math(r'x_1', 'x1')}{with_unit('H0')}"
    assert plain(text, {"Hogg1999": "Hogg 1999"}) == "Ωm < 1_0 (Hogg 1999; Linder2003) and x1 km/s/Mpc"
    assert latex(text) == r"$\Omega_m$ $<$ 1\_0 \cite{Hogg1999,Linder2003} and $x_1$ $\mathrm{km\,s^{-1}\,Mpc^{-1}}$"
    assert cited(text + cite("Hogg1999")) == ["Hogg1999", "Linder2003"]


def test_lists_and_models():
    assert (listed([]), listed("a"), listed("ab"), listed("abc")) == ("", "a", "a and b", "a, b and c")
    assert plain(model_text("curved_lcdm")) == "curved ΛCDM" and latex(model_text("flat_w0wa")) == r"flat $w_0w_a\mathrm{CDM}$"
    assert model_text("my_model") == "my_model"


@pytest.mark.parametrize("name", [*PARAMETERS, "zero_point:A&B_c 50% {x} $y$ #", "zero_point:обзор", "undeclared_name"])
def test_every_symbol_can_be_set_by_both(name):
    from matplotlib.mathtext import MathTextParser

    latex_check.check(latex(symbol(name)), name)
    MathTextParser("path").parse(f"${parameter(name).latex}$")


def test_symbols_of_ones_own_are_gone_afterwards():
    with relabelled({"w": "W"}), relabelled({"wa": "A"}):
        assert (parameter("w").latex, parameter("wa").latex, parameter("w").plain) == ("W", "A", "w")
    assert (parameter("w").latex, parameter("wa").latex) == ("w", "w_a")


@pytest.mark.parametrize(
    "broken",
    [
        "a_b", "50 % of {", "x & y", "$a", "a}", r"\begin{table} x", r"\begin{table}\end{figure}", r"\unknown", "<", "é", "#", r"\Omega",
        r"\begin{tabular}{ll} a & b & c \\ \end{tabular}", r"\begin{tabular}{ll} a \\ \end{tabular}", r"\begin{tabular}{l} a \end{tabular}",
        r"$\cite{x}$", 'a "quote"',
    ],
)  # fmt: skip
def test_the_strict_reader_refuses(broken):
    with pytest.raises(latex_check.Wrong):
        latex_check.check(broken)
    with pytest.raises(latex_check.Wrong):
        latex_check.bibliography_keys("@article{a,\n  author = {A},\n  title = {B {C}\n}\n")
