"""emcee's ensemble sampler for a density that takes all walkers at once and returns an array."""

from __future__ import annotations

from typing import Any

import numpy as np
from emcee import EnsembleSampler

__all__ = ["Ensemble"]


class Ensemble(EnsembleSampler):
    """emcee's sampler without its loops over walkers.

    The general sampler takes whatever a user's function returns, walker by walker, in Python: longer than this likelihood takes.
    It also wraps the function, to print a traceback of its own at every exception.
    """

    def __init__(self, nwalkers: int, ndim: int, log_prob_fn: Any, **options: Any) -> None:
        super().__init__(nwalkers, ndim, log_prob_fn, **options)
        self._density = log_prob_fn

    def compute_log_prob(self, coords: np.ndarray) -> tuple[np.ndarray, None]:
        """Return the ln density of the walkers, (W,), and no blobs.

        Raises
        ------
        ValueError
            A position that is not finite, or a density that is NaN.
        """
        if not np.isfinite(coords).all():
            raise ValueError("a walker's position is not finite")
        log_prob = np.asarray(self._density(coords), dtype=float)
        if np.isnan(log_prob).any():
            raise ValueError("the log-posterior is NaN")
        return log_prob, None
