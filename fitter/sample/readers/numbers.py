"""Numbers as people write them."""

from __future__ import annotations

import re
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fitter.array_types import BoolArray, FloatArray, IntArray
from fitter.errors import InputError

__all__ = ["MISSING", "is_number", "plain_number", "to_numbers"]

# Fields that say there is no value, in lower case.
MISSING = frozenset(["", "nan", "na", "n/a", "null", "none", "--", "-", "---", "...", "…", "\\n"])


def plain_number(text: str) -> str:
    """Write a number the way Python reads it: Unicode minus signs and Fortran exponents replaced."""
    text = text.strip().replace("\u2212", "-").replace("\u2013", "-")
    return re.sub(r"(?<=[\d.])[dD](?=[-+]?\d)", "e", text)


def is_number(text: str, decimal_comma: bool = False) -> bool:
    """Whether a field holds a number, or a sign that there is none."""
    text = plain_number(text)
    if text.lower() in MISSING:
        return True
    try:
        float(text)
    except ValueError:
        return decimal_comma and re.fullmatch(r"[-+]?\d+,\d+([eE][-+]?\d+)?", text) is not None
    return True


def to_numbers(
    words: NDArray[Any] | NDArray[np.str_], lines: IntArray, label: str | int, shown: str
) -> tuple[FloatArray, InputError | None]:
    """Convert words to numbers the long way; return them and what is wrong with the first that is none."""
    import pandas as pd

    plain = [plain_number(str(w)) for w in words]
    plain = ["nan" if p.lower() in MISSING else p for p in plain]
    values = pd.to_numeric(pd.Series(plain, dtype=object), errors="coerce").to_numpy(dtype=float)
    wrong = np.isnan(values) & np.array([p != "nan" for p in plain])
    if not wrong.any():
        return values, None
    row = int(np.argmax(wrong))
    word = str(words[row]).strip()
    return values, InputError(
        f"this is not a number{_count(wrong)}", file=shown, row=int(lines[row]), column=label, value=word, cure=_cure(word)
    )


def _cure(word: str) -> str:
    if is_number(word, decimal_comma=True):
        return "Write numbers with a decimal point, not a comma"
    if re.fullmatch(r"[-+]?\d{1,3}(,\d{3})+(\.\d*)?", word):
        return "Write numbers without thousands separators"
    return "Correct it, or leave the field empty and cut the row with `keep:` or `missing: drop`"


def _count(wrong: BoolArray) -> str:
    others = int(wrong.sum()) - 1
    return f", here and in {others} more row{'s' if others > 1 else ''}" if others else ""
