"""Uncertainty terms, one a file; covariances add."""

from __future__ import annotations

import difflib
from typing import Annotated, Any

from pydantic import BeforeValidator, Discriminator, Tag

from fitter.sample.uncertainty.base import TermSettings
from fitter.sample.uncertainty.covariance import Covariance
from fitter.sample.uncertainty.covariance_scale import CovarianceScale
from fitter.sample.uncertainty.intrinsic import Intrinsic
from fitter.sample.uncertainty.lensing import Lensing
from fitter.sample.uncertainty.modes import Modes
from fitter.sample.uncertainty.peculiar_velocity import PeculiarVelocity
from fitter.sample.uncertainty.precision import Precision
from fitter.sample.uncertainty.sigma import Sigma
from fitter.sample.uncertainty.zero_point import ZeroPoint

__all__ = ["KINDS", "AnyTerm"]

# The first of these that an item has as a key says which term it is: zero_point has a key `sigma` as well.
_MODELS = (ZeroPoint, Sigma, Covariance, Precision, Modes, PeculiarVelocity, Lensing, Intrinsic, CovarianceScale)
KINDS: dict[str, type[TermSettings]] = {model.kind: model for model in _MODELS}


def _model_of(item: Any) -> str | None:
    if isinstance(item, TermSettings):
        return type(item).__name__
    return next((model.__name__ for kind, model in KINDS.items() if kind in item), None)


def _is_term(item: Any) -> Any:
    if isinstance(item, TermSettings):
        return item
    known = ", ".join(KINDS)
    if not isinstance(item, dict):
        raise ValueError(f"an uncertainty term is written as a pair, e.g. {{sigma: COLUMN}}; the terms are: {known}")
    named = [kind for kind in KINDS if kind in item]
    if not named:
        words = [str(key) for key in item if key != "label"]
        near = [m for word in words for m in difflib.get_close_matches(word, KINDS, n=1)]
        hint = f"; did you mean `{near[0]}`?" if near else "."
        raise ValueError(f"no uncertainty term is called `{', '.join(words) or 'label'}`{hint} The terms are: {known}")
    extra = [kind for kind in named[1:] if kind not in KINDS[named[0]].model_fields]
    if extra:
        raise ValueError(f"one term an item: write `{named[0]}` and `{extra[0]}` as two items of the list")
    return item


AnyTerm = Annotated[
    Annotated[ZeroPoint, Tag("ZeroPoint")]
    | Annotated[Sigma, Tag("Sigma")]
    | Annotated[Covariance, Tag("Covariance")]
    | Annotated[Precision, Tag("Precision")]
    | Annotated[Modes, Tag("Modes")]
    | Annotated[PeculiarVelocity, Tag("PeculiarVelocity")]
    | Annotated[Lensing, Tag("Lensing")]
    | Annotated[Intrinsic, Tag("Intrinsic")]
    | Annotated[CovarianceScale, Tag("CovarianceScale")],
    Discriminator(_model_of),
    BeforeValidator(_is_term),
]
