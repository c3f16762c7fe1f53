"""Text that is written once and set twice: as plain Unicode and as LaTeX.

A text holds marks for what the two set differently: :func:`math` and :func:`cite` make them, :func:`plain` and :func:`latex`
set them.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable

from fitter.report.facts import parameter

__all__ = [
    "ascii_formula",
    "cite",
    "cited",
    "latex",
    "latex_text",
    "listed",
    "math",
    "model_text",
    "plain",
    "redshift_range",
    "symbol",
    "with_unit",
]

_MATH = re.compile("\ue000(.*?)\ue001(.*?)\ue002", re.DOTALL)
_CITE = re.compile("\ue003(.*?)\ue002")
_ESCAPED = {"\\": r"\textbackslash{}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}", "<": "$<$", ">": "$>$", "|": "$|$", '"': "''"}
_ESCAPED |= {c: "\\" + c for c in "&%$#_{}"}
_SYMBOLS = {
    "≤": r"\le",
    "≥": r"\ge",
    "−": "-",
    "±": r"\pm",
    "×": r"\times",
    "→": r"\to",
    "∞": r"\infty",
    "·": r"\cdot",
    "≈": r"\approx",
    "µ": r"\mu",
}
_SUPERSCRIPTS = dict(zip("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789", strict=True))
_TYPED = {"…": r"\dots{}", "–": "--", "—": "---", "’": "'", "‘": "`", "“": "``", "”": "''", "\u00a0": "~", "ß": r"\ss{}", "ø": r"\o{}"}
_TYPED |= {"Ø": r"\O{}", "æ": r"\ae{}", "Æ": r"\AE{}", "å": r"\aa{}", "Å": r"\AA{}", "ł": r"\l{}", "Ł": r"\L{}", "ı": r"\i{}"}
_ACCENTS = {"\u0300": "`", "\u0301": "'", "\u0302": "^", "\u0303": "~", "\u0308": '"', "\u0304": "=", "\u0307": "."}
_ACCENTS |= {"\u030a": "r", "\u030c": "v", "\u0327": "c", "\u0306": "u", "\u030b": "H"}
_MODELS = {
    "flat_lcdm": ("flat ", r"\Lambda\mathrm{CDM}", "ΛCDM"),
    "curved_lcdm": ("curved ", r"\Lambda\mathrm{CDM}", "ΛCDM"),
    "flat_wcdm": ("flat ", r"w\mathrm{CDM}", "wCDM"),
    "curved_wcdm": ("curved ", r"w\mathrm{CDM}", "wCDM"),
    "flat_w0wa": ("flat ", r"w_0w_a\mathrm{CDM}", "w0waCDM"),
    "curved_w0wa": ("curved ", r"w_0w_a\mathrm{CDM}", "w0waCDM"),
}


def math(tex: str, unicode: str) -> str:
    """Return a mark for a formula: LaTeX without dollar signs, and what stands for it in plain text."""
    return f"\ue000{tex}\ue001{unicode}\ue002"


def redshift_range(low: str, high: str) -> str:
    """Return a mark for a range of redshifts."""
    return math(rf"{low} \le z \le {high}", f"{low} ≤ z ≤ {high}")


def cite(*keys: str) -> str:
    """Return a mark for a citation of entries of references.bib."""
    return f"\ue003{','.join(keys)}\ue002"


def cited(text: str) -> list[str]:
    """Return the keys that a text cites, each once, in order."""
    return list(dict.fromkeys(key for keys in _CITE.findall(text) for key in keys.split(",")))


def symbol(name: str) -> str:
    """Return a mark for the symbol of a parameter."""
    return math(parameter(name).latex, parameter(name).plain)


def with_unit(name: str) -> str:
    """Return a mark for the unit of a parameter after a number, empty where there is none."""
    declared = parameter(name)
    return " " + math(declared.latex_unit or rf"\mathrm{{{declared.unit}}}", declared.unit) if declared.unit else ""


def model_text(name: str) -> str:
    """Return what papers call a model; one of one's own has its own name."""
    if name not in _MODELS:
        return name
    word, tex, unicode = _MODELS[name]
    return word + math(tex, unicode)


def listed(words: Iterable[str]) -> str:
    """Join words with commas and a last ``and``."""
    words = list(words)
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}" if words else ""


def plain(text: str, references: dict[str, str] | None = None) -> str:
    """Set a text as plain Unicode.

    Parameters
    ----------
    text : str
    references : dict, optional
        Citation key → short form, e.g. ``Hogg 1999``.
    """
    known = references or {}
    text = _MATH.sub(lambda m: m.group(2), text)
    return _CITE.sub(lambda m: "(" + "; ".join(known.get(k, k) for k in m.group(1).split(",")) + ")", text)


def latex(text: str) -> str:
    """Set a text as LaTeX: marks as formulas and ``\\cite``, everything else escaped."""
    out, at = [], 0
    for mark in re.finditer("\ue000(.*?)\ue001(.*?)\ue002|\ue003(.*?)\ue002", text, re.DOTALL):
        out.append(latex_text(text[at : mark.start()]))
        out.append(rf"\cite{{{mark.group(3)}}}" if mark.group(3) else f"${ascii_formula(mark.group(1))}$")
        at = mark.end()
    return "".join(out) + latex_text(text[at:])


def ascii_formula(tex: str) -> str:
    """Return a formula with a question mark for every letter outside ASCII, which LaTeX would stop at."""
    return tex.encode("ascii", "replace").decode()


def latex_text(text: str) -> str:
    """Escape plain text for LaTeX, in ASCII alone: any engine and any encoding reads it.

    A letter that has no command is replaced by a question mark.
    """
    # Neighbouring superscripts become one.
    return "".join(_character(c) for c in unicodedata.normalize("NFC", text)).replace("}$$^{", "")


def _character(c: str) -> str:
    if c in _ESCAPED:
        return _ESCAPED[c]
    if c.isascii():
        return c if c.isprintable() or c in "\n\t" else " "
    if c in _SYMBOLS or c in _SUPERSCRIPTS:
        return f"${_SYMBOLS[c]}$" if c in _SYMBOLS else f"$^{{{_SUPERSCRIPTS[c]}}}$"
    if c in _TYPED:
        return _TYPED[c]
    if (greek := _greek(unicodedata.name(c, ""))) is not None:
        return greek
    parts = unicodedata.normalize("NFD", c)
    if len(parts) == 2 and parts[1] in _ACCENTS and parts[0].isascii():
        return rf"\{_ACCENTS[parts[1]]}{{{parts[0]}}}"
    # A combining mark that no letter before it took up.
    return "" if unicodedata.combining(c) else "?"


_GREEK = (
    "alpha beta gamma delta epsilon zeta eta theta iota kappa lambda mu nu xi omicron pi rho sigma tau upsilon phi chi psi omega".split()
)
_LIKE_LATIN = dict(zip("alpha beta epsilon zeta eta iota kappa mu nu omicron rho tau chi".split(), "ABEZHIKMNOPTX", strict=True))


def _greek(name: str) -> str | None:
    """The command for a Greek letter by its Unicode name; None for any other character."""
    head, _, letter = name.lower().rpartition(" letter ")
    letter = {"lamda": "lambda", "final sigma": "varsigma"}.get(letter, letter)
    if head == "greek small" and letter in (*_GREEK, "varsigma"):
        return "$o$" if letter == "omicron" else rf"$\{letter}$"
    if head == "greek capital" and letter in _GREEK:
        return f"${_LIKE_LATIN[letter]}$" if letter in _LIKE_LATIN else rf"$\{letter.capitalize()}$"
    return None


CHI2 = math(r"\chi^2", "χ²")
