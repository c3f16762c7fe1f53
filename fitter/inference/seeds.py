"""Children of one seed by position, so that no call depends on how often another was made."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["child_seed", "random_state"]


def child_seed(seed: np.random.SeedSequence, *key: int) -> np.random.SeedSequence:
    """Return the descendant of `seed` at `key`.

    The same as ``seed.spawn`` of a fresh sequence, but `seed` keeps no count of its children: a
    resumed run finds the same stream again.
    """
    return np.random.SeedSequence(entropy=seed.entropy, spawn_key=(*seed.spawn_key, *key))


def random_state(seed: np.random.SeedSequence) -> tuple[str, NDArray[np.uint32], int, int, float]:
    """Return the state tuple of a Mersenne Twister seeded by `seed`, the form that emcee's State takes."""
    generator = np.random.MT19937(seed).state
    twister = generator["state"]
    return generator["bit_generator"], twister["key"], twister["pos"], 0, 0.0  # no Gaussian draw is kept for later
