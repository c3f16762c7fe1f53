"""Evidence ratios in words, on a named scale."""

from __future__ import annotations

import math

__all__ = ["SCALES", "odds_sentence", "scale_name", "strength", "verdict"]

# Upper ends of the classes, as |ln B|, with the words of each; the last class has no end.
SCALES: dict[str, tuple[str, tuple[tuple[float, str], ...]]] = {
    "kass_raftery": (
        "Kass & Raftery 1995",
        ((1.0, "not worth more than a bare mention"), (3.0, "positive"), (5.0, "strong"), (math.inf, "very strong")),
    ),
    "jeffreys": (
        "Jeffreys 1961",
        (
            (0.5 * math.log(10), "not worth more than a bare mention"),
            (math.log(10), "substantial"),
            (1.5 * math.log(10), "strong"),
            (math.log(100), "very strong"),
            (math.inf, "decisive"),
        ),
    ),
}
_LARGEST_PLAIN = math.log(1e5)


def scale_name(scale: str) -> str:
    """Return what a scale is called."""
    return SCALES[scale][0]


def strength(log_odds: float, scale: str = "kass_raftery") -> str:
    """Return the words for evidence of |ln B|."""
    return next(words for end, words in SCALES[scale][1] if abs(log_odds) <= end)


def verdict(log_odds: float, scale: str = "kass_raftery") -> tuple[int, str]:
    """Return which side is favoured (1: that of positive ln B, −1, or 0 for no more than a mention) and the words."""
    words = strength(log_odds, scale)
    return (0 if words.startswith("not worth") else int(math.copysign(1, log_odds))), words


def odds_text(log_odds: float) -> str:
    """Return odds as a ratio to one, whichever way they go."""
    size = abs(log_odds)
    return f"10^{size / math.log(10):.0f} : 1" if size > _LARGEST_PLAIN else f"{math.exp(size):.3g} : 1"


def odds_sentence(log_odds: float, name: str, reference: str, scale: str = "kass_raftery") -> str:
    """Return what ln B of `name` over `reference` says, e.g. ``3.2 : 1 for A, positive``."""
    return f"{odds_text(log_odds)} for {name if log_odds > 0 else reference}, {strength(log_odds, scale)}"
