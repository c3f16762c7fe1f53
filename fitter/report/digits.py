"""How many digits a number deserves, and how to print it with asymmetric errors."""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["Figures", "evidence_digits", "figures_for", "plain_number", "superscript"]

_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_EVIDENCE_DECIMALS = 4
_LARGEST_PLAIN, _SMALLEST_PLAIN = 5, -4  # powers of ten beyond which a common exponent is pulled out


@dataclass(frozen=True)
class Figures:
    """A value with its errors, rounded together.

    Parameters
    ----------
    value, plus, minus : str
        Rounded digits, without sign for the errors; ``plus`` and ``minus`` are empty where there is none.
    exponent : int
        All three are to be multiplied by ten to this power.
    """

    value: str
    plus: str = ""
    minus: str = ""
    exponent: int = 0

    @property
    def power(self) -> str:
        """The common factor in plain Unicode, empty when it is one."""
        return f" × 10{superscript(self.exponent)}" if self.exponent else ""

    def plain(self) -> str:
        """Return e.g. ``0.298 +0.022 −0.021`` (a true minus sign)."""
        value = self.value.replace("-", "−")
        if not self.plus:
            return value + self.power
        text = f"{value} ± {self.plus}" if self.plus == self.minus else f"{value} +{self.plus} −{self.minus}"
        return f"({text}){self.power}" if self.exponent else text

    def latex(self) -> str:
        """Return e.g. ``0.298^{+0.022}_{-0.021}``, for math mode."""
        if not self.plus:
            text = self.value
        elif self.plus == self.minus:
            text = rf"{self.value} \pm {self.plus}"
        else:
            text = f"{self.value}^{{+{self.plus}}}_{{-{self.minus}}}"
        if not self.exponent:
            return text
        text = rf"({text})" if self.plus else text
        return rf"{text} \times 10^{{{self.exponent}}}"


def superscript(number: int) -> str:
    """Return an integer in superscript digits."""
    return str(number).translate(_SUPERSCRIPTS)


def _magnitude(x: float) -> int:
    """Power of ten of the first significant digit of a positive number."""
    return math.floor(math.log10(x))


def last_place(width: float, mcse: float | None = None) -> int:
    """Power of ten of the last digit worth printing.

    Parameters
    ----------
    width : float
        The posterior's standard deviation (or half its 68 % interval), > 0.
    mcse : float, optional
        The Monte Carlo standard error of the number.

    Notes
    -----
    Two significant digits of the width, fewer where the Monte Carlo error is larger than half a unit
    of that last digit, and never less than one digit of the width.
    """
    first = _magnitude(float(f"{width:.1e}"))
    place = first - 1
    if mcse is not None and math.isfinite(mcse) and mcse > 0:
        place = max(place, _magnitude(2 * mcse))
    return min(place, first)


def _fixed(x: float, place: int) -> str:
    """Round to the digit at 10**place; no minus sign on zero."""
    rounded = round(x, -place)
    return f"{rounded + 0.0 if rounded else 0.0:.{max(0, -place)}f}"


def figures_for(
    value: float | None, low: float | None = None, high: float | None = None, *, width: float | None = None, mcse: float | None = None
) -> Figures:
    """Round a value and the ends of its interval to the digits they deserve.

    Parameters
    ----------
    value : float or None
        The central value; None prints as a dash.
    low, high : float, optional
        The ends of the interval around it.
    width : float, optional
        The scale of the uncertainty; the mean of the two errors by default.
    mcse : float, optional
        Monte Carlo standard error.

    Returns
    -------
    Figures
    """
    if value is None or not math.isfinite(value):
        return Figures("—")
    errors = None if low is None or high is None else (max(high - value, 0.0), max(value - low, 0.0))
    if width is None and errors is not None:
        positive = [e for e in errors if e > 0]
        # The smaller error sets the digits: a long tail must not round the short side away.
        width = min(positive) if positive else None
    if not width or not math.isfinite(width):
        return Figures(plain_number(value), *(("0", "0") if errors else ()))
    exponent = _common_exponent(value, width)
    scale = 10.0**-exponent
    place = last_place(width * scale, None if mcse is None else mcse * scale)
    plus, minus = (_fixed(e * scale, place) for e in errors) if errors else ("", "")
    return Figures(_fixed(value * scale, place), plus, minus, exponent)


def _common_exponent(value: float, width: float) -> int:
    """Power of ten to pull out of a very large or a very small number."""
    size = max(abs(value), width)
    power = _magnitude(size)
    if power > _LARGEST_PLAIN or power < _SMALLEST_PLAIN:
        return power
    return 0


def plain_number(x: float | None, significant: int = 4) -> str:
    """Return a number without a known error in a few significant digits."""
    if x is None or not math.isfinite(x):
        return "—"
    return f"{x:.{significant}g}"


def evidence_digits(value: float, error: float) -> tuple[str, str]:
    """Return ln Z and its numerical error in the digits that they deserve.

    Parameters
    ----------
    value : float
    error : float
        Standard error, > 0; below 1e-4 only that is said: an error estimate of 1e-9 claims more than it knows.

    Returns
    -------
    value, error : str
        The error is empty where it is below 1e-4.
    """
    decimals = min(max(1 - _magnitude(error), 0), _EVIDENCE_DECIMALS)
    said = "" if error < 10.0**-_EVIDENCE_DECIMALS else f"{error:.{decimals}f}"
    return f"{value:.{decimals}f}".replace("-", "−"), said
