"""What the errors are made of: one definition of a term's share, for the check, the report and the capsule."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from fitter.sample.sample import Sample

__all__ = ["SHARE", "Budget", "error_budget"]

SHARE = "share of the total variance, averaged over the supernovae"


@dataclass(frozen=True)
class Budget:
    """One uncertainty term's part.

    Parameters
    ----------
    label, kind : str
    sigma : float
        Its median error, mag.
    share : float or None
        Its part of a supernova's variance, averaged over the supernovae; None for a capsule that does not say.
    """

    label: str
    kind: str
    sigma: float
    share: float | None

    def facts(self) -> dict[str, Any]:
        """The part as summary.json and a capsule hold it."""
        return {"label": self.label, "kind": self.kind, "median_sigma": self.sigma, "share": self.share}


def error_budget(sample: Sample) -> list[Budget]:
    """Return the part of each fixed term of a sample, in the order of the config; the shares add to 1."""
    variances = [term.variance for term in sample.terms]
    # The variances of single supernovae are not in a capsule, their shares are.
    total = np.sum(variances, axis=0) if sample.has_rows else None
    shares = [
        getattr(t, "share", None) if total is None else float(np.mean(v / total)) for t, v in zip(sample.terms, variances, strict=True)
    ]
    return [
        Budget(term.label, term.kind, float(np.sqrt(np.median(v))), share)
        for term, v, share in zip(sample.terms, variances, shares, strict=True)
    ]
