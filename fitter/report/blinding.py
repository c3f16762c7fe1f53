"""Hiding central values until the analysis is frozen: what a blinded run shows and stores.

Each sampled parameter is shifted by an offset from a keyed hash of the data [1]_, the same for every fit of one table, whatever its
cuts, errors and model, so that fits can be compared. Marginalised and derived parameters are shown as differences from their own
median, but for epochs, whose lowest possible value, today, would tell where it is: they are left out. Widths, χ² and diagnostics stay.

References
----------
.. [1] Klein, J. R. & Roodman, A. 2005, Annu. Rev. Nucl. Part. Sci. 55, 141 (hidden offsets); RFC 2104 (keyed hashing).
"""

from __future__ import annotations

import hashlib
import hmac
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from fitter.errors import InputError
from fitter.parameters import parameter

if TYPE_CHECKING:
    from fitter.inference.optimum import Optimum
    from fitter.inference.posterior import Posterior
    from fitter.likelihood.posterior import LogPosterior
    from fitter.sample.sample import Sample

__all__ = [
    "NOT_HIDDEN", "blind_optimum", "blind_posterior", "blind_summary", "comparable", "data_key", "hidden_labels", "hidden_names",
    "offsets", "require_same_blinding", "true_chain", "veil_key",
]  # fmt: skip

NOT_HIDDEN = ("intrinsic_scatter", "covariance_scale")
"""Sampled parameters that `blind: true` leaves open: they describe the noise."""

_SMALLEST = 0.2  # of the half width of the default prior: an offset that could be overlooked hides nothing
_LEFT_OUT = ("z_acceleration", "z_equality")
_LOCATIONS = ("mean", "median", "low68", "high68", "low95", "high95", "best")


def hidden_names(blind: bool | Iterable[str], log_posterior: LogPosterior) -> tuple[str, ...]:
    """Return the sampled parameters that a config's ``blind`` hides.

    Raises
    ------
    InputError
        A name that is not sampled.
    """
    if isinstance(blind, bool):
        return tuple(n for n in log_posterior.names if n not in NOT_HIDDEN) if blind else ()
    unknown = [name for name in blind if name not in log_posterior.names]
    if unknown:
        cure = f"Name any of {', '.join(log_posterior.names)}; what is derived from a hidden parameter is hidden with it"
        raise InputError("this parameter is not sampled, it cannot be hidden", key="blind", value=unknown[0], cure=cure)
    return tuple(dict.fromkeys(blind))


def data_key(sample: Sample, table: str | None) -> str:
    """Return what the offsets depend on: the table's SHA-256, or that of the sample where its data came as arrays."""
    return (sample.sources.get(table) if table is not None else None) or sample.sha256


def offsets(key: str, names: Iterable[str]) -> dict[str, float]:
    """Return the hidden offset of each parameter under a key."""
    return {name: _offset(key, name) for name in names}


def _offset(key: str, name: str) -> float:
    digest = hmac.new(key.encode(), f"mufitter blind {name}".encode(), hashlib.sha256).digest()
    size, sign = int.from_bytes(digest[:6], "little") / 2**48, 1 if digest[6] % 2 else -1
    return sign * (_SMALLEST + (1 - _SMALLEST) * size) * _half_width(name)


def _half_width(name: str) -> float:
    try:
        prior = parameter(name).default_prior or {}
    except KeyError:
        return 1.0
    numbers: Sequence[float] = next(iter(prior.values()), ())
    return 0.5 * abs(numbers[1] - numbers[0]) if len(numbers) == 2 and "normal" not in prior else 1.0


def veil_key(key: str) -> bytes:
    """Return the key under which the chain of an unfinished blinded run is kept."""
    return hmac.new(key.encode(), b"mufitter veil", hashlib.sha256).digest()


def comparable(summary: dict, posterior: Posterior) -> tuple[dict[str, Any], Posterior]:
    """Return summary and posterior of a blinded run with only what keeps its meaning beside another: the sampled parameters."""
    names = [n for n, facts in summary["parameters"].items() if facts["kind"] == "sampled"]
    kinds = {n: kind for n, kind in posterior.kinds.items() if kind == "sampled"}
    return {**summary, "parameters": {n: summary["parameters"][n] for n in names}}, replace(posterior, kinds=kinds, extra={})


def require_same_blinding(summaries: list[dict]) -> tuple[str, ...]:
    """Return the hidden parameters of fits that are to be compared.

    Raises
    ------
    InputError
        Some are blinded and others are not, or otherwise: their offsets differ, so would their differences.
    """
    ways = {(tuple(s.get("blinded") or ()), s.get("blinded_key")) for s in summaries}
    if len({key for _, key in ways}) > 1:
        cure = "Unblind them all first with `mufitter unblind`, or blind them all"
        raise InputError("these fits hide their values in different ways: they cannot be compared", cure=cure)
    return tuple(sorted({name for names, _ in ways for name in names}))


def hidden_labels(hidden: Iterable[str]) -> dict[str, str]:
    """LaTeX symbols of shifted parameters."""
    return {name: parameter(name).latex + r"+\mathrm{hidden}" for name in hidden}


def blind_posterior(posterior: Posterior, hidden: Mapping[str, float]) -> Posterior:
    """Return the draws with the hidden offsets added; derived and marginalised ones less their own median."""
    if not hidden:
        return posterior
    chain = posterior.chain + _row(posterior.names, hidden)
    shown = {name: values for name, values in posterior.extra.items() if name not in _LEFT_OUT}
    extra = {name: values - np.nanmedian(values) if np.isfinite(values).any() else values for name, values in shown.items()}
    kinds = {name: kind for name, kind in posterior.kinds.items() if name not in _LEFT_OUT}
    return replace(posterior, chain=chain, extra=extra, kinds=kinds, sampling={**posterior.sampling, "blinded": sorted(hidden)})


def true_chain(posterior: Posterior, hidden: Mapping[str, float]) -> np.ndarray:
    """Return the chain of a blinded run without its offsets."""
    return posterior.chain - _row(posterior.names, hidden)


def blind_optimum(optimum: Optimum, names: Sequence[str], hidden: Mapping[str, float]) -> Optimum:
    """Return the optimum with the offsets added and everything marginalised left out."""
    values = {name: optimum.values[name] + hidden.get(name, 0.0) for name in names}
    return replace(optimum, theta=optimum.theta + _row(names, hidden), values=values)


def _row(names: Sequence[str], hidden: Mapping[str, float]) -> np.ndarray:
    return np.array([hidden.get(name, 0.0) for name in names])


def blind_summary(summary: dict, hidden: Mapping[str, float], log_posterior: LogPosterior, key: str) -> dict:
    """Return the summary of a fit with central values hidden; `key` is that of the offsets, of which a hash is kept."""
    from fitter.report.warnings import practitioner_warnings

    # What the data say of an edge stays, the value of a limit does not.
    silent = {n: {k: v for k, v in facts.items() if k != "limit"} for n, facts in summary["parameters"].items() if n not in _LEFT_OUT}
    warnings = practitioner_warnings({**summary, "parameters": silent}, log_posterior)
    parameters = {n: _moved(facts, hidden.get(n), n in log_posterior.names) for n, facts in silent.items()}
    profile = {n: facts for n, facts in (summary.get("profile") or {}).items() if n not in hidden}
    best = {n: facts["best"] for n, facts in parameters.items() if facts.get("best") is not None}
    said = (
        f"Blinded: {', '.join(hidden)} {'are' if len(hidden) > 1 else 'is'} shown with hidden offsets, derived and marginalised "
        "parameters as differences from their own median, epochs not at all. `mufitter unblind` shows the values."
    )
    return {
        **summary,
        "parameters": parameters,
        "best_fit": {**summary["best_fit"], "values": best},
        "profile": profile,
        "sampling": {**summary["sampling"], "blinded": sorted(hidden)},
        "blinded": sorted(hidden),
        "blinded_key": hashlib.sha256(key.encode()).hexdigest()[:16],
        "warnings": [said, *warnings],
    }


def _moved(facts: dict, offset: float | None, sampled: bool) -> dict:
    if offset is None:
        if sampled:
            return facts
        offset = -facts["median"] if facts.get("median") is not None else 0.0
    return facts | {key: facts[key] + offset for key in _LOCATIONS if facts.get(key) is not None}
