"""The surveys of a sample, as figures name and colour them."""

from __future__ import annotations

import numpy as np

from fitter.report.figures.style import COLOURS

__all__ = ["MOST_GROUPS", "group_codes", "group_colour", "short_name"]

MOST_GROUPS = 6
_OTHERS = "#555555"


def group_codes(group: np.ndarray | None, n: int) -> tuple[list[str], np.ndarray]:
    """Return the names of the largest groups, the rest as ``others``, and the (n,) position in that list of each row.

    Parameters
    ----------
    group : (n,) str or None
        None makes one group, ``all``.
    n : int
    """
    if group is None:
        return ["all"], np.zeros(n, dtype=int)
    names, inverse, counts = np.unique(np.asarray(group).astype(str), return_inverse=True, return_counts=True)
    order = np.argsort(-counts, kind="stable")
    position = np.empty(len(names), dtype=int)
    position[order] = np.arange(len(names))
    kept = [str(name) for name in names[order][:MOST_GROUPS]]
    if len(names) > MOST_GROUPS:
        kept.append("others")
        position = np.minimum(position, MOST_GROUPS)
    return kept, position[inverse]


def group_colour(i: int) -> str:
    """Return the colour of the i-th group."""
    return COLOURS[i % len(COLOURS)] if i < MOST_GROUPS else _OTHERS


def short_name(name: str, most: int = 14) -> str:
    """Return a name cut to a length that does not decide the layout."""
    return name if len(name) <= most else name[: most - 1] + "…"
